//! A real daemon on the demo's scene, in a folder of its own, and a plain way to ask it.

use std::io::{BufRead, BufReader, Error, ErrorKind, Read, Write};
use std::net::TcpStream;
use std::process::{Child, Command, Stdio};
use std::sync::mpsc;
use std::time::{Duration, Instant};

use serde_json::Value;
use tempfile::TempDir;

/// A child process that does not outlive the test, however the test ends.
pub(crate) struct Guard(pub(crate) Child);

impl Drop for Guard {
    fn drop(&mut self) {
        // It may have ended by itself, which is what is wanted.
        let _ended = self.0.kill();
        let _ended = self.0.wait();
    }
}

pub(crate) struct Node {
    /// Host and port.
    pub(crate) address: String,
    /// Killed before its folder goes.
    _child: Guard,
    _data: TempDir,
}

impl Node {
    /// Starts the daemon and waits for its address.
    ///
    /// # Panics
    /// If it does not say it by the deadline.
    pub(crate) fn start(deadline: Instant) -> Node {
        let data = tempfile::tempdir().unwrap();
        let child = Command::new(env!("CARGO_BIN_EXE_fallowband"))
            .args(["demo", "--listen", "127.0.0.1:0", "--data"])
            .arg(data.path())
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .spawn()
            .unwrap();
        let mut child = Guard(child);
        let output = BufReader::new(child.0.stdout.take().unwrap());
        let (send, receive) = mpsc::channel();
        std::thread::spawn(move || {
            for line in output.lines().map_while(Result::ok) {
                let address = line.split_once("http://").and_then(|(_, rest)| rest.split_once('/'));
                if let Some((address, _)) = address {
                    // Whoever waited may have given up.
                    let _gone = send.send(address.to_string());
                }
            }
        });
        let left = deadline.saturating_duration_since(Instant::now());
        let address = receive.recv_timeout(left).expect("the node says its address");
        Node { address, _child: child, _data: data }
    }

    /// Waits until every channel has a verdict and some are on offer: about the check time.
    ///
    /// # Panics
    /// If that is not so by the deadline.
    pub(crate) fn wait_for_offers(&self, deadline: Instant) {
        // Nothing is ever sent: it is a clock that can be waited for.
        let (_tick, pause) = mpsc::channel::<()>();
        loop {
            let answer = get(&self.address, "/v1/availability").unwrap();
            if answer["offers"].as_array().is_some_and(|offers| !offers.is_empty()) {
                return;
            }
            assert!(Instant::now() < deadline, "nothing on offer in time");
            let _elapsed = pause.recv_timeout(Duration::from_millis(50));
        }
    }
}

/// The JSON at a path.
///
/// # Errors
/// If the node cannot be reached, or answers anything but 200 and JSON.
pub(crate) fn get(address: &str, path: &str) -> Result<Value, Error> {
    let mut stream = TcpStream::connect(address)?;
    stream.set_read_timeout(Some(Duration::from_secs(5)))?;
    write!(stream, "GET {path} HTTP/1.1\r\nHost: {address}\r\nConnection: close\r\n\r\n")?;
    let mut text = String::new();
    stream.read_to_string(&mut text)?;
    let bad = || Error::new(ErrorKind::InvalidData, format!("{path}: not what was asked for"));
    let (head, body) = text.split_once("\r\n\r\n").ok_or_else(bad)?;
    if !head.starts_with("HTTP/1.1 200 ") {
        return Err(bad());
    }
    serde_json::from_str(body).map_err(|_| bad())
}
