//! What a segment remembers of its noise floor from dwell to dwell.
//!
//! A signal that fills the whole block lifts every reference cell alike: within one dwell it looks
//! like more noise. What the floor was before tells. Each channel has an *accepted* floor; the part
//! of a new floor that lies above it may be a signal. Where that part exceeds the protection level,
//! the channel cannot be called idle.
//!
//! Without a calibration a step of gain and a signal look alike, so a floor that rises quickly is
//! never accepted, however long it lasts: only a slow drift is followed. A floor that falls is
//! accepted when it has stayed low for a while; falling and coming back is no rise.

use super::floor::FloorAt;

/// Floors within this of the accepted one, or within four standard errors, follow it: a drift of
/// 3 dB an hour moves by 0.01 dB between dwells of seconds. As a natural logarithm: 0.5 dB.
const NEAR: f64 = 0.115;

/// Time in which the accepted floor follows a drift (s).
const FOLLOW_S: f64 = 30.0;

/// A floor that has been lower for this long is accepted (s).
const LOW_S: f64 = 60.0;

/// The accepted floors of a segment.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct FloorMemory {
    /// Accepted mean power per bin by channel of the layout; empty before the first dwell.
    accepted: Vec<f64>,
    /// How long the floor has been low without a break (s), and the highest it was meanwhile, as a
    /// factor to the accepted one.
    low_for_s: f64,
    low_highest: f64,
    ratios: Vec<f64>,
}

impl FloorMemory {
    /// Takes in the floors of one dwell, one per channel of the layout, `None` where it could not
    /// be told. The first dwell's floors are accepted as they are.
    pub fn observe(&mut self, floors: &[Option<FloorAt>], observed_ns: i64) {
        if self.accepted.is_empty() {
            if floors.iter().all(Option::is_some) {
                self.accepted = floors.iter().flatten().map(|floor| floor.mean).collect();
            }
            return;
        }
        self.ratios.clear();
        let known = floors.iter().zip(&self.accepted);
        self.ratios
            .extend(known.filter_map(|(floor, accepted)| floor.map(|floor| floor.mean / accepted)));
        let looks = floors.iter().flatten().map(|floor| floor.looks).fold(f64::INFINITY, f64::min);
        if self.ratios.is_empty() {
            return;
        }
        self.ratios.sort_by(f64::total_cmp);
        let step = self.ratios[self.ratios.len() / 2];
        let seconds = observed_ns as f64 * 1e-9;
        if step.ln().abs() <= NEAR.max(4.0 / looks.sqrt()) {
            self.low_for_s = 0.0;
            let share = (seconds / FOLLOW_S).min(1.0);
            for (accepted, floor) in self.accepted.iter_mut().zip(floors) {
                if let Some(floor) = floor {
                    *accepted += share * (floor.mean - *accepted);
                }
            }
        } else if step < 1.0 {
            if self.low_for_s == 0.0 {
                self.low_highest = step;
            }
            self.low_highest = self.low_highest.max(step);
            self.low_for_s += seconds;
            if self.low_for_s >= LOW_S {
                self.accepted.iter_mut().for_each(|accepted| *accepted *= self.low_highest);
                self.low_for_s = 0.0;
            }
        } else {
            self.low_for_s = 0.0;
        }
    }

    /// The part of a channel's floor that is not accepted as noise: mean power per bin, 0 or more.
    pub fn unaccepted(&self, channel: usize, floor: FloorAt) -> f64 {
        self.accepted.get(channel).map_or(0.0, |accepted| (floor.mean - accepted).max(0.0))
    }
}
