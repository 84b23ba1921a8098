//! What really happened: who was on, and when. A detector never sees it; tests and figures do.

use rand_core::SeedableRng;
use rand_xoshiro::Xoshiro256PlusPlus;

use super::spec::SceneSpec;
use super::timeline::{Timeline, Transmission};

/// The on and off times of every user of a scene, exact to the sample.
///
/// It is drawn from random streams of its own, one a user, and so needs no samples: a `Truth` made
/// from the spec and the seed of a [`super::Scene`] agrees with it for ever. Time is generated as
/// far as it is asked for and kept, at 16 bytes a transmission: about 3 MB for a day of the Lower
/// Saltmarsh site. [`Truth::forget_before`] keeps an endless demonstration small.
#[derive(Clone, Debug)]
pub struct Truth {
    timelines: Vec<Timeline>,
}

impl Truth {
    /// The truth of a scene.
    pub fn new(spec: &SceneSpec, seed: u64) -> Truth {
        let streams = streams(seed, Purpose::Timelines);
        let timelines = spec
            .users
            .iter()
            .zip(streams)
            .map(|(user, rng)| Timeline::new(spec, &user.habit, rng))
            .collect();
        Truth { timelines }
    }

    /// Share of the half-open range of samples for which a user is on (0 to 1), ramps included.
    ///
    /// # Panics
    /// If `user_index` is not that of a user, the range is empty, or it begins in what was
    /// forgotten.
    pub fn activity(&mut self, user_index: usize, from_sample: u64, to_sample: u64) -> f64 {
        assert!(from_sample < to_sample, "empty range {from_sample}..{to_sample}");
        let on_samples: u64 = self
            .transmissions(user_index, from_sample, to_sample)
            .map(|on| on.to_sample.min(to_sample) - on.from_sample.max(from_sample))
            .sum();
        on_samples as f64 / (to_sample - from_sample) as f64
    }

    /// The transmissions of a user that have a part in the half-open range, oldest first, whole.
    ///
    /// # Panics
    /// If `user_index` is not that of a user, or the range begins in what was forgotten.
    pub fn transmissions(
        &mut self,
        user_index: usize,
        from_sample: u64,
        to_sample: u64,
    ) -> impl Iterator<Item = Transmission> + '_ {
        self.timelines[user_index].in_range(from_sample, to_sample)
    }

    /// Drops everything that ended at or before `sample`; it can't be asked for any more.
    pub fn forget_before(&mut self, sample: u64) {
        for timeline in &mut self.timelines {
            timeline.forget_before(sample);
        }
    }
}

/// What a random stream is for. Streams of different purposes never overlap.
#[derive(Clone, Copy, Debug)]
pub(super) enum Purpose {
    /// The noise floor: one stream.
    Noise,
    /// On and off times: one stream a user.
    Timelines,
    /// Modulation: one stream a user.
    Modulation,
}

/// The random streams for a purpose, 2^128 numbers apart from each other, purposes 2^192.
pub(super) fn streams(seed: u64, purpose: Purpose) -> impl Iterator<Item = Xoshiro256PlusPlus> {
    let mut rng = Xoshiro256PlusPlus::seed_from_u64(seed);
    for _ in 0..purpose as usize {
        rng.long_jump();
    }
    std::iter::repeat_with(move || {
        let stream = rng.clone();
        rng.jump();
        stream
    })
}
