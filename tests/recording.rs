//! SigMF recordings as a user has them: real files in a folder, opened, read and refused.
//!
//! Byte layouts, keys and their meaning are those of the SigMF specification (from memory).

use std::fs::{self, File};
use std::path::{Path, PathBuf};

use fallowband::capture::recording::{Recording, Told};
use fallowband::capture::{CaptureError, Source, empty_block};
use fallowband::detection::time::Utc;
use num_complex::Complex32;
use serde_json::{Value, json};
use sha2::{Digest, Sha512};
use tempfile::TempDir;

const CENTRE: Told = Told { centre_hz: Some(433e6), start: None };
const NOTHING: Told = Told { centre_hz: None, start: None };
/// 2026-03-01T12:00:00Z [s].
const NOON_S: i64 = 1_772_366_400;

/// A folder with one recording named `site`.
struct Folder(TempDir);

impl Folder {
    fn new(meta: &Value, data: &[u8]) -> Folder {
        let folder = Folder(TempDir::new().expect("a folder"));
        fs::write(folder.path("site.sigmf-meta"), meta.to_string()).expect("written");
        fs::write(folder.path("site.sigmf-data"), data).expect("written");
        folder
    }

    fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    fn open(&self, told: Told) -> Result<Recording, CaptureError> {
        Recording::open(&self.path("site.sigmf-meta"), told)
    }

    /// The line with which opening is refused, file names without the folder.
    fn refusal(&self, told: Told) -> String {
        self.line(&self.open(told).expect_err("refused"))
    }

    fn line(&self, error: &CaptureError) -> String {
        let line = error.to_string();
        assert!(!line.contains('\n'), "{line}");
        line.replace(&format!("{}/", self.0.path().display()), "")
    }
}

/// Metadata of a `ci8` recording of 1000 samples a second.
fn meta(captures: Value) -> Value {
    json!({
        "global": {"core:datatype": "ci8", "core:sample_rate": 1000, "core:version": "1.0.0"},
        "captures": captures,
        "annotations": [],
    })
}

/// The same with one more or another key in `global`.
fn meta_with(key: &str, value: Value) -> Value {
    let mut meta = meta(json!([{"core:sample_start": 0, "core:frequency": 433e6}]));
    meta["global"][key] = value;
    meta
}

/// A block as a row: first sample's time since the start of all on both clocks [us], length, gap.
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

#[test]
fn every_readable_datatype_comes_through_with_its_scale_and_its_rails() {
    let floats: Vec<u8> =
        [0.5_f32, -0.25, 0.0, 1.0, f32::NAN, 0.0].iter().flat_map(|v| v.to_le_bytes()).collect();
    let cases: [(&str, Vec<u8>, [(f32, f32); 3], usize); 4] = [
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
    assert_eq!(recording.start(), Utc(NOON_S * 1_000_000_000));
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
        {"core:sample_start": 25, "core:global_index": 535, "core:datetime": "2026-03-01T12:00:01Z"},
        {"core:sample_start": 30, "core:global_index": 541},
    ]);
    let folder = Folder::new(&meta(captures), &[0; 2 * 40]);
    let start = Utc(NOON_S * 1_000_000_000);
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
fn wrong_values_in_global_are_refused_with_one_clear_line() {
    let readable = "readable are ci16_le, ci8, cu8, cf32_le";
    let g = "site.sigmf-meta: global.core:";
    let only_samples = "only files of nothing but samples (0) are read";
    let folder_only = "it must be the name of a file in the same folder";
    for (key, value, expected) in [
        (
            "core:datatype",
            json!("ci16_be"),
            format!("datatype: ci16_be is not supported; {readable}"),
        ),
        (
            "core:datatype",
            json!("rf32_le"),
            format!("datatype: rf32_le is not supported; {readable}"),
        ),
        (
            "core:datatype",
            json!("ci16"),
            format!("datatype: \"ci16\" is not a SigMF datatype; {readable}"),
        ),
        ("core:datatype", json!(16), "datatype: is 16; it must be a string".to_owned()),
        (
            "core:sample_rate",
            json!(0),
            "sample_rate: is 0.0; it must be a number above 0 [Hz]".to_owned(),
        ),
        (
            "core:sample_rate",
            json!(-1.5),
            "sample_rate: is -1.5; it must be a number above 0 [Hz]".to_owned(),
        ),
        (
            "core:sample_rate",
            json!("1e6"),
            "sample_rate: is \"1e6\"; it must be a number".to_owned(),
        ),
        ("core:sample_rate", json!(null), "sample_rate: is null; it must be a number".to_owned()),
        (
            "core:sample_rate",
            json!(1e-10),
            "sample_rate: is 1e-10; 1 samples would last over 1000000000 s".to_owned(),
        ),
        (
            "core:num_channels",
            json!(2),
            "num_channels: is 2; only recordings of 1 channel are read".to_owned(),
        ),
        (
            "core:num_channels",
            json!(1.5),
            "num_channels: is 1.5; it must be a whole number".to_owned(),
        ),
        ("core:trailing_bytes", json!(8), format!("trailing_bytes: is 8; {only_samples}")),
        ("core:offset", json!(-1), "offset: is -1; it must be a whole number from 0".to_owned()),
        ("core:dataset", json!("../secret"), format!("dataset: is \"../secret\"; {folder_only}")),
        ("core:dataset", json!(".."), format!("dataset: is \"..\"; {folder_only}")),
        ("core:dataset", json!(""), format!("dataset: is \"\"; {folder_only}")),
    ] {
        let folder = Folder::new(&meta_with(key, value), &[0, 0]);
        assert_eq!(folder.refusal(NOTHING), format!("{g}{expected}"));
    }
    for (key, needed) in
        [("core:datatype", "a string"), ("core:sample_rate", "a number above 0 [Hz]")]
    {
        let mut meta = meta_with(key, json!(0));
        meta["global"].as_object_mut().expect("object").remove(key);
        let expected = format!("site.sigmf-meta: global.{key}: is missing; it must be {needed}");
        assert_eq!(Folder::new(&meta, &[0, 0]).refusal(NOTHING), expected);
    }
}

#[test]
fn segments_that_contradict_are_refused_with_one_clear_line() {
    let at = |start: i64, key: &str, value: Value| json!({"core:sample_start": start, key: value});
    let noon = json!("2026-03-01T12:00:00Z");
    let dated = at(0, "core:datetime", noon.clone());
    for (captures, expected) in [
        (json!([{}]), "[0].core:sample_start: is missing; it must be a whole number from 0"),
        (json!([7]), "[0]: is 7; it must be an object"),
        (
            json!([{"core:sample_start": -1}]),
            "[0].core:sample_start: is -1; it must be a whole number from 0",
        ),
        (
            json!([{"core:sample_start": 0}, {"core:sample_start": 0}]),
            "[1].core:sample_start: is 0; it must be above the previous segment's, 0",
        ),
        (
            json!([{"core:sample_start": 0}, {"core:sample_start": 50}]),
            "[1].core:sample_start: is sample 50 of the file; the data hold only 50 samples",
        ),
        (
            json!([at(0, "core:header_bytes", json!(4))]),
            "[0].core:header_bytes: is 4; only files of nothing but samples (0) are read",
        ),
        (
            json!([at(0, "core:frequency", json!(433e6)), at(9, "core:frequency", json!(434e6))]),
            "[1].core:frequency: is 434000000.0 Hz, before it 433000000.0 Hz; only one centre is read",
        ),
        (
            json!([at(0, "core:datetime", json!("1 March"))]),
            "[0].core:datetime: is \"1 March\"; it must be a UTC date and time like 2026-03-01T12:00:00.25Z",
        ),
        (
            json!([at(0, "core:datetime", json!("1969-12-31T23:59:59Z"))]),
            "[0].core:datetime: is 1969-12-31T23:59:59Z; it must lie from 1970-01-01 to 2100-01-01",
        ),
        (
            json!([dated, at(9, "core:datetime", noon.clone())]),
            "[1].core:datetime: is 2026-03-01T12:00:00Z, but the samples before it last until 2026-03-01T12:00:00.009Z",
        ),
        (
            json!([dated, at(9, "core:datetime", json!("2060-01-01T00:00:00Z"))]),
            "[1].core:sample_start: would start at 2060-01-01T00:00:00Z: over 31 years on",
        ),
        (
            json!([{"core:sample_start": 0}, at(9, "core:datetime", noon)]),
            "[1].core:datetime: states a date, captures[0] none; tell the start with --start",
        ),
        (
            json!([at(0, "core:global_index", json!(100)), at(9, "core:global_index", json!(108))]),
            "[1].core:global_index: is 108, but the samples before it reach up to 109",
        ),
        (
            json!([
                at(0, "core:global_index", json!(0)),
                at(9, "core:global_index", json!(i64::MAX))
            ]),
            "[1].core:global_index: leaves out 9223372036854775798 samples: over 31 years",
        ),
    ] {
        let folder = Folder::new(&meta(captures), &[0; 2 * 50]);
        assert_eq!(folder.refusal(CENTRE), format!("site.sigmf-meta: captures{expected}"));
    }
    let mut meta = meta(json!([{"core:sample_start": 4}]));
    meta["global"]["core:offset"] = json!(5);
    let expected =
        "site.sigmf-meta: captures[0].core:sample_start: is 4, before global.core:offset (5)";
    assert_eq!(Folder::new(&meta, &[0, 0]).refusal(CENTRE), expected);
}

#[test]
fn what_is_told_fills_what_is_not_stated_and_never_overrides() {
    let captures = json!([{"core:sample_start": 0, "core:frequency": 14_075_500.0,
                           "core:datetime": "2026-03-01T12:00:00Z"}]);
    let stated = Folder::new(&meta(captures), &[0, 0]);
    let silent = Folder::new(&meta(json!([{"core:sample_start": 0}])), &[0, 0]);
    let noon = Some(Utc(NOON_S * 1_000_000_000));
    // The same told again is no contradiction, nor is the rounding of 14.0755 * 1e6.
    let same = Told { centre_hz: Some(14.0755 * 1e6), start: noon };
    assert_eq!(stated.open(same).expect("opens").centre_hz(), 14_075_500.0);
    assert_eq!(silent.open(same).expect("opens").start(), Utc(NOON_S * 1_000_000_000));

    let c = "site.sigmf-meta: captures[0].core:";
    let centre_hz = Some(14_075_000.0);
    let expected = format!("{c}frequency: states 14075500.0 Hz, but --centre tells 14075000.0 Hz");
    assert_eq!(stated.refusal(Told { centre_hz, start: None }), expected);
    let start = Some(Utc((NOON_S + 60) * 1_000_000_000));
    let expected =
        format!("{c}datetime: states 2026-03-01T12:00:00Z, but --start tells 2026-03-01T12:01:00Z");
    assert_eq!(stated.refusal(Told { centre_hz: None, start }), expected);
    let expected = "site.sigmf-meta: states no core:frequency; tell it with --centre";
    assert_eq!(silent.refusal(NOTHING), expected);
    let start = Some(Utc(-1_000_000_000));
    let expected = "site.sigmf-meta: the told --start is 1969-12-31T23:59:59Z; \
                    it must lie from 1970-01-01 to 2100-01-01";
    assert_eq!(silent.refusal(Told { start, ..CENTRE }), expected);
}

#[test]
fn files_of_the_wrong_kind_are_refused_with_one_clear_line() {
    let good = meta(json!([{"core:sample_start": 0}]));
    let refusal = |meta: &str, data: Option<&[u8]>| {
        let folder = Folder::new(&good, data.unwrap_or_default());
        fs::write(folder.path("site.sigmf-meta"), meta).expect("written");
        if data.is_none() {
            fs::remove_file(folder.path("site.sigmf-data")).expect("removed");
        }
        folder.refusal(CENTRE)
    };
    let text = good.to_string();
    let m = "site.sigmf-meta: ";
    assert_eq!(refusal(&text, None), "site.sigmf-data: no such file");
    let empty = "site.sigmf-data: is empty; it must hold at least one sample";
    assert_eq!(refusal(&text, Some(&[])), empty);
    let cut = "site.sigmf-data: has 3 bytes, not a whole number of 2-byte samples";
    assert_eq!(refusal(&text, Some(&[1, 2, 3])), cut);
    let json = format!("{m}is not JSON: expected value at line 1 column 1");
    assert_eq!(refusal("hello", Some(&[0, 0])), json);
    let json = format!("{m}is not JSON: EOF while parsing a value at line 1 column 0");
    assert_eq!(refusal("", Some(&[0, 0])), json);
    assert_eq!(refusal("[1]", Some(&[0, 0])), format!("{m}is an array; it must be a JSON object"));
    assert_eq!(
        refusal("{}", Some(&[0, 0])),
        format!("{m}global: is missing; it must be an object")
    );
    for (key, value, expected) in [
        ("captures", json!({}), "captures: is an object; it must be an array"),
        (
            "annotations",
            json!([{"core:sample_start": "x"}]),
            "annotations[0].core:sample_start: is \"x\"; it must be a whole number",
        ),
        (
            "annotations",
            json!([{}]),
            "annotations[0].core:sample_start: is missing; it must be a whole number",
        ),
        (
            "annotations",
            json!([{"core:sample_start": 0, "core:label": 5}]),
            "annotations[0].core:label: is 5; it must be a string",
        ),
        ("global", json!(null), "global: is null; it must be an object"),
    ] {
        let mut meta = good.clone();
        meta[key] = value;
        assert_eq!(refusal(&meta.to_string(), Some(&[0, 0])), format!("{m}{expected}"));
    }

    let folder = Folder::new(&good, &[0, 0]);
    fs::remove_file(folder.path("site.sigmf-data")).expect("removed");
    fs::create_dir(folder.path("site.sigmf-data")).expect("made");
    assert_eq!(folder.refusal(CENTRE), "site.sigmf-data: is not a regular file");
    let meta_file = File::create(folder.path("site.sigmf-meta")).expect("made");
    meta_file.set_len((256 << 20) + 1).expect("sparse");
    let large = "site.sigmf-meta: has 268435457 bytes; at most 268435456 are read";
    assert_eq!(folder.refusal(CENTRE), large);
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

/// Real recordings, if they are at hand: the samples that come out, written as `ci16_le` again, must
/// have the checksum that whoever made the files stated in them (`core:sha512`).
#[test]
fn real_recordings_come_through_bit_by_bit() {
    let folder = std::env::var_os("FALLOWBAND_RECORDINGS")
        .map(PathBuf::from)
        .unwrap_or_else(|| Path::new(env!("CARGO_MANIFEST_DIR")).join("../shared/recordings"));
    let Ok(entries) = fs::read_dir(&folder) else {
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
