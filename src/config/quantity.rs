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
    /// A frequency or a width of spectrum (Hz).
    Frequency,
    /// Complex samples a second (Hz); written in S/s or in Hz.
    SampleRate,
    /// A power level (dB), with what it refers to.
    Level,
    /// A ratio of powers (dB): a noise figure, an uncertainty.
    Ratio,
    /// A duration (s).
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
            Quantity::Ratio => "a ratio",
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
            Quantity::Ratio => "a number and dB",
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
            Quantity::Ratio => &[("dB", Ten(0))],
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
            Quantity::Ratio => format!("{} dB", rounded(value, 2)),
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

/// Reads a frequency such as `25kHz` or `448.1 MHz` (Hz).
///
/// # Errors
/// [`QuantityError`] when the text is no frequency.
pub fn parse_frequency(text: &str) -> Result<f64, QuantityError> {
    Quantity::Frequency.parse(text)
}

/// Reads a sample rate such as `2.4MS/s` or `2.4MHz` (Hz).
///
/// # Errors
/// [`QuantityError`] when the text is no sample rate.
pub fn parse_sample_rate(text: &str) -> Result<f64, QuantityError> {
    Quantity::SampleRate.parse(text)
}

/// Reads a level such as `-96dBm` or `-92dBFS`: its value (dB) and what it refers to.
///
/// # Errors
/// [`QuantityError`] when the text is no level.
pub fn parse_level(text: &str) -> Result<(f64, LevelRef), QuantityError> {
    let (value, unit) = Quantity::Level.parse_with_unit(text)?;
    let level_ref = if unit == LevelRef::Dbm.as_str() { LevelRef::Dbm } else { LevelRef::Dbfs };
    Ok((value, level_ref))
}

/// Reads a duration such as `200ms` or `5 min` (s).
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

/// Writes a frequency (Hz) to the nearest millihertz: `25 kHz`.
pub fn format_frequency(value_hz: f64) -> String {
    thousands(value_hz, &["Hz", "kHz", "MHz", "GHz"])
}

/// Writes a sample rate (Hz) to the nearest thousandth: `2.4 MS/s`.
pub fn format_sample_rate(value_hz: f64) -> String {
    thousands(value_hz, &["S/s", "kS/s", "MS/s"])
}

/// Writes a level (dB) to the nearest hundredth: `-92 dBFS`.
pub fn format_level(value_db: f64, level_ref: LevelRef) -> String {
    format!("{} {}", rounded(value_db, 2), level_ref.as_str())
}

/// Writes a duration (s) to the nearest nanosecond: `200 ms`, `90 s`, `5 min`.
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

/// The decimal number times ten to `power`, rounded to a double once: `448.1` and 6 give exactly
/// the double nearest to 448100000, which a multiplication would miss.
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
