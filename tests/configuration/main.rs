//! The configuration from outside: shipped files, good files, and the exact line for each bad one.

mod fit;
mod quantities;
mod shipped;
mod values;

use std::path::Path;

use fallowband::config::{Configuration, Source};
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

/// Thirty channels on a raster.
const RASTER: &str = r#"[bands.raster]
first_centre = "447.1MHz"
spacing = "25kHz"
count = 30
bandwidth = "16kHz"
id_prefix = "S"
"#;

/// A file in which every value is given.
const FULL: &str = r#"
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
[bands.raster]
first_centre = "-9kHz"
spacing = "2kHz"
count = 4
bandwidth = "1.5kHz"
id_prefix = "L"
first_number = 8
protected = ["L09"]
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
    let configuration = parse(FULL).expect("a good file");
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
    // The expected value was made with sha256sum (GNU coreutils).
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
        "file.toml: receiver.centre: 448.1 MHz does not agree with the source, which states \
         448.2 MHz"
    );
    assert_eq!(
        refusal(None, Some(2.0e6)),
        "file.toml: receiver.sample_rate: 2.4 MS/s does not agree with the source, which states \
         2 MS/s"
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
