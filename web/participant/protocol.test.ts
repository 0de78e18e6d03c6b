import assert from "node:assert/strict";
import { test } from "node:test";

import { asCreatedRun, asRunState, asStart, asStudy, expect } from "./protocol.js";

const start = {
  link: "l", invitation: null, bundle: "b", languages: ["en"], language: "en", state: "open", title: "t",
  assets: { engine: "/assets/1", participant_js: "/assets/2", participant_css: "/assets/3" },
};
const created = { run: "r", token: "t", seed: "0000000000000000", group: 0, order: 0, bundle: "b", acknowledged: 1 };
const state = { ...created, records: [], outcome: null, completion_code: null, return_url: null };
const study = { about: {}, participants: {}, texts: {}, screen: {}, tasks: {}, blocks: [], questions: {} };

test("takes what fits", () => {
  assert.equal(asStart(start), start);
  assert.equal(asCreatedRun(created), created);
  assert.equal(asRunState(state), state);
  assert.equal(asStudy(study), study);
});

const refused: { given: string; when: () => unknown; expect: RegExp }[] = [
  { given: "nothing", when: () => asStart(null), expect: /^Error: start: an object is expected$/ },
  { given: "a list", when: () => asStudy([]), expect: /^Error: study: an object is expected$/ },
  { given: "a missing member", when: () => asStart({ ...start, link: undefined }), expect: /start: link must be string, not undefined/ },
  { given: "a number for a text", when: () => asCreatedRun({ ...created, seed: 7 }), expect: /new run: seed must be string, not number/ },
  { given: "an object for a list", when: () => asRunState({ ...state, records: {} }), expect: /run: records must be array, not object/ },
  { given: "null for an object", when: () => asStudy({ ...study, texts: null }), expect: /study: texts must be object, not null/ },
];

for (const c of refused) test(`refuses ${c.given} and says where`, () => assert.throws(c.when, c.expect));

test("members that are not asked for may be anything", () => {
  assert.deepEqual(expect({ a: 1, b: null }, "x", { a: "number" }), { a: 1, b: null });
});
