//! The configuration from outside: shipped files, good files, and the exact line for each bad one.

use std::collections::BTreeSet;
use std::path::Path;

use fallowband::config::{Configuration, SCENES, Source, idle_offer_share};
use fallowband::detection::plan::{FloorEstimator, FloorTrend, LevelRef, Plan};
use fallowband::detection::window::Window;

/// The smallest file that makes a plan: one band with one channel, all else default.
const SMALL: &str = r#"
[node]
site = "Quern Mill"
name = "quern-mill-1"
[receiver]
centre = "448.1MHz"
sample_rate = "2.4MS/s"
[[bands]]
id = "saltmarsh"
protection_level = "-92dBFS"
[[bands.channels]]
id = "beacon"
centre = "448MHz"
bandwidth = "16kHz"
"#;

const RASTER: &str = r#"[bands.raster]
first_centre = "447.1MHz"
spacing = "25kHz"
count = 30
bandwidth = "16kHz"
id_prefix = "S"
"#;

fn parse(text: &str) -> Result<Configuration, String> {
    Configuration::parse(text, "file.toml", Path::new("/site")).map_err(|error| error.to_string())
}

fn plan(text: &str) -> Result<Plan, String> {
    parse(text)?.plan(None, None).map_err(|error| error.to_string())
}

/// The one line that a file earns, at whichever step.
#[track_caller]
fn assert_refused(text: &str, line: &str) {
    let error = plan(text).expect_err("this file must be refused");
    assert_eq!(error, format!("file.toml: {line}"));
    assert!(!error.contains('\n'), "one line only");
}

/// [`SMALL`] with a line put below a table's header.
fn with(header: &str, line: &str) -> String {
    let header_line = format!("{header}\n");
    assert_eq!(SMALL.matches(&header_line).count(), 1);
    SMALL.replace(&header_line, &format!("{header_line}{line}\n"))
}

/// [`SMALL`] with one piece of text for another.
fn replaced(from: &str, to: &str) -> String {
    assert_eq!(SMALL.matches(from).count(), 1, "{from}");
    SMALL.replace(from, to)
}

/// [`SMALL`] with lines at its end.
fn extended(lines: &str) -> String {
    format!("{SMALL}{lines}\n")
}

/// [`SMALL`] with the raster instead of the channel, one piece of it for another.
fn raster(from: &str, to: &str) -> String {
    assert_eq!(RASTER.matches(from).count(), 1, "{from}");
    let head = SMALL.split("[[bands.channels]]").next().expect("split gives one piece at least");
    format!("{head}{}", RASTER.replace(from, to))
}

#[test]
fn a_small_file_gets_the_documented_defaults() {
    let configuration = parse(SMALL).expect("a good file");
    assert_eq!(configuration.node.site, "Quern Mill");
    assert_eq!(configuration.node.name, "quern-mill-1");
    assert_eq!(configuration.data_directory, Path::new("/site/data"));
    assert_eq!(configuration.source, None);
    assert_eq!(configuration.commit_interval.as_secs(), 10);
    assert_eq!(configuration.listen.to_string(), "127.0.0.1:8470");
    assert_eq!(configuration.text, SMALL);
    let plan = configuration.plan(None, None).expect("a good plan");
    assert_eq!(plan.receiver.centre_hz, 448_100_000.0);
    assert_eq!(plan.receiver.sample_rate_hz, 2_400_000.0);
    assert_eq!(plan.receiver.usable_bandwidth_hz, 2_160_000.0);
    assert_eq!(plan.receiver.dc_guard_hz, 0.0);
    assert_eq!(plan.spectrum.window, Window::BlackmanHarris);
    assert_eq!(plan.spectrum.overlap, 0.75);
    assert_eq!(plan.spectrum.transform_length, 2048);
    assert_eq!(plan.floor.estimator, FloorEstimator::Excision { rejection: 0.01 });
    assert_eq!(plan.floor.trend, FloorTrend::Slope);
    assert_eq!(plan.level_ref, LevelRef::Dbfs);
    let band = &plan.bands[0];
    assert_eq!((band.pfa, band.pd, band.protection_level_db), (1e-4, 0.9, -92.0));
    assert_eq!((band.dwell_s, band.slice_s), (0.2, 0.01));
    let policy = &band.policy;
    assert_eq!(policy.check_time_ns, 2_000_000_000);
    assert_eq!(policy.hold_off_ns, 60_000_000_000);
    assert_eq!(policy.max_age_ns, 1_000_000_000);
    assert!(!plan.channels[0].protected);
    assert_eq!(configuration.warnings(&plan), Vec::<String>::new());
}

#[test]
fn defaults_follow_what_they_depend_on() {
    let made = plan(&with("[[bands]]", "dwell = \"5ms\"")).expect("a good plan");
    assert_eq!(made.bands[0].slice_s, 0.005);
    let made = plan(&with("[[bands]]", "dwell = \"2s\"")).expect("a good plan");
    assert_eq!(made.bands[0].policy.max_age_ns, 6_000_000_000);
    let made = plan(&extended("[spectrum]\nwindow = \"hann\"")).expect("a good plan");
    assert_eq!(made.spectrum.overlap, 0.5);
    // 12 bins in 200 kHz would take 144 samples; the least is 256.
    let made = plan(&replaced("16kHz", "200kHz")).expect("a good plan");
    assert_eq!(made.spectrum.transform_length, 256);
}

#[test]
fn every_value_can_be_given() {
    let text = r#"
        [node]
        site = "Saltmarsh Sluice Nº 3"
        name = "sluice_3.b"
        data_directory = "/var/lib/node"
        [receiver]
        source = "recording"
        recording = "week.sigmf-meta"
        centre = "0Hz"
        sample_rate = "24 kHz"
        usable_bandwidth = "20kHz"
        dc_guard = "500Hz"
        [spectrum]
        window = "hann"
        overlap = 0.625
        transform_length = 128
        [floor]
        estimator = "cell_averaging"
        trend = "curve"
        [[bands]]
        id = "low"
        pfa = "0.1%"
        pd = 0.95
        protection_level = "-60.5 dBFS"
        dwell = "40ms"
        slice = "20ms"
        check_time = "0s"
        hold_off = "250ms"
        max_age = "100ms"
        raster = { first_centre = "-9kHz", spacing = "2kHz", count = 4, bandwidth = "1.5kHz", id_prefix = "L", first_number = 8, protected = ["L09"] }
        [[bands]]
        id = "high"
        protection_level = "-50dBFS"
        channels = [
            { id = "b", centre = "5kHz", bandwidth = "2kHz", protected = true },
            { id = "a", centre = "1kHz", bandwidth = "1kHz" },
        ]
        [history]
        commit_interval = "2.5s"
        [api]
        listen = "[::1]:0"
    "#;
    let configuration = parse(text).expect("a good file");
    assert_eq!(configuration.data_directory, Path::new("/var/lib/node"));
    let path = Path::new("/site/week.sigmf-meta").to_path_buf();
    assert_eq!(configuration.source, Some(Source::Recording { path }));
    assert_eq!(configuration.commit_interval.as_millis(), 2500);
    assert_eq!(configuration.listen.to_string(), "[::1]:0");
    let plan = configuration.plan(None, None).expect("a good plan");
    assert_eq!(plan.spectrum.window, Window::Hann);
    assert_eq!(plan.spectrum.overlap, 0.625);
    assert_eq!(plan.floor.estimator, FloorEstimator::CellAveraging);
    assert_eq!(plan.floor.trend, FloorTrend::Curve);
    assert_eq!((plan.bands[0].pfa, plan.bands[0].pd), (1e-3, 0.95));
    assert_eq!(plan.bands[0].protection_level_db, -60.5);
    assert_eq!(plan.bands[0].policy.hold_off_ns, 250_000_000);
    // By band, and within a band by frequency whatever the order of the file.
    let channels: Vec<_> = plan
        .channels
        .iter()
        .map(|c| (c.id.as_str(), plan.band_of(c).id.as_str(), c.centre_hz, c.protected))
        .collect();
    let expected = [
        ("L08", "low", -9000.0, false),
        ("L09", "low", -7000.0, true),
        ("L10", "low", -5000.0, false),
        ("L11", "low", -3000.0, false),
        ("a", "high", 1000.0, false),
        ("b", "high", 5000.0, true),
    ];
    assert_eq!(channels, expected);
}

#[test]
fn the_text_is_kept_with_its_sha256() {
    // FIPS 180-4 gives the SHA-256 of no bytes and of "abc" in its published examples; a TOML comment
    // keeps the file good. The expected value here was made with sha256sum (GNU coreutils).
    let text = format!("# abc{SMALL}");
    let configuration = parse(&text).expect("a good file");
    assert_eq!(configuration.text, text);
    assert_eq!(
        configuration.sha256,
        "64ec8d33bdfcf727399e354f23068560668e0377c71e8a2304b2b146abf371b2"
    );
}

#[test]
fn what_the_source_states_goes_before_the_file_and_must_agree_with_it() {
    let configuration = parse(SMALL).expect("a good file");
    let refusal = |centre, rate| configuration.plan(centre, rate).unwrap_err().to_string();
    let made = configuration.plan(Some(448_100_000.4), Some(2_400_000.3)).expect("within 1 Hz");
    assert_eq!(made.receiver.centre_hz, 448_100_000.4);
    assert_eq!(made.receiver.sample_rate_hz, 2_400_000.3);
    assert_eq!(
        refusal(Some(448.2e6), None),
        "file.toml: receiver.centre: 448.1 MHz does not agree with the source, which states 448.2 MHz"
    );
    assert_eq!(
        refusal(None, Some(2.0e6)),
        "file.toml: receiver.sample_rate: 2.4 MS/s does not agree with the source, which states 2 MS/s"
    );
    let silent = parse(&replaced("centre = \"448.1MHz\"\nsample_rate = \"2.4MS/s\"\n", ""));
    let silent = silent.expect("a good file");
    let refusal = |centre, rate| silent.plan(centre, rate).unwrap_err().to_string();
    let stated = silent.plan(Some(448.1e6), Some(2.4e6)).expect("a good plan");
    assert_eq!(stated, plan(SMALL).expect("a good plan"));
    assert_eq!(
        refusal(None, Some(2.4e6)),
        "file.toml: receiver.centre: missing: the source does not state it, so the file must"
    );
    assert_eq!(
        refusal(Some(448.1e6), None),
        "file.toml: receiver.sample_rate: missing: the source does not state it, so the file must"
    );
    for (rate, shown) in [(0.0, "0"), (-3000.0, "-3000"), (f64::NAN, "NaN"), (f64::INFINITY, "inf")]
    {
        assert_eq!(
            refusal(Some(448.1e6), Some(rate)),
            format!(
                "file.toml: receiver.sample_rate: the source's {shown} S/s is out of range \
                 (100 S/s to 1000 MS/s)"
            )
        );
    }
}

#[test]
fn a_file_that_cannot_be_read_is_named() {
    let folder = tempfile::tempdir().expect("a folder");
    let path = folder.path().join("absent.toml");
    let error = Configuration::load(&path).expect_err("no such file").to_string();
    assert!(error.starts_with(&format!("{}: cannot be read: ", path.display())), "{error}");
    assert!(!error.contains('\n'));
    std::fs::write(&path, [0xff, 0xfe, 0x00]).expect("written");
    let error = Configuration::load(&path).expect_err("no text").to_string();
    assert!(error.starts_with(&format!("{}: cannot be read: ", path.display())), "{error}");
    std::fs::write(&path, SMALL).expect("written");
    let configuration = Configuration::load(&path).expect("a good file");
    assert_eq!(configuration.data_directory, folder.path().join("data"));
}

#[test]
fn text_that_is_no_toml_is_refused_with_line_and_column() {
    assert_refused(
        "[node]\nsite = Quern\n",
        "line 2, column 8: string values must be quoted, expected literal string",
    );
    assert_refused(
        "[node]\nsite = \"é\" x\n",
        "line 2, column 12: unexpected key or value, expected newline, `#`",
    );
    assert_refused("[node\n", "line 1, column 6: unclosed table, expected `]`");
    assert_refused("[node]\nsite = \"a\"\nsite = \"b\"\n", "line 3, column 1: duplicate key");
    assert_refused(
        "[node]\nsite = \"a\nname = \"b\"\n",
        "line 2, column 10: invalid basic string, expected `\"`",
    );
}

#[test]
fn an_unknown_key_is_named_with_its_table() {
    assert_refused(
        &with("[[bands]]", "dwel = \"1s\""),
        "bands[0].dwel (line 9, column 1): unknown key `dwel`, expected one of `id`, `pfa`, \
         `pd`, `protection_level`, `dwell`, `slice`, `check_time`, `hold_off`, `max_age`, \
         `raster`, `channels`",
    );
    assert_refused(
        &extended("[recevier]"),
        "recevier (line 15, column 2): unknown key `recevier`, expected one of `node`, \
         `receiver`, `spectrum`, `floor`, `bands`, `history`, `api`",
    );
    assert_refused(
        &extended("[spectrum]\noverlap_share = 0.5"),
        "spectrum.overlap_share (line 16, column 1): unknown key `overlap_share`, expected \
         one of `window`, `overlap`, `transform_length`",
    );
    assert_refused(
        &extended("protect = true"),
        "bands[0].channels[0].protect (line 15, column 1): unknown key `protect`, expected \
         one of `id`, `centre`, `bandwidth`, `protected`",
    );
    assert_refused(
        &with("[[bands]]", "raster = { frist_centre = \"1Hz\" }"),
        "bands[0].raster.frist_centre (line 9, column 12): unknown key `frist_centre`, \
         expected one of `first_centre`, `spacing`, `count`, `bandwidth`, `id_prefix`, \
         `first_number`, `protected`",
    );
}

#[test]
fn a_value_of_another_kind_is_named_with_its_key() {
    assert_refused(
        &with("[[bands]]", "dwell = true"),
        "bands[0].dwell (line 9, column 9): invalid type: boolean `true`, expected a number \
         or text in quotes",
    );
    assert_refused(
        &replaced("site = \"Quern Mill\"", "site = 3"),
        "node.site (line 3, column 8): invalid type: integer `3`, expected a string",
    );
    assert_refused(
        &extended("protected = \"yes\""),
        "bands[0].channels[0].protected (line 15, column 13): invalid type: string \"yes\", \
         expected a boolean",
    );
    assert_refused(
        &raster("\"S\"\n", "\"S\"\nprotected = \"S04\"\n"),
        "bands[0].raster.protected (line 17, column 13): invalid type: string \"S04\", \
         expected a list",
    );
    assert_refused(
        &raster("\"S\"\n", "\"S\"\nprotected = [4]\n"),
        "bands[0].raster.protected (line 17, column 14): invalid type: integer `4`, expected \
         a string",
    );
    assert_refused(
        &replaced("[[bands]]", "[bands]"),
        "bands (line 8, column 1): invalid type: table, expected a list",
    );
    assert_refused(
        "node = 3\n",
        "node (line 1, column 8): invalid type: integer `3`, expected a table",
    );
}

#[test]
fn what_is_missing_is_named() {
    assert_refused("", "node.site: missing: give 1 to 80 characters");
    assert_refused(
        &replaced("name = \"quern-mill-1\"\n", ""),
        "node.name: missing: give 1 to 40 letters, digits, - _ and ., a letter or digit first",
    );
    assert_refused(
        &replaced("id = \"saltmarsh\"\n", ""),
        "bands[0].id: missing: give 1 to 40 letters, digits, - _ and ., a letter or digit \
         first",
    );
    assert_refused(
        &replaced("protection_level = \"-92dBFS\"\n", ""),
        "bands[0].protection_level: missing: give -200 dBFS to 0 dBFS",
    );
    assert_refused(
        &replaced("centre = \"448MHz\"\n", ""),
        "bands[0].channels[0].centre: missing: give -300 GHz to 300 GHz",
    );
    assert_refused(
        &replaced("bandwidth = \"16kHz\"\n", ""),
        "bands[0].channels[0].bandwidth: missing: give 1 Hz to 1 GHz",
    );
    assert_refused(
        &replaced("id = \"beacon\"\n", ""),
        "bands[0].channels[0].id: missing: give 1 to 40 letters, digits, - _ and ., a letter \
         or digit first",
    );
    assert_refused(&raster("count = 30\n", ""), "bands[0].raster.count: missing: give 1 to 10000");
    assert_refused(
        &raster("id_prefix = \"S\"\n", ""),
        "bands[0].raster.id_prefix: missing: give 1 to 20 letters, digits, - _ and ., a \
         letter or digit first",
    );
    assert_refused(
        "[node]\nsite = \"a\"\nname = \"b\"\n",
        "bands: missing: give at least one [[bands]] table",
    );
    assert_refused(
        SMALL.split("[[bands.channels]]").next().unwrap(),
        "bands[0]: missing: give channels ([bands.raster] or [[bands.channels]])",
    );
}

#[test]
fn a_value_without_its_unit_or_with_another_is_refused() {
    assert_refused(
        &with("[[bands]]", "dwell = 200"),
        "bands[0].dwell: 200 is not a duration: expected a number and us, ms, s, min, h or d \
         (1 ms to 60 s)",
    );
    assert_refused(
        &with("[[bands]]", "dwell = \"200kHz\""),
        "bands[0].dwell: \"200kHz\" is not a duration: expected a number and us, ms, s, min, \
         h or d (1 ms to 60 s)",
    );
    assert_refused(
        &replaced("\"448.1MHz\"", "448.1e6"),
        "receiver.centre: 448100000.0 is not a frequency: expected a number and Hz, kHz, MHz \
         or GHz (0 Hz to 300 GHz)",
    );
    assert_refused(
        &replaced("\"448.1MHz\"", "\"448.1MS/s\""),
        "receiver.centre: \"448.1MS/s\" is not a frequency: expected a number and Hz, kHz, \
         MHz or GHz (0 Hz to 300 GHz)",
    );
    assert_refused(
        &replaced("\"2.4MS/s\"", "\"2.4Mhz\""),
        "receiver.sample_rate: \"2.4Mhz\" is not a sample rate: expected a number and S/s, \
         kS/s, MS/s, Hz, kHz, MHz or GHz (100 S/s to 1000 MS/s)",
    );
    assert_refused(
        &replaced("\"-92dBFS\"", "-92"),
        "bands[0].protection_level: -92 is not a level: expected a number and dBFS or dBm \
         (-200 dBFS to 0 dBFS)",
    );
    assert_refused(
        &replaced("\"-92dBFS\"", "\"-92dBm\""),
        "bands[0].protection_level: \"-92dBm\" needs a calibration, which this version cannot \
         use: give the level in dBFS",
    );
    assert_refused(
        &with("[[bands]]", "pfa = \"few\""),
        "bands[0].pfa: \"few\" is not a share: expected a number, or a number and % (1e-9 to \
         50 %)",
    );
    assert_refused(
        &with("[[bands]]", "pfa = nan"),
        "bands[0].pfa: NaN is not a share: expected a number, or a number and % (1e-9 to 50 \
         %)",
    );
    assert_refused(
        &extended("[spectrum]\ntransform_length = 2048.0"),
        "spectrum.transform_length: 2048.0 is not a whole number (16 to 1048576)",
    );
    assert_refused(
        &extended("[spectrum]\ntransform_length = \"2048\""),
        "spectrum.transform_length: \"2048\" is not a whole number (16 to 1048576)",
    );
}

#[test]
fn a_value_out_of_range_is_refused_with_the_range() {
    let band = |line: &str| with("[[bands]]", line);
    let receiver = |line: &str| with("[receiver]", line);
    assert_refused(
        &band("dwell = \"5h\""),
        "bands[0].dwell: \"5h\" is out of range (1 ms to 60 s)",
    );
    assert_refused(
        &band("slice = \"300ms\""),
        "bands[0].slice: \"300ms\" is out of range (100 us to 200 ms)",
    );
    assert_refused(&band("pfa = 0.6"), "bands[0].pfa: 0.6 is out of range (1e-9 to 50 %)");
    assert_refused(&band("pfa = 0"), "bands[0].pfa: 0 is out of range (1e-9 to 50 %)");
    assert_refused(&band("pfa = 1e-10"), "bands[0].pfa: 1e-10 is out of range (1e-9 to 50 %)");
    assert_refused(
        &band("pd = \"100%\""),
        "bands[0].pd: \"100%\" is out of range (50 % to 99.99 %)",
    );
    assert_refused(
        &band("check_time = \"61min\""),
        "bands[0].check_time: \"61min\" is out of range (0 s to 1 h)",
    );
    assert_refused(
        &band("hold_off = \"-1s\""),
        "bands[0].hold_off: \"-1s\" is out of range (0 s to 24 h)",
    );
    assert_refused(
        &band("hold_off = \"2d\""),
        "bands[0].hold_off: \"2d\" is out of range (0 s to 24 h)",
    );
    assert_refused(
        &band("max_age = \"200ms\""),
        "bands[0].max_age: \"200ms\" is out of range (longer than the dwell, 200 ms, up to 1 \
         h)",
    );
    assert_refused(
        &band("max_age = \"2h\""),
        "bands[0].max_age: \"2h\" is out of range (200 ms to 1 h)",
    );
    assert_refused(
        &replaced("\"-92dBFS\"", "\"1dBFS\""),
        "bands[0].protection_level: \"1dBFS\" is out of range (-200 dBFS to 0 dBFS)",
    );
    assert_refused(
        &replaced("\"448.1MHz\"", "\"-1Hz\""),
        "receiver.centre: \"-1Hz\" is out of range (0 Hz to 300 GHz)",
    );
    assert_refused(
        &replaced("\"2.4MS/s\"", "\"10 S/s\""),
        "receiver.sample_rate: \"10 S/s\" is out of range (100 S/s to 1000 MS/s)",
    );
    assert_refused(
        &receiver("usable_bandwidth = \"0Hz\""),
        "receiver.usable_bandwidth: \"0Hz\" is out of range (1 Hz to 1 GHz)",
    );
    assert_refused(
        &receiver("dc_guard = \"-5Hz\""),
        "receiver.dc_guard: \"-5Hz\" is out of range (0 Hz to 1 GHz)",
    );
    assert_refused(
        &extended("[spectrum]\noverlap = 0.95"),
        "spectrum.overlap: 0.95 is out of range (0 % to 90 %)",
    );
    assert_refused(
        &extended("[spectrum]\ntransform_length = 8"),
        "spectrum.transform_length: 8 is out of range (16 to 1048576)",
    );
    assert_refused(
        &extended("[spectrum]\ntransform_length = -8"),
        "spectrum.transform_length: -8 is out of range (16 to 1048576)",
    );
    assert_refused(
        &extended("[spectrum]\ntransform_length = 3000"),
        "spectrum.transform_length: 3000 is not a power of two (the next are 2048 and 4096)",
    );
    assert_refused(
        &extended("[floor]\nrejection = 0"),
        "floor.rejection: 0 is out of range (1e-6 to 50 %)",
    );
    assert_refused(
        &extended("[history]\ncommit_interval = \"1h\""),
        "history.commit_interval: \"1h\" is out of range (1 s to 10 min)",
    );
    assert_refused(
        &replaced("\"16kHz\"", "\"0Hz\""),
        "bands[0].channels[0].bandwidth: \"0Hz\" is out of range (1 Hz to 1 GHz)",
    );
    assert_refused(
        &raster("count = 30", "count = 0"),
        "bands[0].raster.count: 0 is out of range (1 to 10000)",
    );
    assert_refused(
        &raster("count = 30", "count = 10001"),
        "bands[0].raster.count: 10001 is out of range (1 to 10000)",
    );
    assert_refused(
        &raster("\"25kHz\"", "\"0Hz\""),
        "bands[0].raster.spacing: \"0Hz\" is out of range (1 Hz to 1 GHz)",
    );
}

#[test]
fn a_word_or_a_name_that_does_not_exist_is_refused() {
    assert_refused(
        &extended("[spectrum]\nwindow = \"kaiser\""),
        "spectrum.window: \"kaiser\" is not one of \"hann\", \"blackman_harris\"",
    );
    assert_refused(
        &extended("[floor]\nestimator = \"median\""),
        "floor.estimator: \"median\" is not one of \"excision\", \"cell_averaging\"",
    );
    assert_refused(
        &extended("[floor]\ntrend = \"cubic\""),
        "floor.trend: \"cubic\" is not one of \"flat\", \"slope\", \"curve\"",
    );
    assert_refused(
        &with("[receiver]", "source = \"antenna\""),
        "receiver.source: \"antenna\" is not one of \"scene\", \"recording\"",
    );
    assert_refused(
        &with("[receiver]", "source = \"scene\""),
        "receiver.scene: missing: give the name of a scene, such as \"lower_saltmarsh\"",
    );
    assert_refused(
        &with("[receiver]", "source = \"scene\"\nscene = \"moon\""),
        "receiver.scene: \"moon\" is not one of \"lower_saltmarsh\"",
    );
    assert_refused(
        &with("[receiver]", "source = \"recording\""),
        "receiver.recording: missing: give the path of a .sigmf-meta file",
    );
    assert_refused(
        &with("[receiver]", "source = \"recording\"\nrecording = \"a.wav\""),
        "receiver.recording: \"a.wav\" is not the path of a .sigmf-meta file",
    );
    assert_refused(
        &with("[receiver]", "recording = \"a.sigmf-meta\""),
        "receiver.recording: \"a.sigmf-meta\" goes with receiver.source = \"recording\" only",
    );
    assert_refused(
        &with("[receiver]", "source = \"recording\"\nscene = \"moon\""),
        "receiver.scene: \"moon\" goes with receiver.source = \"scene\" only",
    );
    assert_refused(
        &extended("[floor]\nestimator = \"cell_averaging\"\nrejection = 0.01"),
        "floor.rejection: goes with floor.estimator = \"excision\" only",
    );
    assert_refused(
        &replaced("\"quern-mill-1\"", "\"quern mill\""),
        "node.name: \"quern mill\" is not a name (1 to 40 letters, digits, - _ and ., a \
         letter or digit first)",
    );
    assert_refused(
        &replaced("\"quern-mill-1\"", "\"..\""),
        "node.name: \"..\" is not a name (1 to 40 letters, digits, - _ and ., a letter or \
         digit first)",
    );
    assert_refused(
        &replaced("\"Quern Mill\"", "\"\""),
        "node.site: \"\" is not a site's name (1 to 80 characters, no space at either end, \
         one line)",
    );
    assert_refused(
        &replaced("\"Quern Mill\"", &format!("\"{}\"", "x".repeat(81))),
        "node.site: \
         \"xxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx\" \
         is not a site's name (1 to 80 characters, no space at either end, one line)",
    );
    assert_refused(
        &replaced("\"beacon\"", "\"be/acon\""),
        "bands[0].channels[0].id: \"be/acon\" is not a name (1 to 40 letters, digits, - _ and \
         ., a letter or digit first)",
    );
    assert_refused(
        &with("[node]", "data_directory = \"\""),
        "node.data_directory: \"\" is not a folder",
    );
}

#[test]
fn an_address_beyond_this_machine_is_refused() {
    for text in ["0.0.0.0:8470", "192.168.1.5:80", "[::]:8470"] {
        assert_refused(
            &extended(&format!("[api]\nlisten = \"{text}\"")),
            &format!(
                "api.listen: \"{text}\" would answer beyond this machine, which needs \
                 tokens, and this version has none: give a loopback address such as \
                 \"127.0.0.1:8470\""
            ),
        );
    }
    for text in ["localhost:8470", "127.0.0.1", "127.0.0.1:99999", ""] {
        assert_refused(
            &extended(&format!("[api]\nlisten = \"{text}\"")),
            &format!(
                "api.listen: \"{text}\" is not an address and port such as \
                 \"127.0.0.1:8470\" or \"[::1]:8470\""
            ),
        );
    }
}

#[test]
fn a_name_that_is_used_twice_is_refused_with_both_places() {
    let again = "[[bands.channels]]\nid = \"beacon\"\ncentre = \"448.5MHz\"\nbandwidth = \"16kHz\"";
    assert_refused(
        &extended(again),
        "bands[0].channels[1].id: \"beacon\" is already used at bands[0].channels[0].id",
    );
    assert_refused(
        &replaced("\"beacon\"", "\"saltmarsh\""),
        "bands[0].channels[0].id: \"saltmarsh\" is already used at bands[0].id",
    );
    let band = "[[bands]]\nid = \"saltmarsh\"\nprotection_level = \"-92dBFS\"\n";
    assert_refused(
        &extended(&format!("{band}{}", again.replace("beacon", "b"))),
        "bands[1].id: \"saltmarsh\" is already used at bands[0].id",
    );
    // A channel of the second band against the raster of the first.
    let other = "[[bands]]\nid = \"b\"\nprotection_level = \"-92dBFS\"\n";
    let other = format!("{other}{}", again.replace("beacon", "S07"));
    assert_refused(
        &format!("{}{other}", raster("count = 30", "count = 30")),
        "bands[1].channels[0].id: \"S07\" is already used at bands[0].raster",
    );
}

#[test]
fn a_protected_channel_that_does_not_exist_is_refused() {
    assert_refused(
        &raster("\"S\"\n", "\"S\"\nprotected = [\"S02\", \"S31\"]\n"),
        "bands[0].raster.protected[1]: \"S31\" is not in this raster (S01 to S30)",
    );
    assert_refused(
        &raster("\"S\"\n", "\"S\"\nprotected = [\"S2\"]\n"),
        "bands[0].raster.protected[0]: \"S2\" is not in this raster (S01 to S30)",
    );
    assert_refused(
        &raster("\"S\"\n", "\"S\"\nprotected = [\"S02\", \"S02\"]\n"),
        "bands[0].raster.protected[1]: \"S02\" stands in the list twice",
    );
}

#[test]
fn what_does_not_fit_the_block_is_refused_with_the_numbers() {
    assert_refused(
        &replaced("\"448MHz\"", "\"449.175MHz\""),
        "bands[0].channels[0]: channel beacon (449.167 MHz to 449.183 MHz) is not wholly \
         inside the usable bandwidth (447.02 MHz to 449.18 MHz)",
    );
    assert_refused(
        &replaced("\"448MHz\"", "\"440MHz\""),
        "bands[0].channels[0]: channel beacon (439.992 MHz to 440.008 MHz) is not wholly \
         inside the usable bandwidth (447.02 MHz to 449.18 MHz)",
    );
    assert_refused(
        &with("[receiver]", "usable_bandwidth = \"2.5MHz\""),
        "receiver.usable_bandwidth: 2.5 MHz is more than the sample rate (2.4 MS/s)",
    );
    assert_refused(
        &with("[receiver]", "dc_guard = \"2.2MHz\""),
        "receiver.dc_guard: 2.2 MHz leaves nothing of the usable bandwidth (2.16 MHz)",
    );
    assert_refused(
        &raster("count = 30", "count = 90"),
        "bands[0].raster.count: 90 channels do not fit: from 447.1 MHz on, the usable \
         bandwidth (447.02 MHz to 449.18 MHz) holds 83",
    );
    assert_refused(
        &raster("447.1MHz", "446.9875MHz"),
        "bands[0].raster.first_centre: 446.9875 MHz puts the first channel below the usable \
         bandwidth (447.02 MHz to 449.18 MHz): the first centre can be 447.028 MHz at the \
         lowest",
    );
    assert_refused(
        &raster("447.1MHz", "460MHz"),
        "bands[0].raster.count: 30 channels do not fit: from 460 MHz on, the usable bandwidth \
         (447.02 MHz to 449.18 MHz) holds 0",
    );
    assert_refused(
        &raster("\"16kHz\"", "\"30kHz\""),
        "bands[0].raster.bandwidth: 30 kHz is wider than the spacing (25 kHz): the channels \
         would overlap",
    );
}

#[test]
fn the_raster_fits_exactly_as_often_as_the_error_says() {
    // The error above says 83 for this raster.
    assert!(plan(&raster("count = 30", "count = 83")).is_ok());
    assert!(plan(&raster("count = 30", "count = 84")).is_err());
    assert!(plan(&raster("447.1MHz", "447.028MHz")).is_ok(), "its lower edge on the band's edge");
}

#[test]
fn overlapping_channels_are_refused_and_touching_ones_are_not() {
    let second = |id: &str, centre: &str| {
        extended(&format!(
            "[[bands.channels]]\nid = \"{id}\"\ncentre = \"{centre}\"\nbandwidth = \"16kHz\""
        ))
    };
    assert!(plan(&second("b", "448.016MHz")).is_ok());
    assert!(plan(&second("b", "447.984MHz")).is_ok());
    assert_refused(
        &second("b", "448.0159MHz"),
        "bands[0].channels[1]: channel b (448.0079 MHz to 448.0239 MHz) overlaps channel \
         beacon (447.992 MHz to 448.008 MHz)",
    );
    assert_refused(
        &second("b", "447.99MHz"),
        "bands[0].channels[0]: channel beacon (447.992 MHz to 448.008 MHz) overlaps channel b \
         (447.982 MHz to 447.998 MHz)",
    );
    // Across bands too, a narrow channel inside a wide one.
    let other = "[[bands]]\nid = \"other\"\nprotection_level = \"-92dBFS\"\n[[bands.channels]]\n\
                 id = \"b\"\ncentre = \"448MHz\"\nbandwidth = \"4kHz\"";
    assert_refused(
        &extended(other),
        "bands[1].channels[0]: channel b (447.998 MHz to 448.002 MHz) overlaps channel beacon \
         (447.992 MHz to 448.008 MHz)",
    );
}

#[test]
fn transforms_that_do_not_suit_the_channels_or_the_times_are_refused() {
    let spectrum = |line: &str| extended(&format!("[spectrum]\n{line}"));
    assert_refused(
        &spectrum("transform_length = 64"),
        "spectrum.transform_length: 64 is too coarse: bins of 37.5 kHz are wider than channel \
         beacon (16 kHz), which needs 256 or more",
    );
    assert!(plan(&spectrum("transform_length = 256")).is_ok());
    assert_refused(
        &replaced("\"16kHz\"", "\"20Hz\""),
        "spectrum.transform_length: channel beacon (20 Hz) is too narrow: 12 bins in it would \
         take 2097152 samples, more than 1048576",
    );
    assert_refused(
        &spectrum("transform_length = 1048576"),
        "bands[0].dwell: 200 ms is shorter than one transform (1048576 samples, 436.906667 \
         ms): make it longer, or spectrum.transform_length (now 1048576) smaller",
    );
    // 65536 samples at 2.4 MS/s take 27.3 ms, and half of that from one transform to the next.
    assert_refused(
        &spectrum("transform_length = 65536\nwindow = \"hann\""),
        "bands[0].slice: 10 ms is shorter than the step between transforms (32768 samples, \
         13.653333 ms): make it longer, or spectrum.transform_length (now 65536) smaller",
    );
    assert!(plan(&spectrum("transform_length = 65536")).is_ok());
    let guarded = replaced("\"448MHz\"", "\"448.1MHz\"");
    let guard = |width: &str| {
        guarded.replace("[receiver]\n", &format!("[receiver]\ndc_guard = \"{width}\"\n"))
    };
    assert!(plan(&guard("13kHz")).is_ok());
    assert_refused(
        &guard("14kHz"),
        "bands[0].channels[0]: the DC guard (14 kHz around 448.1 MHz) leaves no bin of \
         channel beacon (448.092 MHz to 448.108 MHz)",
    );
}

#[test]
fn the_share_of_time_on_offer_is_that_of_no_false_alarm() {
    let band = &plan(SMALL).expect("a good plan").bands[0];
    // By hand: 310 dwells in 62 s, none of which may raise a false alarm: 0.9999^310 = 0.96947.
    assert!((idle_offer_share(band) - 0.9999f64.powi(310)).abs() < 1e-5);
    assert!(idle_offer_share(band) > 0.95, "the shipped defaults pass the bar");
}

#[test]
fn what_is_legal_but_silly_is_warned_of() {
    let warned = |text: &str| {
        let configuration = parse(text).expect("a good file");
        configuration.warnings(&configuration.plan(None, None).expect("a good plan"))
    };
    #[track_caller]
    fn assert_one(warnings: Vec<String>, line: &str) {
        assert_eq!(warnings, [line]);
    }
    assert_one(
        warned(&with("[[bands]]", "pfa = 1e-3")),
        "bands[0].pfa (saltmarsh): a truly idle channel would be on offer for 73.3 % of the \
         time only (pfa 1e-3, dwell 200 ms, hold-off 60 s, check time 2 s; 95 % is wanted): \
         pfa = 1.6e-4 or hold_off = 8.2 s would do",
    );
    assert_one(
        warned(&with("[[bands]]", "check_time = \"15min\"")),
        "bands[0].pfa (saltmarsh): a truly idle channel would be on offer for 61.8 % of the \
         time only (pfa 1e-4, dwell 200 ms, hold-off 60 s, check time 15 min; 95 % is \
         wanted): pfa = 1e-5 would do",
    );
    assert_one(
        warned(&with("[[bands]]", "max_age = \"300ms\"")),
        "bands[0].max_age (saltmarsh): 300 ms is under two dwells (400 ms): answers may lapse \
         before the next verdict is in",
    );
    assert_one(
        warned(&with("[[bands]]", "slice = \"300us\"")),
        "bands[0].slice (saltmarsh): 300 us is shorter than half a transform (426.667 us), \
         which blurs neighbouring slices: a longer slice or a smaller \
         spectrum.transform_length would tell them apart",
    );
    assert_one(
        warned(&with("[receiver]", "usable_bandwidth = \"2.4MHz\"")),
        "receiver.usable_bandwidth: 2.4 MHz is the whole sample rate; no front end is flat up \
         to the edge of its block: 90 % of the sample rate is usual",
    );
    assert_one(
        warned(&extended("protected = true")),
        "bands[0].channels (saltmarsh): every channel is protected: none will ever be offered",
    );
    assert_one(
        warned(&extended("[spectrum]\ntransform_length = 512")),
        "bands[0].channels (saltmarsh): 1 of 1 channels (the first is beacon) are narrower \
         than the 8 bins of 4.6875 kHz over which the window spreads a carrier: a larger \
         spectrum.transform_length would keep neighbours apart",
    );
    let guarded = with("[receiver]", "dc_guard = \"10kHz\"");
    assert_one(
        warned(&guarded.replace("\"448MHz\"", "\"448.1MHz\"")),
        "bands[0].channels (saltmarsh): the DC guard covers 10 kHz of channel beacon (16 \
         kHz), where energy is not measured",
    );
}

#[test]
fn the_cure_that_a_warning_names_is_one() {
    for pfa in ["0.5", "1e-2", "1e-3", "1.7e-4"] {
        let configuration =
            parse(&with("[[bands]]", &format!("pfa = {pfa}"))).expect("a good file");
        let warnings =
            configuration.warnings(&configuration.plan(None, None).expect("a good plan"));
        assert_eq!(warnings.len(), 1, "{warnings:?}");
        let cures = warnings[0].rsplit(": ").next().expect("text").trim_end_matches(" would do");
        for cure in cures.split(" or ") {
            // A cure is `key = value`, the value a quantity as people write it.
            let (key, value) = cure.split_once(" = ").expect("key and value");
            let line = format!("{key} = \"{value}\"");
            let line = if key == "pfa" { line } else { format!("pfa = {pfa}\n{line}") };
            let cured = plan(&with("[[bands]]", &line)).expect("a good plan");
            let share = idle_offer_share(&cured.bands[0]);
            assert!((0.95..0.96).contains(&share), "{cure}: {share}");
        }
    }
}

fn project() -> &'static Path {
    Path::new(env!("CARGO_MANIFEST_DIR"))
}

/// All TOML files of a folder of the project.
fn files_in(folder: &str) -> Vec<std::path::PathBuf> {
    let entries = std::fs::read_dir(project().join(folder)).expect("the folder is there");
    let paths = entries.map(|entry| entry.expect("readable").path());
    let mut paths: Vec<_> =
        paths.filter(|path| path.extension().is_some_and(|e| e == "toml")).collect();
    paths.sort();
    paths
}

#[test]
fn every_shipped_file_makes_a_plan_without_a_warning() {
    let paths = [files_in("config"), files_in("tests/recordings")].concat();
    assert_eq!(paths.len(), 8, "{paths:?}");
    for path in paths {
        let configuration = Configuration::load(&path).unwrap_or_else(|error| panic!("{error}"));
        let plan = configuration.plan(None, None).unwrap_or_else(|error| panic!("{error}"));
        assert_eq!(configuration.warnings(&plan), Vec::<String>::new(), "{}", path.display());
    }
}

#[test]
fn the_demo_is_the_lower_saltmarsh_scene_and_says_that_it_is_invented() {
    let path = project().join("config/demo.toml");
    let demo = Configuration::load(&path).expect("a good file");
    assert!(demo.text.starts_with("# INVENTED DEMO."));
    assert!(demo.node.site.contains("invented demo"));
    assert_eq!(demo.source, Some(Source::Scene { name: SCENES[0].to_owned() }));
    let plan = demo.plan(Some(448.1e6), Some(2.4e6)).expect("a good plan");
    assert_eq!(plan.channels.len(), 90);
    let offset = |index: usize| plan.channels[index].centre_hz - plan.receiver.centre_hz;
    assert_eq!(offset(0), -44.5 * 25e3);
    assert_eq!(offset(89), 44.5 * 25e3);
    let protected: Vec<&str> =
        plan.channels.iter().filter(|c| c.protected).map(|c| c.id.as_str()).collect();
    assert_eq!(protected, ["S44", "S45", "S46"]);
}

#[test]
fn the_recordings_layouts_are_centred_on_their_blocks() {
    for (name, channels) in [
        ("uhf-short-bursts", 1),
        ("uhf-one-long", 1),
        ("uhf-short-gaps", 1),
        ("uhf-three-bursts", 1),
        ("hf-slots-busy", 46),
        ("hf-slots-quiet", 46),
    ] {
        let path = project().join(format!("tests/recordings/{name}.toml"));
        let layout = Configuration::load(&path).unwrap_or_else(|error| panic!("{error}"));
        assert_eq!(layout.node.name, name);
        assert_eq!(layout.source, None, "a replay names the recording");
        let plan = layout.plan(None, None).unwrap_or_else(|error| panic!("{error}"));
        assert_eq!(plan.channels.len(), channels);
        let (first, last) = (&plan.channels[0], &plan.channels[channels - 1]);
        assert_eq!(
            (first.centre_hz + last.centre_hz) / 2.0,
            plan.receiver.centre_hz,
            "{name}: as much below the centre as above"
        );
    }
}

/// A line of the example that shows a default: a # and a key, without a space between them.
fn shown_default(line: &str) -> Option<&str> {
    let rest = line.strip_prefix('#')?;
    rest.starts_with(|c: char| c.is_ascii_lowercase()).then_some(rest)
}

#[test]
fn the_defaults_that_the_example_shows_are_those_of_the_program() {
    let path = project().join("config/node.toml");
    let text = std::fs::read_to_string(&path).expect("readable");
    let lines: Vec<&str> = text.lines().map(|line| shown_default(line).unwrap_or(line)).collect();
    let shown = text.lines().filter(|line| shown_default(line).is_some()).count();
    assert!(shown >= 18, "the example shows its defaults: {shown}");
    let silent = parse(&text).expect("a good file");
    let spoken = parse(&lines.join("\n")).unwrap_or_else(|error| panic!("{error}"));
    assert_eq!(silent.plan(None, None).unwrap(), spoken.plan(None, None).unwrap());
    assert_eq!(silent.node, spoken.node);
    assert_eq!(silent.data_directory, spoken.data_directory);
    assert_eq!(silent.source, spoken.source);
    assert_eq!(silent.commit_interval, spoken.commit_interval);
    assert_eq!(silent.listen, spoken.listen);
}

#[test]
fn the_example_has_every_key_and_the_defaults_of_the_comments_beside_them() {
    let source = include_str!("../src/config/file.rs");
    let source = source.split("/// A number or text").next().expect("text");
    let example = include_str!("../config/node.toml");
    let mut comment = String::new();
    let mut keys = BTreeSet::new();
    for line in source.lines().map(str::trim) {
        if let Some(text) = line.strip_prefix("///") {
            comment.push_str(text);
            continue;
        }
        let key = line.strip_prefix("pub(super) ").and_then(|rest| rest.split_once(':'));
        if let Some((key, kind)) = key {
            keys.insert(key);
            let is_table = [" Node,", " Receiver,", " Spectrum,", " Floor,", " History,", " Api,"]
                .contains(&kind)
                || ["bands", "raster", "channels"].contains(&key);
            let shown: Vec<&str> = example
                .lines()
                .map(|line| shown_default(line).unwrap_or(line))
                .filter(|line| line.starts_with(&format!("{key} = ")))
                .collect();
            let header = example.lines().any(|line| {
                let name = line.trim_matches(['[', ']']);
                line.starts_with('[') && name.rsplit('.').next() == Some(key)
            });
            assert_eq!(is_table, header, "{key}: a table has its header in the example");
            let described = example.contains(&format!(" {key} = "));
            assert!(is_table || !shown.is_empty() || described, "{key} is not in the example");
            assert!(comment.contains('(') && comment.contains(')'), "{key}: {comment}");
            // A default that is one value stands last, in backquotes; lists are shown by example.
            let default = comment.split("default ").last().filter(|rest| rest.starts_with('`'));
            if let Some(value) = default.and_then(|rest| rest.split('`').nth(1)) {
                let line = format!("{key} = {value}");
                assert!(value == "[]" || shown.contains(&line.as_str()), "{line} is not shown");
            }
        }
        comment.clear();
    }
    assert!(keys.len() >= 40, "the comments were read: {}", keys.len());
}
