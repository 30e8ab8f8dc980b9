//! Browsers at a bench: what they see, how soon, and what they catch up with.

#[path = "screen_support.rs"]
mod support;

use serde_json::json;
use std::io::Read;
use std::sync::{Arc, Mutex};
use std::time::{Duration, Instant};
use support::{Event, Events, Station, begin, until, weighed};

fn region(events: &mut Events, what: &str, words: &str) -> Event {
    events.wait(what, |e| e.name == "region" && e.data["html"].as_str().is_some_and(|h| h.contains(words)))
}

#[test]
fn two_browsers_at_a_bench_see_the_same() {
    let station = Station::start("");
    begin(&station, "S-1");
    let (mut one, mut two) = (station.events("bench=north", None), station.events("bench=north", None));
    let mut away = station.events("bench=south", None);
    for events in [&mut one, &mut two] {
        let event = region(events, "the specimen", "S-1");
        assert!(event.data["id"].is_string() && event.data["seq"].as_u64().is_some() && event.id.contains('-'), "{event:?}");
    }
    let answer = station.post("/api/ask", &json!({"ask": "code", "bench": "north", "text": "C77"}));
    assert_eq!(answer.status, 200);
    let seq = answer.json()["facts"][0].as_u64().expect("a fact");
    let (a, b) = (region(&mut one, "the container", "C77"), region(&mut two, "the container", "C77"));
    assert!(a.data["seq"].as_u64() >= Some(seq), "{a:?}");
    assert_eq!((&a.data, &a.id), (&b.data, &b.id));
    // Readings and drops of the bench's own instruments come as they fall.
    station.shows(33.33);
    let live = one.wait("a reading", |e| e.name == "live" && e.data["mass_g"] == "33.33");
    assert_eq!((&live.data["instrument"], &live.data["steady"]), (&json!("pan-1"), &json!("steady")));
    station.count(7);
    two.wait("a drop", |e| e.name == "live" && e.data["instrument"] == "cup-1" && e.data["drops"] == 7);
    // The other bench has other instruments.
    let start = Instant::now();
    while start.elapsed() < Duration::from_millis(1_500) {
        let event = away.next().expect("events");
        assert!(event.name != "live", "{event:?}");
    }
}

#[test]
fn beats_tell_that_it_records_and_cease_with_it() {
    let mut station = Station::start("");
    let mut events = station.events("page=laboratory", None);
    let beat = events.wait("a beat", |e| e.name == "beat");
    assert!(beat.data["recording"] == true && beat.data["now"].is_string() && beat.data["seq"].is_u64(), "{beat:?}");
    let began = Instant::now();
    events.wait("the next", |e| e.name == "beat");
    assert!(began.elapsed() < Duration::from_millis(1_800), "{:?}", began.elapsed());
    station.stop();
    let began = Instant::now();
    while events.next().is_some() {
        assert!(began.elapsed() < Duration::from_secs(2), "events go on after the service stopped");
    }
}

#[test]
fn when_nothing_can_be_stored_the_pages_say_so() {
    let station = Station::start("");
    begin(&station, "S-1");
    let mut events = station.events("bench=north", None);
    events.wait("a beat", |e| e.name == "beat" && e.data["recording"] == true);
    let ledger = std::fs::read_dir(station.state()).expect("a folder").flatten().map(|e| e.path());
    let ledger = ledger.into_iter().find(|p| p.extension().is_some_and(|e| e == "sqlite")).expect("the ledger");
    let other = rusqlite::Connection::open(ledger).expect("opened");
    other.execute_batch("BEGIN EXCLUSIVE").expect("locked");
    let began = Instant::now();
    station.weigh(20.0);
    let (mut beat, mut alarm) = (false, false);
    events.wait("not recording", |e| {
        beat |= e.name == "beat" && e.data["recording"] == false && e.data["why"].is_string();
        alarm |= e.name == "region" && e.data["html"].as_str().is_some_and(|h| h.contains("not-recording"));
        beat && alarm
    });
    assert!(began.elapsed() < Duration::from_secs(5), "{:?}", began.elapsed());
    assert_eq!(station.post("/api/ask", &json!({"ask": "code", "bench": "north", "text": "C1"})).status, 503);
    assert_eq!(station.get("/api/status").status, 503);
    assert!(station.get("/bench/north").body.contains("not-recording"));
    other.execute_batch("ROLLBACK").expect("released");
    drop(other);
    events.wait("recording again", |e| e.name == "beat" && e.data["recording"] == true);
    // What was shown and what is stored are the same again.
    let seq = station.get("/api/status").json()["seq"].as_u64();
    events.wait("the same fact", |e| e.name == "beat" && e.data["seq"].as_u64() >= seq);
}

#[test]
fn a_browser_that_comes_back_gets_what_it_missed() {
    let station = Station::start("");
    begin(&station, "S-1");
    let mut first = station.events("bench=north", None);
    let mut last = region(&mut first, "the specimen", "S-1").id;
    let began = Instant::now();
    while began.elapsed() < Duration::from_millis(1_200) {
        let event = first.next().expect("events");
        if !event.id.is_empty() {
            last = event.id;
        }
    }
    drop(first);
    // Nothing new: nothing comes but beats and readings.
    let mut idle = station.events("bench=north", Some(&last));
    let mut beats = 0;
    while beats < 2 {
        let event = idle.next().expect("events");
        assert!(event.name != "region", "{event:?}");
        beats += u32::from(event.name == "beat");
    }
    assert_eq!(station.post("/api/ask", &json!({"ask": "code", "bench": "north", "text": "C88"})).status, 200);
    assert_eq!(station.post("/api/ask", &json!({"ask": "code", "bench": "north", "text": "C99"})).status, 200);
    drop(idle);
    std::thread::sleep(Duration::from_millis(200));
    let mut back = station.events("bench=north", Some(&last));
    let event = region(&mut back, "what came last", "C99");
    assert_ne!(event.id, last);
    // An id of another start, or of nonsense: everything.
    for id in ["0123456789ab-999999", "x", "-1", &format!("{}0", last.split('-').next().expect("a start"))] {
        let mut whole = station.events("bench=north", Some(id));
        region(&mut whole, "the specimen", "S-1");
    }
    // By the fact that the page shows: older parts are left out.
    let seq = station.get("/api/status").json()["seq"].as_u64().expect("a number");
    let mut after = station.events(&format!("bench=north&after={}", seq + 1), None);
    after.wait("a beat", |e| {
        assert!(e.name != "region", "{e:?}");
        e.name == "beat"
    });
}

#[test]
fn wrong_pages_are_told() {
    let station = Station::start("");
    for (query, status) in [
        ("", 400),
        ("?page=nowhere", 400),
        ("?bench=a%20b", 400),
        ("?bench=east", 404),
        ("?specimen=S-9", 404),
        ("?bench=north&page=shelf", 400),
    ] {
        assert_eq!(station.get(&format!("/events{query}")).status, status, "{query}");
    }
}

/// Every fact reaches an open page soon after it is stored, though seven others watch and one of them takes nothing.
#[test]
fn a_page_follows_a_commit_within_a_quarter_second() {
    let stored: Arc<Mutex<Vec<(u64, Instant)>>> = Arc::default();
    let keep = Arc::clone(&stored);
    let told = Arc::new(move |r: &tarecup_core::fact::Recorded| keep.lock().expect("a list").push((r.seq, Instant::now())));
    let station = Station::told("", Some(told));
    begin(&station, "S-1");
    let stuck = station.events("bench=north", None);
    let mut others: Vec<Events> = (0..6).map(|_| station.events("bench=north", None)).collect();
    let mut events = station.events("bench=north", None);
    region(&mut events, "the specimen", "S-1");
    let mut worst = Duration::ZERO;
    for n in 0..40 {
        let code = format!("T{n:03}");
        let answer = station.post("/api/ask", &json!({"ask": "code", "bench": "north", "text": code}));
        let seq = answer.json()["facts"][0].as_u64().expect("a fact");
        region(&mut events, "the container", &code);
        let arrived = Instant::now();
        let at = stored.lock().expect("a list").iter().find(|(s, _)| *s == seq).map(|(_, at)| *at).expect("it was stored");
        worst = worst.max(arrived - at);
    }
    println!("from commit to page, worst of 40: {worst:?}");
    assert!(worst < Duration::from_millis(250), "{worst:?}");
    for other in &mut others {
        region(other, "the last container", "T039");
    }
    drop(stuck);
    let seq = weighed(&station, "T040", 21.5);
    assert!(seq > 0);
}

/// A browser that reads nothing is let go in the end, and holds nothing up meanwhile.
#[test]
fn a_stuck_browser_holds_nothing_up() {
    let station = Station::start("");
    begin(&station, "S-1");
    let stuck: Vec<_> = (0..4)
        .map(|_| {
            let mut stream = station.connect();
            let request = format!("GET /events?bench=north HTTP/1.1\r\nHost: {}\r\n\r\n", station.address);
            std::io::Write::write_all(&mut stream, request.as_bytes()).expect("sent");
            stream
        })
        .collect();
    for n in 0..30 {
        let code = format!("U{n:03}");
        assert_eq!(station.post("/api/ask", &json!({"ask": "code", "bench": "north", "text": code})).status, 200);
    }
    let mut events = station.events("bench=north", None);
    region(&mut events, "the last container", "U029");
    for mut stream in stuck {
        // What it was sent before is there, whole and in order.
        let mut some = [0u8; 512];
        let read = stream.read(&mut some).expect("readable");
        assert!(String::from_utf8_lossy(&some[..read]).starts_with("HTTP/1.1 200"));
    }
    until("the service is well", || station.service().ports_open() == 2);
}
