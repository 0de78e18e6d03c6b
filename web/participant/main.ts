// The participant's way through a study. The engine says what comes next;
// this page shows it, records what happens and passes the record on.
//
// Elements carry data-testid: page-NAME for every page, continue for its way
// on, and the names given to h() and button() elsewhere.

import { answerPanel, confidencePanel, type Panel } from "./answers.js";
import { call } from "./api.js";
import { cardPage, checkPage, distancePage, enterFullscreen } from "./calibrate.js";
import { browserClock, clockWatch } from "./clock.js";
import { Engine, type Measurement, type Step, type TrialPlan } from "./engine.js";
import { renderMarkdown, statements } from "./markdown.js";
import { known, say, setLanguage } from "./messages.js";
import { Outbox, Refused, openShelf, type Answer, type Session, type Shelf, type Stored } from "./outbox.js";
import { button, confirm, h, notice, pause, paragraphs, setFooter, show, tell } from "./page.js";
import { asCreatedRun, asRunState, asStart, asStudy, type RecordBody, type RunState, type Start, type StudyText } from "./protocol.js";
import { keyReminder } from "./keys.js";
import { inLanguage, questionsPage, screeningPage } from "./questions.js";
import { Renderer } from "./render.js";
import { runTrial, TrialInput, type Stage } from "./trial.js";
import { fetchVerified, NotVerified, sha256, verifyBundle, type SignedBundle } from "./verify.js";

/** Phones and tablets without a mouse or trackpad, missing WebGL2 and the like. */
function unfit(): "unfit_phone" | "unfit_webgl" | "unfit_browser" | null {
  if (typeof WebAssembly === "undefined" || !crypto?.subtle) return "unfit_browser";
  const coarse = matchMedia("(pointer: coarse)").matches && !matchMedia("(any-pointer: fine)").matches;
  if (coarse && Math.min(screen.width, screen.height) < 700) return "unfit_phone";
  const probe = document.createElement("canvas").getContext("webgl2");
  if (!probe) return "unfit_webgl";
  probe.getExtension("WEBGL_lose_context")?.loseContext();
  return null;
}

/** Whether this device has begun a run of the study: what went wrong is told accordingly. */
let begun = false;

class Participation {
  private engine!: Engine;
  private outbox!: Outbox;
  private session!: Session;
  private sequence = 0;
  private language: string;
  private renderer: Renderer | null = null;
  private readonly canvas = document.createElement("canvas");
  private readonly buttons = h("div", { class: "answers", test: "answers" });
  private readonly input = new TrialInput(window);
  private panel: Panel | null = null;
  private calibration = { cssPxPerMm: NaN, distanceMm: NaN, pixelRatio: NaN };
  private withdrawn = false;
  private inTrial = false;
  private ended = false;

  constructor(private readonly start: Start, private readonly study: StudyText, private readonly studyText: string, private readonly code: Promise<ArrayBuffer>, private readonly shelf: Shelf) {
    this.language = start.language;
  }

  private get key(): string {
    return this.start.invitation ?? this.start.link;
  }

  async run(): Promise<void> {
    const kept = await this.shelf.findSession(this.key);
    if (kept && (await this.resume(kept))) return this.walk();
    if (this.start.state !== "open") {
      const state = this.start.state === "draft" ? "closed" : this.start.state;
      return tell(state, say(`${state}_title`), say(state));
    }
    const bad = unfit();
    if (bad) return tell("unfit", say("unfit_title"), say(bad));
    if (!(await this.consent())) return tell("declined", say("declined_title"), say("declined"));
    return this.walk();
  }

  /** Takes up a run that this device began. False if there is none any more. */
  private async resume(kept: Session): Promise<boolean> {
    begun = true;
    let state: RunState;
    try {
      state = asRunState(await call("GET", "/api/run", { token: kept.token }));
    } catch (e) {
      if (!(e instanceof Refused)) throw e;
      await this.shelf.dropSession(this.key, kept.run);
      return false;
    }
    if (state.outcome === "withdrawn") {
      await this.shelf.dropSession(this.key, kept.run);
      return false;
    }
    if (kept.bundle !== this.start.bundle) throw new Error("bundle");
    this.language = kept.language;
    setLanguage(this.language);
    await this.begin(kept);
    const waiting = await this.outbox.recover(state.acknowledged);
    for (const record of [...state.records, ...(waiting as RecordBody[])]) this.take(record);
    this.outbox.kick();
    if (state.outcome === "completed") this.outbox.last = { acknowledged: state.acknowledged, outcome: state.outcome, completion_code: state.completion_code, return_url: state.return_url };
    else if (state.outcome === null) {
      await this.record("event", { name: "resumed", detail: "" });
      const step = this.next();
      if (["trial", "break", "questions"].includes(step.step)) {
        await pause("resumed", say("resumed"), [], say("fullscreen"));
        await enterFullscreen(this.study);
      }
    }
    return true;
  }

  private async begin(session: Session): Promise<void> {
    this.session = session;
    this.engine = await Engine.load(await this.code);
    this.engine.open(this.studyText, session.seed, session.group, session.order);
    this.outbox = new Outbox(this.shelf, session.run, async (records: Stored[]) => (await call("POST", "/api/run/records", { token: session.token, body: { records } })) as Answer);
    this.setFooter();
    this.watch();
  }

  /** Applies a record that is already stored. */
  private take(record: RecordBody): void {
    this.engine.apply(record);
    this.sequence = record.sequence;
    this.remember(record);
  }

  private remember(record: RecordBody): void {
    if (record.kind === "card") {
      this.calibration.cssPxPerMm = record["css_px_per_mm"] as number;
      this.calibration.pixelRatio = record["device_pixel_ratio"] as number;
    }
    if (record.kind === "distance") this.calibration.distanceMm = record["distance_mm"] as number;
  }

  private next(): Step {
    return this.engine.next();
  }

  private body(kind: string, content: Record<string, unknown>): RecordBody {
    return { sequence: this.sequence + 1, kind, at_ms: Date.now(), bundle: this.start.bundle, ...content };
  }

  /** Records something: engine first (it checks), then device, then server. */
  private async record(kind: string, content: Record<string, unknown>): Promise<void> {
    const body = this.body(kind, content);
    this.engine.apply(body);
    this.sequence++;
    this.remember(body);
    await this.outbox.add(body);
  }

  // Consent: the run begins with it, on the server, in one call.
  private async consent(): Promise<boolean> {
    const content = await this.consentPage();
    if (!content) return false;
    show("storing", say("storing"));
    await this.code; // nothing is recorded before the engine is here and verified
    const key = creationKey(this.key);
    const consent = this.body("consent", content);
    for (let delay = 500; ; delay = Math.min(8000, delay * 2)) {
      try {
        const created = asCreatedRun(await call("POST", "/api/runs", {
          key, body: { link: this.start.link, invitation: this.start.invitation, language: this.language, consent },
        }));
        const session: Session = { study: this.key, run: created.run, token: created.token, seed: created.seed, group: created.group, order: created.order, bundle: created.bundle, language: this.language };
        await this.shelf.saveSession(session);
        forgetCreationKey(this.key);
        await this.begin(session);
        this.take(consent);
        return true;
      } catch (e) {
        if (e instanceof Refused) {
          const name = e.code.startsWith("runs_once") ? "taken" : e.code;
          if (["taken", "full", "paused", "closed"].includes(name)) {
            tell(name, say(`${name}_title` as "taken_title"), say(name as "taken"));
            return new Promise(() => {});
          }
          throw e;
        }
        await new Promise((r) => setTimeout(r, delay));
      }
    }
  }

  private consentPage(): Promise<Record<string, unknown> | null> {
    return new Promise((resolve) => {
      const draw = (): void => {
        const texts = this.study.texts[this.language]!;
        const items = statements(texts.consent);
        const line = notice();
        const ticks = items.map((s, i) => {
          const box = h("input", { type: "checkbox", id: `statement-${i}`, test: `statement-${i}` });
          return h("label", { class: "tick", for: `statement-${i}` }, box, " ", renderMarkdown(s));
        });
        const languages = this.start.languages.length < 2 ? null : h("p", { class: "languages" }, `${say("language")}: `,
          ...this.start.languages.map((l) => button(new Intl.DisplayNames([l], { type: "language" }).of(l) ?? l, `language-${l}`, () => {
            this.language = l;
            setLanguage(l);
            draw();
          }, l === this.language ? "link current" : "link")));
        const agree = async (): Promise<void> => {
          if (!items.every((_, i) => (document.getElementById(`statement-${i}`) as HTMLInputElement).checked)) {
            line.textContent = say("consent_missing");
            return;
          }
          const digest = await sha256(new TextEncoder().encode(`${texts.information}\n${texts.consent}`));
          resolve({ text_digest: digest, text_version: texts.version, language: this.language, items: items.length });
        };
        const copy = h("a", {
          class: "link", download: `${this.start.link}-${texts.version}.md`, test: "consent-copy",
          href: URL.createObjectURL(new Blob([`${texts.information}\n${texts.consent}`], { type: "text/markdown" })),
        }, say("consent_copy"));
        show("consent", inLanguage(this.study.about.title_in ?? {}, this.language) || this.start.title, languages, h("div", { class: "text" }, renderMarkdown(texts.information)),
          h("h2", {}, say("consent_heading")), h("div", { class: "text" }, renderMarkdown(texts.consent, { lists: false })), ...ticks, line,
          h("div", { class: "actions" }, button(say("consent_decline"), "decline", () => resolve(null), "quiet"), button(say("consent_agree"), "agree", () => void agree())),
          h("p", {}, copy));
      };
      draw();
    });
  }

  private async walk(): Promise<void> {
    while (!this.withdrawn) {
      const step = this.next();
      if (step.step === "done" || step.step === "refused") {
        this.ended = true;
        return this.finish(step);
      }
      if (await this.zoomedBefore(step)) continue;
      await this.answer(step);
    }
  }

  private async answer(step: Step): Promise<void> {
    switch (step.step) {
      case "screening":
        return this.record("screening", await screeningPage(this.study, this.language));
      case "card":
        return this.record("card", await cardPage(this.engine, this.study));
      case "distance":
        return this.record("distance", await distancePage(this.engine, this.study, this.calibration.cssPxPerMm));
      case "display_check": {
        const outcome = await checkPage(this.engine, this.study, this.calibration, this.stageRenderer());
        if (outcome.content) return this.record("display_check", outcome.content);
        return this.record("refusal", { step: "display_check", reason: outcome.refused!.reason, detail: outcome.refused!.detail });
      }
      case "instructions":
        await pause("instructions", say("instructions_title"), [
          h("div", { class: "text" }, renderMarkdown(this.study.texts[this.language]!.instructions)), await keyReminder(this.study, this.language),
        ], say("begin"), ["Enter", "Space"]);
        return this.record("instructions", {});
      case "break":
        return this.takeBreak(step);
      case "trial":
        return this.trial(step.trial!);
      case "questions":
        return this.record("answers", { answers: await questionsPage(this.study, this.language) });
      case "debrief":
        if (document.fullscreenElement) await document.exitFullscreen();
        await pause("debrief", say("done_title"), [h("div", { class: "text" }, renderMarkdown(this.study.texts[this.language]!.debrief))], say("debrief_finish"));
        return this.record("debrief", {});
    }
    throw new Error(step.step);
  }

  private async takeBreak(step: Step): Promise<void> {
    const message = inLanguage(this.study.blocks[step.index]!.message, this.language);
    const percent = Math.round(100 * step.progress);
    const begins = this.seenBlock !== step.block;
    this.seenBlock = step.block;
    const title = begins && message !== "" ? say("part_title") : say("break_title");
    const lines = begins && message !== "" ? [h("p", {}, message)] : [h("p", {}, say("break_text", { percent }))];
    await pause("break", title, [...lines, h("progress", { max: "1", value: String(step.progress), "aria-label": say("trial_left", { percent }) })], say("continue"), ["Enter", "Space"]);
    await enterFullscreen(this.study);
    return this.record("break", {});
  }

  private seenBlock = "";

  private readonly clockStep = clockWatch(() => Date.now(), () => performance.now());

  // Trials.

  private stageRenderer(): Renderer {
    const geometry = {
      devicePxPerMm: this.calibration.cssPxPerMm * this.calibration.pixelRatio, distanceMm: this.calibration.distanceMm,
      backgroundFraction: this.study.screen.background_fraction, gamma: null,
    };
    if (this.renderer) this.renderer.setGeometry(geometry);
    else {
      this.renderer = new Renderer(this.canvas, geometry);
      this.canvas.addEventListener("webglcontextlost", (e) => {
        e.preventDefault();
        this.input.interrupt("context_lost");
        this.renderer = null;
      });
      // What a renderer made in between has is lost as well: drawing with it would show nothing.
      this.canvas.addEventListener("webglcontextrestored", () => (this.renderer = null), { once: true });
    }
    return this.renderer;
  }

  private showCanvas(plan: TrialPlan): Renderer {
    const renderer = this.stageRenderer();
    document.body.className = "trial";
    const task = this.study.tasks[plan.task]!;
    this.panel = answerPanel(task, this.input, this.language);
    this.buttons.replaceChildren(...this.panel.elements);
    this.buttons.hidden = true;
    const root = document.getElementById("distal")!;
    if (!this.canvas.isConnected) root.replaceChildren(this.canvas, this.buttons);
    renderer.resize(Math.round(innerWidth * devicePixelRatio), Math.round(innerHeight * devicePixelRatio));
    return renderer;
  }

  private async trial(plan: TrialPlan): Promise<void> {
    const renderer = this.showCanvas(plan);
    const task = this.study.tasks[plan.task]!;
    this.canvas.dataset["trial"] = String(plan.number);
    this.canvas.dataset["phase"] = "running";
    const stage: Stage = {
      clock: browserClock,
      begin: () => this.engine.beginTrial(),
      fixation: () => this.engine.fixation(),
      frame: (n) => this.engine.frame(n),
      draw: (list) => renderer.draw(list),
      lost: () => renderer.lost,
      // A screen with another pixel ratio may leave the window's size as it is: no event tells.
      rescaled: () => devicePixelRatio !== this.calibration.pixelRatio,
      awaitAnswer: (yes) => {
        this.buttons.hidden = !yes;
        this.canvas.dataset["phase"] = yes ? "answer" : "over";
      },
      adjust: (x) => this.engine.adjust(x),
      turn: (deg) => this.panel!.turn(deg),
      ask: (yes) => {
        this.buttons.hidden = !yes;
        if (!yes) return;
        this.buttons.replaceChildren(...confidencePanel(task, this.input, this.language));
        this.canvas.dataset["phase"] = "confidence";
      },
    };
    this.inTrial = true;
    const choices = task.choices_order.map((name) => ({ name, keys: task.choices[name]!.keys }));
    const m = await runTrial(stage, this.input, plan, { responseWindowMs: task.response_window_ms, respondDuring: task.respond_during, choices, answer: task.answer, confidenceSteps: task.confidence?.steps });
    this.inTrial = false;
    await this.recordTrial(m);
    const stepMs = this.clockStep();
    if (stepMs !== 0) this.event("clock_set", String(stepMs));
    if (m.interrupted !== "") return this.interrupted(m);
    await this.afterTrial(plan, m, renderer, task.intertrial_ms);
  }

  private async recordTrial(m: Measurement): Promise<void> {
    const body: RecordBody = { ...this.engine.finishTrial(m), ...this.body("trial", {}) };
    this.engine.apply(body);
    this.sequence++;
    await this.outbox.add(body);
  }

  private async afterTrial(plan: TrialPlan, m: Measurement, renderer: Renderer, intertrialMs: number): Promise<void> {
    const task = this.study.tasks[plan.task]!;
    if (plan.feedback && m.response !== null) {
      const right = m.response === task.choices_order[plan.correct_choice];
      const word = h("p", { class: right ? "verdict right" : "verdict", role: "status", test: "verdict" }, say(right ? "right" : "wrong"));
      renderer.draw(null);
      document.getElementById("distal")!.append(word);
      await new Promise((r) => setTimeout(r, 700));
      word.remove();
    } else renderer.draw(null);
    await new Promise((r) => setTimeout(r, intertrialMs));
  }

  private async interrupted(m: Measurement): Promise<void> {
    await this.pendingEvents;
    const escape = m.interrupted === "escape";
    if (escape && document.fullscreenElement) await document.exitFullscreen();
    await pause("interrupted", say("paused_trial_title"), [h("p", {}, say(escape ? "paused_trial_escape" : "paused_trial"))], say("fullscreen"));
    await enterFullscreen(this.study);
  }

  // Events.

  private watch(): void {
    this.canvas.addEventListener("pointermove", (e) => {
      if ((e.buttons & 1) !== 0) this.input.drag(e.movementX / innerWidth, e);
    });
    let hidden = false;
    document.addEventListener("visibilitychange", () => {
      if (document.hidden === hidden) return;
      hidden = document.hidden;
      this.event(hidden ? "hidden" : "visible");
    });
    addEventListener("blur", () => this.event("focus_lost"));
    addEventListener("focus", () => this.event("focus_gained"));
    document.addEventListener("fullscreenchange", () => {
      const left = !document.fullscreenElement;
      this.event(left ? "fullscreen_left" : "fullscreen_entered");
      if (left && this.inTrial) this.input.interrupt("fullscreen_left");
    });
    addEventListener("resize", () => {
      if (!this.inTrial) return;
      this.input.interrupt(devicePixelRatio === this.calibration.pixelRatio ? "resized" : "zoomed");
    });
    addEventListener("pagehide", () => this.outbox.kick());
    // Escape leaves full screen on every page; during a trial it stops the display first.
    addEventListener("keydown", (e) => {
      if (e.code === "Escape" && !this.inTrial && document.fullscreenElement && !document.querySelector("dialog[open]")) void document.exitFullscreen();
    });
  }

  private pendingEvents: Promise<void> = Promise.resolve();

  private event(name: string, detail = ""): void {
    if (this.ended || this.withdrawn || this.inTrial) return;
    this.pendingEvents = this.pendingEvents.then(() => this.record("event", { name, detail })).catch(() => {});
  }

  /** Another zoom or screen since the card was set needs the calibration again: the engine asks for it. */
  private async zoomedBefore(step: Step): Promise<boolean> {
    if (!["distance", "display_check", "instructions", "break", "trial"].includes(step.step) || devicePixelRatio === this.calibration.pixelRatio) return false;
    await this.pendingEvents;
    await this.record("event", { name: "zoomed", detail: String(devicePixelRatio) });
    return true;
  }

  // The way out and the end.

  private setFooter(): void {
    const state = h("span", { class: "state", role: "status", test: "state" }, this.shelf.durable ? "" : say("memory_only"));
    this.outbox.onState = (s) => {
      state.textContent = s === "offline" ? say("offline") : s === "refused" ? say("refused_upload", { what: this.outbox.refused ?? "" }) : this.shelf.durable ? "" : say("memory_only");
    };
    setFooter(h("footer", {}, state, button(say("withdraw"), "withdraw", () => void this.withdraw(), "link")));
  }

  private async withdraw(): Promise<void> {
    if (!(await confirm(say("withdraw_ask"), say("withdraw_yes"), say("withdraw_no")))) return;
    try {
      await call("POST", "/api/run/withdraw", { token: this.session.token, body: {} });
    } catch (e) {
      return this.withdrawFailed(e instanceof Refused ? say("withdraw_refused", { what: e.message }) : say("withdraw_offline"));
    }
    this.withdrawn = true;
    await this.shelf.dropSession(this.key, this.session.run);
    if (document.fullscreenElement) await document.exitFullscreen();
    setFooter(null);
    tell("withdrawn", say("withdrawn_title"), say("withdrawn"));
  }

  /** Nothing was deleted: say so, and say it where it is seen. */
  private withdrawFailed(text: string): void {
    document.querySelector(".withdraw-failed")?.remove();
    document.querySelector("footer")?.before(h("p", { class: "notice withdraw-failed", role: "alert", test: "withdraw-failed" }, text));
  }

  private async finish(step: Step): Promise<void> {
    if (document.fullscreenElement) await document.exitFullscreen();
    if (step.step === "refused") {
      if (this.next().step === "refused" && !this.refusalRecorded) await this.recordRefusal(step);
      await this.outbox.flush();
      const key = `refused_${step.code}`;
      return tell("refused", say("refused_title"), known(key) ? say(key) : say("refused_screen"), say("refused_note"));
    }
    show("finishing", say("finishing"));
    if (!(await this.outbox.flush())) throw new Error(this.outbox.refused ?? "");
    const code = this.outbox.last?.completion_code ?? "";
    const address = this.outbox.last?.return_url ?? null;
    const copied = h("span", { role: "status" });
    show("done", say("done_title"), ...paragraphs("done_stored"), h("p", {}, say("done_code"), h("output", { class: "code", test: "code" }, code)),
      h("p", { class: "small" }, say("done_keep")),
      h("div", { class: "actions" },
        button(say("done_copy"), "copy-code", () => void navigator.clipboard?.writeText(code).then(() => (copied.textContent = say("done_copied"))), "quiet"),
        ...(address ? [h("a", { class: "button", href: address, test: "return", rel: "noreferrer" }, say("done_return"))] : [])), copied);
  }

  private refusalRecorded = false;

  private async recordRefusal(step: Step): Promise<void> {
    this.refusalRecorded = true;
    if (this.outbox.last?.outcome === "refused") return;
    try {
      await this.record("refusal", { step: "run", reason: step.code, detail: "" });
    } catch {
      // The engine has the refusal already: it was recorded before.
    }
  }
}

async function load(start: Start): Promise<{ study: StudyText; studyText: string; code: Promise<ArrayBuffer> }> {
  const [signed, keys] = await Promise.all([
    call("GET", `/api/bundles/${start.bundle}`) as Promise<SignedBundle>,
    call("GET", "/api/keys") as Promise<{ keys: JsonWebKey[] }>,
  ]);
  const assets = await verifyBundle(signed, keys.keys, start.bundle);
  await Promise.all([
    fetchVerified(start.assets.participant_js, assets["participant_js"]!, "participant_js"),
    fetchVerified(start.assets.participant_css, assets["participant_css"]!, "participant_css"),
  ]);
  // The engine arrives while people read; it is used only if it is what was signed.
  const code = fetchVerified(start.assets.engine, assets["engine"]!, "engine");
  code.catch(() => {});
  const study = (JSON.parse(signed.bundle) as { study: unknown }).study;
  return { study: asStudy(study), studyText: JSON.stringify(study), code };
}

async function main(): Promise<void> {
  const start = asStart(JSON.parse(document.getElementById("distal-start")!.textContent!));
  setLanguage(start.language);
  try {
    if (!crypto?.subtle) return tell("unfit", say("unfit_title"), say("unfit_browser"));
    const { study, studyText, code } = await load(start);
    const shelf = await openShelf();
    const alone = await takeTurn(start.link);
    if (!alone) return tell("other-tab", say("other_tab_title"), say("other_tab"));
    await new Participation(start, study, studyText, code, shelf).run();
  } catch (e) {
    if (document.fullscreenElement) await document.exitFullscreen();
    setFooter(null);
    console.error(e);
    if (e instanceof NotVerified) tell("not-verified", say("not_verified_title"), say(begun ? "not_verified_later" : "not_verified", { what: e.message }));
    else tell("failed", say("failed_title"), say("failed", { what: e instanceof Error ? e.message : String(e) }));
  }
}

// The key that makes the beginning of a run idempotent outlives the page: if the
// server's answer is lost, agreeing again gives the same run and not a second one.

function creationKey(study: string): string {
  const name = `distal-begin-${study}`;
  try {
    const kept = localStorage.getItem(name) ?? crypto.randomUUID();
    localStorage.setItem(name, kept);
    return kept;
  } catch {
    return crypto.randomUUID();
  }
}

function forgetCreationKey(study: string): void {
  try {
    localStorage.removeItem(`distal-begin-${study}`);
  } catch {
    // Nothing was kept.
  }
}

/** One tab at a time: the lock is held as long as this page lives. */
function takeTurn(link: string): Promise<boolean> {
  if (!navigator.locks) return Promise.resolve(true);
  return new Promise((resolve) => {
    void navigator.locks.request(`distal-${link}`, { ifAvailable: true }, (lock) => {
      resolve(lock !== null);
      return lock ? new Promise<void>(() => {}) : undefined;
    });
  });
}

void main();
