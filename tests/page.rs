//! The page in a real browser, against a real daemon on the demo's scene: what it shows must be
//! what the node said. It never looks at the page's scripts, only at the document they leave
//! behind.
//!
//! The browser is Chromium. Where there is none the tests say so and prove nothing;
//! `FALLOWBAND_REQUIRE_BROWSER=1` makes that a failure.

#[path = "page/browser.rs"]
mod browser;
#[path = "page/document.rs"]
mod document;
#[path = "page/node.rs"]
mod node;
#[path = "page/polls.rs"]
mod polls;
#[path = "page/relay.rs"]
mod relay;

use std::collections::BTreeSet;
use std::time::{Duration, Instant};

use browser::Browser;
use document::Document;
use node::Node;
use polls::{Poll, Polls};

/// A test that has not come to its end by then has failed.
const TIME_MAX: Duration = Duration::from_secs(35);

/// Channels of the demo's plan.
const CHANNELS: usize = 90;

#[test]
fn the_page_shows_every_channel_as_the_node_said_it() {
    let Some(browser) = Browser::find() else { return };
    let deadline = Instant::now() + TIME_MAX;
    let node = Node::start(deadline);
    node.wait_for_offers(deadline);
    while !compare(&browser, &node, deadline) {
        assert!(Instant::now() < deadline, "the node was never polled at every dwell");
    }
}

/// Looks at the page and asks the node at the same time. `false` if the node was asked too slowly
/// to see every dwell, which proves nothing either way.
fn compare(browser: &Browser, node: &Node, deadline: Instant) -> bool {
    let polls = Polls::start(&node.address);
    let document = browser.dump(&node.address, 4_000, deadline);
    assert_eq!(document.feed(), "current");
    let (answered, offers_answered) = (document.answered(), document.offers_answered());
    polls.wait_until_after(answered.max(offers_answered), deadline);
    let polls = polls.stop();
    let about_channels = polls::near(&polls, answered, |poll| &poll.channels_now);
    let about_offers = polls::near(&polls, offers_answered, |poll| &poll.offers_now);
    let (Some(about_channels), Some(about_offers)) = (about_channels, about_offers) else {
        return false;
    };
    check_states(&document, about_channels);
    check_offers(&document, about_offers);
    check_sums(&document);
    // The record is young, or not written yet; the page has asked for it and says which.
    let lately = document.text_of("lately-line");
    let begun = lately.contains("where the record begins") || lately.contains("on record yet");
    assert!(begun, "{lately}");
    true
}

/// Every channel is shown in a state that the node gave about the moment of the shown answer.
fn check_states(document: &Document, near: &[Poll]) {
    assert_eq!((document.cells.len(), near[0].states.len()), (CHANNELS, CHANNELS));
    for (id, cell) in &document.cells {
        let said: BTreeSet<&str> = near.iter().map(|poll| poll.states[id].as_str()).collect();
        let answered = document.answered();
        assert!(said.contains(cell.state.as_str()), "{id}: {} at {answered}: {said:?}", cell.state);
        assert_eq!(cell.protected, near[0].protected.contains(id), "{id}");
    }
}

/// A ring stands where the node made an offer, unless the sheet beside it already says otherwise.
fn check_offers(document: &Document, near: &[Poll]) {
    let ever = near.iter().fold(BTreeSet::new(), |all, poll| &all | &poll.offers);
    let always = near.iter().fold(ever.clone(), |all, poll| &all & &poll.offers);
    for (id, cell) in &document.cells {
        assert!(!cell.offered || ever.contains(id), "{id} is ringed, but was not on offer");
        let due = always.contains(id) && cell.state == "idle";
        assert!(cell.offered || !due, "{id} was on offer and idle, but is not ringed");
        assert!(!cell.offered || (cell.state == "idle" && !cell.protected), "{id} is ringed");
    }
    assert!(!always.is_empty(), "nothing was on offer, so nothing was shown");
}

/// The numbers in the legend are those of the sheet, and the list of offers names ringed channels.
fn check_sums(document: &Document) {
    let count = |wanted: &str| {
        document.cells.values().filter(|cell| cell.state == wanted).count().to_string()
    };
    for state in ["occupied", "idle", "unknown", "own"] {
        assert_eq!(document.text_of(&format!("count-{state}")), count(state), "{state}");
    }
    let ringed = document.cells.values().filter(|cell| cell.offered).count();
    assert_eq!(document.text_of("count-offered"), ringed.to_string());
    assert!(document.text_of("headline").starts_with(&format!("{ringed} of {CHANNELS} ")));
    let listed = document.listed_offers();
    assert_eq!(listed.len(), ringed.min(8));
    for id in listed {
        assert!(document.cells[&id].offered, "{id} is listed, but not ringed");
    }
}

#[test]
fn a_page_whose_node_dies_shows_no_channel_as_idle_or_on_offer() {
    let Some(browser) = Browser::find() else { return };
    let deadline = Instant::now() + TIME_MAX;
    let node = Node::start(deadline);
    node.wait_for_offers(deadline);
    // The browser's time runs ahead of ours, so the node is killed by what has passed over the
    // wire: once the page has had three answers on its channels and two on what is on offer.
    let upstream = node.address.clone();
    let relay = relay::Relay::start(upstream, node, [("/v1/channels", 3), ("/v1/availability", 2)]);
    let document = browser.dump(&relay.address, 15_000, deadline);
    assert!(relay.has_killed(), "the page never had its answers");
    assert_eq!(document.feed(), "stale");
    assert_eq!(document.cells.len(), CHANNELS, "the sheet was laid out before");
    for (id, cell) in &document.cells {
        assert_eq!(cell.state, "unknown", "{id}");
        assert!(!cell.offered, "{id}");
    }
    assert_eq!(document.listed_offers(), Vec::<String>::new());
    assert!(
        document.text_of("headline").starts_with("Nothing may be used"),
        "{}",
        document.text_of("headline")
    );
    assert!(document.text_of("health-line").contains("not known"));
    assert!(document.text_of("stale").contains("has not answered for"));
}
