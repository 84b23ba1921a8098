//! The configuration: a TOML file becomes checked plain values, or one line that says what is
//! wrong.
//!
//! Two steps. [`Configuration::parse`] checks what the file alone can tell; [`Configuration::plan`]
//! puts in what the source really delivers and checks everything that depends on that block.
//! Nothing behind this room sees the file or a default: a value in a [`Plan`] is a decided one.
//! Reading the file is the only thing that this room does to the world.

mod channels;
mod check;
mod error;
mod file;
mod plan;
pub mod quantity;
mod warnings;

use std::fmt::Write;
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::time::Duration;

use sha2::{Digest, Sha256};

pub use self::error::ConfigError;
pub use self::warnings::idle_offer_share;
use crate::detection::plan::{Band, Channel, FloorSettings, Plan};
use crate::detection::window::Window;

/// The names that a file may give as `receiver.scene`.
pub const SCENES: [&str; 1] = ["lower_saltmarsh"];

/// Which node this is.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Node {
    /// The site, as people call it; 1 to 80 characters.
    pub site: String,
    /// The node's name: letters, digits, `-`, `_` and `.`, 1 to 40 characters.
    pub name: String,
}

/// Where samples come from.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Source {
    /// An invented scene.
    Scene {
        /// One of [`SCENES`].
        name: String,
    },
    /// A SigMF recording.
    Recording {
        /// Its `.sigmf-meta` file.
        path: PathBuf,
    },
}

/// A checked configuration. Two of them are equal when everything in them is, the text included.
#[derive(Clone, Debug, PartialEq)]
pub struct Configuration {
    /// The file, as it was named; errors begin with it.
    pub file: String,
    /// The file's text, to be kept with the history that was made under it.
    pub text: String,
    /// SHA-256 of the text, 64 lower-case hexadecimal digits.
    pub sha256: String,
    /// Which node this is.
    pub node: Node,
    /// Where history is written.
    pub data_directory: PathBuf,
    /// Where samples come from; `None` when the file does not say, which a replay does not need.
    pub source: Option<Source>,
    /// How often history is committed (1 s to 10 min).
    pub commit_interval: Duration,
    /// Where answers are served; a loopback address.
    pub listen: SocketAddr,
    receiver: AskedReceiver,
    spectrum: AskedSpectrum,
    floor: FloorSettings,
    bands: Vec<AskedBand>,
}

/// What the file asks of the receiver; `None` is for the source or a default to fill in.
#[derive(Clone, Debug, PartialEq)]
struct AskedReceiver {
    centre_hz: Option<f64>,
    sample_rate_hz: Option<f64>,
    usable_bandwidth_hz: Option<f64>,
    dc_guard_hz: f64,
}

/// What the file asks of the spectrum; without a length the channels decide.
#[derive(Clone, Debug, PartialEq)]
struct AskedSpectrum {
    window: Window,
    overlap: f64,
    transform_length: Option<usize>,
}

/// A band with its channels, which may not fit the block yet.
#[derive(Clone, Debug, PartialEq)]
struct AskedBand {
    band: Band,
    raster: Option<AskedRaster>,
    channels: Vec<AskedChannel>,
}

/// A raster, and the key that gave it.
#[derive(Clone, Debug, PartialEq)]
struct AskedRaster {
    key: String,
    first_centre_hz: f64,
    spacing_hz: f64,
    count: usize,
    bandwidth_hz: f64,
}

/// A channel, and the key that gave it.
#[derive(Clone, Debug, PartialEq)]
struct AskedChannel {
    key: String,
    channel: Channel,
}

impl Configuration {
    /// Reads and checks a file. Relative paths in it are taken from the folder that it stands in.
    ///
    /// # Errors
    /// [`ConfigError`] when the file cannot be read, or as [`Configuration::parse`].
    pub fn load(path: &Path) -> Result<Configuration, ConfigError> {
        let name = path.display().to_string();
        let text = std::fs::read_to_string(path)
            .map_err(|source| ConfigError::Read { file: name.clone(), source })?;
        let base = path.parent().unwrap_or(Path::new(""));
        Configuration::parse(&text, &name, base)
    }

    /// The centre frequency that the file gives (Hz); `None` leaves it to the source.
    pub fn centre_hz(&self) -> Option<f64> {
        self.receiver.centre_hz
    }

    /// Checks a file's text. `name` is the file as errors name it; relative paths in the text are
    /// taken from `base_dir`.
    ///
    /// # Errors
    /// [`ConfigError`] when the text is no TOML, names a key that does not exist, lacks one that is
    /// required, or holds a value that is out of its range.
    pub fn parse(text: &str, name: &str, base_dir: &Path) -> Result<Configuration, ConfigError> {
        let file: file::File =
            toml::from_str(text).map_err(|error| ConfigError::from_toml(name, text, &error))?;
        let checked = check::configuration(&file, name, base_dir)?;
        Ok(Configuration { text: text.to_owned(), sha256: sha256_hex(text), ..checked })
    }

    /// The plan for the block that the source really delivers: its centre and its sample rate (Hz),
    /// where it states them. What it does not state is taken from the file.
    ///
    /// # Errors
    /// [`ConfigError`] when neither states one of them or both do and differ, when a channel, a
    /// raster or the DC guard does not fit the block, when channels overlap, and when transforms
    /// are too coarse for a channel or too long for a dwell or a slice.
    pub fn plan(
        &self,
        centre_hz: Option<f64>,
        sample_rate_hz: Option<f64>,
    ) -> Result<Plan, ConfigError> {
        plan::plan(self, centre_hz, sample_rate_hz)
    }

    /// What is legal but most likely not meant: one line each, saying why and what would mend it.
    /// `plan` is the one made by this configuration.
    pub fn warnings(&self, plan: &Plan) -> Vec<String> {
        warnings::warnings(plan)
    }
}

/// SHA-256 of a text in lower-case hexadecimal digits.
fn sha256_hex(text: &str) -> String {
    Sha256::digest(text.as_bytes()).iter().fold(String::new(), |mut hex, byte| {
        write!(hex, "{byte:02x}").expect("a String takes all that is written to it");
        hex
    })
}
