import assert from "node:assert/strict";
import { test } from "node:test";

import { figure, setLanguage } from "./messages.js";

test("numbers are written as the language writes them", () => {
  const document = { documentElement: { lang: "" } };
  Object.assign(globalThis, { document });
  setLanguage("de");
  assert.equal(figure(59.94, 1), "59,9");
  setLanguage("en");
  assert.equal(figure(1234.5, 0), "1235");
  assert.equal(figure(60, 1), "60.0");
});
