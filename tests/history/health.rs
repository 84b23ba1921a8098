//! What the history tells of itself while it is at work.

use std::sync::OnceLock;
use std::time::Duration;

use fallowband::history::{HealthView, HistoryState, RunState};
use rusqlite::Connection;

use crate::support::*;

#[test]
fn reports_that_are_left_out_are_told_even_when_there_is_nothing_to_commit() {
    let folder = tempfile::tempdir().unwrap();
    let history = open(&folder.path().join("history.sqlite3"), 1).unwrap();
    history.writer.offer(same(0, 10_000, 1, RunState::Idle));
    wait_until("a commit", || history.health.now().commits == 1);
    assert_eq!(history.health.now().last_clip_age, None);
    // UTC has gone back: the whole report repeats time that is on the record.
    history.writer.offer(same(5_000, 1_000, 1, RunState::Occupied));
    wait_until("the count", || history.health.now().clipped_reports == 1);
    assert!(history.health.now().last_clip_age.is_some());
    assert_eq!(history.health.now().commits, 1);
}

#[test]
fn the_health_can_be_asked_while_a_fault_is_being_logged() {
    static HEALTH: OnceLock<HealthView> = OnceLock::new();
    // Stands for a log that nobody drains: what waits for it must not hold the health.
    let log = || {
        HEALTH.get().map(HealthView::now);
        std::io::sink()
    };
    tracing_subscriber::fmt().with_writer(log).init();
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 1).unwrap();
    HEALTH.set(history.health.clone()).unwrap();
    let mut other = Connection::open(&path).unwrap();
    let long = other.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate).unwrap();
    history.writer.offer(same(0, 1_000, 1, RunState::Idle));
    let (told, tells) = std::sync::mpsc::channel();
    let health = history.health.clone();
    std::thread::spawn(move || {
        wait_until("a failed commit", || health.now().state == HistoryState::Stopped);
        // Nobody listens any more if it took too long.
        let _late = told.send(());
    });
    if tells.recv_timeout(Duration::from_secs(20)).is_err() {
        // Its thread would never end, so nobody may wait for it.
        std::mem::forget(history);
        panic!("the health waits for the log");
    }
    long.rollback().unwrap();
    assert_eq!(history.writer.close().state, HistoryState::Writing);
}
