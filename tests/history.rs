//! The history room as its users see it, on real SQLite files.
//!
//! The oracle for sums and runs is a grid of painted cells (`support::Line`), which knows neither
//! intervals nor SQL.

#[path = "history/detections.rs"]
mod detections;
#[path = "history/faults.rs"]
mod faults;
#[path = "history/health.rs"]
mod health;
#[path = "history/keeper.rs"]
mod keeper;
#[path = "history/support.rs"]
mod support;

use std::path::Path;

use fallowband::detection::time::Utc;
use fallowband::detection::verdict::{Reason, Reasons};
use fallowband::history::{
    Column, History, HistoryState, Identity, QUARTER_ROW_BYTES, QUARTER_US, RUN_ROW_BYTES, Reader,
    RunState,
};
use rand_core::{Rng, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;
use support::*;

const STATES: [RunState; 4] =
    [RunState::Occupied, RunState::Idle, RunState::Unknown, RunState::Own];

struct Dice(Xoshiro256PlusPlus);

impl Dice {
    fn below(&mut self, bound: i64) -> i64 {
        (self.0.next_u64() % bound as u64) as i64
    }

    fn chance(&mut self, percent: i64) -> bool {
        self.below(100) < percent
    }
}

/// How often each fault happens in one random history (percent of reports); some are off.
struct Faults {
    gap: i64,
    long_gap: i64,
    back: i64,
    restart: i64,
    replan: i64,
    absent: i64,
    change: i64,
    /// Not a fault: waits until all so far is committed, so that runs are cut by commits.
    commit: i64,
}

impl Faults {
    fn draw(dice: &mut Dice) -> Faults {
        let mut rate = |most: i64| if dice.chance(30) { 0 } else { dice.below(most) + 1 };
        Faults {
            gap: rate(20),
            long_gap: rate(2),
            back: rate(10),
            restart: rate(3),
            replan: rate(60),
            absent: rate(30),
            change: rate(50),
            commit: rate(5),
        }
    }
}

/// Feeds a random sequence of reports to a real history and to the grid. Returns the grid.
fn live_through(path: &std::path::Path, dice: &mut Dice, channels: usize) -> Vec<Line> {
    let faults = Faults::draw(dice);
    let mut lines: Vec<Line> = (0..channels).map(|_| Line::default()).collect();
    let mut states = vec![RunState::Idle; channels];
    let mut plan = plan(channels);
    let mut history = History::open(path, &identity(), &plan, quick()).unwrap();
    let (mut cell, mut until) = (0, None);
    for _ in 0..600 {
        if dice.chance(faults.gap) {
            cell += 1 + dice.below(200);
        }
        if dice.chance(faults.long_gap) {
            cell += 1 + dice.below(30_000);
        }
        if dice.chance(faults.back) {
            cell = (cell - 1 - dice.below(300)).max(0);
        }
        if dice.chance(faults.restart) {
            let health = history.writer.close();
            assert_eq!((health.state, health.dropped_reports), (HistoryState::Writing, 0));
            if dice.chance(faults.replan) {
                plan.channels[0].bandwidth_hz += 100.0;
            }
            history = History::open(path, &identity(), &plan, quick()).unwrap();
            until = None;
        }
        let length = 1 + dice.below(100);
        let mut verdicts = Vec::new();
        for (index, line) in lines.iter_mut().enumerate() {
            if dice.chance(faults.change) {
                states[index] = STATES[dice.below(4) as usize];
            }
            if !dice.chance(faults.absent) {
                verdicts.push(verdict(index, states[index], -90.0));
                line.paint(cell as usize, (cell + length) as usize, states[index]);
            }
        }
        assert!(history.writer.offer(report(cell * STEP_MS, length * STEP_MS, verdicts)));
        cell += length;
        until = until.max(Some(at(cell * STEP_MS)));
        if dice.chance(faults.commit) {
            wait_until("a commit", || history.health.now().recorded_until == until);
        }
    }
    assert_eq!(history.writer.close().state, HistoryState::Writing);
    lines
}

/// Compares every answer over `[from, to)` cells, as of `now`, with the grid.
fn assert_answers(reader: &Reader, name: &str, line: &Line, (from, to, now): (i64, i64, i64)) {
    let moment = |cell: i64| at(cell * STEP_MS);
    let end = to.min(now).max(from);
    let cell_of = |utc: Utc| (utc.0 / 1_000_000 - BEGIN_MS) / STEP_MS;

    let full = reader.runs(name, moment(from), moment(to), moment(now), 1_000_000).unwrap();
    let mut covered = from;
    for run in &full.runs {
        assert_eq!(cell_of(run.start), covered, "runs touch");
        covered = cell_of(run.end);
        for cell in cell_of(run.start)..covered {
            assert_eq!(run.state, line.at(cell).unwrap_or(RunState::Unknown));
            let unseen = run.reasons == Reasons::one(Reason::NotObserved);
            assert_eq!(
                unseen,
                line.at(cell).is_none(),
                "not observed if and only if nobody looked"
            );
        }
    }
    assert_eq!(covered, end, "the list covers the range up to now");
    let limit = 1 + full.runs.len() / 2;
    let part = reader.runs(name, moment(from), moment(to), moment(now), limit).unwrap();
    assert_eq!(part.runs, full.runs[..limit.min(full.runs.len())]);
    assert_eq!(part.truncated, limit < full.runs.len());

    let names = [name.to_owned()];
    for step_us in [60_000_000, 300_000_000, QUARTER_US, 4 * QUARTER_US] {
        let answer =
            reader.columns(Some(&names), moment(from), moment(to), moment(now), step_us).unwrap();
        let mut covered = from;
        for Column { start, end: until, sums } in &answer[0].columns {
            assert_eq!(cell_of(*start), covered, "columns touch");
            covered = cell_of(*until);
            let step_of = |us: i64| us.div_euclid(step_us);
            assert_eq!(step_of(start.0 / 1_000), step_of(until.0 / 1_000 - 1), "one step each");
            assert_eq!(
                [sums.occupied_us, sums.idle_us, sums.unknown_us, sums.own_us],
                line.sums_us(cell_of(*start), covered),
                "{name} [{start:?}, {until:?})"
            );
            assert_eq!(sums.represented_us(), until.nanos_since(*start) / 1_000);
            assert!(sums.observed_us <= sums.represented_us());
        }
        assert_eq!(covered, end);
    }
}

#[test]
fn random_histories_answer_like_a_painted_grid() {
    for seed in 1..=12 {
        println!("seed {seed}");
        let mut dice = Dice(Xoshiro256PlusPlus::seed_from_u64(seed));
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("history.sqlite3");
        let lines = live_through(&path, &mut dice, 3);
        assert_sound(&path);
        let reader = Reader::open(&path).unwrap();
        let length = lines.iter().map(|line| line.cells.len()).max().unwrap() as i64;
        for (index, line) in lines.iter().enumerate() {
            let name = format!("L{index:02}");
            assert_answers(&reader, &name, line, (-9_000, length + 9_000, length + 4_000));
            for _ in 0..20 {
                let from = dice.below(length + 1_000) - 500;
                let to = from + dice.below(20_000);
                let now = from + dice.below(30_000);
                assert_answers(&reader, &name, line, (from, to, now));
            }
        }
    }
}

#[test]
fn a_gap_is_never_reported_as_idle() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 1).unwrap();
    history.writer.offer(same(0, 1_000, 1, RunState::Idle));
    history.writer.offer(same(1_002, 1_000, 1, RunState::Idle));
    history.writer.close();
    use RunState::{Idle, Unknown};
    assert_eq!(
        runs_ms(&history.reader, "L00", -500, 3_000),
        [
            (-500, 0, Unknown),
            (0, 1_000, Idle),
            (1_000, 1_002, Unknown),
            (1_002, 2_002, Idle),
            (2_002, 3_000, Unknown)
        ]
    );
    assert_eq!(runs_ms(&history.reader, "never seen", 0, 10), [(0, 10, Unknown)]);
    assert!(history.reader.runs("L00", at(5), at(5), at(9), 9).unwrap().runs.is_empty());
}

#[test]
fn a_restart_counts_the_time_down_as_unknown_and_nothing_twice() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let first = open(&path, 2).unwrap();
    first.writer.offer(same(0, 1_000, 2, RunState::Idle));
    first.writer.close();

    // Down for an hour; the clock had gone back a little when it came up again.
    let second = open(&path, 2).unwrap();
    second.writer.offer(same(500, 200, 2, RunState::Occupied));
    second.writer.offer(same(3_600_000, 1_000, 2, RunState::Idle));
    let health = second.writer.close();
    assert_eq!(health.clipped_reports, 1);
    use RunState::{Idle, Unknown};
    assert_eq!(
        runs_ms(&second.reader, "L01", 0, 3_601_000),
        [(0, 1_000, Idle), (1_000, 3_600_000, Unknown), (3_600_000, 3_601_000, Idle)]
    );
    assert_eq!(second.reader.recorded_until().unwrap(), Some(at(3_601_000)));
    assert_sound(&path);
}

#[test]
fn a_run_does_not_continue_across_a_restart() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    for start_ms in [0, 1_000] {
        let history = open(&path, 1).unwrap();
        history.writer.offer(same(start_ms, 1_000, 1, RunState::Idle));
        history.writer.close();
    }
    let reader = Reader::open(&path).unwrap();
    use RunState::Idle;
    assert_eq!(runs_ms(&reader, "L00", 0, 2_000), [(0, 1_000, Idle), (1_000, 2_000, Idle)]);
}

#[test]
fn a_changed_plan_makes_a_new_identity_and_leaves_the_older_as_it_was() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let first = open(&path, 2).unwrap();
    first.writer.offer(same(0, 1_000, 2, RunState::Idle));
    first.writer.close();

    let mut moved = plan(1);
    moved.channels[0].centre_hz += 12.5e3;
    let changed = || Identity { configuration_text: "# moved\n".into(), ..identity() };
    for start_ms in [5_000, 6_000] {
        let second = History::open(&path, &changed(), &moved, quick()).unwrap();
        second.writer.offer(same(start_ms, 1_000, 1, RunState::Occupied));
        second.writer.close();
    }

    let connection = rusqlite::Connection::open(&path).unwrap();
    let mut query = connection
        .prepare("SELECT name, centre_hz, valid_from_us, valid_to_us FROM channel ORDER BY id")
        .unwrap();
    let us = |ms: i64| (BEGIN_MS + ms) * 1_000;
    let rows: Vec<(String, f64, i64, Option<i64>)> = query
        .query_map([], |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?, row.get(3)?)))
        .unwrap()
        .map(Result::unwrap)
        .collect();
    assert_eq!(
        rows,
        [
            ("L00".into(), 168.0e6, us(0), Some(us(1_000))),
            ("L01".into(), 168.025e6, us(0), Some(us(1_000))),
            ("L00".into(), 168.0125e6, us(1_000), None),
        ]
    );
    let made: Vec<i64> = connection
        .prepare("SELECT configuration FROM run WHERE state <> 2 ORDER BY start_us, channel")
        .unwrap()
        .query_map([], |row| row.get(0))
        .unwrap()
        .map(Result::unwrap)
        .collect();
    assert_eq!(made, [1, 1, 2, 2], "each run points to the configuration that made it");
    use RunState::{Idle, Occupied, Unknown};
    assert_eq!(
        runs_ms(&Reader::open(&path).unwrap(), "L00", 0, 7_000),
        [
            (0, 1_000, Idle),
            (1_000, 5_000, Unknown),
            (5_000, 6_000, Occupied),
            (6_000, 7_000, Occupied)
        ]
    );
    assert_sound(&path);
}

#[test]
fn occupied_runs_keep_mean_and_maximum_power_and_others_keep_none() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 1).unwrap();
    // Three parts of time at -90 dB and one at -80 dB: the mean is 10 log10((3 + 10) / 4) over -90.
    history.writer.offer(report(0, 3_000, vec![verdict(0, RunState::Occupied, -90.0)]));
    history.writer.offer(report(3_000, 1_000, vec![verdict(0, RunState::Occupied, -80.0)]));
    history.writer.offer(report(4_000, 1_000, vec![verdict(0, RunState::Idle, -109.0)]));
    history.writer.close();
    let list = history.reader.runs("L00", at(1_000), at(5_000), at(5_000), 10).unwrap();
    let mean_db = list.runs[0].power_mean_db.unwrap();
    assert!((mean_db - (-90.0 + 10.0 * 3.25f64.log10())).abs() < 1e-9, "{mean_db}");
    assert_eq!(list.runs[0].power_max_db, Some(-80.0));
    assert_eq!(list.runs[0].level_ref.as_deref(), Some("dBFS"));
    assert_eq!(list.runs[0].observed_us, 3_000_000);
    assert_eq!((list.runs[1].power_mean_db, list.runs[1].power_max_db), (None, None));
}

#[test]
fn a_clock_that_jumps_by_years_writes_a_handful_of_rows() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 1).unwrap();
    // No battery behind the clock: up at some moment of long ago, then set.
    let years_ms = 20 * 365 * 86_400_000;
    history.writer.offer(same(-years_ms, 1_000, 1, RunState::Idle));
    history.writer.offer(same(0, 1_000, 1, RunState::Idle));
    let health = history.writer.close();
    assert_eq!(health.state, HistoryState::Writing);
    let connection = rusqlite::Connection::open(&path).unwrap();
    let rows: i64 =
        connection.query_row("SELECT count(*) FROM quarter", [], |row| row.get(0)).unwrap();
    assert_eq!(rows, 2);
    assert_sound(&path);
    let refused =
        history.reader.columns(None, at(-years_ms * 2), at(years_ms), at(years_ms), QUARTER_US);
    assert!(refused.is_ok(), "one channel over eighty years is allowed: {refused:?}");
}

#[test]
fn a_question_that_would_exhaust_memory_is_refused_in_one_line() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 500).unwrap();
    history.writer.offer(same(0, 1_000, 500, RunState::Idle));
    history.writer.close();
    let year_ms = 365 * 86_400_000;
    let error =
        history.reader.columns(None, at(0), at(year_ms), at(year_ms), QUARTER_US).unwrap_err();
    assert!(!error.to_string().contains('\n'));
    assert!(error.to_string().contains("shorter range"), "{error}");
    let day =
        history.reader.columns(None, at(0), at(86_400_000), at(86_400_000), QUARTER_US).unwrap();
    assert_eq!(day.len(), 500);
}

/// Bytes per row of a table: all its pages, interior ones included, by SQLite's own account.
fn bytes_per_row(path: &Path, table: &str) -> f64 {
    let connection = rusqlite::Connection::open(path).unwrap();
    let number = |sql: &str| connection.query_row(sql, [], |row| row.get::<_, i64>(0)).unwrap();
    let bytes = number(&format!("SELECT sum(pgsize) FROM dbstat WHERE name = '{table}'"));
    let rows = number(&format!("SELECT count(*) FROM {table}"));
    println!("{table}: {rows} rows, {:.1} bytes each", bytes as f64 / rows as f64);
    bytes as f64 / rows as f64
}

#[test]
fn a_row_takes_the_space_that_is_stated() {
    const CHANNELS: usize = 90;
    const DWELL_MS: i64 = 2_000;
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    // How many reports go into a commit does not matter: one commit for each gave 47.3 and 37.5.
    let history = open(&path, CHANNELS).unwrap();
    // Two days, invented: every channel changes its state about 40 times an hour, as with 20
    // transmissions, and now and then a dwell is unknown. Runs of all channels end in the order of
    // time, so that rows come in between those of other channels, as in a node at work.
    let seed = 20_260_504;
    println!("seed {seed}");
    let mut dice = Dice(Xoshiro256PlusPlus::seed_from_u64(seed));
    let mut states = [RunState::Idle; CHANNELS];
    for dwell in 0..2 * 86_400_000 / DWELL_MS {
        let verdicts = states.iter_mut().enumerate().map(|(channel, state)| {
            if dice.below(3_600_000 / DWELL_MS) < 40 {
                let occupied = *state == RunState::Occupied;
                *state = if occupied { RunState::Idle } else { RunState::Occupied };
            }
            let state = if dice.below(20_000) == 0 { RunState::Unknown } else { *state };
            verdict(channel, state, -80.0 - dice.below(1_000) as f64 / 77.0)
        });
        history.writer.offer(report(dwell * DWELL_MS, DWELL_MS, verdicts.collect()));
    }
    let health = history.writer.close();
    assert_eq!((health.dropped_reports, health.dropped_runs), (0, 0));
    for (table, stated) in [("run", RUN_ROW_BYTES), ("quarter", QUARTER_ROW_BYTES)] {
        let measured = bytes_per_row(&path, table);
        let share = measured / stated;
        assert!((0.75..1.25).contains(&share), "{table}: {measured:.1}, stated {stated}");
    }
}
