//! How figures are written: decibels to 0.01, seconds to 0.001, moments as RFC 3339 in UTC.
//!
//! No answer ever carries a NaN or an infinity, and rounding never breaks a sum.

use jiff::Timestamp;

use crate::detection::time::{NANOS_PER_SECOND, Utc};

/// Nanoseconds in one millisecond, the step of every time and duration in an answer.
pub(super) const NANOS_PER_MILLISECOND: i64 = 1_000_000;

/// Decibels rounded to 0.01; `None` (JSON null) for what is no number.
pub(super) fn decibels(value_db: f64) -> Option<f64> {
    rounded(value_db, 100.0)
}

/// A share (0 to 1) rounded to six places; `None` (JSON null) for what is no number.
pub(super) fn share(value: f64) -> Option<f64> {
    rounded(value, 1e6)
}

/// Rounds to `1 / steps`. Adding zero turns a negative zero into a plain one.
fn rounded(value: f64, steps: f64) -> Option<f64> {
    value.is_finite().then(|| (value * steps).round() / steps + 0.0)
}

/// Seconds rounded to 0.001; `None` (JSON null) for what is no number.
pub(super) fn seconds(value_s: f64) -> Option<f64> {
    rounded(value_s, 1000.0)
}

/// A duration in nanoseconds as seconds, rounded to 0.001.
pub(super) fn nanos_as_seconds(nanos: i64) -> f64 {
    millis_as_seconds((nanos as f64 / NANOS_PER_MILLISECOND as f64).round() as i64)
}

fn millis_as_seconds(millis: i64) -> f64 {
    millis as f64 / 1000.0
}

/// Durations (ns) as seconds to 0.001, so that they still add up to their rounded total.
///
/// Each running total is rounded and the differences are taken: every part is within 0.001 s of its
/// exact value, none turns negative, and a part of nothing stays nothing.
pub(super) fn parts_as_seconds<const PARTS: usize>(parts_ns: [i64; PARTS]) -> [f64; PARTS] {
    let (mut total_ns, mut total_ms) = (0_i64, 0_i64);
    parts_ns.map(|part_ns| {
        total_ns += part_ns;
        let before_ms = total_ms;
        total_ms = (total_ns + NANOS_PER_MILLISECOND / 2).div_euclid(NANOS_PER_MILLISECOND);
        millis_as_seconds(total_ms - before_ms)
    })
}

/// A moment as RFC 3339 with `Z`, cut (not rounded) to the millisecond: never later than it is.
pub(super) fn moment(utc: Utc) -> String {
    let millis = utc.0.div_euclid(NANOS_PER_MILLISECOND);
    let timestamp = Timestamp::from_millisecond(millis)
        .expect("64-bit nanoseconds lie well within the years that a timestamp covers");
    format!("{timestamp:.3}")
}

/// Reads a moment written as RFC 3339; `None` if it is none, or outside the years 1970 to 2261. No
/// record is older, and the margin to the ends of 64 bits keeps all arithmetic on it safe.
pub(super) fn parse_moment(text: &str) -> Option<Utc> {
    let timestamp: Timestamp = text.parse().ok()?;
    i64::try_from(timestamp.as_nanosecond()).ok().filter(|nanos| *nanos >= 0).map(Utc)
}

/// Nanoseconds in one day of 86 400 s.
pub(super) const NANOS_PER_DAY: i64 = 86_400 * NANOS_PER_SECOND;

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_no_number_is_null() {
        assert_eq!(decibels(f64::NAN), None);
        assert_eq!(decibels(f64::NEG_INFINITY), None);
        assert_eq!(seconds(f64::INFINITY), None);
        assert_eq!(decibels(-92.126), Some(-92.13));
        assert!(decibels(-0.001).is_some_and(|zero| zero == 0.0 && zero.is_sign_positive()));
    }

    #[test]
    fn rounded_parts_add_up_and_nothing_stays_nothing() {
        // Four times 0.4 ms: rounded one by one they would vanish.
        let parts = parts_as_seconds([400_000, 400_000, 0, 800_000]);
        assert_eq!(parts, [0.0, 0.001, 0.0, 0.001]);
        assert_eq!(parts_as_seconds([0, 0, 0, NANOS_PER_SECOND]), [0.0, 0.0, 0.0, 1.0]);
    }

    #[test]
    fn moments_are_cut_to_the_millisecond_and_read_back() {
        assert_eq!(moment(Utc(0)), "1970-01-01T00:00:00.000Z");
        assert_eq!(moment(Utc(1_999_999)), "1970-01-01T00:00:00.001Z");
        assert_eq!(moment(Utc(-1)), "1969-12-31T23:59:59.999Z");
        assert_eq!(parse_moment("1970-01-01T01:00:00+01:00"), Some(Utc(0)));
        assert_eq!(parse_moment("9999-01-01T00:00:00Z"), None);
        assert_eq!(parse_moment("1969-12-31T23:59:59Z"), None);
        assert_eq!(parse_moment("yesterday"), None);
        // The extremes of 64 bits are still moments.
        assert_eq!(&moment(Utc(i64::MIN))[..4], "1677");
        assert_eq!(&moment(Utc(i64::MAX))[..4], "2262");
    }
}
