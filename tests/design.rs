//! `design`: its closed forms against values worked out elsewhere (`tests/reference`, where each
//! file names its source), and the command as its first user meets it.

use std::collections::BTreeMap;
use std::process::{Command, Output};

use fallowband::config::Configuration;
use fallowband::proof::radiometer::{Radiometer, decibels, linear, noise_dbm, snr_wall};

/// The rows of a reference file: column name to number. Lines that open with `#` name the source.
fn rows(text: &str) -> Vec<BTreeMap<&str, f64>> {
    let mut lines = text.lines().filter(|line| !line.starts_with('#'));
    let names: Vec<&str> = lines.next().expect("a heading").split(',').collect();
    let number = |text: &str| -> f64 { text.parse().expect("a number") };
    lines.map(|line| names.iter().copied().zip(line.split(',').map(number)).collect()).collect()
}

fn known(pfa: f64, pd: f64) -> Radiometer {
    Radiometer { pfa, pd, cells: f64::INFINITY, uncertainty_db: 0.0 }
}

#[test]
fn thermal_noise_is_k_t_b() {
    let table = rows(include_str!("reference/thermal_noise.csv"));
    assert_eq!(table.len(), 18);
    for row in table {
        // The table has nine decimals.
        assert!((noise_dbm(row["bandwidth_hz"], 0.0) - row["noise_dbm"]).abs() < 1e-9, "{row:?}");
    }
    assert!((noise_dbm(25e3, 6.0) - noise_dbm(25e3, 0.0) - 6.0).abs() < 1e-12);
}

#[test]
fn the_wall_is_that_of_the_publication() {
    let table = rows(include_str!("reference/snr_wall.csv"));
    assert_eq!(table.len(), 12);
    for row in table {
        let wall_db = decibels(snr_wall(row["uncertainty_db"]));
        assert!((wall_db - row["snr_wall_db"]).abs() < 1e-8, "{row:?}: {wall_db}");
    }
    assert_eq!(snr_wall(0.0), 0.0);
}

#[test]
fn the_fewest_looks_are_those_of_the_exact_tails() {
    let table = rows(include_str!("reference/required_samples.csv"));
    assert_eq!(table.len(), 72);
    for row in table {
        let looks = known(row["pfa"], row["pd"]).looks_for(linear(row["snr_db"]));
        assert_eq!(looks, Some(row["looks_noise_like"] as u64), "{row:?}");
    }
}

#[test]
fn the_required_snr_is_that_of_the_exact_tails_for_both_kinds_of_signal() {
    let table = rows(include_str!("reference/required_snr.csv"));
    assert_eq!(table.len(), 54);
    for row in table {
        let detector = known(row["pfa"], row["pd"]);
        let noise_like_db = decibels(detector.required_snr(row["looks"]));
        assert!((noise_like_db - row["snr_db_noise_like"]).abs() < 1e-7, "{row:?}");
        let steady = detector.required_snr_constant_envelope(row["looks"]).expect("closed form");
        assert!((decibels(steady) - row["snr_db_constant_envelope"]).abs() < 1e-7, "{row:?}");
    }
}

#[test]
fn an_uncertain_floor_takes_the_averages_that_the_wall_asks_for() {
    let table = rows(include_str!("reference/required_samples_noise_uncertainty.csv"));
    let mut held = 0;
    for row in &table {
        let uncertainty_db = row["uncertainty_db"];
        let detector = Radiometer { uncertainty_db, ..known(row["pfa"], row["pd"]) };
        let looks = detector.looks_for(linear(row["snr_db"])).expect("above the wall") as f64;
        // The table's normal approximation neglects the skewness of the mean of n looks, 2/sqrt(n):
        // its first correction moves a quantile z by (z^2 - 1)/(3 sqrt n) of the spread. At the two
        // tails, |z| is up to 2.33, so the sum of both quantiles (2.56 at least) moves by up to
        // 1.7/sqrt(n), a share of 0.7/sqrt(n); looks move by twice that.
        let allowed = 1.4 / row["samples_clt"].sqrt() + 1.0 / row["samples_clt"];
        let off = (looks / row["samples_clt"] - 1.0).abs();
        assert!(off <= allowed, "{row:?}: {looks} looks, off by {off}, allowed {allowed}");
        held += 1;
    }
    assert_eq!(held, 30);
    // At the wall itself, no averaging helps; a little above it does.
    let detector = Radiometer { uncertainty_db: 1.0, ..known(1e-4, 0.9) };
    assert_eq!(detector.looks_for(snr_wall(1.0)), None);
    assert!(detector.looks_for(1.01 * snr_wall(1.0)).is_some());
}

#[test]
fn an_estimated_floor_costs_what_was_published() {
    let table = rows(include_str!("reference/estimated_noise_penalty.csv"));
    assert_eq!(table.len(), 9);
    for row in table {
        let exact = |cells: f64| {
            let detector = Radiometer { cells, ..known(1e-2, 0.9) };
            decibels(detector.required_snr(1e8))
        };
        // The published figure is the limit of infinitely many looks. At n of them the SNR is off
        // its limit by a share of some 4/sqrt(n): 4e-4 of it, 0.002 dB.
        let penalty_db = exact(row["cells"]) - exact(f64::INFINITY);
        assert!((penalty_db - row["penalty_db"]).abs() < 0.005, "{row:?}: {penalty_db}");
    }
}

#[test]
fn pd_and_pfa_hold_at_the_ends_of_the_uncertainty() {
    for (cells, uncertainty_db) in [(f64::INFINITY, 0.0), (f64::INFINITY, 0.5), (12.0, 1.0)] {
        let detector = Radiometer { pfa: 1e-3, pd: 0.95, cells, uncertainty_db };
        let looks = 200.0;
        let pfa = detector.pfa_at(looks, detector.threshold(looks));
        assert!((pfa / 1e-3 - 1.0).abs() < 1e-6, "{pfa}");
        let snr = detector.required_snr(looks);
        let signal = fallowband::proof::radiometer::Signal::NoiseLike;
        let pd = detector.pd_at(looks, snr, signal).expect("a closed form");
        assert!((pd - 0.95).abs() < 1e-9, "{pd}");
    }
}

fn run(arguments: &str) -> Output {
    let mut command = Command::new(env!("CARGO_BIN_EXE_fallowband"));
    command.arg("design").args(arguments.split(' ')).output().expect("it runs")
}

fn good(arguments: &str) -> String {
    let output = run(arguments);
    let err = String::from_utf8(output.stderr).expect("UTF-8");
    assert_eq!((output.status.code(), err.as_str()), (Some(0), ""), "{arguments}");
    String::from_utf8(output.stdout).expect("UTF-8")
}

fn json(arguments: &str) -> serde_json::Value {
    serde_json::from_str(&good(&format!("{arguments} --json"))).expect("JSON")
}

fn number(value: &serde_json::Value, pointer: &str) -> f64 {
    value.pointer(pointer).and_then(serde_json::Value::as_f64).expect(pointer)
}

#[test]
fn the_dwell_that_a_level_takes_gives_back_that_level() {
    let link = "--bandwidth 25kHz --noise-figure 6dB --noise-uncertainty 0.2dB";
    let forward = json(&format!("{link} --protection-level -127dBm"));
    let dwell_s = number(&forward, "/numbers/dwell_needed_s");
    let back = json(&format!("{link} --dwell {dwell_s:.9}s"));
    let sensitivity_db = number(&back, "/numbers/dwell/sensitivity_db");
    // Whole looks: a little better than asked, by less than one look's worth.
    assert!((-127.05..=-127.0 + 1e-6).contains(&sensitivity_db), "{sensitivity_db}");
    let floor_db = number(&forward, "/numbers/floor_db");
    assert!((floor_db - noise_dbm(25e3, 6.0)).abs() < 1e-12);
}

#[test]
fn sweep_false_detections_and_offers_follow_the_revisit_time() {
    let all = "--bandwidth 16kHz --floor -95dBFS --dwell 200ms --channels 200 --spacing 25kHz \
               --usable-bandwidth 2.3MHz --settling 5ms";
    let json = json(&all.replace("  ", ""));
    // (2.3 MHz - 16 kHz) / 25 kHz = 91.4: 92 channels in a segment, three segments.
    assert_eq!(json["numbers"]["sweep"]["channels_per_segment"], 92);
    let sweep_s = number(&json, "/numbers/sweep/sweep_s");
    assert!((sweep_s - 3.0 * 0.205).abs() < 1e-12, "{sweep_s}");
    let per_hour = number(&json, "/numbers/dwell/false_detections_per_channel_hour");
    assert!((per_hour - 1e-4 * 3600.0 / sweep_s).abs() < 1e-9);
    let share = number(&json, "/numbers/dwell/idle_offer_share");
    assert!((share - (-1e-4 / sweep_s * 62.0).exp()).abs() < 1e-9);
}

#[test]
fn the_rules_that_are_not_given_are_those_of_a_configuration() {
    let text = "[node]\nsite = \"a\"\nname = \"a\"\n[receiver]\ncentre = \"448MHz\"\n\
                sample_rate = \"48kS/s\"\n[[bands]]\nid = \"b\"\nprotection_level = \"-90dBFS\"\n\
                dwell = \"200ms\"\n[[bands.channels]]\nid = \"c\"\ncentre = \"448MHz\"\n\
                bandwidth = \"3kHz\"\n";
    let configuration = Configuration::parse(text, "a.toml", "".as_ref()).expect("right");
    let plan = configuration.plan(None, None).expect("fits");
    let band = &plan.bands[0];
    let json = json("--bandwidth 3kHz --floor -90dBFS --dwell 200ms");
    assert_eq!(number(&json, "/numbers/pfa"), band.pfa);
    assert_eq!(number(&json, "/numbers/pd"), band.pd);
    let share = number(&json, "/numbers/dwell/idle_offer_share");
    assert!((share - fallowband::config::idle_offer_share(band)).abs() < 1e-12, "{share}");
}

#[test]
fn what_is_not_enough_is_said() {
    let text = good("--bandwidth 25kHz --noise-figure 6dB --dwell 1ms");
    assert!(text.contains("95 % is wanted"), "{text}");
    let below = "--bandwidth 25kHz --noise-figure 6dB --noise-uncertainty 1dB --protection-level";
    let text = good(&format!("{below} -134dBm"));
    assert!(text.contains("NOT above it") && text.contains("no dwell is long enough"), "{text}");
    let text = good(&format!("{below} -124dBm --dwell 100us --hold-off 0s --check-time 0s"));
    assert!(text.contains("does not reach the protection level: it takes"), "{text}");
}

#[test]
fn wrong_arguments_are_one_line_that_names_them() {
    let link = "--bandwidth 16kHz --floor -95dBFS";
    for (arguments, expected) in [
        (link.to_owned(), "--protection-level <LEVEL>"),
        ("--bandwidth 16 --floor -95dBFS --dwell 1s".to_owned(), "\"16\" is not a frequency"),
        (format!("{link} --noise-figure 3dB --dwell 1s"), "'--noise-figure <RATIO>'"),
        (format!("{link} --dwell 1s --noise-uncertainty 3"), "\"3\" is not a ratio"),
        (format!("{link} --dwell 1us"), "--dwell: 1 us in 16 kHz is out of range (62.5 us to"),
        (format!("{link} --protection-level -100dBm"), "does not go with a floor in dBFS"),
        (format!("{link} --dwell 1s --pfa 60%"), "out of range (1e-9 to 50 %)"),
        (format!("{link} --dwell 1s --pd 0.5 --pfa 0.5"), "--pd: 50 % is not above --pfa (50 %)"),
        (format!("{link} --dwell 1s --channels 9"), "--usable-bandwidth or --sample-rate"),
        (format!("{link} --dwell 1s --sample-rate 9kS/s"), "--sample-rate: 9000 S/s is less"),
        (format!("{link} --dwell 1s --curve pd --json"), "rows are CSV"),
        (format!("{link} --dwell 1s --curve roc"), "'roc'"),
    ] {
        let output = run(&arguments);
        let err = String::from_utf8(output.stderr).expect("UTF-8");
        assert_eq!(
            (output.status.code(), output.stdout.len()),
            (Some(64), 0),
            "{arguments}: {err}"
        );
        assert_eq!(err.lines().count(), 1, "{err}");
        assert!(err.contains(expected), "{arguments}: {expected} is not in {err}");
    }
}

#[test]
fn curves_are_rows_through_the_working_point_or_a_new_drawing() {
    let link = "--bandwidth 16kHz --floor -95dBFS --dwell 20ms";
    for (curve, heading) in [
        ("pd", "snr_db,signal_dbfs,pd_noise_like,pd_constant_envelope"),
        ("pfa", "threshold_over_floor_db,threshold_dbfs,pfa,pfa_nominal_noise"),
    ] {
        let text = good(&format!("{link} --curve {curve}"));
        let mut lines = text.lines();
        assert_eq!(lines.next(), Some(heading));
        let rows: Vec<Vec<f64>> = lines
            .map(|line| line.split(',').take(3).map(|cell| cell.parse().expect("number")).collect())
            .collect();
        let rises = rows.windows(2).all(|pair| pair[0][2] <= pair[1][2]);
        let falls = rows.windows(2).all(|pair| pair[0][2] >= pair[1][2]);
        assert!(if curve == "pd" { rises } else { falls }, "{text}");
        let numbers = json(link);
        let (place, value, key) = match curve {
            "pd" => ("/numbers/dwell/sensitivity_over_floor_db", 0.9, 1.0),
            _ => ("/numbers/dwell/threshold_over_floor_db", 1e-4, -1.0),
        };
        // The crossing lies between the two rows around the working point.
        let at = number(&numbers, place);
        let (before, after) = (rows.iter().rfind(|r| r[0] <= at), rows.iter().find(|r| r[0] > at));
        let (before, after) = (before.expect("a row")[2], after.expect("a row")[2]);
        assert!(
            (value - before) * key >= -1e-9 && (after - value) * key >= -1e-9,
            "{before} {after}"
        );
    }
    let folder = tempfile::tempdir().expect("a folder");
    let path = folder.path().join("pd.svg");
    let draw = format!("{link} --curve pd --svg {}", path.display());
    assert!(good(&draw).contains("sensitivity"));
    let svg = std::fs::read_to_string(&path).expect("written");
    for word in ["SNR in the channel (dB)", "probability of detection", "noise-like", "</svg>"] {
        assert!(svg.contains(word), "{word}");
    }
    let again = run(&draw);
    assert_eq!(again.status.code(), Some(73));
    assert_eq!(std::fs::read_to_string(&path).expect("still there"), svg);
}
