//! What the command tests share: a folder with a configuration and recordings, the program run to
//! its end or as a daemon, and a plain HTTP question.

use std::fs;
use std::io::{BufRead, BufReader, Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::path::{Path, PathBuf};
use std::process::{Child, ChildStderr, Command, ExitStatus, Output, Stdio};
use std::sync::mpsc;
use std::time::{Duration, Instant};

use rand_core::SeedableRng;
use rand_distr::{Distribution, StandardNormal};
use rand_xoshiro::Xoshiro256PlusPlus;
use serde_json::{Value, json};
use tempfile::TempDir;

/// Far longer than any condition here takes to come true on a loaded machine.
pub(crate) const PATIENCE: Duration = Duration::from_secs(60);

pub(crate) const CENTRE_HZ: f64 = 448.1e6;

/// Of all noise: mean power 2e-4, -49 dBFS in a channel of 3 kHz out of 48 kHz.
const SIGMA: f32 = 0.01;

/// A node on eight channels of 3 kHz, C1 to C8; dwells of 200 ms.
pub(crate) const NODE: &str = r#"
[node]
site = "Lower Saltmarsh (invented)"
name = "saltmarsh-test"
data_directory = "data"
[receiver]
source = "recording"
recording = "site.sigmf-meta"
centre = "448.1MHz"
[[bands]]
id = "saltmarsh"
protection_level = "-50dBFS"
[bands.raster]
first_centre = "448.086MHz"
spacing = "4kHz"
count = 8
bandwidth = "3kHz"
id_prefix = "C"
[history]
commit_interval = "1s"
[api]
listen = "127.0.0.1:0"
"#;

/// The program, with nothing of the environment that changes what it says.
pub(crate) fn program() -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_fallowband"));
    command.env_remove("RUST_LOG").stdin(Stdio::null());
    command
}

/// A folder with a configuration, `node.toml`.
pub(crate) struct Folder(TempDir);

impl Folder {
    pub(crate) fn new(configuration: &str) -> Folder {
        let folder = Folder(TempDir::new().expect("a folder"));
        fs::write(folder.path("node.toml"), configuration).expect("written");
        folder
    }

    pub(crate) fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    /// A recording of that many seconds at 48 kS/s, named `site`.
    pub(crate) fn with_noise(self, datatype: &str, seconds: f64) -> Folder {
        self.record("site", datatype, &noise(48_000.0, seconds), 48_000.0, usual_captures());
        self
    }

    pub(crate) fn record(
        &self,
        name: &str,
        datatype: &str,
        samples: &[(f32, f32)],
        rate_hz: f64,
        captures: Value,
    ) {
        let meta = json!({
            "global": {
                "core:datatype": datatype,
                "core:sample_rate": rate_hz,
                "core:version": "1.0.0",
            },
            "captures": captures,
            "annotations": [],
        });
        let bytes = |component: f32| match datatype {
            "cf32_le" => component.to_le_bytes().to_vec(),
            _ => ((component * 32768.0).round() as i16).to_le_bytes().to_vec(),
        };
        let data: Vec<u8> =
            samples.iter().flat_map(|(re, im)| [bytes(*re), bytes(*im)].concat()).collect();
        fs::write(self.path(&format!("{name}.sigmf-meta")), meta.to_string()).expect("written");
        fs::write(self.path(&format!("{name}.sigmf-data")), data).expect("written");
    }

    /// Runs the program in the folder to its end.
    pub(crate) fn run(&self, arguments: &[&str]) -> Outcome {
        Outcome::of(program().args(arguments).current_dir(self.0.path()).output().expect("it runs"))
    }

    /// Starts the node of `node.toml`.
    pub(crate) fn start(&self) -> Node {
        let mut command = program();
        command.args(["run", "--config", "node.toml"]).current_dir(self.0.path());
        Node::start(command)
    }

    pub(crate) fn database(&self) -> PathBuf {
        self.path("data/history.sqlite3")
    }
}

/// Complex white noise, the same each time.
pub(crate) fn noise(rate_hz: f64, seconds: f64) -> Vec<(f32, f32)> {
    let mut rng = Xoshiro256PlusPlus::seed_from_u64(20_260_504);
    let mut normal = || -> f32 { StandardNormal.sample(&mut rng) };
    (0..(rate_hz * seconds) as usize).map(|_| (normal() * SIGMA, normal() * SIGMA)).collect()
}

/// Adds a carrier 2 kHz above the centre (in channel C5) from a sample on, 20 dB above the noise.
pub(crate) fn add_carrier(samples: &mut [(f32, f32)], rate_hz: f64, from: usize) {
    for (index, (re, im)) in samples.iter_mut().enumerate().skip(from) {
        let phase = std::f64::consts::TAU * (2e3 * index as f64 / rate_hz).fract();
        *re += 0.05 * phase.cos() as f32;
        *im += 0.05 * phase.sin() as f32;
    }
}

pub(crate) fn usual_captures() -> Value {
    json!([{
        "core:sample_start": 0,
        "core:frequency": CENTRE_HZ,
        "core:datetime": "2026-05-04T06:30:00Z",
    }])
}

/// What a run to the end has left.
#[derive(Debug)]
pub(crate) struct Outcome {
    pub(crate) code: Option<i32>,
    pub(crate) out: String,
    pub(crate) err: String,
}

impl Outcome {
    pub(crate) fn of(output: Output) -> Outcome {
        Outcome {
            code: output.status.code(),
            out: String::from_utf8(output.stdout).expect("UTF-8"),
            err: String::from_utf8(output.stderr).expect("UTF-8"),
        }
    }

    /// What went to standard output of a run without any fault or note.
    pub(crate) fn good(self) -> String {
        assert_eq!((self.code, self.err.as_str()), (Some(0), ""), "{self:?}");
        self.out
    }

    /// The one line of a fault, without the program's name.
    pub(crate) fn fault(self, code: i32) -> String {
        assert_eq!((self.code, self.out.as_str()), (Some(code), ""), "{self:?}");
        let lines: Vec<&str> = self.err.lines().collect();
        let [line] = lines[..] else { panic!("a fault is one line: {self:?}") };
        line.strip_prefix("fallowband: ").expect("it says who speaks").to_owned()
    }
}

/// A process that is killed when it goes out of scope.
pub(crate) struct Guard(pub(crate) Child);

impl Drop for Guard {
    fn drop(&mut self) {
        // It may have ended by itself.
        drop(self.0.kill());
        drop(self.0.wait());
    }
}

/// A running daemon.
pub(crate) struct Node {
    child: Guard,
    pub(crate) address: SocketAddr,
    /// What it logs from here on; far less than a pipe holds.
    log: Option<BufReader<ChildStderr>>,
}

impl Node {
    /// Starts it and waits until it says where it serves.
    pub(crate) fn start(mut command: Command) -> Node {
        let mut child = Guard(command.stderr(Stdio::piped()).spawn().expect("it starts"));
        let mut log = BufReader::new(child.0.stderr.take().expect("piped"));
        let nowhere = SocketAddr::from(([127, 0, 0, 1], 0));
        let mut node = Node { child, address: nowhere, log: None };
        let (found, address) = mpsc::channel();
        // A read cannot be given up, so it waits on a thread of its own.
        std::thread::spawn(move || {
            let mut seen = String::new();
            while log.read_line(&mut seen).is_ok_and(|bytes| bytes > 0) {
                let last = seen.lines().last().unwrap_or_default();
                if let Some((_, rest)) = last.split_once("serving on http://") {
                    let address = rest.trim_end_matches('/').parse().expect("an address");
                    drop(found.send(Ok((address, log))));
                    return;
                }
            }
            drop(found.send(Err(seen)));
        });
        let answer = address.recv_timeout(PATIENCE).expect("it says where it serves in time");
        let (address, log) = answer.unwrap_or_else(|seen| panic!("it did not start: {seen}"));
        node.address = address;
        node.log = Some(log);
        node
    }

    /// The next lines of its standard output, which was piped.
    pub(crate) fn out(&mut self, lines: usize) -> Vec<String> {
        let out = BufReader::new(self.child.0.stdout.take().expect("piped"));
        out.lines().take(lines).map(|line| line.expect("UTF-8")).collect()
    }

    /// Closes the reading end of its standard error, as a log collector that dies does.
    pub(crate) fn close_log(&mut self) {
        self.log = None;
    }

    /// What it answers: the body of a GET, as JSON.
    pub(crate) fn get(&self, path: &str) -> Value {
        let body = get(self.address, path).unwrap_or_else(|error| panic!("GET {path}: {error}"));
        serde_json::from_str(&body).unwrap_or_else(|error| panic!("GET {path}: {error}\n{body}"))
    }

    /// Waits until what it answers fulfils a condition.
    pub(crate) fn wait_for(
        &self,
        what: &str,
        path: &str,
        condition: impl Fn(&Value) -> bool,
    ) -> Value {
        let mut answer = Value::Null;
        wait_until(what, || {
            answer = self.get(path);
            condition(&answer)
        });
        answer
    }

    /// Kills it without a warning.
    pub(crate) fn kill(mut self) {
        self.child.0.kill().expect("it can be killed");
        self.child.0.wait().expect("it ends");
    }

    /// Asks it to end as a service manager does, and waits; see [`Node::end_by`].
    pub(crate) fn terminate(self) -> (ExitStatus, String, Duration) {
        self.end_by("-TERM")
    }

    /// Sends it a signal and waits for its end: how it ended, what it logged since it served, and
    /// how long it took.
    pub(crate) fn end_by(mut self, signal: &str) -> (ExitStatus, String, Duration) {
        let begun = Instant::now();
        let id = self.child.0.id().to_string();
        let sent = Command::new("kill").args([signal, &id]).status();
        assert!(sent.expect("kill runs").success());
        let mut status = None;
        wait_until("the end of the daemon", || {
            status = self.child.0.try_wait().expect("it can be asked");
            status.is_some()
        });
        let took = begun.elapsed();
        let mut log = String::new();
        if let Some(pipe) = &mut self.log {
            pipe.read_to_string(&mut log).expect("UTF-8");
        }
        (status.expect("it has ended"), log, took)
    }
}

/// The body of an answer with status 200.
pub(crate) fn get(address: SocketAddr, path: &str) -> std::io::Result<String> {
    let mut stream = TcpStream::connect(address)?;
    stream.set_read_timeout(Some(PATIENCE))?;
    let request = format!("GET {path} HTTP/1.1\r\nHost: {address}\r\nConnection: close\r\n\r\n");
    stream.write_all(request.as_bytes())?;
    let mut answer = String::new();
    stream.read_to_string(&mut answer)?;
    let (head, body) = answer.split_once("\r\n\r\n").expect("a head and a body");
    assert!(head.starts_with("HTTP/1.1 200 "), "{head}");
    assert!(head.to_ascii_lowercase().contains("content-length"), "not in pieces: {head}");
    Ok(body.to_owned())
}

/// Waits for a condition, looking every few milliseconds.
pub(crate) fn wait_until(what: &str, mut condition: impl FnMut() -> bool) {
    let begun = Instant::now();
    while !condition() {
        assert!(begun.elapsed() < PATIENCE, "waited in vain for {what}");
        std::thread::park_timeout(Duration::from_millis(5));
    }
}

/// Names of the files in a folder, sorted.
pub(crate) fn names_in(folder: &Path) -> Vec<String> {
    let entries = fs::read_dir(folder).expect("a folder");
    let mut names: Vec<String> = entries
        .map(|entry| entry.expect("an entry").file_name().to_string_lossy().into_owned())
        .collect();
    names.sort();
    names
}
