//! A wire between the browser and the node that can be watched: after a given number of answers the
//! node at its far end is killed. It changes nothing that passes, but that every connection carries
//! one question only.

use std::io::{Error, Read, Write};
use std::net::{TcpListener, TcpStream};
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;

use crate::node::Node;

/// A path, and how many more of its answers are to pass.
type Awaited = (&'static str, usize);

/// The node, until it is killed, and what it must have answered before.
struct Victim {
    node: Option<Node>,
    awaited: [Awaited; 2],
}

pub(crate) struct Relay {
    /// Where the browser finds the wire.
    pub(crate) address: String,
    victim: Arc<Mutex<Victim>>,
    stopped: Arc<AtomicBool>,
}

impl Relay {
    pub(crate) fn start(upstream: String, node: Node, awaited: [Awaited; 2]) -> Relay {
        let listener = TcpListener::bind("127.0.0.1:0").unwrap();
        let address = listener.local_addr().unwrap().to_string();
        let victim = Arc::new(Mutex::new(Victim { node: Some(node), awaited }));
        let stopped = Arc::new(AtomicBool::new(false));
        let (shared, stop) = (Arc::clone(&victim), Arc::clone(&stopped));
        std::thread::spawn(move || {
            for stream in listener.incoming() {
                if stop.load(Ordering::Relaxed) {
                    break;
                }
                let (upstream, victim) = (upstream.clone(), Arc::clone(&shared));
                std::thread::spawn(move || {
                    // A dead node, or a browser that has left: the connection just ends.
                    let _broken = stream.and_then(|stream| pass(stream, &upstream, &victim));
                });
            }
        });
        Relay { address, victim, stopped }
    }

    pub(crate) fn has_killed(&self) -> bool {
        self.victim.lock().unwrap_or_else(PoisonError::into_inner).node.is_none()
    }
}

impl Drop for Relay {
    fn drop(&mut self) {
        self.victim.lock().unwrap_or_else(PoisonError::into_inner).node = None;
        self.stopped.store(true, Ordering::Relaxed);
        // One last connection, so that the thread sees that it is to stop; it may be gone already.
        let _woken = TcpStream::connect(&self.address);
    }
}

/// One question and its answer.
fn pass(mut browser: TcpStream, upstream: &str, victim: &Mutex<Victim>) -> Result<(), Error> {
    browser.set_read_timeout(Some(Duration::from_secs(5)))?;
    let mut question = Vec::new();
    let mut byte = [0];
    while !question.ends_with(b"\r\n\r\n") {
        browser.read_exact(&mut byte)?;
        question.push(byte[0]);
    }
    let question = String::from_utf8_lossy(&question)
        .replace("Connection: keep-alive\r\n", "Connection: close\r\n");
    let mut node = TcpStream::connect(upstream)?;
    node.set_read_timeout(Some(Duration::from_secs(5)))?;
    node.write_all(question.as_bytes())?;
    let mut answer = Vec::new();
    node.read_to_end(&mut answer)?;
    browser.write_all(&answer)?;
    let mut victim = victim.lock().unwrap_or_else(PoisonError::into_inner);
    for (path, left) in &mut victim.awaited {
        if question.starts_with(&format!("GET {path} ")) {
            *left = left.saturating_sub(1);
        }
    }
    if victim.awaited.iter().all(|(_, left)| *left == 0) {
        victim.node = None;
    }
    Ok(())
}
