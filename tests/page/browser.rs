//! Chromium without a window: it opens a page, lets its clock run for a while, and writes out the
//! document. It goes nowhere but to the node.

use std::io::{Read, Write};
use std::path::PathBuf;
use std::process::{Command, Stdio};
use std::sync::mpsc;
use std::time::Instant;

use crate::document::Document;
use crate::node::Guard;

pub(crate) struct Browser {
    program: PathBuf,
}

impl Browser {
    /// The browser that is installed. `None` where there is none: the test is skipped, loudly.
    ///
    /// # Panics
    /// If there is none and `FALLOWBAND_REQUIRE_BROWSER` is 1.
    pub(crate) fn find() -> Option<Browser> {
        let path = std::env::var_os("PATH").unwrap_or_default();
        let program = std::env::split_paths(&path)
            .flat_map(|folder| ["chromium", "chromium-browser"].map(|name| folder.join(name)))
            .find(|program| program.is_file());
        if let Some(program) = program {
            return Some(Browser { program });
        }
        let required = std::env::var("FALLOWBAND_REQUIRE_BROWSER").is_ok_and(|value| value == "1");
        assert!(!required, "FALLOWBAND_REQUIRE_BROWSER=1, but Chromium is not installed");
        // Not by the macro, whose words a passing test keeps to itself.
        let words = "SKIPPED: Chromium is not installed, so the page was NOT tested in a browser.";
        writeln!(std::io::stderr(), "{words}").expect("standard error takes a line");
        None
    }

    /// The document of the page at `address` once its own clock has run for `page_ms`.
    ///
    /// # Panics
    /// If there is none by the deadline.
    pub(crate) fn dump(&self, address: &str, page_ms: u32, deadline: Instant) -> Document {
        let profile = tempfile::tempdir().unwrap();
        let child = Command::new(&self.program)
            .args(["--headless", "--no-sandbox", "--disable-gpu", "--disable-quic"])
            .args(["--no-first-run", "--disable-background-networking", "--disable-sync"])
            .args(["--disable-component-update", "--dump-dom"])
            .arg(format!("--virtual-time-budget={page_ms}"))
            .arg(format!("--user-data-dir={}", profile.path().display()))
            .arg(format!("http://{address}/"))
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .unwrap();
        let mut child = Guard(child);
        let mut output = child.0.stdout.take().unwrap();
        let (send, receive) = mpsc::channel();
        std::thread::spawn(move || {
            let mut text = String::new();
            // The reader may have given up: then nobody wants the text any more.
            let _gone = send.send(output.read_to_string(&mut text).map(|_length| text));
        });
        let left = deadline.saturating_duration_since(Instant::now());
        let text = receive.recv_timeout(left).expect("no document in time").unwrap();
        child.0.wait().unwrap();
        Document::read(&text)
    }
}
