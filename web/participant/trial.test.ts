import assert from "node:assert/strict";
import { test } from "node:test";

import type { FrameClock } from "./clock.js";
import type { DisplayList, Measurement, TrialPlan } from "./engine.js";
import { runTrial, TrialInput, type Stage, type TaskTiming } from "./trial.js";

/** A frame clock that a test moves by hand. */
class HandClock implements FrameClock {
  private callback: ((nowMs: number) => void) | null = null;
  private time = 1000;
  request(callback: (nowMs: number) => void): number {
    assert.equal(this.callback, null, "one frame is asked for at a time");
    this.callback = callback;
    return 1;
  }
  cancel(): void {
    this.callback = null;
  }
  now(): number {
    return this.time;
  }
  get idle(): boolean {
    return this.callback === null;
  }
  /** Lets ms pass, then gives a frame that was due lateMs before. */
  frame(ms: number, lateMs = 0): void {
    this.time += ms;
    const callback = this.callback;
    this.callback = null;
    callback?.(this.time - lateMs);
  }
}

class FakeWindow extends EventTarget {
  readonly document = Object.assign(new EventTarget(), { hidden: false });
  key(type: "keydown" | "keyup", code: string, timeStamp: number, repeat = false): void {
    const e = new Event(type, { cancelable: true });
    Object.defineProperties(e, { code: { value: code }, repeat: { value: repeat }, timeStamp: { value: timeStamp } });
    this.dispatchEvent(e);
  }
}

const list = {} as DisplayList;

function setup(changes: { plan?: Partial<TrialPlan>; task?: Partial<TaskTiming>; rateHz?: number } = {}) {
  const rateHz = changes.rateHz ?? 60;
  const clock = new HandClock();
  const shown: string[] = [];
  const view = new FakeWindow();
  const input = new TrialInput(view as unknown as Window);
  let lost = false, rescaled = false;
  let label = "";
  const stage: Stage = {
    clock,
    begin: () => shown.push("begin"),
    fixation: () => ((label = "fixation"), list),
    frame: (n) => ((label = `frame ${n}`), list),
    draw: (l) => shown.push(l === null ? "blank" : label),
    lost: () => lost,
    rescaled: () => rescaled,
    awaitAnswer: (yes) => shown.push(yes ? "answer" : "over"),
  };
  const plan = { fixation_frames: 2, stimulus_frames: 3, ramp_frames: 0, refresh_ms: 1000 / rateHz, correct_choice: 0, ...changes.plan } as TrialPlan;
  const task: TaskTiming = {
    responseWindowMs: 1000, respondDuring: false,
    choices: [{ name: "left", keys: ["ArrowLeft", "KeyF"] }, { name: "right", keys: ["ArrowRight"] }], ...changes.task,
  };
  let measured: Measurement | null = null;
  const done = runTrial(stage, input, plan, task).then((m) => (measured = m));
  const period = 1000 / rateHz;
  return {
    clock, shown, view, input, done, period,
    lose: () => (lost = true),
    rescale: () => (rescaled = true),
    frames: (n: number) => { for (let i = 0; i < n; i++) clock.frame(period); },
    measured: () => measured,
  };
}

test("shows fixation, stimulus and waits for the answer", async () => {
  const t = setup();
  t.frames(6); // two of fixation, three of the stimulus, then its end
  assert.deepEqual(t.shown, ["begin", "fixation", "fixation", "frame 0", "frame 1", "frame 1", "fixation", "answer"]);
  t.view.key("keydown", "KeyF", t.clock.now() + 5);
  t.frames(1);
  const m = await t.done;
  assert.equal(m.response, "left");
  assert.equal(m.input, "keyboard");
  assert.deepEqual(m.frame_steps, [1, 1, 1]);
  assert.equal(m.onset_ms, Math.round((1000 + 3 * t.period) * 100) / 100);
  assert.equal(m.rt_ms, 55); // three frames of 16.667 ms and 5 ms
  assert.ok(m.input_delay_ms! >= 0.01);
  assert.equal(m.interrupted, "");
  assert.ok(t.clock.idle, "no frame is asked for after the end");
});

for (const rateHz of [60, 75, 90, 120, 144, 165, 240]) {
  test(`keeps the plan at ${rateHz} Hz`, async () => {
    const t = setup({ rateHz, plan: { stimulus_frames: 12 } });
    t.frames(2 + 12 + 1);
    t.view.key("keydown", "ArrowRight", t.clock.now() + 1);
    t.frames(1);
    const m = await t.done;
    assert.deepEqual(m.frame_steps, new Array(12).fill(1));
    assert.ok(Math.abs(m.offset_ms! - m.onset_ms! - 12 * t.period) < 0.02);
  });
}

// A task that holds the page up for so long lets so many refreshes of 1/60 s pass.
for (const [ms, steps] of [[30, 2], [80, 5], [200, 12]] as const) {
  test(`a task of ${ms} ms during the stimulus is a step of ${steps}, and what follows is where the time says`, async () => {
    const t = setup({ plan: { stimulus_frames: 20 } });
    t.frames(4);
    t.clock.frame(steps * t.period);
    assert.equal(t.shown.at(-1), `frame ${steps}`);
    t.frames(20 - 1 - steps);
    t.view.key("keydown", "ArrowLeft", t.clock.now() + 1);
    t.frames(1);
    const m = await t.done;
    assert.equal(m.frame_steps.filter((s) => s > 1).length, 1);
    assert.equal(m.frame_steps.reduce((a, b) => a + b), 20, "the stimulus lasts as long as planned");
    assert.equal(m.intervals_ms.length, m.frame_steps.length);
  });
}

test("answers before the end of the stimulus do not count unless the task says so", async () => {
  const t = setup();
  t.frames(4);
  t.view.key("keydown", "ArrowLeft", t.clock.now());
  t.view.key("keyup", "ArrowLeft", t.clock.now());
  t.frames(3);
  assert.equal(t.measured(), null);
  t.view.key("keydown", "ArrowRight", t.clock.now());
  t.frames(1);
  assert.equal((await t.done).response, "right");
});

test("an answer during the stimulus ends it where the task allows one", async () => {
  const t = setup({ task: { respondDuring: true }, plan: { stimulus_frames: 100 } });
  t.frames(5);
  t.view.key("keydown", "ArrowRight", t.clock.now() + 3);
  t.frames(1);
  const m = await t.done;
  assert.equal(m.response, "right");
  assert.deepEqual(m.frame_steps, [1, 1, 1]);
});

test("only the first answer counts", async () => {
  const t = setup();
  t.frames(6);
  t.view.key("keydown", "ArrowRight", t.clock.now() + 1);
  t.view.key("keydown", "ArrowLeft", t.clock.now() + 2);
  t.frames(1);
  assert.equal((await t.done).response, "right");
});

test("a key that was held down from before does not answer", async () => {
  const t = setup();
  t.view.key("keydown", "ArrowLeft", 900);
  t.frames(6);
  t.view.key("keydown", "ArrowLeft", t.clock.now() + 1, true);
  t.view.key("keydown", "ArrowLeft", t.clock.now() + 2);
  t.frames(1);
  assert.equal(t.measured(), null);
  t.view.key("keyup", "ArrowLeft", t.clock.now());
  t.view.key("keydown", "ArrowLeft", t.clock.now());
  t.frames(1);
  assert.equal((await t.done).response, "left");
});

test("other keys do not answer", async () => {
  const t = setup();
  t.frames(6);
  t.view.key("keydown", "KeyQ", t.clock.now() + 1);
  t.frames(1);
  assert.equal(t.measured(), null);
});

test("without an answer the trial ends after its window", async () => {
  const t = setup();
  t.frames(6);
  t.clock.frame(900);
  assert.equal(t.measured(), null);
  t.clock.frame(100);
  const m = await t.done;
  assert.equal(m.response, null);
  assert.equal(m.rt_ms, null);
  assert.equal(m.input, "");
});

test("an answer after the window does not count", async () => {
  const t = setup();
  t.frames(6);
  t.view.key("keydown", "ArrowLeft", t.clock.now() + 990);
  t.clock.frame(1100);
  assert.equal((await t.done).response, null);
});

test("a button is a pointer or a finger", async () => {
  for (const [pointerType, input] of [["touch", "touch"], ["mouse", "pointer"], ["pen", "pointer"]] as const) {
    const t = setup();
    t.frames(6);
    t.input.answerButton(1, { pointerType, timeStamp: t.clock.now() + 4 } as PointerEvent);
    t.frames(1);
    const m = await t.done;
    assert.equal(m.response, "right");
    assert.equal(m.input, input);
  }
});

const interruptions: { given: string; when: (t: ReturnType<typeof setup>) => void; expect: string }[] = [
  { given: "Escape", when: (t) => t.view.key("keydown", "Escape", t.clock.now()), expect: "escape" },
  { given: "lost focus", when: (t) => t.view.dispatchEvent(new Event("blur")), expect: "focus_lost" },
  { given: "a hidden page", when: (t) => ((t.view.document.hidden = true), t.view.document.dispatchEvent(new Event("visibilitychange"))), expect: "hidden" },
  { given: "another pixel ratio", when: (t) => (t.rescale(), t.clock.frame(16)), expect: "zoomed" },
  { given: "another size", when: (t) => t.input.interrupt("resized"), expect: "resized" },
];

for (const c of interruptions) {
  test(`${c.given} empties the screen at once and marks the trial`, async () => {
    const t = setup();
    t.frames(4);
    c.when(t);
    const m = await t.done;
    assert.equal(t.shown.at(-2), "blank");
    assert.ok(t.clock.idle);
    assert.equal(m.interrupted, c.expect);
    assert.equal(m.response, null);
    assert.equal(m.frame_steps.length, 2);
    assert.equal(m.intervals_ms.length, 2);
  });
}

test("a device that slept during the stimulus ends the trial, a short hold-up does not", async () => {
  const t = setup({ plan: { stimulus_frames: 200 } });
  t.frames(4);
  t.clock.frame(900);
  assert.equal(t.measured(), null);
  t.clock.frame(90_000);
  const m = await t.done;
  assert.equal(m.interrupted, "held_up");
  assert.equal(t.shown.at(-2), "blank");
  assert.equal(m.frame_steps.length, m.intervals_ms.length);
  assert.ok(m.intervals_ms.at(-1)! > 89_000);
});

test("an interruption before the onset leaves no times", async () => {
  const t = setup();
  t.frames(1);
  t.view.key("keydown", "Escape", t.clock.now());
  const m = await t.done;
  assert.equal(m.onset_ms, null);
  assert.equal(m.offset_ms, null);
  assert.deepEqual(m.frame_steps, []);
  assert.equal(m.interrupted, "escape");
});

test("a lost drawing context marks the trial and nothing more is drawn", async () => {
  const t = setup();
  t.frames(4);
  t.lose();
  const before = t.shown.length;
  t.frames(1);
  assert.equal((await t.done).interrupted, "context_lost");
  assert.deepEqual(t.shown.slice(before), ["over"]);
});

test("after the end of a trial keys do nothing", async () => {
  const t = setup();
  t.frames(6);
  t.view.key("keydown", "ArrowLeft", t.clock.now());
  t.frames(1);
  const m = await t.done;
  t.view.key("keydown", "Escape", t.clock.now());
  assert.equal(m.interrupted, "");
});

// Seen in Chromium: after a hold-up the waiting frame bears the time at which it
// was due, and the next one follows in the same refresh.
test("a frame that was held up counts from when it could be seen, and one refresh is one step", async () => {
  const t = setup({ plan: { stimulus_frames: 20 } });
  t.frames(2 + 5);
  t.clock.frame(5.9 * t.period, 4.9 * t.period); // due after one refresh, run after 5.9
  assert.equal(t.shown.at(-1), "frame 5");
  const before = t.shown.length;
  t.clock.frame(0.02 * t.period, 0.92 * t.period); // of the refresh that has passed already
  assert.equal(t.shown.length, before, "nothing is drawn twice in one refresh");
  t.clock.frame(0.1 * t.period);
  assert.equal(t.shown.at(-1), "frame 1");
  t.frames(9 + 1);
  t.view.key("keydown", "ArrowLeft", t.clock.now() + 1);
  t.frames(1);
  const m = await t.done;
  assert.deepEqual(m.frame_steps, [1, 1, 1, 1, 5, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1].slice(0, m.frame_steps.length));
  assert.equal(m.frame_steps.reduce((a, b) => a + b), 20);
});

test("an onset that was held up is not dated before it could be seen", async () => {
  const t = setup();
  t.frames(2);
  t.clock.frame(8 * t.period, 7 * t.period);
  t.frames(3);
  t.view.key("keydown", "ArrowLeft", t.clock.now() + 5);
  t.frames(1);
  const m = await t.done;
  assert.equal(m.onset_ms, Math.round((1000 + 10 * t.period) * 100) / 100);
});
