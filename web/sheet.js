// The sheet of channels: every channel in its place, in frequency order, ten to a row.
// Built once for a plan and then only retouched. A cell is never drawn idle unless the newest
// answer says idle and that answer is current.

import { byId, make, setAttribute, setText } from "./dom.js";
import { bandWords, megahertz, stateOf } from "./text.js";

const COLUMNS = 10;
const STATE_NAMES = {
  occupied: "occupied", idle: "idle", unknown: "unknown", own: "own transmission",
};

export class Sheet {
  /** `onChoose` gets the id of a channel that was touched or focused, or null to close. */
  constructor(onChoose) {
    this.root = byId("bands");
    this.onChoose = onChoose;
    this.cells = new Map();
    this.plan = "";
    this.chosen = null;
    this.quiet = false;
    this.root.addEventListener("click", (event) => this.choose(event));
    this.root.addEventListener("focusin", (event) => this.choose(event));
    this.root.addEventListener("keydown", (event) => this.key(event));
  }

  /** Lays out the plan if it differs from the one on the page. */
  layOut(bands) {
    const plan = JSON.stringify(bands.map(({ band, channels }) =>
      [band, channels.map((channel) => [channel.id, channel.centre_hz])]));
    if (plan === this.plan) return;
    this.plan = plan;
    this.cells.clear();
    this.root.replaceChildren(...bands.map((entry) => this.bandSheet(entry)));
  }

  bandSheet({ band, channels, reference }) {
    const title = make("h3", "", band.id);
    const grid = make("div", "sheet");
    grid.setAttribute("role", "grid");
    grid.setAttribute("aria-label", `Channels of band ${band.id} in order of frequency`);
    for (let first = 0; first < channels.length; first += COLUMNS) {
      const row = make("div", "row");
      row.setAttribute("role", "row");
      const head = make("span", "row-head", megahertz(channels[first].centre_hz));
      head.setAttribute("role", "rowheader");
      row.append(head);
      channels.slice(first, first + COLUMNS).forEach((channel, column) =>
        row.append(this.cell(channel, grid, first + column)));
      grid.append(row);
    }
    const note = make("p", "quiet", bandWords(band, channels, reference));
    return make("section", "band", "", [make("header", "", "", [title, note]), grid]);
  }

  cell(channel, grid, index) {
    const name = make("span", "cell-name", channel.id);
    const button = make("button", "cell", "", [name, make("i", "swatch")]);
    button.type = "button";
    button.tabIndex = index === 0 ? 0 : -1;
    button.dataset.channel = channel.id;
    this.cells.set(channel.id, { button, grid });
    const holder = make("span", "", "", [button]);
    holder.setAttribute("role", "gridcell");
    return holder;
  }

  /** Retouches every cell; `offered` is the set of ids that are on offer. */
  update(channels, offered, current) {
    for (const channel of channels) {
      const cell = this.cells.get(channel.id);
      if (!cell) continue;
      const { button } = cell;
      const state = stateOf(channel, current);
      const swatch = button.lastElementChild;
      setAttribute(swatch, "data-state", state);
      swatch.classList.toggle("protected", channel.protected === true);
      swatch.classList.toggle("offered", offered.has(channel.id));
      const notes = [channel.id, STATE_NAMES[state]];
      if (channel.protected) notes.push("protected");
      if (offered.has(channel.id)) notes.push("on offer");
      setAttribute(button, "aria-label", notes.join(", "));
    }
  }

  /** Marks one cell as the one whose detail is open. */
  mark(id) {
    if (this.chosen === id) return;
    const before = this.cells.get(this.chosen);
    if (before) setAttribute(before.button, "aria-current", null);
    this.chosen = id;
    const cell = this.cells.get(id);
    if (!cell) return;
    setAttribute(cell.button, "aria-current", "true");
    for (const { button, grid } of this.cells.values()) {
      if (grid === cell.grid) button.tabIndex = button === cell.button ? 0 : -1;
    }
  }

  /** Leads the reader to a channel's cell; `quietly` without opening its detail. */
  focus(id, quietly) {
    this.quiet = quietly;
    this.cells.get(id)?.button.focus({ preventScroll: quietly });
    this.quiet = false;
    if (!quietly) this.onChoose(id);
  }

  choose(event) {
    if (this.quiet) return;
    const button = event.target.closest("button.cell");
    if (button) this.onChoose(button.dataset.channel);
  }

  key(event) {
    const button = event.target.closest("button.cell");
    if (!button || event.altKey || event.metaKey) return;
    if (event.key === "Escape") {
      this.onChoose(null);
      return;
    }
    const cell = this.cells.get(button.dataset.channel);
    const buttons = [...cell.grid.querySelectorAll("button.cell")];
    const next = destination(event, buttons.indexOf(button), buttons.length);
    if (next === null) return;
    event.preventDefault();
    buttons[next].focus();
  }
}

/** The index that a key leads to, or null when it leads nowhere. */
function destination(event, index, count) {
  const rowStart = index - (index % COLUMNS);
  const steps = {
    ArrowLeft: index - 1, ArrowRight: index + 1,
    ArrowUp: index - COLUMNS, ArrowDown: index + COLUMNS,
    Home: event.ctrlKey ? 0 : rowStart,
    End: event.ctrlKey ? count - 1 : Math.min(count, rowStart + COLUMNS) - 1,
  };
  const next = Object.hasOwn(steps, event.key) ? steps[event.key] : null;
  return next !== null && next >= 0 && next < count ? next : null;
}

/** Writes the numbers of channels in each state beside the legend. */
export function updateCounts(channels, offered, current) {
  const counts = { occupied: 0, idle: 0, unknown: 0, own: 0, protected: 0, offered: offered.size };
  for (const channel of channels) {
    counts[stateOf(channel, current)] += 1;
    if (channel.protected) counts.protected += 1;
  }
  for (const [name, count] of Object.entries(counts)) {
    setText(byId(`count-${name}`), String(count));
  }
}
