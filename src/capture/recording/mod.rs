//! Reads a SigMF recording (an open standard) as a source of sample blocks.
//!
//! It streams: a recording of 100 GB needs no more memory than a small one. It must never guess
//! what the recording does not state, and never close over a gap that it does state.

use std::ffi::OsString;
use std::fs::{self, File};
use std::io::{self, BufReader, Read, Seek, SeekFrom};
use std::path::{Path, PathBuf};

mod fields;
mod format;
mod metadata;
mod segments;

pub use metadata::Annotation;

use super::{CaptureError, Source};
use crate::detection::block::SampleBlock;
use crate::detection::time::{Stamp, Utc, samples_to_nanos};
use format::SampleFormat;
use metadata::{Metadata, Segment, check_date, utc_text};
use segments::{Stretch, stretches};

/// How much of the data file is held at a time (bytes); a whole number of samples in every format.
const CHUNK_BYTES: usize = 64 * 1024;

/// What the user says of a recording because the recording does not.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Told {
    /// Centre frequency (Hz), finite. Contradicts a recording that states another.
    pub centre_hz: Option<f64>,
    /// Centre frequency (Hz) to take where neither the recording states nor the user tells one.
    pub fallback_centre_hz: Option<f64>,
    /// When the first sample was taken.
    pub start: Option<Utc>,
}

/// A SigMF recording of one channel at one centre frequency.
///
/// Samples before the first entry of `captures` belong to no segment and are not read.
/// `core:sha512` is not verified on reading: that would mean reading everything twice.
#[derive(Debug)]
pub struct Recording {
    meta_path: PathBuf,
    data_path: PathBuf,
    data: BufReader<File>,
    bytes: Vec<u8>,
    format: SampleFormat,
    centre_hz: f64,
    sample_rate_hz: f64,
    /// At least one, by rising sample.
    stretches: Vec<Stretch>,
    stretch_index: usize,
    next_sample: u64,
    dated: bool,
    annotations: Vec<Annotation>,
}

impl Recording {
    /// Opens the recording at `path`: its `.sigmf-meta`, its `.sigmf-data`, or its name without
    /// either. Only the metadata are read yet.
    ///
    /// # Errors
    /// A file that is missing, not of the standard or not of the kinds that are read; statements
    /// that contradict each other or what was told; no centre frequency stated or told.
    pub fn open(path: &Path, told: Told) -> Result<Recording, CaptureError> {
        let (meta_path, stem) = meta_path(path)?;
        let metadata = Metadata::load(&meta_path)?;
        let data_path = match &metadata.dataset {
            Some(name) => meta_path.with_file_name(name),
            None => with_suffix(&stem, ".sigmf-data"),
        };
        let centre_hz = centre_hz(&meta_path, &metadata.segments, told)?;
        let start = start(&meta_path, &metadata.segments, told.start)?;
        let (file, samples_total) = open_data(&data_path, metadata.format)?;
        let stretches = stretches(
            &meta_path,
            &metadata.segments,
            metadata.sample_rate_hz,
            samples_total,
            start.unwrap_or(Utc(0)),
        )?;
        let first_sample = stretches[0].sample_start;
        let mut data = BufReader::with_capacity(CHUNK_BYTES, file);
        data.seek(SeekFrom::Start(first_sample * metadata.format.bytes_per_sample() as u64))
            .map_err(|source| CaptureError::File { path: data_path.clone(), source })?;
        Ok(Recording {
            meta_path,
            data_path,
            data,
            bytes: vec![0; CHUNK_BYTES],
            format: metadata.format,
            centre_hz,
            sample_rate_hz: metadata.sample_rate_hz,
            stretches,
            stretch_index: 0,
            next_sample: first_sample,
            dated: start.is_some(),
            annotations: metadata.annotations,
        })
    }

    /// Whether the time of the first sample was stated or told. If not, times count from
    /// 1970-01-01T00:00:00Z, and only their differences mean anything.
    pub fn dated(&self) -> bool {
        self.dated
    }

    /// When the first sample was taken.
    pub fn start(&self) -> Utc {
        self.stretches[0].start
    }

    /// What the recording's metadata note about parts of it, in the order of the file.
    pub fn annotations(&self) -> &[Annotation] {
        &self.annotations
    }

    /// Appends `count` samples of the data file to the block.
    fn read_samples(&mut self, block: &mut SampleBlock, count: usize) -> io::Result<()> {
        let mut bytes_left = count * self.format.bytes_per_sample();
        while bytes_left > 0 {
            let chunk = &mut self.bytes[..bytes_left.min(CHUNK_BYTES)];
            self.data.read_exact(chunk)?;
            block.clipped += self.format.decode(chunk, &mut block.samples);
            bytes_left -= chunk.len();
        }
        Ok(())
    }
}

impl Source for Recording {
    fn centre_hz(&self) -> f64 {
        self.centre_hz
    }

    fn sample_rate_hz(&self) -> f64 {
        self.sample_rate_hz
    }

    fn samples_total(&self) -> Option<u64> {
        let last = &self.stretches[self.stretches.len() - 1];
        Some(last.sample_end - self.stretches[0].sample_start)
    }

    fn describe(&self) -> String {
        let name = self.meta_path.file_name().unwrap_or(self.meta_path.as_os_str());
        format!("recording {}", name.display())
    }

    fn read(&mut self, block: &mut SampleBlock, samples_max: usize) -> Result<bool, CaptureError> {
        assert!(samples_max > 0, "a block must have room for a sample");
        block.samples.clear();
        block.clipped = 0;
        if self.next_sample == self.stretches[self.stretch_index].sample_end {
            if self.stretch_index + 1 == self.stretches.len() {
                return Ok(false);
            }
            self.stretch_index += 1;
        }
        let stretch = &self.stretches[self.stretch_index];
        let count = (stretch.sample_end - self.next_sample).min(samples_max as u64);
        let since = samples_to_nanos(self.next_sample - stretch.sample_start, self.sample_rate_hz);
        let utc = stretch.start.plus_nanos(since);
        block.start = Stamp { utc, monotonic_ns: utc.nanos_since(self.start()) };
        block.gap_before = self.next_sample == stretch.sample_start;
        self.read_samples(block, count as usize).map_err(|source| {
            let path = self.data_path.clone();
            match source.kind() {
                io::ErrorKind::UnexpectedEof => CaptureError::Unusable {
                    path,
                    problem: format!(
                        "ends within the block at byte {}: it was cut while it was being read",
                        self.next_sample * self.format.bytes_per_sample() as u64
                    ),
                },
                _ => CaptureError::File { path, source },
            }
        })?;
        self.next_sample += count;
        Ok(true)
    }
}

/// The metadata file that `path` means, and the recording's path without any suffix.
fn meta_path(path: &Path) -> Result<(PathBuf, PathBuf), CaptureError> {
    let unusable = |problem: &str| {
        Err(CaptureError::Unusable { path: path.to_owned(), problem: problem.to_owned() })
    };
    let stem = match path.extension().and_then(|extension| extension.to_str()) {
        Some("sigmf-meta" | "sigmf-data") => path.with_extension(""),
        Some("sigmf") => return unusable("is a SigMF archive; unpack it (tar) and open its files"),
        Some("sigmf-collection") => return unusable("is a collection; open one of its recordings"),
        _ => path.to_owned(),
    };
    let meta_path = with_suffix(&stem, ".sigmf-meta");
    if path == stem && !meta_path.exists() {
        return unusable("no such recording; there is no file of this name with .sigmf-meta added");
    }
    Ok((meta_path, stem))
}

fn with_suffix(stem: &Path, suffix: &str) -> PathBuf {
    let mut name = OsString::from(stem);
    name.push(suffix);
    PathBuf::from(name)
}

/// Opens the data file and counts its samples, of which there is at least one.
fn open_data(path: &Path, format: SampleFormat) -> Result<(File, u64), CaptureError> {
    let file_error = |source| CaptureError::File { path: path.to_owned(), source };
    let unusable = |problem| Err(CaptureError::Unusable { path: path.to_owned(), problem });
    let about = fs::metadata(path).map_err(file_error)?;
    let sample_bytes = format.bytes_per_sample() as u64;
    if !about.is_file() {
        return unusable("is not a regular file".to_owned());
    }
    if about.len() == 0 {
        return unusable("is empty; it must hold at least one sample".to_owned());
    }
    if about.len() % sample_bytes != 0 {
        let problem =
            format!("has {} bytes, not a whole number of {sample_bytes}-byte samples", about.len());
        return unusable(problem);
    }
    Ok((File::open(path).map_err(file_error)?, about.len() / sample_bytes))
}

/// The one centre frequency of the recording, stated or told.
fn centre_hz(path: &Path, segments: &[Segment], told: Told) -> Result<f64, CaptureError> {
    let fault = |index: usize, problem| {
        let key = format!("captures[{index}].core:frequency");
        Err(CaptureError::Value { path: path.to_owned(), key, problem })
    };
    let centre_hz = match (segments[0].frequency_hz, told.centre_hz) {
        (None, None) => {
            let problem = "states no core:frequency; tell it with --centre".to_owned();
            let missing = CaptureError::Unusable { path: path.to_owned(), problem };
            told.fallback_centre_hz.ok_or(missing)?
        }
        (Some(stated), Some(told)) if !same_frequency(stated, told) => {
            return fault(0, format!("states {stated:?} Hz, but --centre tells {told:?} Hz"));
        }
        (Some(stated), _) => stated,
        (None, Some(told)) => told,
    };
    for (index, segment) in segments.iter().enumerate().skip(1) {
        if let Some(stated) = segment.frequency_hz
            && !same_frequency(stated, centre_hz)
        {
            let problem =
                format!("is {stated:?} Hz, before it {centre_hz:?} Hz; only one centre is read");
            return fault(index, problem);
        }
    }
    Ok(centre_hz)
}

/// Equal but for rounding: the double 1.001 times 1e6 is 1000999.9999999999.
fn same_frequency(a_hz: f64, b_hz: f64) -> bool {
    (a_hz - b_hz).abs() <= 1e-9 * a_hz.abs()
}

/// When the recording starts, stated or told; `None` when nobody says.
fn start(
    path: &Path,
    segments: &[Segment],
    told: Option<Utc>,
) -> Result<Option<Utc>, CaptureError> {
    let fault = |index: usize, problem| {
        let key = format!("captures[{index}].core:datetime");
        Err(CaptureError::Value { path: path.to_owned(), key, problem })
    };
    match (segments[0].datetime, told) {
        (Some(stated), Some(told)) if stated != told => {
            let (stated, told) = (utc_text(stated), utc_text(told));
            fault(0, format!("states {stated}, but --start tells {told}"))
        }
        (Some(stated), _) => Ok(Some(stated)),
        (None, Some(told)) => match check_date(told) {
            Ok(()) => Ok(Some(told)),
            Err(problem) => Err(CaptureError::Unusable {
                path: path.to_owned(),
                problem: format!("the told --start {problem}"),
            }),
        },
        (None, None) => match segments.iter().position(|segment| segment.datetime.is_some()) {
            Some(index) => {
                let problem = "states a date, captures[0] none; tell the start with --start";
                fault(index, problem.to_owned())
            }
            None => Ok(None),
        },
    }
}
