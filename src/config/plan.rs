//! From checked values and the block that the source delivers to the detector's plan.
//!
//! Everything that depends on the block is checked here: a plan that comes out can be worked on as
//! it is.

use super::error::{ConfigError, Place};
use super::quantity::{Quantity, format_duration, format_frequency, format_sample_rate};
use super::{AskedBand, AskedChannel, AskedRaster, Configuration};
use crate::detection::plan::{Channel, LevelRef, Plan, Receiver, SpectrumSettings};

/// Edges closer than this count as touching [Hz]: well above the rounding of a double at 300 GHz
/// (6e-5 Hz) and far below any bin.
const EDGE_TOLERANCE_HZ: f64 = 1e-3;
/// The file and the source may differ by this much [Hz]: a centre or a rate is often rounded to
/// whole hertz on its way into one of them.
const AGREEMENT_HZ: f64 = 1.0;
/// Default transform: this many bins in the narrowest channel, so that its energy is mostly its
/// own.
const DEFAULT_BINS_PER_CHANNEL: f64 = 12.0;
const DEFAULT_TRANSFORM_LENGTH_MIN: usize = 256;
const TRANSFORM_LENGTH_MAX: usize = 1 << 20;

/// Makes the plan; see [`Configuration::plan`].
pub(super) fn plan(
    asked: &Configuration,
    centre_hz: Option<f64>,
    sample_rate_hz: Option<f64>,
) -> Result<Plan, ConfigError> {
    let at = |key: &str| Place::new(&asked.file, key);
    let receiver = receiver(asked, centre_hz, sample_rate_hz)?;
    for band in &asked.bands {
        if let Some(raster) = &band.raster {
            raster_fits(raster, &receiver, &at(&raster.key))?;
        }
        for channel in &band.channels {
            channel_fits(&channel.channel, &receiver, &at(&channel.key))?;
        }
    }
    let mut channels: Vec<&AskedChannel> =
        asked.bands.iter().flat_map(|band| &band.channels).collect();
    channels.sort_by(|a, b| a.channel.edges_hz().0.total_cmp(&b.channel.edges_hz().0));
    for pair in channels.windows(2) {
        channels_are_apart(pair[0], pair[1], &at(&pair[1].key))?;
    }
    let spectrum = SpectrumSettings {
        window: asked.spectrum.window,
        overlap: asked.spectrum.overlap,
        transform_length: transform_length(asked, &receiver, &channels)?,
    };
    for channel in &channels {
        channel_has_its_bins(&channel.channel, &receiver, &spectrum, &at(&channel.key))?;
        channel_keeps_a_bin(&channel.channel, &receiver, &spectrum, &at(&channel.key))?;
    }
    for (index, band) in asked.bands.iter().enumerate() {
        transforms_fit(band, &receiver, &spectrum, &at("bands").index(index))?;
    }
    let mut channels: Vec<Channel> =
        channels.into_iter().map(|channel| channel.channel.clone()).collect();
    // A stable sort: within a band the channels stay in the order of frequency.
    channels.sort_by_key(|channel| channel.band_index);
    Ok(Plan {
        receiver,
        spectrum,
        floor: asked.floor.clone(),
        level_ref: LevelRef::Dbfs,
        bands: asked.bands.iter().map(|band| band.band.clone()).collect(),
        channels,
    })
}

/// Samples from the start of one transform to the start of the next, at least 1.
fn hop_samples(spectrum: &SpectrumSettings) -> f64 {
    (spectrum.transform_length as f64 * (1.0 - spectrum.overlap)).round().max(1.0)
}

/// Width of a bin (Hz).
pub(super) fn bin_width_hz(receiver: &Receiver, spectrum: &SpectrumSettings) -> f64 {
    receiver.sample_rate_hz / spectrum.transform_length as f64
}

fn receiver(
    asked: &Configuration,
    centre_hz: Option<f64>,
    sample_rate_hz: Option<f64>,
) -> Result<Receiver, ConfigError> {
    let at = |key: &str| Place::new(&asked.file, "receiver").at(key);
    let given = &asked.receiver;
    let place = at("centre");
    let centre_hz = agreed(given.centre_hz, centre_hz, Quantity::Frequency, &place)?;
    let place = at("sample_rate");
    let sample_rate_hz =
        agreed(given.sample_rate_hz, sample_rate_hz, Quantity::SampleRate, &place)?;
    if !(100.0..=1e9).contains(&sample_rate_hz) {
        return Err(place.error(format_args!(
            "the source's {sample_rate_hz} S/s is out of range (100 S/s to 1000 MS/s)"
        )));
    }
    let usable_bandwidth_hz = given.usable_bandwidth_hz.unwrap_or(sample_rate_hz * 9.0 / 10.0);
    if usable_bandwidth_hz > sample_rate_hz {
        return Err(at("usable_bandwidth").error(format_args!(
            "{} is more than the sample rate ({})",
            format_frequency(usable_bandwidth_hz),
            format_sample_rate(sample_rate_hz)
        )));
    }
    if given.dc_guard_hz >= usable_bandwidth_hz {
        return Err(at("dc_guard").error(format_args!(
            "{} leaves nothing of the usable bandwidth ({})",
            format_frequency(given.dc_guard_hz),
            format_frequency(usable_bandwidth_hz)
        )));
    }
    let dc_guard_hz = given.dc_guard_hz;
    Ok(Receiver { centre_hz, sample_rate_hz, usable_bandwidth_hz, dc_guard_hz })
}

/// The value that the source states, or else the file's; the two must agree.
fn agreed(
    asked: Option<f64>,
    stated: Option<f64>,
    quantity: Quantity,
    place: &Place,
) -> Result<f64, ConfigError> {
    match (asked, stated) {
        (Some(asked), Some(stated)) if (asked - stated).abs() > AGREEMENT_HZ => {
            Err(place.error(format_args!(
                "{} does not agree with the source, which states {}",
                quantity.format(asked),
                quantity.format(stated)
            )))
        }
        (asked, stated) => stated
            .or(asked)
            .ok_or_else(|| place.error("missing: the source does not state it, so the file must")),
    }
}

/// Lower and upper end of the usable bandwidth (Hz).
fn usable_hz(receiver: &Receiver) -> (f64, f64) {
    let half_hz = receiver.usable_bandwidth_hz / 2.0;
    (receiver.centre_hz - half_hz, receiver.centre_hz + half_hz)
}

/// A range of frequencies as errors state it.
fn range_text((low_hz, high_hz): (f64, f64)) -> String {
    format!("{} to {}", format_frequency(low_hz), format_frequency(high_hz))
}

fn raster_fits(raster: &AskedRaster, receiver: &Receiver, at: &Place) -> Result<(), ConfigError> {
    let (low_hz, high_hz) = usable_hz(receiver);
    let usable = range_text((low_hz, high_hz));
    let half_hz = raster.bandwidth_hz / 2.0;
    let first_hz = raster.first_centre_hz;
    if first_hz - half_hz < low_hz - EDGE_TOLERANCE_HZ {
        return Err(at.at("first_centre").error(format_args!(
            "{} puts the first channel below the usable bandwidth ({usable}): \
             the first centre can be {} at the lowest",
            format_frequency(first_hz),
            format_frequency(low_hz + half_hz)
        )));
    }
    let room_hz = high_hz - half_hz - first_hz + EDGE_TOLERANCE_HZ;
    let fitting = (room_hz / raster.spacing_hz + 1.0).floor().max(0.0);
    if fitting < raster.count as f64 {
        return Err(at.at("count").error(format_args!(
            "{} channels do not fit: from {} on, the usable bandwidth ({usable}) holds {fitting}",
            raster.count,
            format_frequency(first_hz)
        )));
    }
    Ok(())
}

fn channel_fits(channel: &Channel, receiver: &Receiver, at: &Place) -> Result<(), ConfigError> {
    let (low_hz, high_hz) = usable_hz(receiver);
    let (lower_hz, upper_hz) = channel.edges_hz();
    if lower_hz < low_hz - EDGE_TOLERANCE_HZ || upper_hz > high_hz + EDGE_TOLERANCE_HZ {
        return Err(at.error(format_args!(
            "channel {} ({}) is not wholly inside the usable bandwidth ({})",
            channel.id,
            range_text((lower_hz, upper_hz)),
            range_text((low_hz, high_hz))
        )));
    }
    Ok(())
}

/// Two neighbours by lower edge. Checking neighbours is enough: the first pair that overlaps, in
/// the order of lower edges, is always a pair of neighbours.
fn channels_are_apart(
    below: &AskedChannel,
    above: &AskedChannel,
    at: &Place,
) -> Result<(), ConfigError> {
    let (below, above) = (&below.channel, &above.channel);
    if below.edges_hz().1 > above.edges_hz().0 + EDGE_TOLERANCE_HZ {
        return Err(at.error(format_args!(
            "channel {} ({}) overlaps channel {} ({})",
            above.id,
            range_text(above.edges_hz()),
            below.id,
            range_text(below.edges_hz())
        )));
    }
    Ok(())
}

fn transform_length(
    asked: &Configuration,
    receiver: &Receiver,
    channels: &[&AskedChannel],
) -> Result<usize, ConfigError> {
    let place = Place::new(&asked.file, "spectrum").at("transform_length");
    let narrowest = channels
        .iter()
        .map(|channel| &channel.channel)
        .min_by(|a, b| a.bandwidth_hz.total_cmp(&b.bandwidth_hz))
        .expect("a band without channels was refused");
    let length_for = |bins: f64| {
        let length = (bins * receiver.sample_rate_hz / narrowest.bandwidth_hz).ceil();
        // Far beyond any length allowed, a double still fits.
        (length as usize).next_power_of_two()
    };
    let width = format_frequency(narrowest.bandwidth_hz);
    match asked.spectrum.transform_length {
        Some(length) if (length as f64) * narrowest.bandwidth_hz < receiver.sample_rate_hz => {
            Err(place.error(format_args!(
                "{length} is too coarse: bins of {} are wider than channel {} ({width}), which \
                 needs {} or more",
                format_frequency(receiver.sample_rate_hz / length as f64),
                narrowest.id,
                length_for(1.0)
            )))
        }
        Some(length) => Ok(length),
        None => {
            let wanted = length_for(DEFAULT_BINS_PER_CHANNEL).max(DEFAULT_TRANSFORM_LENGTH_MIN);
            if wanted > TRANSFORM_LENGTH_MAX {
                return Err(place.error(format_args!(
                    "channel {} ({width}) is too narrow: 12 bins in it would take {wanted} \
                     samples, more than {TRANSFORM_LENGTH_MAX}",
                    narrowest.id
                )));
            }
            Ok(wanted)
        }
    }
}

/// All bins that a channel reaches into must exist. Bins are centred on multiples of their width:
/// the highest ends half a bin below half the sample rate; half of the lowest lies beyond it.
fn channel_has_its_bins(
    channel: &Channel,
    receiver: &Receiver,
    spectrum: &SpectrumSettings,
    at: &Place,
) -> Result<(), ConfigError> {
    let (lower_hz, upper_hz) = channel.edges_hz();
    let bin_hz = bin_width_hz(receiver, spectrum);
    let length = spectrum.transform_length;
    // Counted as the detector's layout counts them, so that rounding cannot part the two.
    let bin = |hz: f64| (hz - receiver.centre_hz) / bin_hz + (length / 2) as f64 + 0.5;
    if bin(lower_hz).floor() < 0.0 || bin(upper_hz).ceil() > length as f64 {
        let low_hz = receiver.centre_hz - 0.5 * (receiver.sample_rate_hz + bin_hz);
        let high_hz = receiver.centre_hz + 0.5 * (receiver.sample_rate_hz - bin_hz);
        return Err(at.error(format_args!(
            "channel {} ({}) reaches beyond the bins of the spectrum ({}), the last of which ends \
             half a bin below half the sample rate",
            channel.id,
            range_text((lower_hz, upper_hz)),
            range_text((low_hz, high_hz))
        )));
    }
    Ok(())
}

/// What the DC guard leaves of a channel must hold at least one bin in one piece.
fn channel_keeps_a_bin(
    channel: &Channel,
    receiver: &Receiver,
    spectrum: &SpectrumSettings,
    at: &Place,
) -> Result<(), ConfigError> {
    let (lower_hz, upper_hz) = channel.edges_hz();
    let guard_hz = receiver.dc_guard_hz / 2.0;
    let below_hz = upper_hz.min(receiver.centre_hz - guard_hz) - lower_hz;
    let above_hz = upper_hz - lower_hz.max(receiver.centre_hz + guard_hz);
    let bin_hz = bin_width_hz(receiver, spectrum);
    if receiver.dc_guard_hz > 0.0 && below_hz.max(above_hz) < bin_hz {
        return Err(at.error(format_args!(
            "the DC guard ({} around {}) leaves no bin of channel {} ({})",
            format_frequency(receiver.dc_guard_hz),
            format_frequency(receiver.centre_hz),
            channel.id,
            range_text((lower_hz, upper_hz))
        )));
    }
    Ok(())
}

/// A dwell must hold a transform, and a slice must be as long as the step between two.
fn transforms_fit(
    band: &AskedBand,
    receiver: &Receiver,
    spectrum: &SpectrumSettings,
    at: &Place,
) -> Result<(), ConfigError> {
    let too_short = |key: &str, given_s: f64, samples: f64, what: &str| {
        let needed_s = samples / receiver.sample_rate_hz;
        if given_s >= needed_s * (1.0 - 1e-9) {
            return Ok(());
        }
        Err(at.at(key).error(format_args!(
            "{} is shorter than {what} ({samples} samples, {}): make it longer, or \
             spectrum.transform_length (now {}) smaller",
            format_duration(given_s),
            format_duration(needed_s),
            spectrum.transform_length
        )))
    };
    let length = spectrum.transform_length as f64;
    too_short("dwell", band.band.dwell_s, length, "one transform")?;
    too_short("slice", band.band.slice_s, hop_samples(spectrum), "the step between transforms")
}
