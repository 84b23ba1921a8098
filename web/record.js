// The record of the last day as the page holds it: four sums of time for each channel and quarter
// hour. A quarter hour without a record is unknown, never blank and never idle.

import { instant } from "./text.js";

export const QUARTER_MS = 15 * 60 * 1000;
export const DAY_MS = 24 * 60 * 60 * 1000;
const SUMS = ["occupied_s", "idle_s", "unknown_s", "own_s", "observed_s"];
const SPANS_MS = [3, 6, 12, 24].map((hours) => hours * 60 * 60 * 1000);

export class DayRecord {
  constructor() {
    this.clear();
  }

  /** Forgets everything, so that the next question asks for the whole day. */
  clear() {
    this.quarters = new Map();
    this.newestMs = null;
    this.toMs = null;
  }

  /**
   * The question to ask at `nowMs`: the whole day first, then only the newest two quarter hours, so
   * that a page left open over a metered link costs little.
   */
  path(nowMs) {
    const dayMs = endOfQuarter(nowMs) - DAY_MS;
    const fromMs = this.newestMs === null ? dayMs : Math.max(dayMs, this.newestMs - QUARTER_MS);
    return `v1/occupancy?resolution=15m&from=${new Date(fromMs).toISOString()}`;
  }

  /** Takes an answer in; quarter hours that it repeats are replaced. */
  take(answer) {
    const starts = (answer.start ?? []).map(instant);
    for (const channel of answer.channels ?? []) {
      if (!this.quarters.has(channel.id)) this.quarters.set(channel.id, new Map());
      const kept = this.quarters.get(channel.id);
      starts.forEach((startMs, index) => {
        if (startMs === null) return;
        kept.set(startMs, SUMS.map((name) => channel[name]?.[index] ?? 0));
      });
    }
    const known = starts.filter((startMs) => startMs !== null);
    if (known.length === 0) return;
    this.newestMs = Math.max(...known);
    this.toMs = instant(answer.to) ?? this.newestMs + QUARTER_MS;
    this.drop(this.newestMs + QUARTER_MS - DAY_MS);
  }

  drop(beforeMs) {
    for (const kept of this.quarters.values()) {
      for (const startMs of kept.keys()) {
        if (startMs < beforeMs) kept.delete(startMs);
      }
    }
  }

  /** The sums of one quarter hour, with its elapsed time [s]; null when it lies ahead. */
  quarter(id, startMs) {
    const elapsed = Math.min(QUARTER_MS, this.toMs - startMs) / 1000;
    if (elapsed <= 0) return null;
    const sums = this.quarters.get(id)?.get(startMs);
    return named(sums ?? [0, 0, elapsed, 0, 0]);
  }

  /** The stretch to show: the shortest of a few round spans that holds the whole record. */
  stretch() {
    const endMs = this.newestMs + QUARTER_MS;
    let firstMs = endMs;
    for (const kept of this.quarters.values()) {
      for (const [startMs, sums] of kept) {
        if (startMs < firstMs && (sums[0] > 0 || sums[1] > 0 || sums[3] > 0)) firstMs = startMs;
      }
    }
    const span = SPANS_MS.find((candidate) => endMs - candidate <= firstMs) ?? DAY_MS;
    return { fromMs: endMs - span, endMs, toMs: this.toMs, firstMs };
  }

  /** The sums of a channel from `fromMs` on. */
  total(id, fromMs) {
    const sums = [0, 0, 0, 0, 0];
    for (let startMs = fromMs; startMs <= this.newestMs; startMs += QUARTER_MS) {
      const quarter = this.quarter(id, startMs);
      if (quarter) SUMS.forEach((name, index) => { sums[index] += quarter[name]; });
    }
    return named(sums);
  }
}

/** Adds up the totals of several channels. */
export function addUp(totals) {
  return named(totals.reduce((sums, total) => SUMS.map((name, index) => sums[index] + total[name]),
    [0, 0, 0, 0, 0]));
}

/** The end of the quarter hour in which a moment lies. */
function endOfQuarter(ms) {
  return (Math.floor(ms / QUARTER_MS) + 1) * QUARTER_MS;
}

function named(sums) {
  const [occupied_s, idle_s, unknown_s, own_s, observed_s] = sums;
  const elapsed_s = occupied_s + idle_s + unknown_s + own_s;
  const known_s = occupied_s + idle_s;
  return {
    occupied_s, idle_s, unknown_s, own_s, observed_s, elapsed_s,
    occupancy: known_s > 0 ? occupied_s / known_s : null,
    unknown_share: elapsed_s > 0 ? unknown_s / elapsed_s : 1,
    own_share: elapsed_s > 0 ? own_s / elapsed_s : 0,
  };
}
