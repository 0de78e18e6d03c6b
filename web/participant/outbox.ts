// What is not yet acknowledged, kept on the device (IndexedDB) and sent in
// order; a record leaves only when the server has acknowledged it. Where the
// browser gives no database (private windows of some), memory must do, and the
// page says so.

export interface Stored {
  sequence: number;
  [key: string]: unknown;
}

/** A run on this device. */
export interface Session {
  study: string; // link or invitation
  run: string;
  token: string;
  seed: string;
  group: number;
  order: number;
  bundle: string;
  language: string;
}

export interface Shelf {
  readonly durable: boolean;
  saveSession(s: Session): Promise<void>;
  findSession(study: string): Promise<Session | null>;
  dropSession(study: string, run: string): Promise<void>;
  put(run: string, record: Stored): Promise<void>;
  all(run: string): Promise<Stored[]>;
  drop(run: string, upTo: number): Promise<void>;
}

const request = <T>(r: IDBRequest<T>): Promise<T> =>
  new Promise((resolve, reject) => {
    r.onsuccess = () => resolve(r.result);
    r.onerror = () => reject(r.error ?? new Error("database"));
  });

class DatabaseShelf implements Shelf {
  readonly durable = true;
  constructor(private readonly db: IDBDatabase) {}

  // strict: the browser reports success only when the data are on the disk.
  private write(store: string, act: (s: IDBObjectStore) => void): Promise<void> {
    return new Promise((resolve, reject) => {
      const t = this.db.transaction(store, "readwrite", { durability: "strict" });
      act(t.objectStore(store));
      t.oncomplete = () => resolve();
      t.onerror = t.onabort = () => reject(t.error ?? new Error("database"));
    });
  }

  saveSession(s: Session): Promise<void> {
    return this.write("sessions", (store) => store.put(s));
  }

  async findSession(study: string): Promise<Session | null> {
    const found = await request(this.db.transaction("sessions").objectStore("sessions").get(study));
    return (found as Session | undefined) ?? null;
  }

  async dropSession(study: string, run: string): Promise<void> {
    await this.write("sessions", (store) => store.delete(study));
    await this.drop(run, Number.MAX_SAFE_INTEGER);
  }

  put(run: string, record: Stored): Promise<void> {
    return this.write("records", (store) => store.put({ run, sequence: record.sequence, record }));
  }

  async all(run: string): Promise<Stored[]> {
    const range = IDBKeyRange.bound([run, 0], [run, Number.MAX_SAFE_INTEGER]);
    const rows = await request(this.db.transaction("records").objectStore("records").getAll(range));
    return (rows as { record: Stored }[]).map((r) => r.record);
  }

  drop(run: string, upTo: number): Promise<void> {
    return this.write("records", (store) => store.delete(IDBKeyRange.bound([run, 0], [run, upTo])));
  }
}

class MemoryShelf implements Shelf {
  readonly durable = false;
  private session: Session | null = null;
  private records: Stored[] = [];
  async saveSession(s: Session): Promise<void> {
    this.session = s;
  }
  async findSession(): Promise<Session | null> {
    return this.session;
  }
  async dropSession(): Promise<void> {
    this.session = null;
    this.records = [];
  }
  async put(_run: string, record: Stored): Promise<void> {
    this.records.push(record);
  }
  async all(): Promise<Stored[]> {
    return [...this.records];
  }
  async drop(_run: string, upTo: number): Promise<void> {
    this.records = this.records.filter((r) => r.sequence > upTo);
  }
}

export async function openShelf(): Promise<Shelf> {
  try {
    const open = indexedDB.open("distal", 1);
    open.onupgradeneeded = () => {
      open.result.createObjectStore("sessions", { keyPath: "study" });
      open.result.createObjectStore("records", { keyPath: ["run", "sequence"] });
    };
    return new DatabaseShelf(await request(open));
  } catch {
    return new MemoryShelf();
  }
}

export interface Answer {
  acknowledged: number;
  outcome: string | null;
  completion_code: string | null;
  return_url: string | null;
}

/** Most records and characters of one upload: the server takes 500 records and 2 MB. */
const parcelRecords = 100;
const parcelLength = 500_000;

/** Sends what waits, in order, and keeps trying. */
export class Outbox {
  private waiting: Stored[] = [];
  private sending: Promise<void> | null = null;
  private delayMs = 500;
  last: Answer | null = null;
  refused: string | null = null;
  onState: (state: "sending" | "sent" | "offline" | "refused") => void = () => {};

  constructor(private readonly shelf: Shelf, private readonly run: string, private readonly post: (records: Stored[]) => Promise<Answer>) {}

  /** Takes over what an earlier page left. */
  async recover(acknowledged: number): Promise<Stored[]> {
    await this.shelf.drop(this.run, acknowledged);
    this.waiting = (await this.shelf.all(this.run)).sort((a, b) => a.sequence - b.sequence);
    return [...this.waiting];
  }

  /** Keeps a record on the device, then begins to send. */
  async add(record: Stored): Promise<void> {
    await this.shelf.put(this.run, record);
    this.waiting.push(record);
    this.kick();
  }

  get pending(): number {
    return this.waiting.length;
  }

  kick(): void {
    this.sending ??= this.send().finally(() => (this.sending = null));
  }

  /** Waits until all is acknowledged; false when the server refuses it. */
  async flush(): Promise<boolean> {
    while (this.waiting.length > 0 && this.refused === null) {
      this.kick();
      await this.sending;
    }
    return this.refused === null;
  }

  /** The first records that wait: as many as one upload takes, one at least. */
  private parcel(): Stored[] {
    let length = 0;
    const n = this.waiting.findIndex((r, i) => i === parcelRecords || ((length += JSON.stringify(r).length) > parcelLength && i > 0));
    return n < 0 ? [...this.waiting] : this.waiting.slice(0, n);
  }

  private async send(): Promise<void> {
    while (this.waiting.length > 0) {
      this.onState("sending");
      try {
        const answer = await this.post(this.parcel());
        this.last = answer;
        await this.shelf.drop(this.run, answer.acknowledged);
        this.waiting = this.waiting.filter((r) => r.sequence > answer.acknowledged);
        this.delayMs = 500;
        this.onState("sent");
      } catch (e) {
        if (e instanceof Refused) {
          this.refused = e.message;
          this.onState("refused");
          return;
        }
        this.onState("offline");
        await new Promise((wake) => {
          const go = (): void => {
            clearTimeout(timer);
            removeEventListener("online", go);
            wake(null);
          };
          const timer = setTimeout(go, this.delayMs);
          addEventListener("online", go);
        });
        this.delayMs = Math.min(15_000, this.delayMs * 2);
      }
    }
  }
}

/** The server will never take it: trying again is useless. */
export class Refused extends Error {
  constructor(readonly code: string, message: string) {
    super(message);
  }
}
