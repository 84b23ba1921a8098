//! The configuration file as it is written: one struct per table, nothing checked but the keys.
//!
//! Everything is optional here, so that what is missing is reported by the same checks, in the same
//! words, as what is wrong. Nothing outside this room ever sees these types. Each key's comment
//! ends with its unit or form, its range and its default.

use std::fmt;

use serde::Deserialize;
use serde::de::{Deserializer, Error, Visitor};

/// The whole file.
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct File {
    /// Which node this is (table, one, required).
    pub(super) node: Node,
    /// Where samples come from (table, at most one, see its keys).
    pub(super) receiver: Receiver,
    /// How samples become a spectrum (table, at most one, see its keys).
    pub(super) spectrum: Spectrum,
    /// How the noise floor is estimated (table, at most one, see its keys).
    pub(super) floor: Floor,
    /// The bands to watch (list of tables, at least one, required).
    pub(super) bands: Vec<Band>,
    /// How history is kept (table, at most one, see its keys).
    pub(super) history: History,
    /// How answers are served (table, at most one, see its keys).
    pub(super) api: Api,
}

/// `[node]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Node {
    /// The site, as people call it (text, 1 to 80 characters, required).
    pub(super) site: Option<String>,
    /// The node, unique among the nodes of an operator (1 to 40 letters, digits, `-`, `_`
    /// and `.`, a letter or digit first, required).
    pub(super) name: Option<String>,
    /// Where history is written (folder, relative to the folder of this file, default `"data"`).
    pub(super) data_directory: Option<String>,
}

/// `[receiver]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Receiver {
    /// What kind of source gives the samples (word, `"scene"` or `"recording"`, required for a run;
    /// a replay names its recording itself).
    pub(super) source: Option<String>,
    /// Which invented scene, with source `"scene"` (word, `"lower_saltmarsh"`, required with it).
    pub(super) scene: Option<String>,
    /// Which SigMF recording, with source `"recording"` (path of its `.sigmf-meta` file, relative
    /// to the folder of this file, required with it).
    pub(super) recording: Option<String>,
    /// Radio frequency of the middle of the block; where the source states its own, the two must
    /// agree (frequency, 0 Hz to 300 GHz, default what the source states).
    pub(super) centre: Option<RawValue>,
    /// Complex samples a second; where the source states its own, the two must agree (sample rate,
    /// 100 S/s to 1000 MS/s, default what the source states).
    pub(super) sample_rate: Option<RawValue>,
    /// Width around the centre in which the front end is trusted (frequency, 1 Hz to the sample
    /// rate, default 90 % of the sample rate).
    pub(super) usable_bandwidth: Option<RawValue>,
    /// Width around the centre that is left out of every channel and every reference cell
    /// (frequency, 0 Hz to less than the usable bandwidth, default `"0Hz"`).
    pub(super) dc_guard: Option<RawValue>,
}

/// `[spectrum]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Spectrum {
    /// Taper applied to each transform (word, `"hann"` or `"blackman_harris"`, default
    /// `"blackman_harris"`).
    pub(super) window: Option<String>,
    /// Overlap of consecutive transforms (share, 0 % to 90 %, default 75 % for `"blackman_harris"`
    /// and 50 % for `"hann"`).
    pub(super) overlap: Option<RawValue>,
    /// Length of a transform (samples, a power of two from 16 to 1048576, default the smallest,
    /// from 256 on, that puts 12 bins in the narrowest channel).
    pub(super) transform_length: Option<RawValue>,
}

/// `[floor]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Floor {
    /// Which estimator (word, `"excision"` or `"cell_averaging"`, default `"excision"`).
    pub(super) estimator: Option<String>,
    /// Share of noise-only cells that an excision step drops, with estimator `"excision"` (share,
    /// 1e-6 to 50 %, default `0.01`).
    pub(super) rejection: Option<RawValue>,
    /// Shape that the floor may take across the block (word, `"flat"`, `"slope"` or `"curve"`,
    /// default `"slope"`).
    pub(super) trend: Option<String>,
}

/// `[(bands)]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Band {
    /// Name of the band (1 to 40 letters, digits, `-`, `_` and `.`, a letter or digit first,
    /// required).
    pub(super) id: Option<String>,
    /// False-alarm probability of one dwell's decision on one channel (share, 1e-9 to 50 %, default
    /// `1e-4`).
    pub(super) pfa: Option<RawValue>,
    /// Detection probability at the protection level (share, 50 % to 99.99 %, default `0.9`).
    pub(super) pd: Option<RawValue>,
    /// Power, in a channel's bandwidth, at which an incumbent must be detected (level in dBFS,
    /// -200 dBFS to 0 dBFS, required).
    pub(super) protection_level: Option<RawValue>,
    /// Length of a dwell, the unit of decision (duration, 1 ms to 60 s, default `"200ms"`).
    pub(super) dwell: Option<RawValue>,
    /// Length of a slice, the finest time step of a channel's energy (duration, 100 us to the
    /// dwell, default `"10ms"`, or the dwell where that is shorter).
    pub(super) slice: Option<RawValue>,
    /// Time for which a channel must have been idle before first use (duration, 0 s to 1 h, default
    /// `"2s"`).
    pub(super) check_time: Option<RawValue>,
    /// Time after a detection in which the channel is not offered (duration, 0 s to 24 h, default
    /// `"60s"`).
    pub(super) hold_off: Option<RawValue>,
    /// Age at which a verdict is too old for an offer (duration, longer than the dwell up to 1 h,
    /// default `"1s"`, or three dwells where that is longer).
    pub(super) max_age: Option<RawValue>,
    /// Channels on a regular raster (table, at most one, default none).
    pub(super) raster: Option<Raster>,
    /// Channels one by one (list of tables, any number, default none).
    pub(super) channels: Vec<Channel>,
}

/// `[bands.raster]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Raster {
    /// Centre of the lowest channel (frequency, -300 GHz to 300 GHz, required). Negative only where
    /// the centre of the block is not known and 0 Hz stands for it.
    pub(super) first_centre: Option<RawValue>,
    /// From one centre to the next (frequency, 1 Hz to 1 GHz, required).
    pub(super) spacing: Option<RawValue>,
    /// Number of channels (whole number, 1 to 10000, required).
    pub(super) count: Option<RawValue>,
    /// Width in which a channel's energy is measured (frequency, 1 Hz to the spacing, required).
    pub(super) bandwidth: Option<RawValue>,
    /// What the channels' names begin with (1 to 20 letters, digits, `-`, `_` and `.`, a letter
    /// or digit first, required).
    pub(super) id_prefix: Option<String>,
    /// Number of the lowest channel; numbers are padded with zeros to the width of the last (whole
    /// number, 0 to 1000000, default `1`).
    pub(super) first_number: Option<RawValue>,
    /// Names of the protected channels: watched, never on offer (list, names in this raster,
    /// default `[]`).
    pub(super) protected: Vec<String>,
}

/// `[(bands.channels)]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Channel {
    /// Name of the channel (1 to 40 letters, digits, `-`, `_` and `.`, a letter or digit first,
    /// required).
    pub(super) id: Option<String>,
    /// Centre of the channel (frequency, -300 GHz to 300 GHz, required). Negative as in a raster.
    pub(super) centre: Option<RawValue>,
    /// Width in which its energy is measured (frequency, 1 Hz to 1 GHz, required).
    pub(super) bandwidth: Option<RawValue>,
    /// Whether it is protected: watched, never on offer (yes or no, `true` or `false`, default
    /// `false`).
    pub(super) protected: Option<bool>,
}

/// `[history]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct History {
    /// How often history is committed; a power cut loses at most this much (duration, 1 s to 10
    /// min, default `"10s"`).
    pub(super) commit_interval: Option<RawValue>,
}

/// `[api]`
#[derive(Clone, Debug, Default, Deserialize)]
#[serde(deny_unknown_fields, default, expecting = "a table")]
pub(super) struct Api {
    /// Where answers are served (address and port, loopback only, default `"127.0.0.1:8470"`).
    pub(super) listen: Option<String>,
}

/// A number or text whose meaning is checked later, so that the error can name the key and the
/// range.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct RawValue {
    /// The text, or the number written out.
    pub(super) text: String,
    /// Whether it stood in quotes.
    quoted: bool,
}

impl fmt::Display for RawValue {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.quoted { write!(f, "{:?}", self.text) } else { f.write_str(&self.text) }
    }
}

impl<'de> Deserialize<'de> for RawValue {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<RawValue, D::Error> {
        deserializer.deserialize_any(RawVisitor)
    }
}

struct RawVisitor;

impl Visitor<'_> for RawVisitor {
    type Value = RawValue;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a number or text in quotes")
    }

    fn visit_str<E: Error>(self, text: &str) -> Result<RawValue, E> {
        Ok(RawValue { text: text.to_owned(), quoted: true })
    }

    fn visit_i64<E: Error>(self, number: i64) -> Result<RawValue, E> {
        Ok(RawValue { text: number.to_string(), quoted: false })
    }

    fn visit_f64<E: Error>(self, number: f64) -> Result<RawValue, E> {
        // `{:?}` writes very small and very large numbers with an exponent, `{}` never does.
        Ok(RawValue { text: format!("{number:?}"), quoted: false })
    }
}
