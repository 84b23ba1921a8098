//! What is to be watched, in plain checked values: the receiver's block, the bands, their channels.
//!
//! The `config` room makes a [`Plan`] out of a file; nothing behind it ever sees the file.

use super::window::Window;

/// The block of spectrum that the receiver delivers.
#[derive(Clone, Debug, PartialEq)]
pub struct Receiver {
    /// Radio frequency of the block's middle, where DC falls (Hz).
    pub centre_hz: f64,
    /// Complex samples a second (Hz).
    pub sample_rate_hz: f64,
    /// Width around the centre in which the front end is trusted (Hz), at most the sample rate.
    pub usable_bandwidth_hz: f64,
    /// Width around the centre that is left out of every channel and reference cell (Hz), 0 or
    /// more.
    pub dc_guard_hz: f64,
}

/// How samples become a spectrum.
#[derive(Clone, Debug, PartialEq)]
pub struct SpectrumSettings {
    /// Taper applied to each transform.
    pub window: Window,
    /// Overlap of consecutive transforms that is asked for (share of the transform, 0 to 0.9).
    pub overlap: f64,
    /// Transform length (samples), a power of two.
    pub transform_length: usize,
}

/// How the noise floor is estimated across the reference cells of one dwell.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum FloorEstimator {
    /// Mean of all reference cells. Best in an empty band, masked by any signal in a cell.
    CellAveraging,
    /// Mean of the cells that are left after iterative excision of occupied ones.
    Excision {
        /// Share of noise-only cells that an excision step drops (0 to 0.5); corrected for.
        rejection: f64,
    },
}

/// The shape that the floor may take across the block; each step up costs a little variance.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum FloorTrend {
    /// The same everywhere.
    Flat,
    /// A straight line in decibels.
    Slope,
    /// A parabola in decibels.
    Curve,
}

/// Floor estimation settings.
#[derive(Clone, Debug, PartialEq)]
pub struct FloorSettings {
    /// Which estimator.
    pub estimator: FloorEstimator,
    /// Which shape it fits.
    pub trend: FloorTrend,
}

/// Rules for one band: error rates asked for, what must be heard, when a channel may be offered.
#[derive(Clone, Debug, PartialEq)]
pub struct Band {
    /// Name, unique in the plan.
    pub id: String,
    /// Asked-for false-alarm probability of one dwell's decision on one channel (0 to 0.5).
    pub pfa: f64,
    /// Required detection probability at the protection level (0.5 to 1).
    pub pd: f64,
    /// Power at which an incumbent must be detected, in the plan's level reference (dB).
    pub protection_level_db: f64,
    /// Length of a dwell that is asked for (s).
    pub dwell_s: f64,
    /// Length of a slice that is asked for (s), at most the dwell.
    pub slice_s: f64,
    /// Rules for the offer of a channel.
    pub policy: Policy,
}

/// When a channel may be offered.
#[derive(Clone, Debug, PartialEq)]
pub struct Policy {
    /// A channel must have been idle without a gap this long before first use (ns).
    pub check_time_ns: i64,
    /// No offer for this long after a detection (ns).
    pub hold_off_ns: i64,
    /// The newest verdict must be younger than this (ns).
    pub max_age_ns: i64,
}

/// One channel of a band.
#[derive(Clone, Debug, PartialEq)]
pub struct Channel {
    /// Name, unique in the plan.
    pub id: String,
    /// Index of its band in [`Plan::bands`].
    pub band_index: usize,
    /// Centre frequency (Hz).
    pub centre_hz: f64,
    /// Bandwidth in which energy is measured (Hz).
    pub bandwidth_hz: f64,
    /// Protected: watched and recorded, never on offer.
    pub protected: bool,
}

impl Channel {
    /// Lower and upper edge (Hz).
    pub fn edges_hz(&self) -> (f64, f64) {
        (self.centre_hz - self.bandwidth_hz / 2.0, self.centre_hz + self.bandwidth_hz / 2.0)
    }
}

/// What decibels of power refer to.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum LevelRef {
    /// A complex tone of amplitude 1 is 0 dBFS.
    Dbfs,
    /// Decibels over a milliwatt at the antenna connector; needs a calibration.
    Dbm,
}

impl LevelRef {
    /// The unit as written in answers: `dBFS` or `dBm`.
    pub fn as_str(self) -> &'static str {
        match self {
            LevelRef::Dbfs => "dBFS",
            LevelRef::Dbm => "dBm",
        }
    }
}

/// Everything that the detector needs to know, checked.
#[derive(Clone, Debug, PartialEq)]
pub struct Plan {
    /// The receiver's block.
    pub receiver: Receiver,
    /// How samples become a spectrum.
    pub spectrum: SpectrumSettings,
    /// How the floor is estimated.
    pub floor: FloorSettings,
    /// What levels refer to.
    pub level_ref: LevelRef,
    /// Bands, in the order of the file.
    pub bands: Vec<Band>,
    /// Channels, by band and then by frequency.
    pub channels: Vec<Channel>,
}

impl Plan {
    /// The band that a channel belongs to.
    pub fn band_of(&self, channel: &Channel) -> &Band {
        &self.bands[channel.band_index]
    }
}
