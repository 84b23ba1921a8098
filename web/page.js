// The page of a node: asks the node, keeps the newest answers, and hands them to the parts that
// show them. It claims only what the node has said within the last moments; when the node falls
// silent it says so at once, and no channel is shown idle any more.

import { makeOfferRows, updateDetail, updateOffers, updateRefusals } from "./detail.js";
import { byId, setAttribute, setHidden, setItems, setText } from "./dom.js";
import { Feed } from "./feed.js";
import { Lately } from "./lately.js";
import { DayRecord } from "./record.js";
import { Sheet, updateCounts } from "./sheet.js";
import {
  captureWords, counted, detectionWords, healthSentence, historyWords, instant,
  isNumber, localTime, nodeWords, stateOf, utcDay, utcTime, wait,
} from "./text.js";

const SECOND_MS = 1000;
const STALE_MS = 3 * SECOND_MS;
// Health is asked every two seconds, so one answer may fail before the page calls it not known.
const HEALTH_STALE_MS = 5 * SECOND_MS;
const TICK_MS = 250;
// A commit holds what had reached the writer by then: the last dwells were still on their way.
const LATE_DWELLS_MS = SECOND_MS;

const record = new DayRecord();
const sheet = new Sheet(choose);
const lately = new Lately(record);
let chosen = null;
let wasCurrent = false;

const nodeFeed = new Feed(() => "v1/node", 60 * SECOND_MS, Infinity, takeNode);
const channelFeed = new Feed(() => "v1/channels", SECOND_MS, STALE_MS, takeChannels);
const offerFeed = new Feed(() => "v1/availability", SECOND_MS, STALE_MS, showNow);
const healthFeed = new Feed(() => "v1/health", 2 * SECOND_MS, HEALTH_STALE_MS, showHealth);
const recordFeed = new Feed(recordPath, 30 * SECOND_MS, Infinity, takeRecord);

/** The node's time [ms], carried on from its newest answer; null before the first. */
function nowMs() {
  const answered = instant(channelFeed.answer?.now ?? nodeFeed.answer?.now);
  const feed = channelFeed.answer ? channelFeed : nodeFeed;
  return answered === null ? null : answered + feed.ageMs();
}

/** Channels by band, each band in order of frequency, as the parts of the page want them. */
function bandEntries() {
  const known = new Map((nodeFeed.answer?.bands ?? []).map((band) => [band.id, band]));
  const entries = new Map();
  for (const channel of channelFeed.answer?.channels ?? []) {
    if (!entries.has(channel.band)) {
      const band = known.get(channel.band) ?? { id: channel.band };
      entries.set(channel.band, { band, channels: [], reference: channelFeed.answer.level_ref });
    }
    entries.get(channel.band).channels.push(channel);
  }
  const sorted = [...entries.values()];
  for (const entry of sorted) entry.channels.sort((a, b) => a.centre_hz - b.centre_hz);
  return sorted.sort((a, b) => a.channels[0].centre_hz - b.channels[0].centre_hz);
}

/** Everything that the "now" part shows, drawn from the newest answers. */
function makeView() {
  const channels = bandEntries().flatMap((entry) => entry.channels);
  const current = channelFeed.current();
  const states = new Map(channels.map((channel) => [channel.id, stateOf(channel, current)]));
  const offersCurrent = offerFeed.current() && current;
  // The two answers are asked for apart: an offer that the sheet contradicts is not shown.
  const offers = (offerFeed.answer?.offers ?? [])
    .filter((offer) => offersCurrent && states.get(offer.channel) === "idle");
  const answeredMs = instant(channelFeed.answer?.now);
  return {
    channels, current, offersCurrent, offers, answeredMs,
    bands: new Map((nodeFeed.answer?.bands ?? []).map((band) => [band.id, band])),
    reference: channelFeed.answer?.level_ref ?? "",
    nowMs: answeredMs,
    offersMs: instant(offerFeed.answer?.now),
    refusals: offerFeed.answer?.refusals ?? [],
  };
}

function takeNode(node) {
  document.title = `${node.site}: fallowband`;
  setText(byId("site"), String(node.site));
  setText(byId("node-line"), `Node ${node.node}`);
  setHidden(byId("simulated"), node.simulated !== true);
  if (takeNode.started !== undefined && takeNode.started !== node.started) {
    record.clear();
    recordFeed.ask();
  }
  takeNode.started = node.started;
  setText(byId("well-node"), nodeWords(node, instant(node.now) ?? Date.now()));
  layOut();
}

function takeChannels() {
  if (nodeFeed.answer === null) nodeFeed.ask();
  layOut();
  showNow();
  tick();
}

function layOut() {
  const entries = bandEntries();
  if (entries.length === 0) return;
  sheet.layOut(entries);
  if (lately.channels.length === 0) showRecord();
}

/** The next question on the record; it reaches as far as the node has written. */
function recordPath() {
  const now = nowMs() ?? Date.now();
  const { state, last_commit_age_s: age_s } = healthFeed.answer?.history ?? {};
  const startedMs = instant(nodeFeed.answer?.started);
  let committedMs = now;
  // A node that no longer writes leaves a hole, and the hole is to be seen.
  if (state === "writing") {
    committedMs = isNumber(age_s)
      ? now - healthFeed.ageMs() - age_s * SECOND_MS - LATE_DWELLS_MS : startedMs ?? now;
  }
  return record.path(committedMs, startedMs);
}

function takeRecord(answer) {
  record.take(answer);
  recordFeed.periodMs = !record.complete ? 0 : record.sheet.young ? 10 * SECOND_MS : 30 * SECOND_MS;
  showRecord();
}

function showRecord() {
  lately.update(bandEntries().flatMap((entry) => entry.channels));
}

function showNow() {
  const view = makeView();
  if (view.channels.length === 0) return;
  const offered = new Set(view.offers.map((offer) => offer.channel));
  sheet.update(view.channels, offered, view.current);
  updateCounts(view.channels, offered, view.current);
  // Which answers are shown, for whoever compares the page with the node.
  setAttribute(byId("bands"), "data-answered",
    view.current ? channelFeed.answer.now : null);
  setAttribute(byId("offers"), "data-answered",
    view.offersCurrent ? offerFeed.answer.now : null);
  updateOffers(view);
  updateRefusals(view);
  updateDetail(view, chosen);
  setText(byId("headline"), headline(view));
}

function headline(view) {
  if (!view.current) {
    return "Nothing may be used: the node does not answer, so every channel is unknown.";
  }
  if (!view.offersCurrent) {
    return "Nothing may be used: there is no current answer on what is on offer.";
  }
  const all = counted(view.channels.length, "channel", "channels");
  if (view.offers.length === 0) return `None of ${all} may be used now.`;
  const best = view.offers.slice(0, 3).map((offer) => offer.channel).join(", ");
  return `${view.offers.length} of ${all} may be used now. Longest idle: ${best}.`;
}

/** Whether the last word on health still stands: a node that says nothing at all is not "well". */
function healthCurrent() {
  return healthFeed.current() && (healthFeed.ageMs() <= STALE_MS || channelFeed.current());
}

function showHealth(health) {
  if (!healthCurrent()) {
    const waited = wait(healthFeed.ageMs());
    const words = healthFeed.answer === null ? "The node has not answered yet."
      : `Whether the node is well is not known: the last word is ${waited} old.`;
    setText(byId("health-line"), words);
    setText(byId("well-line"), words);
    setAttribute(byId("health-line"), "data-health",
      healthFeed.answer === null ? "waiting" : "unknown");
    setAttribute(byId("well"), "data-past", "");
    return;
  }
  const problems = Array.isArray(health.problems) ? health.problems.map(String) : [];
  const well = health.status === "well" && problems.length === 0;
  setAttribute(byId("well"), "data-past", null);
  setAttribute(byId("health-line"), "data-health", well ? "well" : "impaired");
  setText(byId("health-line"), healthSentence(health));
  setText(byId("well-line"), well ? "Yes. Nothing is amiss."
    : `No: ${counted(problems.length, "problem", "problems")}.`);
  setItems(byId("problems"), problems);
  setText(byId("well-capture"), captureWords(health.capture));
  setText(byId("well-detection"), detectionWords(health.detection));
  setText(byId("well-history"), historyWords(health.history));
}

/** The clock, and the watch over every answer's age. */
function tick() {
  const ms = nowMs();
  if (ms !== null) {
    setText(byId("utc"), utcTime(ms));
    const local = localTime(ms);
    setText(byId("local"), utcDay(ms) + (local === null ? "" : `; ${local} local`));
  }
  const current = channelFeed.current();
  const late = channelFeed.ageMs() > STALE_MS;
  setAttribute(document.documentElement, "data-feed",
    channelFeed.answer === null ? "waiting" : current ? "current" : "stale");
  setHidden(byId("stale"), !late);
  if (late) {
    const waited = wait(channelFeed.ageMs());
    setText(byId("stale"), channelFeed.answer === null
      ? `The node has not answered in ${waited}. Nothing may be used.`
      : `The node has not answered for ${waited}. Nothing below is current.`);
  }
  if (!current || !offerFeed.current()) showNow();
  if (!healthCurrent()) showHealth(null);
  if (current && !wasCurrent && channelFeed.answer !== null) {
    nodeFeed.ask();
    recordFeed.ask();
  }
  wasCurrent = current;
}

/** Opens the detail of a channel; null folds it. */
function choose(id) {
  chosen = id;
  sheet.mark(id);
  lately.mark(id);
  updateDetail(makeView(), id);
}

function close() {
  sheet.focus(chosen, true);
  choose(null);
}

makeOfferRows((id) => sheet.focus(id, false));
byId("detail-close").addEventListener("click", close);
byId("detail").addEventListener("keydown", (event) => {
  if (event.key === "Escape") close();
});
document.addEventListener("visibilitychange", () => {
  if (document.hidden) return;
  tick();
  for (const feed of [channelFeed, offerFeed, healthFeed]) feed.ask();
});
// The record is asked for once the node's own time is known: see `tick`.
for (const feed of [nodeFeed, channelFeed, offerFeed, healthFeed]) feed.start();
setInterval(tick, TICK_MS);
tick();
