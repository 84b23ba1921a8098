//! From the file as written to checked values: everything that can be told without the source.
//!
//! Nothing behind this point sees the file. What depends on the block that the source delivers is
//! checked when the plan is made.

use std::net::SocketAddr;
use std::path::Path;
use std::time::Duration;

use super::channels;
use super::error::{ConfigError, Place};
use super::file;
use super::quantity::{Quantity, format_duration, format_share, parse_level};
use super::{AskedBand, AskedReceiver, AskedSpectrum, Configuration, Node, SCENES, Source};
use crate::detection::plan::{Band, FloorEstimator, FloorSettings, FloorTrend, LevelRef, Policy};
use crate::detection::window::Window;

const DEFAULT_DATA_DIRECTORY: &str = "data";
const DEFAULT_WINDOW: Window = Window::BlackmanHarris;
const DEFAULT_OVERLAP_HANN: f64 = 0.5;
const DEFAULT_OVERLAP_BLACKMAN_HARRIS: f64 = 0.75;
const DEFAULT_REJECTION: f64 = 0.01;
const DEFAULT_TREND: FloorTrend = FloorTrend::Slope;
const DEFAULT_PFA: f64 = 1e-4;
const DEFAULT_PD: f64 = 0.9;
const DEFAULT_DWELL_S: f64 = 0.2;
const DEFAULT_SLICE_S: f64 = 0.01;
const DEFAULT_CHECK_TIME_S: f64 = 2.0;
const DEFAULT_HOLD_OFF_S: f64 = 60.0;
/// The default age is this, or [`DEFAULT_MAX_AGE_DWELLS`] where they take longer.
const DEFAULT_MAX_AGE_S: f64 = 1.0;
const DEFAULT_MAX_AGE_DWELLS: f64 = 3.0;
const DEFAULT_COMMIT_INTERVAL_S: f64 = 10.0;
const DEFAULT_LISTEN: &str = "127.0.0.1:8470";

/// Checks a whole file. `name` is the file as errors name it, `base` the folder it stands in.
pub(super) fn configuration(
    file: &file::File,
    name: &str,
    base: &Path,
) -> Result<Configuration, ConfigError> {
    let at = |key: &str| Place::new(name, key);
    Ok(Configuration {
        file: name.to_owned(),
        text: String::new(),
        sha256: String::new(),
        node: node(&file.node, &at("node"))?,
        data_directory: base.join(data_directory(&file.node, &at("node"))?),
        source: source(&file.receiver, &at("receiver"), base)?,
        receiver: receiver(&file.receiver, &at("receiver"))?,
        spectrum: spectrum(&file.spectrum, &at("spectrum"))?,
        floor: floor(&file.floor, &at("floor"))?,
        bands: bands(&file.bands, &at("bands"))?,
        commit_interval: commit_interval(&file.history, &at("history"))?,
        listen: listen(&file.api, &at("api"))?,
    })
}

fn node(node: &file::Node, at: &Place) -> Result<Node, ConfigError> {
    let place = at.at("site");
    let site = place.required(node.site.as_ref(), "1 to 80 characters")?;
    let plain = site.trim() == site && !site.chars().any(char::is_control);
    if !plain || !(1..=80).contains(&site.chars().count()) {
        let wanted = "1 to 80 characters, no space at either end, one line";
        return Err(place.error(format_args!("{site:?} is not a site's name ({wanted})")));
    }
    Ok(Node { site: site.clone(), name: at.at("name").name(&node.name, 40)? })
}

fn data_directory<'a>(node: &'a file::Node, at: &Place) -> Result<&'a str, ConfigError> {
    match node.data_directory.as_deref() {
        Some("") => Err(at.at("data_directory").error("\"\" is not a folder")),
        given => Ok(given.unwrap_or(DEFAULT_DATA_DIRECTORY)),
    }
}

fn source(
    receiver: &file::Receiver,
    at: &Place,
    base: &Path,
) -> Result<Option<Source>, ConfigError> {
    let word = receiver.source.as_deref();
    at.at("source").word(&receiver.source, &[("scene", ()), ("recording", ())])?;
    for (key, given) in [("scene", &receiver.scene), ("recording", &receiver.recording)] {
        if let (Some(given), true) = (given, word != Some(key)) {
            let message = format!("{given:?} goes with receiver.source = {key:?} only");
            return Err(at.at(key).error(message));
        }
    }
    match word {
        Some("scene") => {
            let scenes: Vec<(&str, &str)> = SCENES.iter().map(|name| (*name, *name)).collect();
            let place = at.at("scene");
            let name = place.word(&receiver.scene, &scenes)?;
            let name = place.required(name, "the name of a scene, such as \"lower_saltmarsh\"")?;
            Ok(Some(Source::Scene { name: name.to_owned() }))
        }
        Some(_) => {
            let place = at.at("recording");
            let wanted = "the path of a .sigmf-meta file";
            let path = place.required(receiver.recording.as_ref(), wanted)?;
            if !path.ends_with(".sigmf-meta") {
                return Err(place.error(format_args!("{path:?} is not {wanted}")));
            }
            Ok(Some(Source::Recording { path: base.join(path) }))
        }
        None => Ok(None),
    }
}

fn receiver(receiver: &file::Receiver, at: &Place) -> Result<AskedReceiver, ConfigError> {
    use Quantity::{Frequency, SampleRate};
    let width_hz = 1.0..=1e9;
    Ok(AskedReceiver {
        centre_hz: at.at("centre").quantity(Frequency, &receiver.centre, 0.0..=300e9)?,
        sample_rate_hz: {
            at.at("sample_rate").quantity(SampleRate, &receiver.sample_rate, 100.0..=1e9)?
        },
        usable_bandwidth_hz: {
            let place = at.at("usable_bandwidth");
            place.quantity(Frequency, &receiver.usable_bandwidth, width_hz)?
        },
        dc_guard_hz: {
            let given = at.at("dc_guard").quantity(Frequency, &receiver.dc_guard, 0.0..=1e9)?;
            given.unwrap_or(0.0)
        },
    })
}

fn spectrum(spectrum: &file::Spectrum, at: &Place) -> Result<AskedSpectrum, ConfigError> {
    let words = [Window::Hann, Window::BlackmanHarris].map(|window| (window.as_str(), window));
    let window = at.at("window").word(&spectrum.window, &words)?.unwrap_or(DEFAULT_WINDOW);
    let overlap = at.at("overlap").quantity(Quantity::Share, &spectrum.overlap, 0.0..=0.9)?;
    let place = at.at("transform_length");
    let length = place.whole_number(&spectrum.transform_length, 16..=1 << 20)?;
    if let Some(length) = length.filter(|length| !length.is_power_of_two()) {
        let above = length.next_power_of_two();
        return Err(place.error(format_args!(
            "{length} is not a power of two (the next are {} and {above})",
            above / 2
        )));
    }
    Ok(AskedSpectrum {
        window,
        overlap: overlap.unwrap_or(match window {
            Window::Hann => DEFAULT_OVERLAP_HANN,
            Window::BlackmanHarris => DEFAULT_OVERLAP_BLACKMAN_HARRIS,
        }),
        transform_length: length,
    })
}

fn floor(floor: &file::Floor, at: &Place) -> Result<FloorSettings, ConfigError> {
    let excision = at.at("estimator");
    let excision = excision
        .word(&floor.estimator, &[("excision", true), ("cell_averaging", false)])?
        .unwrap_or(true);
    let place = at.at("rejection");
    let rejection = place.quantity(Quantity::Share, &floor.rejection, 1e-6..=0.5)?;
    let estimator = match (excision, rejection) {
        (true, given) => FloorEstimator::Excision { rejection: given.unwrap_or(DEFAULT_REJECTION) },
        (false, None) => FloorEstimator::CellAveraging,
        (false, Some(_)) => {
            return Err(place.error("goes with floor.estimator = \"excision\" only"));
        }
    };
    let trends =
        [("flat", FloorTrend::Flat), ("slope", FloorTrend::Slope), ("curve", FloorTrend::Curve)];
    let trend = at.at("trend").word(&floor.trend, &trends)?.unwrap_or(DEFAULT_TREND);
    Ok(FloorSettings { estimator, trend })
}

fn bands(bands: &[file::Band], at: &Place) -> Result<Vec<AskedBand>, ConfigError> {
    if bands.is_empty() {
        return Err(at.error("missing: give at least one [[bands]] table"));
    }
    let mut names = channels::Names::default();
    let checked = bands.iter().enumerate().map(|(index, raw)| {
        let at = at.index(index);
        let band = band(raw, &at)?;
        names.claim(&band.id, &at.at("id"))?;
        let (raster, channels) = channels::of_band(raw, index, &at, &mut names)?;
        Ok(AskedBand { band, raster, channels })
    });
    checked.collect()
}

fn band(band: &file::Band, at: &Place) -> Result<Band, ConfigError> {
    let share = |key: &str, value, range, default: f64| {
        at.at(key).quantity(Quantity::Share, value, range).map(|given| given.unwrap_or(default))
    };
    let duration = |key: &str, value, range, default: f64| {
        at.at(key).quantity(Quantity::Duration, value, range).map(|given| given.unwrap_or(default))
    };
    let dwell_s = duration("dwell", &band.dwell, 1e-3..=60.0, DEFAULT_DWELL_S)?;
    let slice_default_s = DEFAULT_SLICE_S.min(dwell_s);
    let max_age_default_s = DEFAULT_MAX_AGE_S.max(DEFAULT_MAX_AGE_DWELLS * dwell_s);
    let max_age_s = duration("max_age", &band.max_age, dwell_s..=3600.0, max_age_default_s)?;
    if let (Some(given), true) = (&band.max_age, max_age_s <= dwell_s) {
        return Err(at.at("max_age").error(format_args!(
            "{given} is out of range (longer than the dwell, {}, up to 1 h)",
            format_duration(dwell_s)
        )));
    }
    let pfa = share("pfa", &band.pfa, 1e-9..=0.5, DEFAULT_PFA)?;
    let pd = share("pd", &band.pd, 0.5..=0.9999, DEFAULT_PD)?;
    if pd <= pfa {
        let (pd, pfa) = (format_share(pd), format_share(pfa));
        let message =
            format!("{pd} is not above pfa ({pfa}): noise alone would be detected so often");
        return Err(at.at("pd").error(message));
    }
    Ok(Band {
        id: at.at("id").name(&band.id, 40)?,
        pfa,
        pd,
        protection_level_db: protection_level_db(band, &at.at("protection_level"))?,
        dwell_s,
        slice_s: duration("slice", &band.slice, 100e-6..=dwell_s, slice_default_s)?,
        policy: Policy {
            check_time_ns: nanos({
                duration("check_time", &band.check_time, 0.0..=3600.0, DEFAULT_CHECK_TIME_S)?
            }),
            hold_off_ns: nanos({
                duration("hold_off", &band.hold_off, 0.0..=86_400.0, DEFAULT_HOLD_OFF_S)?
            }),
            max_age_ns: nanos(max_age_s),
        },
    })
}

/// Levels refer to full scale until there is a calibration to refer them to the antenna: a level in
/// dBm is refused rather than taken for something it is not.
fn protection_level_db(band: &file::Band, place: &Place) -> Result<f64, ConfigError> {
    let given = band.protection_level.as_ref();
    if let Some(Ok((_, LevelRef::Dbm))) = given.map(|value| parse_level(&value.text)) {
        return Err(place.error(format_args!(
            "{} needs a calibration, which this version cannot use: give the level in dBFS",
            place.required(given, "")?
        )));
    }
    place.required_quantity(Quantity::Level, &band.protection_level, -200.0..=0.0)
}

/// Seconds, at most a day, to the nearest nanosecond.
fn nanos(duration_s: f64) -> i64 {
    (duration_s * 1e9).round() as i64
}

fn commit_interval(history: &file::History, at: &Place) -> Result<Duration, ConfigError> {
    let place = at.at("commit_interval");
    let given = place.quantity(Quantity::Duration, &history.commit_interval, 1.0..=600.0)?;
    Ok(Duration::from_secs_f64(given.unwrap_or(DEFAULT_COMMIT_INTERVAL_S)))
}

fn listen(api: &file::Api, at: &Place) -> Result<SocketAddr, ConfigError> {
    let place = at.at("listen");
    let text = api.listen.as_deref().unwrap_or(DEFAULT_LISTEN);
    let address: SocketAddr = text.parse().map_err(|_| {
        place.error(format_args!(
            "{text:?} is not an address and port such as {DEFAULT_LISTEN:?} or \"[::1]:8470\""
        ))
    })?;
    if !address.ip().is_loopback() {
        return Err(place.error(format_args!(
            "{text:?} would answer beyond this machine, which needs tokens, and this version has \
             none: give a loopback address such as {DEFAULT_LISTEN:?}"
        )));
    }
    Ok(address)
}
