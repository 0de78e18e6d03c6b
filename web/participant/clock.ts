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
