//! What the node said, moment by moment, while the browser looked at it.

use std::collections::{BTreeMap, BTreeSet};
use std::sync::mpsc::{self, RecvTimeoutError, Sender};
use std::sync::{Arc, Condvar, Mutex};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

use crate::node::get;

/// From question to question: short against the demo's dwell of 200 ms.
const PERIOD: Duration = Duration::from_millis(50);

/// One look at `/v1/channels` and `/v1/availability`. Times are the node's, as text: all of one
/// form, so that they sort as text.
pub(crate) struct Poll {
    pub(crate) channels_now: String,
    pub(crate) offers_now: String,
    pub(crate) states: BTreeMap<String, String>,
    pub(crate) protected: BTreeSet<String>,
    pub(crate) offers: BTreeSet<String>,
    /// Start of the newest dwell.
    dwell: String,
    /// Sequence number of the newest dwell.
    sequence: Option<u64>,
}

impl Poll {
    fn take(address: &str) -> Poll {
        let answer = get(address, "/v1/channels").unwrap();
        let offers = get(address, "/v1/availability").unwrap();
        let text = |value: &serde_json::Value| value.as_str().unwrap_or_default().to_string();
        let mut poll = Poll {
            channels_now: text(&answer["now"]),
            offers_now: text(&offers["now"]),
            states: BTreeMap::new(),
            protected: BTreeSet::new(),
            offers: BTreeSet::new(),
            dwell: String::new(),
            sequence: None,
        };
        for channel in answer["channels"].as_array().unwrap() {
            let id = text(&channel["id"]);
            let own = channel["own"] == true;
            let state = if own { "own".to_string() } else { text(&channel["verdict"]) };
            if channel["protected"] == true {
                poll.protected.insert(id.clone());
            }
            poll.dwell = text(&channel["time"]).max(std::mem::take(&mut poll.dwell));
            poll.states.insert(id, state);
        }
        for offer in offers["offers"].as_array().unwrap() {
            poll.offers.insert(text(&offer["channel"]));
            poll.sequence = poll.sequence.max(offer["sequence"].as_u64());
        }
        poll
    }
}

/// Asks on a thread of its own until it is stopped.
pub(crate) struct Polls {
    taken: Arc<(Mutex<Vec<Poll>>, Condvar)>,
    stop: Sender<()>,
    thread: JoinHandle<()>,
}

impl Polls {
    /// Starts to ask; two looks have been taken when it returns.
    pub(crate) fn start(address: &str) -> Polls {
        let first = vec![Poll::take(address), Poll::take(address)];
        let taken = Arc::new((Mutex::new(first), Condvar::new()));
        let (stop, stopped) = mpsc::channel();
        let thread = {
            let (taken, address) = (Arc::clone(&taken), address.to_string());
            std::thread::spawn(move || {
                while stopped.recv_timeout(PERIOD) == Err(RecvTimeoutError::Timeout) {
                    let poll = Poll::take(&address);
                    taken.0.lock().unwrap().push(poll);
                    taken.1.notify_all();
                }
            })
        };
        Polls { taken, stop, thread }
    }

    /// Waits until two looks have been taken after `moment`.
    pub(crate) fn wait_until_after(&self, moment: &str, deadline: Instant) {
        let left = deadline.saturating_duration_since(Instant::now());
        let after = |polls: &mut Vec<Poll>| {
            polls.iter().rev().take(2).filter(|poll| poll.channels_now.as_str() > moment).count()
        };
        let waited = self
            .taken
            .1
            .wait_timeout_while(self.taken.0.lock().unwrap(), left, |polls| after(polls) < 2);
        assert!(!waited.unwrap().1.timed_out(), "the node was not polled any more");
    }

    pub(crate) fn stop(self) -> Vec<Poll> {
        drop(self.stop);
        self.thread.join().unwrap();
        std::mem::take(&mut *self.taken.0.lock().unwrap())
    }
}

/// The two looks before and the two after a moment: an answer of that moment is like one of them.
/// `None` if a dwell passed between two of them that neither saw.
///
/// Two on each side, because an answer's time is read after its verdicts: of two questions at once,
/// the one that got the older verdicts may carry the later time.
pub(crate) fn near<'a>(
    polls: &'a [Poll],
    moment: &str,
    now: impl Fn(&Poll) -> &String,
) -> Option<&'a [Poll]> {
    let after = polls.iter().position(|poll| now(poll).as_str() > moment)?;
    let near = polls.get(after.checked_sub(2)?..after + 2)?;
    let gapless = near.windows(2).all(|pair| follows(&pair[0], &pair[1]));
    gapless.then_some(near)
}

/// Whether no dwell lies between two looks.
fn follows(before: &Poll, after: &Poll) -> bool {
    let ms = |poll: &Poll| -> Option<i64> {
        let stamp: jiff::Timestamp = poll.dwell.parse().ok()?;
        Some(stamp.as_millisecond())
    };
    let (Some(before_ms), Some(after_ms)) = (ms(before), ms(after)) else { return false };
    let (Some(first), Some(second)) = (before.sequence, after.sequence) else { return false };
    // Dwells follow one another without a pause, so that starts lie one dwell of 200 ms apart.
    (0..300).contains(&(after_ms - before_ms)) && second <= first + 1
}
