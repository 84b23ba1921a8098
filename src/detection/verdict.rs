//! What a dwell says of a channel: the plain value that every later room works on.

use super::time::Stamp;

/// The three things that a dwell can say of a channel.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum State {
    /// Energy above the threshold.
    Occupied,
    /// No energy above a threshold at which the protection level would have been detected.
    Idle,
    /// The dwell cannot tell; the reasons say why. Never to be turned into `Idle`.
    Unknown,
}

impl State {
    /// The word used in every interface.
    pub fn as_str(self) -> &'static str {
        match self {
            State::Occupied => "occupied",
            State::Idle => "idle",
            State::Unknown => "unknown",
        }
    }
}

/// Why a verdict is what it is: one short machine-readable code each.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
#[repr(u8)]
pub enum Reason {
    /// The site's own radio announced a transmission here.
    Own = 0,
    /// The dwell would not have detected the protection level with the required probability.
    Insensitive = 1,
    /// Samples reached the converter's limits.
    Overload = 2,
    /// Samples were not numbers.
    NotFinite = 3,
    /// Too few idle reference cells to know the noise floor.
    NoReference = 4,
    /// The input carried no noise at all: the receiver was not listening.
    NoNoise = 5,
    /// Nobody looked: down time, a gap in the samples, a missed visit.
    NotObserved = 6,
    /// Found in a slice: a transmission too short to show in the whole dwell.
    Burst = 7,
    /// The floor has risen, and what it rose by could be an incumbent at the protection level that
    /// fills the whole block.
    FloorRaised = 8,
    /// Impulses that fill the whole block hit half of the slices or more.
    Impulses = 9,
}

impl Reason {
    /// Every reason, in the order of its code.
    pub const ALL: [Reason; 10] = [
        Reason::Own,
        Reason::Insensitive,
        Reason::Overload,
        Reason::NotFinite,
        Reason::NoReference,
        Reason::NoNoise,
        Reason::NotObserved,
        Reason::Burst,
        Reason::FloorRaised,
        Reason::Impulses,
    ];

    /// The code used in every interface.
    pub fn as_str(self) -> &'static str {
        match self {
            Reason::Own => "own",
            Reason::Insensitive => "insensitive",
            Reason::Overload => "overload",
            Reason::NotFinite => "not_finite",
            Reason::NoReference => "no_reference",
            Reason::NoNoise => "no_noise",
            Reason::NotObserved => "not_observed",
            Reason::Burst => "burst",
            Reason::FloorRaised => "floor_raised",
            Reason::Impulses => "impulses",
        }
    }
}

/// A set of [`Reason`]s; bit `n` stands for the reason with code `n`.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Reasons(u32);

impl Reasons {
    /// No reason.
    pub const NONE: Reasons = Reasons(0);

    /// The set that holds one reason.
    pub fn one(reason: Reason) -> Reasons {
        Reasons(1 << reason as u8)
    }

    /// Adds a reason.
    pub fn insert(&mut self, reason: Reason) {
        self.0 |= 1 << reason as u8;
    }

    /// The set with all reasons of both.
    pub fn union(self, other: Reasons) -> Reasons {
        Reasons(self.0 | other.0)
    }

    /// Whether `reason` is in the set.
    pub fn contains(self, reason: Reason) -> bool {
        self.0 & (1 << reason as u8) != 0
    }

    /// Whether the set is empty.
    pub fn is_empty(self) -> bool {
        self.0 == 0
    }

    /// The reasons in the order of their codes.
    pub fn iter(self) -> impl Iterator<Item = Reason> {
        Reason::ALL.into_iter().filter(move |reason| self.contains(*reason))
    }

    /// The set as bits, for storage.
    pub fn bits(self) -> u32 {
        self.0
    }

    /// The set from stored bits; bits that no reason stands for are dropped.
    pub fn from_bits(bits: u32) -> Reasons {
        let known = Reason::ALL.iter().fold(0, |bits, reason| bits | 1 << *reason as u8);
        Reasons(bits & known)
    }
}

/// The levels behind a verdict, all in the channel's bandwidth and in the plan's level reference.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Levels {
    /// All power in the channel's bandwidth, noise included (dB).
    pub power_db: f64,
    /// Noise power in the channel's bandwidth (dB).
    pub floor_db: f64,
    /// The power at which the verdict turns (dB).
    pub threshold_db: f64,
    /// The power of a signal alone that this dwell would have detected with the required Pd (dB).
    pub sensitivity_db: f64,
}

/// What one dwell says of one channel.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Verdict {
    /// Index of the channel in [`super::plan::Plan::channels`].
    pub channel_index: usize,
    /// The verdict. For an own stretch it is `Unknown` with reason `Own`.
    pub state: State,
    /// Why; empty for a plain `Occupied` and for `Idle`.
    pub reasons: Reasons,
    /// What was measured; `None` where it could not be.
    pub levels: Option<Levels>,
}

impl Verdict {
    /// Whether this is a stretch of the site's own transmission.
    pub fn own(&self) -> bool {
        self.reasons.contains(Reason::Own)
    }
}

/// Everything that one dwell yields. Channels of bands with another dwell length come in reports of
/// their own, so a report need not name every channel of the plan.
#[derive(Clone, Debug, PartialEq)]
pub struct DwellReport {
    /// Counts up by one with each report of the run; 0 is the first.
    pub sequence: u64,
    /// When the dwell's first sample was taken.
    pub start: Stamp,
    /// Time really observed, which is also the time that the verdicts stand for (ns).
    pub observed_ns: i64,
    /// The verdicts, by rising channel index.
    pub verdicts: Vec<Verdict>,
    /// Energy of each slice in each of those channels: mean power in the channel's bandwidth (dB),
    /// `slice_power_db[slice * verdicts.len() + i]`; empty when the dwell could not be measured.
    pub slice_power_db: Vec<f32>,
    /// The dwell's averaged spectrum, lowest frequency first: power per bin, linear, full scale =
    /// 1.
    pub spectrum: Vec<f32>,
}

impl DwellReport {
    /// The moment at which the dwell ends (half-open).
    pub fn end(&self) -> Stamp {
        self.start.plus_nanos(self.observed_ns)
    }
}
