//! Reads a SigMF metadata file into plain checked values; it must never read the samples.
//!
//! Keys and their meaning: SigMF specification, the `core` namespace. Keys that nothing here needs
//! are ignored. `core:sha512` is among them: to verify it would mean reading 100 GB before the
//! first sample is delivered.

use std::fs;
use std::path::Path;

use serde_json::Value;

use super::fields::Fields;
use super::format::SampleFormat;
use crate::capture::CaptureError;
use crate::detection::time::Utc;

/// The largest metadata file that is read [bytes]: some hundred thousand annotations.
const META_BYTES_MAX: u64 = 256 << 20;

/// The end of the dates that are believed, 2100-01-01; they start with 1970. As long as recordings
/// are shorter than [`super::segments::DURATION_MAX_S`], no sum of times then overflows.
const UTC_END: Utc = Utc(4_102_444_800_000_000_000);

/// What somebody noted about a part of a recording (SigMF `annotations`).
#[derive(Clone, Debug, PartialEq)]
pub struct Annotation {
    /// Its first sample, counted from the first in the file; negative when it began before that.
    pub sample_start: i64,
    /// Its length (samples); `None` when it is not stated.
    pub sample_count: Option<u64>,
    /// Lower edge (Hz), as stated.
    pub freq_lower_edge_hz: Option<f64>,
    /// Upper edge (Hz), as stated.
    pub freq_upper_edge_hz: Option<f64>,
    /// Short label.
    pub label: Option<String>,
    /// Comment.
    pub comment: Option<String>,
}

/// One entry of SigMF `captures`: where it starts and what it states.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Segment {
    /// Its first sample, counted from the first in the file.
    pub(super) sample_start: u64,
    /// Its first sample, counted in the stream that the recorder saw.
    pub(super) global_index: Option<u64>,
    /// Centre frequency (Hz).
    pub(super) frequency_hz: Option<f64>,
    /// When its first sample was taken.
    pub(super) datetime: Option<Utc>,
}

/// Everything that the reader needs of a metadata file.
#[derive(Debug)]
pub(super) struct Metadata {
    pub(super) format: SampleFormat,
    pub(super) sample_rate_hz: f64,
    /// File name of the samples when it is not the usual one.
    pub(super) dataset: Option<String>,
    /// At least one, by rising `sample_start`.
    pub(super) segments: Vec<Segment>,
    pub(super) annotations: Vec<Annotation>,
}

impl Metadata {
    /// Reads and checks a metadata file.
    pub(super) fn load(path: &Path) -> Result<Metadata, CaptureError> {
        let file_error = |source| CaptureError::File { path: path.to_owned(), source };
        let unusable = |problem| CaptureError::Unusable { path: path.to_owned(), problem };
        let about = fs::metadata(path).map_err(file_error)?;
        if !about.is_file() {
            return Err(unusable("is not a regular file".to_owned()));
        }
        if about.len() > META_BYTES_MAX {
            let problem = format!("has {} bytes; at most {META_BYTES_MAX} are read", about.len());
            return Err(unusable(problem));
        }
        let bytes = fs::read(path).map_err(file_error)?;
        let json: Value = serde_json::from_slice(&bytes)
            .map_err(|source| CaptureError::Json { path: path.to_owned(), source })?;
        Metadata::from_json(path, &json)
    }

    fn from_json(path: &Path, json: &Value) -> Result<Metadata, CaptureError> {
        let whole_file = Fields::new(path, String::new(), json)?;
        let global = whole_file.object("global")?;
        let (format, sample_rate_hz) = sample_format(&global)?;
        refuse_unsupported(&global)?;
        let offset = global.count("core:offset")?.unwrap_or(0);
        let captures = whole_file
            .objects("captures")?
            .ok_or_else(|| whole_file.missing("captures", "an array"))?;
        let annotations = whole_file.objects("annotations")?.unwrap_or_default();
        Ok(Metadata {
            format,
            sample_rate_hz,
            dataset: dataset(&global)?,
            segments: segments(&captures, offset)?,
            annotations: annotations
                .iter()
                .map(|fields| annotation(fields, offset))
                .collect::<Result<_, _>>()?,
        })
    }
}

fn sample_format(global: &Fields<'_>) -> Result<(SampleFormat, f64), CaptureError> {
    const DATATYPE: &str = "core:datatype";
    const RATE: &str = "core:sample_rate";
    let word = global.text(DATATYPE)?.ok_or_else(|| global.missing(DATATYPE, "a string"))?;
    let format = SampleFormat::parse(word).map_err(|problem| global.fault(DATATYPE, problem))?;
    let needed = "a number above 0 [Hz]";
    let rate_hz = global.number(RATE)?.ok_or_else(|| global.missing(RATE, needed))?;
    if rate_hz <= 0.0 {
        return Err(global.fault(RATE, format!("is {rate_hz:?}; it must be {needed}")));
    }
    Ok((format, rate_hz))
}

/// Refuses layouts in which the samples are not one plain consecutive series.
fn refuse_unsupported(global: &Fields<'_>) -> Result<(), CaptureError> {
    let channels = global.count("core:num_channels")?.unwrap_or(1);
    if channels != 1 {
        let problem = format!("is {channels}; only recordings of 1 channel are read");
        return Err(global.fault("core:num_channels", problem));
    }
    match global.count("core:trailing_bytes")?.unwrap_or(0) {
        0 => Ok(()),
        count => Err(bytes_between(global, "core:trailing_bytes", count)),
    }
}

fn bytes_between(fields: &Fields<'_>, key: &str, count: u64) -> CaptureError {
    let problem = format!("is {count}; only files of nothing but samples (0) are read");
    fields.fault(key, problem)
}

fn dataset(global: &Fields<'_>) -> Result<Option<String>, CaptureError> {
    const DATASET: &str = "core:dataset";
    let Some(name) = global.text(DATASET)? else { return Ok(None) };
    // A recording that somebody sent must not make the program open files elsewhere.
    if name.is_empty() || name == "." || name == ".." || name.contains(['/', '\\', '\0']) {
        let problem = format!("is {name:.40?}; it must be the name of a file in the same folder");
        return Err(global.fault(DATASET, problem));
    }
    Ok(Some(name.to_owned()))
}

fn segments(captures: &[Fields<'_>], offset: u64) -> Result<Vec<Segment>, CaptureError> {
    const START: &str = "core:sample_start";
    let mut segments: Vec<Segment> = Vec::with_capacity(captures.len().max(1));
    for fields in captures {
        let stated =
            fields.count(START)?.ok_or_else(|| fields.missing(START, "a whole number from 0"))?;
        let sample_start = stated.checked_sub(offset).ok_or_else(|| {
            fields.fault(START, format!("is {stated}, before global.core:offset ({offset})"))
        })?;
        if let Some(previous) = segments.last()
            && sample_start <= previous.sample_start
        {
            let least = previous.sample_start + offset;
            let problem = format!("is {stated}; it must be above the previous segment's, {least}");
            return Err(fields.fault(START, problem));
        }
        if let Some(count @ 1..) = fields.count("core:header_bytes")? {
            return Err(bytes_between(fields, "core:header_bytes", count));
        }
        segments.push(Segment {
            sample_start,
            global_index: fields.count("core:global_index")?,
            frequency_hz: fields.number("core:frequency")?,
            datetime: datetime(fields)?,
        });
    }
    if segments.is_empty() {
        // The standard allows an empty array: one series of which nothing more is stated.
        segments.push(Segment {
            sample_start: 0,
            global_index: None,
            frequency_hz: None,
            datetime: None,
        });
    }
    Ok(segments)
}

fn datetime(fields: &Fields<'_>) -> Result<Option<Utc>, CaptureError> {
    const DATETIME: &str = "core:datetime";
    let Some(text) = fields.text(DATETIME)? else { return Ok(None) };
    let utc = parse_utc(text).ok_or_else(|| {
        let problem =
            format!("is {text:.40?}; it must be a UTC date and time like 2026-03-01T12:00:00.25Z");
        fields.fault(DATETIME, problem)
    })?;
    check_date(utc).map_err(|problem| fields.fault(DATETIME, problem))?;
    Ok(Some(utc))
}

/// Refuses dates that are surely wrong; returns what is wrong.
pub(super) fn check_date(utc: Utc) -> Result<(), String> {
    if (Utc(0)..UTC_END).contains(&utc) {
        return Ok(());
    }
    Err(format!("is {}; it must lie from 1970-01-01 to 2100-01-01", utc_text(utc)))
}

/// A date and time of ISO 8601 with its offset from UTC.
fn parse_utc(text: &str) -> Option<Utc> {
    // The standard sets no limit to a second's digits; what is below a nanosecond is dropped.
    let (whole, fraction) = text.split_once('.').unwrap_or((text, ""));
    let digits = fraction.bytes().take_while(u8::is_ascii_digit).count();
    let timestamp: jiff::Timestamp = if digits > 9 {
        format!("{whole}.{}{}", &fraction[..9], &fraction[digits..]).parse().ok()?
    } else {
        text.parse().ok()?
    };
    i64::try_from(timestamp.as_nanosecond()).ok().map(Utc)
}

/// A moment in the notation of ISO 8601, for messages.
pub(super) fn utc_text(utc: Utc) -> String {
    match jiff::Timestamp::from_nanosecond(i128::from(utc.0)) {
        Ok(timestamp) => timestamp.to_string(),
        Err(_) => format!("{} ns", utc.0),
    }
}

fn annotation(fields: &Fields<'_>, offset: u64) -> Result<Annotation, CaptureError> {
    const START: &str = "core:sample_start";
    let stated = fields.whole(START)?.ok_or_else(|| fields.missing(START, "a whole number"))?;
    Ok(Annotation {
        sample_start: stated.saturating_sub_unsigned(offset),
        sample_count: fields.count("core:sample_count")?,
        freq_lower_edge_hz: fields.number("core:freq_lower_edge")?,
        freq_upper_edge_hz: fields.number("core:freq_upper_edge")?,
        label: fields.text("core:label")?.map(str::to_owned),
        comment: fields.text("core:comment")?.map(str::to_owned),
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn dates_are_read_to_the_nanosecond_and_need_an_offset_from_utc() {
        // 2026-03-01T12:00:00Z is 20513 days (56 years, 14 leap days, 59 days) and 12 h past 1970.
        let noon_ns = (20_513 * 86_400 + 43_200) * 1_000_000_000_i64;
        let nanos = |text: &str| parse_utc(text).map(|utc| utc.0 - noon_ns);
        assert_eq!(nanos("2026-03-01T12:00:00Z"), Some(0));
        assert_eq!(nanos("2026-03-01T13:00:00+01:00"), Some(0));
        assert_eq!(nanos("2026-03-01T12:00:00.25Z"), Some(250_000_000));
        assert_eq!(nanos("2026-03-01T12:00:00.123456789Z"), Some(123_456_789));
        assert_eq!(nanos("2026-03-01T12:00:00.123456789987Z"), Some(123_456_789));
        for text in ["2026-03-01T12:00:00", "2026-03-01", "yesterday", "", "2026-02-30T00:00:00Z"] {
            assert_eq!(nanos(text), None, "{text:?}");
        }
    }
}
