//! The whole service with instruments that are read over Modbus: a mass and a
//! count reach the record, and the record's bytes give them again.

#[path = "drivers_modbus_support.rs"]
mod bus;
mod e2e_support;

use bus::{Cable, MASS, Server, TOTAL, alone};
use e2e_support::{Running, TARECUP, ask, facts_after, free_port, status, until, wait_up};
use serde_json::{Value, json};
use std::path::Path;
use std::process::{Command, Stdio};
use std::time::Duration;
use tarecup::ledger::Reader;
use tarecup_core::signal::Signal;
use tarecup_drivers::heard::What;

const LONG: Duration = Duration::from_secs(30);

/// A profile's tables as they stand in a configuration file.
fn named(name: &str, text: &str) -> String {
    let text =
        text.replace("[[modbus.", &format!("[[profile.{name}.modbus.")).replace("[modbus]", &format!("[profile.{name}.modbus]"));
    format!("[profile.{name}]\n{}", text.trim_start())
}

fn config(pan: &Path, cup: &str) -> String {
    let instrument = |name: &str, kind: &str, port: &str, profile: &str| {
        format!(
            "[[instrument]]\nname = \"{name}\"\nkind = \"{kind}\"\nbench = \"north\"\nport = \"{port}\"\nprofile = \"{profile}\"\n"
        )
    };
    format!(
        "[screen]\nenabled = false\n[broker]\nlisten = \"127.0.0.1:{}\"\n[[bench]]\nname = \"north\"\n{}{}{}{}",
        free_port(),
        instrument("pan-1", "balance", &pan.display().to_string(), "pan-bus"),
        instrument("cup-1", "counter", cup, "cup-bus") + "pause_ms = 1500\n",
        named("pan-bus", MASS),
        named("cup-bus", &TOTAL.replace("every_ms = 50", "every_ms = 100")),
    )
}

fn run(config: &Path, state: &Path) -> Running {
    let mut command = Command::new(TARECUP);
    command.args(["run", "--config"]).arg(config).arg("--state").arg(state).stdout(Stdio::null()).stderr(Stdio::null());
    let service = Running::start(&mut command);
    wait_up(state, 2);
    service
}

fn of_kind(state: &Path, kind: &str) -> Vec<Value> {
    facts_after(state, 0).unwrap_or_default().into_iter().filter(|f| f["kind"] == kind).collect()
}

/// Puts a mass on the pan, in hundredths of a gram, and takes it off when it was weighed.
fn weigh(pan: &Server, state: &Path, grams_100: u16, container: &str) {
    let before = of_kind(state, "weighed").len();
    let read = ask(state, &json!({"ask": "code", "bench": "north", "text": container})).expect("answered");
    assert_eq!(read["ok"], true, "{read}");
    pan.told(&format!("holding 0 0 {grams_100} 1"));
    until("the mass is taken", LONG, || of_kind(state, "weighed").len() > before);
    pan.told("holding 0 0 0 1");
    std::thread::sleep(Duration::from_millis(400));
}

#[test]
fn a_mass_and_a_count_read_over_modbus_reach_the_record() {
    let _alone = alone();
    let folder = tempfile::tempdir().expect("a folder");
    let (state, path) = (folder.path().join("state"), folder.path().join("bench.toml"));
    let cable = Cable::new();
    let pan = Server::serial(&cable);
    pan.told("holding 2 1");
    let (cup, address) = Server::tcp("rtu-tcp", None);
    std::fs::write(&path, config(&cable.here(), &address)).expect("written");
    let mut service = run(&path, &state);
    weigh(&pan, &state, 1_981, "C1");
    for n in 1..=12 {
        cup.told(&format!("input 7 {n}"));
        std::thread::sleep(Duration::from_millis(250));
    }
    until("the count is over", LONG, || !of_kind(&state, "counted").is_empty());
    let counted = &of_kind(&state, "counted")[0]["fact"]["run"];
    assert_eq!((&counted["drops"], &counted["gaps"], &counted["doubles"]), (&json!(12), &json!(0), &json!(0)), "{counted}");
    // The motor went on to turn nothing: the total stands, and no second run comes of it.
    std::thread::sleep(Duration::from_secs(2));
    assert_eq!(of_kind(&state, "counted").len(), 1);
    let state_of = |name: &str| {
        let instruments = status(&state).expect("a status")["instruments"].clone();
        instruments.as_array().and_then(|all| all.iter().find(|i| i["instrument"] == name).cloned()).expect(name)["state"].clone()
    };
    assert_eq!((state_of("pan-1"), state_of("cup-1")), (json!("speaking"), json!("speaking")));
    // A counter that no longer answers is told, as a balance would be.
    cup.told("mute on");
    until("silence is told", LONG, || state_of("cup-1") == "silent");
    cup.told("mute off");

    // Killed and started again, it goes on from the stored bytes.
    service.kill9();
    let service = run(&path, &state);
    weigh(&pan, &state, 2_295, "C2");
    let weighed = of_kind(&state, "weighed");
    let masses: Vec<i64> = weighed.iter().filter_map(|f| f["fact"]["mass_ug"].as_i64()).collect();
    assert_eq!(masses, [19_810_000, 22_950_000], "{weighed:?}");
    drop(service);

    // The line that a mass names holds the answer as it came, and it reads the same again.
    let reader = Reader::open(&state).expect("a ledger");
    let profile = bus::profile(MASS);
    for (fact, ug) in weighed.iter().zip(masses) {
        let no = fact["fact"]["taken"]["input"].as_u64().expect("the line it rests on");
        let input = &reader.inputs_from(no, 1, Some("pan-1")).expect("an input")[0];
        assert_eq!((input.no, input.bytes.len()), (no, 11));
        assert!(matches!(profile.decode(&input.bytes), What::Signal(Signal::Mass(r)) if r.mass.ug() == ug));
    }
}
