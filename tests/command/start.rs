//! `run` and `demo` that cannot start: one line, the exit code, and nothing touched.

use std::fs;
use std::net::TcpListener;

use crate::support::{Folder, NODE, names_in, program};

const RUN: [&str; 3] = ["run", "--config", "node.toml"];

#[test]
fn an_address_in_use_is_named_and_the_database_is_not_begun() {
    let other = TcpListener::bind("127.0.0.1:0").expect("a free port");
    let address = other.local_addr().expect("bound").to_string();
    let folder = Folder::new(&NODE.replace("127.0.0.1:0", &address)).with_noise("ci16_le", 0.5);
    let line = folder.run(&RUN).fault(69);
    let expected = format!("node.toml: api.listen: cannot listen on {address}: Address already in");
    assert!(line.starts_with(&expected), "{line}");
    assert!(!folder.path("data").exists());
    let line = folder.run(&["demo", "--listen", &address, "--data", "data"]).fault(69);
    assert!(line.starts_with(&format!("--listen: cannot listen on {address}: ")), "{line}");
    assert!(!folder.path("data").exists());
}

#[test]
fn a_data_directory_that_cannot_be_made_is_named_with_its_key() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 0.5);
    fs::write(folder.path("data"), "mine").expect("written");
    let line = folder.run(&RUN).fault(73);
    assert!(line.starts_with("node.toml: node.data_directory: data is a file, not a fo"), "{line}");
    assert_eq!(fs::read_to_string(folder.path("data")).expect("there"), "mine");

    let folder = Folder::new(&NODE.replace("\"data\"", "\"node.toml/data\""));
    let folder = folder.with_noise("ci16_le", 0.5);
    let line = folder.run(&RUN).fault(73);
    let expected = "node.toml: node.data_directory: node.toml/data: the folder cannot be made: ";
    assert!(line.starts_with(expected), "{line}");
    let line = folder.run(&["demo", "--listen", "127.0.0.1:0", "--data", "node.toml/data"]);
    assert!(line.fault(73).starts_with("--data: node.toml/data: the folder cannot be made: "));
}

#[test]
fn a_database_of_a_newer_program_is_left_byte_for_byte() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 0.5);
    folder.start().terminate();
    let connection = rusqlite::Connection::open(folder.database()).expect("a database");
    connection.pragma_update(None, "user_version", 99).expect("written");
    connection.close().expect("closed");
    let before = fs::read(folder.database()).expect("there");
    let names = names_in(&folder.path("data"));
    let line = folder.run(&RUN).fault(73);
    assert!(line.contains("node.data_directory: history "), "{line}");
    assert!(line.contains("has version 99"), "{line}");
    assert_eq!(fs::read(folder.database()).expect("there"), before);
    assert_eq!(names_in(&folder.path("data")), names);
}

#[test]
fn a_database_of_another_node_or_another_kind_is_refused() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 0.5);
    folder.start().terminate();
    let before = fs::read(folder.database()).expect("there");
    let other = NODE.replace("saltmarsh-test", "saltmarsh-other");
    fs::write(folder.path("node.toml"), other).expect("written");
    let line = folder.run(&RUN).fault(73);
    assert!(line.contains("belongs to node \"saltmarsh-test\""), "{line}");
    assert_eq!(fs::read(folder.database()).expect("there"), before);
    fs::write(folder.database(), "a diary").expect("written");
    let line = folder.run(&RUN).fault(73);
    assert!(line.contains("is not a fallowband history"), "{line}");
    assert_eq!(fs::read_to_string(folder.database()).expect("there"), "a diary");
}

#[test]
fn a_second_daemon_on_the_same_database_is_refused_and_the_first_goes_on() {
    let folder = Folder::new(NODE).with_noise("ci16_le", 30.0);
    let first = folder.start();
    let line = folder.run(&RUN).fault(73);
    assert!(line.contains("another running node writes it"), "{line}");
    let dwells = |health: &serde_json::Value| health["detection"]["dwells"].as_u64().expect("told");
    let now = dwells(&first.get("/v1/health"));
    let health = first.wait_for("two more dwells", "/v1/health", |h| dwells(h) >= now + 2);
    assert_eq!(health["history"]["state"], "writing");
    assert_eq!(first.terminate().0.code(), Some(0));
}

#[test]
fn faults_before_the_log_begins_are_told_without_it() {
    let folder = Folder::new(NODE);
    let mut command = program();
    command.args(RUN).current_dir(folder.path("")).env("RUST_LOG", "trace");
    let line = crate::support::Outcome::of(command.output().expect("it runs")).fault(65);
    assert!(line.starts_with("node.toml: receiver.recording: "), "{line}");
}
