//! A band's channels, from a raster and one by one: names, centres, widths.
//!
//! Whether they fit the receiver's block is not asked here.

use std::collections::BTreeMap;

use super::error::{ConfigError, Place};
use super::file;
use super::quantity::{Quantity, format_frequency};
use super::{AskedChannel, AskedRaster};
use crate::detection::plan::Channel;

/// Highest frequency that a channel may have: the upper end of EHF in the ITU's table of bands.
const FREQUENCY_LIMIT_HZ: f64 = 300e9;

/// Names in use, each with the key that gave it: bands and channels share them, since an answer may
/// name either.
#[derive(Default)]
pub(super) struct Names(BTreeMap<String, String>);

impl Names {
    /// Takes a name, or says which key has it already.
    pub(super) fn claim(&mut self, name: &str, place: &Place) -> Result<(), ConfigError> {
        match self.0.insert(name.to_owned(), place.key().to_owned()) {
            None => Ok(()),
            Some(owner) => Err(place.error(format_args!("{name:?} is already used at {owner}"))),
        }
    }
}

/// All channels of one band; the raster too, so that what does not fit is told of it as a whole.
pub(super) fn of_band(
    band: &file::Band,
    band_index: usize,
    at: &Place,
    names: &mut Names,
) -> Result<(Option<AskedRaster>, Vec<AskedChannel>), ConfigError> {
    if band.raster.is_none() && band.channels.is_empty() {
        return Err(at.error("missing: give channels ([bands.raster] or [[bands.channels]])"));
    }
    let mut channels = Vec::new();
    let mut asked_raster = None;
    if let Some(raw) = &band.raster {
        let place = at.at("raster");
        let raster = raster(raw, &place)?;
        channels = raster_channels(raw, &raster, band_index, &place)?;
        for channel in &channels {
            names.claim(&channel.channel.id, &place)?;
        }
        asked_raster = Some(raster);
    }
    for (index, raw) in band.channels.iter().enumerate() {
        let place = at.at("channels").index(index);
        let channel = single_channel(raw, band_index, &place)?;
        names.claim(&channel.id, &place.at("id"))?;
        channels.push(AskedChannel { key: place.key().to_owned(), channel });
    }
    Ok((asked_raster, channels))
}

fn raster(raw: &file::Raster, at: &Place) -> Result<AskedRaster, ConfigError> {
    let limits_hz = -FREQUENCY_LIMIT_HZ..=FREQUENCY_LIMIT_HZ;
    let frequency =
        |key: &str, value, range| at.at(key).required_quantity(Quantity::Frequency, value, range);
    let count = at.at("count").whole_number(&raw.count, 1..=10_000)?;
    let raster = AskedRaster {
        key: at.key().to_owned(),
        first_centre_hz: frequency("first_centre", &raw.first_centre, limits_hz)?,
        spacing_hz: frequency("spacing", &raw.spacing, 1.0..=1e9)?,
        count: at.at("count").required(count, "1 to 10000")?,
        bandwidth_hz: frequency("bandwidth", &raw.bandwidth, 1.0..=1e9)?,
    };
    if raster.bandwidth_hz > raster.spacing_hz {
        return Err(at.at("bandwidth").error(format_args!(
            "{} is wider than the spacing ({}): the channels would overlap",
            format_frequency(raster.bandwidth_hz),
            format_frequency(raster.spacing_hz)
        )));
    }
    Ok(raster)
}

fn raster_channels(
    raw: &file::Raster,
    raster: &AskedRaster,
    band_index: usize,
    at: &Place,
) -> Result<Vec<AskedChannel>, ConfigError> {
    let prefix = at.at("id_prefix").name(&raw.id_prefix, 20)?;
    let first = at.at("first_number").whole_number(&raw.first_number, 0..=1_000_000)?.unwrap_or(1);
    let width = (first + raster.count - 1).to_string().len();
    let mut channels: Vec<AskedChannel> = (0..raster.count)
        .map(|index| AskedChannel {
            key: at.key().to_owned(),
            channel: Channel {
                id: format!("{prefix}{:0width$}", first + index),
                band_index,
                centre_hz: raster.first_centre_hz + index as f64 * raster.spacing_hz,
                bandwidth_hz: raster.bandwidth_hz,
                protected: false,
            },
        })
        .collect();
    for (index, id) in raw.protected.iter().enumerate() {
        let place = at.at("protected").index(index);
        let ends =
            format!("{} to {}", channels[0].channel.id, channels[channels.len() - 1].channel.id);
        let Some(found) = channels.iter_mut().find(|channel| channel.channel.id == *id) else {
            return Err(place.error(format_args!("{id:?} is not in this raster ({ends})")));
        };
        // A repeated name is refused: it most likely stands where another should be, and that other
        // channel would go on offer.
        if std::mem::replace(&mut found.channel.protected, true) {
            return Err(place.error(format_args!("{id:?} stands in the list twice")));
        }
    }
    Ok(channels)
}

fn single_channel(
    raw: &file::Channel,
    band_index: usize,
    at: &Place,
) -> Result<Channel, ConfigError> {
    let limits_hz = -FREQUENCY_LIMIT_HZ..=FREQUENCY_LIMIT_HZ;
    let frequency =
        |key: &str, value, range| at.at(key).required_quantity(Quantity::Frequency, value, range);
    Ok(Channel {
        id: at.at("id").name(&raw.id, 40)?,
        band_index,
        centre_hz: frequency("centre", &raw.centre, limits_hz)?,
        bandwidth_hz: frequency("bandwidth", &raw.bandwidth, 1.0..=1e9)?,
        protected: raw.protected.unwrap_or(false),
    })
}
