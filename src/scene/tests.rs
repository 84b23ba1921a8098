//! The scene as a measuring instrument hears it: levels, spectra, borders, seeds.
//!
//! Powers are measured with a Blackman-Harris window (side lobes below -92 dB), by a spectrum made
//! here and not by the detector's, so that the two can be held against each other elsewhere.

use num_complex::Complex32;
use rustfft::FftPlanner;

use super::synthesis::HOP;
use super::*;
use crate::detection::window::Window;

const SEED: u64 = 20_260_301;
/// Transform length of the measurement (samples).
const LENGTH: usize = 4096;
/// A floor so low that it shows nothing but the signals (dBFS).
const NO_FLOOR_DBFS: f64 = -220.0;

fn samples_of(spec: &SceneSpec, seed: u64, count: usize) -> Vec<Complex32> {
    let mut samples = vec![Complex32::ZERO; count];
    Scene::new(spec.clone(), seed).fill(&mut samples);
    samples
}

/// The site with everybody on all the time.
fn crowded() -> SceneSpec {
    let mut spec = SceneSpec::lower_saltmarsh();
    for user in &mut spec.users {
        user.habit = Habit::Always;
    }
    spec
}

/// A scene with one user and no floor.
fn alone(user: User) -> SceneSpec {
    let site = SceneSpec::lower_saltmarsh();
    let nothing = SceneSpec::noise_only(site.centre_hz, site.sample_rate_hz, NO_FLOOR_DBFS);
    SceneSpec { users: vec![user], ..nothing }
}

fn first_of(kind: UserKind) -> User {
    let spec = SceneSpec::lower_saltmarsh();
    spec.users.into_iter().find(|user| user.kind == kind).expect("every kind is present")
}

/// A measured spectrum: mean power per bin, DC first, bins sum to the mean of |x|^2.
struct Measured {
    power: Vec<f64>,
    segments: usize,
    spec: SceneSpec,
}

impl Measured {
    fn of(spec: &SceneSpec, samples: &[Complex32]) -> Measured {
        let window = Window::BlackmanHarris.values(LENGTH);
        let scale = 1.0 / (LENGTH as f64 * window.iter().map(|w| w * w).sum::<f64>());
        let forward = FftPlanner::<f64>::new().plan_fft_forward(LENGTH);
        let mut power = vec![0.0; LENGTH];
        let segments = samples.chunks_exact(LENGTH);
        let count = segments.len();
        for segment in segments {
            let mut bins: Vec<_> = segment
                .iter()
                .zip(&window)
                .map(|(x, w)| num_complex::Complex64::new(x.re.into(), x.im.into()) * *w)
                .collect();
            forward.process(&mut bins);
            for (sum, bin) in power.iter_mut().zip(&bins) {
                *sum += bin.norm_sqr() * scale / count as f64;
            }
        }
        Measured { power, segments: count, spec: spec.clone() }
    }

    fn bin_hz(&self) -> f64 {
        self.spec.sample_rate_hz / LENGTH as f64
    }

    /// Power in each bin with its distance from a radio frequency (Hz).
    fn around(&self, centre_hz: f64) -> impl Iterator<Item = (f64, f64)> + '_ {
        let from_centre_hz = self.spec.centre_hz - centre_hz;
        self.power.iter().enumerate().map(move |(index, power)| {
            let half = LENGTH as f64 / 2.0;
            let bin = (index as f64 + half) % LENGTH as f64 - half;
            (bin * self.bin_hz() + from_centre_hz, *power)
        })
    }

    /// Mean density around a radio frequency times the bandwidth [dBFS]: for noise, where a sum
    /// over whole bins would be off by a part of a bin.
    fn noise_dbfs(&self, centre_hz: f64, bandwidth_hz: f64) -> f64 {
        let inside: Vec<f64> = self
            .around(centre_hz)
            .filter(|(distance_hz, _)| distance_hz.abs() <= bandwidth_hz / 2.0)
            .map(|(_, power)| power)
            .collect();
        let density = inside.iter().sum::<f64>() / (inside.len() as f64 * self.bin_hz());
        10.0 * (density * bandwidth_hz).log10()
    }

    /// All power nearer to a radio frequency than half a bandwidth, and all the rest (dBFS).
    fn inside_and_beyond_dbfs(&self, centre_hz: f64, bandwidth_hz: f64) -> (f64, f64) {
        let (mut inside, mut beyond) = (0.0, 0.0);
        for (distance_hz, power) in self.around(centre_hz) {
            if distance_hz.abs() <= bandwidth_hz / 2.0 { inside += power } else { beyond += power }
        }
        (10.0 * inside.log10(), 10.0 * beyond.log10())
    }

    /// Standard deviation of the noise power measured in a bandwidth (dB).
    ///
    /// A segment is worth bandwidth * duration independent values, its duration being that of a
    /// rectangle with the window's energy: (sum w^2)^2 / sum w^4.
    fn sigma_db(&self, bandwidth_hz: f64) -> f64 {
        let window = Window::BlackmanHarris.values(LENGTH);
        let second: f64 = window.iter().map(|w| w.powi(2)).sum();
        let fourth: f64 = window.iter().map(|w| w.powi(4)).sum();
        let duration_s = second * second / fourth / self.spec.sample_rate_hz;
        let values = self.segments as f64 * duration_s * bandwidth_hz;
        10.0 / std::f64::consts::LN_10 / values.sqrt()
    }
}

#[test]
fn the_floor_has_the_level_and_slope_of_the_spec() {
    println!("seed {SEED}");
    let spec = SceneSpec { users: Vec::new(), ..SceneSpec::lower_saltmarsh() };
    let measured = Measured::of(&spec, &samples_of(&spec, SEED, 1 << 22));
    // Five sigma two-sided in 90 channels: a false failure in 20 000 seeds.
    let bound_db = 5.0 * measured.sigma_db(16e3);
    assert!(bound_db < 0.25, "{bound_db}");
    for channel in &spec.channels {
        let expected_dbfs = spec.floor_dbfs_in(channel.centre_hz, channel.bandwidth_hz);
        let power_dbfs = measured.noise_dbfs(channel.centre_hz, channel.bandwidth_hz);
        assert!(
            (power_dbfs - expected_dbfs).abs() < bound_db,
            "{}: {power_dbfs} instead of {expected_dbfs}, within {bound_db}",
            channel.id
        );
    }
    let ends_db = spec.floor_dbfs_in(spec.centre_hz + 1.2e6, 16e3)
        - spec.floor_dbfs_in(spec.centre_hz - 1.2e6, 16e3);
    assert!((ends_db - 3.0).abs() < 1e-9, "{ends_db}");
}

#[test]
fn the_noise_is_gaussian_and_stationary_across_the_borders_of_blocks() {
    println!("seed {SEED}");
    let spec = SceneSpec::noise_only(448.1e6, 2.4e6, -95.0);
    let hops = 300;
    let samples = samples_of(&spec, SEED, hops * HOP);
    let expected = 10f64.powf(spec.floor_dbfs_in(spec.centre_hz, spec.sample_rate_hz) / 10.0);
    let powers: Vec<f64> = samples.iter().map(|x| f64::from(x.norm_sqr()) / expected).collect();
    // |x|^2 is exponential, so its mean over n has sigma 1/sqrt(n); five sigma, 24 places in a hop.
    let part = HOP / 24;
    for place in 0..24 {
        let mean =
            (0..hops).flat_map(|hop| &powers[hop * HOP + place * part..][..part]).sum::<f64>()
                / (hops * part) as f64;
        let bound = 5.0 / ((hops * part) as f64).sqrt();
        assert!((mean - 1.0).abs() < bound, "place {place}: {mean}, within {bound}");
    }
    // For an exponential, mean square over squared mean is 2, with sigma 2/sqrt(n) (delta method).
    let mean = powers.iter().sum::<f64>() / powers.len() as f64;
    let ratio = powers.iter().map(|p| p * p).sum::<f64>() / powers.len() as f64 / (mean * mean);
    assert!((ratio - 2.0).abs() < 10.0 / (powers.len() as f64).sqrt(), "{ratio}");
    // White: neighbours in time are uncorrelated, sigma 1/sqrt(n) in each part.
    let lag_one: num_complex::Complex64 = samples
        .windows(2)
        .map(|pair| {
            let product = pair[1] * pair[0].conj();
            num_complex::Complex64::new(product.re.into(), product.im.into()) / expected
        })
        .sum::<num_complex::Complex64>()
        / samples.len() as f64;
    assert!(lag_one.norm() < 5.0 / (samples.len() as f64).sqrt(), "{lag_one}");
}

#[test]
fn every_user_has_its_level_in_its_channel_and_is_clean_outside() {
    println!("seed {SEED}");
    let site = crowded();
    for user in &site.users {
        let spec = alone(user.clone());
        let samples = samples_of(&spec, SEED, 1 << 18);
        // The key's ramp at the first sample is not part of the level.
        let measured = Measured::of(&spec, &samples[1 << 14..]);
        let of_user = |channel: &&RasterChannel| user.channel_id.as_ref() == Some(&channel.id);
        let channel = site.channels.iter().find(of_user);
        let channel_hz = channel.map_or(user.centre_hz, |channel| channel.centre_hz);
        let (power_dbfs, _) = measured.inside_and_beyond_dbfs(channel_hz, 16e3);
        let name = format!("{} on {:?}", user.kind.as_str(), user.channel_id);
        assert!((power_dbfs - user.level_dbfs).abs() < 0.05, "{name}: {power_dbfs}");
        let (_, beyond_dbfs) = measured.inside_and_beyond_dbfs(user.centre_hz, 25e3);
        let beyond_db = beyond_dbfs - user.level_dbfs;
        assert!((-130.0..-80.0).contains(&beyond_db), "{name}: {beyond_db} dBc");
    }
}

#[test]
fn a_user_70_db_above_the_noise_leaks_less_than_a_tenth_of_it_two_channels_away() {
    println!("seed {SEED}");
    for kind in UserKind::ALL {
        let user = User { habit: Habit::Always, level_dbfs: -25.0, ..first_of(kind) };
        let spec = alone(user.clone());
        let measured = Measured::of(&spec, &samples_of(&spec, SEED, 1 << 19)[1 << 14..]);
        // Above the neighbour there is no room for more than one channel.
        for step in [-3.0, -2.0, -1.0, 1.0] {
            let leak_dbfs = measured.noise_dbfs(user.centre_hz + step * 25e3, 16e3);
            assert!(
                leak_dbfs < user.level_dbfs - 70.0 - 10.0,
                "{} {step} channels away: {leak_dbfs}",
                kind.as_str()
            );
        }
    }
}

#[test]
fn keying_a_strong_user_does_not_show_in_the_next_channel() {
    println!("seed {SEED}");
    let habit = Habit::Bursts { period_s: 0.1, jitter_s: 0.01, shortest_s: 0.03, longest_s: 0.05 };
    let user = User { habit, level_dbfs: -35.0, ..first_of(UserKind::TelemetryBurst) };
    let spec = alone(user.clone());
    // 60 dB above the noise, slices of 10 ms: every edge of the first two seconds is in one.
    for slice in samples_of(&spec, SEED, 4_800_000).chunks_exact(24_000) {
        let measured = Measured::of(&spec, slice);
        for step in [-1.0, 1.0] {
            let leak_dbfs = measured.noise_dbfs(user.centre_hz + step * 25e3, 16e3);
            assert!(leak_dbfs < user.level_dbfs - 60.0 - 10.0, "{leak_dbfs}");
        }
    }
}

#[test]
fn unused_channels_hold_the_noise_and_nothing_else_while_everybody_is_on() {
    println!("seed {SEED}");
    let spec = crowded();
    let measured = Measured::of(&spec, &samples_of(&spec, SEED, 1 << 22));
    let bound_db = 5.0 * measured.sigma_db(16e3);
    let used = |channel: &RasterChannel| {
        spec.users.iter().any(|u| u.channel_id.as_ref() == Some(&channel.id))
    };
    let unused: Vec<_> = spec.channels.iter().filter(|channel| !used(channel)).collect();
    // The one beside the strong neighbour is among them.
    assert_eq!(unused.last().expect("some are unused").id, "S90");
    for channel in unused {
        let above_db = measured.noise_dbfs(channel.centre_hz, 16e3)
            - spec.floor_dbfs_in(channel.centre_hz, 16e3);
        assert!(above_db.abs() < bound_db, "{}: {above_db}, within {bound_db}", channel.id);
    }
}

#[test]
fn samples_are_the_same_however_they_are_fetched() {
    println!("seed {SEED}");
    let spec = SceneSpec::lower_saltmarsh();
    let whole = samples_of(&spec, SEED, 5 * HOP + 77);
    let mut scene = Scene::new(spec, SEED);
    let mut pieces = vec![Complex32::ZERO; whole.len()];
    let mut from = 0;
    for length in [1, 0, 7, HOP, 1000, 2 * HOP - 1, 4096].into_iter().cycle() {
        let to = (from + length).min(pieces.len());
        scene.fill(&mut pieces[from..to]);
        // The truth may be asked at any time; it draws from streams of its own.
        scene.activity(0, from as u64, from as u64 + 1_000_000_000);
        from = to;
        assert_eq!(scene.position(), from as u64);
        if from == pieces.len() {
            break;
        }
    }
    assert!(pieces == whole);
}

#[test]
fn the_seed_alone_decides() {
    let spec = SceneSpec::lower_saltmarsh();
    let one = samples_of(&spec, 1, 3 * HOP);
    assert!(one == samples_of(&spec, 1, 3 * HOP));
    let two = samples_of(&spec, 2, 3 * HOP);
    assert!(one.iter().zip(&two).filter(|(a, b)| a == b).count() < 3);
}

#[test]
fn the_truth_is_exact_to_the_sample() {
    println!("seed {SEED}");
    let user = User { level_dbfs: -40.0, ..first_of(UserKind::TelemetryBurst) };
    let spec = alone(user.clone());
    let mut scene = Scene::new(spec.clone(), SEED);
    let span = 24_000_000;
    let bursts: Vec<_> = scene.truth().transmissions(0, 0, span).collect();
    assert!(bursts.len() >= 2, "{bursts:?}");
    let mut samples = vec![Complex32::ZERO; span as usize];
    scene.fill(&mut samples);
    let power_dbfs = |from: u64, to: u64| {
        let part = &samples[from as usize..to as usize];
        let sum: f64 = part.iter().map(|x| f64::from(x.norm_sqr())).sum();
        10.0 * (sum / part.len() as f64).log10()
    };
    let ramp = (source::RAMP_S * spec.sample_rate_hz) as u64;
    for burst in bursts {
        let (from, to) = (burst.from_sample, burst.to_sample);
        let level_dbfs = power_dbfs(from + ramp, to - ramp);
        assert!((level_dbfs - user.level_dbfs).abs() < 0.01, "{level_dbfs}");
        // A raised cosine is at half its height, -6 dB, in the middle of the ramp.
        for middle in [from + ramp / 2, to - ramp / 2] {
            let middle_db = power_dbfs(middle - 5, middle + 5) - user.level_dbfs;
            assert!((middle_db + 6.02).abs() < 0.1, "{middle_db}");
        }
        for outside in [(from - 10_000, from), (to, to + 10_000)] {
            let outside_db = power_dbfs(outside.0, outside.1) - user.level_dbfs;
            assert!(outside_db < -70.0, "{outside_db} dB outside the time on");
        }
        assert_eq!(scene.activity(0, from, to), 1.0);
        assert_eq!(scene.activity(0, from - 1000, from), 0.0);
        assert_eq!(scene.activity(0, from - 1000, from + 1000), 0.5);
        assert_eq!(scene.activity(0, to, to + 1), 0.0);
    }
}

#[test]
fn a_truth_made_apart_agrees_with_the_scene_for_a_day() {
    let spec = SceneSpec::lower_saltmarsh();
    let day = 86_400 * 2_400_000;
    let mut scene = Scene::new(spec.clone(), SEED);
    scene.fill(&mut vec![Complex32::ZERO; 100_000]);
    let mut truth = Truth::new(&spec, SEED);
    let mut count = 0;
    for user_index in 0..spec.users.len() {
        let apart: Vec<_> = truth.transmissions(user_index, 0, day).collect();
        count += apart.len();
        assert!(scene.truth().transmissions(user_index, 0, day).eq(apart));
    }
    // Sixteen bytes each: what a day of truth costs.
    assert!((10_000..500_000).contains(&count), "{count} transmissions");
    println!("{count} transmissions in a day");
}

#[test]
fn a_carrier_runs_on_over_the_borders_of_blocks() {
    println!("seed {SEED}");
    let beacon = first_of(UserKind::Beacon);
    assert_eq!(beacon.bandwidth_hz, 0.0);
    let spec = alone(beacon.clone());
    let samples = samples_of(&spec, SEED, 20 * HOP);
    let turns = (beacon.centre_hz - spec.centre_hz) / spec.sample_rate_hz;
    let still: Vec<num_complex::Complex64> = samples
        .iter()
        .enumerate()
        .skip(HOP / 2)
        .map(|(n, x)| {
            let angle = -std::f64::consts::TAU * (turns * n as f64).fract();
            num_complex::Complex64::new(x.re.into(), x.im.into())
                * num_complex::Complex64::from_polar(1.0, angle)
        })
        .collect();
    let mean = still.iter().sum::<num_complex::Complex64>() / still.len() as f64;
    assert!((20.0 * mean.norm().log10() - beacon.level_dbfs).abs() < 0.01);
    // Products of the cross-fade lie 90 dB down, 3e-5 in amplitude; single samples reach more.
    let worst = still.iter().map(|x| (x / mean - 1.0).norm()).fold(0.0, f64::max);
    assert!(worst < 2e-4, "{worst}");
}

#[test]
fn ten_decibels_of_headroom_stay_when_everybody_is_on() {
    println!("seed {SEED}");
    let peak = samples_of(&crowded(), SEED, 4_800_000)
        .iter()
        .map(|x| x.re.abs().max(x.im.abs()))
        .fold(0.0, f32::max);
    assert!(peak < 10f32.powf(-10.0 / 20.0), "{peak}");
    assert!(peak > 0.01, "{peak}");
}

#[test]
#[ignore = "a measurement: read the time that the test runner reports for ten minutes of stream"]
fn ten_minutes_of_the_site() {
    let mut scene = Scene::new(SceneSpec::lower_saltmarsh(), SEED);
    let mut samples = vec![Complex32::ZERO; 480_000];
    for _ in 0..600 * 5 {
        scene.fill(&mut samples);
        assert!(samples.iter().all(|x| x.re.is_finite() && x.im.is_finite()));
    }
}
