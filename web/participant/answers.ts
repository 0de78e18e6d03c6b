// What participants answer with: buttons, a dial, the keys of an adjustment,
// something to hold, a scale of confidence. All of it works with keys alone.

import { say } from "./messages.js";
import { h } from "./page.js";
import type { Task } from "./protocol.js";
import { inLanguage } from "./questions.js";
import type { TrialInput } from "./trial.js";

export interface Panel {
  elements: HTMLElement[];
  turn(deg: number): void;
}

type Handler = (e: never) => void;

const pressable = (text: string, test: string, down: (e: PointerEvent) => void, more: Record<string, Handler | string> = {}): HTMLElement =>
  h("button", { type: "button", class: "choice", test, tabindex: "-1", pointerdown: down as Handler, ...more }, text);

/** What a task is answered with. */
export function answerPanel(task: Task, input: TrialInput, language: string): Panel {
  const prompt = h("p", { class: "prompt" }, inLanguage(task.prompt, language));
  const done = (): HTMLElement => pressable(say("answer_done"), "answer-done", (e) => input.answerButton(0, e));
  switch (task.answer?.by) {
    case "dial":
      return dial(prompt, done(), input);
    case "adjustment":
      return { turn: () => {}, elements: [prompt, pressable("−", "answer-less", (e) => input.step(-1, e), { "aria-label": say("answer_less") }), pressable("+", "answer-more", (e) => input.step(1, e), { "aria-label": say("answer_more") }), done()] };
    case "hold":
      return { turn: () => {}, elements: [prompt, holdButton(input)] };
  }
  return {
    turn: () => {},
    elements: [prompt, ...task.choices_order.map((name, i) => pressable(inLanguage(task.choices[name]!.label, language), `choice-${name}`, (e) => input.answerButton(i, e)))],
  };
}

function holdButton(input: TrialInput): HTMLElement {
  const up = (e: PointerEvent): void => input.hold(false, e);
  return pressable(say("answer_hold"), "answer-hold", (e) => {
    (e.currentTarget as HTMLElement).setPointerCapture(e.pointerId);
    input.hold(true, e);
  }, { pointerup: up as Handler, pointercancel: up as Handler });
}

/** A circle about the middle of the screen with a needle. */
function dial(prompt: HTMLElement, done: HTMLElement, input: TrialInput): Panel {
  const needle = h("i");
  const circle = h("div", { class: "dial", test: "dial", role: "slider", "aria-valuemin": "0", "aria-valuemax": "360", "aria-label": prompt.textContent ?? "" }, needle);
  const aim = (e: PointerEvent): void => {
    if ((e.buttons & 1) === 0) return;
    const box = circle.getBoundingClientRect();
    input.point((Math.atan2(box.top + box.height / 2 - e.clientY, e.clientX - box.left - box.width / 2) * 180) / Math.PI);
  };
  circle.addEventListener("pointerdown", (e) => {
    circle.setPointerCapture(e.pointerId);
    aim(e);
  });
  circle.addEventListener("pointermove", aim);
  return {
    elements: [circle, prompt, done],
    turn: (deg) => {
      needle.style.transform = `rotate(${-deg}deg)`;
      circle.setAttribute("aria-valuenow", String(deg));
    },
  };
}

/** The scale after the answer. */
export function confidencePanel(task: Task, input: TrialInput, language: string): HTMLElement[] {
  const c = task.confidence!;
  const end = (text: string): HTMLElement => h("span", {}, text);
  return [
    h("p", { class: "prompt" }, inLanguage(c.ask, language)),
    h("div", { role: "group", "aria-label": inLanguage(c.ask, language) }, end(inLanguage(c.low_end, language)),
      ...Array.from({ length: c.steps }, (_, i) => pressable(String(i + 1), `confidence-${i + 1}`, (e) => input.sure(i + 1, e))),
      end(inLanguage(c.high_end, language))),
  ];
}

/** Rows of the table of keys: what is done, and with which keys. */
export function answerKeys(task: Task): [string, string[]][] {
  const turn: [string, string[]][] = [[say("keys_turn"), ["ArrowLeft", "ArrowRight"]], [say("keys_fine"), ["⇧ ←", "⇧ →"]], [say("answer_done"), ["Enter", "Space"]]];
  switch (task.answer?.by) {
    case "dial":
      return turn;
    case "adjustment":
      return [[`${say("answer_less")}, ${say("answer_more")}`, turn[0]![1]], ...turn.slice(1)];
    case "hold":
      return [[say("answer_hold"), task.answer.keys]];
  }
  return [];
}
