//! Counts of decisions that share a floor, and what they tell of a rate.
//!
//! The decisions of one dwell are made against one estimate of the floor, so they are not
//! independent. They are counted by dwell, and the spread between dwells widens the interval; it is
//! never taken as narrower than that of independent decisions.

use crate::detection::statistics::interval;

/// Confidence of every interval.
pub const CONFIDENCE: f64 = 0.95;

/// Sums over clusters of decisions. Whole numbers, so that the order of adding does not matter.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Tally {
    /// Clusters that held a decision.
    pub clusters: u64,
    /// Decisions.
    pub trials: u64,
    /// Detections among them.
    pub hits: u64,
    hits_squared: u128,
    hits_trials: u128,
    trials_squared: u128,
}

impl Tally {
    /// Takes in the decisions of one cluster.
    ///
    /// # Panics
    /// If there are more hits than trials.
    pub fn add(&mut self, hits: u64, trials: u64) {
        assert!(hits <= trials, "{hits} of {trials}");
        if trials == 0 {
            return;
        }
        let (h, t) = (u128::from(hits), u128::from(trials));
        self.clusters += 1;
        self.trials += trials;
        self.hits += hits;
        self.hits_squared += h * h;
        self.hits_trials += h * t;
        self.trials_squared += t * t;
    }

    /// Detections over decisions; `None` without a decision.
    pub fn rate(&self) -> Option<f64> {
        (self.trials > 0).then(|| self.hits as f64 / self.trials as f64)
    }

    /// Variance of the rate between clusters over that of independent decisions, at least 1.
    ///
    /// The ratio estimator: `n / (n - 1) sum (h - r t)^2 / (sum t)^2`. Source: Cochran, Sampling
    /// Techniques, section 6.4 (from memory).
    pub fn design_effect(&self) -> f64 {
        let (Some(rate), true) = (self.rate(), self.clusters > 1) else { return 1.0 };
        let squares = self.hits_squared as f64 - 2.0 * rate * self.hits_trials as f64
            + rate * rate * self.trials_squared as f64;
        let n = self.clusters as f64;
        let between = n / (n - 1.0) * squares / (self.trials as f64).powi(2);
        let independent = rate * (1.0 - rate) / self.trials as f64;
        if independent > 0.0 { (between / independent).max(1.0) } else { 1.0 }
    }

    /// The interval of the rate: the exact one for as many independent decisions as these are worth
    /// by their spread. 0 to 1 without a decision.
    ///
    /// Source: Korn & Graubard, Survey Methodology 24, 1998 (from memory); what is no whole
    /// number is rounded outwards.
    pub fn interval(&self) -> (f64, f64) {
        let effect = self.design_effect();
        let (hits, trials) = (self.hits as f64 / effect, self.trials as f64 / effect);
        // What is a whole number but for rounding stays that one.
        let below = |value: f64| (value + 1e-9).floor() as u64;
        let above = |value: f64| (value - 1e-9).ceil() as u64;
        if below(trials) == 0 {
            return (0.0, 1.0);
        }
        let bound = |hits: u64, trials: u64| {
            interval::clopper_pearson(hits.min(trials), trials, CONFIDENCE)
        };
        (bound(below(hits), above(trials)).0, bound(above(hits), below(trials)).1)
    }

    /// The exact interval as if all decisions were independent.
    pub fn interval_independent(&self) -> (f64, f64) {
        match self.trials {
            0 => (0.0, 1.0),
            trials => interval::clopper_pearson(self.hits, trials, CONFIDENCE),
        }
    }
}

/// What a proof comes to.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Outcome {
    /// Within what was asked.
    Pass,
    /// The trials are too few to tell.
    NotDecided,
    /// Not what was asked, and not by chance.
    Fail,
}

impl Outcome {
    /// The word used in every interface.
    pub fn as_str(self) -> &'static str {
        match self {
            Outcome::Pass => "pass",
            Outcome::NotDecided => "not decided",
            Outcome::Fail => "fail",
        }
    }
}

/// Share by which a realised false-alarm rate may lie off the asked one.
pub const PFA_TOLERANCE: f64 = 0.2;

/// Judges a false-alarm rate: it fails when the whole interval lies more than [`PFA_TOLERANCE`] off
/// `asked`; it passes when it does not, and the interval could have told twice or half that rate.
pub fn judge_pfa(tally: &Tally, asked: f64) -> Outcome {
    let (low, high) = tally.interval();
    if low > asked * (1.0 + PFA_TOLERANCE) || high < asked * (1.0 - PFA_TOLERANCE) {
        Outcome::Fail
    } else if low < 0.5 * asked || high > 2.0 * asked {
        Outcome::NotDecided
    } else {
        Outcome::Pass
    }
}

/// Judges a detection rate against the one `required` and the `least` that is good enough: it fails
/// when the whole interval lies below `least`; it passes when the rate does not, and the interval
/// reaches no further down from it than `required` lies above `least`.
pub fn judge_pd(tally: &Tally, required: f64, least: f64) -> Outcome {
    let (low, high) = tally.interval();
    match tally.rate() {
        _ if high < least => Outcome::Fail,
        Some(rate) if rate >= least && rate - low <= required - least => Outcome::Pass,
        _ => Outcome::NotDecided,
    }
}
