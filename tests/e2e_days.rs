//! Days between wet and dry: the service restarted at every step of a
//! specimen's work, also while its containers are in the oven, with the clock of
//! a virtual day. No ports and no broker: the desk and its ledger alone.

mod e2e_support;

use e2e_support::operator::essence;
use e2e_support::{Sheet, differences, judged, liquid, sheet, slice};
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::sync::{Arc, Mutex};
use tarecup::desk::inbox::Incoming;
use tarecup::desk::{Desk, Effects};
use tarecup::keys::Key;
use tarecup::ledger::{OpenOptions, verify};
use tarecup::service::{Profiles, compile_profiles, desk_setup};
use tarecup_config::station::{Station, parse};
use tarecup_core::stamp::{HOUR_US, SECOND_US, Stamp};
use tarecup_drivers::heard::PortState;
use tarecup_drivers::intake::Intake;

/// 2026-03-02T07:30:00Z.
const START_US: i64 = 1_772_436_600_000_000;
const CONFIG: &str = r#"
[[bench]]
name = "north"
[[instrument]]
name = "pan-1"
kind = "balance"
port = "/dev/none-1"
profile = "signed-steady"
[[instrument]]
name = "cup-1"
kind = "counter"
port = "/dev/none-2"
profile = "running-total"
[[instrument]]
name = "scan-1"
kind = "scanner"
port = "/dev/none-3"
profile = "plain-code"
"#;

/// One thing that happens.
#[derive(Clone, Debug)]
enum Step {
    Ask(Value),
    Scan(String),
    Load(String),
    Unload,
    Drops(u32, u32),
    End(u32),
    /// Time passes, µs.
    Pass(i64),
}

/// How the service goes and comes back.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Away {
    /// Killed, and started again.
    Killed,
    /// The machine lost its power: another boot, another monotonic clock.
    Rebooted,
    /// Stopped in order.
    Stopped,
}

struct Days {
    dir: tempfile::TempDir,
    station: Station,
    profiles: Profiles,
    desk: Option<Desk>,
    intakes: Vec<Intake>,
    utc_us: i64,
    mono_us: i64,
    boots: u32,
    facts: Vec<Value>,
    retained: BTreeMap<String, Value>,
}

impl Days {
    fn new() -> Self {
        // A folder in memory: a thousand commits are waited for.
        let dir = tempfile::tempdir_in("/dev/shm").or_else(|_| tempfile::tempdir()).expect("a folder");
        let station = parse("(test)", CONFIG).expect("a configuration");
        let profiles = compile_profiles(&station).expect("profiles");
        let mut days = Self {
            dir,
            station,
            profiles,
            desk: None,
            intakes: Vec::new(),
            utc_us: START_US,
            mono_us: 1_000 * SECOND_US,
            boots: 1,
            facts: Vec::new(),
            retained: BTreeMap::new(),
        };
        days.open();
        days
    }

    fn open(&mut self) {
        let setup = desk_setup(&self.station, &self.profiles, self.dir.path(), Some(Key::of_demonstrations()), true);
        let options = OpenOptions::new(&format!("boot-{}", self.boots), self.utc_us);
        let (utc_us, mono_us) = (self.utc_us, self.mono_us);
        let (desk, first) =
            Desk::open(self.dir.path(), options, setup, |boot| Stamp { utc_us, mono_us, boot }).expect("it opens");
        self.desk = Some(desk);
        self.took(first);
        let instruments = self.station.instruments.iter().enumerate();
        self.intakes = instruments.map(|(id, i)| Intake::new(id as u16, &self.profiles[i.profile.as_str()])).collect();
        self.intakes.iter_mut().for_each(|i| i.opened(true));
        let at = self.now();
        let opened = (0..3).map(|instrument| Incoming::Port { instrument, state: PortState::Opened, at }).collect();
        self.step(opened);
    }

    fn now(&self) -> Stamp {
        let boot = self.desk.as_ref().map(Desk::boot).unwrap_or_default();
        Stamp { utc_us: self.utc_us, mono_us: self.mono_us, boot }
    }

    fn pass(&mut self, us: i64) {
        (self.utc_us, self.mono_us) = (self.utc_us + us, self.mono_us + us);
    }

    fn step(&mut self, mut incoming: Vec<Incoming>) {
        let (now, mut effects) = (self.now(), Effects::default());
        self.desk.as_mut().expect("open").step(&mut incoming, &now, &mut effects);
        self.took(effects);
    }

    fn took(&mut self, effects: Effects) {
        for (seq, body) in &effects.facts {
            let fact: Value = serde_json::from_slice(body).expect("JSON");
            assert_eq!(fact["seq"], json!(seq));
            assert_eq!(*seq, self.facts.len() as u64 + 1, "no fact is lost or told twice");
            self.facts.push(fact);
        }
        for publish in effects.retained {
            let payload = publish.payload.map(|p| serde_json::from_slice(&p).expect("JSON"));
            self.retained.insert(publish.topic, payload.unwrap_or(Value::Null));
        }
        effects.replies.into_iter().for_each(|(reply, answer)| reply(answer));
    }

    fn line(&mut self, instrument: usize, line: &str) {
        self.pass(SECOND_US / 10);
        let at = self.now();
        if let Some(batch) = self.intakes[instrument].read(format!("{line}\r\n").as_bytes(), at, None) {
            self.step(vec![Incoming::Batch(batch)]);
        }
    }

    fn ask(&mut self, ask: &Value) {
        let answered: Arc<Mutex<String>> = Arc::default();
        let sink = Arc::clone(&answered);
        let reply = Box::new(move |answer| *sink.lock().expect("answer") = answer);
        self.step(vec![Incoming::Ask { client: "test".into(), body: ask.to_string(), reply }]);
        let answer = answered.lock().expect("answer").clone();
        assert!(answer.contains("\"ok\":true"), "{ask}: {answer}");
    }

    fn does(&mut self, step: &Step) {
        self.pass(2 * SECOND_US);
        match step {
            Step::Ask(ask) => self.ask(ask),
            Step::Scan(code) => self.line(2, code),
            Step::Load(grams) => (0..10).for_each(|_| self.line(0, &format!("+{grams:>10} g  S"))),
            Step::Unload => (0..3).for_each(|_| self.line(0, "+      0.00 g  S")),
            Step::Drops(from, to) => {
                for n in *from..=*to {
                    self.pass(SECOND_US * 4 / 10);
                    self.line(1, &format!("DROP {n}"));
                }
            }
            Step::End(n) => self.line(1, &format!("STOP {n}")),
            Step::Pass(us) => {
                self.pass(*us);
                self.step(Vec::new());
            }
        }
    }

    fn away(&mut self, away: Away) {
        // What nobody waits for is stored a moment later; killed within that moment, the pan is unloaded again by the
        // operator. Here it is stored.
        if let Some(until) = self.desk.as_ref().and_then(Desk::hold_until) {
            std::thread::sleep(until.saturating_duration_since(std::time::Instant::now()) + std::time::Duration::from_millis(1));
            self.step(Vec::new());
        }
        if away == Away::Stopped {
            self.step(vec![Incoming::Stop]);
            assert!(self.desk.as_ref().is_some_and(Desk::stopped));
        }
        self.desk = None;
        self.pass(2 * SECOND_US);
        if away == Away::Rebooted {
            self.boots += 1;
            self.mono_us = 5 * SECOND_US;
        }
        self.open();
    }

    /// Whether the result says that time in the oven was told by the wall clock.
    fn by_wall_clock(&self) -> bool {
        let limits = &self.retained["specimen/S-101/limits"];
        limits["checks"].as_array().is_some_and(|c| c.iter().any(|c| c["check"] == "oven_clock"))
    }

    /// What must come out the same: result, state, what the checks say, where the containers stand.
    fn outcome(&self) -> Value {
        let limits = &self.retained["specimen/S-101/limits"];
        let check = |c: &Value| json!([c["check"], c["severity"], c["about"]]);
        // A reboot leaves only wall time, which is said and may be unknown for a rate; these two are looked at apart.
        let told = limits["checks"].as_array().into_iter().flatten();
        let checks: Vec<Value> = told.filter(|c| c["check"] != "oven_clock" && c["check"] != "rate").map(check).collect();
        let containers = self.retained.iter().filter(|(t, _)| t.starts_with("container/"));
        let containers: Vec<Value> = containers.map(|(t, c)| json!([t, c["standing"], c["tare_g"]])).collect();
        json!([essence(limits), limits["state"], checks, containers])
    }
}

/// Published: a laboratory report, tables 4-1 and 4-2.
fn specimen() -> Sheet {
    sheet(
        "S-101",
        "d4318-multipoint",
        vec![
            liquid(&[28], "C1", "50.94", "66.74", &["62.99"]),
            liquid(&[21], "C2", "51.55", "67.56", &["63.53"]),
            liquid(&[15], "C3", "51.78", "66.90", &["62.94"]),
        ],
        vec![slice("C4", "51.80", "67.50", &["65.04"]), slice("C5", "50.90", "65.50", &["63.26"])],
    )
}

/// The work on it, step by step, with so long in the oven.
fn work(oven_us: i64) -> Vec<Step> {
    let sheet = specimen();
    let weigh = |c: &str, g: &str| [Step::Scan(c.into()), Step::Load(g.into()), Step::Unload];
    let slices: Vec<_> = sheet.liquid.iter().map(|l| &l.slice).chain(&sheet.plastic).collect();
    let containers: Vec<&str> = slices.iter().map(|s| s.container.as_str()).collect();
    let intend = |what: &str| Step::Ask(json!({"ask": "intend", "bench": "north", "specimen": "S-101", "intention": what}));
    let mut steps = vec![
        Step::Ask(json!({"ask": "sign_in", "bench": "north", "operator": "AB"})),
        Step::Ask(json!({"ask": "open_specimen", "specimen": "S-101"})),
    ];
    slices.iter().for_each(|s| steps.extend(weigh(&s.container, &s.tare)));
    steps.push(intend("liquid"));
    for l in &sheet.liquid {
        let n = l.drops[0];
        steps.extend([Step::Drops(1, n / 2), Step::Drops(n / 2 + 1, n), Step::End(n)]);
        steps.extend(weigh(&l.slice.container, &l.slice.wet));
    }
    steps.push(intend("plastic"));
    sheet.plastic.iter().for_each(|s| steps.extend(weigh(&s.container, &s.wet)));
    steps.push(Step::Ask(json!({"ask": "intend_nothing", "bench": "north"})));
    steps.push(Step::Ask(json!({"ask": "into_oven", "containers": containers})));
    steps.extend([Step::Pass(oven_us / 2), Step::Pass(oven_us / 2)]);
    steps.push(Step::Ask(json!({"ask": "sign_in", "bench": "north", "operator": "AB"})));
    steps.push(Step::Ask(json!({"ask": "out_of_oven", "containers": containers})));
    slices.iter().for_each(|s| steps.extend(weigh(&s.container, &s.dry[0])));
    steps
}

/// Plays the work, with the service away before one of the steps.
fn played(steps: &[Step], away: Option<(usize, Away)>) -> Days {
    let mut days = Days::new();
    for (no, step) in steps.iter().enumerate() {
        if let Some((before, away)) = away
            && before == no
        {
            days.away(away);
        }
        days.does(step);
    }
    days
}

fn oven_began(steps: &[Step]) -> usize {
    steps.iter().position(|s| matches!(s, Step::Pass(_))).expect("an oven")
}

#[test]
fn a_dry_weighing_days_after_a_restart_gives_the_same_result() {
    for (name, oven) in [("16 hours", 16 * HOUR_US), ("3 days", 72 * HOUR_US)] {
        let steps = work(oven);
        let straight = played(&steps, None);
        let limits = &straight.retained["specimen/S-101/limits"];
        assert_eq!(differences(limits, &judged(&[specimen()])[0]), Vec::<String>::new());
        assert_eq!(limits["state"], "complete", "{name}: {}", limits["checks"]);
        for away in [Away::Killed, Away::Rebooted, Away::Stopped] {
            // Before the oven, in the middle of it, after it.
            for before in oven_began(&steps)..oven_began(&steps) + 3 {
                let days = played(&steps, Some((before, away)));
                assert_eq!(days.outcome(), straight.outcome(), "{name}, {away:?} before step {before}");
                assert_eq!(days.by_wall_clock(), away == Away::Rebooted, "{name}, {away:?} before step {before}");
                let report = verify(days.dir.path(), None, &mut |_| ()).expect("it can be read");
                assert!(report.ok(), "{name}, {away:?}: {:?}", report.first_bad);
            }
        }
    }
    // Control: time does count. After two hours the same masses are not dry by the method.
    let early = played(&work(2 * HOUR_US), None);
    assert_eq!(early.retained["specimen/S-101/limits"]["state"], "provisional");
    assert_ne!(early.outcome(), played(&work(16 * HOUR_US), None).outcome());
}

#[test]
fn killed_before_any_step_the_outcome_is_the_same() {
    let steps = work(72 * HOUR_US);
    let straight = played(&steps, None);
    for before in 0..steps.len() {
        let away = if before % 2 == 0 { Away::Killed } else { Away::Rebooted };
        let days = played(&steps, Some((before, away)));
        assert_eq!(days.outcome(), straight.outcome(), "{away:?} before step {before}, {:?}", steps[before]);
        // One more fact for the start, and not one weighing or count more or less.
        let kinds = |days: &Days| {
            let mut kinds = BTreeMap::<String, usize>::new();
            for fact in &days.facts {
                let kind = fact["kind"].as_str().unwrap_or_default();
                if !["instrument_changed", "limits_computed"].contains(&kind) {
                    *kinds.entry(kind.to_owned()).or_default() += 1;
                }
            }
            kinds
        };
        let mut want = kinds(&straight);
        *want.entry("service_started".into()).or_default() += 1;
        assert_eq!(kinds(&days), want, "{away:?} before step {before}, {:?}", steps[before]);
    }
    println!("the service killed or rebooted before each of {} steps, 3 days in the oven: the same outcome", steps.len());
    // Control: a step that is left out is noticed.
    let mut fewer = steps.clone();
    let dry = fewer.iter().rposition(|s| matches!(s, Step::Load(_))).expect("a weighing");
    fewer.remove(dry);
    assert_ne!(played(&fewer, None).outcome(), straight.outcome());
}
