// The picture of the last day: time from left to right, one channel a row, drawn as a stroke that
// is the thicker the more of each stretch was occupied. What is unknown is hatched, and a stretch
// without a record is hatched too; what is yet to come is bare paper, without the ground on which
// idle is drawn. The drawing is vectors, so it prints as sharp as text.

import { addUp } from "./record.js";
import { byId, make, setAttribute, setText } from "./dom.js";
import {
  duration, megahertz, percent, stretch, stretchName, utcDay, utcMinute, utcTime,
} from "./text.js";

const MINUTE_MS = 60 * 1000;
const HOUR_MS = 60 * MINUTE_MS;
const TEN = 10;
// Unknown up to this time [s] in a stretch is left unmarked: a lost dwell or two.
const SOME_UNKNOWN_S = 0.5;
// For a picture of this length [ms], a mark on the time axis every so often [ms].
const TICKS = [[15, 3], [60, 10], [180, 30], [360, 60], [720, 120], [1440, 180]]
  .map(([lengthMinutes, everyMinutes]) => [lengthMinutes * MINUTE_MS, everyMinutes * MINUTE_MS]);
const SVG = "http://www.w3.org/2000/svg";

export class Lately {
  constructor(record) {
    this.record = record;
    this.channels = [];
    this.chosen = null;
    this.chart = byId("chart");
    this.layout = null;
    new ResizeObserver(() => this.draw()).observe(this.chart.parentElement);
    for (const kind of ["pointermove", "pointerdown"]) {
      this.chart.addEventListener(kind, (event) => this.read(event));
    }
    this.chart.addEventListener("pointerleave", () => markAbsent(byId("chart-cursor"), true));
  }

  /** Draws the record anew for these channels, in this order. */
  update(channels) {
    this.channels = channels;
    if (channels.length === 0) return;
    if (this.record.shown() !== null) {
      this.draw();
      this.tell();
    } else if (this.record.sheet !== null) {
      setText(byId("lately-line"), "Nothing is on record yet; the first of it comes in moments.");
    }
  }

  /** Marks the row of the channel whose detail is open. */
  mark(id) {
    this.chosen = id;
    if (this.layout) this.drawMark();
  }

  draw() {
    const shown = this.record.shown();
    if (this.channels.length === 0 || shown === null) return;
    const layout = lay(this.channels, shown, this.chart.parentElement.clientWidth);
    if (layout === null) return;
    this.layout = layout;
    setAttribute(this.chart, "viewBox", `0 0 ${layout.width} ${layout.height}`);
    setAttribute(this.chart, "data-drawn", "");
    const { left, top, bottom, plotWidth } = layout;
    setBox(byId("chart-frame"), left, top, plotWidth, bottom - top);
    const groundMs = [layout.beginMs, Math.max(layout.beginMs, layout.toMs)];
    const [from, to] = groundMs.map((ms) => layout.x(ms));
    setBox(byId("chart-ground"), from, top, to - from, bottom - top);
    for (const [id, path] of Object.entries(strokes(this.record, layout))) {
      setAttribute(byId(id), "d", path);
    }
    setAttribute(byId("chart-rules"), "d", rules(layout));
    const now = layout.x(layout.toMs).toFixed(1);
    setAttribute(byId("chart-now"), "d", `M${now} ${top - 3}V${bottom + 3}`);
    byId("chart-labels").replaceChildren(...labels(layout));
    this.drawMark();
  }

  drawMark() {
    const { layout } = this;
    const row = this.channels.findIndex((channel) => channel.id === this.chosen);
    const box = byId("chart-selected");
    markAbsent(box, row < 0);
    this.markLabel?.remove();
    if (row < 0) return;
    setBox(box, layout.left - 1, layout.y(row) - 0.5, layout.plotWidth + 2, layout.rowHeight);
    this.markLabel = label(layout.left + layout.plotWidth + 5, layout.y(row) + layout.rowHeight - 1,
      this.chosen, "chart-label chosen");
    this.chart.append(this.markLabel);
  }

  /** Says in words what lies under the pointer. */
  read(event) {
    if (!this.layout) return;
    const { layout } = this;
    const frame = this.chart.getBoundingClientRect();
    const x = (event.clientX - frame.left) * layout.width / frame.width;
    const y = (event.clientY - frame.top) * layout.height / frame.height;
    const row = layout.rowAt(y);
    const column = Math.floor((x - layout.left) / layout.plotWidth * layout.columns);
    const channel = this.channels[row];
    const inside = channel !== undefined && column >= 0 && column < layout.columns;
    const startMs = layout.fromMs + column * layout.stepMs;
    const cell = inside ? this.record.cell(channel.id, startMs) : null;
    markAbsent(byId("chart-cursor"), cell === null);
    if (cell === null) return;
    const [from, to] = [layout.x(cell.fromMs), layout.x(cell.toMs)];
    setBox(byId("chart-cursor"), from, layout.y(row), to - from, layout.rowHeight);
    setText(byId("readout"), readoutWords(channel.id, startMs, layout.stepMs, cell));
  }

  /** The headline and the table. */
  tell() {
    const shown = this.record.shown();
    const totals = this.channels.map((channel) => this.record.total(channel.id));
    const all = addUp(totals);
    const busiest = this.channels.map((channel, index) => [channel.id, totals[index].occupancy])
      .filter(([, occupancy]) => occupancy !== null && occupancy > 0)
      .sort((a, b) => b[1] - a[1]).slice(0, 3)
      .map(([id, occupancy]) => `${id} (${percent(occupancy)})`).join(", ");
    const occupied = all.occupancy === null ? "Nothing is known"
      : `Occupied ${percent(all.occupancy)} of the known time`;
    const unknown = all.unknown_s > 0 ? `${percent(all.unknown_share)} of all time unknown`
      : "nothing unknown";
    setText(byId("lately-line"), `${occupied} ${period(shown)}; ${unknown}.`
      + (busiest ? ` Busiest: ${busiest}.` : ""));
    setText(byId("lately-step"), stretchName(shown.stepMs));
    fillTable(this.channels, totals);
  }
}

/** The time that a picture covers, in words. */
function period({ fromMs, endMs, beginMs, toMs, young }) {
  if (!young) return `in the ${(endMs - fromMs) / HOUR_MS}\u00a0h to ${utcMinute(toMs)} UTC`;
  return `from ${utcTime(beginMs)} UTC, where the record begins, to ${utcTime(toMs)}`;
}

function readoutWords(id, startMs, stepMs, cell) {
  const occupied = cell.occupancy === null ? "occupancy not known"
    : `occupied ${percent(cell.occupancy)} of the known time`;
  const own = cell.own_s > 0 ? `, own ${duration(cell.own_s)}` : "";
  return `${id}, ${stretch(startMs, stepMs)}: ${occupied}, `
    + `unknown ${percent(cell.unknown_share)}${own}.`;
}

/** Where everything goes for a width [px]; null while the figure has no width. */
function lay(channels, { fromMs, endMs, stepMs, beginMs, toMs }, width) {
  if (width < 100) return null;
  const narrow = width < 640;
  const rowHeight = narrow ? 8 : 9;
  const groupGap = 4;
  const left = narrow ? 30 : 92;
  const top = 22;
  const plotWidth = width - left - 34;
  const y = (row) => top + 3 + row * rowHeight + Math.floor(row / TEN) * groupGap;
  const bottom = y(channels.length - 1) + rowHeight + 3;
  return {
    channels, narrow, width, left, top, bottom, plotWidth, rowHeight, y, fromMs, endMs, stepMs,
    beginMs, toMs, height: bottom + 20,
    columns: Math.round((endMs - fromMs) / stepMs),
    x: (ms) => left + plotWidth * (ms - fromMs) / (endMs - fromMs),
    rowAt: (at) => channels.findIndex((_, row) => at >= y(row) && at < y(row) + rowHeight),
  };
}

/** The four paths of the picture. Neighbours of one kind are joined, so that a texture runs on. */
function strokes(record, layout) {
  const paths = { "chart-ink": [], "chart-unknown": [], "chart-partly": [], "chart-own": [] };
  layout.channels.forEach((channel, row) => {
    const top = layout.y(row);
    let open = null;
    const close = () => {
      if (open) paths[open.kind].push(box(open.from, top, open.to, top + layout.rowHeight));
    };
    for (let column = 0; column < layout.columns; column += 1) {
      const cell = record.cell(channel.id, layout.fromMs + column * layout.stepMs);
      const kind = cell === null ? null : texture(cell);
      const [from, to] = cell === null ? [0, 0] : [layout.x(cell.fromMs), layout.x(cell.toMs)];
      if (open && open.kind === kind) {
        open.to = to;
      } else {
        close();
        open = kind === null ? null : { kind, from, to };
      }
      const inked = cell !== null && kind !== "chart-unknown" && kind !== "chart-own";
      if (inked && cell.occupancy > 0) {
        const middle = top + layout.rowHeight / 2;
        const half = Math.max(0.8, cell.occupancy * (layout.rowHeight - 1)) / 2;
        paths["chart-ink"].push(box(from, middle - half, to, middle + half));
      }
    }
    close();
  });
  return Object.fromEntries(Object.entries(paths).map(([id, parts]) => [id, parts.join("")]));
}

function texture(cell) {
  if (cell.unknown_share > 0.5 || cell.elapsed_s <= 0) return "chart-unknown";
  if (cell.own_share > 0.5) return "chart-own";
  return cell.unknown_s > SOME_UNKNOWN_S ? "chart-partly" : null;
}

function box(left, top, right, bottom) {
  const [l, t, r, b] = [left, top, right, bottom].map((value) => value.toFixed(1));
  return `M${l} ${t}H${r}V${b}H${l}Z`;
}

/** The moments at which the time axis is labelled. */
function ticks({ fromMs, endMs, narrow }) {
  const [, every] = TICKS.find(([lengthMs]) => endMs - fromMs <= lengthMs);
  const step = every * (narrow ? 2 : 1);
  const marks = [];
  for (let ms = Math.ceil(fromMs / step) * step; ms < endMs; ms += step) marks.push(ms);
  return marks;
}

function rules(layout) {
  const across = layout.channels.map((_, row) => row).filter((row) => row > 0 && row % TEN === 0)
    .map((row) => `M${layout.left} ${layout.y(row) - 2}H${layout.left + layout.plotWidth}`);
  const down = ticks(layout).map((ms) =>
    `M${layout.x(ms).toFixed(1)} ${layout.top}V${layout.bottom}`);
  return [...across, ...down].join("");
}

function labels(layout) {
  const names = layout.channels.flatMap((channel, row) => {
    if (row % (TEN / 2) !== 0) return [];
    const base = layout.y(row) + layout.rowHeight - 1;
    const name = label(layout.left - 5, base, channel.id, "chart-label name");
    if (layout.narrow || row % TEN !== 0) return [name];
    return [name, label(0, base, megahertz(channel.centre_hz), "chart-label quiet")];
  });
  const times = ticks(layout).flatMap((ms) => {
    const x = layout.x(ms);
    const startsDay = ms % (24 * HOUR_MS) === 0;
    const text = startsDay ? utcDay(ms).split(" ").slice(0, 3).join(" ") : utcMinute(ms);
    const kind = x < layout.left + 16 ? "chart-label first" : "chart-label time";
    const at = x < layout.left + 16 ? layout.left : x;
    return [label(at, layout.top - 7, text, kind), label(at, layout.bottom + 14, text, kind)];
  });
  return [...names, ...times, ...aheadLabels(layout)];
}

/** What stands on the part of a young record's sheet that is not written yet. */
function aheadLabels({ x, toMs, endMs, stepMs, top }) {
  const room = x(endMs) - x(toMs);
  if (endMs - toMs < stepMs || room < 80) return [];
  return [label(x(toMs) + 8, top + 15, "yet to come", "chart-label quiet")];
}

function label(x, y, text, className) {
  const element = document.createElementNS(SVG, "text");
  element.setAttribute("class", className);
  element.setAttribute("x", x.toFixed(1));
  element.setAttribute("y", y.toFixed(1));
  element.textContent = text;
  return element;
}

function setBox(element, x, y, width, height) {
  for (const [name, value] of Object.entries({ x, y, width, height })) {
    setAttribute(element, name, value.toFixed(1));
  }
}

function markAbsent(element, hidden) {
  element.classList.toggle("absent", hidden);
}

function fillTable(channels, totals) {
  const body = byId("totals");
  while (body.rows.length > channels.length) body.deleteRow(-1);
  while (body.rows.length < channels.length) {
    body.append(make("tr", "", "", [make("th"), ...Array.from({ length: 7 }, () => make("td"))]));
  }
  channels.forEach((channel, index) => {
    const total = totals[index];
    const texts = [channel.id, megahertz(channel.centre_hz), percent(total.occupancy),
      percent(total.unknown_share), duration(total.occupied_s), duration(total.idle_s),
      duration(total.unknown_s), duration(total.own_s)];
    const row = body.rows[index];
    setAttribute(row.cells[0], "scope", "row");
    texts.forEach((text, column) => setText(row.cells[column], text));
  });
}
