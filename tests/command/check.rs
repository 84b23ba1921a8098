//! `check`: the numbers against the statistics they come from, and against what a replay then does.

use std::path::Path;

use fallowband::config::Configuration;
use fallowband::detection::burst::BURST_SHARE;
use fallowband::detection::statistics::quadratic::GammaSum;
use fallowband::detection::statistics::ratio;
use serde_json::Value;

use crate::support::{Folder, NODE, Outcome, program};

fn numbers(folder: &Folder) -> Value {
    let text = folder.run(&["check", "--config", "node.toml", "--json"]).good();
    serde_json::from_str(&text).expect("JSON")
}

fn number(value: &Value, key: &str) -> f64 {
    value[key].as_f64().unwrap_or_else(|| panic!("{key}: {value}"))
}

/// Looks of the floor that give a threshold, by bisection: it falls as they grow.
fn floor_looks(energy: &GammaSum, threshold: f64, pfa: f64) -> f64 {
    let (mut low, mut high) = (1.0_f64, 1e9_f64);
    for _ in 0..100 {
        let middle = (low * high).sqrt();
        if ratio::threshold(energy, middle, pfa) > threshold {
            low = middle;
        } else {
            high = middle;
        }
    }
    low
}

#[test]
fn the_shipped_example_passes_as_it_is() {
    let config = Path::new(env!("CARGO_MANIFEST_DIR")).join("config");
    for name in ["node.toml", "demo.toml"] {
        let mut command = program();
        command.args(["check", "--config"]).arg(config.join(name));
        let text = Outcome::of(command.output().expect("it runs")).good();
        assert!(text.contains("source                    invented scene lower_saltmarsh\n"));
        assert!(!text.contains("\nnote "), "{text}");
    }
}

#[test]
fn the_text_is_lined_up_and_its_numbers_are_short() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 0.5);
    let text = folder.run(&["check", "--config", "node.toml"]).good();
    for line in text.lines().filter(|line| !line.is_empty()) {
        assert_eq!(line, line.trim_end());
        let (name, value) = line.split_at(26);
        assert!(!name.trim().is_empty() && !value.starts_with(' '), "{line}");
        let digits = |word: &str| word.chars().filter(char::is_ascii_digit).count();
        let words = line.split(' ').filter(|word| word.parse::<f64>().is_ok());
        assert!(words.clone().all(|word| digits(word) <= 7), "{line}");
    }
    for line in [
        "node                      saltmarsh-test at Lower Saltmarsh (invented)",
        "source                    recording site.sigmf-meta",
        "receiver                  48 kS/s at 448.1 MHz, 43.2 kHz of it usable",
        "band                      saltmarsh, 8 channels",
        "dwell                     200 ms in 20 slices of 10 ms",
        "false detections an hour  1.8 on a channel, 14 in the band",
        "idle channel on offer     96.9 % of the time",
    ] {
        assert!(text.lines().any(|found| found == line), "{line} is not in:\n{text}");
    }
}

#[test]
fn threshold_and_sensitivity_are_those_of_one_and_the_same_floor() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 0.5);
    let json = numbers(&folder);
    let band = &json["numbers"]["bands"][0];
    let (looks, pd) = (number(band, "equivalent_looks"), 0.9);
    assert_eq!((number(band, "pfa"), number(band, "pd")), (1e-4, pd));
    // The rest is for the slices.
    let pfa = (1.0 - BURST_SHARE) * 1e-4;
    let threshold = 10f64.powf(number(band, "threshold_over_floor_db") / 10.0);
    // A gamma variate of the same looks is near enough: 1,300 of them, and the table's own 1e-4.
    let energy = GammaSum::of_looks(looks);
    let known_floor = ratio::threshold(&energy, f64::INFINITY, pfa);
    assert!(threshold > known_floor, "an estimated floor costs: {threshold} {known_floor}");
    let floor_looks = floor_looks(&energy, threshold, pfa);
    // 12 cells about as wide as the channel, of which a sloping floor at the edge uses about four.
    assert!((2.0 * looks..11.0 * looks).contains(&floor_looks), "{floor_looks} for {looks}");
    let snr_db = 10.0 * ratio::required_snr(&energy, floor_looks, threshold, pd).log10();
    let stated_db = number(band, "sensitivity_over_floor_db");
    // The program interpolates in a table that is good to 1e-4 of the ratio; a required SNR of
    // -6 dB is a ratio of 1.25, so the table moves it by 5e-4 of itself: 0.002 dB, and as much for
    // the root.
    assert!((snr_db - stated_db).abs() < 0.005, "{snr_db} {stated_db}");
    let floor_max_db = number(band, "floor_max_db");
    assert!((floor_max_db - (-50.0 - stated_db)).abs() < 1e-9);
}

#[test]
fn a_replay_of_noise_has_the_threshold_and_the_sensitivity_that_check_states() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 4.0);
    let json = numbers(&folder);
    let band = &json["numbers"]["bands"][0];
    let channel = band["least_sensitive_channel"].as_str().expect("a name");
    let lines = folder.run(&["replay", "site", "--config", "node.toml", "--verdicts", "-"]).out;
    let lines: Vec<Value> =
        lines.lines().map(|line| serde_json::from_str(line).expect("JSON")).collect();
    let median_over_floor_db = |key: &str, channel: &str| {
        let of_channel = lines.iter().filter(|line| line["channel"] == channel);
        let mut levels: Vec<f64> =
            of_channel.map(|line| number(line, key) - number(line, "floor_db")).collect();
        levels.sort_by(f64::total_cmp);
        levels[levels.len() / 2]
    };
    // Lines are rounded to 0.001 dB. Excision drops 1 % of idle cells: most dwells keep all.
    for (key, stated) in [
        ("threshold_db", number(band, "threshold_over_floor_db")),
        ("sensitivity_db", number(band, "sensitivity_over_floor_db")),
    ] {
        let found_db = median_over_floor_db(key, channel);
        assert!((found_db - stated).abs() < 0.02, "{key}: {found_db}, stated {stated}");
        for other in ["C1", "C2", "C3", "C4", "C5", "C6", "C7", "C8"] {
            assert!(median_over_floor_db(key, other) < stated + 0.02, "{key} of {other}");
        }
    }
}

#[test]
fn costs_and_false_detections_follow_from_the_configuration() {
    let folder =
        Folder::new(&NODE.replace("-50dBFS\"", "-50dBFS\"\ndwell = \"100ms\"\npfa = 1e-3"))
            .with_noise("ci16_le", 0.5);
    let json = numbers(&folder);
    let band = &json["numbers"]["bands"][0];
    // 36000 dwells an hour.
    assert!((number(band, "false_detections_per_channel_hour") - 36.0).abs() < 1e-6);
    assert!((number(band, "false_detections_per_hour") - 8.0 * 36.0).abs() < 1e-6);
    // On offer when none of the 620 dwells of check time and hold-off was a false alarm.
    let share = (1.0_f64 - 1e-3).powi(620);
    assert!((number(band, "idle_offer_share") - share).abs() < 1e-3);
    let warnings = json["warnings"].as_array().expect("a list");
    assert_eq!(warnings.len(), 1, "{warnings:?}");
    assert!(warnings[0].as_str().expect("text").starts_with("bands[0].pfa"), "{warnings:?}");
    let text = folder.run(&["check", "--config", "node.toml"]).good();
    assert!(text.contains("\nidle channel on offer     53.7 % of the time\n"), "{text}");
    assert!(text.contains("\nnote                      bands[0].pfa"), "{text}");
    for key in ["buffers_bytes", "rollups_bytes_per_day", "runs_bytes_per_day"] {
        assert!(number(&json["numbers"], key) > 0.0);
    }
}

#[test]
fn a_channel_whose_floor_nothing_tells_is_named() {
    let one = "[[bands.channels]]\nid = \"WIDE\"\ncentre = \"448.1MHz\"\nbandwidth = \"43.2kHz\"";
    let raster = NODE.find("[bands.raster]").expect("there");
    let history = NODE.find("[history]").expect("there");
    let folder = Folder::new(&format!("{}{one}\n{}", &NODE[..raster], &NODE[history..]))
        .with_noise("ci16_le", 1.0);
    let json = numbers(&folder);
    assert_eq!(json["numbers"]["bands"][0]["threshold_over_floor_db"], Value::Null);
    let text = folder.run(&["check", "--config", "node.toml"]).good();
    assert!(text.contains("\nthreshold                 none in WIDE: "), "{text}");
    let rows = folder.run(&["replay", "site", "--config", "node.toml", "--json"]).good();
    let rows: Value = serde_json::from_str(&rows).expect("JSON");
    assert_eq!(rows[0]["unknown_reasons"], serde_json::json!(["no_reference"]));
    assert_eq!((number(&rows[0], "idle_s"), number(&rows[0], "occupied_s")), (0.0, 0.0));
}

#[test]
fn what_would_leave_the_bins_or_detect_noise_alone_is_refused() {
    let whole = NODE
        .replace("centre = \"448.1MHz\"", "centre = \"448.1MHz\"\nusable_bandwidth = \"48kHz\"")
        .replace("448.086MHz", "448.0775MHz")
        .replace("4kHz", "6.415kHz");
    let folder = Folder::new(&whole).with_noise("ci16_le", 0.5);
    let accepted = folder.run(&["check", "--config", "node.toml"]).good();
    assert!(accepted.contains("the whole sample rate"), "{accepted}");
    let whole = whole.replace("6.415kHz", "6.42kHz");
    let folder = Folder::new(&whole).with_noise("ci16_le", 0.5);
    let line = folder.run(&["check", "--config", "node.toml"]).fault(78);
    assert!(line.starts_with("node.toml: bands[0].raster: channel C8 "), "{line}");

    let coin = NODE.replace("-50dBFS\"", "-50dBFS\"\npfa = 0.5\npd = 0.5");
    let error = Configuration::parse(&coin, "node.toml", Path::new("")).expect_err("refused");
    assert!(error.to_string().starts_with("node.toml: bands[0].pd: 50 % is not above"), "{error}");
}
