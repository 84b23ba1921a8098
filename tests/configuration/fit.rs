//! What is wrong or silly of values together: names used twice, channels that do not fit the block
//! or each other, times and transforms that do not suit, rules under which little is on offer.

use fallowband::config::idle_offer_share;

use super::{SMALL, assert_refused, extended, parse, plan, raster, replaced, with};

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
         to the edge of its block: 90 % of the rate is usual",
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
