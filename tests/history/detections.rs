//! What the record knows of the last detection on a frequency.

use fallowband::history::RunState;

use crate::support::*;

#[test]
fn the_last_detection_on_a_frequency_is_found_whatever_the_channel_was_called() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("history.sqlite3");
    let history = open(&path, 2).unwrap();
    history.writer.offer(same(0, 1_000, 2, RunState::Occupied));
    history.writer.offer(same(1_000, 1_000, 2, RunState::Idle));
    history.writer.offer(report(2_000, 500, vec![verdict(1, RunState::Occupied, -90.0)]));
    history.writer.offer(report(2_500, 500, vec![verdict(1, RunState::Unknown, -90.0)]));
    history.writer.close();
    let [first, second] = plan(2).channels.try_into().unwrap();
    let (width_hz, apart_hz) = (first.bandwidth_hz, second.centre_hz - first.centre_hz);
    let asked = [
        (first.centre_hz, width_hz),
        (second.centre_hz + width_hz / 2.0, width_hz),
        // Between the two, touching neither, and then covering both.
        (first.centre_hz + apart_hz / 2.0, apart_hz - width_hz),
        (first.centre_hz + apart_hz / 2.0, apart_hz),
        (first.centre_hz + 1e6, width_hz),
    ];
    assert_eq!(
        history.reader.last_detections(&asked).unwrap(),
        [Some(at(1_000)), Some(at(2_500)), None, Some(at(2_500)), None]
    );
}
