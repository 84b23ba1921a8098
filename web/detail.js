// The detail of one channel, and the list of offers: the page's answers in words.
// What is no longer current is told as past, and an offer that is no longer current is not shown.

import { byId, make, setAttribute, setHidden, setItems, setText } from "./dom.js";
import {
  counted, decibels, duration, instant, isNumber, kilohertz, level, megahertz, reasonName,
  reasonSentence, stateOf, tens, utcTime, verdictSentence, when,
} from "./text.js";

const OFFERS_SHOWN = 8;
const LEVEL_STEP_DB = 10;

/** Fills the detail, or folds it when no channel is chosen. */
export function updateDetail(view, id) {
  const channel = view.channels.find((candidate) => candidate.id === id);
  setHidden(byId("detail-hint"), Boolean(channel));
  setHidden(byId("detail-body"), !channel);
  byId("detail").classList.toggle("open", Boolean(channel));
  if (!channel) return;
  const band = view.bands.get(channel.band);
  setText(byId("detail-title"), channel.id);
  setText(byId("detail-place"), `${megahertz(channel.centre_hz)} MHz, `
    + `${kilohertz(channel.bandwidth_hz)} wide, band ${channel.band}`
    + (channel.protected ? ", protected" : ""));
  setText(byId("detail-verdict"), view.current
    ? verdictSentence(channel, band, view.reference, view.nowMs)
    : `Unknown: the node does not answer. At ${utcTime(view.answeredMs)} UTC it said: `
      + `${stateOf(channel, true)}.`);
  setText(byId("detail-offer"), offerWords(view, channel));
  const reasons = reasonCodes(view, channel).map((code) => reasonSentence(code, band));
  setItems(byId("detail-reasons"), reasons);
  setText(byId("detail-last"), lastWords(view, channel));
  updateLevels(view, channel, band);
}

function offerWords(view, channel) {
  if (!view.offersCurrent) return "Not on offer: there is no current answer.";
  const rank = view.offers.findIndex((offer) => offer.channel === channel.id);
  if (rank < 0) return "Not on offer.";
  const place = rank === 0 ? "the longest idle" : `number ${rank + 1}`;
  return `On offer, ${place} of ${view.offers.length}; `
    + `this answer is valid for ${duration(view.offers[rank].valid_for_ms / 1000)}.`;
}

function reasonCodes(view, channel) {
  if (!view.current) return [];
  const refusal = view.refusals.find((candidate) => candidate.channel === channel.id);
  const codes = [...(channel.reasons ?? []), ...(refusal?.reasons ?? [])];
  // "occupied" and "unknown" repeat the verdict that stands above; the rest says why.
  const telling = codes.filter((code) => code !== channel.verdict);
  return [...new Set(telling)];
}

function lastWords(view, channel) {
  const last = instant(channel.last_detection);
  const detected = last === null ? "No detection on record."
    : `Last detection ${when(last, view.nowMs)}, ${duration((view.nowMs - last) / 1000)} ago.`;
  const dwell = instant(channel.time);
  const measured = dwell === null ? "No dwell yet."
    : `Newest dwell began ${when(dwell, view.nowMs)}.`;
  return `${detected} ${measured}`;
}

/** A level axis for the channel whose "why" is asked: five marks on one scale of whole tens. */
function updateLevels(view, channel, band) {
  const values = { ...channel, protection_level_db: band?.protection_level_db };
  const rows = [...byId("levels").rows];
  const known = rows.map((row) => values[row.dataset.level]).filter(isNumber);
  const from = Math.floor((Math.min(...known) - 1) / LEVEL_STEP_DB) * LEVEL_STEP_DB;
  const to = Math.ceil((Math.max(...known) + 1) / LEVEL_STEP_DB) * LEVEL_STEP_DB;
  for (const row of rows) {
    const value = values[row.dataset.level];
    setText(row.querySelector(".figure"), level(value, view.reference));
    const mark = row.querySelector(".axis i");
    setHidden(mark, !isNumber(value));
    if (isNumber(value)) {
      const share = (value - from) / (to - from);
      mark.style.setProperty("--at", `${(100 * share).toFixed(2)}%`);
    }
  }
  setText(byId("level-from"), known.length ? tens(from) : "");
  setText(byId("level-to"), known.length ? tens(to) : "");
}

/** Makes the rows of the list of offers, once; they are filled and emptied in place. */
export function makeOfferRows(onChoose) {
  const body = byId("offers");
  for (let rank = 1; rank <= OFFERS_SHOWN; rank += 1) {
    const button = make("button", "link");
    button.type = "button";
    button.addEventListener("click", () => onChoose(button.textContent));
    body.append(make("tr", "", "", [
      make("td", "rank"), make("td", "", "", [button]), make("td"), make("td"), make("td"),
      make("td"),
    ]));
  }
}

/** Fills the list of offers. */
export function updateOffers(view) {
  const offers = view.offersCurrent ? view.offers : [];
  [...byId("offers").rows].forEach((row, index) => {
    const offer = offers[index];
    const cells = offer ? [
      String(index + 1), null, megahertz(offer.centre_hz), duration(offer.idle_for_s),
      decibels(offer.margin_db), duration(offer.valid_for_ms / 1000),
    ] : ["", null, "", "", "", ""];
    const button = row.cells[1].firstElementChild;
    setText(button, offer ? offer.channel : "");
    setHidden(button, !offer);
    cells.forEach((text, column) => {
      if (text !== null) setText(row.cells[column], text);
    });
    setAttribute(row, "data-empty", offer ? null : "");
  });
  setText(byId("offers-note"), offersNote(view, offers.length));
  const more = offers.length - OFFERS_SHOWN;
  setText(byId("offers-more"), more > 0
    ? `${counted(more, "channel", "channels")} more on offer, ringed on the sheet.` : "");
}

function offersNote(view, count) {
  if (!view.offersCurrent) {
    return view.offersMs === null ? "No answer yet: nothing is on offer."
      : `Nothing is on offer: the last answer is of ${utcTime(view.offersMs)} UTC.`;
  }
  const asked = `As answered at ${utcTime(view.offersMs)} UTC`;
  return count === 0 ? `${asked}: nothing is on offer.`
    : `${asked}, longest idle first. A radio asks for itself, and again before its answer `
      + "runs out.";
}

/** Counts the refusals by reason, most frequent first. */
export function updateRefusals(view) {
  const refusals = view.offersCurrent ? view.refusals : [];
  setText(byId("refusals-title"), refusals.length === 0 ? "Why the others are refused"
    : `Why ${counted(refusals.length, "channel is", "channels are")} refused`);
  const byReason = new Map();
  const reasonsOf = new Map(refusals.map(({ channel, reasons }) => [channel, reasons ?? []]));
  // In the order of the sheet, so that the list does not stir from poll to poll.
  for (const { id } of view.channels) {
    for (const code of reasonsOf.get(id) ?? []) {
      byReason.set(code, [...(byReason.get(code) ?? []), id]);
    }
  }
  const ranked = [...byReason]
    .sort((a, b) => b[1].length - a[1].length || a[0].localeCompare(b[0]));
  const list = byId("refusal-list");
  while (list.children.length > ranked.length) list.lastElementChild.remove();
  while (list.children.length < ranked.length) {
    list.append(make("li", "", "", [make("b"), make("span"), make("small")]));
  }
  ranked.forEach(([code, ids], index) => {
    const [count, name, where] = list.children[index].children;
    setText(count, String(ids.length));
    setText(name, reasonName(code));
    setText(where, ids.join(" "));
  });
}
