//! From verdicts to offers: what must hold before a channel is offered, and what withdraws it.

mod support;

use fallowband::detection::availability::{Availability, Refusal, availability};
use fallowband::detection::plan::Plan;
use fallowband::detection::standing::Standing;
use fallowband::detection::time::{Stamp, Utc};
use fallowband::detection::verdict::{DwellReport, Levels, Reason, Reasons, State, Verdict};
use support::{START, plan};

const DWELL_NS: i64 = 200_000_000;
const SECOND_NS: i64 = 1_000_000_000;

/// A node of three channels whose dwells follow each other without a gap.
struct Node {
    plan: Plan,
    standing: Standing,
    next: Stamp,
    sequence: u64,
}

impl Node {
    /// Check time 2 s, hold-off 60 s, maximum age 1 s.
    fn new() -> Node {
        let mut plan = plan(1.2e6, 3);
        plan.channels[2].protected = true;
        let standing = Standing::new(&plan);
        Node { plan, standing, next: START, sequence: 0 }
    }

    fn dwell(&mut self, states: [State; 3]) {
        let levels = Levels {
            power_db: -96.0,
            floor_db: -95.5,
            threshold_db: -95.0,
            sensitivity_db: -105.0,
        };
        let verdicts = states
            .iter()
            .enumerate()
            .map(|(channel_index, &state)| Verdict {
                channel_index,
                state,
                reasons: match state {
                    State::Unknown => Reasons::one(Reason::Insensitive),
                    _ => Reasons::NONE,
                },
                levels: Some(levels),
            })
            .collect();
        self.standing.observe(&DwellReport {
            sequence: self.sequence,
            start: self.next,
            observed_ns: DWELL_NS,
            verdicts,
            slice_power_db: Vec::new(),
            spectrum: Vec::new(),
        });
        self.next = self.next.plus_nanos(DWELL_NS);
        self.sequence += 1;
    }

    fn dwells(&mut self, count: usize, states: [State; 3]) {
        for _ in 0..count {
            self.dwell(states);
        }
    }

    /// The answer `after_ns` after the newest dwell's end.
    fn answer(&self, after_ns: i64) -> Availability {
        availability(&self.plan, &self.standing, self.next.plus_nanos(after_ns))
    }

    fn refusals(&self, channel: usize, after_ns: i64) -> Vec<Refusal> {
        let answer = self.answer(after_ns);
        answer.refusals.into_iter().find(|(index, _)| *index == channel).map_or(vec![], |r| r.1)
    }
}

const IDLE: [State; 3] = [State::Idle; 3];

#[test]
fn nothing_is_offered_before_anything_was_heard() {
    let node = Node::new();
    assert!(node.answer(0).offers.is_empty());
    assert_eq!(node.refusals(0, 0), [Refusal::Stale]);
    assert_eq!(node.refusals(2, 0), [Refusal::Protected, Refusal::Stale]);
}

#[test]
fn a_channel_is_offered_once_it_has_been_idle_for_the_check_time() {
    let mut node = Node::new();
    node.dwells(9, IDLE);
    assert_eq!(node.refusals(0, 0), [Refusal::CheckTime]);
    node.dwell(IDLE);
    let answer = node.answer(300_000_000);
    let offered: Vec<usize> = answer.offers.iter().map(|offer| offer.channel_index).collect();
    assert_eq!(offered, [0, 1]);
    let offer = answer.offers[0];
    assert_eq!(offer.evidence_age_ns, 300_000_000);
    assert_eq!(offer.valid_for_ns, 700_000_000);
    assert_eq!(offer.idle_for_ns, 2 * SECOND_NS);
    assert_eq!(offer.sequence, 9);
    assert!((offer.margin_db - 1.0).abs() < 1e-12);
}

#[test]
fn a_protected_channel_is_never_offered() {
    let mut node = Node::new();
    node.dwells(1000, IDLE);
    assert_eq!(node.refusals(2, 0), [Refusal::Protected]);
}

#[test]
fn evidence_as_old_as_the_limit_is_stale() {
    let mut node = Node::new();
    node.dwells(20, IDLE);
    assert_eq!(node.answer(SECOND_NS - 1).offers.len(), 2);
    assert!(node.answer(SECOND_NS).offers.is_empty());
    assert_eq!(node.refusals(1, SECOND_NS), [Refusal::Stale]);
}

#[test]
fn evidence_from_the_future_is_stale_but_for_rounding() {
    let mut node = Node::new();
    node.dwells(20, IDLE);
    assert_eq!(node.answer(-400).offers[0].evidence_age_ns, 0);
    assert!(node.answer(-2 * SECOND_NS).offers.is_empty());
}

#[test]
fn a_utc_clock_that_jumps_changes_neither_age_nor_idle_time() {
    let mut node = Node::new();
    node.dwells(8, IDLE);
    node.next.utc = Utc(node.next.utc.0 - 3_600 * SECOND_NS);
    node.dwells(7, IDLE);
    node.next.utc = Utc(node.next.utc.0 + 86_400 * SECOND_NS);
    let answer = node.answer(100_000_000);
    assert_eq!(answer.offers[0].idle_for_ns, 3 * SECOND_NS);
    assert_eq!(answer.offers[0].valid_for_ns, 900_000_000);
}

#[test]
fn a_detection_holds_the_channel_back_for_the_hold_off() {
    let mut node = Node::new();
    node.dwells(20, IDLE);
    node.dwell([State::Occupied, State::Idle, State::Idle]);
    assert_eq!(node.refusals(0, 0), [Refusal::Occupied, Refusal::HoldOff]);
    node.dwells(299, IDLE);
    assert_eq!(node.refusals(0, 0), [Refusal::HoldOff]);
    node.dwell(IDLE);
    assert_eq!(node.answer(0).offers.len(), 2);
    // The undisturbed channel has been idle for longer and comes first.
    assert_eq!(node.answer(0).offers[0].channel_index, 1);
}

#[test]
fn unknown_is_refused_with_its_reasons_and_the_check_begins_anew() {
    let mut node = Node::new();
    node.dwells(20, IDLE);
    node.dwell([State::Unknown, State::Idle, State::Idle]);
    assert_eq!(node.refusals(0, 0), [Refusal::Unknown(Reasons::one(Reason::Insensitive))]);
    node.dwells(9, IDLE);
    assert_eq!(node.refusals(0, 0), [Refusal::CheckTime]);
    node.dwell(IDLE);
    assert!(node.refusals(0, 0).is_empty());
}

#[test]
fn a_gap_between_dwells_begins_the_check_anew() {
    let mut node = Node::new();
    node.dwells(20, IDLE);
    node.next = node.next.plus_nanos(500_000_000);
    node.dwell(IDLE);
    assert_eq!(node.refusals(0, 0), [Refusal::CheckTime]);
}

#[test]
fn a_recalled_detection_holds_off_by_its_age_and_never_for_less_when_utc_has_gone_back() {
    // The hold-off is 60 s. Detected so long before (negative: after) the start [s], the channel is
    // held off for so long after it [s].
    for (ago_s, held_s) in [(0, 60), (45, 15), (60, 0), (86_400 * 3650, 0), (-1, 60), (-9000, 60)] {
        let mut node = Node::new();
        let detected = START.utc.plus_nanos(-ago_s * SECOND_NS);
        node.standing.recall(0, detected, START);
        let last = node.standing.channels[0].last_detection.expect("recalled");
        assert!(last.utc <= START.utc && last.monotonic_ns <= START.monotonic_ns);
        let held = |elapsed_ns: i64| {
            let answer = availability(&node.plan, &node.standing, START.plus_nanos(elapsed_ns));
            let (_, refusals) =
                answer.refusals.iter().find(|(index, _)| *index == 0).expect("nothing is known");
            refusals.contains(&Refusal::HoldOff)
        };
        assert!(held_s == 0 || held(held_s * SECOND_NS - 1), "{ago_s} s ago");
        assert!(!held(held_s * SECOND_NS), "{ago_s} s ago");
    }
}
