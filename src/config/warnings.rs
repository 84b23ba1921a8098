//! What is legal but most likely not meant. Each warning is one line: what, with which numbers, and
//! what would mend it. Nothing is refused here.

use super::plan::bin_width_hz;
use super::quantity::{format_duration, format_frequency, format_share};
use crate::detection::plan::{Band, Plan};
use crate::detection::time::NANOS_PER_SECOND;

/// A truly idle channel should be on offer for at least this share of time: the project's bar.
const OFFER_SHARE_WANTED: f64 = 0.95;

/// The share of time for which a truly idle channel is on offer under a band's rules (0 to 1).
///
/// It is on offer when no dwell of the past `hold_off + check_time` raised a false alarm. With
/// independent false alarms at a rate of `pfa / dwell`, that share is
/// `exp(-pfa / dwell * (hold_off + check_time))` (the Poisson probability of none).
pub fn idle_offer_share(band: &Band) -> f64 {
    (-band.pfa / band.dwell_s * blocked_s(band)).exp()
}

/// How long one false alarm keeps a channel off the list (s).
fn blocked_s(band: &Band) -> f64 {
    seconds(band.policy.hold_off_ns) + seconds(band.policy.check_time_ns)
}

fn seconds(nanos: i64) -> f64 {
    nanos as f64 / NANOS_PER_SECOND as f64
}

/// All warnings for a plan, the receiver's first, then by band.
pub(super) fn warnings(plan: &Plan) -> Vec<String> {
    let mut found = Vec::new();
    if plan.receiver.usable_bandwidth_hz >= plan.receiver.sample_rate_hz {
        found.push(format!(
            "receiver.usable_bandwidth: {} is the whole sample rate; no front end is flat up to \
             the edge of its block: 90 % of the rate is usual",
            format_frequency(plan.receiver.usable_bandwidth_hz)
        ));
    }
    for (index, band) in plan.bands.iter().enumerate() {
        let say =
            |(key, text): (&str, String)| format!("bands[{index}].{key} ({}): {text}", band.id);
        found.extend(rarely_on_offer(band).map(say));
        found.extend(answers_lapse(band).map(say));
        found.extend(slices_are_blurred(plan, band).map(say));
        found.extend(channel_warnings(plan, index).into_iter().map(say));
    }
    found
}

type Warning = (&'static str, String);

fn rarely_on_offer(band: &Band) -> Option<Warning> {
    let share = idle_offer_share(band);
    if share >= OFFER_SHARE_WANTED {
        return None;
    }
    // The largest pfa and the longest hold-off that would pass, rounded down so that they do.
    let budget = -OFFER_SHARE_WANTED.ln() * band.dwell_s;
    let mut cure = format!("pfa = {}", format_share(two_digits_down(budget / blocked_s(band))));
    let hold_off_s = budget / band.pfa - seconds(band.policy.check_time_ns);
    if hold_off_s > 0.0 {
        let hold_off = format_duration(two_digits_down(hold_off_s));
        cure.push_str(&format!(" or hold_off = {hold_off}"));
    }
    Some((
        "pfa",
        format!(
            "a truly idle channel would be on offer for {:.1} % of the time only (pfa {}, \
             dwell {}, hold-off {}, check time {}; 95 % is wanted): {cure} would do",
            // Rounded down: 94.96 % must not read as 95.0 %.
            (share * 1000.0).floor() / 10.0,
            format_share(band.pfa),
            format_duration(band.dwell_s),
            format_duration(seconds(band.policy.hold_off_ns)),
            format_duration(seconds(band.policy.check_time_ns)),
        ),
    ))
}

/// The value rounded down to two significant digits.
fn two_digits_down(value: f64) -> f64 {
    let exponent = value.log10().floor() as i32 - 1;
    let digits = (value / 10f64.powi(exponent)).floor();
    format!("{digits}e{exponent}").parse().expect("a number is written as one")
}

/// A verdict is in only when its dwell has ended, so the newest one's dwell began up to two dwells
/// ago even when nothing is late.
fn answers_lapse(band: &Band) -> Option<Warning> {
    let max_age_s = seconds(band.policy.max_age_ns);
    (max_age_s < 2.0 * band.dwell_s).then(|| {
        (
            "max_age",
            format!(
                "{} is under two dwells ({}): answers may lapse before the next verdict is in",
                format_duration(max_age_s),
                format_duration(2.0 * band.dwell_s)
            ),
        )
    })
}

/// A taper gives weight to about half of its transform: nothing finer in time is told apart.
fn slices_are_blurred(plan: &Plan, band: &Band) -> Option<Warning> {
    let half_s = plan.spectrum.transform_length as f64 / plan.receiver.sample_rate_hz / 2.0;
    (band.slice_s < half_s * (1.0 - 1e-9)).then(|| {
        (
            "slice",
            format!(
                "{} is shorter than half a transform ({}), which blurs neighbouring slices: a \
                 longer slice or a smaller spectrum.transform_length would tell them apart",
                format_duration(band.slice_s),
                format_duration(half_s)
            ),
        )
    })
}

fn channel_warnings(plan: &Plan, band_index: usize) -> Vec<Warning> {
    let channels: Vec<_> =
        plan.channels.iter().filter(|channel| channel.band_index == band_index).collect();
    let mut found = Vec::new();
    if channels.iter().all(|channel| channel.protected) {
        let text = "every channel is protected: none will ever be offered".to_owned();
        found.push(("channels", text));
    }
    let bin_hz = bin_width_hz(&plan.receiver, &plan.spectrum);
    let lobe_bins = 2.0 * plan.spectrum.window.main_lobe_half_width_bins() as f64;
    let coarse: Vec<&str> = channels
        .iter()
        .filter(|channel| channel.bandwidth_hz < lobe_bins * bin_hz)
        .map(|channel| channel.id.as_str())
        .collect();
    if let Some(first) = coarse.first() {
        let text = format!(
            "{} of {} channels (the first is {first}) are narrower than the {lobe_bins} bins of {} \
             over which the window spreads a carrier: a larger spectrum.transform_length would \
             keep neighbours apart",
            coarse.len(),
            channels.len(),
            format_frequency(bin_hz)
        );
        found.push(("channels", text));
    }
    let guard_hz = plan.receiver.dc_guard_hz / 2.0;
    for channel in channels {
        let (lower_hz, upper_hz) = channel.edges_hz();
        let low_hz = lower_hz.max(plan.receiver.centre_hz - guard_hz);
        let high_hz = upper_hz.min(plan.receiver.centre_hz + guard_hz);
        if high_hz > low_hz {
            let text = format!(
                "the DC guard covers {} of channel {} ({}), where energy is not measured",
                format_frequency(high_hz - low_hz),
                channel.id,
                format_frequency(channel.bandwidth_hz)
            );
            found.push(("channels", text));
        }
    }
    found
}
