//! `prove`: its counts, its intervals and its verdicts, on detectors that hold their rates and on
//! ones that are made not to.
//!
//! The site and its channels are invented.

use std::process::{Command, Output};

use fallowband::detection::plan::{Channel, Plan};
use fallowband::detection::statistics::interval;
use fallowband::detection::window::Window;
use fallowband::proof::format::NumberFormat;
use fallowband::proof::radiometer::{decibels, linear};
use fallowband::proof::tally::{Outcome, Tally, judge_pd, judge_pfa};
use fallowband::proof::trial::{Kind, Signals, Trial, run_batch};
use num_complex::Complex32;
use rand_core::SeedableRng;
use rand_distr::{Distribution, StandardUniform};
use rand_xoshiro::Xoshiro256PlusPlus;
use serde_json::Value;

mod support;

/// Dwells of 20 ms on 12 channels of 3 kHz at 96 kS/s; Pfa 1 % so that few dwells tell.
const NODE: &str = r#"
[node]
site = "Lower Saltmarsh (invented)"
name = "saltmarsh-test"
[receiver]
centre = "448.1MHz"
sample_rate = "96kS/s"
[[bands]]
id = "saltmarsh"
protection_level = "-60dBFS"
pfa = "1%"
dwell = "20ms"
[bands.raster]
first_centre = "448.078MHz"
spacing = "4kHz"
count = 12
bandwidth = "3kHz"
id_prefix = "C"
"#;

fn run(configuration: &str, arguments: &str) -> Output {
    let folder = tempfile::tempdir().expect("a folder");
    std::fs::write(folder.path().join("node.toml"), configuration).expect("written");
    let mut command = Command::new(env!("CARGO_BIN_EXE_fallowband"));
    command.args(["prove", "--config", "node.toml"]).args(arguments.split_whitespace());
    command.current_dir(folder.path()).output().expect("it runs")
}

fn json(output: &Output) -> Value {
    let err = String::from_utf8_lossy(&output.stderr);
    serde_json::from_slice(&output.stdout).unwrap_or_else(|error| panic!("{error}: {err}"))
}

fn number(value: &Value, key: &str) -> f64 {
    value[key].as_f64().unwrap_or_else(|| panic!("{key}: {value}"))
}

#[test]
fn counts_do_not_depend_on_the_number_of_threads_but_on_the_seed() {
    let one = run(NODE, "--dwells 600 --seed 3 --threads 1 --json");
    let three = run(NODE, "--dwells 600 --seed 3 --threads 3 --json");
    assert_eq!(one.stdout, three.stdout);
    let other = json(&run(NODE, "--dwells 600 --seed 4 --json"));
    assert_ne!(other["results"], json(&one)["results"], "another seed draws other samples");
}

#[test]
fn a_detector_that_holds_its_rates_passes() {
    let output = run(NODE, "--dwells 4800 --seed 3 --json");
    let answer = json(&output);
    println!("{answer:#}");
    // Signals that fill a channel lose some 0.2 dB at its edges: a run of 4000 signals gave a rate
    // of 0.855, where 0.84 is the least. 1200 signals give it a sigma of 0.010.
    assert_eq!((output.status.code(), answer["outcome"].as_str()), (Some(0), Some("pass")));
    let results = answer["results"].as_array().expect("rows");
    assert_eq!(results.len(), 5);
    // Every dwell of noise decides every channel; 1 of 12 holds a signal in the others.
    let counts = |row: &Value| (number(row, "decisions"), number(row, "dwells"));
    assert_eq!(counts(&results[0]), (57_600.0, 4800.0));
    assert_eq!(counts(&results[1]), (1200.0, 1200.0));
    for row in results {
        let (low, high) = (number(row, "low"), number(row, "high"));
        assert!(low <= number(row, "independent_low") + 1e-9, "{row}");
        assert!(high >= number(row, "independent_high") - 1e-9, "{row}");
        assert!(number(row, "design_effect") >= 1.0, "{row}");
        assert!((low..=high).contains(&number(row, "measured")), "{row}");
    }
}

#[test]
fn few_trials_decide_nothing() {
    let output = run(NODE, "--dwells 2");
    assert_eq!(output.status.code(), Some(2));
    let text = String::from_utf8(output.stdout).expect("UTF-8");
    assert!(text.contains("\nNOT DECIDED: too few trials"), "{text}");
    assert!(text.contains("seed 1"), "{text}");
}

#[test]
fn signals_on_a_fifth_of_the_channels_do_not_become_false_alarms_of_the_others() {
    let answer = json(&run(NODE, "--dwells 300 --occupied 20% --json"));
    let noise = &answer["results"][0];
    // Channels that hold a signal in the step or beside it are left out: of 12 with 2 on at a time,
    // at most 8 and at least 6 are left between the first step and the last.
    let decisions = number(noise, "decisions");
    assert!((300.0 * 6.0..300.0 * 8.1).contains(&decisions), "{noise}");
    assert!(number(noise, "low") <= 0.01 && number(noise, "high") >= 0.005, "{noise}");
}

#[test]
fn a_format_too_coarse_for_its_noise_fails_or_decides_nothing() {
    let with_rms = |steps: f64| {
        let floor_db = decibels(2.0 * (steps / 128.0).powi(2) * 3.0 / 96.0);
        run(NODE, &format!("--dwells 600 --format ci8 --floor {floor_db:.2}dBFS"))
    };
    // Noise of 0.3 steps rms: rounding makes more noise than there was, and signals drown in it.
    let output = with_rms(0.3);
    let text = String::from_utf8(output.stdout).expect("UTF-8");
    assert_eq!(output.status.code(), Some(1), "{text}");
    assert!(text.contains("\nFAIL: "), "{text}");
    // Of an eighth of a step: samples are zero, and the detector says that it cannot tell.
    let output = with_rms(0.125);
    let text = String::from_utf8(output.stdout).expect("UTF-8");
    assert_eq!(output.status.code(), Some(2), "{text}");
    assert!(text.contains("\nNOT DECIDED: no trial came to a decision"), "{text}");
    assert!(text.contains("7200 verdicts had no floor"), "{text}");
}

#[test]
fn wrong_input_is_one_line_and_its_exit_code() {
    for (configuration, arguments, code, expected) in [
        (NODE, "--seconds 0", 64, "\"0\" is out of range (1 s to 24 h)"),
        (NODE, "--seconds soon", 64, "\"soon\" is not a duration"),
        (NODE, "--dwells 0", 64, "'--dwells <COUNT>'"),
        (NODE, "--dwells 5 --seconds 5", 64, "cannot be used with"),
        (NODE, "--format ci12", 64, "is none of ci16_le, ci8, cu8, cf32_le"),
        (NODE, "--floor -50", 64, "\"-50\" is not a level"),
        (NODE, "--floor -50dBm", 64, "--floor: dBm does not go with a configuration in dBFS"),
        (NODE, "--floor -10dBFS", 64, "--floor: -10.0 dBFS leaves noise no room"),
        (NODE, "--occupied 60%", 64, "out of range"),
        ("[node]", "", 78, "node.toml: "),
    ] {
        let output = run(configuration, arguments);
        let err = String::from_utf8(output.stderr).expect("UTF-8");
        assert_eq!(
            (output.status.code(), output.stdout.len()),
            (Some(code), 0),
            "{arguments}: {err}"
        );
        assert_eq!(err.lines().count(), 1, "{err}");
        assert!(err.contains(expected), "{arguments}: {expected} is not in {err}");
    }
}

#[test]
fn decisions_that_go_together_widen_the_interval_as_the_ratio_estimator_says() {
    // Ten clusters of 50 that are all or nothing: as good as ten decisions, by hand
    // n/(n-1) sum (h - r t)^2 / (sum t)^2 = 10/9 * 10 * 25^2 / 500^2, over 0.25/500: 55.6.
    let mut tally = Tally::default();
    for index in 0..10 {
        tally.add(if index % 2 == 0 { 50 } else { 0 }, 50);
    }
    assert!((tally.design_effect() - 10.0 / 9.0 * 50.0).abs() < 1e-9);
    let (low, high) = tally.interval();
    let (independent_low, independent_high) = tally.interval_independent();
    // 9 decisions' worth, 4.5 hits, rounded outwards.
    assert!((low - interval::clopper_pearson(4, 9, 0.95).0).abs() < 1e-12);
    assert!((high - interval::clopper_pearson(5, 9, 0.95).1).abs() < 1e-12);
    assert!(high - low > 5.0 * (independent_high - independent_low));

    // Independent decisions: the spread between clusters is theirs, and the order does not matter.
    let mut rng = Xoshiro256PlusPlus::seed_from_u64(9);
    let mut draw = || -> f64 { StandardUniform.sample(&mut rng) };
    let hits: Vec<u64> =
        (0..4000).map(|_| (0..20).filter(|_| draw() < 0.1).count() as u64).collect();
    let (mut forth, mut back) = (Tally::default(), Tally::default());
    hits.iter().for_each(|hits| forth.add(*hits, 20));
    hits.iter().rev().for_each(|hits| back.add(*hits, 20));
    assert_eq!(forth, back);
    // The variance ratio of 4000 clusters has a sigma of sqrt(2 / 4000) = 2.2 %; four sigma. It is
    // never below 1.
    assert!((1.0..1.09).contains(&forth.design_effect()), "{}", forth.design_effect());
    assert_eq!(Tally::default().interval(), (0.0, 1.0));
}

#[test]
fn outcomes_follow_the_interval() {
    let of = |hits: u64, clusters: u64| {
        let mut tally = Tally::default();
        for index in 0..clusters {
            tally.add(hits / clusters + u64::from(index < hits % clusters), 1000);
        }
        tally
    };
    assert_eq!(judge_pfa(&of(1000, 1000), 1e-3), Outcome::Pass);
    assert_eq!(judge_pfa(&of(1150, 1000), 1e-3), Outcome::Pass);
    assert_eq!(judge_pfa(&of(1400, 1000), 1e-3), Outcome::Fail);
    assert_eq!(judge_pfa(&of(600, 1000), 1e-3), Outcome::Fail);
    assert_eq!(judge_pfa(&of(3, 3), 1e-3), Outcome::NotDecided);
    assert_eq!(judge_pfa(&Tally::default(), 1e-3), Outcome::NotDecided);
    assert_eq!(judge_pd(&of(900, 1), 0.9, 0.85), Outcome::Pass);
    assert_eq!(judge_pd(&of(860, 1), 0.9, 0.85), Outcome::Pass);
    assert_eq!(judge_pd(&of(840, 1), 0.9, 0.85), Outcome::NotDecided);
    assert_eq!(judge_pd(&of(800, 1), 0.9, 0.85), Outcome::Fail);
    let mut few = Tally::default();
    few.add(9, 10);
    assert_eq!(judge_pd(&few, 0.9, 0.85), Outcome::NotDecided);
    assert_eq!(judge_pd(&Tally::default(), 0.9, 0.85), Outcome::NotDecided);
}

#[test]
fn numbers_are_rounded_as_the_formats_hold_them() {
    let of = |format: NumberFormat, re: f32, im: f32| {
        let mut samples = [Complex32::new(re, im)];
        let clipped = format.apply(&mut samples);
        (samples[0].re * format.steps().unwrap_or(1.0), samples[0].im, clipped)
    };
    assert_eq!(of(NumberFormat::Ci16Le, 100.4 / 32768.0, 0.0), (100.0, 0.0, 0));
    assert_eq!(of(NumberFormat::Ci16Le, -100.6 / 32768.0, 0.0), (-101.0, 0.0, 0));
    assert_eq!(of(NumberFormat::Ci16Le, 1.5, 0.0), (32767.0, 0.0, 1));
    assert_eq!(of(NumberFormat::Ci8, 0.3 / 128.0, -1.5), (0.0, -1.0, 1));
    assert_eq!(of(NumberFormat::Cu8, -2.6 / 128.0, 0.0), (-3.0, 0.0, 0));
    assert_eq!(of(NumberFormat::Cf32Le, 0.123, 0.0), (0.123, 0.0, 0));
    // Rounding adds a twelfth of a squared step to each component, once noise is a step rms.
    let steps = 128.0_f64;
    let mut noise = support::Noise::new(5, 2.0 / (steps * steps));
    let mut samples = noise.samples(200_000);
    NumberFormat::Ci8.apply(&mut samples);
    let power: f64 = samples.iter().map(|s| f64::from(s.norm_sqr())).sum::<f64>() / 200_000.0;
    // 200,000 samples give the mean power a sigma of 0.22 %; four of them.
    let wanted = 2.0 * (1.0 + 1.0 / 12.0) / (steps * steps);
    assert!((power / wanted - 1.0).abs() < 0.009, "{}", power / wanted);
}

fn small_plan() -> Plan {
    let mut plan = support::plan(600e3, 20);
    plan.spectrum.window = Window::BlackmanHarris;
    plan
}

#[test]
fn signals_are_where_they_should_be_with_the_power_they_should_have() {
    let plan = small_plan();
    let noise_power = 1e-5;
    let in_channel = |channel: &Channel| noise_power * channel.bandwidth_hz / 600e3;
    for kind in [Kind::NoiseLike, Kind::Carrier] {
        let powers = plan.channels.iter().map(|c| Some(in_channel(c) * linear(20.0))).collect();
        let signals = Signals { kind, share: 0.1, powers };
        let trial = Trial {
            plan: plan.clone(),
            format: NumberFormat::Cf32Le,
            noise_power,
            signals: Some(signals),
            seed: 8,
            number: 0,
        };
        let (mut sum, mut count) = (0.0, 0.0);
        let mut before = Vec::new();
        let steps = run_batch(&trial, 0, 16, |report| {
            let on: Vec<usize> = report
                .verdicts
                .iter()
                .filter(|v| v.levels.is_some_and(|l| l.power_db - l.floor_db > 10.0))
                .map(|verdict| verdict.channel_index)
                .collect();
            assert_eq!(on.len(), 2, "a tenth of 20 channels: {on:?}");
            assert!(on.iter().all(|channel| !before.contains(channel)), "{before:?} then {on:?}");
            for channel in &on {
                let levels = report.verdicts[*channel].levels.expect("measured");
                sum += linear(levels.power_db) / (in_channel(&plan.channels[*channel]));
                count += 1.0;
            }
            before = on;
        });
        assert_eq!(steps.len(), 16);
        for step in &steps {
            assert_eq!((step.occupied[0].decided, step.occupied[0].detected), (2, 2));
        }
        // 32 channel energies of some 300 looks each, at 100 + 1 times the noise: a sigma of 1 %
        // for noise-like signals; their edges lose up to 0.2 dB, 5 %.
        let over = sum / count / 101.0;
        assert!((0.91..1.05).contains(&over), "{kind:?}: {over}");
    }
}
