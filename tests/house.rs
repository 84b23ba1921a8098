//! The walls of the house, as `src/lib.rs` states them, held to the source text itself.
//!
//! Each checker is a plain function from text to faults, and is first shown a bad sample that it
//! must find. It must never pass because it read nothing: every test counts what it looked at.

use std::fs;
use std::path::{Path, PathBuf};

/// Every room, in the order of `src/lib.rs`.
const ROOMS: [&str; 9] =
    ["answers", "capture", "command", "config", "daemon", "detection", "history", "proof", "scene"];

/// What the pure rooms must not know: clocks, threads, files, sockets, terminals, logs.
const IMPURE: [&str; 11] = [
    "tokio",
    "rusqlite",
    "axum",
    "soapysdr",
    "tracing",
    "std::fs",
    "std::net",
    "std::thread",
    "std::time",
    "Instant",
    "SystemTime",
];

/// What they must not say aloud either, but for their own tests, which print their seeds.
const SPOKEN: [&str; 2] = ["println", "eprintln"];

/// Longest source file (lines).
const LINES_MAX: usize = 450;

/// Widest line (columns).
const COLUMNS_MAX: usize = 100;

fn project() -> &'static Path {
    Path::new(env!("CARGO_MANIFEST_DIR"))
}

/// All files under a folder of the project that are its own: nothing that is built or recorded.
fn files_under(folder: &Path) -> Vec<PathBuf> {
    let mut found = Vec::new();
    for entry in fs::read_dir(folder).expect("a folder of the project") {
        let path = entry.expect("readable").path();
        let name = path.file_name().expect("named").to_string_lossy().into_owned();
        let foreign = [".git", "target", "data"].contains(&name.as_str());
        match path.is_dir() {
            _ if foreign || name.contains(".sqlite3") => {}
            true => found.extend(files_under(&path)),
            false => found.push(path),
        }
    }
    found.sort();
    found
}

/// The Rust files of a folder of the project, each with its name from the top and its text.
fn rust_files(folder: &str) -> Vec<(String, String)> {
    let paths = files_under(&project().join(folder));
    let rust = paths.into_iter().filter(|path| path.extension().is_some_and(|e| e == "rs"));
    rust.map(|path| {
        let name = path.strip_prefix(project()).expect("under the top").display().to_string();
        (name, fs::read_to_string(&path).expect("readable"))
    })
    .collect()
}

/// Asserts that there is no fault, and prints those that there are, one a line.
#[track_caller]
fn assert_none(faults: Vec<String>) {
    assert!(faults.is_empty(), "{} faults:\n{}", faults.len(), faults.join("\n"));
}

/// The text with comments and the insides of texts and characters blanked; line breaks stay.
fn code_of(source: &str) -> String {
    let chars: Vec<char> = source.chars().collect();
    let mut code = String::with_capacity(source.len());
    let mut at = 0;
    while at < chars.len() {
        let end = end_of_quiet(&chars, at);
        if end == at {
            code.push(chars[at]);
            at += 1;
        } else {
            code.extend(chars[at..end].iter().map(|c| if *c == '\n' { '\n' } else { ' ' }));
            at = end;
        }
    }
    code
}

/// Where the comment, text or character that begins at `at` ends; `at` where none begins.
fn end_of_quiet(chars: &[char], at: usize) -> usize {
    let next = |ahead: usize| chars.get(at + ahead).copied().unwrap_or('\0');
    let word_before = at > 0 && (chars[at - 1].is_alphanumeric() || chars[at - 1] == '_');
    match chars[at] {
        '/' if next(1) == '/' => {
            chars[at..].iter().position(|c| *c == '\n').map_or(chars.len(), |n| at + n)
        }
        '/' if next(1) == '*' => end_of_block_comment(chars, at),
        '"' => end_of_text(chars, at),
        'r' if !word_before && matches!(next(1), '"' | '#') => end_of_raw_text(chars, at),
        '\'' if next(1) == '\\' => {
            let closing = chars[at + 3..].iter().position(|c| *c == '\'');
            closing.map_or(chars.len(), |n| at + 4 + n)
        }
        // Without a closing quote after one character it is a lifetime.
        '\'' if next(2) == '\'' => at + 3,
        _ => at,
    }
}

fn end_of_block_comment(chars: &[char], from: usize) -> usize {
    let (mut depth, mut at) = (0, from);
    while at + 1 < chars.len() {
        match (chars[at], chars[at + 1]) {
            ('/', '*') => (depth, at) = (depth + 1, at + 2),
            ('*', '/') => (depth, at) = (depth - 1, at + 2),
            _ => at += 1,
        }
        if depth == 0 {
            return at;
        }
    }
    chars.len()
}

fn end_of_text(chars: &[char], from: usize) -> usize {
    let mut at = from + 1;
    while at < chars.len() && chars[at] != '"' {
        at += if chars[at] == '\\' { 2 } else { 1 };
    }
    (at + 1).min(chars.len())
}

fn end_of_raw_text(chars: &[char], from: usize) -> usize {
    let hashes = chars[from + 1..].iter().take_while(|c| **c == '#').count();
    let open = from + 1 + hashes;
    if chars.get(open) != Some(&'"') {
        return from;
    }
    let closing: Vec<char> = std::iter::once('"').chain(std::iter::repeat_n('#', hashes)).collect();
    let inside = &chars[open + 1..];
    let length = inside.windows(closing.len()).position(|window| window == closing);
    length.map_or(chars.len(), |length| open + 1 + length + closing.len())
}

/// Places where `word` stands in `code` by itself and not as a part of a longer name.
fn whole_words<'a>(code: &'a str, word: &'a str) -> impl Iterator<Item = usize> + 'a {
    let part = |c: char| c.is_alphanumeric() || c == '_';
    code.match_indices(word).map(|(at, _)| at).filter(move |&at| {
        !code[..at].ends_with(part) && !code[at + word.len()..].starts_with(part)
    })
}

fn line_of(text: &str, at: usize) -> usize {
    text[..at].matches('\n').count() + 1
}

/// The code before a file's own tests; none of a file that is nothing but tests.
fn code_without_tests<'a>(name: &str, code: &'a str) -> &'a str {
    let tests = code.find("#[cfg(test)]\nmod tests {").unwrap_or(code.len());
    if name.ends_with("/tests.rs") { "" } else { &code[..tests] }
}

fn impurities(name: &str, source: &str) -> Vec<String> {
    let code = code_of(source);
    let program = code_without_tests(name, &code);
    let words = IMPURE.map(|word| (word, code.as_str())).into_iter();
    let words = words.chain(SPOKEN.map(|word| (word, program)));
    let mut faults = Vec::new();
    for (word, code) in words {
        let found = whole_words(code, word);
        faults.extend(found.map(|at| format!("{name}:{}: {word}", line_of(code, at))));
    }
    // A list in braces would hide what it takes.
    let lists = code.match_indices("std::{");
    faults.extend(lists.map(|(at, _)| format!("{name}:{}: std::{{", line_of(&code, at))));
    faults
}

#[test]
fn the_pure_rooms_know_no_clock_thread_file_socket_or_log() {
    let bad = "use std::time::Duration;\nfn f() { println!(\"x\"); let t = Instant::now(); }\n";
    assert_eq!(impurities("bad.rs", bad).len(), 3);
    assert_eq!(impurities("bad.rs", "fn f() { eprintln!(); tokio::spawn(x) }").len(), 2);
    assert_eq!(impurities("bad.rs", "use std::{fmt, fs};"), ["bad.rs:1: std::{"]);
    let bad = "#[cfg(test)]\nmod tests {\nfn f() { println!(); std::fs::read(x) }\n}\n";
    assert_eq!(impurities("bad.rs", bad), ["bad.rs:3: std::fs"]);
    let good = "// println! and tokio\nfn f() -> &str { \"std::fs\" } struct Instants; /* axum */";
    assert_none(impurities("good.rs", good));

    let pure = ["src/detection", "src/proof", "src/scene"];
    let files = pure.map(rust_files).concat();
    assert!(files.len() > 20, "{} files", files.len());
    assert_none(files.iter().flat_map(|(name, source)| impurities(name, source)).collect());
}

/// Whether a file of `room` may use `other`: the rule of stairs.
fn may_use(room: &str, other: &str) -> bool {
    match room {
        "lib" | "main" | "command" | "daemon" => true,
        _ if room == other => true,
        "detection" => false,
        "answers" if other == "history" => true,
        "capture" if other == "scene" => true,
        _ => other == "detection",
    }
}

/// The room that a file under `src` belongs to: its folder, or its own name.
fn room_of(name: &str) -> &str {
    let inside = name.strip_prefix("src/").expect("a file under src");
    inside.split('/').next().expect("a first part").trim_end_matches(".rs")
}

/// Uses of a room that the rule of stairs forbids. A list of rooms in braces hides what it uses.
fn climbs(name: &str, source: &str) -> Vec<String> {
    let code = code_of(source);
    let room = room_of(name);
    let mut faults = Vec::new();
    for root in ["crate::", "super::"] {
        for (at, _) in code.match_indices(root) {
            let rest = &code[at + root.len()..];
            let line = line_of(&code, at);
            let other = ROOMS.iter().find(|other| {
                let longer = |c: char| c.is_alphanumeric() || c == '_';
                rest.strip_prefix(**other).is_some_and(|after| !after.starts_with(longer))
            });
            if let Some(other) = other.filter(|other| !may_use(room, other)) {
                faults.push(format!("{name}:{line}: {room} uses {other}"));
            }
            if root == "crate::" && rest.starts_with(['{', '*']) {
                faults.push(format!("{name}:{line}: name the rooms one by one"));
            }
        }
    }
    faults
}

#[test]
fn no_room_uses_another_but_as_the_rule_of_stairs_allows() {
    assert_eq!(climbs("src/history/mod.rs", "use crate::answers::app;").len(), 1);
    assert_eq!(climbs("src/detection/a/b.rs", "use super::super::super::scene::Scene;").len(), 1);
    assert_eq!(climbs("src/config/mod.rs", "use crate::{detection, history};").len(), 1);
    assert_eq!(climbs("src/scene/mod.rs", "fn f() { crate::capture::x() }").len(), 1);
    assert_none(climbs("src/answers/past.rs", "use crate::history::Reader; // crate::capture"));
    assert_none(climbs("src/capture/scene.rs", "use crate::scene::Scene;"));
    assert_none(climbs("src/daemon.rs", "use crate::answers::app;"));

    let files = rust_files("src");
    let mut rooms: Vec<&str> = files.iter().map(|(name, _)| room_of(name)).collect();
    rooms.dedup();
    rooms.retain(|room| !["lib", "main"].contains(room));
    rooms.sort_unstable();
    assert_eq!(rooms, ROOMS, "the rooms that there are");
    assert_none(files.iter().flat_map(|(name, source)| climbs(name, source)).collect());
}

/// Words of unfinished work; put together here, so that this file does not hold them.
fn unfinished(name: &str, text: &str) -> Vec<String> {
    let words = [
        concat!("TO", "DO"),
        concat!("FIX", "ME"),
        concat!("XX", "X"),
        concat!("unimple", "mented!"),
        concat!("to", "do!"),
    ];
    let lines = text.lines().enumerate();
    lines
        .filter(|(_, line)| words.iter().any(|word| line.contains(word)))
        .map(|(index, line)| format!("{name}:{}: {}", index + 1, line.trim()))
        .collect()
}

/// Paths of one machine; put together likewise.
fn machine_paths(name: &str, text: &str) -> Vec<String> {
    let paths = [concat!("/wo", "rk/"), concat!("/ro", "ot/"), concat!("/tm", "p/h")];
    let lines = text.lines().enumerate();
    lines
        .filter(|(_, line)| paths.iter().any(|path| line.contains(path)))
        .map(|(index, line)| format!("{name}:{}: {}", index + 1, line.trim()))
        .collect()
}

/// Every file of the project that is text.
fn texts() -> Vec<(String, String)> {
    let texts = files_under(project()).into_iter().filter_map(|path| {
        let name = path.strip_prefix(project()).expect("under the top").display().to_string();
        Some((name, String::from_utf8(fs::read(&path).expect("readable")).ok()?))
    });
    texts.collect()
}

#[test]
fn nothing_is_left_unfinished_in_the_tree() {
    let bad = concat!("fn f() {}\n// TO", "DO later\nfn g() { unimple", "mented!() }\n");
    assert_eq!(unfinished("bad", bad).len(), 2);
    let texts = texts();
    assert!(texts.len() > 100, "{} files", texts.len());
    assert_none(texts.iter().flat_map(|(name, text)| unfinished(name, text)).collect());
}

#[test]
fn no_file_names_a_path_of_one_machine() {
    assert_eq!(machine_paths("bad", concat!("see /wo", "rk/notes\n")).len(), 1);
    assert_none(texts().iter().flat_map(|(name, text)| machine_paths(name, text)).collect());
}

fn too_wide(name: &str, text: &str) -> Vec<String> {
    let lines = text.lines().enumerate().map(|(index, line)| (index + 1, line.chars().count()));
    lines
        .filter(|(_, columns)| *columns > COLUMNS_MAX)
        .map(|(number, columns)| format!("{name}:{number}: {columns} columns"))
        .collect()
}

fn too_long(name: &str, text: &str) -> Option<String> {
    let lines = text.lines().count();
    (lines > LINES_MAX).then(|| format!("{name}: {lines} lines"))
}

#[test]
fn source_files_keep_to_their_width_and_length() {
    assert_eq!(too_wide("bad", &format!("{}\nb\n", "é".repeat(COLUMNS_MAX + 1))).len(), 1);
    assert_none(too_wide("good", &"é".repeat(COLUMNS_MAX)));
    assert!(too_long("bad", &"x\n".repeat(LINES_MAX + 1)).is_some());
    assert_eq!(too_long("good", &"x\n".repeat(LINES_MAX)), None);

    let files = [rust_files("src"), rust_files("tests")].concat();
    assert!(files.len() > 80, "{} files", files.len());
    assert_none(files.iter().flat_map(|(name, text)| too_wide(name, text)).collect());
    let sources = files.iter().filter(|(name, _)| name.starts_with("src"));
    assert_none(sources.filter_map(|(name, text)| too_long(name, text)).collect());
}

fn sleeps(name: &str, source: &str) -> Vec<String> {
    let code = code_of(source);
    let at = whole_words(&code, "sleep").filter(|at| code[..*at].ends_with("::"));
    at.map(|at| format!("{name}:{}: waits for time, not for a condition", line_of(&code, at)))
        .collect()
}

#[test]
fn no_test_sleeps() {
    let bad = "fn f() { std::thread::sleep(d); }\nasync fn g() { tokio::time::sleep(d).await }";
    assert_eq!(sleeps("bad", bad).len(), 2);
    assert_none(sleeps("good", "// thread::sleep\nfn sleep() {}"));
    let files = rust_files("tests");
    assert!(files.len() > 15, "{} files", files.len());
    assert_none(files.iter().flat_map(|(name, source)| sleeps(name, source)).collect());
}

/// Targets of the links of a Markdown text that point into the project, without their fragments.
fn links(text: &str) -> Vec<&str> {
    let targets = text.split("](").skip(1).filter_map(|rest| rest.split(')').next());
    let targets = targets.filter(|target| !target.contains("://") && !target.starts_with('#'));
    targets.map(|target| target.split('#').next().expect("a first part")).collect()
}

#[test]
fn links_in_the_documents_lead_somewhere() {
    let sample = "a [b](c.md#d), [e](https://f.example/), ![g](h.png) and [i](#j)";
    assert_eq!(links(sample), ["c.md", "h.png"]);

    let documents: Vec<_> = texts().into_iter().filter(|(name, _)| name.ends_with(".md")).collect();
    assert!(documents.len() >= 3, "{} documents", documents.len());
    let mut faults = Vec::new();
    for (name, text) in &documents {
        let folder = project().join(name).parent().expect("in a folder").to_path_buf();
        let lost = links(text).into_iter().filter(|target| !folder.join(target).exists());
        faults.extend(lost.map(|target| format!("{name}: {target} is not there")));
    }
    assert_none(faults);
}

#[test]
fn comments_and_texts_are_not_taken_for_code() {
    let source = "a // b\n\"c // \\\" d\" e r#\"f \" g\"# 'h' '\\'' i<'j> /* k /* l */ m */ n";
    let words: Vec<String> = code_of(source).split_whitespace().map(str::to_owned).collect();
    assert_eq!(words, ["a", "e", "i<'j>", "n"]);
    assert_eq!(code_of(source).matches('\n').count(), source.matches('\n').count());
}
