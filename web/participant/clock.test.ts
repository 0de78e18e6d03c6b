import assert from "node:assert/strict";
import { test } from "node:test";

import { clockWatch, measureIntervals, stepsBetween, type FrameClock } from "./clock.js";

// Refresh intervals are 1000 ms / rate.
const cases: { given: string; deltaMs: number; rateHz: number; expect: number }[] = [
  { given: "one refresh at 60 Hz", deltaMs: 16.7, rateHz: 60, expect: 1 },
  { given: "a callback that came early", deltaMs: 9, rateHz: 60, expect: 1 },
  { given: "a callback in the same refresh", deltaMs: 2, rateHz: 60, expect: 1 },
  { given: "one missed refresh at 60 Hz", deltaMs: 33.4, rateHz: 60, expect: 2 },
  { given: "a long task of 200 ms at 60 Hz", deltaMs: 200, rateHz: 60, expect: 12 },
  { given: "one refresh at 144 Hz", deltaMs: 6.9, rateHz: 144, expect: 1 },
  { given: "one missed refresh at 144 Hz", deltaMs: 13.9, rateHz: 144, expect: 2 },
  { given: "three refreshes at 240 Hz", deltaMs: 12.4, rateHz: 240, expect: 3 },
];

for (const c of cases) {
  test(`counts ${c.given} as ${c.expect}`, () => assert.equal(stepsBetween(c.deltaMs, 1000 / c.rateHz), c.expect));
}

test("measures the intervals between successive frames and says how far it is", async () => {
  const stamps = [100, 116.6667, 133.3333, 166.6667, 183.3333];
  let next = 0;
  const clock: FrameClock = {
    request: (callback) => (queueMicrotask(() => callback(stamps[next++]!)), next),
    cancel: () => assert.fail("nothing to cancel"),
    now: () => assert.fail("only frame times count"),
  };
  const shares: number[] = [];
  assert.deepEqual(await measureIntervals(clock, 4, (s) => shares.push(s)), [16.667, 16.667, 33.333, 16.667]);
  assert.deepEqual(shares, [0, 0.25, 0.5, 0.75, 1]);
  assert.equal(next, 5, "no frame is asked for after the last one");
});

test("a clock that was set is told once, with its step", () => {
  let day = 1_700_000_000_000, page = 1000;
  const step = clockWatch(() => day, () => page);
  const pass = (ms: number) => { day += ms; page += ms; };
  pass(5000);
  assert.equal(step(), 0);
  pass(100); day -= 3_600_000;
  assert.equal(step(), -3_600_000);
  pass(100);
  assert.equal(step(), 0);
  pass(100); day += 200; // slewed by the system
  assert.equal(step(), 0);
});
