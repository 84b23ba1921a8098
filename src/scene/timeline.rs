//! When each user is on: exact to the sample, from a random stream of its own.
//!
//! A timeline knows nothing of samples that were or were not synthesised: it is the truth that a
//! measurement is held against, so it must never depend on how, or whether, anyone listens.

use std::collections::VecDeque;

use rand_distr::{Distribution, Exp1, StandardUniform};
use rand_xoshiro::Xoshiro256PlusPlus;

use super::spec::{Habit, Hours, SceneSpec};

/// How long before the first sample a timeline begins (s), so that the scene starts in mid-life
/// and not with everybody silent.
const EARLIER_S: f64 = 3600.0;

/// A stretch of time on: half-open, in samples since the start of the scene.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Transmission {
    /// First sample that is on.
    pub from_sample: u64,
    /// First sample that is off again; `u64::MAX` where there is none.
    pub to_sample: u64,
}

/// The transmissions of one user, generated as far as anybody has asked.
#[derive(Clone, Debug)]
pub(super) struct Timeline {
    habit: Habit,
    sample_rate_hz: f64,
    start_of_week_s: f64,
    rng: Xoshiro256PlusPlus,
    /// Everything before this sample is known. Negative before the scene starts.
    known_until: i64,
    /// The next burst's number; its mark is that many periods after the timeline's own start.
    next_burst: u64,
    /// Start of the bursts' raster (samples).
    burst_origin: i64,
    /// Known transmissions, oldest first; they neither overlap nor touch.
    transmissions: VecDeque<Transmission>,
    /// Nothing before this sample is kept any more.
    kept_from: u64,
}

impl Timeline {
    /// The timeline of a habit at a site, drawn from `rng`.
    pub(super) fn new(spec: &SceneSpec, habit: &Habit, mut rng: Xoshiro256PlusPlus) -> Timeline {
        let begin = -((EARLIER_S * spec.sample_rate_hz) as i64);
        let mut burst_origin = begin;
        if let Habit::Bursts { period_s, .. } = habit {
            // Bursts of different users have no common phase.
            burst_origin += (uniform(&mut rng) * period_s * spec.sample_rate_hz) as i64;
        }
        Timeline {
            habit: habit.clone(),
            sample_rate_hz: spec.sample_rate_hz,
            start_of_week_s: spec.start_of_week_s,
            rng,
            known_until: begin,
            next_burst: 0,
            burst_origin,
            transmissions: VecDeque::new(),
            kept_from: 0,
        }
    }

    /// The transmissions that have a part in the half-open range, oldest first, whole.
    ///
    /// # Panics
    /// If the range begins in what was forgotten.
    pub(super) fn in_range(
        &mut self,
        from_sample: u64,
        to_sample: u64,
    ) -> impl Iterator<Item = Transmission> + '_ {
        assert!(
            from_sample >= self.kept_from,
            "sample {from_sample} was forgotten, kept from {}",
            self.kept_from
        );
        self.learn_until(to_sample);
        let first = self.transmissions.partition_point(|on| on.to_sample <= from_sample);
        self.transmissions.range(first..).copied().take_while(move |on| on.from_sample < to_sample)
    }

    /// Drops what ended at or before `sample`.
    pub(super) fn forget_before(&mut self, sample: u64) {
        while self.transmissions.front().is_some_and(|on| on.to_sample <= sample) {
            self.transmissions.pop_front();
        }
        self.kept_from = self.kept_from.max(sample);
    }

    /// Generates until everything before `sample` is known.
    fn learn_until(&mut self, sample: u64) {
        // Clamped, since an endless transmission is known until the end of time.
        let sample = i64::try_from(sample).unwrap_or(i64::MAX);
        while self.known_until < sample {
            match self.habit {
                Habit::Always => self.push(0, i64::MAX),
                Habit::Exchanges { .. } => self.learn_exchange(),
                Habit::Bursts { .. } => self.learn_burst(),
            }
        }
    }

    /// Generates one gap and the exchange after it.
    fn learn_exchange(&mut self) {
        let Habit::Exchanges { gap_s, calls, call_s, call_shortest_s, pause_s, hours } = self.habit
        else {
            unreachable!("asked of exchanges only");
        };
        let mut at = self.next_exchange(gap_s, hours);
        loop {
            let length_s = call_shortest_s + self.exponential_s(call_s - call_shortest_s);
            let end = at + self.samples(length_s).max(1);
            self.push(at, end);
            // Going on with probability 1 - 1/calls makes the number of calls geometric.
            if uniform(&mut self.rng) * calls < 1.0 {
                return;
            }
            let pause_s = self.exponential_s(pause_s);
            at = end + self.samples(pause_s).max(1);
        }
    }

    /// Start of the next exchange. By thinning: candidates come at the rate of open hours, and of
    /// those outside only a share is kept, which makes the rate follow the clock exactly.
    fn next_exchange(&mut self, gap_s: f64, hours: Option<Hours>) -> i64 {
        let mut at = self.known_until;
        loop {
            let gap_s = self.exponential_s(gap_s);
            at += self.samples(gap_s).max(1);
            let of_week_s = self.start_of_week_s + at as f64 / self.sample_rate_hz;
            let share = hours.map_or(1.0, |hours| hours.share_at(of_week_s));
            if uniform(&mut self.rng) < share {
                return at;
            }
        }
    }

    /// Generates one burst.
    fn learn_burst(&mut self) {
        let Habit::Bursts { period_s, jitter_s, shortest_s, longest_s } = self.habit else {
            unreachable!("asked of bursts only");
        };
        let jitter_s = jitter_s * (2.0 * uniform(&mut self.rng) - 1.0);
        let length_s = shortest_s + (longest_s - shortest_s) * uniform(&mut self.rng);
        let mark_s = (self.next_burst + 1) as f64 * period_s;
        let from = self.burst_origin + self.samples(mark_s + jitter_s);
        self.next_burst += 1;
        self.push(from, from + self.samples(length_s));
    }

    /// Appends a transmission, or the part of it that lies in the scene.
    fn push(&mut self, from: i64, to: i64) {
        debug_assert!(self.known_until < from.max(1) && from < to);
        self.known_until = to;
        if to > 0 {
            let to_sample = if to == i64::MAX { u64::MAX } else { to.unsigned_abs() };
            let from_sample = from.max(0).unsigned_abs();
            self.transmissions.push_back(Transmission { from_sample, to_sample });
        }
    }

    /// A duration (s) in samples, to the nearest.
    fn samples(&self, duration_s: f64) -> i64 {
        (duration_s * self.sample_rate_hz).round() as i64
    }

    /// An exponential duration with the given mean (s).
    fn exponential_s(&mut self, mean_s: f64) -> f64 {
        let unit: f64 = Exp1.sample(&mut self.rng);
        unit * mean_s
    }
}

/// A number from 0 (included) to 1 (excluded).
fn uniform(rng: &mut Xoshiro256PlusPlus) -> f64 {
    StandardUniform.sample(rng)
}

#[cfg(test)]
mod tests {
    use rand_core::SeedableRng;

    use super::*;
    use crate::scene::UserKind;

    const SEED: u64 = 20_260_301;
    const RATE_HZ: f64 = 2.4e6;

    fn timeline(habit: &Habit, start_of_week_s: f64, seed: u64) -> Timeline {
        let spec = SceneSpec { start_of_week_s, ..SceneSpec::noise_only(448.1e6, RATE_HZ, -95.0) };
        Timeline::new(&spec, habit, Xoshiro256PlusPlus::seed_from_u64(seed))
    }

    fn share(timeline: &mut Timeline, from_s: f64, to_s: f64) -> f64 {
        let (from, to) = ((from_s * RATE_HZ) as u64, (to_s * RATE_HZ) as u64);
        let on: u64 = timeline
            .in_range(from, to)
            .map(|on| on.to_sample.min(to) - on.from_sample.max(from))
            .sum();
        on as f64 / (to - from) as f64
    }

    /// Standard deviation of the share of time on over `span_s`: the central limit theorem for
    /// renewal-reward processes, var(on - share * cycle) / (mean cycle * span).
    fn share_sigma(habit: &Habit, span_s: f64) -> f64 {
        let share = habit.expected_share();
        match *habit {
            Habit::Always => 0.0,
            Habit::Exchanges { gap_s, calls, call_s, call_shortest_s, pause_s, .. } => {
                let call_variance = (call_s - call_shortest_s).powi(2);
                let of_lengths = (1.0 - share).powi(2) * calls * call_variance
                    + share.powi(2) * (gap_s.powi(2) + (calls - 1.0) * pause_s.powi(2));
                // A geometric count from 1 with mean m has variance m (m - 1).
                let of_count =
                    ((1.0 - share) * call_s - share * pause_s).powi(2) * calls * (calls - 1.0);
                let cycle_s = gap_s + calls * call_s + (calls - 1.0) * pause_s;
                ((of_lengths + of_count) / (cycle_s * span_s)).sqrt()
            }
            Habit::Bursts { period_s, shortest_s, longest_s, .. } => {
                // Uniform lengths, and one burst more or less at the ends of the span.
                let lengths = (longest_s - shortest_s).powi(2) / 12.0 * span_s / period_s;
                (lengths + longest_s.powi(2)).sqrt() / span_s
            }
        }
    }

    #[test]
    fn the_share_of_time_on_is_what_the_habit_expects() {
        println!("seed {SEED}");
        for (index, user) in SceneSpec::lower_saltmarsh().users.iter().enumerate() {
            let mut habit = user.habit.clone();
            if let Habit::Exchanges { hours, .. } = &mut habit {
                *hours = None;
            }
            let mut timeline = timeline(&habit, 0.0, SEED + index as u64);
            // Ten days: at least 450 cycles of the rarest habit.
            let span_s = 10.0 * 86_400.0;
            let difference = share(&mut timeline, 0.0, span_s) - habit.expected_share();
            // Five sigma two-sided: 6e-7 for each of about 60 users.
            let bound = 5.0 * share_sigma(&habit, span_s) + 1e-12;
            assert!(
                difference.abs() <= bound,
                "{}: {difference:.2e} of {bound:.2e}",
                user.kind.as_str()
            );
        }
    }

    #[test]
    fn a_quarry_works_on_weekdays_by_day() {
        println!("seed {SEED}");
        let spec = SceneSpec::lower_saltmarsh();
        let quarry = spec.users.iter().find(|user| user.kind == UserKind::QuarryVoice).unwrap();
        let mut timeline = timeline(&quarry.habit, 0.0, SEED);
        let expected = quarry.habit.expected_share();
        let day_s = 86_400.0;
        let bound = 5.0 * share_sigma(&quarry.habit, 9.0 * 3600.0);
        for day in 0..7 {
            let at = |hour: f64| f64::from(day) * day_s + hour * 3600.0;
            let by_day = share(&mut timeline, at(8.0), at(17.0));
            if day < 5 {
                assert!((by_day - expected).abs() < bound, "day {day}: {by_day}");
            } else {
                assert!(by_day < 0.1 * expected, "day {day}: {by_day}");
            }
            assert!(share(&mut timeline, at(18.0), at(24.0)) < 0.1 * expected, "day {day}");
        }
    }

    #[test]
    fn a_timeline_does_not_depend_on_how_it_is_asked() {
        println!("seed {SEED}");
        for user in &SceneSpec::lower_saltmarsh().users {
            let end = (3600.0 * RATE_HZ) as u64;
            let mut whole = timeline(&user.habit, 0.0, SEED);
            let mut parts = timeline(&user.habit, 0.0, SEED);
            for step in 1..100 {
                parts.in_range(end / 100 * (step - 1), end / 100 * step).count();
            }
            let whole: Vec<_> = whole.in_range(0, end).collect();
            assert_eq!(parts.in_range(0, end).collect::<Vec<_>>(), whole);
            for pair in whole.windows(2) {
                assert!(pair[0].from_sample < pair[0].to_sample);
                assert!(pair[0].to_sample < pair[1].from_sample);
            }
        }
    }

    #[test]
    fn what_is_forgotten_takes_no_memory_and_the_rest_stays() {
        let habit =
            Habit::Bursts { period_s: 1.0, jitter_s: 0.1, shortest_s: 0.03, longest_s: 0.05 };
        let mut timeline = timeline(&habit, 0.0, SEED);
        let half = (500.0 * RATE_HZ) as u64;
        let later: Vec<_> = timeline.in_range(half, 2 * half).collect();
        timeline.forget_before(half);
        assert!(timeline.transmissions.len() < 502);
        assert_eq!(timeline.in_range(half, 2 * half).collect::<Vec<_>>(), later);
    }
}
