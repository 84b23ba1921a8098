//! The closed forms against published and independently computed values (`tests/reference`, where
//! each file names its source). Oracle: mpmath at 50 digits for every table but the windows'
//! (NumPy).

use std::collections::BTreeMap;

use fallowband::detection::statistics::quadratic::GammaSum;
use fallowband::detection::statistics::weights::Weights;
use fallowband::detection::statistics::{beta, energy, gamma, interval, marcum, ratio};
use fallowband::detection::window::Window;

/// The rows of a reference file: column name to text. Lines that open with `#` name the source.
fn rows(text: &str) -> Vec<BTreeMap<&str, &str>> {
    let mut lines = text.lines().filter(|line| !line.starts_with('#'));
    let names: Vec<&str> = lines.next().expect("a heading").split(',').collect();
    lines.map(|line| names.iter().copied().zip(line.split(',')).collect()).collect()
}

fn number(row: &BTreeMap<&str, &str>, name: &str) -> f64 {
    row[name].parse().unwrap_or_else(|_| panic!("{name} in {row:?}"))
}

#[track_caller]
fn assert_close(got: f64, wanted: f64, relative: f64, what: &dyn std::fmt::Debug) {
    let error = if got == wanted { 0.0 } else { (got / wanted - 1.0).abs() };
    assert!(error <= relative, "got {got}, wanted {wanted}, relative error {error:e}: {what:?}");
}

fn window(row: &BTreeMap<&str, &str>) -> Option<Window> {
    match row["window"] {
        "hann" => Some(Window::Hann),
        "blackman_harris" => Some(Window::BlackmanHarris),
        _ => None,
    }
}

#[test]
fn thresholds_for_a_known_floor_match_the_table() {
    let table = rows(include_str!("reference/energy_pfa_thresholds.csv"));
    assert_eq!(table.len(), 310);
    for row in &table {
        let (looks, pfa) = (number(row, "looks"), number(row, "pfa"));
        let threshold = number(row, "threshold");
        assert_close(energy::threshold(looks, pfa), threshold, 1e-12, row);
        // The way back: a relative error e in the threshold moves the tail by up to threshold *
        // looks
        // * e, and the table has at least 20 digits.
        assert_close(energy::false_alarm_probability(looks, threshold), pfa, 1e-9, row);
    }
}

#[test]
fn detection_probabilities_match_the_table_for_both_kinds_of_signal() {
    let table = rows(include_str!("reference/energy_pd.csv"));
    assert_eq!(table.len(), 230);
    for row in &table {
        let (looks, pfa) = (number(row, "looks"), number(row, "pfa"));
        let snr = 10f64.powf(number(row, "snr_db") / 10.0);
        let threshold = energy::threshold(looks, pfa);
        let noise_like = energy::detection_probability_noise_like(looks, threshold, snr);
        let constant = energy::detection_probability_constant_envelope(looks, threshold, snr);
        assert_close(noise_like, number(row, "pd_noise_like"), 1e-8, row);
        assert_close(constant, number(row, "pd_constant_envelope"), 1e-8, row);
    }
}

#[test]
fn marcum_q_matches_the_table() {
    for row in &rows(include_str!("reference/marcum_q.csv")) {
        let q = marcum::generalised_q(number(row, "order"), number(row, "a"), number(row, "b"));
        assert_close(q, number(row, "q"), 1e-11, row);
    }
}

#[test]
fn chi_square_percentiles_match_the_table() {
    let table = rows(include_str!("reference/chi2_percentiles.csv"));
    assert_eq!(table.len(), 245);
    for row in &table {
        let half = number(row, "dof") / 2.0;
        let quantile = 2.0 * gamma::upper_quantile(half, number(row, "probability_of_exceeding"));
        // The table prints 10 significant digits.
        assert_close(quantile, number(row, "chi2"), 1e-9, row);
    }
}

#[test]
fn the_threshold_reduces_to_the_cell_averaging_multiplier_of_one_look() {
    let table = rows(include_str!("reference/ca_cfar_single.csv"));
    assert_eq!(table.len(), 171);
    for row in &table {
        let (cells, pfa) = (number(row, "cells"), number(row, "pfa"));
        let multiplier = number(row, "multiplier");
        let one_look = GammaSum::of_looks(1.0);
        assert_close(ratio::threshold(&one_look, cells, pfa), multiplier, 1e-9, row);
        // Richards' closed form, as a second oracle.
        assert_close(cells * (pfa.powf(-1.0 / cells) - 1.0), multiplier, 1e-10, row);
    }
}

#[test]
fn the_threshold_with_an_estimated_floor_matches_the_table_of_averaged_looks() {
    let table = rows(include_str!("reference/ca_cfar_mlook.csv"));
    assert_eq!(table.len(), 672);
    for row in &table {
        let (looks, cells) = (number(row, "looks"), number(row, "cells"));
        let (pfa, multiplier) = (number(row, "pfa"), number(row, "multiplier"));
        let energy = GammaSum::of_looks(looks);
        assert_close(ratio::threshold(&energy, looks * cells, pfa), multiplier, 1e-8, row);
        assert_close(beta::ratio_upper_tail(looks, looks * cells, multiplier), pfa, 1e-9, row);
    }
}

#[test]
fn the_tabulated_threshold_agrees_with_the_exact_one() {
    for looks in [1.0, 7.3, 50.0, 2600.0] {
        let energy = GammaSum::of_looks(looks);
        let table = ratio::RatioTable::new(energy.clone(), 1e-4, 0.9);
        for floor_looks in [0.05, 1.0, 10.0, 333.0, 5e3, 1e5, 1e9] {
            let (threshold, snr) = table.at(floor_looks * looks);
            let exact = ratio::threshold(&energy, floor_looks * looks, 1e-4);
            let exact_snr = ratio::required_snr(&energy, floor_looks * looks, exact, 0.9);
            // Moves the false-alarm probability by under 1 %: d ln pfa / d ln t is below 40 here.
            assert_close(threshold, exact, 2.5e-4, &(looks, floor_looks));
            assert!(
                (snr / exact_snr - 1.0).abs() < 3e-3,
                "{snr} {exact_snr} {looks} {floor_looks}"
            );
        }
    }
}

#[test]
fn the_required_snr_gives_the_required_detection_probability() {
    // Against the table of closed forms: with a known floor the SNR found must detect with Pd.
    for looks in [1.0, 16.0, 1000.0] {
        let noise = GammaSum::of_looks(looks);
        for pfa in [1e-1, 1e-3, 1e-6] {
            let threshold = ratio::threshold(&noise, f64::INFINITY, pfa);
            let snr = ratio::required_snr(&noise, f64::INFINITY, threshold, 0.9);
            let pd = energy::detection_probability_noise_like(looks, threshold, snr);
            assert_close(pd, 0.9, 1e-10, &(looks, pfa));
        }
    }
}

#[test]
fn window_figures_match_harris() {
    for row in &rows(include_str!("reference/windows.csv")) {
        let Some(window) = window(row) else { panic!("{row:?}") };
        let length = 4096;
        let w = window.values(length);
        let n = length as f64;
        let sum: f64 = w.iter().sum();
        let energy: f64 = w.iter().map(|w| w * w).sum();
        assert_close(sum / n, number(row, "coherent_gain"), 1e-9, row);
        assert_close(n * energy / (sum * sum), number(row, "noise_bandwidth_bins"), 1e-6, row);
        for (column, shift) in
            [("correlation_75_percent", length / 4), ("correlation_50_percent", length / 2)]
        {
            let shared: f64 = w[shift..].iter().zip(&w).map(|(a, b)| a * b).sum();
            assert_close(100.0 * shared / energy, number(row, column), 1e-6, row);
        }
    }
}

#[test]
fn equivalent_looks_of_overlapped_transforms_match_welch() {
    let mut checked = 0;
    for row in &rows(include_str!("reference/welch_edof.csv")) {
        let Some(window) = window(row) else { panic!("{row:?}") };
        let length = 4096;
        let hop = length - length * number(row, "overlap_percent") as usize / 100;
        let mut weights = Weights::new(&window.values(length), hop);
        let looks = weights.energy(number(row, "segments") as usize, 1).looks();
        // The table's windows have another length: Hann and Blackman-Harris correlations differ by
        // O(1/N^2).
        assert_close(looks, number(row, "looks"), 1e-6, row);
        checked += 1;
    }
    assert_eq!(checked, 90);
}

#[test]
fn equivalent_looks_of_neighbouring_bins_match_the_table() {
    for row in &rows(include_str!("reference/bin_correlation.csv")) {
        let Some(window) = window(row) else { panic!("{row:?}") };
        let mut weights = Weights::new(&window.values(4096), 4096);
        let looks = weights.energy(1, number(row, "bins") as usize).looks();
        assert_close(looks, number(row, "looks"), 1e-6, row);
    }
}

#[test]
fn binomial_intervals_match_the_nist_handbook_cases() {
    for row in &rows(include_str!("reference/binomial_intervals.csv")) {
        let (hits, trials) = (number(row, "hits") as u64, number(row, "trials") as u64);
        let confidence = number(row, "confidence");
        let checks = [
            (interval::wilson(hits, trials, confidence), "wilson_low", "wilson_high"),
            (interval::clopper_pearson(hits, trials, confidence), "exact_low", "exact_high"),
        ];
        for ((low, high), low_name, high_name) in checks {
            // The table prints 10 significant digits.
            for (got, name) in [(low, low_name), (high, high_name)] {
                assert!((got - number(row, name)).abs() < 2e-9, "{got} {name} {row:?}");
            }
        }
    }
}

#[test]
fn the_tail_of_an_overlapped_average_is_exact_down_to_1e_8() {
    let mut checked = 0;
    for row in &rows(include_str!("reference/welch_exact_tail.csv")) {
        let Some(window) = window(row) else { panic!("{row:?}") };
        let length = 4096;
        let hop = length - length * number(row, "overlap_percent") as usize / 100;
        let mut weights = Weights::new(&window.values(length), hop);
        let energy = weights.energy(number(row, "segments") as usize, 1);
        assert_close(energy.upper_tail(number(row, "threshold")), number(row, "pfa"), 1e-8, row);
        let quantile = energy.upper_quantile(number(row, "pfa"));
        assert_close(quantile, number(row, "threshold"), 1e-9, row);
        checked += 1;
    }
    assert_eq!(checked, 96);
}

#[test]
fn the_law_from_four_boxes_is_that_of_the_whole_matrix() {
    // Oracle: a form of the same size as a sum of all its eigenvalues. Sizes just above what the
    // production code would compute directly, in both directions.
    for (window, overlap_percent) in [
        (Window::Hann, 50),
        (Window::Hann, 75),
        (Window::BlackmanHarris, 50),
        (Window::BlackmanHarris, 75),
    ] {
        let length = 1024;
        let hop = length - length * overlap_percent / 100;
        let mut weights = Weights::new(&window.values(length), hop);
        for (transforms, bins) in [(170, 1), (24, 10), (5, 40)] {
            let whole = weights.all_eigenvalues(transforms, bins);
            let law = weights.energy(transforms, bins);
            for pfa in [0.9, 1e-1, 1e-3, 1e-6, 1e-9] {
                let tail = law.upper_tail(whole.upper_quantile(pfa));
                let what = (window, overlap_percent, transforms, bins);
                assert_close(tail, pfa, 1e-3, &what);
            }
        }
    }
}

#[test]
fn gamma_tails_by_inversion_are_those_of_the_closed_form() {
    for looks in [0.5, 1.0, 2.0, 7.6, 100.0, 3000.0, 1e5] {
        let sum = GammaSum::of_looks(looks);
        for probability in [0.9999, 0.9, 0.6, 0.5, 0.45, 0.4, 0.3, 0.1, 1e-3, 1e-6, 1e-9, 1e-12] {
            let x = gamma::upper_quantile(looks, probability) / looks;
            assert_close(sum.upper_tail(x), probability, 1e-9, &(looks, probability));
            assert_close(sum.upper_quantile(probability), x, 1e-11, &(looks, probability));
        }
        for looks_below in [4.0, 50.0, 1e4, 1e6] {
            let below = GammaSum::of_looks(looks_below);
            for probability in [0.9, 0.5, 0.1, 1e-3, 1e-6, 1e-9] {
                let ratio = beta::ratio_upper_quantile(looks, looks_below, probability);
                let tail = sum.ratio_upper_tail(&below, ratio);
                assert_close(tail, probability, 1e-5, &(looks, looks_below, probability));
            }
        }
    }
}
