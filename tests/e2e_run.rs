//! `tarecup run` as a laboratory uses it: the bench of the README, typed from
//! the README; noise, a pulled plug, a second service, an orderly stop.

mod e2e_support;

use e2e_support::operator::{Cup, Operator, PORTS, Station, limits_of};
use e2e_support::subscriber::{MosquittoSub, last};
use e2e_support::*;
use serde_json::{Value, json};
use std::io::{BufRead, BufReader, Write};
use std::path::Path;
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

/// The fenced blocks of a language in the README, in order.
fn blocks(readme: &str, language: &str) -> Vec<String> {
    let fence = format!("```{language}\n");
    readme.split(&fence).skip(1).filter_map(|rest| rest.split("```").next()).map(str::to_owned).collect()
}

/// The script of the README that plays a bench, in a hurry, with its words typed to it.
struct Script {
    running: Running,
    out: BufReader<std::process::ChildStdout>,
}

impl Script {
    fn start(text: &str, folder: &Path) -> Self {
        let mut text = text.replace("/tmp/bench", &folder.display().to_string());
        for (usual, hurry) in [("sleep(0.1)", "sleep(0.02)"), ("sleep(0.5)", "sleep(0.05)"), ("sleep(1.5)", "sleep(0.5)")] {
            assert!(text.contains(usual), "the README's script has {usual}");
            text = text.replace(usual, hurry);
        }
        let path = folder.join("bench.py");
        std::fs::write(&path, text).expect("written");
        let mut command = Command::new("python3");
        let mut running = Running::start(command.arg(&path).stdin(Stdio::piped()).stdout(Stdio::piped()));
        let out = BufReader::new(running.0.stdout.take().expect("piped"));
        until("the script's ports are there", PATIENCE, || folder.join("scan-1").exists());
        Self { running, out }
    }

    /// Types one line and waits for its `done`.
    fn types(&mut self, line: &str) {
        let stdin = self.running.0.stdin.as_mut().expect("piped");
        writeln!(stdin, "{line}").expect("typed");
        let mut said = String::new();
        self.out.read_line(&mut said).expect("read");
        assert_eq!(said.trim(), "done", "{line}");
    }
}

/// One line of the README's walk, as a person types it.
fn walk(line: &str, state: &Path, script: &mut Script, sleep: Duration) {
    if let Some(words) = line.strip_prefix("tarecup ask --state /tmp/tarecup ") {
        let shell = format!("'{TARECUP}' ask --state '{}' {words}", state.display());
        let out = Command::new("sh").args(["-c", &shell]).output().expect("a shell");
        let says = String::from_utf8_lossy(&out.stdout);
        assert_eq!(out.status.code(), Some(0), "{line}: {says}");
        assert!(says.contains("\"ok\":true"), "{line}: {says}");
    } else if ["weigh ", "cup ", "scan "].iter().any(|w| line.starts_with(w)) {
        script.types(line);
        // A person looks at the screen before going on.
        std::thread::sleep(sleep);
    }
}

/// Step 10: a person answers the holds, another reviews.
fn reviewed(readme: &str, state: &Path, script: &mut Script, limits: &Value) {
    let step = readme.split("**10. The result**").nth(1).and_then(|r| r.split("## Commands").next()).expect("step 10");
    let lines: Vec<&str> = step.lines().map(str::trim).filter(|l| l.starts_with("tarecup ask")).collect();
    let [answer, review] = lines.as_slice() else { panic!("an answer and a review: {lines:?}") };
    let holds = limits["checks"].as_array().into_iter().flatten().filter(|c| c["severity"] == "hold");
    let about: Vec<&str> = holds.filter_map(|c| c["about"].as_str()).collect();
    assert!(about.contains(&"liquid 1"), "{about:?}");
    // The README answers each of them in a loop.
    for about in about {
        assert!(step.contains(&format!("\"{about}\"")), "{about} is not in the loop of step 10");
        walk(&answer.replace("$what", about), state, script, Duration::ZERO);
    }
    walk(review, state, script, Duration::ZERO);
    let limits = limits_of(&facts_after(state, 0).expect("facts"), "S-101");
    assert_eq!(limits["state"], "reviewed");
}

#[test]
fn the_bench_of_the_readme_works_as_it_says() {
    let readme = std::fs::read_to_string(tests_dir().join("../README.md")).expect("the README");
    let dir = tempfile::tempdir().expect("a folder");
    let config = blocks(&readme, "toml").into_iter().find(|b| b.contains("pan-1")).expect("a first bench's configuration");
    let python = blocks(&readme, "python").remove(0);
    let config = config.replace("/tmp/bench", &dir.path().display().to_string());
    // The usual port may be taken on the machine that runs this.
    let config = format!("{config}\n[screen]\nenabled = false\n[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port());
    let path = dir.path().join("bench.toml");
    std::fs::write(&path, &config).expect("written");
    let checked = tarecup(&["check", "--config", &path.display().to_string()]);
    assert_eq!(checked.code, 0, "{}", checked.err);

    let mut script = Script::start(&python, dir.path());
    let state = dir.path().join("state");
    let mut command = Command::new(TARECUP);
    command.args(["run", "--config"]).arg(&path).arg("--state").arg(&state).stderr(Stdio::null());
    let mut service = Running::start(&mut command);
    wait_up(&state, 3);
    std::thread::sleep(Duration::from_millis(300));
    let steps = readme.split("**4. Weigh").nth(1).and_then(|r| r.split("**10. The result**").next()).expect("steps 4 to 9");
    let mut walked = 0;
    for line in steps.lines() {
        walk(line, &state, &mut script, Duration::from_millis(100));
        walked += 1;
    }
    assert!(walked > 20);
    let limits = limits_of(&facts_after(&state, 0).expect("facts"), "S-101");
    // The same masses by numpy; the README's own figures to their digits.
    let sheet = sheet(
        "S-101",
        "d4318-multipoint",
        vec![
            liquid(&[32], "C1", "19.81", "32.18", &["29.10"]),
            liquid(&[25], "C2", "22.95", "38.19", &["34.31"]),
            liquid(&[18], "C3", "23.28", "40.58", &["36.05"]),
        ],
        vec![slice("C4", "23.25", "32.11", &["30.75"]), slice("C5", "23.18", "32.05", &["30.66"])],
    );
    assert_eq!(differences(&limits, &judged(&[sheet])[0]), Vec::<String>::new());
    for (part, said) in [("liquid_limit", "34.15"), ("plastic_limit", "18.36"), ("plasticity_index", "15.79")] {
        let value = limits[part]["value"].as_f64().unwrap_or(f64::NAN);
        assert_eq!(format!("{value:.2}"), said, "{part}");
        assert!(readme.contains(said), "the README says {said}");
    }
    assert_eq!((&limits["group"], &limits["state"]), (&json!("CL"), &json!("provisional")));
    reviewed(&readme, &state, &mut script, &limits);
    service.signal(rustix::process::Signal::TERM);
    assert_eq!(service.wait(PATIENCE).code(), Some(0));
}

fn station() -> Station {
    Station::new(&format!("[screen]\nenabled = false\n[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port()))
}

fn rejects(instrument: &Value) -> u64 {
    instrument["rejects"].as_object().into_iter().flatten().filter_map(|(_, n)| n.as_u64()).sum()
}

#[test]
fn noise_is_counted_by_reason_and_never_a_mass() {
    let station = station();
    station.start();
    wait_up(&station.state, PORTS);
    std::thread::sleep(Duration::from_millis(300));
    let seq = || status(&station.state).and_then(|s| s["seq"].as_u64()).unwrap_or(0);
    station.say("pan-1", "+     12.34 g  S\r\n");
    until("a good line is understood", PATIENCE, || station.instrument("pan-1")["lines"].as_u64() > Some(0));
    let lines = |name: &str| station.instrument(name)["lines"].as_u64().unwrap_or(0);
    let understood = lines("pan-1");
    let noise: [&str; 5] = ["hello\r\n", "+  12.3.4 g  S\r\n", "12.34\r\n", "\u{1}\u{2}\u{3}\r\n", "+      99 g  S\r\n"];
    noise.iter().for_each(|n| station.say("pan-1", n));
    until("each is counted", PATIENCE, || rejects(&station.instrument("pan-1")) == noise.len() as u64);
    let pan = station.instrument("pan-1");
    assert_eq!(pan["state"], "wrong_language", "so many in a row are said aloud: {pan}");
    assert_eq!(lines("pan-1"), understood, "{pan}");
    let shown = tarecup(&["status", "--state", &station.state.display().to_string()]);
    let line = shown.out.lines().find(|l| l.starts_with("pan-1")).unwrap_or_default().to_owned();
    assert!(line.contains("5 not understood"), "{line}");
    for (reason, n) in pan["rejects"].as_object().expect("reasons") {
        assert!(line.contains(&format!("({reason} {n})")), "{reason} {n} in {line}");
    }
    let facts = facts_after(&station.state, 0).expect("facts");
    assert!(facts.iter().all(|f| f["kind"] != "weighed"), "noise is never a mass");
    // A counter's word on a balance's port is no count, and the reverse.
    let before = seq();
    station.say("cup-1", &"+     12.34 g  S\r\n".repeat(12));
    until("counted there too", PATIENCE, || rejects(&station.instrument("cup-1")) == 12);
    station.say("pan-1", &"DROP 1\r\nDROP 2\r\nSTOP 2\r\n".repeat(3));
    until("and there", PATIENCE, || rejects(&station.instrument("pan-1")) == 14);
    let facts = facts_after(&station.state, before).expect("facts");
    assert!(facts.iter().all(|f| f["kind"] == "instrument_changed"), "{facts:?}");
    // Control: the next good lines are taken: a mass, loose because nothing is in hand.
    station.load("pan-1", "12.34");
    let weighed = || facts_after(&station.state, before).unwrap_or_default().into_iter().find(|f| f["kind"] == "weighed");
    until("a mass is taken", PATIENCE, || weighed().is_some());
    let weighed = weighed().expect("weighed");
    assert!(weighed["fact"]["mass_ug"] == 12_340_000 && weighed["fact"]["loose"].is_string(), "{weighed}");
}

#[test]
fn a_pulled_plug_is_told_and_back_within_two_seconds() {
    let station = station();
    station.start();
    wait_up(&station.state, PORTS);
    let open = |name: &str| station.instrument(name)["port_open"] == true;
    let mut worst = Duration::ZERO;
    for round in 0..3u32 {
        std::thread::sleep(Duration::from_millis(300));
        // A half line before the cut is no mass.
        station.say("pan-1", "+     77.7");
        std::thread::sleep(Duration::from_millis(50));
        station.unplug("pan-1");
        until("the loss is told", Duration::from_secs(5), || station.instrument("pan-1")["state"] == "port_lost");
        assert!(open("cup-1") && open("pan-2"), "the others stay open");
        std::thread::sleep(Duration::from_millis(u64::from(round) * 700));
        station.replug("pan-1");
        let began = Instant::now();
        until("the port is open again", Duration::from_secs(10), || open("pan-1"));
        worst = worst.max(began.elapsed());
    }
    println!("a port that is back is open again after {} ms at worst", worst.as_millis());
    assert!(worst <= Duration::from_secs(2), "{worst:?}");
    std::thread::sleep(Duration::from_millis(300));
    station.load("pan-1", "23.45");
    let masses = || -> Vec<Value> {
        let facts = facts_after(&station.state, 0).unwrap_or_default();
        facts.iter().filter(|f| f["kind"] == "weighed").map(|f| f["fact"]["mass_ug"].clone()).collect()
    };
    until("the next mass is taken", PATIENCE, || !masses().is_empty());
    assert_eq!(masses(), [json!(23_450_000)], "and nothing of the half lines");
    assert!(rejects(&station.instrument("pan-1")) >= 3, "the half lines are counted: {}", station.instrument("pan-1"));
    // Control: a port that is not there is not called open.
    station.unplug("pan-2");
    until("gone", Duration::from_secs(5), || !open("pan-2"));
}

#[test]
fn a_second_service_on_the_same_ledger_leaves_at_once_naming_the_first() {
    let station = station();
    station.start();
    wait_up(&station.state, PORTS);
    let before = status(&station.state).expect("status");
    let began = Instant::now();
    let second =
        tarecup(&["run", "--config", &station.config.display().to_string(), "--state", &station.state.display().to_string()]);
    let took = began.elapsed();
    assert_eq!(second.code, 1, "{}", second.err);
    assert!(took <= Duration::from_secs(1), "it took {took:?}");
    assert!(second.err.contains(&station.pid().to_string()), "names process {}: {}", station.pid(), second.err);
    let after = status(&station.state).expect("the first is undisturbed");
    assert_eq!((&before["seq"], &before["hash"]), (&after["seq"], &after["hash"]));
    assert_eq!(after["instruments"].as_array().map(|i| i.iter().filter(|i| i["port_open"] == true).count()), Some(PORTS));
    // On a ledger of its own it starts, but the ports are held: it says by whom.
    let other = station.dir.path().join("other");
    let config = std::fs::read_to_string(&station.config).expect("read");
    let own = station.dir.path().join("own.toml");
    let listen = config.lines().find(|l| l.starts_with("listen")).expect("an address").to_owned();
    std::fs::write(&own, config.replace(&listen, &format!("listen = \"127.0.0.1:{}\"", free_port()))).expect("written");
    let mut command = Command::new(TARECUP);
    command.args(["run", "--config"]).arg(&own).arg("--state").arg(&other).stderr(Stdio::null());
    let mut third = Running::start(&mut command);
    until("it answers", PATIENCE, || status(&other).is_some());
    let detail = || status(&other).map(|s| s["instruments"][0].clone()).unwrap_or_default();
    until("the port is refused in words", PATIENCE, || {
        detail()["detail"].as_str().is_some_and(|d| d.contains(&station.pid().to_string()))
    });
    assert_eq!(detail()["port_open"], false);
    // Control: when the first has gone, the same command runs.
    third.kill9();
    assert_eq!(station.term(), Some(0));
    station.start();
    wait_up(&station.state, PORTS);
}

#[test]
fn an_orderly_stop_says_so_and_loses_nothing() {
    let port = free_port();
    let station = Station::new(&format!("[screen]\nenabled = false\n[broker]\nlisten = \"127.0.0.1:{port}\"\n"));
    station.start();
    wait_up(&station.state, PORTS);
    std::thread::sleep(Duration::from_millis(260));
    let sub = MosquittoSub::on(port, "#");
    let topic = "tarecup/v1/wet-room/presence";
    until("presence says up", PATIENCE, || last(&sub.got).get(topic).is_some_and(|p| p.contains("\"up\"")));
    let mut operator = Operator::at(&station, Cup::Unnumbered, true);
    operator.ask(json!({"ask": "open_specimen", "specimen": "S-1"}));
    operator.ask(json!({"ask": "intend", "bench": "south", "specimen": "S-1", "intention": "liquid"}));
    // A run under way, and a mass taken a moment before the signal.
    station.say("cup-2", "tick\r\n");
    for _ in 0..4 {
        std::thread::sleep(Duration::from_millis(60));
        station.say("cup-2", "tick\r\n");
    }
    station.load("pan-1", "12.34");
    until("the mass is taken", PATIENCE, || {
        operator.look();
        operator.facts.iter().any(|f| f["kind"] == "weighed")
    });
    let accepted = operator.ask(json!({"ask": "sign_in", "bench": "north", "operator": "AB"}));
    assert_eq!(station.term(), Some(0), "{}", station.log());
    until("presence says stopped", PATIENCE, || last(&sub.got).get(topic).is_some_and(|p| p.contains("\"stopped\"")));
    station.start();
    wait_up(&station.state, PORTS);
    operator.look();
    let seq = accepted["facts"][0].as_u64().expect("a fact");
    assert_eq!(operator.facts[seq as usize - 1]["kind"], "signed_in", "what was answered is there");
    let kinds: Vec<&str> = operator.facts.iter().filter_map(|f| f["kind"].as_str()).collect();
    let stopped = kinds.iter().position(|k| *k == "service_stopped").expect("the stop is a fact");
    assert_eq!(kinds[stopped + 1], "service_started");
    assert_eq!(operator.facts[stopped + 1]["fact"]["after_orderly_stop"], true);
    // The run under way at the stop is told, and marked.
    let counted = |o: &Operator| o.facts.iter().find(|f| f["kind"] == "counted").cloned();
    until("the run is told", PATIENCE, || {
        operator.look();
        counted(&operator).is_some()
    });
    let run = counted(&operator).expect("counted")["fact"].clone();
    assert!(run["drops"] == 5 && run["run"]["interrupted"].is_string(), "{run}");
    // Control: after a kill the start says that nobody stopped in order.
    station.kill9();
    station.start();
    wait_up(&station.state, PORTS);
    operator.look();
    let started = operator.facts.iter().rev().find(|f| f["kind"] == "service_started").expect("started");
    assert_eq!(started["fact"]["after_orderly_stop"], false);
}

#[test]
fn a_wrong_configuration_is_refused_with_its_place_and_nothing_starts() {
    let station = station();
    let good = std::fs::read_to_string(&station.config).expect("read");
    let line_of = |text: &str| good.lines().position(|l| l.contains(text)).map_or(0, |n| n + 1);
    let cases = [
        ("kind = \"balance\"", "kind = \"ballance\"", "balance"),
        ("profile = \"signed-steady\"", "profile = \"signed-stedy\"", "signed-steady"),
        ("steady_readings = 3", "stedy_readings = 3", "steady_readings"),
        ("bench = \"north\"", "bench = \"nord\"", "north"),
    ];
    for (from, to, word) in cases {
        let line = line_of(from);
        std::fs::write(&station.config, good.replacen(from, to, 1)).expect("written");
        let config = station.config.display().to_string();
        let state = station.state.display().to_string();
        for arguments in [vec!["check", "--config", &config], vec!["run", "--config", &config, "--state", &state]] {
            let ended = tarecup(&arguments);
            assert_eq!(ended.code, 2, "{to}: {}", ended.err);
            assert!(ended.err.contains(&format!("{config}:{line}:")), "{to}: line {line} in\n{}", ended.err);
            assert!(ended.err.contains(word), "{to}: {word} in\n{}", ended.err);
        }
        assert!(!station.state.exists(), "{to}: nothing was started");
    }
    // Control: as it was, it is right.
    std::fs::write(&station.config, good).expect("written");
    assert_eq!(tarecup(&["check", "--config", &station.config.display().to_string()]).code, 0);
}
