//! The bench through the desk: a card read while the cup still runs, a determination that was moved and is corrected
//! after a restart, what a balance showed around a mass; and files of which only natural water contents are wanted.

mod e2e_support;

use e2e_support::{demo, last_limits, tarecup};
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::path::Path;
use std::sync::mpsc::channel;
use tarecup::desk::inbox::Incoming;
use tarecup::desk::{Desk, DeskSetup, Effects, InstrumentSetup, Kind};
use tarecup::ledger::{OpenOptions, Reader};
use tarecup_core::lab::{Linking, Setup};
use tarecup_core::names::{BenchName, InstrumentName, MethodName};
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{CountLimits, SettleLimits};
use tarecup_core::signal::{Basis, Mark, Reading, Signal};
use tarecup_core::stamp::{Boot, Stamp};
use tarecup_drivers::heard::{Batch, Frame, What};

const HOUR: i64 = 3_600_000;

fn at(ms: i64) -> Stamp {
    let us = 1_772_436_600_000_000 + ms * 1_000;
    Stamp { utc_us: us, mono_us: us, boot: Boot(1) }
}

fn decoded(bytes: &[u8]) -> What {
    match std::str::from_utf8(bytes).map(str::trim) {
        Ok("tick") => What::Signal(Signal::Drop),
        Ok(text) => text.parse::<f64>().map_or(What::Nothing, |g| What::Signal(reading(g))),
        Err(_) => What::Nothing,
    }
}

fn reading(grams: f64) -> Signal {
    let mass = Mass::from_ug((grams * 1e6).round() as i64);
    Signal::Mass(Reading { mass, step: Mass::from_ug(1_000), mark: Mark::Steady, basis: Basis::Gross })
}

fn setup() -> DeskSetup {
    let bench = BenchName::new("north").unwrap();
    let method: tarecup_core::method::Method = toml::from_str(include_str!("../config/methods/d4318-multipoint.toml")).unwrap();
    let name = MethodName::new("d4318-multipoint").unwrap();
    let one = |name: &str, kind: Kind| InstrumentSetup {
        name: InstrumentName::new(name).unwrap(),
        kind,
        benches: vec![bench.clone()],
        profile: "-".into(),
        port: "-".into(),
        settle: SettleLimits { change_from: Mass::from_ug(500_000), ..SettleLimits::default() },
        count: CountLimits::default(),
        streams: kind == Kind::Balance,
        decode: Box::new(decoded),
    };
    let instruments = vec![one("pan-1", Kind::Balance), one("cup-1", Kind::Counter)];
    DeskSetup {
        key: None,
        station: "test".into(),
        state_dir: String::new(),
        lab: Setup {
            balances: Default::default(),
            balance_rule: None,
            benches: vec![bench.clone()],
            instruments: instruments.iter().map(|i| (i.name.clone(), vec![bench.clone()])).collect::<BTreeMap<_, _>>(),
            methods: BTreeMap::from([(name.clone(), method)]),
            default_method: name,
            linking: Linking::default(),
        },
        instruments,
        settings: "{}".into(),
        retain_days: 30,
    }
}

fn open(dir: &Path) -> Desk {
    let options = OpenOptions::new("boot", at(0).utc_us);
    Desk::open(dir, options, setup(), |boot| Stamp { boot, ..at(0) }).expect("a desk").0
}

/// Lines of an instrument, one every `every_ms`.
fn lines(desk: &mut Desk, instrument: u16, begin_ms: i64, every_ms: i64, texts: &[String]) {
    let (mut bytes, mut frames) = (Vec::new(), Vec::new());
    for (n, text) in (0..).zip(texts) {
        bytes.extend_from_slice(format!("{text}\n").as_bytes());
        frames.push(Frame { end: bytes.len() as u32, at: at(begin_ms + n * every_ms), what: decoded(text.as_bytes()) });
    }
    let end = begin_ms + texts.len() as i64 * every_ms;
    let batch = Incoming::Batch(Batch { instrument, bytes, frames, read_at: None });
    desk.step(&mut vec![batch], &at(end), &mut Effects::default());
}

fn ask(desk: &mut Desk, ms: i64, ask: Value) -> Value {
    let (tx, rx) = channel();
    let reply = Box::new(move |answer: String| drop(tx.send(answer)));
    let mut effects = Effects::default();
    desk.step(&mut vec![Incoming::Ask { client: "t".into(), body: ask.to_string(), reply }], &at(ms), &mut effects);
    effects.replies.drain(..).for_each(|(reply, answer)| reply(answer));
    serde_json::from_str(&rx.try_recv().unwrap_or_default()).unwrap_or_default()
}

fn done(desk: &mut Desk, ms: i64, wanted: Value) -> u64 {
    let answer = ask(desk, ms, wanted.clone());
    assert_eq!(answer["ok"], true, "{wanted}: {answer}");
    answer["facts"][0].as_u64().unwrap_or(0)
}

fn facts(dir: &Path, kind: &str) -> Vec<Value> {
    let all = Reader::open(dir).unwrap().facts_after(0, 1_000).unwrap();
    let value = |f: &tarecup::ledger::FactStored| serde_json::from_slice::<Value>(&f.body).unwrap()["fact"].clone();
    all.iter().filter(|f| f.kind == kind).map(value).collect()
}

#[test]
fn a_card_read_while_the_cup_still_runs_is_for_that_run() {
    let dir = tempfile::tempdir().unwrap();
    let mut desk = open(dir.path());
    done(&mut desk, 0, json!({"ask": "open_specimen", "specimen": "S-1"}));
    done(&mut desk, 0, json!({"ask": "intend", "bench": "north", "specimen": "S-1", "intention": "liquid"}));
    let ticks = |n: usize| vec![String::from("tick"); n];
    lines(&mut desk, 1, 1_000, 500, &ticks(20));
    desk.step(&mut Vec::new(), &at(20_000), &mut Effects::default());
    lines(&mut desk, 1, 60_000, 500, &ticks(12));
    // The run is over only after its pause of five seconds; the card comes before.
    done(&mut desk, 67_000, json!({"ask": "code", "bench": "north", "text": "+slid"}));
    desk.step(&mut Vec::new(), &at(75_000), &mut Effects::default());
    done(&mut desk, 76_000, json!({"ask": "sign_in", "bench": "north", "operator": "AB"}));
    let counted = facts(dir.path(), "counted");
    let failed: Vec<(u64, bool)> = counted.iter().map(|c| (c["drops"].as_u64().unwrap(), c["failed"].is_object())).collect();
    assert_eq!(failed, [(20, false), (12, true)], "{counted:?}");
    let bench = ask(&mut desk, 77_000, json!({"ask": "document", "kind": "bench", "id": "north"}));
    assert_eq!(bench["document"]["owed"]["drops"], 20, "the count before it still waits for its slice");
    // Once a run is over, the card is for its count.
    done(&mut desk, 78_000, json!({"ask": "slid", "bench": "north"}));
    assert_eq!(facts(dir.path(), "set_aside")[0]["fault"], "slid");
}

#[test]
fn a_weighing_of_a_moved_and_finished_determination_is_corrected_after_a_restart() {
    let dir = tempfile::tempdir().unwrap();
    let mut desk = open(dir.path());
    for id in ["N-1", "N-2"] {
        done(&mut desk, 0, json!({"ask": "open_specimen", "specimen": id, "wanted": ["natural"]}));
    }
    done(&mut desk, 0, json!({"ask": "register_container", "container": "C1", "tare_g": "20.00", "who": "AB"}));
    done(&mut desk, 0, json!({"ask": "intend", "bench": "north", "specimen": "N-1", "intention": "natural"}));
    let mass = |grams: &str| json!({"ask": "type_mass", "bench": "north", "container": "C1", "mass_g": grams, "who": "AB"});
    let wet = done(&mut desk, 1_000, mass("50.00"));
    done(&mut desk, 2_000, json!({"ask": "into_oven", "containers": ["C1"]}));
    done(&mut desk, 16 * HOUR, mass("45.00"));
    let after = 16 * HOUR + 1_000;
    let moved =
        json!({"ask": "move_trial", "specimen": "N-1", "kind": "natural", "no": 1, "to": "N-2", "who": "CD", "why": "label"});
    done(&mut desk, after, moved);
    done(&mut desk, after, json!({"ask": "intend_nothing", "bench": "north"}));
    done(&mut desk, after, mass("20.01"));
    drop(desk);
    let mut desk = open(dir.path());
    let answer =
        ask(&mut desk, after, json!({"ask": "amend_mass", "weighing": wet, "mass_g": "50.50", "who": "CD", "why": "slip"}));
    assert_eq!(answer["ok"], true, "{answer}");
    let latest = facts(dir.path(), "limits_computed").pop().unwrap();
    assert_eq!((latest["specimen"].clone(), latest["limits"]["natural_water_percent"].clone()), (json!("N-2"), json!(22.0)));
}

#[test]
fn what_a_balance_showed_around_a_mass_is_kept_also_over_a_restart() {
    let dir = tempfile::tempdir().unwrap();
    let mut desk = open(dir.path());
    done(&mut desk, 0, json!({"ask": "code", "bench": "north", "text": "C1"}));
    let shown = |grams: &[f64]| -> Vec<String> { grams.iter().map(|g| format!("{g:.3}")).collect() };
    let creeping: Vec<f64> = (0..80).map(|n| 21.430 + f64::from(n / 10) * 0.002).collect();
    let on = [vec![0.004; 3], vec![21.430; 8], creeping, vec![0.0]].concat();
    lines(&mut desk, 0, 1_000, 100, &shown(&on));
    done(&mut desk, 11_000, json!({"ask": "sign_in", "bench": "north", "operator": "AB"}));
    let drift = facts(dir.path(), "pan_watched").pop().expect("it drifted");
    let per_s = drift["drift_ug_per_s"].as_i64().unwrap();
    assert!((1_800..=2_200).contains(&per_s), "2 mg every second: {drift}");
    drop(desk);
    let mut desk = open(dir.path());
    lines(&mut desk, 0, 12_000, 100, &shown(&[0.064; 4]));
    done(&mut desk, 13_000, json!({"ask": "sign_out", "bench": "north"}));
    let left = facts(dir.path(), "left_on_pan");
    assert_eq!(left.len(), 1, "told once");
    assert_eq!((left[0]["left"].clone(), left[0]["weighing"].clone()), (json!(60_000), drift["weighing"].clone()));
    let container = ask(&mut desk, 14_000, json!({"ask": "document", "kind": "container", "id": "C1"}));
    let seen = &container["document"]["tares"][0]["seen"];
    assert_eq!((seen["zero"].clone(), seen["left"].clone()), (json!(4_000), json!(60_000)), "{seen}");
    assert!(seen["stay"]["watched_ms"].as_u64().unwrap() > 5_000 && seen["trace"]["watched_ms"] == 700, "{seen}");
}

/// Water content of the natural rows: (50 − 45)/(45 − 20) = 20 %, (44 − 40)/(40 − 20) = 20 %.
const NATURAL: &str = r#"
title = "As it came"
[[specimen]]
id = "N-1"
natural = [
    { container = "C1", tare_g = 20.00, wet_g = 50.00, dry_g = 45.00 },
    { container = "C2", tare_g = 20.00, wet_g = 44.00, dry_g = 40.00 },
]
[[specimen]]
id = "N-2"
not_obtainable = ["liquid", "plastic"]
because = "sand"
"#;

#[test]
fn a_file_of_natural_water_contents_alone_and_one_without_any_limit_complete() {
    let dir = tempfile::tempdir().unwrap();
    let file = dir.path().join("natural.toml");
    std::fs::write(&file, NATURAL).unwrap();
    let (ended, messages) = demo(&file, None);
    assert_eq!(ended.code, 0, "{}", ended.err);
    let limits = last_limits(&messages, "N-1");
    assert_eq!((limits["state"].clone(), limits["natural_water_percent"].clone()), (json!("complete"), json!(20.0)));
    assert_eq!(last_limits(&messages, "N-2")["plasticity_index"]["non_plastic"], true);
    let stated = messages.iter().filter(|m| m["payload"]["kind"] == "not_obtainable").count();
    assert_eq!(stated, 2, "both limits are stated");
    let worked = tarecup(&["work", "--json", &file.display().to_string()]);
    let states: Vec<Value> = worked.out.lines().map(|l| serde_json::from_str::<Value>(l).unwrap()["state"].clone()).collect();
    assert_eq!(states, [json!("complete"), json!("complete")]);
    let table = tarecup(&["work", &file.display().to_string()]).out;
    assert!(table.contains("natural water content 20.00"), "{table}");
    // Control: with a liquid trial the limits are wanted again, and missing.
    let row = "[[specimen.liquid]]\ndrops = 25\ncontainer = \"C3\"\ntare_g = 20.0\nwet_g = 34.0\ndry_g = 30.0\n[[specimen]]\nid = \"N-2\"";
    std::fs::write(&file, NATURAL.replacen("[[specimen]]\nid = \"N-2\"", row, 1)).unwrap();
    let worked = tarecup(&["work", "--json", &file.display().to_string()]);
    let first: Value = serde_json::from_str(worked.out.lines().next().unwrap()).unwrap();
    assert_eq!(first["state"], "provisional");
}
