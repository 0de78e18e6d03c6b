// Which key gives which answer, as the participant's own keyboard names it.

import { answerKeys } from "./answers.js";
import { say } from "./messages.js";
import { h } from "./page.js";
import type { StudyText, Task } from "./protocol.js";
import { inLanguage } from "./questions.js";

type Layout = { get(code: string): string | undefined };

const arrows: Record<string, string> = { ArrowLeft: "←", ArrowRight: "→", ArrowUp: "↑", ArrowDown: "↓" };

/**
 * The name of the key at a place of the keyboard (KeyboardEvent.code). The
 * place KeyZ is labelled Y on a German keyboard: the layout knows, where the
 * browser tells it.
 */
export function keyName(code: string, layout: Layout | null): string {
  if (code === "Space") return say("key_space");
  if (code === "Enter") return say("key_enter");
  return arrows[code] ?? layout?.get(code)?.toUpperCase() ?? code.replace(/^(Key|Digit|Numpad)(?=.)/, "");
}

async function keyboardLayout(): Promise<Layout | null> {
  try {
    return (await (navigator as { keyboard?: { getLayoutMap?: () => Promise<Layout> } }).keyboard?.getLayoutMap?.()) ?? null;
  } catch {
    return null;
  }
}

function rows(task: Task, language: string): [string, string[]][] {
  const c = task.confidence;
  return [
    ...task.choices_order.map((name): [string, string[]] => [inLanguage(task.choices[name]!.label, language), task.choices[name]!.keys]), ...answerKeys(task),
    ...(c ? [[inLanguage(c.ask, language), Array.from({ length: c.steps }, (_, i) => `Digit${i + 1}`)] as [string, string[]]] : []),
  ];
}

/** A table of each task's answers and their keys. */
export async function keyReminder(study: StudyText, language: string): Promise<HTMLElement> {
  const layout = await keyboardLayout();
  const tables = Object.values(study.tasks).map((task) => h("table", { class: "keys" },
    h("caption", {}, inLanguage(task.prompt, language)),
    h("tbody", {}, ...rows(task, language).map(([what, keys]) => h("tr", {},
      h("th", { scope: "row" }, what), h("td", {}, ...keys.map((k) => h("kbd", {}, keyName(k, layout)))))))));
  return h("section", { test: "keys" }, h("h2", {}, say("keys_title")), h("p", {}, say("keys_or_buttons")), ...tables);
}
