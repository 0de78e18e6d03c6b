import assert from "node:assert/strict";
import { readFileSync, readdirSync } from "node:fs";
import { test } from "node:test";

import de from "../messages/de.json";
import en from "../messages/en.json";

const places = (text: string): string[] => [...text.matchAll(/\{(\w+)\}/g)].map((m) => m[1]!).sort();

test("both catalogues have the same keys in the same order", () => {
  assert.deepEqual(Object.keys(de), Object.keys(en));
});

test("both catalogues have the same places to fill in", () => {
  for (const key of Object.keys(en) as (keyof typeof en)[]) assert.deepEqual(places(de[key]), places(en[key]), key);
});

test("no message is empty or stands in both languages unchanged", () => {
  const international = new Set(["card_density"]);
  for (const key of Object.keys(en) as (keyof typeof en)[]) {
    assert.notEqual(en[key].trim(), "", key);
    assert.ok(en[key] !== de[key] || international.has(key), `${key} is the same in both languages`);
  }
});

test("every message is used by a page", () => {
  const source = readdirSync("participant").filter((f) => f.endsWith(".ts") && !f.endsWith(".test.ts")).map((f) => readFileSync(`participant/${f}`, "utf8")).join("\n");
  // Keys that pages put together from a code of the engine or server.
  const composed = [/^(taken|used|full|paused|closed)(_title)?$/, /^unfit_(phone|webgl|browser)$/, /^card_again_/, /^refused_(age|screening|practice|screen)$/];
  for (const key of Object.keys(en)) {
    assert.ok(source.includes(`"${key}"`) || composed.some((c) => c.test(key)), `${key} is not used`);
  }
});
