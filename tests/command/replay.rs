//! `replay`: verdict lines, the summary, and recordings that cannot be used.

use std::collections::BTreeMap;
use std::fs;
use std::io::{BufRead, BufReader};
use std::process::Stdio;

use jiff::Timestamp;
use serde_json::{Value, json};

use crate::support::{Folder, NODE, Outcome, add_carrier, noise, program, usual_captures};

const KEYS: [&str; 13] = [
    "time",
    "duration_s",
    "channel",
    "centre_hz",
    "bandwidth_hz",
    "verdict",
    "level_ref",
    "power_db",
    "floor_db",
    "threshold_db",
    "sensitivity_db",
    "own",
    "reasons",
];

/// The lines and the summary of a replay of the recording `site`.
fn replay(folder: &Folder) -> (Vec<Value>, Vec<Value>) {
    let replay = ["replay", "site", "--config", "node.toml", "--json", "--verdicts"];
    let outcome = folder.run(&[&replay[..], &["-"]].concat());
    assert_eq!(outcome.code, Some(0), "{outcome:?}");
    let lines: Vec<Value> = outcome
        .out
        .lines()
        .map(|line| serde_json::from_str(line).unwrap_or_else(|error| panic!("{error}: {line}")))
        .collect();
    let rows: Vec<Value> = serde_json::from_str(&outcome.err).expect("the summary, nothing else");
    (lines, rows)
}

fn text<'a>(line: &'a Value, key: &str) -> &'a str {
    line[key].as_str().unwrap_or_else(|| panic!("{key} is no text: {line}"))
}

fn number(line: &Value, key: &str) -> f64 {
    line[key].as_f64().unwrap_or_else(|| panic!("{key} is no number: {line}"))
}

fn start_ns(line: &Value) -> i128 {
    let time = text(line, "time");
    assert!(time.ends_with('Z') && time.len() == 27, "RFC 3339 in UTC to the microsecond: {time}");
    time.parse::<Timestamp>().expect(time).as_nanosecond()
}

/// Checks the form of all lines and that the summary's times are their sums; returns the gaps (ns)
/// between consecutive dwells that do not join.
fn check_lines(lines: &[Value], rows: &[Value]) -> Vec<i128> {
    let mut ends_ns: BTreeMap<&str, i128> = BTreeMap::new();
    let mut sums_s: BTreeMap<(&str, &str), f64> = BTreeMap::new();
    let mut gaps = Vec::new();
    for line in lines {
        let mut keys: Vec<&str> =
            line.as_object().expect("an object").keys().map(String::as_str).collect();
        keys.sort_unstable();
        let mut expected = KEYS;
        expected.sort_unstable();
        assert_eq!(keys, expected, "{line}");
        let (channel, verdict) = (text(line, "channel"), text(line, "verdict"));
        assert!(["occupied", "idle", "unknown"].contains(&verdict), "{line}");
        assert_eq!((&line["own"], text(line, "level_ref")), (&json!(false), "dBFS"));
        assert_eq!(line["reasons"].as_array().expect("a list").is_empty(), verdict != "unknown");
        let start_ns = start_ns(line);
        let duration_ns = (number(line, "duration_s") * 1e9).round() as i128;
        assert!(duration_ns > 0, "{line}");
        if let Some(end_ns) = ends_ns.insert(channel, start_ns + duration_ns) {
            // Times are cut to the microsecond, so two that touch differ by less than that.
            let gap_ns = start_ns - end_ns;
            assert!(gap_ns > -1_000, "dwells overlap: {line}");
            gaps.extend((gap_ns >= 1_000).then_some(gap_ns));
        }
        *sums_s.entry((channel, verdict)).or_default() += number(line, "duration_s");
    }
    for row in rows {
        let channel = text(row, "channel");
        for verdict in ["occupied", "idle", "unknown"] {
            let sum_s = sums_s.remove(&(channel, verdict)).unwrap_or_default();
            // The summary is rounded to the microsecond.
            let stated_s = number(row, &format!("{verdict}_s"));
            assert!((sum_s - stated_s).abs() < 1e-6, "{channel} {verdict}: {sum_s} {stated_s}");
        }
        let dwells = lines.iter().filter(|line| line["channel"] == channel).count();
        assert_eq!(number(row, "dwells") as usize, dwells);
    }
    assert!(sums_s.is_empty(), "channels that the summary lacks: {sums_s:?}");
    gaps
}

#[test]
fn every_line_is_whole_dwells_join_and_the_summary_is_the_sum_of_the_lines() {
    // At 44.1 kS/s neither samples nor dwells last whole microseconds.
    for rate_hz in [48_000.0, 44_100.0] {
        let folder =
            Folder::new(&NODE.replace("448.086MHz", "448.087MHz").replace("4kHz", "3.5kHz"));
        let mut samples = noise(rate_hz, 4.0);
        let half = samples.len() / 2;
        add_carrier(&mut samples, rate_hz, half);
        folder.record("site", "ci16_le", &samples, rate_hz, usual_captures());
        let (lines, rows) = replay(&folder);
        assert_eq!(text(&lines[0], "time"), "2026-05-04T06:30:00.000000Z");
        assert_eq!(check_lines(&lines, &rows), [0; 0], "one stretch without a gap");
        assert_eq!(rows.len(), 8);
        // The carrier at 448.102 MHz lies in C5 (448.101 MHz, 3 kHz wide), for the second half.
        let occupied_s = number(&rows[4], "occupied_s");
        assert!((1.9..2.4).contains(&occupied_s), "{occupied_s}");
        // A carrier of amplitude 0.05; the noise, 23 dB below, does not matter beside it. At
        // 44.1 kS/s the channel holds 17.4 bins; 17 are measured and referred to 17.4: 0.1 dB.
        assert!((number(&rows[4], "power_max_db") - 20.0 * 0.05_f64.log10()).abs() < 0.2);
        assert_eq!(rows[4]["unknown_reasons"], json!([]));
        // 7 channels of 20 dwells at Pfa 1e-4: more than 2 false alarms have probability 5e-7.
        let others: f64 = (0..8).filter(|i| *i != 4).map(|i| number(&rows[i], "occupied_s")).sum();
        assert!(others < 0.5, "{others}");
    }
}

#[test]
fn a_gap_in_the_recording_is_in_no_line_and_in_no_sum() {
    let folder = Folder::new(NODE);
    let captures = json!([
        usual_captures()[0],
        {"core:sample_start": 72_000, "core:datetime": "2026-05-04T06:30:05Z"},
    ]);
    folder.record("site", "ci16_le", &noise(48_000.0, 3.0), 48_000.0, captures);
    let (lines, rows) = replay(&folder);
    let gaps = check_lines(&lines, &rows);
    // Samples end at 1.5 s; what a last slice lacks is dropped with it, at most 10 ms.
    assert_eq!(gaps.len(), 8, "{gaps:?}");
    assert!(gaps.iter().all(|gap| (3_500_000_000..=3_510_000_000).contains(gap)), "{gaps:?}");
    let observed_s = number(&rows[0], "idle_s") + number(&rows[0], "occupied_s");
    assert!((2.98..=3.0).contains(&observed_s), "{observed_s}");
}

#[test]
fn samples_that_are_no_numbers_cost_their_dwell_and_not_the_next() {
    let folder = Folder::new(NODE);
    let mut samples = noise(48_000.0, 2.0);
    samples[50_000] = (f32::NAN, 0.0);
    folder.record("site", "cf32_le", &samples, 48_000.0, usual_captures());
    let (lines, rows) = replay(&folder);
    check_lines(&lines, &rows);
    let (unknown, known): (Vec<&Value>, Vec<&Value>) =
        lines.iter().partition(|line| line["verdict"] == "unknown");
    assert_eq!(unknown.len(), 8, "one dwell on each channel");
    for line in unknown {
        assert_eq!(line["reasons"], json!(["not_finite"]));
        // Sample 50000 is at 1.042 s.
        assert_eq!(text(line, "time"), "2026-05-04T06:30:01.000000Z");
        for key in ["power_db", "floor_db", "threshold_db", "sensitivity_db"] {
            assert_eq!(line[key], Value::Null, "{line}");
        }
    }
    for line in known {
        for key in ["power_db", "floor_db", "threshold_db", "sensitivity_db"] {
            assert!((-60.0..-40.0).contains(&number(line, key)), "{line}");
        }
    }
    for row in &rows {
        assert_eq!(row["unknown_reasons"], json!(["not_finite"]));
        assert!((number(row, "floor_mean_db") + 49.0).abs() < 0.5, "{row}");
    }
}

#[test]
fn silence_is_unknown_and_never_idle() {
    let folder = Folder::new(NODE);
    folder.record("site", "ci16_le", &vec![(0.0, 0.0); 48_000], 48_000.0, usual_captures());
    let (lines, rows) = replay(&folder);
    check_lines(&lines, &rows);
    assert!(lines.iter().all(|line| line["verdict"] == "unknown"));
    assert_eq!(rows[0]["unknown_reasons"], json!(["no_noise"]));
}

#[test]
fn the_table_is_what_the_summary_says_and_lines_up() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 1.0);
    let table = folder.run(&["replay", "site", "--config", "node.toml"]).good();
    let lines: Vec<&str> = table.lines().collect();
    assert_eq!(lines.len(), 9);
    assert!(lines[0].starts_with("channel  centre MHz  occupied s"), "{table}");
    assert!(lines[0].contains("sensitivity dBFS"), "{table}");
    assert!(lines[2].starts_with("C2          448.090 "), "{table}");
    let column = lines[0].find("idle s").expect("a column") + "idle s".len();
    for line in &lines[1..] {
        assert!(line[..column].ends_with(|c: char| c.is_ascii_digit()), "{table}");
    }
}

#[test]
fn a_recording_that_cannot_be_used_is_told_by_file_key_and_value() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 1.0);
    let meta = fs::read_to_string(folder.path("site.sigmf-meta")).expect("there");
    let refused = |name: &str, change: &dyn Fn(&mut Value)| {
        let mut value: Value = serde_json::from_str(&meta).expect("JSON");
        change(&mut value);
        fs::write(folder.path("bad.sigmf-meta"), value.to_string()).expect("written");
        fs::copy(folder.path("site.sigmf-data"), folder.path("bad.sigmf-data")).expect("copied");
        let line = folder
            .run(&["replay", "bad", "--config", "node.toml", "--verdicts", "lines"])
            .fault(65);
        assert!(!folder.path("lines").exists(), "{name}: no output was begun");
        line
    };
    let line = refused("unknown datatype", &|v| v["global"]["core:datatype"] = json!("cf64_le"));
    assert!(line.contains("bad.sigmf-meta: global.core:datatype: cf64_le"), "{line}");
    let line = refused("beyond the data", &|v| {
        v["captures"][0]["core:sample_start"] = json!(48_000);
    });
    assert!(line.contains("captures[0].core:sample_start: is sample 48000"), "{line}");
    let line = refused("two centres", &|v| {
        let second = json!({"core:sample_start": 100, "core:frequency": 449e6});
        v["captures"].as_array_mut().expect("a list").push(second);
    });
    assert!(line.contains("bad.sigmf-meta: captures[1].core:frequency: "), "{line}");
    let line = refused("time runs back", &|v| {
        let second = json!({"core:sample_start": 100, "core:datetime": "2026-05-04T06:29:00Z"});
        v["captures"].as_array_mut().expect("a list").push(second);
    });
    assert!(line.contains("captures[1].core:datetime: is 2026-05-04T06:29:00"), "{line}");

    fs::write(folder.path("bad.sigmf-meta"), &meta).expect("written");
    let data = fs::read(folder.path("site.sigmf-data")).expect("there");
    fs::write(folder.path("bad.sigmf-data"), &data[..data.len() - 1]).expect("written");
    let line = folder.run(&["replay", "bad", "--config", "node.toml"]).fault(65);
    assert!(line.starts_with("bad.sigmf-data: "), "{line}");
    fs::write(folder.path("bad.sigmf-meta"), "{").expect("written");
    let line = folder.run(&["replay", "bad", "--config", "node.toml"]).fault(65);
    assert!(line.starts_with("bad.sigmf-meta: is not JSON"), "{line}");
    let line = folder.run(&["replay", "none", "--config", "node.toml"]).fault(65);
    assert!(line.starts_with("none: no such recording"), "{line}");
    let line =
        folder.run(&["replay", "site", "--config", "node.toml", "--centre", "449MHz"]).fault(65);
    assert!(line.contains("449"), "{line}");
}

#[test]
fn a_recording_of_a_source_is_told_with_the_key_that_names_it() {
    let folder = Folder::new(NODE);
    for command in ["check", "run"] {
        let line = folder.run(&[command, "--config", "node.toml"]).fault(65);
        assert_eq!(line, "node.toml: receiver.recording: site.sigmf-meta: no such file");
    }
    assert!(!folder.path("data").exists());
}

#[test]
fn a_recording_without_a_date_counts_from_1970_and_says_so() {
    let folder = Folder::new(NODE);
    let captures = json!([{"core:sample_start": 0, "core:frequency": 448.1e6}]);
    folder.record("site", "ci16_le", &noise(48_000.0, 0.5), 48_000.0, captures);
    let replay = ["replay", "site", "--config", "node.toml", "--verdicts", "-"];
    let outcome = folder.run(&replay);
    assert_eq!(outcome.code, Some(0));
    assert!(outcome.err.starts_with("fallowband: note: site: states no date"), "{outcome:?}");
    assert!(outcome.out.contains("\"time\":\"1970-01-01T00:00:00.000000Z\""));
    let outcome = folder.run(&[&replay[..], &["--start", "2026-05-04T08:30:00+02:00"]].concat());
    assert!(!outcome.err.contains("note"), "{outcome:?}");
    assert!(outcome.out.contains("\"time\":\"2026-05-04T06:30:00.000000Z\""));
}

#[test]
fn a_file_that_holds_something_is_left_as_it_was() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 0.5);
    let replay =
        |file: &str| folder.run(&["replay", "site", "--config", "node.toml", "--verdicts", file]);
    fs::write(folder.path("notes"), "mine\n").expect("written");
    let line = replay("notes").fault(73);
    assert_eq!(line, "notes: holds something already; name a new file for --verdicts");
    assert_eq!(fs::read_to_string(folder.path("notes")).expect("there"), "mine\n");
    for (name, expected) in [
        (".", ".: cannot be written: Is a directory"),
        ("none/lines", "none/lines: cannot be written: No such file"),
        ("/dev/full", "/dev/full: cannot be written: No space left"),
    ] {
        let line = replay(name).fault(73);
        assert!(line.starts_with(expected), "{line}");
    }
    // An empty file is free to be filled, as one from mktemp is.
    fs::write(folder.path("empty"), "").expect("written");
    let table = replay("empty").good();
    replay("new").good();
    let lines = fs::read_to_string(folder.path("empty")).expect("there");
    assert_eq!(lines, fs::read_to_string(folder.path("new")).expect("there"));
    assert_eq!(lines.lines().count(), 3 * 8);
    assert!(table.starts_with("channel "), "{table}");
}

#[test]
fn a_reader_that_closes_early_is_no_fault_and_makes_no_noise() {
    let folder = Folder::new(&NODE.replace("-50dBFS\"", "-50dBFS\"\ndwell = \"20ms\"\npfa = 1e-6"))
        .with_noise("ci16_le", 4.0);
    let mut child = program()
        .args(["replay", "site", "--config", "node.toml", "--verdicts", "-"])
        .current_dir(folder.path(""))
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("it starts");
    let mut first = String::new();
    let mut reader = BufReader::new(child.stdout.take().expect("piped"));
    reader.read_line(&mut first).expect("a line");
    serde_json::from_str::<Value>(&first).expect("JSON");
    // About half a megabyte is to come, far more than a pipe holds.
    drop(reader);
    assert_eq!(Outcome::of(child.wait_with_output().expect("it ends")).good(), "");
}
