// One trial: fixation, stimulus, response. The frame callback makes no garbage:
// times and steps go into arrays made beforehand; everything else happens
// before or after the display.
//
// Onset is the frame clock's time of the frame that first showed the stimulus.
// Light appears later than that, by compositor and panel delay, which a browser
// cannot measure.

import { frameTime, stepsBetween, type FrameClock } from "./clock.js";
import type { DisplayList, Given, Measurement, TrialPlan } from "./engine.js";
import { Reply, said, type AnswerSpec } from "./reply.js";

export interface TaskTiming {
  responseWindowMs: number; // from onset, 0: no limit
  respondDuring: boolean;
  choices: { name: string; keys: string[] }[];
  /** Where it is not by choice. */
  answer?: AnswerSpec | undefined;
  /** Steps of the scale after the answer, 0 or absent: none. */
  confidenceSteps?: number | undefined;
}

/** What a trial shows and hears; replaceable in tests. */
export interface Stage {
  clock: FrameClock;
  begin(): void;
  fixation(): DisplayList;
  frame(n: number): DisplayList;
  draw(list: DisplayList | null): void;
  lost(): boolean;
  /** Whether pixels are no longer those of the calibration. */
  rescaled(): boolean;
  /** Shows the response buttons once answers count. */
  awaitAnswer(show: boolean): void;
  /** Changes what is adjusted, from the next frame on. */
  adjust?(x: number): void;
  /** Shows where the needle of the dial points. */
  turn?(deg: number): void;
  /** Shows the scale of confidence. */
  ask?(show: boolean): void;
}

const maxFrames = 36_000; // 2.5 minutes at 240 Hz

/** A gap between two frames (ms) that no busy page makes: the device slept or the page was stopped. */
export const longestGapMs = 1000;

const times = new Float64Array(maxFrames);
const steps = new Int32Array(maxFrames);

const hundredth = (x: number): number => Math.round(x * 100) / 100;

/** Reasons that break off a trial. */
export type Interruption = "escape" | "hidden" | "focus_lost" | "fullscreen_left" | "resized" | "zoomed" | "context_lost" | "held_up";

/** Listens for answers and interruptions while a trial runs. */
export class TrialInput {
  private readonly held = new Set<string>();
  private active: Runner | null = null;

  constructor(target: Window) {
    target.addEventListener("keydown", (e) => {
      const known = this.held.has(e.code);
      this.held.add(e.code);
      if (e.code === "Escape") this.active?.interrupt("escape");
      else if (this.active?.answerKey(e.code, e.timeStamp, e.shiftKey, e.repeat || known)) e.preventDefault();
    });
    target.addEventListener("keyup", (e) => {
      this.held.delete(e.code);
      this.active?.releaseKey(e.code, e.timeStamp);
    });
    target.addEventListener("blur", () => {
      this.held.clear();
      this.active?.interrupt("focus_lost");
    });
    target.document.addEventListener("visibilitychange", () => {
      if (target.document.hidden) this.active?.interrupt("hidden");
    });
  }

  attach(runner: Runner | null): void {
    this.active = runner;
  }

  interrupt(reason: Interruption): void {
    this.active?.interrupt(reason);
  }

  answerButton(choice: number, e: PointerEvent | MouseEvent): void {
    this.active?.answer(choice, e.timeStamp, pointerKind(e));
  }

  point(deg: number): void {
    this.active?.point(deg);
  }

  /** Changes a setting by so many coarse steps, or by a share of its range. */
  step(steps: number, e: PointerEvent): void {
    this.active?.change((r, frame, ms) => r.move(steps * r.spec.coarse, frame, ms), e.timeStamp);
  }

  drag(share: number, e: PointerEvent): void {
    this.active?.change((r, frame, ms) => r.drag(share, frame, ms), e.timeStamp);
  }

  hold(down: boolean, e: PointerEvent): void {
    this.active?.hold(down, e.timeStamp, pointerKind(e));
  }

  sure(confidence: number, e: PointerEvent): void {
    this.active?.sure(confidence, e.timeStamp);
  }
}

type Input = "keyboard" | "pointer" | "touch";

const pointerKind = (e: PointerEvent | MouseEvent): Input => ("pointerType" in e && e.pointerType === "touch" ? "touch" : "pointer");

class Runner {
  private frames = 0; // presented stimulus frames
  private fixationLeft: number;
  private shown = 0; // refresh intervals of the stimulus
  private last = NaN;
  private offset = NaN;
  private handle = 0;
  private response = -1;
  private responseAt = NaN;
  private delay = 0; // ms from the answer's event to its handling
  private input: Measurement["input"] = "";
  private readonly reply: Reply | null;
  private askedAt = NaN; // the scale of confidence
  private interrupted: Interruption | "" = "";
  private ended = false;
  private readonly tick = (now: number): void => this.onFrame(now);

  constructor(private readonly stage: Stage, private readonly plan: TrialPlan, private readonly task: TaskTiming, private readonly done: (m: Measurement) => void) {
    this.fixationLeft = plan.fixation_frames;
    const by = task.answer?.by ?? "choice";
    this.reply = by === "choice" && !task.confidenceSteps ? null
      : new Reply(task.answer ?? { by: "choice", min: 0, max: 0, scale: "linear", coarse: 0, fine: 0, keys: [] }, plan.start ?? 0);
  }

  /** Whether answers count while the stimulus is shown. */
  private get during(): boolean {
    return this.task.respondDuring || (this.reply?.during ?? false);
  }

  start(): void {
    this.stage.begin();
    this.handle = this.stage.clock.request(this.tick);
  }

  private onFrame(stamp: number): void {
    if (this.ended) return;
    if (this.stage.lost()) return this.interrupt("context_lost");
    if (this.stage.rescaled()) return this.interrupt("zoomed");
    const now = frameTime(stamp, this.stage.clock.now(), this.plan.refresh_ms);
    if (now - this.last < 0.5 * this.plan.refresh_ms) {
      // A second frame in one refresh, as browsers give after a hold-up: what was drawn last stands.
      this.handle = this.stage.clock.request(this.tick);
      return;
    }
    const n = Number.isNaN(this.last) ? 1 : stepsBetween(now - this.last, this.plan.refresh_ms);
    const before = this.last;
    this.last = now;
    if (this.frames > 0 && Number.isNaN(this.offset) && now - before > longestGapMs) return this.interrupt("held_up");
    if (this.fixationLeft > 0) {
      // The list is the same in every frame of the phase; drawing it again keeps the dither alive.
      if (!Number.isNaN(before)) this.fixationLeft -= n;
      if (this.fixationLeft > 0) {
        this.stage.draw(this.stage.fixation());
        this.handle = this.stage.clock.request(this.tick);
        return;
      }
    }
    if (Number.isNaN(this.offset)) this.onStimulus(now, n);
    else this.stage.draw(this.stage.fixation());
    this.settle(now);
    if (!this.ended) this.handle = this.stage.clock.request(this.tick);
  }

  private onStimulus(now: number, n: number): void {
    if (this.frames > 0) {
      steps[this.frames - 1] = n;
      this.shown += n;
    }
    times[this.frames] = now;
    const over = this.shown >= this.plan.stimulus_frames || this.frames >= maxFrames - 1;
    const answered = this.during && this.response >= 0;
    if (this.frames > 0 && (over || answered)) {
      this.offset = now;
      this.stage.draw(this.stage.fixation());
      this.endStimulus(now);
      return;
    }
    this.reply?.changes((x) => this.stage.adjust?.(x));
    this.stage.draw(this.stage.frame(this.frames === 0 ? 0 : n));
    this.frames++;
    if (this.frames === 1 && this.during) this.awaitAnswer();
  }

  private awaitAnswer(): void {
    this.stage.turn?.(this.reply?.at ?? 0);
    this.stage.awaitAnswer(true);
  }

  /** After the stimulus an adjustment is over; what was held is the answer. */
  private endStimulus(now: number): void {
    if (!this.reply?.during) return this.awaitAnswer();
    if (this.reply.spec.by === "hold") {
      this.reply.release(now - times[0]!);
      this.response = 0;
      this.responseAt = (this.reply.given.held_from_ms[0] ?? NaN) + times[0]!;
    } else if (this.response < 0) this.finish();
  }

  /** Ends the trial when it is answered or the time is over. */
  private settle(now: number): void {
    if (this.ended || Number.isNaN(this.offset)) return;
    const window = this.task.responseWindowMs;
    if (this.response < 0) {
      if (window > 0 && now - times[0]! > window) this.finish();
    } else if (!this.task.confidenceSteps || this.reply!.given.confidence !== null) this.finish();
    else if (Number.isNaN(this.askedAt)) {
      this.askedAt = now;
      this.stage.awaitAnswer(false);
      this.stage.ask?.(true);
    }
  }

  answerKey(code: string, at: number, fine = false, again = false): boolean {
    const r = this.reply;
    if (r && (r.spec.by === "dial" || r.spec.by === "adjustment")) {
      const step = r.step(code, fine);
      if (step !== 0) {
        if (r.spec.by === "dial") this.point(r.at + step);
        else this.change((x, frame, ms) => x.move(step, frame, ms), at);
        return true;
      }
    }
    if (again) return false;
    const sure = /^(?:Digit|Numpad)([1-9])$/.exec(code);
    if (!Number.isNaN(this.askedAt) && sure) {
      this.sure(Number(sure[1]), at);
      return true;
    }
    if (r?.spec.by === "hold") {
      const holds = r.spec.keys.includes(code);
      if (holds) this.hold(true, at, "keyboard");
      return holds;
    }
    if (r && r.spec.by !== "choice") {
      const confirms = code === "Enter" || code === "Space" || code === "NumpadEnter";
      if (confirms) this.answer(0, at, "keyboard");
      return confirms;
    }
    const choice = this.task.choices.findIndex((c) => c.keys.includes(code));
    if (choice < 0) return false;
    this.answer(choice, at, "keyboard");
    return true;
  }

  releaseKey(code: string, at: number): void {
    if (this.reply?.spec.keys.includes(code)) this.hold(false, at, "keyboard");
  }

  /** Turns the needle, once it is shown and until it is confirmed. */
  point(deg: number): void {
    if (this.reply?.spec.by !== "dial" || this.response >= 0 || !(this.during ? this.frames > 0 : !Number.isNaN(this.offset))) return;
    this.reply.point(deg);
    this.stage.turn?.(this.reply.at);
  }

  /** Changes a setting; the next frame shows it. */
  change(how: (r: Reply, frame: number, ms: number) => void, at: number): void {
    if (this.reply?.spec.by === "adjustment" && this.response < 0 && this.frames > 0 && Number.isNaN(this.offset)) how(this.reply, this.frames, at - times[0]!);
  }

  hold(down: boolean, at: number, input: Input): void {
    if (this.reply?.spec.by !== "hold" || this.frames === 0 || at < times[0]! || !Number.isNaN(this.offset)) return;
    if (down) {
      this.reply.press(at - times[0]!);
      this.input ||= input;
    } else this.reply.release(at - times[0]!);
  }

  sure(confidence: number, at: number): void {
    const given = this.reply?.given;
    if (!given || given.confidence !== null || at < this.askedAt || Number.isNaN(this.askedAt) || confidence > this.task.confidenceSteps!) return;
    given.confidence = confidence;
    given.confidence_rt_ms = hundredth(at - this.askedAt);
  }

  /** Takes the first answer that counts: after onset, and after offset unless the task says otherwise. */
  answer(choice: number, at: number, input: Input): void {
    if (this.response >= 0 || this.frames === 0 || at < times[0]! || this.reply?.spec.by === "hold") return;
    if (Number.isNaN(this.offset) && !this.during) return;
    const window = this.task.responseWindowMs;
    if (window > 0 && at - times[0]! > window) return;
    this.response = choice;
    this.responseAt = at;
    this.delay = Math.max(0.01, hundredth(this.stage.clock.now() - at));
    this.input = input;
  }

  interrupt(reason: Interruption): void {
    if (this.ended) return;
    this.interrupted = reason;
    // The stimulus leaves the screen at once, not with the next frame of the plan.
    if (!this.stage.lost()) this.stage.draw(null);
    if (this.frames > 0 && Number.isNaN(this.offset)) {
      const now = this.stage.clock.now();
      times[this.frames] = now;
      steps[this.frames - 1] = stepsBetween(now - times[this.frames - 1]!, this.plan.refresh_ms);
      this.offset = now;
    }
    this.finish();
  }

  private finish(): void {
    this.ended = true;
    this.stage.clock.cancel(this.handle);
    this.stage.awaitAnswer(false);
    this.stage.ask?.(false);
    const intervals: number[] = [];
    for (let i = 0; i < this.frames; i++) intervals.push(hundredth(times[i + 1]! - times[i]!));
    const answered = this.response >= 0 && this.interrupted === "";
    this.done({
      response: answered ? said[this.reply?.spec.by ?? "choice"] || this.task.choices[this.response]!.name : null,
      rt_ms: answered && !Number.isNaN(this.responseAt) ? hundredth(this.responseAt - times[0]!) : null,
      input: answered ? this.input : "",
      onset_ms: this.frames > 0 ? hundredth(times[0]!) : null,
      offset_ms: Number.isNaN(this.offset) ? null : hundredth(this.offset),
      frame_steps: Array.from(steps.subarray(0, this.frames)),
      intervals_ms: intervals,
      interrupted: this.interrupted,
      ...(answered && this.delay > 0 ? { input_delay_ms: this.delay } : {}),
      ...(this.reply ? { given: this.whatWasGiven(answered) } : {}),
    });
  }

  private whatWasGiven(answered: boolean): Given {
    const { given, spec, at } = this.reply!;
    if (this.frames > 0) this.reply!.release((Number.isNaN(this.offset) ? this.last : this.offset) - times[0]!);
    return {
      ...given, response_deg: answered && spec.by === "dial" ? at : null,
      ...(answered ? {} : { confidence: null, confidence_rt_ms: null }),
    };
  }
}

/** Runs one trial and gives what was measured. */
export function runTrial(stage: Stage, input: TrialInput, plan: TrialPlan, task: TaskTiming): Promise<Measurement> {
  return new Promise((resolve) => {
    const runner = new Runner(stage, plan, task, (m) => {
      input.attach(null);
      resolve(m);
    });
    input.attach(runner);
    runner.start();
  });
}
