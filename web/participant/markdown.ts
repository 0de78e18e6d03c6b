// Shows the signed Markdown texts: headings, paragraphs, lists, bold, italics
// and links. Elements are made one by one, so nothing in a text can become code.

const marks = /\*\*((?:[^*]|\*[^*]+\*)+)\*\*|\*([^*\s][^*]*)\*|\[([^\]]+)\]\((https:\/\/[^)\s]+)\)/g;

function inline(text: string, into: HTMLElement): void {
  let at = 0;
  for (const m of text.matchAll(marks)) {
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

interface Piece {
  tag: "h2" | "h3" | "h4" | "p" | "ul" | "ol";
  /** One text, or those of the list's items. */
  texts: string[];
}

const itemLine = /^(?:([-*])|\d+\.) +(.+)$/;

/** Splits a text into its pieces. A line that begins with two spaces goes on with the list item before it. */
function pieces(text: string): Piece[] {
  const all: Piece[] = [];
  let open: Piece | null = null;
  const begin = (tag: Piece["tag"], first: string): Piece => {
    const piece: Piece = { tag, texts: [first] };
    all.push(piece);
    return piece;
  };
  for (const line of text.split("\n")) {
    const heading = /^(#{1,3}) +(.*)$/.exec(line);
    const item = itemLine.exec(line);
    if (heading) {
      // The page's own title is the h1.
      begin(`h${heading[1]!.length + 1}` as "h2", heading[2]!);
      open = null;
    } else if (item) {
      const tag = item[1] ? "ul" : "ol";
      if (open?.tag === tag) open.texts.push(item[2]!);
      else open = begin(tag, item[2]!);
    } else if (line.trim() === "") open = null;
    else if (open && (open.tag === "p" || line.startsWith("  "))) open.texts.push(`${open.texts.pop()} ${line.trim()}`);
    else open = begin("p", line.trim());
  }
  return all;
}

/** Renders Markdown; bullet lists can be left out (consent statements become boxes elsewhere). */
export function renderMarkdown(text: string, options: { lists: boolean } = { lists: true }): DocumentFragment {
  const out = document.createDocumentFragment();
  for (const piece of pieces(text)) {
    if (piece.tag === "ul" && !options.lists) continue;
    if (piece.tag !== "ul" && piece.tag !== "ol") {
      out.append(element(piece.tag, piece.texts[0]!));
      continue;
    }
    const list = document.createElement(piece.tag);
    for (const t of piece.texts) list.append(element("li", t));
    out.append(list);
  }
  return out;
}

/** What participants tick: the items of a consent text's bullet lists, as many as study.Statements finds. */
export function statements(text: string): string[] {
  return pieces(text).flatMap((p) => (p.tag === "ul" ? p.texts : []));
}
