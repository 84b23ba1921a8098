//! Quantities as people write them: a number and a unit, in both directions.
//!
//! Used for configuration values and for command-line values, so that both take the same words.
//! Never guesses a unit: a quantity without one is an error, except a share. Units are matched as
//! written, since `mHz` and `MHz` are not the same thing.

use std::fmt;
use std::ops::RangeInclusive;

use crate::detection::plan::LevelRef;

/// The kinds of quantity that can be written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Quantity {
    /// A frequency or a width of spectrum [Hz].
    Frequency,
    /// Complex samples a second [Hz]; written in S/s or in Hz.
    SampleRate,
    /// A power level [dB], with what it refers to.
    Level,
    /// A duration [s].
    Duration,
    /// A share or a probability (a plain number); written plain or in per cent.
    Share,
}

/// What a unit stands for in terms of the base unit.
#[derive(Clone, Copy)]
enum Scale {
    /// Ten to this power: applied to the decimal text, so that nothing is lost to rounding.
    Ten(i32),
    /// A factor that is no power of ten.
    Times(f64),
}

impl Quantity {
    /// What it is called, with its article.
    fn name(self) -> &'static str {
        match self {
            Quantity::Frequency => "a frequency",
            Quantity::SampleRate => "a sample rate",
            Quantity::Level => "a level",
            Quantity::Duration => "a duration",
            Quantity::Share => "a share",
        }
    }

    /// The units as an error states them.
    fn expected(self) -> &'static str {
        match self {
            Quantity::Frequency => "a number and Hz, kHz, MHz or GHz",
            Quantity::SampleRate => "a number and S/s, kS/s, MS/s, Hz, kHz, MHz or GHz",
            Quantity::Level => "a number and dBFS or dBm",
            Quantity::Duration => "a number and us, ms, s, min, h or d",
            Quantity::Share => "a number, or a number and %",
        }
    }

    /// The units that are accepted.
    fn units(self) -> &'static [(&'static str, Scale)] {
        use Scale::{Ten, Times};
        match self {
            Quantity::Frequency => {
                &[("Hz", Ten(0)), ("kHz", Ten(3)), ("MHz", Ten(6)), ("GHz", Ten(9))]
            }
            Quantity::SampleRate => &[
                ("S/s", Ten(0)),
                ("kS/s", Ten(3)),
                ("MS/s", Ten(6)),
                ("Hz", Ten(0)),
                ("kHz", Ten(3)),
                ("MHz", Ten(6)),
                ("GHz", Ten(9)),
            ],
            Quantity::Level => &[("dBFS", Ten(0)), ("dBm", Ten(0))],
            Quantity::Duration => &[
                ("us", Ten(-6)),
                ("ms", Ten(-3)),
                ("s", Ten(0)),
                ("min", Times(60.0)),
                ("h", Times(3600.0)),
                ("d", Times(86_400.0)),
            ],
            Quantity::Share => &[("", Ten(0)), ("%", Ten(-2))],
        }
    }

    /// Reads a quantity: a number, at most one space, a unit. In base units.
    ///
    /// # Errors
    /// [`QuantityError`] when the text is not such a quantity.
    pub fn parse(self, text: &str) -> Result<f64, QuantityError> {
        self.parse_with_unit(text).map(|(value, _)| value)
    }

    /// As [`Quantity::parse`], and the value must lie in `range` (both ends allowed).
    ///
    /// # Errors
    /// [`QuantityError`] when the text is not such a quantity or the value is out of range; either
    /// names the range.
    pub fn parse_in(self, text: &str, range: RangeInclusive<f64>) -> Result<f64, QuantityError> {
        let result = self.parse(text).and_then(|value| {
            if range.contains(&value) { Ok(value) } else { Err(self.error(text, true)) }
        });
        result.map_err(|error| QuantityError {
            range: Some((self.format(*range.start()), self.format(*range.end()))),
            ..error
        })
    }

    fn parse_with_unit(self, text: &str) -> Result<(f64, &'static str), QuantityError> {
        let (number, rest) = split_number(text).ok_or_else(|| self.error(text, false))?;
        let unit = rest.strip_prefix(' ').unwrap_or(rest);
        let (unit, scale) = self
            .units()
            .iter()
            .find(|(name, _)| *name == unit && (!unit.is_empty() || rest.is_empty()))
            .ok_or_else(|| self.error(text, false))?;
        let value = match scale {
            Scale::Ten(power) => shifted(number, *power),
            Scale::Times(factor) => shifted(number, 0).map(|value| value * factor),
        };
        let value = value.filter(|value| value.is_finite());
        value.map(|value| (value, *unit)).ok_or_else(|| self.error(text, false))
    }

    fn error(self, given: &str, well_formed: bool) -> QuantityError {
        QuantityError { quantity: self, given: format!("{given:?}"), well_formed, range: None }
    }

    /// Writes a value of this quantity, in the words that [`Quantity::parse`] reads.
    pub fn format(self, value: f64) -> String {
        match self {
            Quantity::Frequency => format_frequency(value),
            Quantity::SampleRate => format_sample_rate(value),
            Quantity::Level => format_level(value, LevelRef::Dbfs),
            Quantity::Duration => format_duration(value),
            Quantity::Share => format_share(value),
        }
    }
}

/// Text that is not the quantity it should be.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct QuantityError {
    /// What was expected.
    pub quantity: Quantity,
    /// What was given, as it is to be shown.
    pub given: String,
    /// Whether it was such a quantity, but out of range.
    pub well_formed: bool,
    /// Lowest and highest value allowed, where there is a range.
    pub range: Option<(String, String)>,
}

impl fmt::Display for QuantityError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let QuantityError { quantity, given, .. } = self;
        if self.well_formed {
            write!(f, "{given} is out of range")?;
        } else {
            write!(f, "{given} is not {}: expected {}", quantity.name(), quantity.expected())?;
        }
        match &self.range {
            Some((low, high)) => write!(f, " ({low} to {high})"),
            None => Ok(()),
        }
    }
}

impl std::error::Error for QuantityError {}

/// Reads a frequency such as `25kHz` or `448.1 MHz` [Hz].
///
/// # Errors
/// [`QuantityError`] when the text is no frequency.
pub fn parse_frequency(text: &str) -> Result<f64, QuantityError> {
    Quantity::Frequency.parse(text)
}

/// Reads a sample rate such as `2.4MS/s` or `2.4MHz` [Hz].
///
/// # Errors
/// [`QuantityError`] when the text is no sample rate.
pub fn parse_sample_rate(text: &str) -> Result<f64, QuantityError> {
    Quantity::SampleRate.parse(text)
}

/// Reads a level such as `-96dBm` or `-92dBFS`: its value [dB] and what it refers to.
///
/// # Errors
/// [`QuantityError`] when the text is no level.
pub fn parse_level(text: &str) -> Result<(f64, LevelRef), QuantityError> {
    let (value, unit) = Quantity::Level.parse_with_unit(text)?;
    let level_ref = if unit == LevelRef::Dbm.as_str() { LevelRef::Dbm } else { LevelRef::Dbfs };
    Ok((value, level_ref))
}

/// Reads a duration such as `200ms` or `5 min` [s].
///
/// # Errors
/// [`QuantityError`] when the text is no duration.
pub fn parse_duration(text: &str) -> Result<f64, QuantityError> {
    Quantity::Duration.parse(text)
}

/// Reads a share such as `75%`, `0.75` or `1e-4` (a plain number).
///
/// # Errors
/// [`QuantityError`] when the text is no share.
pub fn parse_share(text: &str) -> Result<f64, QuantityError> {
    Quantity::Share.parse(text)
}

/// Writes a frequency [Hz] to the nearest millihertz: `25 kHz`.
pub fn format_frequency(value_hz: f64) -> String {
    thousands(value_hz, &["Hz", "kHz", "MHz", "GHz"])
}

/// Writes a sample rate [Hz] to the nearest thousandth: `2.4 MS/s`.
pub fn format_sample_rate(value_hz: f64) -> String {
    thousands(value_hz, &["S/s", "kS/s", "MS/s"])
}

/// Writes a level [dB] to the nearest hundredth: `-92 dBFS`.
pub fn format_level(value_db: f64, level_ref: LevelRef) -> String {
    format!("{} {}", rounded(value_db, 2), level_ref.as_str())
}

/// Writes a duration [s] to the nearest nanosecond: `200 ms`, `90 s`, `5 min`.
///
/// Minutes and days are used from two on, and with hours for whole ones only.
pub fn format_duration(value_s: f64) -> String {
    let value_s = rounded(value_s, 9);
    let whole = |unit_s: f64| value_s % unit_s == 0.0 && value_s.abs() >= unit_s;
    match value_s.abs() {
        0.0 => "0 s".to_owned(),
        size if size >= 2.0 * 86_400.0 && whole(86_400.0) => format!("{} d", value_s / 86_400.0),
        _ if whole(3600.0) => format!("{} h", value_s / 3600.0),
        size if size >= 2.0 * 60.0 && whole(60.0) => format!("{} min", value_s / 60.0),
        size if size >= 1.0 => format!("{value_s} s"),
        size if size >= 1e-3 => format!("{} ms", scaled(value_s, 3)),
        _ => format!("{} us", scaled(value_s, 6)),
    }
}

/// Writes a share: per cent from 1 % on, a plain number in powers of ten below: `75 %`, `1e-4`.
pub fn format_share(value: f64) -> String {
    if value == 0.0 || value.abs() >= 0.01 {
        format!("{} %", scaled(value, 2))
    } else {
        format!("{value:e}")
    }
}

/// Splits text into the number at its start and what follows; `None` when there is no number.
fn split_number(text: &str) -> Option<(&str, &str)> {
    let bytes = text.as_bytes();
    let digits = |from: usize| bytes[from..].iter().take_while(|b| b.is_ascii_digit()).count();
    let mut end = usize::from(matches!(bytes.first(), Some(b'+' | b'-')));
    let whole = digits(end);
    if whole == 0 {
        return None;
    }
    end += whole;
    if bytes.get(end) == Some(&b'.') {
        let fraction = digits(end + 1);
        if fraction == 0 {
            return None;
        }
        end += 1 + fraction;
    }
    if matches!(bytes.get(end), Some(b'e' | b'E')) {
        let sign = usize::from(matches!(bytes.get(end + 1), Some(b'+' | b'-')));
        let exponent = digits((end + 1 + sign).min(bytes.len()));
        if exponent == 0 {
            return None;
        }
        end += 1 + sign + exponent;
    }
    Some(text.split_at(end))
}

/// The decimal number times ten to `power`, rounded to a double once: `448.1` and 6 give exactly the
/// double nearest to 448100000, which a multiplication would miss.
fn shifted(number: &str, power: i32) -> Option<f64> {
    let (digits, exponent) = match number.find(['e', 'E']) {
        Some(at) => (&number[..at], number[at + 1..].parse::<i32>().ok()?),
        None => (number, 0),
    };
    format!("{digits}e{}", exponent.checked_add(power)?).parse().ok()
}

/// `value` times ten to `power`, again by its decimal digits.
fn scaled(value: f64, power: i32) -> f64 {
    shifted(&format!("{value}"), power).unwrap_or(value)
}

/// `value` to the nearest multiple of ten to minus `decimals`; never a negative zero.
fn rounded(value: f64, decimals: i32) -> f64 {
    scaled((value * 10f64.powi(decimals)).round(), -decimals) + 0.0
}

/// Writes a value to the nearest thousandth, in the largest unit in which it is at least 1.
fn thousands(value: f64, units: &[&str]) -> String {
    let value = rounded(value, 3);
    let fits = |step: &usize| value.abs() >= 1000f64.powi(*step as i32);
    let step = (0..units.len()).rev().find(fits).unwrap_or(0);
    format!("{} {}", scaled(value, -3 * step as i32), units[step])
}

#[cfg(test)]
mod tests {
    use rand_core::{Rng, SeedableRng};
    use rand_xoshiro::Xoshiro256PlusPlus;

    use super::*;

    #[test]
    fn quantities_are_read_to_the_nearest_double() {
        for (text, value) in [
            ("25kHz", 25_000.0),
            ("448.1MHz", 448_100_000.0),
            ("448.1 MHz", 448_100_000.0),
            ("2.4GHz", 2_400_000_000.0),
            ("0Hz", 0.0),
            ("-1125Hz", -1125.0),
            ("+7.5e1kHz", 75_000.0),
        ] {
            assert_eq!(parse_frequency(text), Ok(value), "{text}");
        }
        assert_eq!(parse_sample_rate("2.4MS/s"), Ok(2_400_000.0));
        assert_eq!(parse_sample_rate("24kS/s"), Ok(24_000.0));
        assert_eq!(parse_sample_rate("3000 S/s"), Ok(3000.0));
        assert_eq!(parse_sample_rate("2.4MHz"), Ok(2_400_000.0));
        for (text, value) in
            [("250us", 250e-6), ("200ms", 0.2), ("1.28 s", 1.28), ("5min", 300.0), ("2h", 7200.0)]
        {
            assert_eq!(parse_duration(text), Ok(value), "{text}");
        }
        assert_eq!(parse_duration("1d"), Ok(86_400.0));
        assert_eq!(parse_level("-96dBm"), Ok((-96.0, LevelRef::Dbm)));
        assert_eq!(parse_level("-92.5 dBFS"), Ok((-92.5, LevelRef::Dbfs)));
        for (text, value) in [("75%", 0.75), ("75 %", 0.75), ("0.75", 0.75), ("1e-4", 1e-4)] {
            assert_eq!(parse_share(text), Ok(value), "{text}");
        }
    }

    #[test]
    fn what_is_not_a_quantity_is_refused() {
        for text in [
            "",
            " ",
            "25",
            "kHz",
            "25khz",
            "25KHz",
            "25  kHz",
            " 25kHz",
            "25kHz ",
            "25 kHz x",
            ".5Hz",
            "5.Hz",
            "1e",
            "1eHz",
            "1e+Hz",
            "nanHz",
            "infHz",
            "1e999Hz",
            "1e99999999999Hz",
            "--1Hz",
            "1,5Hz",
            "25\u{a0}kHz",
            "2.4MS/s",
            "25µHz",
        ] {
            assert!(parse_frequency(text).is_err(), "{text:?}");
        }
        for text in ["200", "200 m", "200dB", "1 day"] {
            assert!(parse_duration(text).is_err(), "{text:?}");
        }
        for text in ["-92", "-92dB", "-92dbm", "75 "] {
            assert!(parse_level(text).is_err(), "{text:?}");
        }
        for text in ["75 ", "75%%", "0.75 ", "75 per cent"] {
            assert!(parse_share(text).is_err(), "{text:?}");
        }
    }

    #[test]
    fn an_error_names_quantity_given_units_and_range() {
        assert_eq!(
            parse_frequency("25").unwrap_err().to_string(),
            "\"25\" is not a frequency: expected a number and Hz, kHz, MHz or GHz"
        );
        assert_eq!(
            Quantity::Duration.parse_in("5 parsecs", 1e-3..=60.0).unwrap_err().to_string(),
            "\"5 parsecs\" is not a duration: expected a number and us, ms, s, min, h or d (1 ms to 60 s)"
        );
        assert_eq!(
            Quantity::Duration.parse_in("5h", 1e-3..=60.0).unwrap_err().to_string(),
            "\"5h\" is out of range (1 ms to 60 s)"
        );
        assert_eq!(
            Quantity::Share.parse_in("95%", 0.0..=0.9).unwrap_err().to_string(),
            "\"95%\" is out of range (0 % to 90 %)"
        );
        assert_eq!(
            Quantity::Level.parse_in("3dBFS", -200.0..=0.0).unwrap_err().to_string(),
            "\"3dBFS\" is out of range (-200 dBFS to 0 dBFS)"
        );
    }

    #[test]
    fn values_are_written_in_the_largest_fitting_unit() {
        assert_eq!(format_frequency(25_000.0), "25 kHz");
        assert_eq!(format_frequency(448_100_000.0), "448.1 MHz");
        assert_eq!(format_frequency(999.9996), "1 kHz");
        assert_eq!(format_frequency(-1125.0), "-1.125 kHz");
        assert_eq!(format_frequency(-0.0), "0 Hz");
        assert_eq!(format_frequency(2.4e9), "2.4 GHz");
        assert_eq!(format_sample_rate(2.4e6), "2.4 MS/s");
        assert_eq!(format_sample_rate(2.4e9), "2400 MS/s");
        for (value, text) in [
            (0.0, "0 s"),
            (250e-6, "250 us"),
            (0.2, "200 ms"),
            (1.28, "1.28 s"),
            (60.0, "60 s"),
            (90.0, "90 s"),
            (300.0, "5 min"),
            (3600.0, "1 h"),
            (86_400.0, "24 h"),
            (259_200.0, "3 d"),
        ] {
            assert_eq!(format_duration(value), text);
        }
        assert_eq!(format_level(-92.0, LevelRef::Dbfs), "-92 dBFS");
        assert_eq!(format_level(-95.678, LevelRef::Dbm), "-95.68 dBm");
        assert_eq!(format_share(0.75), "75 %");
        assert_eq!(format_share(1e-4), "1e-4");
        assert_eq!(format_share(0.0), "0 %");
    }

    #[test]
    fn what_is_written_is_read_back_exactly() {
        let seed = 0x5eed_c0f1;
        println!("seed {seed:#x}");
        let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
        for _ in 0..20_000 {
            // Whole numbers of the written resolution, of every size: at most 15 digits, which is
            // what a double holds of any decimal number.
            let digits = 10u64.pow((random.next_u64() % 15) as u32 + 1);
            let count = (random.next_u64() % digits) as f64;
            let signed = if random.next_u64() % 2 == 0 { count } else { -count };
            let value_hz = scaled(signed, -3);
            let text = format_frequency(value_hz);
            assert_eq!(parse_frequency(&text), Ok(value_hz + 0.0), "{text}");
            let text = format_sample_rate(value_hz);
            assert_eq!(parse_sample_rate(&text), Ok(value_hz + 0.0), "{text}");
            let value_s = scaled(count, -9);
            let text = format_duration(value_s);
            assert_eq!(parse_duration(&text), Ok(value_s), "{text}");
            let whole_minutes_s = (random.next_u64() % 10_000_000) as f64 * 60.0;
            let text = format_duration(whole_minutes_s);
            assert_eq!(parse_duration(&text), Ok(whole_minutes_s), "{text}");
            let value_db = scaled((random.next_u64() % 40_000) as f64 - 20_000.0, -2);
            let text = format_level(value_db, LevelRef::Dbm);
            assert_eq!(parse_level(&text), Ok((value_db, LevelRef::Dbm)), "{text}");
            let share = scaled(count, -15);
            let text = format_share(share);
            assert_eq!(parse_share(&text), Ok(share), "{text}");
        }
    }

    #[test]
    fn any_frequency_is_written_to_the_nearest_millihertz() {
        let seed = 0x5eed_c0f2;
        println!("seed {seed:#x}");
        let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
        for _ in 0..20_000 {
            let value_hz = (random.next_u64() >> 11) as f64 / (1u64 << 53) as f64 * 1e9;
            let read = parse_frequency(&format_frequency(value_hz)).expect("as written");
            // Half a millihertz, and the spacing of doubles below 1e9 (1.2e-7).
            assert!((read - value_hz).abs() <= 0.5e-3 + 2.4e-7, "{value_hz}");
        }
    }
}
