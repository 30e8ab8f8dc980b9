//! Recordings: what was recorded from a running service and is played again
//! leads to the facts of that day; stored folders lead to what is stored beside
//! them; a recording that cannot be written stops nothing.

mod e2e_support;

use e2e_support::operator::{Cup, PORTS, Station};
use e2e_support::*;
use serde_json::{Value, json};
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::time::Duration;

fn station() -> Station {
    Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port()))
}

/// What is the same however often it is played: no clock's number, no number of an input.
fn essence(fact: &Value) -> Value {
    const OWN: [&str; 14] = [
        "at",
        "mono_us",
        "boot",
        "utc_us",
        "through",
        "input",
        "first_input",
        "last_input",
        "digest",
        "v",
        "kind",
        "began",
        "duration_us",
        "rate_per_s",
    ];
    match fact {
        Value::Object(members) => {
            let kept = members.iter().filter(|(k, v)| !OWN.contains(&k.as_str()) && !v.is_null());
            Value::Object(kept.map(|(k, v)| (k.clone(), essence(v))).collect())
        }
        Value::Array(items) => Value::Array(items.iter().map(essence).collect()),
        other => other.clone(),
    }
}

/// What was recorded of the day itself, in order; starts and stops are not of it.
fn of_the_day(facts: &[Value]) -> Vec<Value> {
    let own =
        |f: &&Value| !["service_started", "service_stopped", "settings_taken"].contains(&f["kind"].as_str().unwrap_or_default());
    let bare = |f: &Value| {
        let mut fact = essence(&f["fact"]);
        // A stored fact has its kind beside it, a replayed one inside; the seq may shift only with the order.
        if let Some(kind) = f["kind"].as_str() {
            fact = json!({kind: fact});
        }
        fact
    };
    facts.iter().filter(own).map(bare).collect()
}

fn replayed(folder: &Path) -> Vec<Value> {
    let played = tarecup(&["replay", &folder.display().to_string(), "--json"]);
    assert_eq!(played.code, 0, "{}", played.err);
    messages(&played.out)
}

/// The facts of a replay, shaped like stored ones.
fn facts_of(lines: &[Value]) -> Vec<Value> {
    let fact = |l: &Value| {
        let (kind, fact) = match &l["fact"] {
            Value::Object(o) if o.contains_key("kind") => (o["kind"].clone(), o.get("fact").cloned().unwrap_or_default()),
            other => (Value::Null, other.clone()),
        };
        json!({"kind": kind, "fact": fact})
    };
    lines.iter().filter(|l| l["fact"].is_object()).map(fact).collect()
}

type Flow = fn(&Station);

/// A specimen of three trials at south, by hand and by instrument.
fn a_specimen(station: &Station) {
    let asked = |what: Value| assert_eq!(ask(&station.state, &what).expect("asked")["ok"], true, "{what}");
    let weighed = |code: &str, grams: &str| {
        asked(json!({"ask": "code", "bench": "north", "text": code}));
        station.load("pan-1", grams);
        std::thread::sleep(Duration::from_millis(60));
        station.unload("pan-1");
        std::thread::sleep(Duration::from_millis(60));
    };
    for (code, tare) in [("C1", "19.81"), ("C2", "22.95"), ("C3", "23.28")] {
        weighed(code, tare);
    }
    asked(json!({"ask": "sign_in", "bench": "north", "operator": "AB"}));
    asked(json!({"ask": "open_specimen", "specimen": "S-1"}));
    asked(json!({"ask": "intend", "bench": "north", "specimen": "S-1", "intention": "liquid"}));
    for (drops, code, wet) in [(32, "C1", "32.18"), (25, "C2", "38.19"), (18, "C3", "40.58")] {
        station.drops("cup-1", Cup::Numbered, drops, Duration::from_millis(25));
        std::thread::sleep(Duration::from_millis(150));
        weighed(code, wet);
    }
    asked(json!({"ask": "into_oven", "containers": ["C1", "C2", "C3"], "celsius": 110}));
    asked(json!({"ask": "out_of_oven", "containers": ["C1", "C2", "C3"]}));
    for (code, dry) in [("C1", "29.10"), ("C2", "34.31"), ("C3", "36.05")] {
        weighed(code, dry);
    }
}

/// Two cables exchanged while both were at work, and put right.
fn swapped_cables(station: &Station) {
    std::thread::sleep(Duration::from_millis(1_200));
    for n in 1..=6 {
        station.say("cup-2", "tick\r\n");
        station.say("pan-2", if n < 5 { "+      0.00 g  S\r\n" } else { "+     33.39 g  S\r\n" });
        std::thread::sleep(Duration::from_millis(120));
    }
    for _ in 0..8 {
        station.say("pan-2", "tick\r\n");
        station.say("cup-2", "+     33.39 g  S\r\n");
        std::thread::sleep(Duration::from_millis(120));
    }
    std::thread::sleep(Duration::from_millis(1_500));
    station.load("pan-2", "33.39");
    station.drops("cup-2", Cup::Unnumbered, 12, Duration::from_millis(40));
    std::thread::sleep(Duration::from_millis(300));
}

/// Noise of every sort, half a line at a pulled plug, an end that never comes.
fn noise_and_a_pulled_plug(station: &Station) {
    for noise in ["hello\r\n", "\u{1}\u{2}\r\n", "+  1 2.3 g  S\r\n", "\u{e9}\u{0}\r\n"] {
        station.say("pan-1", noise);
        std::thread::sleep(Duration::from_millis(20));
    }
    station.say("pan-2", &"7".repeat(600));
    station.say("cup-1", "DROP 1\r\nDRO");
    station.load("pan-1", "12.34");
    std::thread::sleep(Duration::from_millis(100));
    station.say("pan-1", "+     77.7");
    std::thread::sleep(Duration::from_millis(60));
    station.unplug("pan-1");
    until("lost", PATIENCE, || station.instrument("pan-1")["state"] == "port_lost");
    station.replug("pan-1");
    until("back", PATIENCE, || station.instrument("pan-1")["port_open"] == true);
    std::thread::sleep(Duration::from_millis(300));
    station.load("pan-1", "23.45");
    // What is left of the counter's line is given up.
    std::thread::sleep(Duration::from_millis(4_500));
}

const FLOWS: [(&str, Flow); 3] =
    [("a-specimen", a_specimen), ("swapped-cables", swapped_cables), ("noise-and-a-pulled-plug", noise_and_a_pulled_plug)];

#[test]
fn what_was_recorded_leads_to_the_facts_of_that_day() {
    for (name, flow) in FLOWS {
        let station = station();
        // To store a folder: the variable names the place of all of them.
        let kept = std::env::var_os("TARECUP_KEEP_RECORDINGS").map(PathBuf::from);
        let folder = kept.as_deref().unwrap_or(station.dir.path()).join(name);
        station.start_with(&["--record", &folder.display().to_string()]);
        wait_up(&station.state, PORTS);
        std::thread::sleep(Duration::from_millis(300));
        flow(&station);
        std::thread::sleep(Duration::from_millis(300));
        let live = facts_after(&station.state, 0).expect("facts");
        assert_eq!(status(&station.state).expect("status")["recording"]["lost"], 0, "{name}");
        assert_eq!(station.term(), Some(0));
        let lines = replayed(&folder);
        let (live, again) = (of_the_day(&live), of_the_day(&facts_of(&lines)));
        assert!(live.len() > 5, "{name}: {}", live.len());
        // The replay goes on a little longer than the recording: what is due then has no fellow in the live day.
        for (n, fact) in live.iter().enumerate() {
            assert_eq!(Some(fact), again.get(n), "{name}: fact {n} of {}", live.len());
        }
        if kept.is_some() {
            let text = tarecup(&["replay", &folder.display().to_string(), "--json"]).out;
            std::fs::write(folder.join("expected.ndjson"), text).expect("kept");
        }
    }
}

fn stored() -> Vec<PathBuf> {
    let folder = tests_dir().join("recordings");
    let mut all: Vec<PathBuf> = std::fs::read_dir(folder).expect("recordings").flatten().map(|e| e.path()).collect();
    all.sort();
    all
}

#[test]
fn each_stored_recording_leads_to_what_is_stored_beside_it() {
    let all = stored();
    assert!(all.len() >= 3, "{all:?}");
    for folder in &all {
        let checked = tarecup(&["replay", &folder.display().to_string(), "--check"]);
        assert_eq!(checked.code, 0, "{}: {}", folder.display(), checked.err);
        // Control: with one digit of what a port said changed, the check complains.
        let changed = tempfile::tempdir().expect("a folder");
        let mut touched = 0;
        for file in std::fs::read_dir(folder).expect("files").flatten() {
            let mut text = std::fs::read_to_string(file.path()).expect("a text");
            if file.file_name().to_string_lossy().starts_with("said-pan") {
                let other = text.replace("33.39", "33.38").replace("12.34", "12.35").replace("32.18", "32.19");
                touched += usize::from(other != text);
                text = other;
            }
            std::fs::write(changed.path().join(file.file_name()), text).expect("written");
        }
        let checked = tarecup(&["replay", &changed.path().display().to_string(), "--check"]);
        assert!(
            touched > 0 && checked.code == 1 && checked.err.contains("is different"),
            "{}: {}",
            folder.display(),
            checked.err
        );
    }
    // The specimen's result, judged by numpy from the masses and drops as they were said.
    let folder = tests_dir().join("recordings/a-specimen");
    let lines = replayed(&folder);
    let limits = &lines.iter().find(|l| l["limits"].is_object()).expect("a result")["limits"];
    let rows = vec![
        liquid(&[32], "C1", "19.81", "32.18", &["29.10"]),
        liquid(&[25], "C2", "22.95", "38.19", &["34.31"]),
        liquid(&[18], "C3", "23.28", "40.58", &["36.05"]),
    ];
    let theirs = &judged(&[sheet("S-1", "d4318-multipoint", rows, vec![])])[0];
    let found = differences(limits, theirs);
    let of_liquid: Vec<&String> = found.iter().filter(|d| d.starts_with("liquid_limit") || d.starts_with("waters")).collect();
    assert_eq!(of_liquid, Vec::<&String>::new(), "{found:?}");
    assert!(limits["liquid_limit"]["value"].as_f64().is_some_and(|v| (v - 34.15).abs() < 0.01), "{limits}");
}

#[test]
fn what_nobody_understood_is_kept_alone_and_rejected_again() {
    let station = station();
    let folder = station.dir.path().join("unread");
    station.start_with(&["--record-unread", &folder.display().to_string()]);
    wait_up(&station.state, PORTS);
    std::thread::sleep(Duration::from_millis(300));
    station.load("pan-1", "12.34");
    for n in 0..20 {
        station.say("pan-1", &format!("WEIGHT {n} OK\r\n"));
        std::thread::sleep(Duration::from_millis(5));
    }
    until("counted", PATIENCE, || station.instrument("pan-1")["rejects"]["no_pattern"] == 20);
    assert_eq!(station.term(), Some(0));
    let said = std::fs::read_to_string(folder.join("said-pan-1.ndjson")).expect("kept");
    assert!(said.contains("WEIGHT 19 OK") && !said.contains("12.34"), "only what was not understood: {said}");
    assert!(!folder.join("asks.ndjson").exists() && !folder.join("said-cup-1.ndjson").exists());
    let lines = replayed(&folder);
    let pan = lines.iter().find(|l| l["instrument"]["instrument"] == "pan-1").expect("an instrument");
    assert_eq!((&pan["instrument"]["rejects"]["no_pattern"], &pan["instrument"]["lines"]), (&json!(20), &json!(0)), "{pan}");
}

#[test]
fn a_recording_on_a_full_disk_stops_nothing_and_is_told() {
    let station = station();
    let disk = station.dir.path().join("disk");
    std::fs::create_dir(&disk).expect("a folder");
    // A disk of its own of 192 kB, seen by the service alone.
    let run = station.command();
    let words: Vec<String> = run.get_args().map(|a| a.to_string_lossy().into_owned()).collect();
    let script =
        format!("mount -t tmpfs -o size=192k none {0} && exec '{TARECUP}' {1} --record {0}/r", disk.display(), words.join(" "));
    let mut command = Command::new("unshare");
    command.args(["-rm", "sh", "-c", &script]).stdin(Stdio::null()).stderr(Stdio::null());
    let _service = Running::start(&mut command);
    wait_up(&station.state, PORTS);
    std::thread::sleep(Duration::from_millis(300));
    let recording = || status(&station.state).map(|s| s["recording"].clone()).unwrap_or_default();
    assert!(recording()["trouble"].is_null(), "control: at first there is room: {}", recording());
    for _ in 0..120 {
        station.say("pan-2", &"+      0.00 g  S\r\n".repeat(100));
        std::thread::sleep(Duration::from_millis(20));
    }
    until("the full disk is told", PATIENCE, || {
        recording()["trouble"].as_str().is_some_and(|t| t.contains("space")) && recording()["lost"].as_u64() > Some(0)
    });
    let shown = tarecup(&["status", "--state", &station.state.display().to_string()]);
    assert!(shown.code == 0 && shown.out.contains("TROUBLE") && shown.out.contains("reads lost"), "{}", shown.out);
    station.load("pan-1", "12.34");
    let weighed = || facts_after(&station.state, 0).unwrap_or_default().iter().any(|f| f["kind"] == "weighed");
    until("a mass is recorded all the same", PATIENCE, weighed);
}

#[test]
fn folders_that_are_no_recording_are_refused_in_words() {
    let dir = tempfile::tempdir().expect("a folder");
    let path = dir.path().display().to_string();
    let nothing = tarecup(&["replay", &path]);
    assert!(nothing.code == 2 && nothing.err.contains("recording.json"), "{}", nothing.err);
    let from = tests_dir().join("recordings/swapped-cables");
    for (file, text, words) in [
        ("recording.json", "{}", "no head of a recording"),
        (
            "recording.json",
            "{\"format\":\"tarecup recording\",\"v\":9,\"program\":\"\",\"began_utc_us\":0,\"began\":\"\",\"kept\":\"everything\",\"settings\":{}}",
            "version 9",
        ),
        ("said-pan-2.ndjson", "{\"t\":1,\"said\":\"x\"}\nnonsense\n", "line 2"),
        ("said-pan-2.ndjson", "{\"t\":1,\"hex\":\"0g\"}\n", "hexadecimal"),
        ("said-pan-2.ndjson", "{\"t\":1,\"port\":\"stolen\"}\n", "not 'stolen'"),
        ("asks.ndjson", "{\"t\":1}\n", "line 1"),
    ] {
        for entry in std::fs::read_dir(&from).expect("files").flatten() {
            std::fs::copy(entry.path(), dir.path().join(entry.file_name())).expect("copied");
        }
        std::fs::write(dir.path().join(file), text).expect("written");
        let refused = tarecup(&["replay", &path]);
        assert!(refused.code == 2 && refused.err.contains(words), "{words}: {}", refused.err);
        let _ = std::fs::remove_file(dir.path().join("asks.ndjson"));
    }
    // A folder in use is not written over.
    let again =
        tarecup(&["run", "--state", &dir.path().join("s").display().to_string(), "--record", &from.display().to_string()]);
    assert!(again.code == 2 && again.err.contains("a recording already"), "{}", again.err);
}
