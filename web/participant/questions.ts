// Pages with forms: cautions and screening, and the questions at the end.

import { say } from "./messages.js";
import { button, h, notice, show } from "./page.js";
import type { LocalText, Question, StudyText } from "./protocol.js";

type Value = string | number | boolean | null;

export const inLanguage = (text: LocalText, language: string): string => text[language] ?? Object.values(text)[0] ?? "";

function radios(name: string, options: [string, string][]): HTMLElement {
  return h("div", { class: "options" }, ...options.map(([value, label]) =>
    h("label", {}, h("input", { type: "radio", name, value, test: `${name}-${value}` }), " ", label)));
}

const chosen = (name: string): string | null => (document.querySelector(`input[name="${CSS.escape(name)}"]:checked`) as HTMLInputElement | null)?.value ?? null;

/** Cautions, age and screening questions. */
export function screeningPage(study: StudyText, language: string): Promise<Record<string, unknown>> {
  return new Promise((resolve) => {
    const line = notice();
    const age = h("input", { type: "number", id: "age", min: "0", max: "120", inputmode: "numeric", test: "age" }) as HTMLInputElement;
    const read = h("input", { type: "checkbox", id: "cautions", test: "cautions-read" }) as HTMLInputElement;
    const names = study.participants.screening_order;
    const asked = names.map((name) => h("fieldset", {},
      h("legend", {}, inLanguage(study.participants.screening[name]!.ask, language)),
      radios(`screening-${name}`, [["yes", say("yes")], ["no", say("no")]])));
    const finish = (): void => {
      const years = Number(age.value);
      if (!read.checked) return void (line.textContent = say("cautions_missing"));
      if (age.value === "" || !Number.isInteger(years) || years < 0 || years > 120) {
        line.textContent = say("age_missing");
        return age.focus();
      }
      const answers: Record<string, boolean> = {};
      for (const name of names) {
        const value = chosen(`screening-${name}`);
        if (value === null) return void (line.textContent = say("answer_missing"));
        answers[name] = value === "yes";
      }
      resolve({ cautions_read: true, age_years: years, answers });
    };
    show("screening", say("cautions_title"),
      h("div", { class: "caution" },
        ...(study.about.flash_approval === "" ? [] : [h("p", {}, h("strong", {}, say("flash_warning")))]),
        h("p", {}, say("cautions_1")), h("p", {}, h("strong", {}, say("cautions_2"))),
        h("label", { class: "tick" }, read, " ", say("cautions_read"))),
      h("p", {}, h("label", { for: "age" }, say("age")), " ", age), ...asked, line,
      h("div", { class: "actions" }, button(say("continue"), "continue", finish)));
  });
}

/** The study's questions at the end. */
export function questionsPage(study: StudyText, language: string): Promise<Record<string, Value>> {
  return new Promise((resolve) => {
    const line = notice();
    const fields = study.questions_order.map((name) => field(name, study.questions[name]!, language));
    const finish = (): void => {
      const answers: Record<string, Value> = {};
      for (const name of study.questions_order) {
        const q = study.questions[name]!;
        const answer = read(name, q);
        if (answer === undefined) {
          line.textContent = say("number_range", { min: q.min, max: q.max });
          return;
        }
        if (answer === null && !q.optional) {
          line.textContent = say("question_missing");
          return;
        }
        answers[name] = answer;
      }
      resolve(answers);
    };
    show("questions", say("questions_title"), ...fields, line, h("div", { class: "actions" }, button(say("continue"), "continue", finish)));
  });
}

function field(name: string, q: Question, language: string): HTMLElement {
  const ask = inLanguage(q.ask, language) + (q.optional ? ` (${say("question_optional")})` : "");
  const group = `question-${name}`;
  switch (q.type) {
    case "choice":
      return h("fieldset", {}, h("legend", {}, ask), radios(group, q.options_order.map((o) => [o, inLanguage(q.options[o]!.label, language)])));
    case "yes_no":
      return h("fieldset", {}, h("legend", {}, ask), radios(group, [["yes", say("yes")], ["no", say("no")]]));
    case "scale": {
      const points: [string, string][] = [];
      for (let x = q.min; x <= q.max; x++) points.push([String(x), String(x)]);
      return h("fieldset", {}, h("legend", {}, ask), h("div", { class: "scale" }, h("span", {}, inLanguage(q.low_end, language)), radios(group, points), h("span", {}, inLanguage(q.high_end, language))));
    }
    case "number":
      return h("p", { class: "field" }, h("label", { for: group }, ask), " ", h("input", { type: "number", id: group, test: group, step: "any", min: String(q.min), max: String(q.max) }), " ", q.unit);
    case "text":
      return h("p", { class: "field" }, h("label", { for: group }, ask), h("textarea", { id: group, test: group, rows: "3", maxlength: "4000" }));
  }
}

/** The answer, null if there is none, undefined if it is out of range. */
function read(name: string, q: Question): Value | undefined {
  const group = `question-${name}`;
  if (q.type === "number" || q.type === "text") {
    const text = (document.getElementById(group) as HTMLInputElement | HTMLTextAreaElement).value.trim();
    if (text === "") return null;
    if (q.type === "text") return text;
    const x = Number(text);
    return Number.isFinite(x) && x >= q.min && x <= q.max ? x : undefined;
  }
  const value = chosen(group);
  if (value === null) return null;
  if (q.type === "yes_no") return value === "yes";
  return q.type === "scale" ? Number(value) : value;
}
