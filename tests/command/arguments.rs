//! Arguments: help, version, and everything that can be wrong with them.

use std::process::Stdio;

use crate::support::{Folder, NODE, Outcome, program};

fn run(arguments: &[&str]) -> Outcome {
    Outcome::of(program().args(arguments).output().expect("it runs"))
}

#[test]
fn help_goes_to_standard_output_and_lists_commands_and_exit_codes() {
    let text = run(&["--help"]).good();
    for word in ["run ", "demo ", "replay ", "check ", "design ", "prove "] {
        assert!(text.lines().any(|line| line.trim_start().starts_with(word)), "{word}: {text}");
    }
    for code in ["0 done", "1 a proof", "2 a proof", "64 ", "65 ", "69 ", "70 ", "73 ", "78"] {
        assert!(text.replace('\n', " ").contains(code), "{code}: {text}");
    }
    assert!(text.contains("A measurement is no licence to transmit"));
    for command in ["run", "demo", "replay", "check", "design", "prove"] {
        let text = run(&[command, "--help"]).good();
        assert!(text.contains(&format!("Usage: fallowband {command}")), "{text}");
    }
}

#[test]
fn the_version_is_that_of_the_package() {
    let expected = format!("fallowband {}\n", env!("CARGO_PKG_VERSION"));
    assert_eq!(run(&["--version"]).good(), expected);
}

#[test]
fn wrong_arguments_are_told_in_one_line_that_names_them() {
    let cases: [(&[&str], &[&str]); 12] = [
        (&[], &["no command given", "run, demo, replay, check, design, prove"]),
        (&["chek"], &["'chek'", "'check'"]),
        (&["check"], &["--config <FILE>"]),
        (&["run", "node.toml"], &["'node.toml'"]),
        (&["replay", "--config", "node.toml"], &["<RECORDING>"]),
        (&["replay", "a", "--config", "n.toml", "--bogus"], &["'--bogus'"]),
        (
            &["replay", "a", "--config", "n.toml", "--centre", "435.1"],
            &["'--centre <FREQUENCY>'", "\"435.1\"", "MHz"],
        ),
        (
            &["replay", "a", "--config", "n.toml", "--start", "yesterday"],
            &["'--start <MOMENT>'", "\"yesterday\"", "2026-05-04T06:30:00Z"],
        ),
        (&["demo", "--seed", "-1"], &["'-1'"]),
        (&["demo", "--seed", "x\ny"], &["'--seed <SEED>'"]),
        (&["demo", "--listen", "localhost"], &["'localhost'", "'--listen <ADDRESS>'"]),
        (&["demo", "--listen", "0.0.0.0:0"], &["--listen", "0.0.0.0:0", "127.0.0.1:0"]),
    ];
    for (arguments, expected) in cases {
        let line = run(arguments).fault(64);
        for word in expected {
            assert!(line.contains(word), "{arguments:?}: {word} is not in: {line}");
        }
    }
}

#[test]
fn a_configuration_that_is_wrong_is_told_by_file_key_and_value() {
    let cases = [
        ("commit_interval", "commit_intervall", "history.commit_intervall (line 20, column 1)"),
        ("\"4kHz\"", "\"4\"", "bands[0].raster.spacing: \"4\" is not a frequency"),
        ("count = 8", "count = 80", "bands[0].raster.count: 80 channels do not fit"),
        ("448.086MHz", "440MHz", "bands[0].raster.first_centre: 440 MHz puts the first channel"),
        ("448.1MHz", "449MHz", "receiver.centre: 449 MHz does not agree with the source"),
        ("127.0.0.1:0", "0.0.0.0:0", "api.listen: \"0.0.0.0:0\" would answer beyond"),
        ("[node]", "[node", "line 2, column 6"),
        (
            "source = \"recording\"\nrecording = \"site.sigmf-meta\"\n",
            "",
            "receiver.source: missing",
        ),
    ];
    for (old, new, expected) in cases {
        let folder = Folder::new(&NODE.replacen(old, new, 1)).with_noise("ci16_le", 0.5);
        let line = folder.run(&["run", "--config", "node.toml"]).fault(78);
        assert!(line.starts_with(&format!("node.toml: {expected}")), "{line}");
        assert!(!folder.path("data").exists(), "{new}: nothing was begun");
    }
    let outside = format!(
        "{NODE}\n[[bands.channels]]\nid = \"X\"\ncentre = \"448.15MHz\"\nbandwidth = \"3kHz\"\n"
    );
    let outside = outside.replace("[history]\ncommit_interval = \"1s\"\n", "");
    let outside = outside.replace("[api]\nlisten = \"127.0.0.1:0\"\n", "");
    let folder = Folder::new(&outside).with_noise("ci16_le", 0.5);
    for arguments in [["check", "--config", "node.toml"], ["run", "--config", "node.toml"]] {
        let line = folder.run(&arguments).fault(78);
        let expected = "node.toml: bands[0].channels[0]: channel X (448.1485 MHz to 448.1515 MHz) \
                        is not wholly inside the usable bandwidth";
        assert!(line.starts_with(expected), "{line}");
    }
}

#[test]
fn a_configuration_that_is_not_there_is_a_wrong_configuration() {
    let folder = Folder::new(NODE);
    for arguments in [
        &["check", "--config", "none.toml"][..],
        &["run", "--config", "none.toml"],
        &["replay", "site", "--config", "none.toml"],
    ] {
        let line = folder.run(arguments).fault(78);
        assert!(line.starts_with("none.toml: cannot be read: No such file"), "{line}");
    }
}

#[test]
fn a_full_disk_behind_standard_output_is_a_fault_and_a_closed_one_is_none() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 0.5);
    for arguments in [
        &["--help"][..],
        &["check", "--config", "node.toml"],
        &["replay", "site", "--config", "node.toml"],
        &["replay", "site", "--config", "node.toml", "--verdicts", "-"],
    ] {
        // Linux: every write to /dev/full fails as if the disk were full.
        let full = std::fs::File::options().write(true).open("/dev/full").expect("Linux");
        let mut command = program();
        command.args(arguments).current_dir(folder.path("")).stdout(full);
        let line = Outcome::of(command.output().expect("it runs")).fault(73);
        assert!(line.starts_with("standard output: cannot be written: No space left"), "{line}");

        let (reader, writer) = std::io::pipe().expect("a pipe");
        drop(reader);
        let mut command = program();
        command.args(arguments).current_dir(folder.path("")).stdout(writer);
        assert_eq!(Outcome::of(command.output().expect("it runs")).good(), "");
    }
}

#[test]
fn with_standard_error_gone_the_exit_code_still_tells() {
    let (reader, writer) = std::io::pipe().expect("a pipe");
    drop(reader);
    let status = program().arg("chek").stdout(Stdio::null()).stderr(writer).status();
    assert_eq!(status.expect("it runs").code(), Some(64));
}
