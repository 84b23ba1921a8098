//! The number formats that receivers deliver, as a rounding of samples.
//!
//! What comes out is what a recording of that format holds: the negative end of an integer format
//! is -1, and a sample with a component at either end counts as clipped. Nothing else is changed.

use num_complex::Complex32;

/// A number format; names and scales are those of recordings.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum NumberFormat {
    /// Pairs of signed 16-bit integers, little-endian.
    Ci16Le,
    /// Pairs of signed 8-bit integers.
    Ci8,
    /// Pairs of unsigned 8-bit integers, zero at 128.
    Cu8,
    /// Pairs of 32-bit floats: not rounded.
    Cf32Le,
}

impl NumberFormat {
    /// Every format.
    pub const ALL: [NumberFormat; 4] =
        [NumberFormat::Ci16Le, NumberFormat::Ci8, NumberFormat::Cu8, NumberFormat::Cf32Le];

    /// The word used in every interface.
    pub fn as_str(self) -> &'static str {
        match self {
            NumberFormat::Ci16Le => "ci16_le",
            NumberFormat::Ci8 => "ci8",
            NumberFormat::Cu8 => "cu8",
            NumberFormat::Cf32Le => "cf32_le",
        }
    }

    /// Steps from zero to full scale; `None` for floats.
    pub fn steps(self) -> Option<f32> {
        match self {
            NumberFormat::Ci16Le => Some(32_768.0),
            // Two's complement, or the same with an offset: the values are the same ones.
            NumberFormat::Ci8 | NumberFormat::Cu8 => Some(128.0),
            NumberFormat::Cf32Le => None,
        }
    }

    /// Rounds samples in place as the receiver would; returns how many were clipped.
    pub fn apply(self, samples: &mut [Complex32]) -> usize {
        let Some(steps) = self.steps() else {
            return samples.iter().filter(|s| s.re.abs() >= 1.0 || s.im.abs() >= 1.0).count();
        };
        // Adding and taking away 1.5 * 2^23 leaves a whole number, the nearest one.
        const WHOLE: f32 = 12_582_912.0;
        let (low, high) = (-steps, steps - 1.0);
        let round = |value: f32| ((value * steps).clamp(low, high) + WHOLE) - WHOLE;
        let mut clipped = 0;
        for sample in samples {
            let (re, im) = (round(sample.re), round(sample.im));
            let at_end = |value: f32| value == low || value == high;
            clipped += usize::from(at_end(re) || at_end(im));
            *sample = Complex32::new(re, im) / steps;
        }
        clipped
    }
}
