//! Ten simulated minutes of the demo's site through the detector, against the truth of the scene: a
//! confusion table with exact intervals, by SNR and by kind of user.

use std::collections::BTreeMap;
use std::path::Path;

use fallowband::capture::Source;
use fallowband::capture::empty_block;
use fallowband::capture::scene::SceneSource;
use fallowband::config::{Configuration, SCENES};
use fallowband::detection::detector::Detector;
use fallowband::detection::plan::Plan;
use fallowband::detection::statistics::interval;
use fallowband::detection::time::Utc;
use fallowband::detection::verdict::{DwellReport, State};
use fallowband::scene::{Scene, SceneSpec, Truth, UserKind};

const SEED: u64 = 1;
const MINUTES: u64 = 10;
const START: Utc = Utc(1_777_885_200_000_000_000); // 2026-05-04T09:00:00Z, a Monday.

fn demo_plan() -> Plan {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("config/demo.toml");
    let configuration = Configuration::load(&path).expect("the shipped file is right");
    let spec = SceneSpec::lower_saltmarsh();
    configuration.plan(Some(spec.centre_hz), Some(spec.sample_rate_hz)).expect("it fits the scene")
}

#[test]
fn the_demo_configuration_lays_its_channels_where_the_scene_has_them() {
    let plan = demo_plan();
    let spec = SceneSpec::lower_saltmarsh();
    assert_eq!(SCENES, ["lower_saltmarsh"]);
    assert_eq!(plan.channels.len(), spec.channels.len());
    for (channel, scene) in plan.channels.iter().zip(&spec.channels) {
        assert_eq!(channel.id, scene.id);
        assert!((channel.centre_hz - scene.centre_hz).abs() < 1.0, "{}", channel.id);
        assert_eq!(channel.bandwidth_hz, scene.bandwidth_hz);
        assert_eq!(channel.protected, scene.protected, "{}", channel.id);
    }
}

/// What happened on a channel while a dwell looked at it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
enum Row {
    /// A user was on for the whole dwell; its SNR in the channel, in steps of 5 dB from below.
    On { kind: &'static str, snr_step: i64 },
    /// On for a part of it; how much energy that leaves varies, so no rate is claimed.
    Partly { kind: &'static str },
    /// Nobody was on.
    Off { neighbour: bool },
}

/// Verdicts of one row: occupied, idle, unknown.
type Counts = [u64; 3];

/// Tells for every channel which users are in it.
struct Judge {
    truth: Truth,
    spec: SceneSpec,
    users: Vec<Vec<usize>>,
    table: BTreeMap<Row, Counts>,
}

impl Judge {
    fn new(plan: &Plan) -> Judge {
        let spec = SceneSpec::lower_saltmarsh();
        let users = plan
            .channels
            .iter()
            .map(|channel| {
                let is_here =
                    |user: &usize| spec.users[*user].channel_id.as_ref() == Some(&channel.id);
                (0..spec.users.len()).filter(is_here).collect()
            })
            .collect();
        Judge { truth: Truth::new(&spec, SEED), users, table: BTreeMap::new(), spec }
    }

    fn row(&mut self, channel: usize, from_sample: u64, to_sample: u64) -> Row {
        let mut row = Row::Off { neighbour: channel >= self.users.len() - 2 };
        for &user in &self.users[channel] {
            let share = self.truth.activity(user, from_sample, to_sample);
            if share >= 1.0 {
                let user = &self.spec.users[user];
                let snr_step = (self.spec.snr_db(user) / 5.0).floor() as i64;
                return Row::On { kind: user.kind.as_str(), snr_step };
            }
            if share > 0.0 {
                row = Row::Partly { kind: self.spec.users[user].kind.as_str() };
            }
        }
        row
    }

    fn take(&mut self, report: &DwellReport, sample_rate_hz: f64) {
        let sample = |nanos: i64| (nanos as f64 * 1e-9 * sample_rate_hz).round() as u64;
        let from = sample(report.start.utc.nanos_since(START));
        let to = sample(report.end().utc.nanos_since(START));
        for verdict in &report.verdicts {
            let row = self.row(verdict.channel_index, from, to);
            let column = match verdict.state {
                State::Occupied => 0,
                State::Idle => 1,
                State::Unknown => 2,
            };
            self.table.entry(row).or_default()[column] += 1;
        }
        self.truth.forget_before(from);
    }
}

fn print(table: &BTreeMap<Row, Counts>) {
    println!(
        "{:<42}{:>9}{:>9}{:>9}   share occupied, 95 % interval",
        "", "occupied", "idle", "unknown"
    );
    for (row, counts) in table {
        let name = match row {
            Row::On { kind, snr_step } => {
                format!("{kind}, SNR {} to {} dB", 5 * snr_step, 5 * snr_step + 5)
            }
            Row::Partly { kind } => format!("{kind}, on for a part of the dwell"),
            Row::Off { neighbour: false } => "nobody on".to_owned(),
            Row::Off { neighbour: true } => "nobody on, beside the strong neighbour".to_owned(),
        };
        let total: u64 = counts.iter().sum();
        let (low, high) = interval::clopper_pearson(counts[0], total, 0.95);
        println!(
            "{name:<42}{:>9}{:>9}{:>9}   {:.3e} ({low:.3e} to {high:.3e})",
            counts[0],
            counts[1],
            counts[2],
            counts[0] as f64 / total as f64
        );
    }
}

#[test]
fn ten_minutes_of_the_demo_agree_with_the_truth() {
    let plan = demo_plan();
    let scene = Scene::new(SceneSpec::lower_saltmarsh(), SEED);
    let mut source = SceneSource::new(scene, "lower_saltmarsh", START);
    let rate_hz = source.sample_rate_hz();
    let mut detector = Detector::new(&plan);
    let mut judge = Judge::new(&plan);
    let mut block = empty_block(24_000);
    for _ in 0..MINUTES * 60 * 100 {
        assert!(source.read(&mut block, 24_000).expect("a scene has no faults"));
        detector.push(&block, |report| judge.take(&report, rate_hz));
    }
    println!("seed {SEED}, {MINUTES} simulated minutes");
    print(&judge.table);

    let (mut detected_at_0_db, mut unknown, mut all) = (Counts::default(), 0, 0);
    for (row, counts) in &judge.table {
        let total: u64 = counts.iter().sum();
        unknown += counts[2];
        all += total;
        match row {
            // The dwell's sensitivity is 10.5 dB below the noise in a channel: whatever is on for
            // the whole dwell at 0 dB or more must be found, every time.
            Row::On { snr_step, .. } if *snr_step >= 0 => {
                detected_at_0_db.iter_mut().zip(counts).for_each(|(sum, count)| *sum += count);
            }
            // False alarms: within what chance allows around the asked-for rate, at 1e-4 to fail.
            Row::Off { .. } => {
                let pfa = plan.bands[0].pfa;
                let (low, high) = interval::clopper_pearson(counts[0], total, 0.9999);
                assert!(low <= pfa && pfa <= high, "{row:?}: {counts:?}: {low:e} to {high:e}");
            }
            _ => {}
        }
    }
    assert_eq!(detected_at_0_db[1..], [0, 0], "a signal over the noise was missed");
    assert!(unknown as f64 <= 0.02 * all as f64, "{unknown} of {all} unknown");
    for kind in UserKind::ALL {
        let seen = judge.table.keys().any(|row| match row {
            Row::On { kind: on, .. } | Row::Partly { kind: on } => *on == kind.as_str(),
            Row::Off { .. } => false,
        });
        // The strong neighbour lies outside every channel.
        let expected = kind != UserKind::StrongNeighbour;
        assert!(seen || !expected, "no {kind:?} in {MINUTES} minutes");
    }
}
