// What passes between this page, the engine and the server, and the checks that narrow it.

import type { AnswerSpec } from "./reply.js";

export type LocalText = Record<string, string>;

/** Settings of the page's start, from the server. */
export interface Start {
  link: string;
  invitation: string | null;
  bundle: string;
  languages: string[];
  language: string;
  state: "open" | "paused" | "closed" | "draft" | "full" | "taken" | "used";
  assets: Record<"engine" | "participant_js" | "participant_css", string>;
  title: string;
}

export interface Choice {
  keys: string[];
  label: LocalText;
}

export interface Task {
  choices: Record<string, Choice>;
  choices_order: string[];
  prompt: LocalText;
  response_window_ms: number;
  respond_during: boolean;
  intertrial_ms: number;
  answer?: AnswerSpec;
  confidence?: { steps: number; ask: LocalText; low_end: LocalText; high_end: LocalText };
}

export interface Question {
  type: "choice" | "number" | "text" | "scale" | "yes_no";
  ask: LocalText;
  options: Record<string, { label: LocalText }>;
  options_order: string[];
  min: number;
  max: number;
  unit: string;
  low_end: LocalText;
  high_end: LocalText;
  optional: boolean;
}

/** The parts of a study's canonical form that pages need. */
export interface StudyText {
  about: { title: string; title_in?: LocalText; languages: string[]; investigator: string; contact: string; minutes: number; flash_approval: string };
  participants: { screening: Record<string, { ask: LocalText }>; screening_order: string[] };
  texts: Record<string, { version: string; information: string; consent: string; instructions: string; debrief: string }>;
  screen: {
    distance_method: "blind_spot" | "stated";
    stated_distance_mm: number;
    distance_repeats: number;
    card_repeats: number;
    background_fraction: number;
    fullscreen: boolean;
    min_refresh_hz: number;
    max_refresh_hz: number;
    max_jitter_ms: number;
    max_dropped_percent: number;
    min_width_deg: number;
    min_height_deg: number;
  };
  tasks: Record<string, Task>;
  blocks: { name: string; message: LocalText }[];
  questions: Record<string, Question>;
  questions_order: string[];
}

export interface RecordBody {
  sequence: number;
  kind: string;
  at_ms: number;
  bundle: string;
  [key: string]: unknown;
}

export interface RunState {
  run: string;
  seed: string;
  group: number;
  order: number;
  bundle: string;
  acknowledged: number;
  records: RecordBody[];
  outcome: "completed" | "refused" | "withdrawn" | null;
  completion_code: string | null;
  return_url: string | null;
}

export interface CreatedRun {
  run: string;
  token: string;
  seed: string;
  group: number;
  order: number;
  bundle: string;
  acknowledged: number;
}

function isObject(x: unknown): x is Record<string, unknown> {
  return typeof x === "object" && x !== null && !Array.isArray(x);
}

/** Checks that x has the named members with the given types; the message names the first that does not fit. */
export function expect<T>(x: unknown, what: string, members: Record<string, "string" | "number" | "array" | "object" | "boolean">): T {
  if (!isObject(x)) throw new Error(`${what}: an object is expected`);
  for (const [name, type] of Object.entries(members)) {
    const value = x[name];
    const actual = Array.isArray(value) ? "array" : value === null ? "null" : typeof value;
    if (actual !== type) throw new Error(`${what}: ${name} must be ${type}, not ${actual}`);
  }
  return x as T;
}

export const asStart = (x: unknown): Start => expect<Start>(x, "start", { link: "string", bundle: "string", languages: "array", language: "string", state: "string", assets: "object", title: "string" });

export const asRunState = (x: unknown): RunState => expect<RunState>(x, "run", { run: "string", seed: "string", group: "number", order: "number", bundle: "string", acknowledged: "number", records: "array" });

export const asCreatedRun = (x: unknown): CreatedRun => expect<CreatedRun>(x, "new run", { run: "string", token: "string", seed: "string", group: "number", order: "number", bundle: "string" });

export const asStudy = (x: unknown): StudyText => expect<StudyText>(x, "study", { about: "object", participants: "object", texts: "object", screen: "object", tasks: "object", blocks: "array", questions: "object" });
