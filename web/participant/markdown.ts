// Shows the signed Markdown texts: headings, paragraphs, lists, bold, italics
// and links. Elements are made one by one, so nothing in a text can become code.

function inline(text: string, into: HTMLElement): void {
  const pattern = /\*\*([^*]+)\*\*|\*([^*]+)\*|\[([^\]]+)\]\((https:\/\/[^)\s]+)\)/g;
  let at = 0;
  for (const m of text.matchAll(pattern)) {
    into.append(text.slice(at, m.index));
    if (m[1] !== undefined) into.append(element("strong", m[1]));
    else if (m[2] !== undefined) into.append(element("em", m[2]));
    else {
      const a = element("a", m[3]!);
      a.setAttribute("href", m[4]!);
      a.setAttribute("rel", "noreferrer");
      a.setAttribute("target", "_blank");
      into.append(a);
    }
    at = m.index + m[0].length;
  }
  into.append(text.slice(at));
}

function element(tag: string, text: string): HTMLElement {
  const e = document.createElement(tag);
  inline(text, e);
  return e;
}

/** Renders Markdown; list items can be left out (consent statements become boxes elsewhere). */
export function renderMarkdown(text: string, options: { lists: boolean } = { lists: true }): DocumentFragment {
  const out = document.createDocumentFragment();
  let list: HTMLElement | null = null;
  let listTag = "";
  let paragraph: string[] = [];
  const close = (): void => {
    if (paragraph.length > 0) out.append(element("p", paragraph.join(" ")));
    paragraph = [];
  };
  for (const line of text.split("\n")) {
    const heading = /^(#{1,3}) +(.*)$/.exec(line);
    const bullet = /^[-*] +(.*)$/.exec(line);
    const numbered = /^\d+\. +(.*)$/.exec(line);
    if (!bullet && !numbered) list = null;
    if (heading) {
      close();
      out.append(element(`h${heading[1]!.length}`, heading[2]!));
    } else if (bullet || numbered) {
      close();
      if (bullet && !options.lists) continue;
      const tag = bullet ? "ul" : "ol";
      const open: HTMLElement = listTag === tag && list ? list : document.createElement(tag);
      if (open !== list) out.append(open);
      list = open;
      listTag = tag;
      open.append(element("li", (bullet ?? numbered)![1]!));
    } else if (line.trim() === "") close();
    else paragraph.push(line.trim());
  }
  close();
  return out;
}

/** The list items of a consent text, as in the engine's study.Statements. */
export function statements(text: string): string[] {
  return text.split("\n").filter((l) => /^[-*] ./.test(l)).map((l) => l.slice(2));
}
