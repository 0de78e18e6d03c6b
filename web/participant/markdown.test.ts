import assert from "node:assert/strict";
import { before, test } from "node:test";

import { renderMarkdown, statements } from "./markdown.js";

/** As much of a document as the renderer uses; text is escaped as a browser would. */
class FakeNode {
  readonly children: (FakeNode | string)[] = [];
  readonly attributes: [string, string][] = [];
  constructor(readonly tag: string) {}
  append(...nodes: (FakeNode | string)[]): void {
    for (const n of nodes) if (n !== "") this.children.push(n);
  }
  setAttribute(name: string, value: string): void {
    this.attributes.push([name, value]);
  }
  get html(): string {
    const escape = (s: string): string => s.replaceAll("&", "&amp;").replaceAll("<", "&lt;").replaceAll('"', "&quot;");
    const inner = this.children.map((c) => (typeof c === "string" ? escape(c) : c.html)).join("");
    if (this.tag === "") return inner;
    return `<${this.tag}${this.attributes.map(([k, v]) => ` ${k}="${escape(v)}"`).join("")}>${inner}</${this.tag}>`;
  }
}

before(() => {
  Object.assign(globalThis, { document: { createElement: (tag: string) => new FakeNode(tag), createDocumentFragment: () => new FakeNode("") } });
});

const html = (text: string, options?: { lists: boolean }): string => (renderMarkdown(text, options) as unknown as FakeNode).html;

const cases: { given: string; when: string; expect: string }[] = [
  { given: "a paragraph over two lines", when: "one\ntwo\n\nthree", expect: "<p>one two</p><p>three</p>" },
  { given: "headings", when: "# A\n## B\n### C\n#### D", expect: "<h2>A</h2><h3>B</h3><h4>C</h4><p>#### D</p>" },
  { given: "a list after a paragraph", when: "Take:\n- one\n- two\n\nend", expect: "<p>Take:</p><ul><li>one</li><li>two</li></ul><p>end</p>" },
  { given: "a numbered list", when: "1. one\n2. two", expect: "<ol><li>one</li><li>two</li></ol>" },
  { given: "two kinds of list", when: "- a\n1. b", expect: "<ul><li>a</li></ul><ol><li>b</li></ol>" },
  { given: "a list item over two lines", when: "- one\n  and more\n- two", expect: "<ul><li>one and more</li><li>two</li></ul>" },
  { given: "bold and italics", when: "**a** *b* c", expect: "<p><strong>a</strong> <em>b</em> c</p>" },
  { given: "italics in bold", when: "**a *b***", expect: "<p><strong>a <em>b</em></strong></p>" },
  { given: "a link", when: "[us](https://a.example/b?c=1&d)", expect: '<p><a href="https://a.example/b?c=1&amp;d" rel="noreferrer" target="_blank">us</a></p>' },
  { given: "an address of mail", when: "write to <lab@a.example>", expect: "<p>write to &lt;lab@a.example></p>" },
  { given: "a link that is code", when: "[x](javascript:alert(1))", expect: "<p>[x](javascript:alert(1))</p>" },
  { given: "a link without encryption", when: "[x](http://a.example)", expect: "<p>[x](http://a.example)</p>" },
  { given: "an element", when: "<script>alert(1)</script>", expect: "<p>&lt;script>alert(1)&lt;/script></p>" },
  { given: "an attribute that breaks out", when: '[x](https://a.example/"onclick="alert(1))', expect: '<p><a href="https://a.example/&quot;onclick=&quot;alert(1" rel="noreferrer" target="_blank">x</a>)</p>' },
  { given: "nothing", when: "", expect: "" },
  { given: "an unclosed mark", when: "2 * 3 and **open", expect: "<p>2 * 3 and **open</p>" },
];

for (const c of cases) test(`renders ${c.given}`, () => assert.equal(html(c.when), c.expect));

test("leaves lists out where the statements become boxes", () => {
  assert.equal(html("I agree:\n\n- one\n- two\n  and more\n\nThank you", { lists: false }), "<p>I agree:</p><p>Thank you</p>");
});

test("statements are the list items", () => {
  assert.deepEqual(statements("text\n\n- one\n* two\n-three\n- "), ["one", "two"]);
});
