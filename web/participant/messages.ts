// What participants read that is not from the study, in their language.

import de from "../messages/de.json";
import en from "../messages/en.json";

export type MessageKey = keyof typeof en;

const catalogues: Record<string, Record<MessageKey, string>> = { en, de };

let current: Record<MessageKey, string> = en;

export function setLanguage(language: string): void {
  current = catalogues[language.split("-")[0]!] ?? en;
  document.documentElement.lang = language;
}

/** A number with so many decimals, as the language writes it. */
export function figure(x: number, decimals: number): string {
  const digits = { minimumFractionDigits: decimals, maximumFractionDigits: decimals, useGrouping: false };
  return new Intl.NumberFormat(current === de ? "de" : "en", digits).format(x);
}

/** A message with its {places} filled in. */
export function say(key: MessageKey, values: Record<string, string | number> = {}): string {
  return current[key].replace(/\{(\w+)\}/g, (whole, name: string) => (name in values ? String(values[name]) : whole));
}

export function known(key: string): key is MessageKey {
  return key in en;
}
