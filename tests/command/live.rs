//! `run` and `demo` alive: answers, the end of a recording, stops of every kind, and the history
//! after them.

use std::fs;
use std::io::{BufRead, BufReader};
use std::path::Path;
use std::process::Stdio;
use std::time::{Duration, SystemTime, UNIX_EPOCH};

use fallowband::detection::time::Utc;
use fallowband::history::{Reader, RunRow, RunState};
use serde_json::Value;

use crate::support::{
    Folder, Guard, NODE, Node, add_carrier, noise, program, usual_captures, wait_until,
};

/// A daemon that is told to end does so within this.
const END_MAX: Duration = Duration::from_secs(5);

fn now() -> Utc {
    let since = SystemTime::now().duration_since(UNIX_EPOCH).expect("after 1970");
    Utc(since.as_nanos() as i64)
}

fn text<'a>(value: &'a Value, key: &str) -> &'a str {
    value[key].as_str().unwrap_or_else(|| panic!("{key}: {value}"))
}

fn is_idle(channels: &Value) -> bool {
    channels["channels"].as_array().expect("a list").iter().any(|c| c["verdict"] == "idle")
}

/// The runs of a channel between two moments, without holes; none of them longer than the range.
fn runs(folder: &Folder, channel: &str, from: Utc, to: Utc) -> Vec<RunRow> {
    let reader = Reader::open(&folder.database()).expect("a history");
    let list = reader.runs(channel, from, to, to, 10_000).expect("readable");
    assert!(!list.truncated);
    for pair in list.runs.windows(2) {
        assert_eq!(pair[0].end, pair[1].start, "no hole and no overlap");
    }
    list.runs
}

/// Time in a state (s).
fn seconds_in(runs: &[RunRow], state: RunState) -> f64 {
    let of_state = runs.iter().filter(|run| run.state == state);
    of_state.map(|run| run.end.nanos_since(run.start) as f64 * 1e-9).sum()
}

fn assert_sound(folder: &Folder) {
    let connection = rusqlite::Connection::open(folder.database()).expect("a database");
    let answer: String = connection
        .query_row("PRAGMA integrity_check", [], |row| row.get(0))
        .expect("it can be checked");
    assert_eq!(answer, "ok");
}

/// Four seconds; a carrier in C5 in the second half.
fn with_carrier() -> Folder {
    let folder = Folder::new(NODE);
    let mut samples = noise(48_000.0, 4.0);
    add_carrier(&mut samples, 48_000.0, 96_000);
    folder.record("site", "ci16_le", &samples, 48_000.0, usual_captures());
    folder
}

#[test]
fn after_the_end_of_a_recording_the_node_stays_up_and_nothing_is_idle() {
    let folder = with_carrier();
    let started = now();
    let node = folder.start();
    let info = node.get("/v1/node");
    assert_eq!((text(&info, "node"), &info["simulated"]), ("saltmarsh-test", &Value::Bool(false)));
    node.wait_for("an idle verdict", "/v1/channels", is_idle);
    node.wait_for("the end", "/v1/health", |health| health["capture"]["state"] == "ended");
    let health = node.get("/v1/health");
    assert_eq!(health["status"], "impaired");
    assert!(health["problems"][0].as_str().expect("text").starts_with("Capture has ended"));
    let stale = |channels: &Value| {
        let mut channels = channels["channels"].as_array().expect("a list").iter();
        channels.all(|c| c["verdict"] == "unknown" && c["reasons"] == serde_json::json!(["stale"]))
    };
    node.wait_for("stale verdicts", "/v1/channels", stale);
    let availability = node.get("/v1/availability");
    assert_eq!(availability["offers"], serde_json::json!([]));

    let (status, log, took) = node.terminate();
    assert_eq!(status.code(), Some(0), "{log}");
    assert!(took < END_MAX, "{took:?}");
    assert!(log.contains("capture has ended") && log.contains("stopping"), "{log}");
    assert!(!log.contains('\u{1b}'), "no colours where nobody sees them: {log:?}");

    // 4 s of samples hold 3.99 s of whole slices. A machine that stalls for a second costs a gap,
    // which is counted, and at most a dwell with each.
    let gaps = health["capture"]["gaps"].as_f64().expect("told")
        + health["capture"]["blocks_dropped"].as_f64().expect("told");
    let ended = now();
    let (idle, carrier) =
        (runs(&folder, "C1", started, ended), runs(&folder, "C5", started, ended));
    for channel in [&idle, &carrier] {
        let observed_s: f64 = channel.iter().map(|run| run.observed_us as f64 * 1e-6).sum();
        assert!((3.989 - 0.21 * gaps..3.991).contains(&observed_s), "{observed_s}: {channel:?}");
        assert_eq!(channel.last().map(|run| run.state), Some(RunState::Unknown));
    }
    // The sensitivity is 6 dB below a floor of -49 dBFS: -50 dBFS is reached, so noise is idle.
    assert!(seconds_in(&idle, RunState::Idle) > 3.5 - 0.21 * gaps, "{idle:?}");
    let occupied_s = seconds_in(&carrier, RunState::Occupied);
    assert!((1.9 - 0.21 * gaps..2.4).contains(&occupied_s), "{carrier:?}");
    assert_sound(&folder);
}

#[test]
fn a_restart_goes_on_with_the_history_and_the_time_down_is_unknown() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 30.0);
    let started = now();
    let mut ends = Vec::new();
    for signal in ["-TERM", "-INT"] {
        let node = folder.start();
        node.wait_for("an idle verdict", "/v1/channels", is_idle);
        let told_to_end = now();
        let (status, log, took) = node.end_by(signal);
        assert_eq!(status.code(), Some(0), "{log}");
        assert!(took < END_MAX, "{took:?}");
        let reader = Reader::open(&folder.database()).expect("a history");
        let until = reader.recorded_until().expect("readable").expect("something is recorded");
        // Everything up to the end but the slice that was being filled, and one block; the rest is
        // for a loaded machine, and still far below the commit interval.
        let lost_s = told_to_end.nanos_since(until) as f64 * 1e-9;
        assert!(lost_s < 0.5, "{lost_s} s before the end are missing");
        ends.push((until, now()));
    }
    let all = runs(&folder, "C1", started, ends[1].1);
    let down: Vec<&RunRow> =
        all.iter().filter(|run| run.start <= ends[0].0 && run.end > ends[0].0).collect();
    assert_eq!(down.last().map(|run| run.state), Some(RunState::Unknown), "{all:?}");
    let observed_before = all.iter().any(|run| run.observed_us > 0 && run.end <= ends[0].0);
    let observed_after = all.iter().any(|run| run.observed_us > 0 && run.start >= ends[0].1);
    assert!(observed_before && observed_after, "{all:?}");
    assert_sound(&folder);
}

#[test]
fn the_hold_off_outlives_a_restart() {
    let folder = with_carrier();
    let node = folder.start();
    node.wait_for("the carrier", "/v1/channels/C5", |channel| channel["verdict"] == "occupied");
    let (status, log, _) = node.terminate();
    assert_eq!(status.code(), Some(0), "{log}");
    let reader = Reader::open(&folder.database()).expect("a history");
    let detected = reader.last_detections(&[(448.102e6, 3e3)]).expect("readable")[0];

    // The same site a moment later, and nobody is on the air.
    let folder = folder.with_noise("ci16_le", 30.0);
    let node = folder.start();
    let channel =
        node.wait_for("an idle C5", "/v1/channels/C5", |channel| channel["verdict"] == "idle");
    let told: jiff::Timestamp = text(&channel, "last_detection").parse().expect("a moment");
    assert_eq!(Some(told.as_millisecond()), detected.map(|utc| utc.0 / 1_000_000), "{channel}");
    let offered = |answer: &Value, id: &str| {
        let offers = answer["offers"].as_array().expect("a list");
        offers.iter().any(|offer| offer["channel"] == id)
    };
    let answer = node.wait_for("C4 on offer", "/v1/availability", |answer| offered(answer, "C4"));
    // C5 has been idle for as long as C4 has.
    assert!(!offered(&answer, "C5"), "{answer}");
    let refusals = answer["refusals"].as_array().expect("a list");
    let refusal = refusals.iter().find(|refusal| refusal["channel"] == "C5").expect("refused");
    assert_eq!(refusal["reasons"], serde_json::json!(["hold_off"]));
}

#[test]
fn a_kill_loses_at_most_what_came_after_the_last_commit() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 60.0);
    let started = now();
    let node = folder.start();
    let recorded_s = || {
        let reader = Reader::open(&folder.database()).ok()?;
        let until = reader.recorded_until().ok()??;
        Some(until.nanos_since(started) as f64 * 1e-9)
    };
    // Longer than what may be lost below, so that a history which is only written at the end fails.
    wait_until("four seconds on the record", || recorded_s().is_some_and(|seconds| seconds > 4.0));
    let before_s = recorded_s().expect("just read");
    let channel = node.get("/v1/channels/C1");
    let newest: jiff::Timestamp = text(&channel, "time").parse().expect("a moment");
    node.kill();
    let recorded_s = recorded_s().expect("it opens after a kill");
    assert!(recorded_s >= before_s, "what was committed is there: {recorded_s} {before_s}");
    let newest_s = (newest.as_nanosecond() as i64 - started.0) as f64 * 1e-9;
    // One commit interval and one dwell; the second on top is for a loaded machine.
    assert!(newest_s - recorded_s < 1.0 + 0.2 + 1.0, "{recorded_s} of {newest_s} are left");

    let node = folder.start();
    node.wait_for("an idle verdict", "/v1/channels", is_idle);
    assert_eq!(node.terminate().0.code(), Some(0));
    assert_sound(&folder);
    let all = runs(&folder, "C1", started, now());
    let idle_s = seconds_in(&all, RunState::Idle);
    assert!(idle_s > 3.0, "{all:?}");
    let killed = Utc(started.0 + (recorded_s * 1e9) as i64 + 1_000_000);
    let at_kill = all.iter().find(|run| run.start <= killed && run.end > killed);
    assert_eq!(at_kill.map(|run| run.state), Some(RunState::Unknown), "{all:?}");
}

#[test]
fn an_end_that_cannot_be_written_is_told_by_line_and_exit_code() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 30.0);
    let node = folder.start();
    node.wait_for("an idle verdict", "/v1/channels", is_idle);
    // Another program that holds the database for longer than the node waits.
    let holder = rusqlite::Connection::open(folder.database()).expect("a database");
    holder.execute_batch("BEGIN IMMEDIATE").expect("held");
    let (status, log, took) = node.terminate();
    assert_eq!(status.code(), Some(73), "{log}");
    assert!(took < END_MAX, "{took:?}");
    let last = log.lines().last().unwrap_or_default();
    assert!(last.starts_with("fallowband: the end of the history is not written: "), "{log}");
    assert!(last.contains("another program holds the database"), "{log}");
    drop(holder);
    assert_sound(&folder);
}

#[test]
fn lost_samples_are_a_problem_of_the_node_while_they_are_fresh() {
    let folder = Folder::new(NODE);
    let captures = serde_json::json!([
        {"core:sample_start": 0, "core:frequency": 448.1e6},
        {"core:sample_start": 24_000, "core:global_index": 24_000},
        {"core:sample_start": 48_000, "core:global_index": 480_000},
    ]);
    folder.record("site", "ci16_le", &noise(48_000.0, 30.0), 48_000.0, captures);
    let node = folder.start();
    let lost = |health: &Value| health["problems"].to_string().contains("a gap in the samples");
    let health = node.wait_for("the loss", "/v1/health", lost);
    assert_eq!(health["status"], "impaired");
    assert!(health["capture"]["gaps"].as_u64().expect("told") >= 1, "{health}");
}

#[test]
fn a_log_that_nobody_reads_any_more_does_not_stop_the_node() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 30.0);
    let mut node = folder.start();
    node.close_log();
    let started = now();
    node.wait_for("an idle verdict", "/v1/channels", is_idle);
    let (status, _, took) = node.terminate();
    assert_eq!(status.code(), Some(0));
    assert!(took < END_MAX, "{took:?}");
    assert!(!runs(&folder, "C1", started, now()).is_empty());
    assert_sound(&folder);
}

#[test]
fn a_legal_configuration_with_a_flaw_is_run_and_the_flaw_logged() {
    let folder = Folder::new(&NODE.replace("-50dBFS\"", "-50dBFS\"\npfa = 1e-2"))
        .with_noise("ci16_le", 30.0);
    let mut command = program();
    command.args(["run", "--config", "node.toml"]).current_dir(folder.path(""));
    command.env("RUST_LOG", "warn").stderr(Stdio::piped());
    let mut child = Guard(command.spawn().expect("it starts"));
    let mut line = String::new();
    let mut log = BufReader::new(child.0.stderr.take().expect("piped"));
    log.read_line(&mut line).expect("a line");
    assert!(line.contains("WARN") && line.contains("node.toml: bands[0].pfa"), "{line}");
}

/// The shipped example as a user copies it, on a free port.
#[test]
fn the_shipped_example_runs_as_it_is() {
    let config = Path::new(env!("CARGO_MANIFEST_DIR")).join("config/node.toml");
    let example = fs::read_to_string(config).expect("shipped");
    let shown = "#listen = \"127.0.0.1:8470\"";
    assert!(example.contains(shown));
    let folder = Folder::new(&example.replace(shown, "listen = \"127.0.0.1:0\""));
    let started = now();
    let node = folder.start();
    check_scene(&node, 81);
    let (status, log, took) = node.terminate();
    assert_eq!(status.code(), Some(0), "{log}");
    assert!(took < END_MAX, "{took:?}");
    let observed = runs(&folder, "C01", started, now());
    assert!(observed.iter().any(|run| run.observed_us > 0), "{observed:?}");
    assert_sound(&folder);
}

#[test]
fn the_demo_needs_nothing_and_says_that_it_is_invented() {
    let folder = Folder::new("");
    let mut command = program();
    command
        .args(["demo", "--listen", "127.0.0.1:0", "--data", "data", "--seed", "7"])
        .current_dir(folder.path(""))
        .stdout(Stdio::piped());
    let mut node = Node::start(command);
    let lines = node.out(2);
    assert!(lines[0].starts_with("An invented scene"), "{lines:?}");
    assert_eq!(
        lines[1],
        format!("Open http://{}/ (history in data); Ctrl-C ends it.", node.address)
    );
    check_scene(&node, 90);
    let (status, log, took) = node.terminate();
    assert_eq!(status.code(), Some(0), "{log}");
    assert!(took < END_MAX, "{took:?}");
    assert_sound(&folder);
}

/// A node on the scene says that it is simulated, and what its channels are.
fn check_scene(node: &Node, channels: usize) {
    let info = node.get("/v1/node");
    assert_eq!(info["simulated"], Value::Bool(true));
    assert!(text(&info, "source").starts_with("invented scene"), "{info}");
    let answer = node.wait_for("an idle verdict", "/v1/channels", is_idle);
    assert_eq!(answer["channels"].as_array().expect("a list").len(), channels);
    node.wait_for("samples", "/v1/health", |h| h["capture"]["state"] == "running");
}
