// The picture of the last day: time from left to right, one channel a row, drawn as a stroke that
// is the thicker the more of the quarter hour was occupied. What is unknown is hatched, and a
// stretch without a record is hatched too. The drawing is vectors, so it prints as sharp as text.

import { QUARTER_MS, addUp } from "./record.js";
import { byId, make, setAttribute, setText } from "./dom.js";
import {
  duration, megahertz, percent, quarterHour, utcDay, utcMinute,
} from "./text.js";

const HOUR_MS = 60 * 60 * 1000;
const TEN = 10;
// A share of unknown up to this is left unmarked: a lost dwell or two in a quarter hour.
const SOME_UNKNOWN = 0.02;
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
    if (channels.length === 0 || this.record.newestMs === null) return;
    this.draw();
    this.tell();
  }

  /** Marks the row of the channel whose detail is open. */
  mark(id) {
    this.chosen = id;
    if (this.layout) this.drawMark();
  }

  draw() {
    if (this.channels.length === 0 || this.record.newestMs === null) return;
    const layout = lay(this.channels, this.record.stretch(), this.chart.parentElement.clientWidth);
    if (layout === null) return;
    this.layout = layout;
    setAttribute(this.chart, "viewBox", `0 0 ${layout.width} ${layout.height}`);
    setAttribute(this.chart, "data-drawn", "");
    setBox(byId("chart-ground"), layout.left, layout.top, layout.plotWidth,
      layout.bottom - layout.top);
    for (const [id, path] of Object.entries(strokes(this.record, layout))) {
      setAttribute(byId(id), "d", path);
    }
    setAttribute(byId("chart-rules"), "d", rules(layout));
    const now = layout.x(layout.toMs).toFixed(1);
    setAttribute(byId("chart-now"), "d", `M${now} ${layout.top - 3}V${layout.bottom + 3}`);
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
    const startMs = layout.fromMs + column * QUARTER_MS;
    const quarter = inside ? this.record.quarter(channel.id, startMs) : null;
    markAbsent(byId("chart-cursor"), quarter === null);
    if (quarter === null) return;
    setBox(byId("chart-cursor"), layout.x(startMs), layout.y(row),
      layout.plotWidth / layout.columns, layout.rowHeight);
    setText(byId("readout"), readoutWords(channel.id, startMs, quarter));
  }

  /** The headline and the table. */
  tell() {
    const { fromMs, endMs, toMs, firstMs } = this.record.stretch();
    const totals = this.channels.map((channel) => this.record.total(channel.id, fromMs));
    const all = addUp(totals);
    const busiest = this.channels.map((channel, index) => [channel.id, totals[index].occupancy])
      .filter(([, occupancy]) => occupancy !== null && occupancy > 0)
      .sort((a, b) => b[1] - a[1]).slice(0, 3)
      .map(([id, occupancy]) => `${id} (${percent(occupancy)})`).join(", ");
    const begins = firstMs >= endMs ? " Nothing is on record yet."
      : firstMs > fromMs ? ` The record begins at ${quarterHour(firstMs)}.` : "";
    const occupied = all.occupancy === null ? "Nothing is known"
      : `Occupied ${percent(all.occupancy)} of the known time`;
    const hours = Math.round((endMs - fromMs) / HOUR_MS);
    setText(byId("lately-line"), `${occupied} in the ${hours}\u00a0h to `
      + `${utcMinute(toMs)} UTC; ${percent(all.unknown_share)} of all time unknown.`
      + (busiest ? ` Busiest: ${busiest}.` : "") + begins);
    fillTable(this.channels, totals);
  }
}

function readoutWords(id, startMs, quarter) {
  const occupied = quarter.occupancy === null ? "occupancy not known"
    : `occupied ${percent(quarter.occupancy)} of the known time`;
  const own = quarter.own_s > 0 ? `, own ${duration(quarter.own_s)}` : "";
  return `${id}, ${quarterHour(startMs)}: ${occupied}, `
    + `unknown ${percent(quarter.unknown_share)}${own}.`;
}

/** Where everything goes for a width [px]; null while the figure has no width. */
function lay(channels, { fromMs, endMs, toMs }, width) {
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
    channels, narrow, width, left, top, bottom, plotWidth, rowHeight, y, fromMs, endMs, toMs,
    height: bottom + 20,
    columns: Math.round((endMs - fromMs) / QUARTER_MS),
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
      const startMs = layout.fromMs + column * QUARTER_MS;
      const quarter = record.quarter(channel.id, startMs);
      const from = layout.x(startMs);
      const to = layout.x(Math.min(startMs + QUARTER_MS, layout.toMs));
      const kind = quarter === null ? null : texture(quarter);
      if (open && open.kind === kind) {
        open.to = to;
      } else {
        close();
        open = kind === null ? null : { kind, from, to };
      }
      const inked = quarter !== null && kind !== "chart-unknown" && kind !== "chart-own";
      if (inked && quarter.occupancy > 0) {
        const middle = top + layout.rowHeight / 2;
        const half = Math.max(0.8, quarter.occupancy * (layout.rowHeight - 1)) / 2;
        paths["chart-ink"].push(box(from, middle - half, to, middle + half));
      }
    }
    close();
  });
  return Object.fromEntries(Object.entries(paths).map(([id, parts]) => [id, parts.join("")]));
}

function texture(quarter) {
  if (quarter.unknown_share > 0.5 || quarter.elapsed_s <= 0) return "chart-unknown";
  if (quarter.own_share > 0.5) return "chart-own";
  return quarter.unknown_share > SOME_UNKNOWN ? "chart-partly" : null;
}

function box(left, top, right, bottom) {
  const [l, t, r, b] = [left, top, right, bottom].map((value) => value.toFixed(1));
  return `M${l} ${t}H${r}V${b}H${l}Z`;
}

/** The hours at which the time axis is labelled. */
function ticks({ fromMs, endMs, narrow }) {
  const hours = (endMs - fromMs) / HOUR_MS;
  const stepHours = hours <= 3 ? 0.5 : hours <= 6 ? 1 : hours <= 12 ? 2 : 3;
  const step = stepHours * HOUR_MS * (narrow ? 2 : 1);
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
  return [...names, ...times];
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
