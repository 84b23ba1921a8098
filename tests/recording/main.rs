//! SigMF recordings as a user has them: real files in a folder, opened, read and refused.
//!
//! Byte layouts, keys and their meaning are those of the SigMF specification (from memory).

use std::fs::{self, File};
use std::path::{Path, PathBuf};

use fallowband::capture::recording::{Recording, Told};
use fallowband::capture::{Source, empty_block};
use fallowband::detection::time::Utc;
use folder::{CENTRE, Folder, NOON, NOTHING, meta, meta_with};
use num_complex::Complex32;
use serde_json::{Value, json};
use sha2::{Digest, Sha512};

mod folder;
mod refusals;

/// A block as a row: first sample's time since the start of all on both clocks (us), length, gap.
type Row = (i64, i64, usize, bool);

fn rows(source: &mut Recording, origin: Utc, samples_max: usize) -> Vec<Row> {
    let mut block = empty_block(samples_max);
    let mut rows = Vec::new();
    while source.read(&mut block, samples_max).expect("reads") {
        let utc_us = block.start.utc.nanos_since(origin) / 1000;
        let monotonic_us = block.start.monotonic_ns / 1000;
        rows.push((utc_us, monotonic_us, block.samples.len(), block.gap_before));
    }
    assert!(!source.read(&mut block, samples_max).expect("still at the end"));
    assert!(block.samples.is_empty());
    rows
}

/// A datatype, its bytes, the samples they mean, and how many of these stand at a rail.
type Case = (&'static str, Vec<u8>, [(f32, f32); 3], usize);

#[test]
fn every_readable_datatype_comes_through_with_its_scale_and_its_rails() {
    let floats: Vec<u8> =
        [0.5_f32, -0.25, 0.0, 1.0, f32::NAN, 0.0].iter().flat_map(|v| v.to_le_bytes()).collect();
    let cases: [Case; 4] = [
        (
            "ci16_le",
            [16384_i16, -8192, 0, 32767, -32768, 1].iter().flat_map(|v| v.to_le_bytes()).collect(),
            [(0.5, -0.25), (0.0, 32767.0 / 32768.0), (-1.0, 1.0 / 32768.0)],
            2,
        ),
        (
            "ci8",
            [64_i8, -32, 0, 127, -127, 1].iter().flat_map(|v| v.to_le_bytes()).collect(),
            [(0.5, -0.25), (0.0, 127.0 / 128.0), (-127.0 / 128.0, 1.0 / 128.0)],
            1,
        ),
        (
            "cu8",
            vec![192, 96, 128, 0, 255, 129],
            [(0.5, -0.25), (0.0, -1.0), (0.9921875, 0.0078125)],
            2,
        ),
        ("cf32_le", floats, [(0.5, -0.25), (0.0, 1.0), (f32::NAN, 0.0)], 1),
    ];
    for (datatype, data, expected, clipped) in cases {
        let folder = Folder::new(&meta_with("core:datatype", json!(datatype)), &data);
        let mut recording = folder.open(NOTHING).expect(datatype);
        assert_eq!(recording.samples_total(), Some(3));
        assert_eq!((recording.centre_hz(), recording.sample_rate_hz()), (433e6, 1000.0));
        let mut block = empty_block(8);
        assert!(recording.read(&mut block, 8).expect(datatype));
        let bits = |(re, im): (f32, f32)| (re.to_bits(), im.to_bits());
        let samples: Vec<_> = block.samples.iter().map(|s| bits((s.re, s.im))).collect();
        assert_eq!(samples, expected.map(bits), "{datatype}");
        assert_eq!(block.clipped, clipped, "{datatype}");
        assert!(!recording.read(&mut block, 8).expect(datatype));
    }
}

#[test]
fn clipped_samples_are_counted_for_each_block_by_itself() {
    let data = [127_i8, 0, 0, 127, 1, 1, 0, 0, -128, -128].map(|value| value as u8);
    let folder = Folder::new(&meta(json!([])), &data);
    let mut recording = folder.open(CENTRE).expect("opens");
    let mut block = empty_block(2);
    let mut clipped = Vec::new();
    while recording.read(&mut block, 2).expect("reads") {
        clipped.push(block.clipped);
    }
    assert_eq!(clipped, [2, 0, 1]);
}

#[test]
fn a_recording_opens_by_either_file_or_by_its_bare_name() {
    let folder = Folder::new(&meta_with("core:dataset", json!("other.bin")), &[]);
    fs::write(folder.path("other.bin"), [1, 2]).expect("written");
    for name in ["site.sigmf-meta", "site.sigmf-data", "site"] {
        let recording = Recording::open(&folder.path(name), NOTHING).expect(name);
        assert_eq!(recording.samples_total(), Some(1));
        assert_eq!(recording.describe(), "recording site.sigmf-meta");
    }
    for (name, expected) in [
        ("none", "none: no such recording; there is no file of this name with .sigmf-meta added"),
        ("none.sigmf-meta", "none.sigmf-meta: no such file"),
        ("none.sigmf-data", "none.sigmf-meta: no such file"),
        ("site.sigmf", "site.sigmf: is a SigMF archive; unpack it (tar) and open its files"),
        (
            "all.sigmf-collection",
            "all.sigmf-collection: is a collection; open one of its recordings",
        ),
    ] {
        let error = Recording::open(&folder.path(name), NOTHING).expect_err(name);
        assert_eq!(folder.line(&error), expected);
    }
}

#[test]
fn segments_that_follow_on_are_one_stretch_and_jumps_are_gaps() {
    let captures = json!([
        {"core:sample_start": 0, "core:datetime": "2026-03-01T12:00:00Z", "core:frequency": 433e6},
        // Half a sample late exactly, then a microsecond and half a sample more than that.
        {"core:sample_start": 10, "core:datetime": "2026-03-01T12:00:00.0105Z"},
        {"core:sample_start": 20, "core:datetime": "2026-03-01T12:00:00.020501Z"},
        {"core:sample_start": 30},
        {"core:sample_start": 40, "core:datetime": "2026-03-01T12:01:00Z", "core:frequency": 433e6},
    ]);
    let folder = Folder::new(&meta(captures), &[0; 2 * 45]);
    let mut recording = folder.open(NOTHING).expect("opens");
    assert!(recording.dated());
    assert_eq!(recording.start(), NOON);
    assert_eq!(recording.samples_total(), Some(45));
    let start = recording.start();
    let expected = [
        (0, 0, 16, true),
        (16_000, 16_000, 4, false),
        (20_501, 20_501, 16, true),
        (36_501, 36_501, 4, false),
        (60_000_000, 60_000_000, 5, true),
    ];
    assert_eq!(rows(&mut recording, start, 16), expected);
}

#[test]
fn samples_lost_by_the_recorders_own_count_are_gaps_and_time_goes_on() {
    let captures = json!([
        {"core:sample_start": 0, "core:global_index": 500},
        {"core:sample_start": 10, "core:global_index": 510},
        {"core:sample_start": 15},
        {"core:sample_start": 20, "core:global_index": 530},
        // A date later than the count tells: the date is right, and the count starts anew from it.
        {"core:sample_start": 25, "core:global_index": 535,
         "core:datetime": "2026-03-01T12:00:01Z"},
        {"core:sample_start": 30, "core:global_index": 541},
    ]);
    let folder = Folder::new(&meta(captures), &[0; 2 * 40]);
    let start = NOON;
    let told = Told { start: Some(start), ..CENTRE };
    let mut recording = folder.open(told).expect("opens");
    assert!(recording.dated());
    let expected = [
        (0, 0, 20, true),
        (30_000, 30_000, 5, true),
        (1_000_000, 1_000_000, 5, true),
        (1_006_000, 1_006_000, 10, true),
    ];
    assert_eq!(rows(&mut recording, start, 100), expected);
}

#[test]
fn without_a_date_times_count_from_1970_and_the_recording_says_so() {
    let folder = Folder::new(&meta(json!([])), &[0; 2 * 5]);
    let mut recording = folder.open(CENTRE).expect("opens");
    assert!(!recording.dated());
    assert_eq!(rows(&mut recording, Utc(0), 3), [(0, 0, 3, true), (3_000, 3_000, 2, false)]);
}

#[test]
fn samples_before_the_first_segment_and_offsets_are_left_out() {
    let mut meta = meta(json!([{"core:sample_start": 1003, "core:frequency": 433e6}]));
    meta["global"]["core:offset"] = json!(1000);
    meta["annotations"] = json!([{"core:sample_start": 1004, "core:sample_count": 2}]);
    let folder = Folder::new(&meta, &[1, 0, 2, 0, 3, 0, 4, 0, 5, 0]);
    let mut recording = folder.open(NOTHING).expect("opens");
    assert_eq!(recording.samples_total(), Some(2));
    assert_eq!(recording.annotations()[0].sample_start, 4);
    let mut block = empty_block(9);
    assert!(recording.read(&mut block, 9).expect("reads"));
    assert_eq!(block.samples, [4.0, 5.0].map(|i| Complex32::new(i / 128.0, 0.0)));
}

#[test]
fn annotations_are_read_as_they_stand() {
    let mut meta = meta_with("core:author", json!({"ignored": true}));
    meta["annotations"] = json!([
        {"core:sample_start": -1800, "core:sample_count": 37920, "core:label": "on",
         "core:comment": "began before", "core:freq_lower_edge": -266.5,
         "core:freq_upper_edge": 216, "other:key": 7},
        {"core:sample_start": 2.0},
    ]);
    let folder = Folder::new(&meta, &[0, 0]);
    let recording = folder.open(NOTHING).expect("opens");
    let [first, second] = recording.annotations() else { panic!("two annotations") };
    assert_eq!((first.sample_start, first.sample_count), (-1800, Some(37920)));
    let edges = (first.freq_lower_edge_hz, first.freq_upper_edge_hz);
    assert_eq!(edges, (Some(-266.5), Some(216.0)));
    assert_eq!(first.label.as_deref(), Some("on"));
    assert_eq!(first.comment.as_deref(), Some("began before"));
    assert_eq!((second.sample_start, second.sample_count), (2, None));
    assert_eq!((second.label.as_ref(), second.freq_lower_edge_hz), (None, None));
}

#[test]
fn a_file_that_is_cut_while_it_is_read_is_an_error_and_not_an_end() {
    // Longer than what is held at a time, so that the reader has not seen the end before the cut.
    let folder = Folder::new(&meta(json!([])), &vec![0; 1 << 20]);
    let mut recording = folder.open(CENTRE).expect("opens");
    let mut block = empty_block(100_000);
    assert!(recording.read(&mut block, 100_000).expect("reads"));
    let data = File::options().write(true).open(folder.path("site.sigmf-data")).expect("opens");
    data.set_len(250_000).expect("cut");
    let error = recording.read(&mut block, 100_000).expect_err("cut");
    let expected = "site.sigmf-data: ends within the block at byte 200000: \
                    it was cut while it was being read";
    assert_eq!(folder.line(&error), expected);
}

#[test]
fn a_recording_of_many_gigabytes_is_read_at_any_place_in_the_memory_of_one_block() {
    const SAMPLES: u64 = 20_000_000_000;
    let mut meta = meta(json!([
        {"core:sample_start": 0, "core:frequency": 433e6, "core:datetime": "2026-03-01T12:00:00Z"},
    ]));
    meta["global"]["core:sample_rate"] = json!(2.4e6);
    let folder = Folder::new(&meta, &[]);
    let data = File::options().write(true).open(folder.path("site.sigmf-data")).expect("opens");
    data.set_len(2 * SAMPLES).expect("a sparse file");
    let mut recording = folder.open(NOTHING).expect("opens");
    assert_eq!(recording.samples_total(), Some(SAMPLES));
    let mut block = empty_block(50_000);
    let buffer = block.samples.as_ptr();
    for index in 0..200 {
        assert!(recording.read(&mut block, 50_000).expect("reads"));
        assert_eq!((block.samples.len(), block.gap_before), (50_000, index == 0));
        assert_eq!(block.start.monotonic_ns, (index as f64 * 50_000.0 / 2.4e-3).round() as i64);
    }
    assert_eq!((block.samples.as_ptr(), block.samples.capacity()), (buffer, 50_000));

    // The same with a segment near the end: reached at once, its time right to the nanosecond.
    meta["captures"] = json!([
        {"core:sample_start": SAMPLES - 70_000, "core:frequency": 433e6},
    ]);
    fs::write(folder.path("site.sigmf-meta"), meta.to_string()).expect("written");
    let mut recording = folder.open(NOTHING).expect("opens");
    let expected = [(0, 0, 50_000, true), (20_833, 20_833, 20_000, false)];
    assert_eq!(rows(&mut recording, Utc(0), 50_000), expected);
}

/// Real recordings, if they are at hand: the samples that come out, written as `ci16_le` again,
/// must have the checksum that whoever made the files stated in them (`core:sha512`).
#[test]
fn real_recordings_come_through_bit_by_bit() {
    let folder = std::env::var_os("FALLOWBAND_RECORDINGS")
        .map(PathBuf::from)
        .unwrap_or_else(|| Path::new(env!("CARGO_MANIFEST_DIR")).join("../shared/recordings"));
    let Ok(entries) = fs::read_dir(&folder) else {
        let required = std::env::var_os("FALLOWBAND_REQUIRE_RECORDINGS").is_some_and(|v| v == "1");
        assert!(!required, "{}: the recordings are required and not there", folder.display());
        println!("SKIPPED: no recordings in {}; set FALLOWBAND_RECORDINGS", folder.display());
        return;
    };
    let mut count = 0;
    for entry in entries {
        let path = entry.expect("listed").path();
        if path.extension().is_some_and(|extension| extension == "sigmf-meta") {
            check_real_recording(&path);
            count += 1;
        }
    }
    assert!(count > 0, "no .sigmf-meta in {}", folder.display());
    println!("{count} recordings checked");
}

fn check_real_recording(path: &Path) {
    let text = fs::read_to_string(path).expect("read");
    let meta: Value = serde_json::from_str(&text).expect("JSON");
    let data_bytes = fs::metadata(path.with_extension("sigmf-data")).expect("data").len();
    assert_eq!(meta["global"]["core:datatype"], "ci16_le");

    let stated = meta["captures"][0]["core:frequency"].as_f64();
    let told = if stated.is_some() { NOTHING } else { CENTRE };
    let mut recording = Recording::open(path, told).expect("opens");
    assert_eq!(recording.centre_hz(), stated.unwrap_or(433e6));
    assert!(!recording.dated());
    assert_eq!(recording.samples_total(), Some(data_bytes / 4));
    // Counted in the text, not by the parser under test: one sample_start for each.
    let annotations = text.matches("\"core:sample_count\"").count();
    assert_eq!(recording.annotations().len(), annotations);

    let mut checksum = Sha512::new();
    let mut block = empty_block(1_000);
    let mut samples = 0;
    while recording.read(&mut block, 1_000).expect("reads") {
        assert_eq!(block.gap_before, samples == 0);
        for component in block.samples.iter().flat_map(|sample| [sample.re, sample.im]) {
            checksum.update(((component * 32768.0) as i16).to_le_bytes());
        }
        samples += block.samples.len() as u64;
    }
    assert_eq!(samples, data_bytes / 4);
    let hex: String = checksum.finalize().iter().map(|byte| format!("{byte:02x}")).collect();
    assert_eq!(meta["global"]["core:sha512"].as_str(), Some(hex.as_str()), "{}", path.display());
}
