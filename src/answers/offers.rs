//! Which channels may be used now, ranked, and why the others may not.
//!
//! The decision is detection's; here it is put into words. Rounding never flatters an offer.

use axum::Json;
use axum::extract::State;
use axum::http::Uri;
use serde::Serialize;

use super::AppState;
use super::figures::{self, NANOS_PER_MILLISECOND, decibels, moment};
use super::problem::Problem;
use super::query::{Parameters, channel_index};
use crate::detection::availability::{Offer, Refusal, availability};
use crate::detection::plan::Plan;
use crate::detection::time::Utc;
use crate::detection::verdict::Reason;

/// Said with every offer.
const NOTICE: &str = "A measurement is no licence to transmit. A sensor cannot hear a hidden \
                      transmitter; the regulator's rules and the licence come first.";

#[derive(Serialize)]
pub(super) struct AvailabilityAnswer {
    now: String,
    offers: Vec<OfferAnswer>,
    refusals: Vec<RefusalAnswer>,
    notice: &'static str,
}

#[derive(Serialize)]
struct OfferAnswer {
    channel: String,
    band: String,
    centre_hz: f64,
    bandwidth_hz: f64,
    valid_until: String,
    valid_for_ms: i64,
    sequence: u64,
    evidence_age_ms: i64,
    idle_for_s: f64,
    margin_db: Option<f64>,
    sensitivity_db: Option<f64>,
    protection_level_db: Option<f64>,
}

#[derive(Serialize)]
struct RefusalAnswer {
    channel: String,
    reasons: Vec<&'static str>,
}

/// What a radio asks for.
struct Wish {
    /// The only channel that will do.
    channel_index: Option<usize>,
    /// Width that a channel must have at least (Hz).
    bandwidth_hz: f64,
    /// How many offers are wanted at most.
    count: usize,
}

impl Wish {
    fn read(plan: &Plan, uri: &Uri) -> Result<Wish, Problem> {
        let parameters = Parameters::read(uri, &["bandwidth_hz", "count", "channel"])?;
        let channel_index = match parameters.one("channel")? {
            None => None,
            Some(id) => Some(channel_index(plan, "channel", id)?),
        };
        let widest_hz =
            plan.channels.iter().enumerate().fold(0.0, |widest_hz: f64, (index, channel)| {
                let asked = channel_index.is_none_or(|asked| asked == index);
                if asked { widest_hz.max(channel.bandwidth_hz) } else { widest_hz }
            });
        // A width that no channel has would be answered by silence; it is told instead.
        let bandwidth_hz = parameters.number(
            "bandwidth_hz",
            |width_hz: &f64| *width_hz > 0.0 && *width_hz <= widest_hz,
            &format!("a number above 0, at most {widest_hz} (the widest channel asked for)"),
        )?;
        let count = parameters.number("count", |count| *count >= 1, "a whole number from 1 up")?;
        Ok(Wish {
            channel_index,
            bandwidth_hz: bandwidth_hz.unwrap_or(0.0),
            count: count.unwrap_or(usize::MAX),
        })
    }

    /// Whether the channel is one that was asked about.
    fn covers(&self, plan: &Plan, index: usize) -> bool {
        self.channel_index.is_none_or(|asked| asked == index)
            && plan.channels[index].bandwidth_hz >= self.bandwidth_hz
    }
}

/// `GET /v1/availability`
pub(super) async fn offers(
    State(state): State<AppState>,
    uri: Uri,
) -> Result<Json<AvailabilityAnswer>, Problem> {
    let plan = &state.plan;
    let wish = Wish::read(plan, &uri)?;
    let (live, now) = state.live_and_now();
    let mut answer = availability(plan, &live.standing, now);
    // An offer in its last millisecond would be written as good for 0 ms: it is over.
    let expiring = |offer: &Offer| offer.valid_for_ns < NANOS_PER_MILLISECOND;
    for offer in answer.offers.iter().filter(|offer| expiring(offer)) {
        answer.refusals.push((offer.channel_index, vec![Refusal::Stale]));
    }
    answer.refusals.sort_by_key(|(index, _)| *index);
    Ok(Json(AvailabilityAnswer {
        now: moment(now.utc),
        offers: answer
            .offers
            .iter()
            .filter(|offer| !expiring(offer) && wish.covers(plan, offer.channel_index))
            .take(wish.count)
            .map(|offer| offer_answer(plan, offer, now.utc))
            .collect(),
        refusals: answer
            .refusals
            .iter()
            .filter(|(index, _)| wish.covers(plan, *index))
            .map(|(index, refusals)| RefusalAnswer {
                channel: plan.channels[*index].id.clone(),
                reasons: refusals.iter().flat_map(reason_codes).collect(),
            })
            .collect(),
        notice: NOTICE,
    }))
}

/// The validity is cut and the age rounded up, both to milliseconds, so that neither flatters.
fn offer_answer(plan: &Plan, offer: &Offer, now: Utc) -> OfferAnswer {
    let channel = &plan.channels[offer.channel_index];
    let band = plan.band_of(channel);
    OfferAnswer {
        channel: channel.id.clone(),
        band: band.id.clone(),
        centre_hz: channel.centre_hz,
        bandwidth_hz: channel.bandwidth_hz,
        valid_until: moment(now.plus_nanos(offer.valid_for_ns)),
        valid_for_ms: offer.valid_for_ns / NANOS_PER_MILLISECOND,
        sequence: offer.sequence,
        evidence_age_ms: (offer.evidence_age_ns + NANOS_PER_MILLISECOND - 1)
            / NANOS_PER_MILLISECOND,
        idle_for_s: figures::nanos_as_seconds(offer.idle_for_ns),
        margin_db: decibels(offer.margin_db),
        sensitivity_db: decibels(offer.sensitivity_db),
        protection_level_db: decibels(band.protection_level_db),
    }
}

/// The code of a refusal; an unknown brings the reasons of its verdict along.
fn reason_codes(refusal: &Refusal) -> Vec<&'static str> {
    let mut codes = vec![refusal.as_str()];
    if let Refusal::Unknown(reasons) = refusal {
        codes.extend(reasons.iter().map(Reason::as_str));
    }
    codes
}
