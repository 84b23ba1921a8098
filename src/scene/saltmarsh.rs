//! The Lower Saltmarsh site: ninety channels around the Quern Mill pumping station. All invented,
//! frequencies and users included; it must never be mistaken for a survey of a real place.

use super::spec::{Habit, Hours, RasterChannel, SceneSpec, User, UserKind};

/// Middle of the block (Hz).
const CENTRE_HZ: f64 = 448.1e6;
/// Sample rate (Hz).
const SAMPLE_RATE_HZ: f64 = 2.4e6;
/// Channel raster (Hz).
const RASTER_HZ: f64 = 25e3;
/// Measured bandwidth of a channel (Hz).
const CHANNEL_BANDWIDTH_HZ: f64 = 16e3;
/// Noise power in a channel at the middle of the block (dBFS).
const FLOOR_DBFS: f64 = -95.0;
/// Rise of the floor over the block (dB).
const SLOPE_DB: f64 = 3.0;
/// The strong neighbour, over the noise in a channel (dB).
const NEIGHBOUR_SNR_DB: f64 = 68.0;

/// Who uses S01, S02, ... S90: `q`uarry, `f`arm, `t`axi, tele`m`etry, `d`ata link, `b`eacon,
/// `c`oastguard, `.` nobody.
const USE_OF_CHANNELS: &str =
    "tq.mtqm.f.td.t.fmfb..tmf.d.fqf.df.mqm.q.tqf.fqmtm.mf.t.q.cqtc.q.tftm.q.qmtdb.cm.m..q.f.d..";

/// Levels over the noise, dealt in this order to the users of each kind, lowest frequency first
/// (dB). From below what any dwell can hear to strong; the order keeps neighbours unlike.
const SNR_DB: [f64; 15] =
    [12.0, -2.0, 30.0, 4.0, 60.0, -11.5, 16.0, 1.0, 40.0, -9.0, 8.0, 22.0, 6.0, 50.0, 2.5];

impl SceneSpec {
    /// The drainage board's block as heard at Quern Mill (invented): 448.1 MHz, 2.4 MS/s, channels
    /// S01 to S90. The first sample falls on a Monday at 09:00.
    pub fn lower_saltmarsh() -> SceneSpec {
        let mut spec = SceneSpec {
            slope_db: SLOPE_DB,
            start_of_week_s: 9.0 * 3600.0,
            ..SceneSpec::noise_only(CENTRE_HZ, SAMPLE_RATE_HZ, FLOOR_DBFS)
        };
        let count = USE_OF_CHANNELS.len();
        for (index, letter) in USE_OF_CHANNELS.chars().enumerate() {
            let kind = kind_of(letter);
            let offset_hz = (index as f64 - (count - 1) as f64 / 2.0) * RASTER_HZ;
            let channel = RasterChannel {
                id: format!("S{:02}", index + 1),
                centre_hz: CENTRE_HZ + offset_hz,
                bandwidth_hz: CHANNEL_BANDWIDTH_HZ,
                protected: kind == Some(UserKind::CoastguardRelay),
            };
            if let Some(kind) = kind {
                let nth = spec.users.iter().filter(|user| user.kind == kind).count();
                let user = user_of(&spec, &channel, kind, nth);
                spec.users.push(user);
            }
            spec.channels.push(channel);
        }
        let neighbour = neighbour(&spec, CENTRE_HZ + (count + 1) as f64 / 2.0 * RASTER_HZ);
        spec.users.push(neighbour);
        spec
    }
}

/// What a letter of [`USE_OF_CHANNELS`] stands for.
fn kind_of(letter: char) -> Option<UserKind> {
    match letter {
        'q' => Some(UserKind::QuarryVoice),
        'f' => Some(UserKind::FarmVoice),
        't' => Some(UserKind::TaxiVoice),
        'm' => Some(UserKind::TelemetryBurst),
        'd' => Some(UserKind::DataLink),
        'b' => Some(UserKind::Beacon),
        'c' => Some(UserKind::CoastguardRelay),
        _ => None,
    }
}

/// The user of a channel, the `nth` of its kind.
fn user_of(spec: &SceneSpec, channel: &RasterChannel, kind: UserKind, nth: usize) -> User {
    // Links of minutes, beacons and relays are few, so each list begins at another level.
    let snr_db = match kind {
        UserKind::DataLink => [20.0, 3.0, 35.0, -4.0, 8.0][nth % 5],
        UserKind::Beacon => [25.0, 0.0][nth % 2],
        UserKind::CoastguardRelay => [10.0, 4.0, 28.0][nth % 3],
        UserKind::QuarryVoice => SNR_DB[nth % SNR_DB.len()],
        UserKind::TaxiVoice => SNR_DB[(nth + 4) % SNR_DB.len()],
        UserKind::FarmVoice => SNR_DB[(nth + 10) % SNR_DB.len()],
        UserKind::TelemetryBurst | UserKind::StrongNeighbour => SNR_DB[(nth + 12) % SNR_DB.len()],
    };
    // Carriers are off by up to 400 Hz, about 1 part per million: no two alike within a kind.
    let carrier_error_hz = (nth * 7 % 11) as f64 * 80.0 - 400.0;
    let centre_hz = channel.centre_hz + carrier_error_hz;
    User {
        kind,
        channel_id: Some(channel.id.clone()),
        centre_hz,
        bandwidth_hz: bandwidth_hz(kind, nth),
        level_dbfs: spec.floor_dbfs_in(channel.centre_hz, channel.bandwidth_hz) + snr_db,
        habit: habit_of(kind, nth),
    }
}

/// Occupied bandwidth of the `nth` user of a kind (Hz).
fn bandwidth_hz(kind: UserKind, nth: usize) -> f64 {
    match kind {
        // The first beacon is a plain carrier, the second a control carrier with slow symbols.
        UserKind::Beacon => [0.0, 2e3][nth % 2],
        UserKind::TelemetryBurst | UserKind::DataLink | UserKind::StrongNeighbour => 9.6e3,
        // Voice of ±2.5 kHz deviation and 3 kHz audio, common practice on a 12.5 kHz raster.
        _ => 11e3,
    }
}

/// The habit of the `nth` user of a kind.
fn habit_of(kind: UserKind, nth: usize) -> Habit {
    let working_hours =
        Some(Hours { weekdays_only: true, from_h: 6.5, to_h: 17.5, outside_share: 0.02 });
    let daylight =
        Some(Hours { weekdays_only: false, from_h: 5.0, to_h: 21.0, outside_share: 0.1 });
    let exchanges = |gap_s, calls, call_s, call_shortest_s, pause_s, hours| Habit::Exchanges {
        gap_s,
        calls,
        call_s,
        call_shortest_s,
        pause_s,
        hours,
    };
    match kind {
        UserKind::QuarryVoice => exchanges(60.0, 4.0, 5.0, 0.5, 1.0, working_hours),
        UserKind::FarmVoice => exchanges(600.0, 3.0, 4.0, 0.5, 1.5, daylight),
        UserKind::TaxiVoice => exchanges(20.0, 3.0, 2.5, 0.3, 0.8, None),
        UserKind::TelemetryBurst => {
            let period_s = 2.0 + (nth % 5) as f64 * 2.0;
            let jitter_s = 0.05 * period_s;
            Habit::Bursts { period_s, jitter_s, shortest_s: 0.03, longest_s: 0.08 }
        }
        UserKind::DataLink => exchanges(180.0, 1.0, 120.0, 10.0, 0.0, None),
        UserKind::Beacon => Habit::Always,
        UserKind::CoastguardRelay => exchanges(900.0, 3.0, 30.0, 5.0, 2.0, None),
        UserKind::StrongNeighbour => exchanges(20.0, 1.0, 600.0, 30.0, 0.0, None),
    }
}

/// The strong neighbour on `centre_hz`, one raster step above the highest channel.
fn neighbour(spec: &SceneSpec, centre_hz: f64) -> User {
    let kind = UserKind::StrongNeighbour;
    User {
        kind,
        channel_id: None,
        centre_hz,
        bandwidth_hz: bandwidth_hz(kind, 0),
        level_dbfs: spec.floor_dbfs_in(centre_hz, CHANNEL_BANDWIDTH_HZ) + NEIGHBOUR_SNR_DB,
        habit: habit_of(kind, 0),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_kind_of_user_is_present_and_a_third_of_the_channels_has_none() {
        let spec = SceneSpec::lower_saltmarsh();
        for kind in UserKind::ALL {
            assert!(
                spec.users.iter().any(|user| user.kind == kind),
                "{} is missing",
                kind.as_str()
            );
        }
        let used = |id: &str| spec.users.iter().any(|user| user.channel_id.as_deref() == Some(id));
        let unused = spec.channels.iter().filter(|channel| !used(&channel.id)).count();
        assert!((28..=32).contains(&unused), "{unused} channels without a user");
    }

    #[test]
    fn ninety_channels_lie_inside_the_block_and_three_are_protected() {
        let spec = SceneSpec::lower_saltmarsh();
        assert_eq!(spec.channels.len(), 90);
        assert_eq!(spec.channels[0].id, "S01");
        assert_eq!(spec.channels[89].id, "S90");
        assert_eq!(spec.channels.iter().filter(|channel| channel.protected).count(), 3);
        for pair in spec.channels.windows(2) {
            assert!((pair[1].centre_hz - pair[0].centre_hz - 25e3).abs() < 1e-6);
        }
        for user in &spec.users {
            assert!((user.centre_hz - spec.centre_hz).abs() + user.bandwidth_hz / 2.0 <= 1.15e6);
        }
        let middle_hz = (spec.channels[0].centre_hz + spec.channels[89].centre_hz) / 2.0;
        assert!((middle_hz - spec.centre_hz).abs() < 1e-6);
    }

    #[test]
    fn levels_spread_from_below_hearing_to_strong() {
        let spec = SceneSpec::lower_saltmarsh();
        for kind in [
            UserKind::QuarryVoice,
            UserKind::FarmVoice,
            UserKind::TaxiVoice,
            UserKind::TelemetryBurst,
        ] {
            let snr_db: Vec<f64> = spec
                .users
                .iter()
                .filter(|user| user.kind == kind)
                .map(|user| spec.snr_db(user))
                .collect();
            // The demo's dwells hear 10.5 dB below the noise.
            assert!(snr_db.iter().any(|snr| *snr < -11.0), "{}: {snr_db:?}", kind.as_str());
            assert!(snr_db.iter().any(|snr| *snr > 59.0), "{}: {snr_db:?}", kind.as_str());
        }
    }
}
