//! Quantities, as written in files and on the command line: read, refused, written, read back.

use fallowband::config::quantity::*;
use fallowband::detection::plan::LevelRef;
use rand_core::{Rng, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

/// `value` times ten to `power`, rounded once: the double nearest to the decimal number.
fn scaled(value: f64, power: i32) -> f64 {
    format!("{value}e{power}").parse().expect("a number")
}

#[test]
fn quantities_are_read_to_the_nearest_double() {
    for (text, value) in [
        ("25kHz", 25_000.0),
        ("448.1MHz", 448_100_000.0),
        ("448.1 MHz", 448_100_000.0),
        ("2.4GHz", 2_400_000_000.0),
        ("0Hz", 0.0),
        ("-1125Hz", -1125.0),
        ("+7.5e1kHz", 75_000.0),
    ] {
        assert_eq!(parse_frequency(text), Ok(value), "{text}");
    }
    assert_eq!(parse_sample_rate("2.4MS/s"), Ok(2_400_000.0));
    assert_eq!(parse_sample_rate("24kS/s"), Ok(24_000.0));
    assert_eq!(parse_sample_rate("3000 S/s"), Ok(3000.0));
    assert_eq!(parse_sample_rate("2.4MHz"), Ok(2_400_000.0));
    for (text, value) in
        [("250us", 250e-6), ("200ms", 0.2), ("1.28 s", 1.28), ("5min", 300.0), ("2h", 7200.0)]
    {
        assert_eq!(parse_duration(text), Ok(value), "{text}");
    }
    assert_eq!(parse_duration("1d"), Ok(86_400.0));
    assert_eq!(parse_level("-96dBm"), Ok((-96.0, LevelRef::Dbm)));
    assert_eq!(parse_level("-92.5 dBFS"), Ok((-92.5, LevelRef::Dbfs)));
    for (text, value) in [("75%", 0.75), ("75 %", 0.75), ("0.75", 0.75), ("1e-4", 1e-4)] {
        assert_eq!(parse_share(text), Ok(value), "{text}");
    }
}

#[test]
fn what_is_not_a_quantity_is_refused() {
    for text in [
        "",
        " ",
        "25",
        "kHz",
        "25khz",
        "25KHz",
        "25  kHz",
        " 25kHz",
        "25kHz ",
        "25 kHz x",
        ".5Hz",
        "5.Hz",
        "1e",
        "1eHz",
        "1e+Hz",
        "nanHz",
        "infHz",
        "1e999Hz",
        "1e99999999999Hz",
        "--1Hz",
        "1,5Hz",
        "25\u{a0}kHz",
        "2.4MS/s",
        "25µHz",
    ] {
        assert!(parse_frequency(text).is_err(), "{text:?}");
    }
    for text in ["200", "200 m", "200dB", "1 day"] {
        assert!(parse_duration(text).is_err(), "{text:?}");
    }
    for text in ["-92", "-92dB", "-92dbm", "75 "] {
        assert!(parse_level(text).is_err(), "{text:?}");
    }
    for text in ["75 ", "75%%", "0.75 ", "75 per cent"] {
        assert!(parse_share(text).is_err(), "{text:?}");
    }
}

#[test]
fn an_error_names_quantity_given_units_and_range() {
    assert_eq!(
        parse_frequency("25").unwrap_err().to_string(),
        "\"25\" is not a frequency: expected a number and Hz, kHz, MHz or GHz"
    );
    assert_eq!(
        Quantity::Duration.parse_in("5 parsecs", 1e-3..=60.0).unwrap_err().to_string(),
        "\"5 parsecs\" is not a duration: expected a number and us, ms, s, min, h or d \
         (1 ms to 60 s)"
    );
    assert_eq!(
        Quantity::Duration.parse_in("5h", 1e-3..=60.0).unwrap_err().to_string(),
        "\"5h\" is out of range (1 ms to 60 s)"
    );
    assert_eq!(
        Quantity::Share.parse_in("95%", 0.0..=0.9).unwrap_err().to_string(),
        "\"95%\" is out of range (0 % to 90 %)"
    );
    assert_eq!(
        Quantity::Level.parse_in("3dBFS", -200.0..=0.0).unwrap_err().to_string(),
        "\"3dBFS\" is out of range (-200 dBFS to 0 dBFS)"
    );
}

#[test]
fn values_are_written_in_the_largest_fitting_unit() {
    assert_eq!(format_frequency(25_000.0), "25 kHz");
    assert_eq!(format_frequency(448_100_000.0), "448.1 MHz");
    assert_eq!(format_frequency(999.9996), "1 kHz");
    assert_eq!(format_frequency(-1125.0), "-1.125 kHz");
    assert_eq!(format_frequency(-0.0), "0 Hz");
    assert_eq!(format_frequency(2.4e9), "2.4 GHz");
    assert_eq!(format_sample_rate(2.4e6), "2.4 MS/s");
    assert_eq!(format_sample_rate(2.4e9), "2400 MS/s");
    for (value, text) in [
        (0.0, "0 s"),
        (250e-6, "250 us"),
        (0.2, "200 ms"),
        (1.28, "1.28 s"),
        (60.0, "60 s"),
        (90.0, "90 s"),
        (300.0, "5 min"),
        (3600.0, "1 h"),
        (86_400.0, "24 h"),
        (259_200.0, "3 d"),
    ] {
        assert_eq!(format_duration(value), text);
    }
    assert_eq!(format_level(-92.0, LevelRef::Dbfs), "-92 dBFS");
    assert_eq!(format_level(-95.678, LevelRef::Dbm), "-95.68 dBm");
    assert_eq!(format_share(0.75), "75 %");
    assert_eq!(format_share(1e-4), "1e-4");
    assert_eq!(format_share(0.0), "0 %");
}

#[test]
fn what_is_written_is_read_back_exactly() {
    let seed = 0x5eed_c0f1;
    println!("seed {seed:#x}");
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    for _ in 0..20_000 {
        // Whole numbers of the written resolution, of every size: at most 15 digits, which is
        // what a double holds of any decimal number.
        let digits = 10u64.pow((random.next_u64() % 15) as u32 + 1);
        let count = (random.next_u64() % digits) as f64;
        let signed = if random.next_u64() % 2 == 0 { count } else { -count };
        let value_hz = scaled(signed, -3);
        let text = format_frequency(value_hz);
        assert_eq!(parse_frequency(&text), Ok(value_hz + 0.0), "{text}");
        let text = format_sample_rate(value_hz);
        assert_eq!(parse_sample_rate(&text), Ok(value_hz + 0.0), "{text}");
        let value_s = scaled(count, -9);
        let text = format_duration(value_s);
        assert_eq!(parse_duration(&text), Ok(value_s), "{text}");
        let whole_minutes_s = (random.next_u64() % 10_000_000) as f64 * 60.0;
        let text = format_duration(whole_minutes_s);
        assert_eq!(parse_duration(&text), Ok(whole_minutes_s), "{text}");
        let value_db = scaled((random.next_u64() % 40_000) as f64 - 20_000.0, -2);
        let text = format_level(value_db, LevelRef::Dbm);
        assert_eq!(parse_level(&text), Ok((value_db, LevelRef::Dbm)), "{text}");
        let share = scaled(count, -15);
        let text = format_share(share);
        assert_eq!(parse_share(&text), Ok(share), "{text}");
    }
}

#[test]
fn any_frequency_is_written_to_the_nearest_millihertz() {
    let seed = 0x5eed_c0f2;
    println!("seed {seed:#x}");
    let mut random = Xoshiro256PlusPlus::seed_from_u64(seed);
    for _ in 0..20_000 {
        let value_hz = (random.next_u64() >> 11) as f64 / (1u64 << 53) as f64 * 1e9;
        let read = parse_frequency(&format_frequency(value_hz)).expect("as written");
        // Half a millihertz, and the spacing of doubles below 1e9 (1.2e-7).
        assert!((read - value_hz).abs() <= 0.5e-3 + 2.4e-7, "{value_hz}");
    }
}
