import assert from "node:assert/strict";
import { before, test } from "node:test";

import { Outbox, Refused, openShelf, type Answer, type Session, type Shelf, type Stored } from "./outbox.js";

// As much of a window as waiting for the network needs.
const view = new EventTarget();
before(() => {
  Object.assign(globalThis, { addEventListener: view.addEventListener.bind(view), removeEventListener: view.removeEventListener.bind(view) });
});

const answer = (acknowledged: number): Answer => ({ acknowledged, outcome: null, completion_code: null, return_url: null });
const record = (sequence: number): Stored => ({ sequence, kind: "event" });

/** A server that keeps records as the real one does, and fails when it is told to. */
class FakeServer {
  readonly stored = new Map<number, string>();
  readonly uploads: number[][] = [];
  failures: (Error | "lost answer")[] = [];
  post = async (records: Stored[]): Promise<Answer> => {
    const failure = this.failures.shift();
    if (failure instanceof Error) throw failure;
    this.uploads.push(records.map((r) => r.sequence));
    for (const r of records) {
      const body = JSON.stringify(r);
      assert.equal(this.stored.get(r.sequence) ?? body, body, `another record under sequence ${r.sequence}`);
      this.stored.set(r.sequence, body);
    }
    if (failure === "lost answer") throw new TypeError("the answer was lost");
    let top = 1;
    while (this.stored.has(top + 1)) top++;
    return answer(top);
  };
}

async function setup(): Promise<{ shelf: Shelf; server: FakeServer; box: Outbox }> {
  const shelf = await openShelf(); // Node has no database: the one in memory
  const server = new FakeServer();
  return { shelf, server, box: new Outbox(shelf, "run", server.post) };
}

const online = (): boolean => view.dispatchEvent(new Event("online"));

test("without a database memory must do, and it says so", async () => {
  const shelf = await openShelf();
  assert.equal(shelf.durable, false);
  const session: Session = { study: "s", run: "r", token: "t", seed: "0", group: 0, order: 0, bundle: "b", language: "en" };
  await shelf.saveSession(session);
  assert.deepEqual(await shelf.findSession("s"), session);
  await shelf.dropSession("s", "r");
  assert.equal(await shelf.findSession("s"), null);
});

test("records are on the device before they are sent, and leave when acknowledged", async () => {
  const { shelf, server, box } = await setup();
  let kept = -1;
  const post = server.post;
  const watching = new Outbox(shelf, "run", async (records) => {
    kept = (await shelf.all("run")).length;
    return post(records);
  });
  await watching.add(record(2));
  assert.equal(await watching.flush(), true);
  assert.equal(kept, 1);
  assert.deepEqual(await shelf.all("run"), []);
  assert.equal(watching.pending, 0);
  assert.equal(box.pending, 0);
});

test("records that come while one is sent go together", async () => {
  const { server, box } = await setup();
  await Promise.all([2, 3, 4, 5].map((n) => box.add(record(n))));
  await box.flush();
  assert.deepEqual(server.uploads.flat(), [2, 3, 4, 5]);
  assert.ok(server.uploads.length < 4);
});

test("an upload holds a hundred records at most", async () => {
  const { shelf, server } = await setup();
  for (let n = 2; n < 252; n++) await shelf.put("run", record(n));
  const box = new Outbox(shelf, "run", server.post);
  await box.recover(1);
  await box.flush();
  assert.deepEqual(server.uploads.map((u) => u.length), [100, 100, 50]);
});

test("without network records wait and go when it is back", async () => {
  const { shelf, server, box } = await setup();
  const states: string[] = [];
  let offline = (): void => {};
  const waiting = new Promise<void>((r) => (offline = r));
  box.onState = (s) => {
    states.push(s);
    if (s === "offline") offline();
  };
  server.failures = [new TypeError("no network")];
  await box.add(record(2));
  await waiting;
  assert.deepEqual(await shelf.all("run"), [record(2)]);
  setImmediate(online);
  assert.equal(await box.flush(), true);
  assert.deepEqual(states, ["sending", "offline", "sending", "sent"]);
});

test("a lost answer sends twice and stores once", async () => {
  const { server, box } = await setup();
  let again = (): void => {};
  const waiting = new Promise<void>((r) => (again = r));
  box.onState = (s) => s === "offline" && again();
  server.failures = ["lost answer"];
  await box.add(record(2));
  await waiting;
  setImmediate(online);
  await box.flush();
  assert.deepEqual(server.uploads, [[2], [2]]);
  assert.equal(server.stored.size, 1);
});

test("what the server refuses stays on the device and is not sent again", async () => {
  const { shelf, server, box } = await setup();
  server.failures = [new Refused("record", "it does not fit")];
  await box.add(record(2));
  assert.equal(await box.flush(), false);
  assert.equal(box.refused, "it does not fit");
  assert.deepEqual(await shelf.all("run"), [record(2)]);
});

test("a new page takes over what the server does not have", async () => {
  const { shelf, server } = await setup();
  for (const n of [4, 2, 3, 5]) await shelf.put("run", record(n));
  for (const n of [2, 3]) server.stored.set(n, JSON.stringify(record(n)));
  const box = new Outbox(shelf, "run", server.post);
  assert.deepEqual((await box.recover(3)).map((r) => r.sequence), [4, 5]);
  await box.flush();
  assert.deepEqual(server.uploads, [[4, 5]]);
  assert.deepEqual(await shelf.all("run"), []);
});

test("the last answer is kept: it holds the completion code", async () => {
  const { shelf } = await setup();
  const end: Answer = { acknowledged: 2, outcome: "completed", completion_code: "KQ-1", return_url: null };
  const box = new Outbox(shelf, "run", async () => end);
  await box.add(record(2));
  await box.flush();
  assert.deepEqual(box.last, end);
});

test("long records that waited go in several uploads, however long one is", async () => {
  const { server, box } = await setup();
  server.failures = [new TypeError("no network")];
  const long = (sequence: number, length: number): Stored => ({ ...record(sequence), detail: "x".repeat(length) });
  await box.add(record(1));
  for (const [i, length] of [300_000, 300_000, 700_000, 10, 10].entries()) await box.add(long(i + 2, length));
  online();
  assert.equal(await box.flush(), true);
  assert.deepEqual(server.uploads, [[1, 2], [3], [4], [5, 6]]);
});
