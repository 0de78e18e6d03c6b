// Drives class Engine in Node as a page does. Arguments: the bundled
// engine.ts, the module, and a task file:
//
//   {"study": canonical text, "seed": hex, "group", "order", "repeat": n,
//    "weigh": n, "records": [record, ...]}
//
// It writes one line for each record: the step before it and, for trials, a
// checksum over every word of every list, the batches included, and the record
// that finishTrial gives. With "repeat" it then shows n more frames of the next
// trial and writes their times in ms. With "weigh" it writes, after every n
// records and at the end, the bytes of the module's memory and of the script's heap.
import { readFileSync } from "node:fs";
import { pathToFileURL } from "node:url";

const [script, module, task] = process.argv.slice(2);
const { Engine, EngineError } = await import(pathToFileURL(script).href);
const work = JSON.parse(readFileSync(task, "utf8"));
const engine = await Engine.load(readFileSync(module));
const say = (line) => console.log(JSON.stringify(line));

function refused(what, call) {
  try {
    call();
  } catch (error) {
    if (error instanceof EngineError && !error.stopped && error.message !== "") return;
    throw new Error(`${what}: ${error}`);
  }
  throw new Error(`${what} was accepted`);
}

refused("a step without a study", () => engine.next());
refused("a frame without a study", () => engine.frame(1));
refused("a study that is none", () => engine.open("{}", "00000000000000ff", 0, 0));
refused("a seed that is none", () => engine.open(work.study, "ff", 0, 0));
engine.open(work.study, work.seed, work.group, work.order);
refused("a trial before consent", () => engine.beginTrial());
refused("a record out of order", () => engine.apply({ ...work.records[0], sequence: 9 }));
refused("a calibration that is none", () => engine.calibrate("moon", {}));

let sum = 0;
const words = (view) => {
  const list = new Uint32Array(view.buffer, view.byteOffset, view.length);
  for (const w of list) sum = Math.imul(sum ^ w, 16777619) >>> 0;
};
const add = (list) => {
  if (list.dots.length !== 4 * list.dotCount || list.patches.length !== 12 * list.patchCount || list.batches.length !== 3 * list.batchCount) {
    throw new Error("the views do not have the lengths of the list");
  }
  words(list.dots);
  words(list.patches);
  words(list.batches);
};

// Asking for much makes the memory grow, which detaches every view of it.
const much = Array.from({ length: 90_000 }, (_, i) => 16 + (i % 7) / 10);
let grown = false;

function trial(record) {
  engine.beginTrial();
  sum = 0;
  add(engine.fixation());
  const steps = record.frame_steps.split(" ").flatMap((part) => {
    const [step, times] = part.split("x").map(Number);
    return Array(times ?? 1).fill(step);
  });
  steps.forEach((_, i) => {
    if (i === 3 && !grown) {
      grown = true;
      engine.calibrate("refresh", { intervals_ms: much });
    }
    const { adjust_frames = [], adjust_values = [] } = record.given ?? {};
    adjust_frames.forEach((at, k) => at === i && engine.adjust(adjust_values[k]));
    add(engine.frame(steps[Math.max(i - 1, 0)]));
  });
  const { response, rt_ms, input, onset_ms, offset_ms, intervals_ms, interrupted } = record;
  return engine.finishTrial({
    response, rt_ms, input, onset_ms, offset_ms, frame_steps: steps, intervals_ms, interrupted, ...(record.given ? { given: measured(record.given) } : {}),
  });
}

/** What a page measures of an answer: the other numbers follow from it. */
function measured({ error_deg, start, setting, held_ms, first_held_ms, ...given }) {
  return given;
}

function weigh() {
  globalThis.gc();
  say({ memory: engine.fixation().dots.buffer.byteLength, heap: process.memoryUsage().heapUsed });
}

for (const [i, record] of work.records.entries()) {
  if (work.weigh > 0 && i > 0 && i % work.weigh === 0) weigh();
  const step = engine.next();
  if (record.kind !== "trial") {
    refused("a measurement without a trial", () => engine.finishTrial({
      response: null, rt_ms: null, input: "", onset_ms: null, offset_ms: null, frame_steps: [], intervals_ms: [], interrupted: "",
    }));
    if (!work.weigh) say({ step });
  } else {
    const finished = trial(record);
    if (!work.weigh) say({ step, sum, finished });
  }
  engine.apply(record);
}

if (work.weigh > 0) weigh();

if (work.repeat > 0) {
  engine.beginTrial();
  const times = [];
  let list = engine.frame(0);
  const { dots } = list;
  for (let i = 0; i < work.repeat; i++) {
    const start = performance.now();
    list = engine.frame(1);
    times.push(performance.now() - start);
  }
  say({ times, dots: list.dotCount, same: list.dots === dots });
}
