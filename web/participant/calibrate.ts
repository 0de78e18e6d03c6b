// Calibration pages: card, viewing distance, display check. What settings mean
// is computed by the engine; these pages only take them.

import { browserClock, measureIntervals } from "./clock.js";
import type { Engine } from "./engine.js";
import { figure, known, say } from "./messages.js";
import { button, h, meantForControl, notice, show } from "./page.js";
import type { StudyText } from "./protocol.js";

const cardWidthMm = 85.6; // ISO/IEC 7810 ID-1
const cardAspect = 85.6 / 53.98;
const cornerMm = 3.18;

type Content = Record<string, unknown>;

/** Card settings, repeated, until they agree. */
export async function cardPage(engine: Engine, study: StudyText): Promise<Content> {
  const wanted = study.screen.card_repeats;
  let attempts = 0;
  let complaint = "";
  for (;;) {
    const widths: number[] = [];
    while (widths.length < wanted) {
      attempts++;
      widths.push(await oneCard(widths.length + 1, wanted, complaint));
    }
    const content = { widths_css_px: widths, device_pixel_ratio: devicePixelRatio };
    const verdict = engine.calibrate("card", content);
    if (verdict.accepted) {
      return {
        ...content,
        screen_width_css_px: screen.width,
        screen_height_css_px: screen.height,
        css_px_per_mm: verdict.css_px_per_mm,
        sd_css_px_per_mm: verdict.sd_css_px_per_mm,
        attempts,
      };
    }
    const key = `card_again_${verdict.reason}`;
    complaint = known(key) ? say(key) : say("card_again_card_spread");
    if (verdict.reason === "card_spread" && verdict.css_px_per_mm !== null && verdict.sd_css_px_per_mm !== null) {
      complaint += ` ${say("card_spread", { width: (cardWidthMm * verdict.css_px_per_mm).toFixed(0), sd: (cardWidthMm * verdict.sd_css_px_per_mm).toFixed(0) })}`;
    }
  }
}

function oneCard(n: number, of: number, complaint: string): Promise<number> {
  return new Promise((resolve) => {
    // Another start each time, so that settings are independent.
    let width = Math.round((0.55 + 0.9 * Math.random()) * 323);
    const low = 90;
    const high = Math.min(1600, innerWidth - 40);
    width = Math.min(width, high);
    const card = h("div", { class: "card", test: "card" });
    const handle = h("div", {
      class: "handle", test: "card-handle", tabindex: "0", role: "slider", "aria-label": say("card_label"),
      "aria-valuemin": String(low), "aria-valuemax": String(high),
    });
    card.append(handle);
    const draw = (): void => {
      card.style.width = `${width}px`;
      card.style.height = `${width / cardAspect}px`;
      card.style.borderRadius = `${(cornerMm / cardWidthMm) * width}px`;
      handle.setAttribute("aria-valuenow", String(width));
      card.dataset["width"] = String(width);
    };
    const set = (w: number): void => {
      width = Math.min(high, Math.max(low, Math.round(w * 2) / 2));
      draw();
    };
    const key = (e: KeyboardEvent): void => {
      const step = e.shiftKey ? 10 : 1;
      if (e.code === "ArrowRight" || e.code === "ArrowUp") set(width + step);
      else if (e.code === "ArrowLeft" || e.code === "ArrowDown") set(width - step);
      else if (e.code === "Enter" && !e.repeat && !meantForControl(e)) return finish();
      else return;
      e.preventDefault();
    };
    handle.addEventListener("pointerdown", (e) => {
      handle.setPointerCapture(e.pointerId);
      const left = card.getBoundingClientRect().left;
      const grip = e.clientX - left - width;
      const move = (m: PointerEvent): void => set(m.clientX - left - grip);
      handle.addEventListener("pointermove", move);
      handle.addEventListener("pointerup", () => handle.removeEventListener("pointermove", move), { once: true });
    });
    const finish = (): void => {
      removeEventListener("keydown", key);
      resolve(width);
    };
    addEventListener("keydown", key);
    const complaintLine = notice();
    complaintLine.textContent = n === 1 ? complaint : "";
    draw();
    show(
      "card", say("card_title"), complaintLine, h("p", {}, say("card_text")),
      h("p", { class: "small" }, say("card_nth", { n, of }), " ", say("card_keys")), h("div", { class: "card-place" }, card),
      h("div", { class: "actions" }, button(say("continue"), "continue", finish)),
      h("p", { class: "small" }, say("card_privacy")),
    );
    handle.focus({ preventScroll: true });
  });
}

/** The viewing distance, stated or by the blind spot. */
export async function distancePage(engine: Engine, study: StudyText, cssPxPerMm: number): Promise<Content> {
  if (study.screen.distance_method === "stated") return statedPage(engine, study);
  let complaint = "";
  for (;;) {
    await blindIntroduction(complaint);
    // Seen from far away, the blind spot does not fit in a narrow window.
    if (dotReach(cssPxPerMm) < leastReachMm * cssPxPerMm) await enterFullscreen(study);
    if (dotReach(cssPxPerMm) < leastReachMm * cssPxPerMm) {
      complaint = say("blind_narrow");
      continue;
    }
    const offsets: number[] = [];
    await blindTrial(0, study.screen.distance_repeats, cssPxPerMm, "");
    let warning = "";
    while (offsets.length < study.screen.distance_repeats) {
      const offset = await blindTrial(offsets.length + 1, study.screen.distance_repeats, cssPxPerMm, warning);
      warning = offset === null ? say("blind_letter_wrong") : "";
      if (offset !== null) offsets.push(offset);
    }
    const verdict = engine.calibrate("distance", { offsets_mm: offsets });
    if (verdict.accepted) return { method: "blind_spot", offsets_mm: offsets, eye: "left", distance_mm: verdict.distance_mm, sd_mm: verdict.sd_mm };
    complaint = say("blind_again");
  }
}

async function statedPage(engine: Engine, study: StudyText): Promise<Content> {
  const cm = Math.round(study.screen.stated_distance_mm / 10);
  await new Promise<void>((resolve) => {
    show("distance", say("stated_title"), h("p", {}, say("stated_text", { cm })),
      h("div", { class: "actions" }, button(say("stated_done", { cm }), "continue", () => resolve())));
  });
  const verdict = engine.calibrate("distance", { offsets_mm: [] });
  return { method: "stated", offsets_mm: [], eye: "", distance_mm: verdict.distance_mm, sd_mm: verdict.sd_mm };
}

function blindIntroduction(complaint: string): Promise<void> {
  return new Promise((resolve) => {
    const line = notice();
    line.textContent = complaint;
    const key = (e: KeyboardEvent): void => {
      if (e.code !== "Space" || e.repeat || meantForControl(e)) return;
      e.preventDefault();
      finish();
    };
    const finish = (): void => {
      removeEventListener("keydown", key);
      resolve();
    };
    addEventListener("keydown", key);
    show("distance", say("blind_title"), line, h("p", {}, say("blind_text")),
      h("div", { class: "actions" }, button(say("blind_start"), "continue", finish)));
  });
}

const leastReachMm = 200; // the far edge of the blind spot at 60 cm: 18.5 deg

/** How far the dot can move away from the mark, in css px. */
function dotReach(cssPxPerMm: number): number {
  return Math.min(innerWidth - 120, 320 * cssPxPerMm);
}

// Letters that are hard to confuse.
const letters = "AEHKMRTX";

/**
 * One pass of the moving dot; gives the distance (mm) between mark and dot when
 * it vanished, or null when the letter at fixation was reported wrongly. n = 0
 * is practice, without the letter.
 */
async function blindTrial(n: number, of: number, cssPxPerMm: number, warning: string): Promise<number | null> {
  const reach = dotReach(cssPxPerMm);
  const line = notice();
  line.textContent = warning;
  const mark = h("div", { class: "mark", test: "blind-mark", "aria-hidden": "true" });
  const dot = h("div", { class: "wanderer", test: "blind-dot" });
  const field = h("div", { class: "blind" }, mark, dot);
  show("distance-trial", n === 0 ? say("blind_title") : say("blind_nth", { n, of }), line, h("p", {}, say("blind_now")), field);
  const letter = letters[Math.floor(Math.random() * letters.length)]!;
  const speed = 28 * cssPxPerMm; // css px per s: a little under 3 deg/s at usual distances
  const first = (60 + 25 * Math.random()) * cssPxPerMm; // where the dot sets out, so that the time gives nothing away
  const offset = await new Promise<number>((resolve) => {
    let at = first;
    let last = NaN;
    let handle = 0;
    const frame = (now: number): void => {
      if (!Number.isNaN(last)) at += (speed * Math.min(100, now - last)) / 1000;
      last = now;
      if (at > reach) at = first; // it was missed: once more
      dot.style.transform = `translateX(${-at}px)`;
      dot.dataset["offsetPx"] = String(at);
      handle = requestAnimationFrame(frame);
    };
    const key = (e: KeyboardEvent): void => {
      if (e.code !== "Space" || e.repeat || meantForControl(e)) return;
      e.preventDefault();
      removeEventListener("keydown", key);
      cancelAnimationFrame(handle);
      resolve(at);
    };
    addEventListener("keydown", key);
    handle = requestAnimationFrame(frame);
  });
  const mm = Math.round((100 * offset) / cssPxPerMm) / 100;
  if (n === 0) return mm;
  mark.textContent = letter;
  mark.dataset["letter"] = letter;
  dot.remove();
  await new Promise((r) => setTimeout(r, 250));
  mark.textContent = "";
  const said = await askLetter();
  return said === letter ? mm : null;
}

function askLetter(): Promise<string> {
  return new Promise((resolve) => {
    const finish = (letter: string): void => {
      removeEventListener("keydown", key);
      resolve(letter);
    };
    const key = (e: KeyboardEvent): void => {
      const letter = e.key.toUpperCase();
      if (!e.repeat && letters.includes(letter)) finish(letter);
    };
    addEventListener("keydown", key);
    show("distance-letter", say("blind_letter"),
      h("div", { class: "letters" }, ...[...letters].map((l) => button(l, `letter-${l}`, () => finish(l), "choice"))));
  });
}

/** Asks for full screen where the study wants it and the browser can; needs a user's action. */
export async function enterFullscreen(study: StudyText): Promise<void> {
  if (!study.screen.fullscreen || document.fullscreenElement || !document.fullscreenEnabled) return;
  try {
    await document.documentElement.requestFullscreen({ navigationUI: "hide" });
    // Where the browser can, Escape comes to the page first: a display stops within a frame.
    await (navigator as { keyboard?: { lock?: (keys: string[]) => Promise<void> } }).keyboard?.lock?.(["Escape"]);
    await new Promise((r) => setTimeout(r, 300)); // until the window has settled
  } catch {
    // Refused: the display check sees whether the window is large enough.
  }
}

export interface CheckOutcome {
  content?: Content;
  refused?: { reason: string; detail: string };
}

/** Measures the display against what the study needs; the participant may try again. */
export async function checkPage(engine: Engine, study: StudyText, calibration: { cssPxPerMm: number; distanceMm: number }, renderer: { floatTarget: boolean; name: string }): Promise<CheckOutcome> {
  let complaint = "";
  let outcome = "";
  for (let attempt = 0; ; attempt++) {
    const go = await new Promise<boolean>((resolve) => {
      const line = notice();
      line.textContent = complaint;
      show("check", say("check_title"), line, h("p", {}, say("check_text")),
        h("div", { class: "actions" },
          ...(attempt > 0 ? [button(say("check_stop"), "check-stop", () => resolve(false), "quiet")] : []),
          button(attempt === 0 ? say("check_start") : say("check_again"), "continue", () => resolve(true))));
    });
    if (!go) return { refused: { reason: outcome, detail: complaint } };
    await enterFullscreen(study);
    const bar = h("progress", { max: "1", value: "0", "aria-label": say("check_running") }) as HTMLProgressElement;
    show("check-running", say("check_title"), h("p", {}, say("check_running")), bar);
    await measureIntervals(browserClock, 30, () => {}); // settle
    const intervals = await measureIntervals(browserClock, 150, (share) => (bar.value = share));
    const refresh = engine.calibrate("refresh", { intervals_ms: intervals });
    const field = engine.calibrate("field", {
      width_mm: innerWidth / calibration.cssPxPerMm, height_mm: innerHeight / calibration.cssPxPerMm, distance_mm: calibration.distanceMm,
    });
    const content = {
      refresh_ms: refresh.refresh_ms ?? 1, jitter_ms: refresh.jitter_ms ?? 0, dropped_percent: refresh.dropped_percent ?? 100,
      frames: refresh.frames, width_deg: field.width_deg, height_deg: field.height_deg,
      canvas_width_px: Math.round(innerWidth * devicePixelRatio), canvas_height_px: Math.round(innerHeight * devicePixelRatio),
      device_pixel_ratio: devicePixelRatio, float_target: renderer.floatTarget, renderer: renderer.name, cross_origin_isolated: crossOriginIsolated,
    };
    const verdict = engine.calibrate("check", content);
    if (verdict.accepted) return { content };
    outcome = verdict.reason;
    complaint = explain(verdict.reason, content, study);
  }
}

function explain(reason: string, c: { refresh_ms: number; jitter_ms: number; dropped_percent: number; width_deg: number; height_deg: number }, study: StudyText): string {
  const s = study.screen;
  const hz = figure(1000 / c.refresh_ms, 1);
  switch (reason) {
    case "refresh_low": return say("reason_refresh_low", { measured: hz, needed: s.min_refresh_hz });
    case "refresh_high": return say("reason_refresh_high", { measured: hz, needed: s.max_refresh_hz });
    case "jitter": return say("reason_jitter", { measured: figure(c.jitter_ms, 1), needed: s.max_jitter_ms });
    case "dropped": return say("reason_dropped", { measured: c.dropped_percent.toFixed(0), needed: s.max_dropped_percent });
    case "field_small": return say("reason_field_small", { measured: `${c.width_deg.toFixed(0)} × ${c.height_deg.toFixed(0)}`, needed: `${s.min_width_deg} × ${s.min_height_deg}` });
  }
  return say(reason === "no_float" ? "reason_no_float" : "reason_not_measured");
}
