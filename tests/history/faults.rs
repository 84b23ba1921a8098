//! Faults of the world: power cuts, full and busy disks, files that are not ours, two nodes at
//! once.

use std::fs;
use std::io::{BufRead, BufReader};
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::time::Duration;

use fallowband::detection::time::Utc;
use fallowband::history::{
    History, HistoryError, HistoryState, Identity, Options, Reader, RunState,
};
use rusqlite::Connection;

use crate::support::*;

/// Names the file for the child that is killed; without it the child's test does nothing.
const CHILD_FILE: &str = "FALLOWBAND_TEST_HISTORY_FILE";

fn beside(path: &Path, ending: &str) -> PathBuf {
    PathBuf::from(format!("{}{ending}", path.display()))
}

/// The refusal, checked to be one line that names the file.
fn refusal(path: &Path) -> HistoryError {
    let error = open(path, 1).expect_err("must be refused");
    let line = error.to_string();
    assert!(!line.contains('\n') && line.contains(&path.display().to_string()), "{line}");
    error
}

#[test]
fn a_power_cut_at_any_byte_of_the_log_leaves_whole_commits() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 2).unwrap();
    let mut commits = vec![None];
    for n in 0..12 {
        let state = if n % 3 == 0 { RunState::Occupied } else { RunState::Idle };
        assert!(history.writer.offer(same(n * 400_000, 399_000, 2, state)));
        let until = Some(at(n * 400_000 + 399_000));
        wait_until("a commit", || history.health.now().recorded_until == until);
        commits.push(until);
    }
    // Nothing is pending, so nobody writes while the two files are copied: the disk's state at this
    // instant. The writer is never closed, like one whose power went.
    let main = fs::read(&path).unwrap();
    let log = fs::read(beside(&path, "-wal")).unwrap();
    assert!(log.len() > 12 * 4096, "all commits stand in the log: {}", log.len());
    std::mem::forget(history);

    let mut found = Vec::new();
    // A prime step, so that cuts fall at all places of a frame.
    for cut in (0..=log.len()).step_by(2_003).chain([log.len()]) {
        let copy = folder.path().join("copy.sqlite3");
        for ending in ["-wal", "-shm"] {
            fs::remove_file(beside(&copy, ending)).unwrap_or_default();
        }
        fs::write(&copy, &main).unwrap();
        fs::write(beside(&copy, "-wal"), &log[..cut]).unwrap();
        let history = open(&copy, 2).unwrap();
        let until = history.reader.recorded_until().unwrap();
        assert!(commits.contains(&until), "cut at {cut}: {until:?} was never committed");
        found.push(until);
        history.writer.close();
        drop(history.reader);
        assert_sound(&copy);
    }
    assert!(found.is_sorted(), "a longer log never holds less");
    assert_eq!(found.last(), commits.last(), "an uncut log holds all that was acknowledged");
    assert!(found.contains(&None) && found.iter().flatten().count() > 50);
}

#[test]
fn a_killed_process_loses_nothing_that_it_had_acknowledged() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let mut child = Command::new(std::env::current_exe().unwrap())
        .args(["--exact", "faults::child_that_writes_until_it_is_killed", "--ignored"])
        .arg("--nocapture")
        .env(CHILD_FILE, &path)
        .stdout(Stdio::piped())
        .spawn()
        .unwrap();
    let lines = BufReader::new(child.stdout.take().unwrap()).lines();
    let acknowledged: Vec<i64> = lines
        .filter_map(|line| line.unwrap().strip_prefix("recorded until ")?.parse().ok())
        .take(10)
        .collect();
    child.kill().unwrap();
    child.wait().unwrap();
    assert_eq!(acknowledged.len(), 10);

    // The lock went with the process.
    let history = open(&path, 2).unwrap();
    let until = history.reader.recorded_until().unwrap().unwrap();
    assert!(until >= Utc(acknowledged[9]), "{until:?} {acknowledged:?}");
    history.writer.close();
    assert_sound(&path);
}

#[test]
#[ignore = "the child of a_killed_process_loses_nothing_that_it_had_acknowledged"]
fn child_that_writes_until_it_is_killed() {
    let Some(path) = std::env::var_os(CHILD_FILE) else { return };
    let history = open(Path::new(&path), 2).unwrap();
    for n in 0.. {
        let state = if n % 2 == 0 { RunState::Occupied } else { RunState::Idle };
        assert!(history.writer.offer(same(n * 1_000, 1_000, 2, state)));
        if n % 20 == 19 {
            let until = at((n + 1) * 1_000);
            wait_until("a commit", || history.health.now().recorded_until == Some(until));
            println!("\nrecorded until {}", until.0);
        }
    }
}

#[test]
fn a_file_of_a_newer_version_is_refused_and_left_byte_for_byte() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    open(&path, 1).unwrap().writer.close();
    let newer = Connection::open(&path).unwrap();
    newer.pragma_update(None, "user_version", 99).unwrap();

    // The new version still stands in the log alone, as after a power cut.
    let copy = folder.path().join("copy.sqlite3");
    for ending in ["", "-wal"] {
        fs::copy(beside(&path, ending), beside(&copy, ending)).unwrap();
    }
    let bytes = |path: &Path| (fs::read(path).unwrap(), fs::read(beside(path, "-wal")).unwrap());
    let before = bytes(&copy);
    assert_eq!(before.0[60..64], [0, 0, 0, 1], "the header is the older one");
    assert!(matches!(refusal(&copy), HistoryError::NewerVersion { found: 99, known: 1, .. }));
    assert!(matches!(Reader::open(&copy), Err(HistoryError::NewerVersion { .. })));
    assert!(bytes(&copy) == before, "the file was changed");

    // And in the file itself.
    drop(newer);
    let before = fs::read(&path).unwrap();
    assert_eq!(before[60..64], [0, 0, 0, 99]);
    assert!(matches!(refusal(&path), HistoryError::NewerVersion { found: 99, known: 1, .. }));
    assert!(fs::read(&path).unwrap() == before, "the file was changed");
    assert!(!beside(&path, "-wal").exists() && !beside(&path, "-shm").exists());
}

#[test]
fn a_file_that_is_not_ours_is_refused_and_left_byte_for_byte() {
    let folder = tempfile::tempdir().unwrap();
    let notes = folder.path().join("notes.txt");
    fs::write(&notes, "Quern Mill, roof key at the office\n").unwrap();
    let other = folder.path().join("other.sqlite3");
    Connection::open(&other).unwrap().execute_batch("CREATE TABLE site (a)").unwrap();
    for path in [notes, other] {
        let before = fs::read(&path).unwrap();
        assert!(matches!(refusal(&path), HistoryError::NotOurs { .. }));
        assert!(matches!(Reader::open(&path), Err(HistoryError::NotOurs { .. })));
        assert!(fs::read(&path).unwrap() == before, "{} was changed", path.display());
        assert!(!beside(&path, ".lock").exists());
    }
}

#[test]
fn the_history_of_another_node_is_refused_and_left_as_it_was() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let other = Identity { node: "Tide Gate".into(), ..identity() };
    let history = History::open(&path, &other, &plan(1), quick()).unwrap();
    history.writer.offer(same(0, 1_000, 1, RunState::Idle));
    history.writer.close();
    drop(history.reader);
    let before = fs::read(&path).unwrap();
    assert!(matches!(refusal(&path), HistoryError::OtherNode { node, .. } if node == "Tide Gate"));
    assert!(fs::read(&path).unwrap() == before, "the file was changed");
}

#[test]
fn a_damaged_file_is_refused_in_one_line() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 1).unwrap();
    history.writer.close();
    drop(history.reader);
    let mut bytes = fs::read(&path).unwrap();
    bytes[100..4096].fill(0xa5);
    fs::write(&path, &bytes).unwrap();
    assert!(matches!(refusal(&path), HistoryError::Corrupt { .. }));
    assert!(fs::read(&path).unwrap() == bytes, "the file was changed");
}

/// The tests may run as root, whom permissions do not bind: a directory that cannot be written is
/// played by a path below a file, and by a directory that is not there.
#[test]
fn a_directory_that_cannot_be_written_is_refused_in_one_line() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("file");
    fs::write(&file, "").unwrap();
    for path in [
        file.join("history.sqlite3"),
        folder.path().join("not there/history.sqlite3"),
        folder.path().to_path_buf(),
    ] {
        assert!(matches!(refusal(&path), HistoryError::Inaccessible { .. }));
    }
}

#[test]
fn a_second_node_on_the_same_file_is_refused() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let first = open(&path, 1).unwrap();
    assert!(matches!(refusal(&path), HistoryError::Locked { .. }));
    first.writer.close();
    open(&path, 1).unwrap().writer.close();
}

/// `max_page_count` makes SQLite itself report a full disk (`SQLITE_FULL`), at an exact size.
#[test]
fn history_stops_at_a_full_disk_says_so_and_resumes_when_there_is_room() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let channels = 20;
    let options = Options { file_bytes_max: Some(100_000), ..quick() };
    let history = History::open(&path, &identity(), &plan(channels), options).unwrap();
    let state = |n: i64| if n % 2 == 0 { RunState::Occupied } else { RunState::Idle };
    let mut n = 0;
    while history.health.now().state == HistoryState::Writing {
        assert!(history.writer.offer(same(n * 1_000, 1_000, channels, state(n))));
        n += 1;
        assert!(n < 10_000, "the disk never fills");
        if n % 10 == 0 {
            let tries = || history.health.now().commits + history.health.now().failed_commits;
            let before = tries();
            wait_until("a try", || tries() > before);
        }
    }
    let stopped = history.health.now();
    assert!(stopped.message.as_ref().unwrap().contains("no space"), "{stopped:?}");
    // The caller notices nothing: its reports are taken as before, and what was committed is
    // served.
    for _ in 0..100 {
        assert!(history.writer.offer(same(n * 1_000, 1_000, channels, state(n))));
        n += 1;
    }
    wait_until("another failed try", || {
        history.health.now().failed_commits > stopped.failed_commits
    });
    let served = history.reader.recorded_until().unwrap();
    assert_eq!(served, history.health.now().recorded_until);

    history.writer.limit_file_bytes(None);
    wait_until("all to be written", || history.health.now().recorded_until == Some(at(n * 1_000)));
    let health = history.health.now();
    assert_eq!(health.state, HistoryState::Writing);
    assert!(health.message.unwrap().contains("written again"));
    assert_eq!((health.dropped_reports, health.dropped_runs), (0, 0));
    history.writer.close();
    let runs = runs_ms(&history.reader, "L07", 0, n * 1_000);
    assert_eq!(runs.len() as i64, n, "nothing was lost");
    assert!(runs.iter().zip(0..).all(|(run, n)| *run == (n * 1_000, (n + 1) * 1_000, state(n))));
    assert_sound(&path);
}

#[test]
fn runs_beyond_what_may_wait_are_counted_and_unknown() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    // One byte means one page: the file cannot grow at all.
    let options = Options { file_bytes_max: Some(1), waiting_runs_max: 50, ..quick() };
    let history = History::open(&path, &identity(), &plan(1), options).unwrap();
    let state = |n: i64| if n % 2 == 0 { RunState::Occupied } else { RunState::Idle };
    let count = 2_000;
    for n in 0..count {
        assert!(history.writer.offer(same(n * 1_000, 1_000, 1, state(n))));
        // Now and then a try, so that the first runs are written and later ones have to wait.
        if n % 100 == 0 {
            let tries = || history.health.now().commits + history.health.now().failed_commits;
            let before = tries();
            wait_until("a try", || tries() > before);
        }
    }
    wait_until("a bound", || history.health.now().waiting_runs == 50);
    history.writer.limit_file_bytes(None);
    wait_until("all to be written", || {
        history.health.now().recorded_until == Some(at(count * 1_000))
    });
    let health = history.writer.close();
    assert!(health.dropped_runs > 0);
    let runs = runs_ms(&history.reader, "L00", 0, count * 1_000);
    let lost_ms: i64 =
        runs.iter().filter(|run| run.2 == RunState::Unknown).map(|r| r.1 - r.0).sum();
    assert_eq!(lost_ms, health.dropped_runs as i64 * 1_000);
    for (start_ms, _, found) in runs {
        assert!(found == RunState::Unknown || found == state(start_ms / 1_000));
    }
    assert_sound(&path);
}

#[test]
fn a_reader_does_not_wait_for_a_long_write_and_a_busy_file_is_tried_again() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 1).unwrap();
    history.writer.offer(same(0, 1_000, 1, RunState::Idle));
    wait_until("a commit", || history.health.now().commits == 1);

    // Another program writes for a long time.
    let mut other = Connection::open(&path).unwrap();
    let long = other.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate).unwrap();
    long.execute_batch("CREATE TABLE ballast (a); DELETE FROM run; DELETE FROM quarter").unwrap();
    history.writer.offer(same(1_000, 1_000, 1, RunState::Occupied));
    wait_until("a failed commit", || history.health.now().failed_commits > 0);
    assert!(history.health.now().message.unwrap().contains("another program"));
    // The write still stands open, so an answer proves that nobody waited for it.
    use RunState::{Idle, Occupied, Unknown};
    let before = [(0, 1_000, Idle), (1_000, 2_000, Unknown)];
    assert_eq!(runs_ms(&history.reader, "L00", 0, 2_000), before);
    let clone = history.reader.clone();
    let answer = std::thread::spawn(move || runs_ms(&clone, "L00", 0, 2_000)).join().unwrap();
    assert_eq!(answer, before);
    long.rollback().unwrap();

    wait_until("the next try", || history.health.now().recorded_until == Some(at(2_000)));
    assert_eq!(history.health.now().state, HistoryState::Writing);
    let after = [(0, 1_000, Idle), (1_000, 2_000, Occupied)];
    assert_eq!(runs_ms(&history.reader, "L00", 0, 2_000), after);
}

#[test]
fn a_full_queue_refuses_counts_and_leaves_the_time_unknown() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let options = Options { queue_depth: 2, ..quick() };
    let history = History::open(&path, &identity(), &plan(1), options).unwrap();
    let count = 3_000;
    let taken: Vec<bool> =
        (0..count).map(|n| history.writer.offer(same(n * 10, 10, 1, RunState::Idle))).collect();
    let refused = taken.iter().filter(|taken| !**taken).count() as u64;
    assert!(refused > 0, "a queue of two took everything");
    let health = history.writer.close();
    assert_eq!(health.dropped_reports, refused);
    assert!(health.last_drop_age.is_some());
    for (start_ms, end_ms, state) in runs_ms(&history.reader, "L00", 0, count * 10) {
        for n in start_ms / 10..end_ms / 10 {
            let expected = if taken[n as usize] { RunState::Idle } else { RunState::Unknown };
            assert_eq!(state, expected, "report {n}");
        }
    }
}

/// A disk that is really full, of a file system of its own. Needs root and leave to mount, so it is
/// run by hand: `cargo nextest run --release --run-ignored only really_full`.
#[test]
#[ignore = "needs root and leave to mount a file system"]
fn history_resumes_after_a_disk_was_really_full() {
    let folder = tempfile::tempdir().unwrap();
    let run = |program: &str, arguments: &[&str]| {
        let status = Command::new(program).args(arguments).arg(folder.path()).status().unwrap();
        assert!(status.success(), "{program} {arguments:?}");
    };
    run("mount", &["-t", "tmpfs", "-o", "size=1m", "tmpfs"]);
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 20).unwrap();
    let ballast = folder.path().join("ballast");
    // As much as fits; the last write fails with "no space left".
    fs::write(&ballast, vec![0; 1 << 20]).unwrap_err();
    let state = |n: i64| if n % 2 == 0 { RunState::Occupied } else { RunState::Idle };
    let mut n = 0;
    while history.health.now().state == HistoryState::Writing {
        assert!(history.writer.offer(same(n * 1_000, 1_000, 20, state(n))));
        n += 1;
        std::thread::park_timeout(Duration::from_micros(100));
    }
    println!("{:?}", history.health.now());
    fs::remove_file(&ballast).unwrap();
    let until = Some(at(n * 1_000));
    wait_until("all to be written", || history.health.now().recorded_until == until);
    println!("{:?}", history.health.now());
    history.writer.close();
    drop(history.reader);
    assert_sound(&path);
    run("umount", &[]);
}
