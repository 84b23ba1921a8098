//! The exact line for each bad value, each in a file that is good but for it.

use super::{SMALL, assert_refused, extended, raster, replaced, with};

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
fn an_error_is_one_line_and_finds_its_band_whatever_the_keys_are() {
    assert_refused(
        &extended("[[bands]]\n\"pf\\na\" = 1"),
        "bands[1].pf\\na (line 16, column 1): unknown key `pf a`, expected one of `id`, `pfa`, \
         `pd`, `protection_level`, `dwell`, `slice`, `check_time`, `hold_off`, `max_age`, \
         `raster`, `channels`",
    );
    assert_refused(
        &replaced("Quern Mill", "Quern\\nMill"),
        "node.site: \"Quern\\nMill\" is not a site's name (1 to 80 characters, no space at either \
         end, one line)",
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
fn a_bands_value_out_of_range_is_refused_with_the_range() {
    let band = |line: &str| with("[[bands]]", line);
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
}

#[test]
fn any_other_value_out_of_range_is_refused_with_the_range() {
    let receiver = |line: &str| with("[receiver]", line);
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
fn a_word_that_does_not_exist_or_does_not_fit_is_refused() {
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
}

#[test]
fn a_name_that_cannot_stand_is_refused() {
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
