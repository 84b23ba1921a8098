// The page's words: numbers, times and verdicts as plain sentences.
// Pure functions of their arguments. They never guess: what is not known is said to be not known.

const MISSING = "not measured";
// Between a number and its unit, so that a line never breaks there.
const NB = "\u00a0";
const MINUTE_MS = 60 * 1000;

/** Whether a value is a number that can be shown. */
export function isNumber(value) {
  return typeof value === "number" && Number.isFinite(value);
}

/** A number with a true minus sign; `places` digits after the point. */
function signed(value, places) {
  return value.toFixed(places).replace("-", "−");
}

/** A level with its reference, such as "−98.3 dBFS". */
export function level(value, reference) {
  return isNumber(value) ? `${signed(value, 1)}${NB}${reference}` : MISSING;
}

/** The end of a level axis: whole decibels without the unit. */
export function tens(value) {
  return signed(value, 0);
}

/** A difference of levels, without its sign: the sentence says which way. */
export function decibels(value) {
  return isNumber(value) ? `${Math.abs(value).toFixed(1)}${NB}dB` : MISSING;
}

/** A frequency in MHz without the unit: four places, or six where the raster needs them. */
export function megahertz(hz) {
  if (!isNumber(hz)) return "–";
  return (hz / 1e6).toFixed(Math.round(hz) % 100 === 0 ? 4 : 6);
}

/** A bandwidth, such as "25 kHz" or "6.25 kHz". */
export function kilohertz(hz) {
  return isNumber(hz) ? `${Number((hz / 1e3).toFixed(3))}${NB}kHz` : MISSING;
}

/** A duration [s] in its two leading units, such as "6 min 12 s". */
export function duration(seconds) {
  if (!isNumber(seconds)) return "an unknown time";
  const s = Math.max(0, seconds);
  if (s < 9.95) return `${s.toFixed(1)}${NB}s`;
  const rounded = Math.round(s);
  if (rounded < 60) return `${rounded}${NB}s`;
  if (rounded < 3600) return `${Math.floor(rounded / 60)}${NB}min ${rounded % 60}${NB}s`;
  const minutes = Math.floor(rounded / 60);
  if (minutes < 24 * 60) return `${Math.floor(minutes / 60)}${NB}h ${minutes % 60}${NB}min`;
  return `${Math.floor(minutes / 1440)}${NB}d ${Math.floor((minutes % 1440) / 60)}${NB}h`;
}

/** A wait [ms] in whole seconds and up, such as "4 s": for counting while one looks on. */
export function wait(ms) {
  const seconds = Math.floor(ms / 1000);
  return seconds < 10 ? `${seconds}${NB}s` : duration(seconds);
}

/** A share from 0 to 1 as per cent. A little is never rounded to none, nor nearly all to all. */
export function percent(share) {
  if (!isNumber(share)) return "–";
  if (share > 0 && share < 0.01) return `<${NB}1${NB}%`;
  if (share < 1 && share > 0.99) return `>${NB}99${NB}%`;
  return `${Math.round(share * 100)}${NB}%`;
}

/** A whole number in groups of three, such as "12 345". */
export function whole(value) {
  if (!isNumber(value)) return "–";
  return String(Math.round(value)).replace(/\B(?=(\d{3})+$)/g, "\u202f");
}

/** "no gaps", "1 gap", "3 gaps"; a count that is not known is said to be so. */
export function counted(value, one, many) {
  if (!isNumber(value)) return `an unknown number of ${many}`;
  if (value === 0) return `no ${many}`;
  return value === 1 ? `1 ${one}` : `${whole(value)} ${many}`;
}

/** A size in bytes, such as "12.3 MB". */
export function bytes(value) {
  if (!isNumber(value)) return "of unknown size";
  const units = ["bytes", "kB", "MB", "GB", "TB"];
  let size = value;
  let unit = 0;
  while (size >= 999.5 && unit < units.length - 1) {
    size /= 1000;
    unit += 1;
  }
  return `${unit === 0 ? whole(size) : size.toFixed(size < 99.95 ? 1 : 0)}${NB}${units[unit]}`;
}

/** Milliseconds since the epoch of an RFC 3339 stamp, or null. */
export function instant(stamp) {
  const ms = typeof stamp === "string" ? Date.parse(stamp) : NaN;
  return Number.isNaN(ms) ? null : ms;
}

/** "14:03:09", in UTC. */
export function utcTime(ms) {
  return new Date(ms).toISOString().slice(11, 19);
}

/** "14:03", in UTC. */
export function utcMinute(ms) {
  return new Date(ms).toISOString().slice(11, 16);
}

/** "Mon 3 Feb 2025", in UTC. */
export function utcDay(ms) {
  return new Intl.DateTimeFormat("en-GB", {
    weekday: "short", day: "numeric", month: "short", year: "numeric", timeZone: "UTC",
  }).format(ms).replace(",", "");
}

const localFormat = new Intl.DateTimeFormat("en-GB", {
  hour: "2-digit", minute: "2-digit", second: "2-digit", timeZoneName: "short",
});

/** The same instant in the reader's own zone, such as "15:03:09 BST"; null where that is UTC. */
export function localTime(ms) {
  const local = localFormat.format(ms);
  return local.endsWith(" UTC") ? null : local;
}

/** A stamp as "14:03:09 UTC", with its day when that is not the day of `nowMs`. */
export function when(ms, nowMs) {
  const sameDay = utcDay(ms) === utcDay(nowMs);
  return `${utcTime(ms)} UTC${sameDay ? "" : ` on ${utcDay(ms)}`}`;
}

/** A stretch of time as "13:15–13:30 UTC". */
export function stretch(startMs, lengthMs) {
  return `${utcMinute(startMs)}–${utcMinute(startMs + lengthMs)} UTC`;
}

const STRETCH_NAMES = new Map([[1, "minute"], [5, "five minutes"], [15, "quarter hour"]]);

/** What a stretch of that length is called: "minute", "quarter hour". */
export function stretchName(lengthMs) {
  return STRETCH_NAMES.get(lengthMs / MINUTE_MS) ?? duration(lengthMs / 1000);
}

// For each reason code: a short name, and a sentence that may use the band's policy.
const REASONS = {
  own: ["own transmission", () =>
    "The site’s own radio announced a transmission here, so nobody else could be heard."],
  insensitive: ["not sensitive enough", () =>
    "A signal at the protection level might have been missed, so silence proves nothing."],
  overload: ["receiver overloaded", () =>
    "A strong signal drove the receiver to its limits, so this measurement cannot be trusted."],
  not_finite: ["damaged samples", () =>
    "Some samples were not numbers, so the dwell could not be measured."],
  no_reference: ["no noise reference", () =>
    "Too little quiet spectrum was left beside it to know the noise floor."],
  no_noise: ["no noise at the input", () =>
    "The input carried no noise at all: the receiver was not listening."],
  not_observed: ["not observed", () =>
    "Nobody looked: the node was down, samples were lost, or a visit was missed."],
  burst: ["short burst", () =>
    "A transmission too short to show in the whole dwell stood out in one of its slices."],
  floor_raised: ["noise floor has risen", () =>
    "The noise has risen, and an incumbent that fills the whole block could hide in it."],
  impulses: ["impulses", () =>
    "Impulses that fill the whole block, such as ignition sparks, hit most of this measurement."],
  stale: ["verdict too old", (band) =>
    `The newest verdict is older than the policy allows${policy(band, "max_age_s")}.`],
  protected: ["protected", () =>
    "The plan keeps it for its first users: it is never on offer."],
  check_time: ["not idle for long enough", (band) =>
    `It has not yet been idle without a gap for as long as asked${policy(band, "check_time_s")}.`],
  hold_off: ["hold-off", (band) =>
    `Someone was detected here less than the hold-off ago${policy(band, "hold_off_s")}.`],
  occupied: ["occupied", () => "Someone is using it: energy above the threshold."],
  unknown: ["unknown", () => "The node cannot tell whether it is in use; unknown is not idle."],
};

function policy(band, key) {
  return band && isNumber(band[key]) ? ` (${setting(band[key])})` : "";
}

/** A duration [s] as somebody would set it: "2 s", "0.5 s", "5 min". */
function setting(seconds) {
  const minutes = seconds / 60;
  return minutes >= 1 && Number.isInteger(minutes) ? `${minutes}${NB}min`
    : `${Number(seconds.toFixed(3))}${NB}s`;
}

/** The short name of a reason code. */
export function reasonName(code) {
  return Object.hasOwn(REASONS, code) ? REASONS[code][0] : String(code);
}

/** One plain sentence for a reason code under the band's policy. */
export function reasonSentence(code, band) {
  if (Object.hasOwn(REASONS, code)) return REASONS[code][1](band);
  return `Reason “${code}”, for which this page has no words.`;
}

/**
 * The state in which a channel is drawn. Anything but a plain verdict that is current is unknown.
 */
export function stateOf(channel, current) {
  if (!current || !channel) return "unknown";
  if (channel.own === true) return "own";
  return channel.verdict === "idle" || channel.verdict === "occupied" ? channel.verdict : "unknown";
}

const STATE_WORDS = {
  occupied: "Occupied", idle: "Idle", unknown: "Unknown", own: "Own transmission",
};

/** The verdict in words: what, for how long, and how sure. */
export function verdictSentence(channel, band, reference, nowMs) {
  const state = stateOf(channel, true);
  const since = instant(channel.since);
  const held = since === null ? "." : ` for ${duration((nowMs - since) / 1000)}.`;
  const words = [STATE_WORDS[state] + held];
  const margin = channel.margin_db;
  if (state === "occupied" && isNumber(margin)) {
    words.push(margin > 0
      ? `A burst was found; its mean over the dwell is ${decibels(margin)} under the threshold.`
      : `${decibels(margin)} over the threshold.`);
  }
  if (state === "idle" && isNumber(margin)) words.push(`${decibels(margin)} under the threshold.`);
  if (isNumber(channel.sensitivity_db) && (state === "idle" || state === "unknown")) {
    const wanted = band
      ? `; the protection level is ${level(band.protection_level_db, reference)}` : "";
    words.push(`A signal of ${level(channel.sensitivity_db, reference)} would have been `
      + `heard${wanted}.`);
  }
  return words.join(" ");
}

/** One sentence on the node's health for the head of the page. */
export function healthSentence(health) {
  const problems = Array.isArray(health.problems) ? health.problems : [];
  if (health.status === "well" && problems.length === 0) {
    const age = health.detection?.last_dwell_age_s;
    const newest = isNumber(age) ? `newest dwell ${duration(age)} ago` : "no dwell yet";
    return `The node is well: ${newest}.`;
  }
  if (problems.length === 0) return "The node is impaired, and does not say why.";
  const others = problems.length - 1;
  const rest = others > 0 ? ` And ${counted(others, "problem", "problems")} more.` : "";
  return `The node is impaired. ${problems[0]}${rest}`;
}

/** Capture in words. */
export function captureWords(capture = {}) {
  const state = { running: "Running", ended: "Ended: the samples have come to their end",
    failed: "Failed" }[capture.state] ?? "In a state unknown to this page";
  const age = isNumber(capture.last_sample_age_s)
    ? `The newest is ${duration(capture.last_sample_age_s)} old.` : "None has come yet.";
  return `${state}. ${whole(capture.samples)} samples taken. ${age} `
    + `${sentenceCase(counted(capture.lost_samples, "sample", "samples"))} lost, `
    + `${counted(capture.gaps, "gap", "gaps")}, `
    + `${counted(capture.blocks_dropped, "block", "blocks")} dropped for want of time, `
    + `${counted(capture.late, "late delivery", "late deliveries")} given up, `
    + `${counted(capture.clock_steps, "step", "steps")} of the clock.`;
}

/** Detection in words. */
export function detectionWords(detection = {}) {
  const age = isNumber(detection.last_dwell_age_s)
    ? `The newest ended ${duration(detection.last_dwell_age_s)} ago.` : "None has ended yet.";
  return `${sentenceCase(counted(detection.dwells, "dwell", "dwells"))} judged. ${age}`;
}

/** History in words. */
export function historyWords(history = {}) {
  const state = { writing: "Writing", stopped: "Stopped" }[history.state]
    ?? "In a state unknown to this page";
  const name = history.path_name ? `: ${history.path_name}, ${bytes(history.bytes)}` : "";
  const age = isNumber(history.last_commit_age_s)
    ? `Last commit ${duration(history.last_commit_age_s)} ago.` : "Nothing is committed yet.";
  return `${state}${name}. ${age} `
    + `${sentenceCase(counted(history.failed_commits, "commit", "commits"))} failed, `
    + `${counted(history.dropped_reports, "report", "reports")} and `
    + `${counted(history.dropped_runs, "run", "runs")} dropped, `
    + `${counted(history.clipped_reports, "report", "reports")} from before the end of the record.`;
}

/** The node in words: what it listens to, with what, since when. */
export function nodeWords(node, nowMs) {
  const started = instant(node.started);
  const since = started === null ? "" : ` Started ${when(started, nowMs)}.`;
  const receiver = node.receiver ?? {};
  const covered = Number((receiver.usable_bandwidth_hz / 1e6).toFixed(3));
  const width = isNumber(receiver.usable_bandwidth_hz)
    ? ` Covers ${covered}${NB}MHz about ${megahertz(receiver.centre_hz)}${NB}MHz.` : "";
  return `fallowband ${node.version}. Source: ${node.source}.${width}${since} `
    + `Configuration ${node.configuration}.`;
}

/** A band's policy in words. */
export function bandWords(band, channels, reference) {
  const first = channels[0];
  const last = channels[channels.length - 1];
  const alarm = isNumber(band.pfa) && band.pfa > 0
    ? `one false alarm in ${whole(1 / band.pfa)} decisions` : "";
  const found = isNumber(band.pd) ? `${percent(band.pd)} found at the protection level of `
    + `${level(band.protection_level_db, reference)}` : "";
  const design = [alarm, found].filter(Boolean).join(", ");
  return `${counted(channels.length, "channel", "channels")} of ${kilohertz(first.bandwidth_hz)}, `
    + `${megahertz(first.centre_hz)} to ${megahertz(last.centre_hz)} MHz.`
    + (design ? ` Designed for ${design}.` : "");
}

function sentenceCase(text) {
  return text.charAt(0).toUpperCase() + text.slice(1);
}
