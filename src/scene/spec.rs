//! What there is to hear at an invented site, as plain data: the floor, the channels, the users.
//!
//! Nothing here is random: a [`SceneSpec`] says what kind of thing happens, and the seed that is
//! given to [`super::Scene::new`] says when. It must never describe a real site or a real user.

/// Bandwidth that [`SceneSpec::floor_dbfs`] refers to (Hz).
pub const FLOOR_BANDWIDTH_HZ: f64 = 16e3;

/// Seconds in one week.
const WEEK_S: f64 = 7.0 * 86_400.0;

/// An invented site: everything that a scene is made from, besides its seed.
#[derive(Clone, Debug, PartialEq)]
pub struct SceneSpec {
    /// Radio frequency of the block's middle (Hz).
    pub centre_hz: f64,
    /// Complex samples a second (Hz).
    pub sample_rate_hz: f64,
    /// Noise power at the block's middle in [`FLOOR_BANDWIDTH_HZ`] (dBFS).
    pub floor_dbfs: f64,
    /// Rise of the noise density from the lowest to the highest frequency of the block, which is
    /// one sample rate wide: a straight line in decibels (dB).
    pub slope_db: f64,
    /// Time of the week at the first sample, from Monday 00:00 site time (s).
    pub start_of_week_s: f64,
    /// The channels, by rising frequency.
    pub channels: Vec<RasterChannel>,
    /// The transmitters, in any order; a channel may have none.
    pub users: Vec<User>,
}

/// One channel of the raster.
#[derive(Clone, Debug, PartialEq)]
pub struct RasterChannel {
    /// Name, unique in the scene.
    pub id: String,
    /// Centre frequency (Hz).
    pub centre_hz: f64,
    /// Bandwidth in which energy is measured (Hz).
    pub bandwidth_hz: f64,
    /// Protected: never on offer.
    pub protected: bool,
}

/// What sort of transmitter a user is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum UserKind {
    /// Push-to-talk voice of a quarry: exchanges of calls in working hours.
    QuarryVoice,
    /// Push-to-talk voice of a farm: rare.
    FarmVoice,
    /// Push-to-talk voice of a taxi office: busy, short exchanges.
    TaxiVoice,
    /// Telemetry: bursts of tens of milliseconds at an interval of seconds.
    TelemetryBurst,
    /// Data link: sessions of minutes.
    DataLink,
    /// A beacon or a control carrier that is always on.
    Beacon,
    /// Coastguard relay: rare and long calls on a protected channel.
    CoastguardRelay,
    /// A strong transmitter beside the planned channels.
    StrongNeighbour,
}

impl UserKind {
    /// Every kind.
    pub const ALL: [UserKind; 8] = [
        UserKind::QuarryVoice,
        UserKind::FarmVoice,
        UserKind::TaxiVoice,
        UserKind::TelemetryBurst,
        UserKind::DataLink,
        UserKind::Beacon,
        UserKind::CoastguardRelay,
        UserKind::StrongNeighbour,
    ];

    /// A short name, for tables.
    pub fn as_str(self) -> &'static str {
        match self {
            UserKind::QuarryVoice => "quarry_voice",
            UserKind::FarmVoice => "farm_voice",
            UserKind::TaxiVoice => "taxi_voice",
            UserKind::TelemetryBurst => "telemetry_burst",
            UserKind::DataLink => "data_link",
            UserKind::Beacon => "beacon",
            UserKind::CoastguardRelay => "coastguard_relay",
            UserKind::StrongNeighbour => "strong_neighbour",
        }
    }

    /// Whether it carries speech, else symbols.
    pub(super) fn is_voice(self) -> bool {
        use UserKind::{CoastguardRelay, FarmVoice, QuarryVoice, TaxiVoice};
        matches!(self, QuarryVoice | FarmVoice | TaxiVoice | CoastguardRelay)
    }
}

/// One transmitter.
#[derive(Clone, Debug, PartialEq)]
pub struct User {
    /// What sort it is; decides how it is modulated.
    pub kind: UserKind,
    /// The channel that it uses; `None` outside the raster.
    pub channel_id: Option<String>,
    /// Its carrier frequency, which may be some hundred hertz off the channel's centre (Hz).
    pub centre_hz: f64,
    /// Occupied bandwidth by Carson's rule (Hz); 0 is a plain carrier.
    pub bandwidth_hz: f64,
    /// Mean power while it is on, key ramps apart (dBFS).
    pub level_dbfs: f64,
    /// When it is on.
    pub habit: Habit,
}

/// When a user transmits.
#[derive(Clone, Debug, PartialEq)]
pub enum Habit {
    /// From the first sample for ever.
    Always,
    /// Exchanges of calls, a random gap apart. Sessions of one call are exchanges too.
    Exchanges {
        /// Mean gap from one exchange to the next, exponential, in open hours (s).
        gap_s: f64,
        /// Mean number of calls in an exchange, geometric, 1 or more.
        calls: f64,
        /// Mean length of a call: the shortest and an exponential on top of it (s).
        call_s: f64,
        /// Shortest call, at most the mean (s).
        call_shortest_s: f64,
        /// Mean pause between the calls of an exchange, exponential (s).
        pause_s: f64,
        /// Open hours; `None` is round the clock.
        hours: Option<Hours>,
    },
    /// Bursts at a fixed interval with a jitter that does not add up.
    Bursts {
        /// Interval (s).
        period_s: f64,
        /// Largest departure from the interval's mark, either way, uniform (s).
        jitter_s: f64,
        /// Shortest burst (s).
        shortest_s: f64,
        /// Longest burst; lengths are uniform in between (s).
        longest_s: f64,
    },
}

impl Habit {
    /// Expected share of time on, in open hours (0 to 1).
    ///
    /// For exchanges by the renewal-reward theorem: mean time on in a cycle over its mean length.
    pub fn expected_share(&self) -> f64 {
        match *self {
            Habit::Always => 1.0,
            Habit::Exchanges { gap_s, calls, call_s, pause_s, .. } => {
                let on_s = calls * call_s;
                on_s / (gap_s + on_s + (calls - 1.0) * pause_s)
            }
            Habit::Bursts { period_s, shortest_s, longest_s, .. } => {
                (shortest_s + longest_s) / 2.0 / period_s
            }
        }
    }
}

/// The hours in which a user is about. Outside them exchanges begin less often.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Hours {
    /// Monday to Friday only.
    pub weekdays_only: bool,
    /// Opening time, site time (h).
    pub from_h: f64,
    /// Closing time, later than the opening (h).
    pub to_h: f64,
    /// Rate of exchanges outside these hours, as a share of the rate inside (0 to 1).
    pub outside_share: f64,
}

impl Hours {
    /// Rate of exchanges at a time of the week, counted from Monday 00:00 (s), as a share of the
    /// rate in open hours.
    pub fn share_at(&self, of_week_s: f64) -> f64 {
        let of_week_h = of_week_s.rem_euclid(WEEK_S) / 3600.0;
        let day_open = !self.weekdays_only || of_week_h < 5.0 * 24.0;
        let of_day_h = of_week_h % 24.0;
        let open = day_open && (self.from_h..self.to_h).contains(&of_day_h);
        if open { 1.0 } else { self.outside_share }
    }
}

impl SceneSpec {
    /// A site with nothing but white noise: no slope, no channels, no users.
    pub fn noise_only(centre_hz: f64, sample_rate_hz: f64, floor_dbfs: f64) -> SceneSpec {
        SceneSpec {
            centre_hz,
            sample_rate_hz,
            floor_dbfs,
            slope_db: 0.0,
            start_of_week_s: 0.0,
            channels: Vec::new(),
            users: Vec::new(),
        }
    }

    /// Noise power at a radio frequency (Hz) in a bandwidth (Hz), (dBFS).
    ///
    /// The density at the middle times the bandwidth: over one channel the slope changes that by
    /// less than 1e-4 dB.
    pub fn floor_dbfs_in(&self, centre_hz: f64, bandwidth_hz: f64) -> f64 {
        self.floor_dbfs
            + self.slope_db * (centre_hz - self.centre_hz) / self.sample_rate_hz
            + 10.0 * (bandwidth_hz / FLOOR_BANDWIDTH_HZ).log10()
    }

    /// A user's level over the noise in [`FLOOR_BANDWIDTH_HZ`] around its carrier (dB).
    pub fn snr_db(&self, user: &User) -> f64 {
        user.level_dbfs - self.floor_dbfs_in(user.centre_hz, FLOOR_BANDWIDTH_HZ)
    }
}
