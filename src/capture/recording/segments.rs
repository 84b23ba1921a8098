//! Turns the segments that a recording states into stretches of consecutive samples, each with its
//! start. It must never let time run backwards, and never close over a gap that is stated.

use std::path::Path;

use super::metadata::{Segment, utc_text};
use crate::capture::CaptureError;
use crate::detection::time::{Utc, samples_to_nanos};

/// The longest recording, gaps included, that is believed [s]: 31 years. Beyond, a rate, an index
/// or a date is surely wrong, and sums of nanoseconds would come near their limit.
pub(super) const DURATION_MAX_S: f64 = 1e9;

/// The least deviation of a stated date that counts as one [ns]: dates are mostly written to the
/// microsecond.
const DEVIATION_MIN_NS: i64 = 1000;

/// Consecutive samples without a gap, `sample_start..sample_end` in the file.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) struct Stretch {
    pub(super) sample_start: u64,
    pub(super) sample_end: u64,
    /// When the first of them was taken.
    pub(super) start: Utc,
}

/// The stretches of a recording of `samples_total` samples whose first segment starts at `start`.
///
/// A segment that states neither date nor index, or whose date is the expected one to within half a
/// sample or a microsecond, goes on without a gap and keeps the count of the one before it.
///
/// # Errors
/// A segment beyond the data, earlier than the end of the one before it, or absurdly late.
pub(super) fn stretches(
    path: &Path,
    segments: &[Segment],
    sample_rate_hz: f64,
    samples_total: u64,
    start: Utc,
) -> Result<Vec<Stretch>, CaptureError> {
    let fault = |key: String, problem| CaptureError::Value { path: path.to_owned(), key, problem };
    if samples_total as f64 / sample_rate_hz > DURATION_MAX_S {
        let key = "global.core:sample_rate".to_owned();
        let problem = format!(
            "is {sample_rate_hz:?}; {samples_total} samples would last over {DURATION_MAX_S} s"
        );
        return Err(fault(key, problem));
    }
    let mut stretches: Vec<Stretch> = Vec::new();
    let mut counted: Option<Counted> = None;
    for (index, segment) in segments.iter().enumerate() {
        let sample_start = segment.sample_start;
        if sample_start >= samples_total {
            let problem = format!(
                "is sample {sample_start} of the file; the data hold only {samples_total} samples"
            );
            return Err(fault(format!("captures[{index}].core:sample_start"), problem));
        }
        let Some(current) = stretches.last_mut() else {
            stretches.push(Stretch { sample_start, sample_end: samples_total, start });
            counted = Counted::stated(segment);
            continue;
        };
        let next = Joint { current, counted, segment, sample_rate_hz, start }
            .follow()
            .map_err(|(key, problem)| fault(format!("captures[{index}].{key}"), problem))?;
        if let Some(next_start) = next {
            current.sample_end = sample_start;
            let next = Stretch { sample_start, sample_end: samples_total, start: next_start };
            stretches.push(next);
            // After a gap an earlier index tells nothing about the samples that follow.
            counted = Counted::stated(segment);
        } else {
            counted = Counted::stated(segment).or(counted);
        }
    }
    Ok(stretches)
}

/// A sample whose index in the recorder's stream is known.
#[derive(Clone, Copy)]
struct Counted {
    sample: u64,
    global_index: u64,
}

impl Counted {
    fn stated(segment: &Segment) -> Option<Counted> {
        segment
            .global_index
            .map(|global_index| Counted { sample: segment.sample_start, global_index })
    }
}

/// The place where a segment follows the stretch that runs so far.
struct Joint<'a> {
    current: &'a Stretch,
    counted: Option<Counted>,
    segment: &'a Segment,
    sample_rate_hz: f64,
    start: Utc,
}

impl Joint<'_> {
    /// When the segment starts if there is a gap before it, else `None`; or key and problem.
    fn follow(&self) -> Result<Option<Utc>, (&'static str, String)> {
        let lost = self.samples_lost()?;
        let samples = self.segment.sample_start - self.current.sample_start;
        if lost as f64 / self.sample_rate_hz > DURATION_MAX_S {
            return Err(("core:global_index", format!("leaves out {lost} samples: over 31 years")));
        }
        let expected = self
            .current
            .start
            .plus_nanos(samples_to_nanos(samples, self.sample_rate_hz))
            .plus_nanos(samples_to_nanos(lost, self.sample_rate_hz));
        let mut next = (lost > 0).then_some(expected);
        if let Some(stated) = self.segment.datetime {
            let deviation_ns = stated.nanos_since(expected);
            let half_sample_ns = 0.5e9 / self.sample_rate_hz;
            let deviates =
                deviation_ns.abs() > DEVIATION_MIN_NS && deviation_ns.abs() as f64 > half_sample_ns;
            if deviates && deviation_ns < 0 {
                let (stated, expected) = (utc_text(stated), utc_text(expected));
                let problem =
                    format!("is {stated}, but the samples before it last until {expected}");
                return Err(("core:datetime", problem));
            }
            if deviates {
                next = Some(stated);
            }
        }
        match next {
            Some(next) if next.nanos_since(self.start) as f64 > DURATION_MAX_S * 1e9 => {
                let problem = format!("would start at {}: over 31 years on", utc_text(next));
                Err(("core:sample_start", problem))
            }
            next => Ok(next),
        }
    }

    /// How many samples the recorder saw, but did not write, before the segment.
    fn samples_lost(&self) -> Result<u64, (&'static str, String)> {
        let (Some(counted), Some(stated)) = (self.counted, self.segment.global_index) else {
            return Ok(0);
        };
        let expected = counted.global_index + (self.segment.sample_start - counted.sample);
        stated.checked_sub(expected).ok_or_else(|| {
            let problem = format!("is {stated}, but the samples before it reach up to {expected}");
            ("core:global_index", problem)
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Whether a second segment after 1000 samples at 10 MS/s, dated `deviation_ns` off, has a gap.
    fn gap(deviation_ns: i64) -> Result<bool, CaptureError> {
        let segment = |sample_start: u64, datetime| Segment {
            sample_start,
            global_index: None,
            frequency_hz: None,
            datetime: Some(Utc(datetime)),
        };
        let segments = [segment(0, 5_000), segment(1000, 105_000 + deviation_ns)];
        let stretches = stretches(Path::new("x"), &segments, 10e6, 2000, Utc(5_000))?;
        let starts: Vec<i64> = stretches.iter().map(|stretch| stretch.start.0).collect();
        match starts[..] {
            [5_000] => Ok(false),
            [5_000, second] if second == 105_000 + deviation_ns => Ok(true),
            _ => panic!("{starts:?}"),
        }
    }

    #[test]
    fn half_a_sample_counts_only_where_it_is_longer_than_a_microsecond() {
        // Half a sample is 50 ns here, less than the digits of most dates can tell.
        assert!(!gap(0).expect("follows on"));
        assert!(!gap(1000).expect("follows on"));
        assert!(gap(1001).expect("a gap"));
        assert!(!gap(-1000).expect("follows on"));
        assert!(gap(-1001).is_err());
    }
}
