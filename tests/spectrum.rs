//! The spectrum against SciPy's `signal.welch` on the same samples, and its own conventions.

use fallowband::detection::spectrum::{Spectrum, to_rising_frequency};
use fallowband::detection::window::Window;
use num_complex::{Complex32, Complex64};

const COUNT: usize = 4096;
const LENGTH: usize = 256;

/// The samples of `reference/welch_scipy.py`.
fn samples() -> Vec<Complex32> {
    let mut state = 1_u64;
    let mut next = || {
        state =
            state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (state >> 40) as f64 / f64::from(1 << 24) - 0.5
    };
    (0..COUNT)
        .map(|n| {
            let noise = Complex64::new(next(), next());
            let carrier = Complex64::from_polar(0.3, std::f64::consts::TAU * 0.1234 * n as f64);
            let sum = noise + carrier + Complex64::new(0.05, -0.02);
            Complex32::new(sum.re as f32, sum.im as f32)
        })
        .collect()
}

fn averaged(window: Window, hop: usize, samples: &[Complex32]) -> Vec<f32> {
    let mut spectrum = Spectrum::new(window, LENGTH);
    let mut power = vec![0.0; LENGTH];
    let mut count = 0.0;
    for segment in samples.windows(LENGTH).step_by(hop) {
        spectrum.accumulate(segment, &mut power);
        count += 1.0;
    }
    let mut rising = vec![0.0; LENGTH];
    to_rising_frequency(&power, 1.0 / count, &mut rising);
    rising
}

#[test]
fn the_averaged_spectrum_is_that_of_scipy() {
    let samples = samples();
    let table = include_str!("reference/welch_scipy.csv");
    let mut spectra = std::collections::BTreeMap::new();
    let mut checked = 0;
    for line in table.lines().filter(|line| !line.starts_with('#')).skip(1) {
        let fields: Vec<&str> = line.split(',').collect();
        let [window, overlap, bin, power] = fields[..] else { panic!("{line}") };
        let ours = spectra.entry((window, overlap)).or_insert_with(|| {
            let shape = if window == "hann" { Window::Hann } else { Window::BlackmanHarris };
            let hop = LENGTH - LENGTH * overlap.parse::<usize>().unwrap() / 100;
            averaged(shape, hop, &samples)
        });
        let wanted: f64 = power.parse().unwrap();
        let got = f64::from(ours[bin.parse::<usize>().unwrap()]);
        assert!((got / wanted - 1.0).abs() < 1e-5, "{line}: got {got:e}");
        checked += 1;
    }
    assert_eq!(checked, 4 * LENGTH);
}

#[test]
fn a_full_scale_carrier_is_0_dbfs_wherever_it_falls() {
    for window in [Window::Hann, Window::BlackmanHarris] {
        for offset_bins in [0.0, 3.0, 17.4, -40.5] {
            let carrier: Vec<Complex32> = (0..LENGTH)
                .map(|n| {
                    let turns = offset_bins * n as f64 / LENGTH as f64;
                    Complex32::from_polar(1.0, (std::f64::consts::TAU * turns) as f32)
                })
                .collect();
            let power: f32 = averaged(window, LENGTH, &carrier).iter().sum();
            // By Parseval the bins sum to the mean of |x|^2; single precision rounds at 1e-7 a bin.
            assert!((power - 1.0).abs() < 1e-5, "{window:?} {offset_bins}: {power}");
        }
    }
}

#[test]
fn frequency_rises_from_left_to_right_with_dc_in_the_middle() {
    let carrier: Vec<Complex32> = (0..LENGTH)
        .map(|n| {
            Complex32::from_polar(
                1.0,
                std::f32::consts::TAU * (5 * n % LENGTH) as f32 / LENGTH as f32,
            )
        })
        .collect();
    let power = averaged(Window::Hann, LENGTH, &carrier);
    let highest = (0..LENGTH).max_by(|a, b| power[*a].total_cmp(&power[*b])).unwrap();
    assert_eq!(highest, LENGTH / 2 + 5);
}
