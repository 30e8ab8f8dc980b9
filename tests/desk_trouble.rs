//! A commit that fails loses nothing and doubles nothing: what was taken is
//! held, refused in words while it lasts, and stored once when the cause is gone.

use std::collections::BTreeMap;
use std::path::Path;
use std::sync::mpsc::channel;
use tarecup::desk::inbox::Incoming;
use tarecup::desk::{Desk, DeskSetup, Effects, InstrumentSetup, Kind};
use tarecup::ledger::{OpenOptions, Reader, verify};
use tarecup_core::lab::{Linking, Setup};
use tarecup_core::names::{BenchName, InstrumentName, MethodName};
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{CountLimits, SettleLimits};
use tarecup_core::signal::{Basis, Mark, Reading, Signal};
use tarecup_core::stamp::{Boot, Stamp};
use tarecup_drivers::heard::{Batch, Frame, What};

fn at(ms: i64) -> Stamp {
    let us = 1_772_436_600_000_000 + ms * 1_000;
    Stamp { utc_us: us, mono_us: us, boot: Boot(1) }
}

fn setup() -> DeskSetup {
    let bench = BenchName::new("north").expect("a name");
    let pan = InstrumentName::new("pan-1").expect("a name");
    let method: tarecup_core::method::Method =
        toml::from_str(include_str!("../config/methods/d4318-multipoint.toml")).expect("a method");
    let name = MethodName::new("d4318-multipoint").expect("a name");
    DeskSetup {
        key: None,
        station: "test".into(),
        state_dir: String::new(),
        lab: Setup {
            benches: vec![bench.clone()],
            instruments: BTreeMap::from([(pan.clone(), vec![bench.clone()])]),
            methods: BTreeMap::from([(name.clone(), method)]),
            default_method: name,
            linking: Linking::default(),
            balances: BTreeMap::new(),
            balance_rule: None,
        },
        instruments: vec![InstrumentSetup {
            name: pan,
            kind: Kind::Balance,
            benches: vec![bench],
            profile: "signed-steady".into(),
            port: "-".into(),
            settle: SettleLimits::default(),
            count: CountLimits::default(),
            streams: true,
            decode: Box::new(|bytes| match std::str::from_utf8(bytes).ok().and_then(|t| t.trim().parse::<f64>().ok()) {
                Some(g) => What::Signal(reading(g)),
                None => What::Nothing,
            }),
        }],
        settings: "{}".into(),
        retain_days: 30,
    }
}

fn reading(grams: f64) -> Signal {
    let mass = Mass::from_ug((grams * 1e6).round() as i64);
    Signal::Mass(Reading { mass, step: Mass::from_ug(10_000), mark: Mark::Steady, basis: Basis::Gross })
}

/// Ten steady lines of a placement, then two of the empty pan.
fn placement(grams: f64, begin_ms: i64) -> Incoming {
    let (mut bytes, mut frames) = (Vec::new(), Vec::new());
    for n in 0..12 {
        let shown = if n < 10 { grams } else { 0.0 };
        bytes.extend_from_slice(format!("{shown:.2}\n").as_bytes());
        frames.push(Frame { end: bytes.len() as u32, at: at(begin_ms + n * 100), what: What::Signal(reading(shown)) });
    }
    Incoming::Batch(Batch { instrument: 0, bytes, frames, read_at: None })
}

fn open(dir: &Path) -> Desk {
    let options = OpenOptions::new("boot", at(0).utc_us);
    Desk::open(dir, options, setup(), |boot| Stamp { boot, ..at(0) }).expect("a desk").0
}

fn ask(desk: &mut Desk, ms: i64, json: &str) -> (String, Effects) {
    let (tx, rx) = channel();
    let reply = Box::new(move |answer: String| {
        let _ = tx.send(answer);
    });
    let mut effects = Effects::default();
    let mut incoming = vec![Incoming::Ask { client: "t".into(), body: json.into(), reply }];
    desk.step(&mut incoming, &at(ms), &mut effects);
    for (reply, answer) in effects.replies.drain(..) {
        reply(answer);
    }
    (rx.try_recv().unwrap_or_default(), effects)
}

fn weighed(dir: &Path) -> Vec<(u64, i64)> {
    let facts = Reader::open(dir).expect("a reader").facts_after(0, 1_000).expect("facts");
    let value = |f: &tarecup::ledger::FactStored| -> serde_json::Value { serde_json::from_slice(&f.body).expect("JSON") };
    facts.iter().filter(|f| f.kind == "weighed").map(|f| (f.seq, value(f)["fact"]["mass_ug"].as_i64().unwrap_or(0))).collect()
}

/// Somebody else holds the file: every commit fails until it is let go.
fn hold(dir: &Path) -> rusqlite::Connection {
    let other = rusqlite::Connection::open(dir.join("ledger.sqlite")).expect("the file");
    other.execute_batch("BEGIN IMMEDIATE").expect("the lock");
    other
}

#[test]
fn a_failed_commit_loses_and_doubles_nothing() {
    let dir = tempfile::tempdir().expect("a folder");
    let mut desk = open(dir.path());
    let mut effects = Effects::default();
    desk.step(&mut vec![placement(21.43, 1_000)], &at(3_000), &mut effects);
    assert_eq!(effects.facts.len(), 3, "speaking, weighed, lifted");

    let other = hold(dir.path());
    let mut effects = Effects::default();
    desk.step(&mut vec![placement(38.22, 4_000)], &at(6_000), &mut effects);
    assert!(desk.not_recording().is_some(), "the commit cannot have worked");
    assert!(effects.facts.is_empty() && effects.live.is_empty(), "nothing may leave that is not stored");
    assert!(effects.presence, "and it is said at once");
    let (answer, _) = ask(&mut desk, 6_100, r#"{"ask":"sign_in","bench":"north","operator":"AB"}"#);
    assert!(answer.contains("nothing is being recorded"), "{answer}");

    let mut effects = Effects::default();
    desk.recover(&at(6_500), &mut effects);
    assert!(desk.not_recording().is_some(), "still held: the control");
    drop(other);
    let mut effects = Effects::default();
    desk.recover(&at(7_000), &mut effects);
    assert_eq!(desk.not_recording(), None);
    assert_eq!(effects.facts.len(), 2, "the weighing that waited leaves once it is stored");

    desk.step(&mut vec![placement(33.39, 8_000)], &at(10_000), &mut Effects::default());
    let masses: Vec<i64> = weighed(dir.path()).into_iter().map(|(_, m)| m).collect();
    assert_eq!(masses, [21_430_000, 38_220_000, 33_390_000]);
    let report = verify(dir.path(), None, &mut |_| ()).expect("a report");
    assert!(report.ok(), "{:?}", report.first_bad);
    // 36 lines, start, settings; each once.
    assert_eq!(report.inputs, 38);
}

#[test]
fn a_desk_opened_again_knows_what_lies_on_the_pan() {
    let dir = tempfile::tempdir().expect("a folder");
    let mut desk = open(dir.path());
    let Incoming::Batch(mut batch) = placement(21.43, 1_000) else { panic!("a batch") };
    // Cut off while the container is still on the pan.
    batch.frames.truncate(10);
    batch.bytes.truncate(batch.frames[9].end as usize);
    desk.step(&mut vec![Incoming::Batch(batch)], &at(2_000), &mut Effects::default());
    drop(desk);
    let mut desk = open(dir.path());
    desk.step(&mut vec![placement(21.43, 5_000)], &at(7_000), &mut Effects::default());
    assert_eq!(weighed(dir.path()).len(), 1, "still the same placement");
    // The control: after it was lifted, the same mass is a new weighing.
    desk.step(&mut vec![placement(21.43, 9_000)], &at(11_000), &mut Effects::default());
    assert_eq!(weighed(dir.path()).len(), 2);
}

#[test]
fn the_same_ask_under_the_same_id_is_done_once() {
    let dir = tempfile::tempdir().expect("a folder");
    let mut desk = open(dir.path());
    let open_it = r#"{"ask":"open_specimen","specimen":"S-1","ask_id":"a"}"#;
    let (first, effects) = ask(&mut desk, 100, open_it);
    assert!(first.contains("\"ok\":true") && effects.facts.len() == 1, "{first}");
    let (again, effects) = ask(&mut desk, 200, open_it);
    assert_eq!((again, effects.facts.len()), (first, 0));
    let (other, _) = ask(&mut desk, 300, r#"{"ask":"open_specimen","specimen":"S-2","ask_id":"a"}"#);
    assert!(other.contains("another ask was made under this id"), "{other}");
    // The control: without an id it is a new ask, and refused for what it is.
    let (plain, _) = ask(&mut desk, 400, r#"{"ask":"open_specimen","specimen":"S-1"}"#);
    assert!(plain.contains("open already"), "{plain}");
}

/// Lines that lead to nothing: the pan shows almost zero.
fn idle_lines(lines: i64, begin_ms: i64) -> Incoming {
    let (mut bytes, mut frames) = (Vec::new(), Vec::new());
    for n in 0..lines {
        bytes.extend_from_slice(b"0.00\n");
        frames.push(Frame { end: bytes.len() as u32, at: at(begin_ms + n), what: What::Signal(reading(0.0)) });
    }
    Incoming::Batch(Batch { instrument: 0, bytes, frames, read_at: None })
}

#[test]
fn a_balance_that_speaks_for_days_gets_a_fact_now_and_then() {
    let dir = tempfile::tempdir().expect("a folder");
    let mut desk = open(dir.path());
    let kept = |dir: &Path| {
        let facts = Reader::open(dir).expect("a reader").facts_after(0, 1_000).expect("facts");
        facts.iter().filter(|f| f.kind == "lines_kept").count()
    };
    for n in 0..19 {
        let begin = 1_000 + n * 10_000;
        desk.step(&mut vec![idle_lines(10_000, begin)], &at(begin + 10_000), &mut Effects::default());
    }
    assert_eq!(kept(dir.path()), 0, "not yet: the control");
    for n in 19..22 {
        let begin = 1_000 + n * 10_000;
        desk.step(&mut vec![idle_lines(10_000, begin)], &at(begin + 10_000), &mut Effects::default());
    }
    assert_eq!(kept(dir.path()), 1);
    assert!(verify(dir.path(), None, &mut |_| ()).expect("a report").ok());
}
