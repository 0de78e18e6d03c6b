// Trials of the participant's own code whose display tells the time: a disc
// that moves by one place per refresh interval. What stands on the canvas is
// read back in every frame by an observer that knows nothing of the recorder.

import { browserClock } from "../participant/clock.js";
import type { DisplayList, Measurement, TrialPlan } from "../participant/engine.js";
import { Renderer } from "../participant/render.js";
import { runTrial, TrialInput, type Stage } from "../participant/trial.js";

export interface MarkedPlan {
  stimulusFrames: number;
  refreshMs: number;
  /** Holds the page up for so long after this many presented frames; 0: never. */
  holdMs: number;
  holdAfter: number;
  /** Presses the key so many ms after the observer saw the onset; 0: never. */
  answerAfterMs: number;
}

/** What came of a trial. Times are ms of the page's clock. */
export interface Outcome {
  measurement: Measurement;
  seen: Seen[];
  heldFrom: number; // begin and end of the hold-up, 0 if there was none
  heldUntil: number;
  pressedAt: number; // when the key was pressed, 0 if it was not
}

/** What the observer saw in one frame. */
export interface Seen {
  at: number; // ms, performance.now() when the frame was finished
  frame: number; // ms, frame time that the browser gave to the observer
  place: number; // refresh intervals told by the disc, −1 without stimulus
}

const places = 64;
const task = { respondDuring: false, choices: [{ name: "yes", keys: ["KeyJ"] }] };

let input: TrialInput | null = null;

/** Runs one trial and gives what the recorder and what the observer say. */
export async function runMarked(plan: MarkedPlan): Promise<Outcome> {
  input ??= new TrialInput(window);
  const canvas = document.createElement("canvas");
  document.getElementById("distal")!.replaceChildren(canvas);
  // One pixel a degree near fixation, so that place i is pixel i.
  const renderer = new Renderer(canvas, { devicePxPerMm: 1, distanceMm: 5729.578, backgroundFraction: 0.5, gamma: null }, true, false);
  renderer.resize(4 * places, 4);
  const gl = canvas.getContext("webgl2")!;
  const row = new Uint8Array(4 * 4 * places);
  const dots = new Float32Array(4);
  const list: DisplayList = { dots, dotCount: 1, patches: new Float32Array(0), patchCount: 0, batches: new Int32Array([0, 0, 1]), batchCount: 1 };
  const blank: DisplayList = { ...list, dotCount: 0, batchCount: 0 };
  let shown = 0;
  let presented = 0;
  const stage: Stage = {
    clock: browserClock,
    begin: () => { shown = presented = 0; },
    fixation: () => blank,
    frame: (n) => {
      shown += n;
      presented++;
      const px = 4 * (shown % places) + 2 - 2 * places;
      dots.set([Math.atan(px / 5729.578) * 180 / Math.PI, 0, 0.03, 1]);
      return list;
    },
    draw: (l) => renderer.draw(l),
    lost: () => renderer.lost,
    rescaled: () => false,
    awaitAnswer: () => {},
  };
  const seen: Seen[] = [];
  const outcome = { heldFrom: 0, heldUntil: 0, pressedAt: 0 };
  let held = false;
  let finish: (value: unknown) => void;
  const watched = new Promise((resolve) => (finish = resolve));
  const observe = (frame: number): void => {
    gl.bindFramebuffer(gl.FRAMEBUFFER, null);
    gl.readPixels(0, 2, 4 * places, 1, gl.RGBA, gl.UNSIGNED_BYTE, row);
    let place = -1;
    for (let i = 0; i < places; i++) if (row[16 * i + 8]! > 220) place = i;
    seen.push({ at: performance.now(), frame, place });
    if (place >= 0 && seen.filter((x) => x.place >= 0).length === 1 && plan.answerAfterMs > 0) {
      setTimeout(() => {
        outcome.pressedAt = performance.now();
        window.dispatchEvent(new KeyboardEvent("keydown", { code: "KeyJ" }));
        window.dispatchEvent(new KeyboardEvent("keyup", { code: "KeyJ" }));
      }, plan.answerAfterMs);
    }
    if (plan.holdMs > 0 && presented >= plan.holdAfter && !held) {
      held = true;
      // Begun right after a frame, as a slow task on the page would.
      setTimeout(() => {
        outcome.heldFrom = performance.now();
        while (performance.now() < outcome.heldFrom + plan.holdMs) { /* the page hangs */ }
        outcome.heldUntil = performance.now();
      });
    }
    if (place < 0 && seen.some((x) => x.place >= 0)) finish(null);
    else requestAnimationFrame(observe);
  };
  const trial = runTrial(stage, input, {
    fixation_frames: 4, stimulus_frames: plan.stimulusFrames, refresh_ms: plan.refreshMs,
  } as TrialPlan, { ...task, responseWindowMs: plan.answerAfterMs > 0 ? 10_000 : 1 });
  requestAnimationFrame(observe); // after the trial's own callback, in every frame
  const measurement = await trial;
  await watched;
  gl.getExtension("WEBGL_lose_context")?.loseContext();
  return { measurement, seen, ...outcome };
}
