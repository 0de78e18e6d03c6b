import assert from "node:assert/strict";
import { test } from "node:test";

import type { FrameClock } from "./clock.js";
import type { DisplayList, TrialPlan } from "./engine.js";
import type { AnswerSpec } from "./reply.js";
import { runTrial, TrialInput, type Stage } from "./trial.js";

const period = 10; // 100 Hz

class FakeWindow extends EventTarget {
  readonly document = Object.assign(new EventTarget(), { hidden: false });
  key(type: "keydown" | "keyup", code: string, timeStamp: number, more: { repeat?: boolean; shiftKey?: boolean } = {}): void {
    const e = new Event(type, { cancelable: true });
    const values = { code, timeStamp, repeat: false, shiftKey: false, ...more };
    Object.defineProperties(e, Object.fromEntries(Object.entries(values).map(([k, value]) => [k, { value }])));
    this.dispatchEvent(e);
  }
  tap(code: string, at: number, more: { shiftKey?: boolean } = {}): void {
    this.key("keydown", code, at, more);
    this.key("keyup", code, at + 1);
  }
}

/** A trial of 2 fixation frames and so many of the stimulus; the first stimulus frame stands at 1030 ms. */
function setup(answer: Partial<AnswerSpec> | undefined, frames: number, confidenceSteps = 0, start = 90) {
  let callback: ((now: number) => void) | null = null;
  let time = 1000;
  const clock: FrameClock = { request: (c) => ((callback = c), 1), cancel: () => (callback = null), now: () => time };
  const shown: string[] = [];
  const view = new FakeWindow();
  const input = new TrialInput(view as unknown as Window);
  const list = {} as DisplayList;
  const stage: Stage = {
    clock, begin: () => {}, fixation: () => list, frame: (n) => (shown.push(`frame ${n}`), list), draw: () => {}, lost: () => false, rescaled: () => false,
    awaitAnswer: (yes) => shown.push(yes ? "answer" : "over"), adjust: (x) => shown.push(`adjust ${x}`), turn: (deg) => shown.push(`turn ${deg}`), ask: (yes) => shown.push(yes ? "ask" : "asked"),
  };
  const plan = { fixation_frames: 2, stimulus_frames: frames, refresh_ms: period, start } as TrialPlan;
  const done = runTrial(stage, input, plan, {
    responseWindowMs: 5000, respondDuring: false, choices: answer ? [] : [{ name: "left", keys: ["ArrowLeft"] }], confidenceSteps,
    answer: answer && { by: "choice", min: 0, max: 0, scale: "linear", coarse: 10, fine: 1, keys: [], ...answer },
  });
  const pass = (n: number): void => {
    for (let i = 0; i < n; i++) {
      time += period;
      const c = callback;
      callback = null;
      c?.(time);
    }
  };
  return { view, input, shown, pass, done, press: (e: object) => ({ timeStamp: time + 2, ...e }) as unknown as PointerEvent };
}

test("a dial is turned by keys after the stimulus and confirmed", async () => {
  const t = setup({ by: "dial" }, 3);
  t.pass(4);
  t.view.tap("ArrowLeft", 1041); // the stimulus is still shown
  t.pass(2);
  assert.deepEqual(t.shown.slice(-2), ["turn 90", "answer"]);
  t.view.tap("ArrowLeft", 1061); // counter-clockwise
  t.view.tap("ArrowUp", 1062, { shiftKey: true });
  t.view.tap("Enter", 1070);
  t.view.tap("ArrowLeft", 1071); // too late
  t.pass(1);
  const m = await t.done;
  assert.equal(m.response, "pointed");
  assert.equal(m.given!.response_deg, 101);
  assert.equal(m.rt_ms, 40);
  assert.equal(m.input, "keyboard");
});

test("a held arrow key goes on turning, and the dial goes round", async () => {
  const t = setup({ by: "dial" }, 1, 0, 350);
  t.pass(4);
  t.view.key("keydown", "ArrowLeft", 1041);
  for (let i = 0; i < 3; i++) t.view.key("keydown", "ArrowLeft", 1042 + i, { repeat: true });
  t.view.tap("Space", 1050);
  t.pass(1);
  assert.equal((await t.done).given!.response_deg, 30);
});

test("a pointer points and confirms", async () => {
  const t = setup({ by: "dial" }, 1);
  t.pass(4);
  t.input.point(-45.04);
  t.input.answerButton(0, t.press({ pointerType: "touch" }));
  t.pass(1);
  const m = await t.done;
  assert.equal(m.given!.response_deg, 315);
  assert.equal(m.input, "touch");
});

test("an adjustment is shown by the next frame and recorded with its number and time", async () => {
  const t = setup({ by: "adjustment", min: 1, max: 100, scale: "log10", coarse: 0.5, fine: 0.1 }, 50, 0, 10);
  t.pass(3);
  assert.deepEqual(t.shown.splice(0), ["frame 0", "turn 10", "answer"]);
  t.view.tap("ArrowRight", 1034);
  t.pass(2);
  t.view.tap("ArrowRight", 1056);
  t.view.tap("ArrowRight", 1057); // at the end of the range: nothing changes any more
  t.pass(1);
  t.view.tap("ArrowDown", 1063, { shiftKey: true });
  t.input.drag(0.05, t.press({}));
  t.view.tap("Enter", 1068);
  t.pass(1);
  const m = await t.done;
  assert.equal(m.response, "set");
  assert.deepEqual(m.given!.adjust_frames, [1, 3, 4, 4]);
  assert.deepEqual(m.given!.adjust_ms, [4, 26, 33, 32]);
  const want = [10 * 10 ** 0.5, 100, 100 * 10 ** -0.1, 100 * 10 ** -0.1 * 10 ** 0.1];
  m.given!.adjust_values.forEach((x, i) => assert.ok(Math.abs(x - want[i]!) < 1e-9, `${x}, want ${want[i]}`));
  assert.deepEqual(t.shown.slice(0, 4), [`adjust ${10 * 10 ** 0.5}`, "frame 1", "frame 1", "adjust 100"]);
  assert.deepEqual(m.frame_steps, [1, 1, 1, 1], "the confirmation ends the stimulus");
});

test("a setting that nobody confirms is no answer", async () => {
  const t = setup({ by: "adjustment", min: 0, max: 360, scale: "linear", coarse: 20 }, 4, 3, 350);
  t.pass(3);
  t.view.tap("ArrowUp", 1034);
  t.pass(4);
  const m = await t.done;
  assert.equal(m.response, null);
  assert.deepEqual(m.given!.adjust_values, [10], "a direction goes round");
  assert.equal(m.given!.confidence, null);
});

test("times of holding are those of the key, until the stimulus ends", async () => {
  const t = setup({ by: "hold", keys: ["Space"] }, 20);
  t.pass(4);
  t.view.key("keydown", "Space", 1045);
  t.view.key("keydown", "Space", 1047, { repeat: true });
  t.pass(5);
  t.view.key("keyup", "Space", 1085.5);
  t.pass(3);
  t.view.key("keydown", "KeyF", 1115); // not the key
  t.view.key("keydown", "Space", 1118);
  t.pass(11);
  const m = await t.done;
  assert.equal(m.response, "held");
  assert.deepEqual(m.given!.held_from_ms, [15, 88]);
  assert.deepEqual(m.given!.held_to_ms, [55.5, 200]);
  assert.equal(m.rt_ms, 15);
  assert.equal(m.offset_ms, 1230);
});

test("nothing held is an answer as well", async () => {
  const t = setup({ by: "hold", keys: ["Space"] }, 5);
  t.pass(8);
  const m = await t.done;
  assert.equal(m.response, "held");
  assert.equal(m.rt_ms, null);
  assert.deepEqual(m.given!.held_from_ms, []);
});

test("a button is held as a key is", async () => {
  const t = setup({ by: "hold", keys: ["Space"] }, 10);
  t.pass(4);
  t.input.hold(true, t.press({ pointerType: "mouse" }));
  t.pass(2);
  t.input.hold(false, t.press({ pointerType: "mouse" }));
  t.pass(7);
  const m = await t.done;
  assert.deepEqual([m.given!.held_from_ms, m.given!.held_to_ms, m.input], [[12], [32], "pointer"]);
});

test("confidence follows the answer and has a time of its own", async () => {
  const t = setup(undefined, 2, 4);
  t.pass(5);
  t.view.tap("Digit2", 1051); // not asked yet
  t.view.tap("ArrowLeft", 1052);
  t.pass(1);
  assert.deepEqual(t.shown.slice(-2), ["over", "ask"]);
  t.view.tap("Digit5", 1065); // not on the scale
  t.view.tap("Digit3", 1071.25);
  t.pass(1);
  const m = await t.done;
  assert.deepEqual([m.response, m.rt_ms, m.given!.confidence, m.given!.confidence_rt_ms], ["left", 22, 3, 11.25]);
});

test("a trial broken off while confidence is asked for counts for nothing", async () => {
  const t = setup(undefined, 2, 4);
  t.pass(5);
  t.view.tap("ArrowLeft", 1052);
  t.pass(1);
  t.view.tap("Escape", 1066);
  const m = await t.done;
  assert.deepEqual([m.response, m.given!.confidence, m.interrupted], [null, null, "escape"]);
});

test("what an interrupted adjustment showed is kept", async () => {
  const t = setup({ by: "adjustment", min: 0, max: 100, coarse: 10 }, 50, 0, 50);
  t.pass(4);
  t.view.tap("ArrowUp", 1045);
  t.pass(1);
  t.view.tap("Escape", 1056);
  const m = await t.done;
  assert.deepEqual([m.given!.adjust_frames, m.given!.adjust_values, m.frame_steps.length], [[2], [60], 3]);
});
