//! From verdicts to an answer: which channels a radio may be offered now, and why not the others.
//!
//! A channel is offered when the plan allows it, its newest verdict is young enough and `idle`, it
//! has been idle without a gap for the check time, and nothing was detected on it for the hold-off.

use super::plan::{Band, Plan};
use super::standing::{CONTIGUITY_NS, ChannelStanding, Standing};
use super::time::Stamp;
use super::verdict::{Reasons, State};

/// Why a channel is not on offer. All that apply are listed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Refusal {
    /// The plan protects the channel.
    Protected,
    /// The newest dwell found it occupied.
    Occupied,
    /// The newest dwell could not tell; the verdict's reasons come with it.
    Unknown(Reasons),
    /// The newest verdict is older than the policy's maximum age, or there is none.
    Stale,
    /// It has not been idle for the check time yet.
    CheckTime,
    /// Something was detected on it within the hold-off.
    HoldOff,
}

impl Refusal {
    /// The code used in every interface.
    pub fn as_str(self) -> &'static str {
        match self {
            Refusal::Protected => "protected",
            Refusal::Occupied => "occupied",
            Refusal::Unknown(_) => "unknown",
            Refusal::Stale => "stale",
            Refusal::CheckTime => "check_time",
            Refusal::HoldOff => "hold_off",
        }
    }
}

/// One channel on offer.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Offer {
    /// Index of the channel in the plan.
    pub channel_index: usize,
    /// The answer holds for this long from `now` (ns), more than 0.
    pub valid_for_ns: i64,
    /// Sequence number of the dwell behind it.
    pub sequence: u64,
    /// Age of the evidence (ns).
    pub evidence_age_ns: i64,
    /// How long the channel has been idle without a gap (ns).
    pub idle_for_ns: i64,
    /// Threshold minus power (dB).
    pub margin_db: f64,
    /// Sensitivity of the dwell behind it (dB).
    pub sensitivity_db: f64,
}

/// The answer to "which channel may I use now?".
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Availability {
    /// On offer, the longest idle first.
    pub offers: Vec<Offer>,
    /// Not on offer, by channel index, each with every reason that applies.
    pub refusals: Vec<(usize, Vec<Refusal>)>,
}

/// Decides for every channel of the plan. `now` comes from the clock that stamped the samples.
pub fn availability(plan: &Plan, standing: &Standing, now: Stamp) -> Availability {
    assert_eq!(plan.channels.len(), standing.channels.len(), "standing of another plan");
    let mut answer = Availability::default();
    for (channel_index, (channel, channel_standing)) in
        plan.channels.iter().zip(&standing.channels).enumerate()
    {
        let band = plan.band_of(channel);
        match judge(channel.protected, band, channel_standing, now) {
            Ok(offer) => answer.offers.push(Offer { channel_index, ..offer }),
            Err(refusals) => answer.refusals.push((channel_index, refusals)),
        }
    }
    answer.offers.sort_by_key(|offer| (-offer.idle_for_ns, offer.channel_index));
    answer
}

/// One channel's offer, or everything that stands against it.
fn judge(
    protected: bool,
    band: &Band,
    standing: &ChannelStanding,
    now: Stamp,
) -> Result<Offer, Vec<Refusal>> {
    let mut refusals = Vec::new();
    if protected {
        refusals.push(Refusal::Protected);
    }
    // Half-open: evidence exactly as old as the limit is stale. Evidence from the future (a clock
    // that ran backwards) proves nothing about freshness either, but for the rounding of stamps.
    let age_ns = standing
        .age_ns(now)
        .map(|age_ns| if (-CONTIGUITY_NS..0).contains(&age_ns) { 0 } else { age_ns })
        .filter(|age_ns| (0..band.policy.max_age_ns).contains(age_ns));
    if age_ns.is_none() {
        refusals.push(Refusal::Stale);
    }
    if let Some(verdict) = standing.verdict {
        match verdict.state {
            State::Occupied => refusals.push(Refusal::Occupied),
            State::Unknown => refusals.push(Refusal::Unknown(verdict.reasons)),
            State::Idle if standing.run_length_ns() < band.policy.check_time_ns => {
                refusals.push(Refusal::CheckTime);
            }
            State::Idle => {}
        }
    }
    let held_off = standing
        .last_detection
        .is_some_and(|last| now.monotonic_ns - last.monotonic_ns < band.policy.hold_off_ns);
    if held_off {
        refusals.push(Refusal::HoldOff);
    }
    let levels = standing.verdict.and_then(|verdict| verdict.levels);
    match (age_ns, levels) {
        (Some(age_ns), Some(levels)) if refusals.is_empty() => Ok(Offer {
            channel_index: 0,
            valid_for_ns: band.policy.max_age_ns - age_ns,
            sequence: standing.sequence,
            evidence_age_ns: age_ns,
            idle_for_ns: standing.run_length_ns(),
            margin_db: levels.threshold_db - levels.power_db,
            sensitivity_db: levels.sensitivity_db,
        }),
        _ => {
            assert!(!refusals.is_empty(), "an idle verdict always carries its levels");
            Err(refusals)
        }
    }
}
