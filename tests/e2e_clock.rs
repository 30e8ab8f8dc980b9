//! Clock trouble: the wall clock stepped while the service runs, put to 1970,
//! set right again; another start of the machine with a clock that is wrong.
//! Order and hours within a start do not rest on it, and what does is marked.

mod e2e_support;

use e2e_support::operator::{Cup, Operator, PORTS, Station, limits_of};
use e2e_support::oracle::{Hearing, Kept, judge};
use e2e_support::subscriber::{MosquittoSub, last};
use e2e_support::*;
use serde_json::{Value, json};
use std::ffi::OsStr;
use std::path::{Path, PathBuf};
use std::sync::mpsc::channel;
use std::time::Duration;
use tarecup::desk::inbox::Incoming;
use tarecup::desk::{Desk, Effects};
use tarecup::ledger::{OpenOptions, verify};
use tarecup::proof::prove;
use tarecup::service::{compile_profiles, desk_setup};
use tarecup_config::station::parse;
use tarecup_core::stamp::{HOUR_US, SECOND_US, Stamp, parse_rfc3339};

/// Puts the wall clock of one process wrong, by a file that can be changed while it runs.
fn faketime() -> PathBuf {
    let found = std::fs::read_dir("/usr/lib").expect("/usr/lib").flatten().map(|e| e.path().join("faketime/libfaketime.so.1"));
    found.into_iter().find(|p| p.exists()).expect("libfaketime is there: run tests/setup")
}

struct Clocked {
    station: Station,
    heard: MosquittoSub,
    offset: PathBuf,
}

impl Clocked {
    fn new() -> Self {
        let port = free_port();
        let station = Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{port}\"\n"));
        let offset = station.dir.path().join("offset");
        let clocked = Self { station, heard: MosquittoSub::on(port, "tarecup/v1/#"), offset };
        clocked.set("+0");
        clocked
    }

    /// By how much the wall clock is wrong from now on.
    fn set(&self, by: &str) {
        let part = self.offset.with_extension("part");
        std::fs::write(&part, format!("{by}\n")).expect("written");
        std::fs::rename(part, &self.offset).expect("named");
    }

    fn start(&self, zone: &str) {
        let library = faketime();
        let settings: [(&str, &OsStr); 6] = [
            ("LD_PRELOAD", library.as_os_str()),
            ("FAKETIME_TIMESTAMP_FILE", self.offset.as_os_str()),
            ("FAKETIME_NO_CACHE", OsStr::new("1")),
            // Only the wall clock is put wrong: the other one cannot be set on any machine.
            ("FAKETIME_DONT_FAKE_MONOTONIC", OsStr::new("1")),
            ("DONT_FAKE_MONOTONIC", OsStr::new("1")),
            ("TZ", OsStr::new(zone)),
        ];
        self.station.start_in(&settings);
        wait_up(&self.station.state, PORTS);
        std::thread::sleep(Duration::from_millis(300));
    }

    fn clock_facts(&self) -> Vec<Value> {
        let facts = facts_after(&self.station.state, 0).unwrap_or_default();
        facts.into_iter().filter(|f| f["kind"].as_str().is_some_and(|k| k.starts_with("clock_"))).collect()
    }

    /// Waits for the n-th fact about the clock.
    fn told(&self, n: usize) -> Value {
        until(&format!("clock fact {n}"), PATIENCE, || self.clock_facts().len() >= n);
        assert_eq!(self.clock_facts().len(), n, "one fact for one step: {:#?}", self.clock_facts());
        self.clock_facts().remove(n - 1)
    }

    fn retained(&self, tail: &str) -> Value {
        let topic = format!("tarecup/v1/wet-room/{tail}");
        last(&self.heard.got).get(&topic).and_then(|p| serde_json::from_str(p).ok()).unwrap_or_default()
    }
}

fn specimen() -> Sheet {
    sheet(
        "Z-1",
        "d4318-multipoint",
        vec![
            liquid(&[28], "A1", "50.94", "66.74", &["62.99"]),
            liquid(&[21], "A2", "51.55", "67.56", &["63.53"]),
            liquid(&[15], "A3", "51.78", "66.90", &["62.94"]),
        ],
        vec![slice("A4", "51.80", "67.50", &["65.04"]), slice("A5", "50.90", "65.50", &["63.26"])],
    )
}

#[test]
fn steps_of_the_clock_are_facts_and_move_nothing() {
    let clocked = Clocked::new();
    clocked.start("Asia/Kolkata");
    std::thread::scope(|scope| {
        let work = scope.spawn(|| {
            let mut operator = Operator::at(&clocked.station, Cup::Numbered, true);
            operator.play(&specimen());
            operator.facts
        });
        std::thread::sleep(Duration::from_millis(1_500));
        assert_eq!(clocked.clock_facts(), Vec::<Value>::new(), "an honest clock says nothing: the control");
        for (n, (offset, by_s, trusted)) in
            (1..).zip([("-7200", -7_200, true), ("+0", 7_200, true), ("-1700000000", -1_700_000_000i64, false)])
        {
            clocked.set(offset);
            let fact = clocked.told(n);
            assert_eq!((&fact["kind"], &fact["fact"]["trusted"]), (&json!("clock_stepped"), &json!(trusted)), "{fact}");
            let by_us = fact["fact"]["by_us"].as_i64().expect("a number");
            assert!((by_us - by_s * SECOND_US).abs() < 2 * SECOND_US, "{offset}: {by_us} µs");
        }
        until("presence says so", PATIENCE, || clocked.retained("presence")["clock"].is_string());
        until("the bench says so", PATIENCE, || clocked.retained("bench/north")["clock"].is_string());
        let state = clocked.station.state.display().to_string();
        assert!(tarecup(&["status", "--state", &state]).out.contains("cannot be right"));
        clocked.set("+0");
        assert_eq!(clocked.told(4)["fact"]["trusted"], true);
        until("presence has nothing to say", PATIENCE, || clocked.retained("presence")["clock"].is_null());
        until("nor has the bench", PATIENCE, || clocked.retained("bench/north")["clock"].is_null());
        let facts = work.join().expect("the operator");
        let found = differences(&limits_of(&facts, "Z-1"), &judged(&[specimen()])[0]);
        assert!(found.is_empty(), "{found:#?}");
    });
    // The clock is set while the service is away, in the same start of the machine; another zone is no step.
    assert_eq!(clocked.station.term(), Some(0));
    clocked.start("America/St_Johns");
    assert_eq!(clocked.clock_facts().len(), 4, "a change of zone says nothing: the control");
    assert_eq!(clocked.station.term(), Some(0));
    clocked.set("+90000");
    clocked.start("UTC");
    let away = clocked.told(5);
    assert!((away["fact"]["by_us"].as_i64().expect("a number") - 90_000 * SECOND_US).abs() < 2 * SECOND_US, "{away}");
    assert_eq!(clocked.station.term(), Some(0), "{}", clocked.station.log());
    hours_and_order(&clocked.station.state);
    let kept = Kept::read(&clocked.station.state);
    let wrong = judge(&clocked.station.done.lock().expect("done"), &kept, None, Hearing::Every);
    assert!(wrong.is_empty(), "{wrong:#?}");
}

/// Wall time runs back in the record, its order does not, and no hour in the oven comes of it.
fn hours_and_order(state: &Path) {
    let facts = Kept::read(state).facts;
    let utc = |f: &Value| parse_rfc3339(f["at"].as_str().expect("a time")).expect("a time");
    assert!(facts.windows(2).any(|w| utc(&w[1]) < utc(&w[0]) - 3_600 * SECOND_US), "the clock did run back");
    let mono = |f: &Value| f["mono_us"].as_i64().expect("a number");
    let loaded = |f: &&Value| f["kind"] == "weighed" || f["kind"].as_str().is_some_and(|k| k.starts_with("clock_"));
    let kept: Vec<&Value> = facts.iter().filter(loaded).collect();
    assert!(kept.windows(2).all(|w| mono(w[0]) <= mono(w[1])), "what happened later stands later");
    let hours: Vec<f64> = facts
        .iter()
        .filter(|f| f["kind"] == "limits_computed")
        .flat_map(|f| f["fact"]["limits"]["trials"].as_array().cloned().unwrap_or_default())
        .filter_map(|t| t["oven_hours"].as_f64())
        .collect();
    assert!(hours.iter().all(|h| (0.0..0.1).contains(h)), "seconds in the oven are no hours: {hours:?}");
    let report = verify(state, None, &mut |_| ()).expect("a report");
    assert!(report.ok(), "{:?}", report.first_bad);
    let proof = prove(state, &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!((proof.first_bad(), proof.redecided), (None, Some(vec![])));
}

// ---- another start of the machine: the desk and its ledger alone -----------

/// 2026-03-02T07:30:00Z.
const START_US: i64 = 1_772_436_600_000_000;

struct Day {
    dir: tempfile::TempDir,
    desk: Option<Desk>,
    now: Stamp,
}

impl Day {
    fn new() -> Self {
        let mut day = Self { dir: tempfile::tempdir().expect("a folder"), desk: None, now: Stamp::default() };
        day.boot("first", START_US);
        day
    }

    /// The machine is started, with this on its clock.
    fn boot(&mut self, id: &str, utc_us: i64) {
        self.desk = None;
        let station = parse("(test)", "[[bench]]\nname = \"north\"\n").expect("settings");
        let profiles = compile_profiles(&station).expect("profiles");
        let setup = desk_setup(&station, &profiles, self.dir.path(), None, true);
        let stamp = |boot| Stamp { utc_us, mono_us: 20 * SECOND_US, boot };
        let (desk, _) = Desk::open(self.dir.path(), OpenOptions::new(id, utc_us), setup, stamp).expect("a desk");
        self.now = stamp(desk.boot());
        self.desk = Some(desk);
    }

    fn pass(&mut self, us: i64) {
        self.now = self.now.plus_us(us);
        let now = self.now;
        self.desk.as_mut().expect("a desk").step(&mut Vec::new(), &now, &mut Effects::default());
    }

    /// The clock is set, and the desk looks up.
    fn set(&mut self, utc_us: i64) {
        self.now.utc_us = utc_us;
        self.pass(SECOND_US);
    }

    fn ask(&mut self, wanted: Value) -> Value {
        let (tx, rx) = channel();
        let reply = Box::new(move |answer: String| drop(tx.send(answer)));
        let mut effects = Effects::default();
        let mut incoming = vec![Incoming::Ask { client: "t".into(), body: wanted.to_string(), reply }];
        let now = self.now;
        self.desk.as_mut().expect("a desk").step(&mut incoming, &now, &mut effects);
        effects.replies.drain(..).for_each(|(reply, answer)| reply(answer));
        serde_json::from_str(&rx.try_recv().expect("an answer")).expect("JSON")
    }

    fn done(&mut self, wanted: Value) -> Value {
        let answer = self.ask(wanted.clone());
        assert_eq!(answer["ok"], true, "{wanted}: {answer}");
        answer
    }

    fn mass(&mut self, container: &str, grams: &str, role: &str) {
        let bench = "north";
        self.done(
            json!({"ask": "type_mass", "bench": bench, "container": container, "mass_g": grams, "role": role, "who": "AB"}),
        );
    }

    /// Up to the oven.
    fn wet(&mut self) {
        self.done(json!({"ask": "open_specimen", "specimen": "Y-1", "method": "d4318-multipoint"}));
        self.mass("B1", "51.80", "tare");
        self.done(json!({"ask": "intend", "bench": "north", "specimen": "Y-1", "intention": "plastic"}));
        self.mass("B1", "67.50", "wet");
        self.done(json!({"ask": "into_oven", "containers": ["B1"]}));
        self.pass(HOUR_US);
    }

    fn shelf(&mut self) -> Value {
        self.done(json!({"ask": "shelf"}))["shelf"][0].clone()
    }

    fn kinds(&self, wanted: &str) -> usize {
        Kept::read(self.dir.path()).facts.iter().filter(|f| f["kind"] == wanted).count()
    }

    fn presence(&self) -> Value {
        self.desk.as_ref().expect("a desk").presence("up", &self.now)
    }
}

#[test]
fn a_start_at_1970_is_a_fact_and_only_proven_hours_count() {
    let mut day = Day::new();
    day.wet();
    assert!((day.shelf()["hours"].as_f64().expect("hours") - 1.0).abs() < 0.01);
    day.boot("second", 5 * SECOND_US);
    assert_eq!((day.kinds("clock_untrusted"), day.kinds("clock_stepped")), (1, 0));
    assert!(day.presence()["clock"].as_str().is_some_and(|s| s.contains("cannot be right")), "{}", day.presence());
    day.pass(3 * HOUR_US);
    let hours = day.shelf()["hours"].as_f64().expect("hours");
    assert!((3.0..3.1).contains(&hours), "since this start, not since 1970 nor less than nothing: {hours}");
    // The network sets the clock: years pass on it and not in the oven.
    day.set(START_US + 30 * HOUR_US);
    assert_eq!(day.kinds("clock_stepped"), 1);
    assert!(day.presence()["clock"].is_null());
    let hours = day.shelf()["hours"].as_f64().expect("hours");
    assert!((3.0..3.1).contains(&hours), "{hours}");
    assert_eq!(day.shelf()["ready"], false);
    day.mass("B1", "65.04", "dry");
    day.pass(SECOND_US);
    let specimen = day.done(json!({"ask": "document", "kind": "specimen", "id": "Y-1"}));
    let dry = specimen["document"]["trials"][0]["dries"][0].clone();
    assert_eq!(dry["basis"], "doubtful", "{dry}");
    let checks = specimen["document"]["limits"]["checks"].to_string();
    assert!(checks.contains("its clock was wrong"), "{checks}");
    let proof = prove(day.dir.path(), &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!((proof.first_bad(), proof.redecided), (None, Some(vec![])));
}

/// Control: the same day with a clock that is right has no fact, and the hours are those of the wall clock.
#[test]
fn a_start_with_an_honest_clock_says_nothing() {
    let mut day = Day::new();
    day.wet();
    day.boot("second", START_US + 20 * HOUR_US);
    let told = ["clock_untrusted", "clock_stepped", "clock_trusted"].map(|k| day.kinds(k));
    assert_eq!(told, [0, 0, 0]);
    assert!(day.presence()["clock"].is_null());
    day.pass(HOUR_US);
    let hours = day.shelf()["hours"].as_f64().expect("hours");
    assert!((20.9..21.1).contains(&hours), "{hours}");
    day.mass("B1", "65.04", "dry");
    let specimen = day.done(json!({"ask": "document", "kind": "specimen", "id": "Y-1"}));
    assert_eq!(specimen["document"]["trials"][0]["dries"][0]["basis"], "wall");
}

#[test]
fn a_clock_that_was_ahead_for_years_is_answered_for_by_a_person() {
    let mut day = Day::new();
    let refused = day.ask(json!({"ask": "clock_right", "who": "AB", "why": "looked"}));
    assert!(refused["error"]["says"].as_str().is_some_and(|s| s.contains("nothing is known against the clock")), "{refused}");
    day.boot("ahead", START_US + 90_000 * HOUR_US);
    day.wet();
    day.boot("right again", START_US + 40 * HOUR_US);
    assert_eq!(day.kinds("clock_untrusted"), 1);
    day.done(json!({"ask": "clock_right", "who": "AB", "why": "the year before was the error"}));
    assert!(day.presence()["clock"].is_null());
    assert_eq!(day.kinds("clock_trusted"), 1);
    // From here on the clock is good again, across starts too.
    day.boot("later", START_US + 50 * HOUR_US);
    assert_eq!(day.kinds("clock_untrusted"), 1);
    day.pass(HOUR_US);
    let hours = day.shelf()["hours"].as_f64().expect("hours");
    assert!((0.9..1.2).contains(&hours), "what lies across the error stays unproven: {hours}");
    let proof = prove(day.dir.path(), &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!((proof.first_bad(), proof.redecided), (None, Some(vec![])));
}
