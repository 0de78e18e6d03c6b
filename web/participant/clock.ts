// The frame clock and what is computed from it. Everything that waits for the
// screen goes through FrameClock, so that tests can replace it.

/** Gives frames; times are ms of the page's performance clock. */
export interface FrameClock {
  request(callback: (nowMs: number) => void): number;
  cancel(handle: number): void;
  now(): number;
}

export const browserClock: FrameClock = {
  request: (callback) => requestAnimationFrame(callback),
  cancel: (handle) => cancelAnimationFrame(handle),
  now: () => performance.now(),
};

/** Refresh intervals between two presented frames, at least 1. */
export function stepsBetween(deltaMs: number, refreshMs: number): number {
  return Math.max(1, Math.round(deltaMs / refreshMs));
}

/**
 * The time of a frame whose callback runs at nowMs. A browser that was held up
 * gives the frame the time at which it was due: what is drawn now cannot be
 * seen before the last refresh that has passed, so whole refreshes are added.
 */
export function frameTime(stampMs: number, nowMs: number, refreshMs: number): number {
  const late = nowMs - stampMs;
  // Up to one and a half refreshes are the usual delay of a callback.
  return late < 1.5 * refreshMs ? stampMs : stampMs + Math.floor(late / refreshMs) * refreshMs;
}

/** Tells by how much (ms) the clock of the day was set since it was last asked, 0 for less than half a second. */
export function clockWatch(day: () => number, page: () => number): () => number {
  let before = day() - page();
  return () => {
    const now = day() - page();
    const step = now - before;
    if (Math.abs(step) < 500) return 0;
    before = now;
    return Math.round(step);
  };
}

/** Collects the intervals (ms) between n + 1 successive frames. */
export function measureIntervals(clock: FrameClock, n: number, progress: (share: number) => void): Promise<number[]> {
  return new Promise((resolve) => {
    const intervals: number[] = [];
    let last = NaN;
    const frame = (now: number): void => {
      if (!Number.isNaN(last)) intervals.push(Math.round((now - last) * 1000) / 1000);
      last = now;
      progress(intervals.length / n);
      if (intervals.length < n) clock.request(frame);
      else resolve(intervals);
    };
    clock.request(frame);
  });
}
