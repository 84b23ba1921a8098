//! The keeper by itself: what extends a run, what ends one, what a hole is. No database.

use fallowband::detection::verdict::{Reason, Reasons};
use fallowband::history::{QUARTER_US, RunKeeper, RunState, Sums, TOLERANCE_US};

use crate::support::*;
use RunState::{Idle, Occupied, Own, Unknown};

/// All runs of one channel as `(start_us, end_us, state, observed_us)` after the first start.
fn runs(keeper: &RunKeeper) -> Vec<(i64, i64, RunState, i64)> {
    let from_us = keeper.first_start_us().unwrap();
    keeper
        .pending()
        .map(|run| (run.start_us - from_us, run.end_us - from_us, run.state, run.observed_us))
        .collect()
}

/// A keeper that has taken a dwell of a second and another that starts `late_ns` after its end.
fn two_dwells(late_ns: i64) -> RunKeeper {
    let mut keeper = RunKeeper::new(&[None], 100);
    keeper.take(&same(0, 1_000, 1, Idle));
    let mut second = same(1_000, 1_000, 1, Idle).as_ref().clone();
    second.start = second.start.plus_nanos(late_ns);
    keeper.take(&second);
    keeper
}

#[test]
fn a_dwell_within_the_tolerance_extends_the_run_and_one_beyond_leaves_a_hole() {
    assert_eq!(TOLERANCE_US, 1_000);
    assert_eq!(runs(&two_dwells(0)), [(0, 2_000_000, Idle, 2_000_000)]);
    // Late by the whole tolerance: one run; the millisecond is represented, but not observed.
    assert_eq!(runs(&two_dwells(1_000_999)), [(0, 2_001_000, Idle, 2_000_000)]);
    // A microsecond more: a hole, exactly as long as the time between.
    assert_eq!(
        runs(&two_dwells(1_001_000)),
        [
            (0, 1_000_000, Idle, 1_000_000),
            (1_000_000, 1_001_001, Unknown, 0),
            (1_001_001, 2_001_001, Idle, 1_000_000)
        ]
    );
}

#[test]
fn a_dwell_that_begins_before_the_record_ends_is_clipped_and_counted_beyond_the_tolerance() {
    let early = two_dwells(-1_000_000);
    assert_eq!(runs(&early), [(0, 1_999_000, Idle, 1_999_000)]);
    assert_eq!(early.clipped_reports(), 0);
    let earlier = two_dwells(-300_000_000);
    assert_eq!(runs(&earlier), [(0, 1_700_000, Idle, 1_700_000)]);
    assert_eq!(earlier.clipped_reports(), 1);
    let wholly_before = two_dwells(-5_000_000_000);
    assert_eq!(runs(&wholly_before), [(0, 1_000_000, Idle, 1_000_000)]);
    assert_eq!(wholly_before.clipped_reports(), 1);
}

#[test]
fn an_unknown_run_ends_when_its_reasons_change_and_own_time_stands_apart() {
    let mut keeper = RunKeeper::new(&[None], 100);
    let unknown = |reason: Reason, others: Reasons| {
        let mut verdict = verdict(0, Unknown, -90.0);
        verdict.reasons = Reasons::one(reason).union(others);
        verdict
    };
    let told = [
        unknown(Reason::Overload, Reasons::NONE),
        unknown(Reason::Overload, Reasons::NONE),
        unknown(Reason::Insensitive, Reasons::NONE),
        unknown(Reason::Own, Reasons::NONE),
        unknown(Reason::Own, Reasons::one(Reason::Overload)),
        verdict(0, Occupied, -90.0),
    ];
    for (told, n) in told.into_iter().zip(0..) {
        keeper.take(&report(n * 1_000, 1_000, vec![told]));
    }
    let states: Vec<_> =
        keeper.pending().map(|run| (run.state, run.end_us - run.start_us)).collect();
    let second_us = 1_000_000;
    assert_eq!(
        states,
        [
            (Unknown, 2 * second_us),
            (Unknown, second_us),
            (Own, 2 * second_us),
            (Occupied, second_us)
        ]
    );
}

#[test]
fn a_run_is_split_exactly_at_the_quarter_and_only_what_is_new_is_handed_out() {
    let mut keeper = RunKeeper::new(&[None], 100);
    // The begin is 10:07:30, so the quarter ends after 450 s.
    keeper.take(&same(0, 400_000, 1, Idle));
    let quarters = |keeper: &RunKeeper| -> Vec<(i64, Sums)> {
        keeper.pending().flat_map(|run| run.unrecorded_quarters()).collect()
    };
    let idle =
        |s: i64| Sums { idle_us: s * 1_000_000, observed_us: s * 1_000_000, ..Sums::default() };
    let first_us = BEGIN_MS * 1_000 - 450_000_000;
    assert_eq!(quarters(&keeper), [(first_us, idle(400))]);
    keeper.committed();
    assert_eq!(quarters(&keeper), []);
    keeper.take(&same(400_000, 1_000_000, 1, Idle));
    assert_eq!(
        quarters(&keeper),
        [
            (first_us, idle(50)),
            (first_us + QUARTER_US, idle(900)),
            (first_us + 2 * QUARTER_US, idle(50))
        ]
    );
}

#[test]
fn a_keeper_that_resumes_begins_with_the_time_down() {
    let end_us = (BEGIN_MS - 60_000) * 1_000;
    let mut keeper = RunKeeper::new(&[Some(end_us)], 100);
    keeper.take(&same(0, 1_000, 1, Occupied));
    let runs: Vec<_> =
        keeper.pending().map(|run| (run.start_us, run.end_us, run.state, run.reasons)).collect();
    let begin_us = BEGIN_MS * 1_000;
    assert_eq!(
        runs,
        [
            (end_us, begin_us, Unknown, Reasons::one(Reason::NotObserved)),
            (begin_us, begin_us + 1_000_000, Occupied, Reasons::NONE)
        ]
    );
}

#[test]
#[should_panic(expected = "negative length")]
fn a_report_of_negative_length_is_a_broken_invariant() {
    RunKeeper::new(&[None], 1).take(&same(0, -1, 1, Idle));
}
