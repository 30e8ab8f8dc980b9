//! Cables in the wrong place, pulled and moved, under the running service:
//! what is said of them, and that nothing is recorded from the wrong one.

mod e2e_support;
mod wire_bench;

use e2e_support::operator::{Cup, PORTS, Station};
use e2e_support::subscriber::{MosquittoSub, last};
use e2e_support::*;
use serde_json::{Value, json};
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};
use wire_bench::Bench;

/// Another language is told after this time at the latest.
const NOTICED: Duration = Duration::from_secs(5);

fn station() -> Station {
    Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port()))
}

fn up(station: &Station) {
    wait_up(&station.state, PORTS);
    std::thread::sleep(Duration::from_millis(300));
}

/// Facts that would say that something was weighed, counted or read. Independent of what the program thinks of its cables.
fn records(facts: &[Value]) -> Vec<&str> {
    let kinds = ["weighed", "slip_repeated", "counted", "taken_in_hand", "code_unread", "container_registered"];
    facts.iter().filter_map(|f| f["kind"].as_str()).filter(|k| kinds.contains(k)).collect()
}

fn facts(station: &Station) -> Vec<Value> {
    facts_after(&station.state, 0).expect("facts")
}

/// Says a line in its rhythm until the instrument is told to speak another language; how long that took.
fn until_strange(station: &Station, said: &[(&str, &str, u64)]) -> Duration {
    let began = Instant::now();
    let strange = |name: &str| station.instrument(name)["state"] == "wrong_language";
    let mut ms = 0;
    while !said.iter().all(|(name, ..)| strange(name)) {
        assert!(began.elapsed() < PATIENCE, "never told: {said:?}");
        for (name, line, each) in said {
            if ms % each == 0 {
                station.say(name, line);
            }
        }
        ms += 100;
        std::thread::sleep((began + Duration::from_millis(ms)).saturating_duration_since(Instant::now()));
    }
    began.elapsed()
}

#[test]
fn cables_swapped_at_the_start_are_told_within_five_seconds_and_nothing_is_recorded() {
    let station = station();
    station.start();
    up(&station);
    // Each at the port of another: what it says, and how often in ms.
    let swapped = [
        ("pan-1", "DROP 7\r\n", 500),
        ("cup-1", "+     12.34 g  S\r\n", 100),
        ("scan-1", "tick\r\n", 500),
        // A counter of single bytes never ends a line.
        ("pan-2", "*", 500),
        // A scanner speaks once, and then perhaps for long not again.
        ("cup-2", "C11\r\n", 60_000),
    ];
    let took = until_strange(&station, &swapped);
    println!("five cables swapped at the start are told after {} ms", took.as_millis());
    assert!(took <= NOTICED, "{took:?}");
    assert_eq!(records(&facts(&station)), [""; 0]);
    let pan = station.instrument("pan-1");
    assert!(pan["detail"].as_str().is_some_and(|d| d.contains("cables") && d.contains("DROP 7")), "{pan}");
    assert_eq!(pan["stale"], true);
    let shown = tarecup(&["status", "--state", &station.state.display().to_string()]).out;
    assert!(shown.lines().any(|l| l.starts_with("pan-1") && l.contains("wrong language")), "{shown}");
    // Control: with the cables in place the same instruments are recorded, and the check above complains.
    station.load("pan-1", "12.34");
    station.say("scan-1", "C11\r\n");
    station.drops("cup-1", Cup::Numbered, 3, Duration::from_millis(50));
    until("a mass, a code and a count", PATIENCE, || records(&facts(&station)).len() >= 3);
    assert_eq!(station.instrument("pan-1")["state"], "speaking");
}

/// A count and a placement under way at south, then the two cables exchanged or not; the facts.
fn mid_trial(exchange: bool) -> (Station, Option<Duration>) {
    let station = station();
    station.start();
    up(&station);
    // A run that begins sooner after the opening may have begun unheard, and says so.
    std::thread::sleep(Duration::from_millis(1_200));
    for n in 0..6 {
        station.say("cup-2", "tick\r\n");
        // On the pan for less long than a mass takes.
        station.say("pan-2", if n < 4 { "+      0.00 g  S\r\n" } else { "+     33.39 g  S\r\n" });
        std::thread::sleep(Duration::from_millis(200));
    }
    let took = exchange.then(|| until_strange(&station, &[("pan-2", "tick\r\n", 500), ("cup-2", "+     33.39 g  S\r\n", 100)]));
    // Until the run is over by its pause.
    until("the run has ended", PATIENCE, || facts(&station).iter().any(|f| f["kind"] == "counted"));
    (station, took)
}

#[test]
fn cables_swapped_in_mid_trial_leave_no_mass_and_a_count_that_says_so() {
    let (station, took) = mid_trial(true);
    let took = took.expect("exchanged");
    println!("two cables swapped in mid-trial are told after {} ms", took.as_millis());
    assert!(took <= NOTICED, "{took:?}");
    let told = facts(&station);
    assert_eq!(records(&told), ["counted"], "the run that was under way, and no mass");
    let counted = told.iter().find(|f| f["kind"] == "counted").expect("counted");
    let interrupted = counted["fact"]["run"]["interrupted"].as_str().unwrap_or_default();
    assert!(counted["fact"]["drops"] == 6 && interrupted.contains("not understood"), "{counted}");
    // Put right, both go on.
    station.load("pan-2", "33.39");
    until("a mass", PATIENCE, || records(&facts(&station)).contains(&"weighed"));
    // Control: without the exchange the same count says nothing of the kind.
    let (station, _) = mid_trial(false);
    let told = facts(&station);
    let counted = told.iter().find(|f| f["kind"] == "counted").expect("counted");
    assert!(counted["fact"]["drops"] == 6 && counted["fact"]["run"]["interrupted"].is_null(), "{counted}");
}

#[test]
fn a_value_that_is_no_longer_shown_is_called_stale_everywhere() {
    let port = free_port();
    let station = Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{port}\"\n"));
    station.start();
    up(&station);
    let sub = MosquittoSub::on(port, "#");
    let at = |topic: &str| -> Value {
        let got = last(&sub.got);
        got.get(&format!("tarecup/v1/wet-room/{topic}")).and_then(|p| serde_json::from_str(p).ok()).unwrap_or_default()
    };
    until("subscribed", PATIENCE, || at("presence")["state"] == "up");
    station.say("pan-1", "+     12.34 g  S\r\n");
    until("the live mass", PATIENCE, || at("live/pan-1")["mass_g"] == 12.34);
    // Control: while it speaks, nothing is stale.
    until("speaking", PATIENCE, || at("instrument/pan-1")["state"] == "speaking");
    let pan = station.instrument("pan-1");
    assert_eq!((&at("live/pan-1")["stale"], &pan["stale"], &pan["live"]["stale"]), (&json!(false), &json!(false), &json!(false)));
    let spoke = Instant::now();
    until("silence is told", PATIENCE, || station.instrument("pan-1")["state"] == "silent");
    assert!(spoke.elapsed() <= Duration::from_secs(7), "{:?}", spoke.elapsed());
    until("the live topic says stale", PATIENCE, || at("live/pan-1")["stale"] == true);
    until("the retained topic says stale", PATIENCE, || at("instrument/pan-1")["live"]["stale"] == true);
    let pan = at("instrument/pan-1");
    assert_eq!(
        (&pan["state"], &pan["live"]["mass_g"], &pan["last_heard"]),
        (&json!("silent"), &json!(12.34), &pan["live"]["at"])
    );
    // It speaks again, and its plug is pulled.
    station.say("pan-1", "+     15.00 g  S\r\n");
    until("live again", PATIENCE, || at("live/pan-1")["mass_g"] == 15.0 && station.instrument("pan-1")["stale"] == false);
    station.unplug("pan-1");
    until("stale again", PATIENCE, || at("live/pan-1")["stale"] == true && at("live/pan-1")["state"] == "port_lost");
    assert_eq!(station.instrument("pan-1")["state"], "port_lost");
    // A balance that should speak and never does says what to look at.
    let said = |d: &Value| d["detail"].as_str().is_some_and(|d| d.contains("switched on"));
    until("nothing has come", PATIENCE, || said(&station.instrument("pan-2")));
    assert_eq!(station.instrument("pan-2")["state"], "waiting");
}

/// A service on a made-up machine, with one print-key balance by the name that both twins claim.
struct Made {
    bench: Bench,
    state: std::path::PathBuf,
    service: Running,
    broker: u16,
}

fn made(bench: Bench, known: Option<&str>) -> Made {
    let (state, broker) = (bench.at("state"), free_port());
    let config = format!(
        "[lab]\nname = \"test\"\nstation = \"wet-room\"\n[screen]\nenabled = false\n[broker]\nlisten = \"127.0.0.1:{broker}\"\n[[instrument]]\nname = \"pan-1\"\nkind = \"balance\"\nport = \"{}\"\nprofile = \"print-line\"\n",
        bench.at("dev/serial/by-id/adapter").display()
    );
    let path = bench.at("config.toml");
    std::fs::write(&path, config).expect("written");
    std::fs::create_dir_all(&state).expect("a folder");
    if let Some(socket) = known {
        std::fs::write(state.join("adapters.json"), json!({"pan-1": socket}).to_string()).expect("written");
    }
    let mut command = Command::new(TARECUP);
    command.args(["run", "--config"]).arg(&path).arg("--state").arg(&state).arg("--machine").arg(bench.root.path());
    let service = Running::start(command.stderr(Stdio::null()).stdin(Stdio::null()));
    until("the service answers", PATIENCE, || status(&state).is_some());
    Made { bench, state, service, broker }
}

impl Made {
    fn pan(&self) -> Value {
        status(&self.state).map(|s| s["instruments"][0].clone()).unwrap_or_default()
    }
    fn weighed(&self) -> usize {
        facts_after(&self.state, 0).expect("facts").iter().filter(|f| f["kind"] == "weighed").count()
    }
    /// Whether the service has this device open.
    fn has_open(&self, socket: &str) -> bool {
        let device = self.bench.ptys.iter().find(|(s, _)| *s == socket).and_then(|(_, p)| p.device()).expect("plugged");
        let files = std::fs::read_dir(format!("/proc/{}/fd", self.service.pid())).expect("descriptors");
        files.flatten().any(|f| std::fs::read_link(f.path()).is_ok_and(|to| to == device))
    }
}

#[test]
fn a_twin_at_another_socket_is_asked_about_across_a_restart_and_records_nothing_before() {
    let mut bench = Bench::new();
    ["left", "right"].into_iter().for_each(|s| bench.plug(s, ""));
    bench.claim("right");
    let mut made = made(bench, Some("left"));
    until("the question", PATIENCE, || made.pan()["unconfirmed"] == true);
    let detail = made.pan()["detail"].as_str().unwrap_or_default().to_owned();
    assert!(["left", "right", "confirm_port instrument=pan-1", "PRINT"].iter().all(|w| detail.contains(w)), "{detail}");
    std::thread::sleep(Duration::from_millis(300));
    made.bench.say("right", b"G      23.46 g\r\n");
    std::thread::sleep(Duration::from_millis(500));
    assert_eq!((made.weighed(), made.pan()["lines"].as_u64()), (0, Some(0)));
    let state = made.state.display().to_string();
    let confirm = ["ask", "--state", &state, "confirm_port", "instrument=pan-1", "who=AB"];
    let said = tarecup(&confirm);
    assert!(said.code == 0 && said.out.contains("PRINT"), "{} {}", said.out, said.err);
    std::thread::sleep(Duration::from_millis(100));
    made.bench.say("right", b"G      23.46 g\r\n");
    until("confirmed", PATIENCE, || made.pan()["port_open"] == true);
    assert_eq!(made.weighed(), 0, "the print that confirmed is no weighing");
    made.bench.say("right", b"G      23.46 g\r\n");
    until("a mass", PATIENCE, || made.weighed() == 1);
    let kept = || std::fs::read_to_string(made.state.join("adapters.json")).unwrap_or_default();
    until("remembered", PATIENCE, || kept().contains("right"));
    // Control: where nothing is in doubt, there is nothing to confirm.
    let again = tarecup(&confirm);
    assert!(again.code == 1 && again.out.contains("nothing to confirm"), "{} {}", again.out, again.err);
}

#[test]
fn a_new_port_is_offered_by_its_lasting_name_and_never_opened() {
    let mut bench = Bench::new();
    bench.plug("left", "77");
    bench.claim("left");
    let mut made = made(bench, None);
    until("open", PATIENCE, || made.pan()["port_open"] == true);
    let offers = || status(&made.state).map(|s| s["offers"].clone()).unwrap_or_default();
    until("nothing is offered", PATIENCE, || offers() == json!([]));
    made.bench.plug("right", "");
    let began = Instant::now();
    let offers = || status(&made.state).map(|s| s["offers"].clone()).unwrap_or_default();
    until("offered", PATIENCE, || offers().as_array().is_some_and(|o| o.len() == 1));
    assert!(began.elapsed() <= Duration::from_secs(4), "{:?}", began.elapsed());
    let offer = offers()[0].clone();
    assert!(offer["port"].as_str().is_some_and(|p| p.ends_with("by-path/right")) && offer["twin"] == true, "{offer}");
    let sub = MosquittoSub::on(made.broker, "#");
    until("at its topic", PATIENCE, || {
        last(&sub.got).get("tarecup/v1/wet-room/offer").is_some_and(|p| p.contains("by-path/right"))
    });
    let listed = tarecup(&["ports", "--machine", &made.bench.root.path().display().to_string()]).out;
    let holder = format!("process {}", made.service.pid());
    assert!(listed.contains("by-path/right") && listed.contains(&holder) && listed.contains("socket"), "{listed}");
    let shown = tarecup(&["status", "--state", &made.state.display().to_string()]).out;
    assert!(shown.lines().any(|l| l.starts_with("not in use") && l.contains("by-path/right")), "{shown}");
    std::thread::sleep(Duration::from_secs(1));
    assert!(!made.has_open("right"), "an offered port is not opened");
    // Control: the one in the settings is, and the look into the service's descriptors sees it.
    assert!(made.has_open("left"));
    made.bench.unplug("right");
    let offers = || status(&made.state).map(|s| s["offers"].clone()).unwrap_or_default();
    until("taken back", PATIENCE, || offers() == json!([]));
}
