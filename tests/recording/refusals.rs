//! What is refused when a recording is opened: each with exactly one clear line.

use std::fs::{self, File};

use fallowband::capture::Source;
use fallowband::capture::recording::Told;
use fallowband::detection::time::Utc;
use serde_json::{Value, json};

use super::folder::{CENTRE, Folder, NOON, NOON_S, NOTHING, meta, meta_with};

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
            "[1].core:frequency: is 434000000.0 Hz, before it 433000000.0 Hz; \
             only one centre is read",
        ),
        (
            json!([at(0, "core:datetime", json!("1 March"))]),
            "[0].core:datetime: is \"1 March\"; \
             it must be a UTC date and time like 2026-03-01T12:00:00.25Z",
        ),
        (
            json!([at(0, "core:datetime", json!("1969-12-31T23:59:59Z"))]),
            "[0].core:datetime: is 1969-12-31T23:59:59Z; it must lie from 1970-01-01 to 2100-01-01",
        ),
        (
            json!([dated, at(9, "core:datetime", noon.clone())]),
            "[1].core:datetime: is 2026-03-01T12:00:00Z, \
             but the samples before it last until 2026-03-01T12:00:00.009Z",
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
    let captures = json!([{"core:sample_start": 0, "core:frequency": 1_001_000.0,
                           "core:datetime": "2026-03-01T12:00:00Z"}]);
    let stated = Folder::new(&meta(captures), &[0, 0]);
    let silent = Folder::new(&meta(json!([{"core:sample_start": 0}])), &[0, 0]);
    let noon = Some(NOON);
    // The same told again is no contradiction, nor is rounding: 1.001 * 1e6 is not 1001000.
    assert_ne!(1.001 * 1e6, 1_001_000.0);
    let same = Told { centre_hz: Some(1.001 * 1e6), start: noon, ..NOTHING };
    assert_eq!(stated.open(same).expect("opens").centre_hz(), 1_001_000.0);
    assert_eq!(silent.open(same).expect("opens").start(), NOON);

    let c = "site.sigmf-meta: captures[0].core:";
    let centre_hz = Some(1_001_000.1);
    let expected = format!("{c}frequency: states 1001000.0 Hz, but --centre tells 1001000.1 Hz");
    assert_eq!(stated.refusal(Told { centre_hz, ..NOTHING }), expected);
    let start = Some(Utc((NOON_S + 60) * 1_000_000_000));
    let expected =
        format!("{c}datetime: states 2026-03-01T12:00:00Z, but --start tells 2026-03-01T12:01:00Z");
    assert_eq!(stated.refusal(Told { start, ..NOTHING }), expected);
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
