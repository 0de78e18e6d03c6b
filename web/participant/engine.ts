// The engine in the browser: the WebAssembly module over the run's state
// machine, its displays and procedures. Class Engine mirrors the module's calls
// one to one; texts pass as JSON, what is drawn is read in place.

/** What comes next in a run. */
export interface Step {
  step:
    | "consent" | "screening" | "card" | "distance" | "display_check" | "instructions"
    | "trial" | "break" | "questions" | "debrief" | "done" | "refused" | "withdrawn";
  /** Share of the measurement done, 0 to 1, never falling before the end. */
  progress: number;
  /** Of trial and break: the block's name. */
  block: string;
  /** Of trial and break: the block's index in the study. */
  index: number;
  /** Of refused: why. */
  code: string;
  trial: TrialPlan | null;
}

/** A trial as it is to be shown. Frames are refresh intervals. */
export interface TrialPlan {
  block: string;
  number: number;
  practice: boolean;
  catch: boolean;
  task: string;
  display: string;
  condition: string;
  /** null outside a procedure. */
  level: number | null;
  values: Record<string, number>;
  /** Index in the task's choices, −1 where none is right. */
  correct_choice: number;
  fixation_frames: number;
  stimulus_frames: number;
  ramp_frames: number;
  refresh_ms: number;
  feedback: boolean;
  /** Dial: direction of the needle at first (deg); adjustment: first setting. */
  start?: number;
}

/** What an answer consists of besides a choice; lists are empty and numbers null where they do not belong to the task. */
export interface Given {
  /** Counter-clockwise from rightwards, 0 to 360. */
  response_deg: number | null;
  /** 1 to the task's steps, and the time since the scale appeared. */
  confidence: number | null;
  confidence_rt_ms: number | null;
  /** Each change of the setting: number of the frame that first showed it, what was set, ms from stimulus onset. */
  adjust_frames: number[];
  adjust_values: number[];
  adjust_ms: number[];
  /** ms from stimulus onset. */
  held_from_ms: number[];
  held_to_ms: number[];
}

/** What was measured in a trial. Times are ms of the performance clock. */
export interface Measurement {
  /** Name of the choice, null if none came in time. */
  response: string | null;
  /** From stimulus onset. */
  rt_ms: number | null;
  /** keyboard, pointer, touch or "". */
  input: string;
  onset_ms: number | null;
  offset_ms: number | null;
  /** Refresh intervals from each presented stimulus frame to the next, the last to the offset: whole numbers from 1. */
  frame_steps: number[];
  intervals_ms: number[];
  /** "" or the event that broke the trial. */
  interrupted: string;
  /** From the answer's event to its handling by the page, at least 0.01; left out without an answer by event. */
  input_delay_ms?: number;
  /** Of tasks in which an answer is more than a choice. */
  given?: Given;
}

/** A trial's record without sequence, clock and bundle, which the recorder sets. */
export interface TrialRecord {
  sequence: number;
  kind: "trial";
  at_ms: number;
  bundle: string;
  block: string;
  trial: number;
  track: number;
  practice: boolean;
  catch: boolean;
  task: string;
  display: string;
  condition: string;
  values: Record<string, number>;
  level: number | null;
  truths: Record<string, number>;
  response: string | null;
  correct: boolean | null;
  rt_ms: number | null;
  input: string;
  onset_ms: number | null;
  offset_ms: number | null;
  refresh_ms: number;
  fixation_frames: number;
  stimulus_frames: number;
  frame_steps: string;
  intervals_ms: number[];
  dropped_frames: number;
  jitter_ms: number | null;
  digest: string;
  interrupted: string;
}

/** What calibrate answers, by what it was asked about. null stands for what cannot be computed. */
export interface Calibrations {
  card: {
    ask: { widths_css_px: number[]; device_pixel_ratio: number };
    answer: { css_px_per_mm: number | null; sd_css_px_per_mm: number | null; accepted: boolean; reason: string };
  };
  distance: {
    ask: { offsets_mm: number[] };
    answer: { distance_mm: number | null; sd_mm: number | null; accepted: boolean; reason: string };
  };
  refresh: {
    ask: { intervals_ms: number[] };
    answer: { refresh_ms: number | null; jitter_ms: number | null; dropped_percent: number | null; frames: number };
  };
  field: {
    ask: { width_mm: number; height_mm: number; distance_mm: number };
    answer: { width_deg: number; height_deg: number };
  };
  check: {
    ask: {
      refresh_ms: number; jitter_ms: number; dropped_percent: number; frames: number;
      width_deg: number; height_deg: number; canvas_width_px: number; canvas_height_px: number;
      device_pixel_ratio: number; float_target: boolean; renderer: string; cross_origin_isolated: boolean;
    };
    answer: { accepted: boolean; reason: string };
  };
}

/**
 * What one frame consists of, in degrees about fixation and contrast. The
 * arrays look into the engine's memory: they are valid until the engine is
 * called again.
 */
export interface DisplayList {
  /** 4 numbers a dot: x, y, diameter, contrast. */
  dots: Float32Array;
  dotCount: number;
  /** 12 numbers a patch, in the order of display.Patch. */
  patches: Float32Array;
  patchCount: number;
  /** 3 numbers a batch: kind (0 dots, 1 patches), first, count. */
  batches: Int32Array;
  batchCount: number;
}

/** The engine did not accept what it was given; `stopped` says that it cannot go on at all. */
export class EngineError extends Error {
  constructor(message: string, readonly stopped = false) {
    super(message);
    this.name = "EngineError";
  }
}

interface Exports {
  memory: WebAssembly.Memory;
  _initialize(): void;
  buffer(bytes: number): number;
  result_ptr(): number;
  result_len(): number;
  open(bytes: number, seedLow: number, seedHigh: number, group: number, order: number): number;
  apply(bytes: number): number;
  next(): number;
  begin_trial(): number;
  frame(intervals: number): number;
  fixation(): number;
  adjust(x: number): void;
  finish_trial(bytes: number): number;
  calibrate(bytes: number): number;
}

const dotFloats = 4;
const patchFloats = 12;
const batchInts = 3;

/** One run in the engine. */
export class Engine {
  #exports: Exports;
  #ints: Int32Array;
  #list: DisplayList = {
    dots: new Float32Array(0), dotCount: 0,
    patches: new Float32Array(0), patchCount: 0,
    batches: new Int32Array(0), batchCount: 0,
  };
  #encoder = new TextEncoder();
  #decoder = new TextDecoder();
  #lastWords: () => string;
  #stopped = false;

  private constructor(exports: Exports, lastWords: () => string) {
    this.#exports = exports;
    this.#lastWords = lastWords;
    this.#ints = new Int32Array(exports.memory.buffer);
  }

  /** Compiles and starts the engine. `code` are the module's bytes, verified by the caller. */
  static async load(code: BufferSource): Promise<Engine> {
    const host = hostCalls();
    const { instance } = await WebAssembly.instantiate(code, { wasi_snapshot_preview1: host.calls });
    const exports = instance.exports as unknown as Exports;
    host.attach(exports.memory);
    exports._initialize();
    return new Engine(exports, host.lastWords);
  }

  /**
   * Begins a run of a study. `study` is the canonical JSON text of the study,
   * `seed` 16 hexadecimal digits.
   */
  open(study: string, seed: string, group: number, order: number): void {
    if (!/^[0-9a-f]{16}$/.test(seed)) throw new EngineError(`the seed must be 16 hexadecimal digits, not "${seed}"`);
    const high = parseInt(seed.slice(0, 8), 16) | 0;
    const low = parseInt(seed.slice(8), 16) | 0;
    this.#check(() => this.#exports.open(this.#put(study), low, high, group, order));
  }

  /** Takes a record that answers the next step; throws, with nothing changed, if it does not. */
  apply(record: object): void {
    this.#check(() => this.#exports.apply(this.#put(JSON.stringify(record))));
  }

  /** What comes next. */
  next(): Step {
    this.#check(() => this.#exports.next());
    return JSON.parse(this.#result()) as Step;
  }

  /** Prepares the trial that `next` planned. */
  beginTrial(): void {
    this.#check(() => this.#exports.begin_trial());
  }

  /**
   * Advances the stimulus by the refresh intervals that have passed since the
   * last presented frame and gives what to show now. The first call of a trial
   * gives the onset frame, whatever `intervals` is. Nothing is allocated while
   * the list keeps its length.
   */
  frame(intervals: number): DisplayList {
    return this.#describe(this.#guard(() => this.#exports.frame(intervals)));
  }

  /** What the fixation phase shows. */
  fixation(): DisplayList {
    return this.#describe(this.#guard(() => this.#exports.fixation()));
  }

  /** Sets what the participant adjusts, from the next frame on. */
  adjust(x: number): void {
    this.#guard(() => (this.#exports.adjust(x), 0));
  }

  /** Joins what was measured to the trial's record. */
  finishTrial(measurement: Measurement): TrialRecord {
    this.#check(() => this.#exports.finish_trial(this.#put(JSON.stringify(measurement))));
    return JSON.parse(this.#result()) as TrialRecord;
  }

  /** Computes what calibration settings mean and whether they are good enough. */
  calibrate<K extends keyof Calibrations>(of: K, ask: Calibrations[K]["ask"]): Calibrations[K]["answer"] {
    this.#check(() => this.#exports.calibrate(this.#put(JSON.stringify({ of, ...ask }))));
    return JSON.parse(this.#result()) as Calibrations[K]["answer"];
  }

  #put(text: string): number {
    const bytes = this.#encoder.encode(text);
    const at = this.#exports.buffer(bytes.length);
    new Uint8Array(this.#exports.memory.buffer, at, bytes.length).set(bytes);
    return bytes.length;
  }

  #result(): string {
    const at = this.#exports.result_ptr();
    return this.#decoder.decode(new Uint8Array(this.#exports.memory.buffer, at, this.#exports.result_len()));
  }

  #check(call: () => number): void {
    if (this.#guard(call) !== 0) throw new EngineError(this.#result());
  }

  /** Turns a fault inside the engine into an error; after one no call is possible. */
  #guard(call: () => number): number {
    if (this.#stopped) throw new EngineError("the engine has stopped", true);
    try {
      return call();
    } catch (fault) {
      this.#stopped = true;
      throw new EngineError(`the engine has stopped: ${this.#lastWords() || String(fault)}`, true);
    }
  }

  #describe(address: number): DisplayList {
    if (address === 0) throw new EngineError("no trial has begun");
    const buffer = this.#exports.memory.buffer;
    // Growing the memory detaches every view of it.
    if (this.#ints.buffer !== buffer) this.#ints = new Int32Array(buffer);
    const head = address >> 2;
    const ints = this.#ints;
    const list = this.#list;
    list.dotCount = ints[head + 1]!;
    list.patchCount = ints[head + 3]!;
    list.batchCount = ints[head + 5]!;
    list.dots = floats(list.dots, buffer, ints[head]!, list.dotCount * dotFloats);
    list.patches = floats(list.patches, buffer, ints[head + 2]!, list.patchCount * patchFloats);
    const at = ints[head + 4]!;
    const length = list.batchCount * batchInts;
    const batches = list.batches;
    if (batches.buffer !== buffer || batches.byteOffset !== at || batches.length !== length) {
      list.batches = new Int32Array(buffer, at, length);
    }
    return list;
  }
}

/** The view itself where it still fits, otherwise a new one. */
function floats(view: Float32Array, buffer: ArrayBufferLike, at: number, length: number): Float32Array {
  if (view.buffer === buffer && view.byteOffset === at && view.length === length) return view;
  return new Float32Array(buffer, at, length);
}

/**
 * What the module asks of its host (WASI preview 1): no files, no arguments,
 * no environment. Clock and random bytes serve the language's runtime alone;
 * no decision of the engine depends on them. What the runtime writes before it
 * gives up is kept as its last words.
 */
function hostCalls() {
  let view: () => DataView = () => { throw new EngineError("the engine has no memory yet", true); };
  let words = "";
  const none = (count: number, size: number) => (view().setUint32(count, 0, true), view().setUint32(size, 0, true), 0);
  const calls: Record<string, (...args: never[]) => number> = {
    args_sizes_get: none, environ_sizes_get: none,
    args_get: () => 0, environ_get: () => 0, sched_yield: () => 0,
    clock_time_get: (_id: number, _precision: bigint, at: number) =>
      (view().setBigUint64(at, BigInt(Math.round(performance.now() * 1e6)), true), 0),
    random_get: (at: number, length: number) =>
      (crypto.getRandomValues(new Uint8Array(view().buffer as ArrayBuffer, at, length)), 0),
    poll_oneoff: (_in: number, _out: number, count: number, events: number) => (view().setUint32(events, count, true), 0),
    fd_write: (_file: number, vectors: number, count: number, written: number) => {
      const v = view();
      let total = 0;
      for (let i = 0; i < count; i++) {
        const length = v.getUint32(vectors + 8 * i + 4, true);
        words += new TextDecoder().decode(new Uint8Array(v.buffer, v.getUint32(vectors + 8 * i, true), length));
        total += length;
      }
      v.setUint32(written, total, true);
      return 0;
    },
    proc_exit: (code: number) => { throw new EngineError(`exit ${code}`, true); },
  };
  return {
    calls,
    attach: (memory: WebAssembly.Memory) => { view = () => new DataView(memory.buffer); },
    lastWords: () => words.split("\n", 1)[0]!,
  };
}
