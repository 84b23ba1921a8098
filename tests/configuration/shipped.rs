//! The files that are shipped: each makes a plan, and the comments in them tell the truth.

use std::collections::BTreeSet;
use std::path::Path;

use fallowband::config::{Configuration, SCENES, Source};
use fallowband::scene::SceneSpec;

use super::parse;

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
    let scene = SceneSpec::lower_saltmarsh();
    let relay = scene.channels.iter().filter(|channel| channel.protected);
    assert_eq!(protected, relay.map(|channel| channel.id.as_str()).collect::<Vec<_>>());
    assert_eq!(protected.len(), 3);
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
    let source = include_str!("../../src/config/file.rs");
    let source = source.split("/// A number or text").next().expect("text");
    let example = include_str!("../../config/node.toml");
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
