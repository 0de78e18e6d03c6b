// What an answer consists of besides a choice, while it is being given: the
// needle of a dial, the setting of an adjustment, the times of holding.

import type { Given } from "./engine.js";

/** A task's way of answering, as in the study. */
export interface AnswerSpec {
  by: "choice" | "dial" | "adjustment" | "hold";
  min: number;
  max: number;
  scale: "linear" | "log10";
  /** Steps of an arrow key: degrees, or log10 units or the parameter's unit. */
  coarse: number;
  fine: number;
  keys: string[];
}

/** What stands as the response. */
export const said = { choice: "", dial: "pointed", adjustment: "set", hold: "held" } as const;

const hundredth = (x: number): number => Math.round(x * 100) / 100;

const maxAdjustments = 20_000;

/** Arrow keys: up and right are more; on the dial, up and left turn counter-clockwise. */
const ways: Record<string, number> = { ArrowLeft: -1, ArrowRight: 1, ArrowUp: 1, ArrowDown: -1 };

export class Reply {
  /** Needle (deg) or setting. */
  at: number;
  readonly given: Given = {
    response_deg: null, confidence: null, confidence_rt_ms: null,
    adjust_frames: [], adjust_values: [], adjust_ms: [], held_from_ms: [], held_to_ms: [],
  };
  private shown = 0; // changes that a frame has shown

  constructor(readonly spec: AnswerSpec, start: number) {
    this.at = start;
  }

  /** Whether answers count while the stimulus is shown. */
  get during(): boolean {
    return this.spec.by === "adjustment" || this.spec.by === "hold";
  }

  /** The step of a key, 0 if it turns nothing. */
  step(code: string, fine: boolean): number {
    const way = (this.spec.by === "dial" && /Left|Right/.test(code) ? -1 : 1) * (ways[code] ?? 0);
    return way * (fine ? this.spec.fine : this.spec.coarse);
  }

  /** Moves needle or setting by so many degrees, log10 units or units. */
  move(by: number, frame: number, ms: number): void {
    this.set(this.spec.by === "adjustment" && this.spec.scale === "log10" ? this.at * 10 ** by : this.at + by, frame, ms);
  }

  /** Moves the setting by a share of its range. */
  drag(share: number, frame: number, ms: number): void {
    const { min, max, scale } = this.spec;
    this.move(share * (scale === "log10" ? Math.log10(max / min) : max - min), frame, ms);
  }

  private set(x: number, frame: number, ms: number): void {
    const { min, max, by } = this.spec;
    if (by === "dial") {
      this.at = (((Math.round(10 * x) / 10) % 360) + 360) % 360;
      return;
    }
    const round = max - min === 360 ? min + ((((x - min) % 360) + 360) % 360) : x; // a direction goes round
    const bounded = Math.min(max, Math.max(min, round));
    const g = this.given;
    if (bounded === this.at || g.adjust_frames.length >= maxAdjustments) return;
    this.at = bounded;
    g.adjust_frames.push(frame);
    g.adjust_values.push(bounded);
    g.adjust_ms.push(hundredth(ms));
  }

  point(deg: number): void {
    this.set(deg, 0, 0);
  }

  /** Hands on the changes that the next frame is the first to show. */
  changes(adjust: (x: number) => void): void {
    for (; this.shown < this.given.adjust_values.length; this.shown++) adjust(this.given.adjust_values[this.shown]!);
  }

  private get holding(): boolean {
    return this.given.held_from_ms.length > this.given.held_to_ms.length;
  }

  press(ms: number): void {
    if (!this.holding) this.given.held_from_ms.push(Math.max(hundredth(ms), this.given.held_to_ms.at(-1) ?? 0));
  }

  release(ms: number): void {
    if (this.holding) this.given.held_to_ms.push(Math.max(hundredth(ms), this.given.held_from_ms.at(-1)!));
  }
}
