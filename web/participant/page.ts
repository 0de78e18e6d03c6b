// Pages: one decision each, with the same frame around them.

import { say } from "./messages.js";

type Child = Node | string | null;

/** Makes an element; test names it for the end-to-end test. */
export function h(tag: string, attributes: Record<string, string | boolean | ((e: never) => void)> = {}, ...children: Child[]): HTMLElement {
  const e = document.createElement(tag);
  for (const [name, value] of Object.entries(attributes)) {
    if (typeof value === "function") e.addEventListener(name, value as EventListener);
    else if (value === true) e.setAttribute(name, "");
    else if (value !== false) e.setAttribute(name === "test" ? "data-testid" : name, value);
  }
  for (const child of children) if (child !== null) e.append(child);
  return e;
}

export function button(text: string, test: string, click: (e: MouseEvent) => void, kind = "main"): HTMLElement {
  return h("button", { type: "button", class: kind, test, click: click as (e: never) => void }, text);
}

const root = (): HTMLElement => document.getElementById("distal")!;

let footer: HTMLElement | null = null;

/** What stands at the foot of every page: the way out. */
export function setFooter(content: HTMLElement | null): void {
  footer = content;
}

/** Shows a page and moves the focus to its heading. */
export function show(name: string, title: string, ...children: Child[]): HTMLElement {
  document.body.className = "page";
  const heading = h("h1", { tabindex: "-1" }, title);
  const page = h("section", { class: "sheet", test: `page-${name}` }, heading, ...children);
  root().replaceChildren(page, ...(footer ? [footer] : []));
  window.scrollTo(0, 0);
  heading.focus({ preventScroll: true });
  return page;
}

/** A line that screen readers announce. */
export function notice(): HTMLElement {
  return h("p", { class: "notice", role: "alert" });
}

/** Whether a key is a control's own business: Space on a focused button presses that button. */
export function meantForControl(e: KeyboardEvent): boolean {
  return e.target instanceof HTMLElement && e.target.closest("button, a, input, textarea, dialog") !== null;
}

/** Shows a page with one way on, and waits for it. */
export function pause(name: string, title: string, paragraphs: Child[], action: string, keys: string[] = ["Enter"]): Promise<MouseEvent | KeyboardEvent> {
  return new Promise((resolve) => {
    const finish = (e: MouseEvent | KeyboardEvent): void => {
      removeEventListener("keydown", key);
      resolve(e);
    };
    const key = (e: KeyboardEvent): void => {
      if (e.repeat || !keys.includes(e.code) || meantForControl(e)) return;
      e.preventDefault();
      finish(e);
    };
    show(name, title, ...paragraphs, h("div", { class: "actions" }, button(action, "continue", finish)));
    addEventListener("keydown", key);
  });
}

/** A page that only tells. */
export function tell(name: string, title: string, ...texts: string[]): void {
  show(name, title, ...texts.map((t) => h("p", {}, t)));
}

/** Asks yes or no in front of the page. */
export function confirm(question: string, yes: string, no: string): Promise<boolean> {
  return new Promise((resolve) => {
    const dialog = document.createElement("dialog");
    const end = (answer: boolean) => () => {
      dialog.close();
      dialog.remove();
      resolve(answer);
    };
    dialog.append(h("p", {}, question), h("div", { class: "actions" }, button(no, "confirm-no", end(false), "quiet"), button(yes, "confirm-yes", end(true))));
    dialog.addEventListener("cancel", end(false));
    // Keys belong to the dialog as long as it is open, not to the page behind it.
    dialog.addEventListener("keydown", (e) => e.stopPropagation());
    root().append(dialog);
    dialog.showModal();
  });
}

export function paragraphs(...keys: Parameters<typeof say>[0][]): HTMLElement[] {
  return keys.map((k) => h("p", {}, say(k)));
}
