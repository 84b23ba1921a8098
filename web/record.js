// The record of the last day as the page holds it: four sums of time for each channel and stretch.
// Once a day is full it is told by quarter hours. A younger record is laid out from where it
// begins, at first by single minutes, so that there is something to see while it grows.
// A stretch without a record is unknown, never blank and never idle.

import { instant } from "./text.js";

const MINUTE_MS = 60 * 1000;
const QUARTER_MS = 15 * MINUTE_MS;
const DAY_MS = 24 * 60 * MINUTE_MS;
const SUMS = ["occupied_s", "idle_s", "unknown_s", "own_s", "observed_s"];
const NOTHING = [0, 0, 0, 0, 0];
// What a young record is laid out on: whole length and step. Each has a dozen columns or more.
const YOUNG_SHEETS = [[15, 1], [60, 5], [180, 15], [360, 15], [720, 15]]
  .map(([lengthMinutes, stepMinutes]) => [lengthMinutes * MINUTE_MS, stepMinutes * MINUTE_MS]);

/** The sums of time of every channel, in columns of one step. */
class Columns {
  constructor(stepMs) {
    this.stepMs = stepMs;
    this.channels = new Map();
    this.newestMs = null;
    this.toMs = null;
  }

  /** Takes an answer in; what it repeats is replaced. */
  take(answer) {
    const starts = (answer.start ?? []).map(instant);
    const known = starts.filter((startMs) => startMs !== null);
    if (known.length === 0) return;
    for (const channel of answer.channels ?? []) {
      if (!this.channels.has(channel.id)) this.channels.set(channel.id, new Map());
      const kept = this.channels.get(channel.id);
      starts.forEach((startMs, index) => {
        if (startMs === null) return;
        kept.set(floor(startMs, this.stepMs), SUMS.map((name) => channel[name]?.[index] ?? 0));
      });
    }
    this.newestMs = Math.max(this.newestMs ?? -Infinity, floor(Math.max(...known), this.stepMs));
    this.toMs = Math.max(this.toMs ?? -Infinity, instant(answer.to) ?? this.newestMs);
  }

  drop(beforeMs) {
    for (const kept of this.channels.values()) {
      for (const startMs of kept.keys()) {
        if (startMs < beforeMs) kept.delete(startMs);
      }
    }
  }

  /** Where the first column with anything known starts, and how much of it is known [ms]. */
  firstKnown() {
    let first = null;
    for (const kept of this.channels.values()) {
      for (const [startMs, [occupied_s, idle_s, , own_s]] of kept) {
        const knownMs = (occupied_s + idle_s + own_s) * 1000;
        if (knownMs === 0 || startMs > (first?.startMs ?? Infinity)) continue;
        const before = first?.startMs === startMs ? first.knownMs : 0;
        first = { startMs, knownMs: Math.max(before, knownMs) };
      }
    }
    return first;
  }
}

export class DayRecord {
  constructor() {
    this.clear();
  }

  /** Forgets everything, so that the next question asks for the whole day. */
  clear() {
    this.quarters = new Columns(QUARTER_MS);
    this.sheet = null;
    this.asked = null;
    /** Whether the newest answer reached the end of the record. */
    this.complete = false;
  }

  /**
   * The question to ask; null when there is nothing to ask yet. `committedMs` is how far the node
   * has written its record, `startedMs` when the node started (null when that is not known).
   * First comes the whole day, then only what may have changed, so that a page that is left open
   * over a metered link costs little.
   */
  path(committedMs, startedMs) {
    const dayMs = floor(committedMs, QUARTER_MS) + QUARTER_MS - DAY_MS;
    this.asked = { columns: this.quarters, committedMs, startedMs };
    if (this.quarters.newestMs === null) return path(dayMs, committedMs, QUARTER_MS);
    this.layOut(committedMs, startedMs);
    const { columns, beginMs, stepMs } = this.sheet;
    this.asked.columns = columns;
    // The last whole column is asked for once more: its end may have been written late.
    const knownMs = columns.newestMs ?? -Infinity;
    return path(Math.max(beginMs, knownMs - stepMs), committedMs, stepMs);
  }

  /** Chooses what the record is laid out on: the first sheet that still has room for it. */
  layOut(committedMs, startedMs) {
    const beginMs = this.begin(startedMs ?? committedMs);
    const young = YOUNG_SHEETS.find(([lengthMs, stepMs]) =>
      committedMs < floor(beginMs, stepMs) + lengthMs);
    const [lengthMs, stepMs] = young ?? [DAY_MS, QUARTER_MS];
    const fromMs = young ? floor(beginMs, stepMs)
      : floor(committedMs, QUARTER_MS) + QUARTER_MS - DAY_MS;
    const before = this.sheet;
    if (before?.fromMs === fromMs && before.endMs === fromMs + lengthMs) return;
    const fine = stepMs < QUARTER_MS;
    this.sheet = {
      fromMs, endMs: fromMs + lengthMs, stepMs, young: young !== undefined,
      beginMs: young ? beginMs : fromMs,
      columns: fine ? new Columns(stepMs) : this.quarters,
    };
  }

  /** Where the record begins: with the node, unless something older is on record. */
  begin(startedMs) {
    const first = this.quarters.firstKnown();
    if (first === null) return startedMs;
    const { startMs, knownMs } = first;
    const untilMs = Math.min(startMs + QUARTER_MS, this.quarters.toMs);
    const withNode = startedMs >= startMs && startedMs < untilMs
      && knownMs <= untilMs - startedMs;
    return withNode ? startedMs : startMs;
  }

  /** Takes in the answer to the newest question; one from before a `clear` is left out. */
  take(answer) {
    if (this.asked === null) return;
    const { columns, committedMs, startedMs } = this.asked;
    columns.take(answer);
    if (columns === this.quarters) {
      columns.drop(columns.newestMs + QUARTER_MS - DAY_MS);
      // The first answer says how old the record is. A young one is then asked for more finely.
      this.layOut(committedMs, startedMs);
    }
    this.complete = this.sheet.columns === columns;
  }

  /** What there is to show; null before the first answer. */
  shown() {
    if (this.sheet === null || this.sheet.columns.newestMs === null) return null;
    const { fromMs, endMs, stepMs, beginMs, young, columns } = this.sheet;
    return { fromMs, endMs, stepMs, beginMs, young, toMs: columns.toMs };
  }

  /** The sums of one column, and the time from and to which they count; null outside the record. */
  cell(id, startMs) {
    const { columns, stepMs, beginMs } = this.sheet;
    const fromMs = Math.max(startMs, beginMs);
    const toMs = Math.min(startMs + stepMs, columns.toMs);
    if (toMs <= fromMs) return null;
    const elapsed_s = (toMs - fromMs) / 1000;
    const sums = [...columns.channels.get(id)?.get(startMs) ?? [0, 0, elapsed_s, 0, 0]];
    // A whole quarter hour holds, as unknown, the time in it before the record began.
    const before_s = sums[0] + sums[1] + sums[2] + sums[3] - elapsed_s;
    if (startMs < beginMs && before_s > 0) sums[2] = Math.max(0, sums[2] - before_s);
    return { fromMs, toMs, ...named(sums) };
  }

  /** The sums of a channel over all that is shown. */
  total(id) {
    const { fromMs, stepMs, columns } = this.sheet;
    const cells = [];
    for (let startMs = fromMs; startMs <= columns.newestMs; startMs += stepMs) {
      cells.push(this.cell(id, startMs));
    }
    return addUp(cells.filter((cell) => cell !== null));
  }
}

/** Adds up cells, or the totals of several channels. */
export function addUp(totals) {
  return named(totals.reduce((sums, total) => SUMS.map((name, index) => sums[index] + total[name]),
    NOTHING));
}

function path(fromMs, toMs, stepMs) {
  if (fromMs >= toMs) return null;
  const range = [fromMs, toMs].map((ms) => new Date(ms).toISOString());
  return `v1/occupancy?resolution=${stepMs / MINUTE_MS}m&from=${range[0]}&to=${range[1]}`;
}

function floor(ms, stepMs) {
  return Math.floor(ms / stepMs) * stepMs;
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
