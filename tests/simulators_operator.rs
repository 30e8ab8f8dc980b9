//! The operator plays days against a small program of this test's own: it reads the cables, takes masses when eight
//! lines agree, and keeps containers in hand, much simpler than the real one.

use nix::fcntl::OFlag;
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::fs::{File, OpenOptions};
use std::io::Read;
use std::os::unix::fs::OpenOptionsExt;
use std::time::{Duration, Instant};
use tarecup_simulators::balance::{Noise, Settings};
use tarecup_simulators::counter::CupDialect;
use tarecup_simulators::day::{Balance, Bench, Cup, Day, Liquid, Specimen, Weighed};
use tarecup_simulators::dialect::BalanceDialect;
use tarecup_simulators::operator::{Instruments, Play, PlayError, StepInfo, Summary, World, play};

const START: i64 = 1_772_438_400_000_000;

/// One port as the program sees it.
struct Port {
    file: File,
    bytes: u64,
    line: Vec<u8>,
}

#[derive(Default)]
struct Pan {
    agreeing: Vec<i64>,
    taken: bool,
}

/// The program under test, in small.
struct Model {
    day: Day,
    ports: BTreeMap<String, Port>,
    pans: BTreeMap<String, Pan>,
    hand: BTreeMap<String, String>,
    latest: BTreeMap<String, Value>,
    /// Container to (role, mass) in order.
    weighed: Vec<(String, String, i64)>,
    counts: Vec<(String, u32, f64)>,
    drops: BTreeMap<String, Vec<i64>>,
    asks: Vec<Value>,
    now: i64,
    times: Vec<i64>,
    steps: Vec<String>,
    /// When each balance was heard.
    heard: BTreeMap<String, Vec<i64>>,
    seq: u64,
    /// Asks of this kind are refused.
    refuses: Option<&'static str>,
    /// This instrument is not listened to.
    deaf_to: Option<&'static str>,
    /// Masses are taken too high by so much.
    wrong_by_ug: i64,
    /// The role is never recognised.
    clueless: bool,
    stop_after: Option<usize>,
}

impl Model {
    fn new(day: &Day, instruments: &Instruments) -> Self {
        let flags = (OFlag::O_NOCTTY | OFlag::O_NONBLOCK).bits();
        let ports = instruments
            .links()
            .map(|(name, link)| {
                let file = OpenOptions::new().read(true).custom_flags(flags).open(link).unwrap();
                (name.to_string(), Port { file, bytes: 0, line: Vec::new() })
            })
            .collect();
        Self {
            day: day.clone(),
            ports,
            pans: BTreeMap::new(),
            hand: BTreeMap::new(),
            latest: BTreeMap::new(),
            weighed: Vec::new(),
            counts: Vec::new(),
            drops: BTreeMap::new(),
            asks: Vec::new(),
            now: i64::MIN,
            times: Vec::new(),
            steps: Vec::new(),
            heard: BTreeMap::new(),
            seq: 0,
            refuses: None,
            deaf_to: None,
            wrong_by_ug: 0,
            clueless: false,
            stop_after: None,
        }
    }

    fn bench_of(&self, instrument: &str) -> Bench {
        let has = |b: &&Bench| [&b.balance.name, &b.cup.name, &b.scanner].into_iter().any(|n| n == instrument);
        // A shared balance belongs to the bench that has something in hand.
        let mut benches = self.day.benches.iter().filter(has);
        let first = benches.next().unwrap().clone();
        std::iter::once(first.clone()).chain(benches.cloned()).find(|b| self.hand.contains_key(&b.name)).unwrap_or(first)
    }

    fn line(&mut self, instrument: &str, line: &str) {
        if instrument.starts_with("scan") {
            let bench = self.bench_of(instrument);
            self.hand.insert(bench.name, line.to_string());
        } else if let Some(number) = line.strip_prefix("DROP ") {
            let times = self.drops.entry(instrument.to_string()).or_default();
            times.push(self.now);
            assert_eq!(times.len().to_string(), number);
        } else if let Some(total) = line.strip_prefix("STOP ") {
            let times = self.drops.remove(instrument).unwrap();
            let span = (times[times.len() - 1] - times[0]) as f64 / 1e6;
            assert_eq!(times.len().to_string(), total);
            self.counts.push((instrument.to_string(), times.len() as u32, (times.len() - 1) as f64 / span));
        } else {
            assert_eq!((line.len(), &line[12..16]), (16, "g  S"), "{line:?}");
        }
    }

    fn reading(&mut self, instrument: &str, line: &str) {
        let digits: String = line[1..11].chars().filter(char::is_ascii_digit).collect();
        let ug = digits.parse::<i64>().unwrap() * 10_000;
        let pan = self.pans.entry(instrument.to_string()).or_default();
        if !line.ends_with('S') || pan.agreeing.last().is_some_and(|before| (before - ug).abs() > 20_000) {
            pan.agreeing.clear();
        }
        pan.agreeing.push(ug);
        if ug.abs() <= 10_000 {
            pan.taken = false;
        } else if pan.agreeing.len() >= 8 && !pan.taken {
            pan.taken = true;
            self.mass(instrument, ug);
        }
    }

    fn mass(&mut self, balance: &str, ug: i64) {
        let bench = self.bench_of(balance);
        let container = self.hand.remove(&bench.name);
        let before = self.weighed.iter().filter(|(c, _, _)| Some(c) == container.as_ref()).count();
        let role = if self.clueless { Value::Null } else { json!(["tare", "wet", "dry"][before % 3]) };
        self.seq += 1;
        let latest = json!({"container": container, "role": role, "mass_ug": ug + self.wrong_by_ug, "loose": role.is_null(), "seq": self.seq});
        if let (Some(container), Some(role)) = (container, role.as_str()) {
            self.weighed.push((container, role.to_string(), ug));
        }
        self.latest.insert(bench.name, latest);
    }
}

impl World for Model {
    fn set_time(&mut self, utc_us: i64) {
        assert!(utc_us >= self.now, "time went back");
        self.now = utc_us;
        self.times.push(utc_us);
    }

    fn heard(&mut self, instrument: &str, bytes: u64) -> Result<(), String> {
        if self.deaf_to == Some(instrument) {
            return Err("nothing came for 2 s".into());
        }
        if instrument.starts_with("pan") {
            self.heard.entry(instrument.to_string()).or_default().push(self.now);
        }
        let until = Instant::now() + Duration::from_secs(2);
        let mut buffer = [0u8; 4096];
        loop {
            let port = self.ports.get_mut(instrument).unwrap();
            if port.bytes == bytes {
                return Ok(());
            }
            if Instant::now() > until {
                return Err(format!("{} of {bytes} bytes", port.bytes));
            }
            let Ok(n) = port.file.read(&mut buffer) else { continue };
            port.bytes += n as u64;
            port.line.extend_from_slice(&buffer[..n]);
            while let Some(end) = self.ports[instrument].line.iter().position(|&b| b == b'\n') {
                let line: Vec<u8> = self.ports.get_mut(instrument).unwrap().line.drain(..=end).collect();
                let text = String::from_utf8(line).unwrap();
                let text = text.strip_suffix("\r\n").unwrap();
                if instrument.starts_with("pan") {
                    self.reading(instrument, text);
                } else {
                    self.line(instrument, text);
                }
            }
        }
    }

    fn ask(&mut self, text: &str) -> String {
        let ask: Value = serde_json::from_str(text).unwrap();
        self.asks.push(ask.clone());
        let kind = ask["ask"].as_str().unwrap();
        if self.refuses == Some(kind) {
            return json!({"ok": false, "error": {"says": "no such thing here"}}).to_string();
        }
        match kind {
            "latest" => json!({"ok": true, "latest": self.latest.get(ask["bench"].as_str().unwrap())}),
            "document" => json!({"ok": true, "document": {"standing": "free"}}),
            "say_role" => {
                let latest = &self.latest[ask["bench"].as_str().unwrap()];
                let [container, role] = ["container", "role"].map(|k| ask[k].as_str().unwrap().to_string());
                self.weighed.push((container, role, latest["mass_ug"].as_i64().unwrap()));
                json!({"ok": true})
            }
            _ => json!({"ok": true}),
        }
        .to_string()
    }

    fn progress(&mut self, step: &StepInfo) {
        assert_eq!(step.no, self.steps.len() + 1);
        self.steps.push(step.says.clone());
    }

    fn stop(&mut self) -> bool {
        self.stop_after.is_some_and(|n| self.steps.len() >= n)
    }
}

fn bench(no: u32, balance: &str) -> Bench {
    Bench {
        name: format!("bench-{no}"),
        operator: format!("A{no}"),
        balance: Balance { name: balance.into(), settings: Settings::new(BalanceDialect::SignedSteady, 2) },
        cup: Cup { name: format!("cup-{no}"), dialect: CupDialect::RunningTotal },
        scanner: format!("scan-{no}"),
    }
}

/// A believable specimen; masses differ from container to container.
fn specimen(no: usize, first_container: usize) -> Specimen {
    let w = |k: usize| {
        let tare_ug = (2_100 + 7 * k as i64 + no as i64) * 10_000;
        let (soil, water) = (12_000_000 + 110_000 * k as i64, 4_800_000 + 70_000 * no as i64);
        Weighed {
            container: format!("C{}", first_container + k),
            tare_ug,
            wet_ug: tare_ug + soil + water,
            dry_ug: vec![tare_ug + soil],
            set_aside: None,
        }
    };
    let liquid = [31, 28, 24, 18].into_iter().enumerate();
    Specimen {
        id: format!("S-{no}"),
        method: "d4318-multipoint".into(),
        liquid: liquid.map(|(k, n)| Liquid { drops: vec![n], rate_per_s: 2.0, slice: w(k) }).collect(),
        plastic: vec![w(4), w(5)],
        natural: vec![w(6)],
        ..Specimen::default()
    }
}

fn day(specimens: Vec<Specimen>) -> Day {
    Day { start_utc_us: START, benches: vec![bench(1, "pan-1"), bench(2, "pan-2")], specimens }
}

fn run(day: &Day, settings: &Play, prepare: impl FnOnce(&mut Model)) -> (Result<Summary, PlayError>, Model) {
    let dir = tempfile::tempdir().unwrap();
    let mut instruments = Instruments::open(dir.path(), day).unwrap();
    let mut model = Model::new(day, &instruments);
    prepare(&mut model);
    let result = play(day, &mut instruments, settings, &mut model);
    (result, model)
}

/// Every weighing of the day as (container, role, mass), sorted.
fn wanted(day: &Day) -> Vec<(String, String, i64)> {
    let mut all = Vec::new();
    for (_, _, w) in day.specimens.iter().flat_map(|s| s.weighed()) {
        all.push((w.container.clone(), "tare".into(), w.tare_ug));
        all.push((w.container.clone(), "wet".into(), w.wet_ug));
        all.extend(w.dry_ug.iter().map(|&ug| (w.container.clone(), "dry".into(), ug)));
    }
    all.sort();
    all
}

fn sorted(model: &Model) -> Vec<(String, String, i64)> {
    let mut all = model.weighed.clone();
    all.sort();
    all
}

#[test]
fn ten_specimens_arrive_exactly_as_described_and_quickly() {
    let specimens: Vec<Specimen> = (0..10).map(|i| specimen(i, 11 + 7 * (i % 8))).collect();
    let day = day(specimens);
    let began = Instant::now();
    let (result, model) = run(&day, &Play::default(), |_| ());
    let took = began.elapsed();
    let summary = result.unwrap();
    assert_eq!(sorted(&model), wanted(&day));
    assert_eq!((summary.weighings, summary.counts, summary.drops), (210, 40, 1_010));
    assert_eq!((summary.roles_said, summary.stopped), (0, false));
    let mut counts: Vec<u32> = model.counts.iter().map(|c| c.1).collect();
    counts.sort_unstable();
    assert_eq!(counts, [[18; 10], [24; 10], [28; 10], [31; 10]].concat());
    // The rate of each run is that of the description, for a reader that divides by its own stamps.
    assert!(model.counts.iter().all(|c| (c.2 - 2.0).abs() < 1e-6), "{:?}", model.counts);
    assert!(took < Duration::from_secs(5), "{took:?}");
    println!("ten specimens in {took:?}, {} times set, {} asks", model.times.len(), model.asks.len());
}

#[test]
fn noise_and_single_lines_change_no_mass() {
    let day = day(vec![specimen(0, 11), specimen(1, 11)]);
    for (noise, lines_together) in [(Noise::BENCH, 1), (Noise::BENCH, 7), (Noise::NONE, 100)] {
        let (result, model) = run(&day, &Play { noise, lines_together, ..Play::default() }, |_| ());
        result.unwrap();
        assert_eq!(sorted(&model), wanted(&day));
    }
}

#[test]
fn idle_balances_can_be_kept_from_seeming_silent() {
    let day = day(vec![specimen(0, 11), specimen(1, 31), specimen(2, 51)]);
    let silent = |idle_line_us| {
        let (result, model) = run(&day, &Play { idle_line_us, ..Play::default() }, |_| ());
        result.unwrap();
        assert_eq!(sorted(&model), wanted(&day));
        let waits = |at: &[i64]| at.windows(2).map(|w| w[1] - w[0]).filter(|us| *us < 1_200_000_000).max().unwrap();
        model.heard.values().map(|at| waits(at)).max().unwrap()
    };
    assert!(silent(None) > 60_000_000, "control: without idle lines a balance says nothing while paste is mixed");
    assert!(silent(Some(5_000_000)) <= 5_000_000);
    // Slow balances that send much at once: an idle line must not fall between the lines of a placement.
    let mut slow = day.clone();
    slow.benches.iter_mut().for_each(|b| b.balance.settings.interval_us = 1_000_000);
    let (result, model) = run(&slow, &Play { idle_line_us: Some(1), lines_together: 9, ..Play::default() }, |_| ());
    result.unwrap();
    assert_eq!(sorted(&model), wanted(&slow));
}

#[test]
fn the_same_seed_plays_the_same_times_and_another_seed_others() {
    let day = day(vec![specimen(0, 11), specimen(1, 31)]);
    let times = |seed| run(&day, &Play { seed, ..Play::default() }, |_| ()).1.times;
    assert_eq!(times(3), times(3));
    assert_ne!(times(3), times(4));
}

#[test]
fn a_shared_balance_serves_one_bench_at_a_time() {
    let mut day = day(vec![specimen(0, 11), specimen(1, 31), specimen(2, 51)]);
    day.benches[1].balance.name = "pan-1".into();
    let (result, model) = run(&day, &Play::default(), |_| ());
    result.unwrap();
    assert_eq!(sorted(&model), wanted(&day));
}

#[test]
fn the_operator_says_the_role_where_the_program_does_not_know_it() {
    let day = day(vec![specimen(0, 11)]);
    let (result, model) = run(&day, &Play::default(), |m| m.clueless = true);
    assert_eq!(result.unwrap().roles_said, 21);
    assert_eq!(sorted(&model), wanted(&day));
    let said = model.asks.iter().find(|a| a["ask"] == "say_role").unwrap();
    assert_eq!(
        *said,
        json!({"ask": "say_role", "bench": "bench-1", "container": "C11", "role": "tare", "who": "A1", "why": "C11 was weighed tare"})
    );
}

#[test]
fn a_day_that_goes_wrong_ends_with_a_sentence_that_names_the_step() {
    let day = day(vec![specimen(0, 11)]);
    type Case = (fn(&mut Model), &'static [&'static str]);
    let cases: [Case; 4] = [
        (
            |m| m.refuses = Some("intend"),
            &["step 10 of", "bench bench-1", "turns to S-0, liquid", "refused intend: no such thing here"],
        ),
        (|m| m.deaf_to = Some("cup-1"), &["S-0, liquid 1: 31 drops", "cup-1", "nothing came for 2 s"]),
        (|m| m.wrong_by_ug = 10_000, &["weighs C11 tare, 21 g", "the balance showed 21 g, the program took 21.01 g"]),
        (|m| m.refuses = Some("latest"), &["weighs C11 tare", "refused latest"]),
    ];
    for (spoil, wants) in cases {
        let text = run(&day, &Play::default(), spoil).0.unwrap_err().to_string();
        for want in wants {
            assert!(text.contains(want), "{text:?} does not say {want:?}");
        }
    }
}

#[test]
fn wrong_settings_and_foreign_instruments_are_refused_before_anything_moves() {
    let day = day(vec![specimen(0, 11)]);
    for speed in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        let (result, model) = run(&day, &Play { speed: Some(speed), ..Play::default() }, |_| ());
        assert!(matches!(result, Err(PlayError::Speed(_))), "{speed}");
        assert!(model.times.is_empty());
    }
    let dir = tempfile::tempdir().unwrap();
    let other = Day { benches: vec![bench(3, "pan-3")], ..day.clone() };
    let mut instruments = Instruments::open(dir.path(), &other).unwrap();
    let mut model = Model::new(&other, &instruments);
    let error = play(&day, &mut instruments, &Play::default(), &mut model).unwrap_err();
    assert!(matches!(&error, PlayError::NoPort(name) if name == "pan-1"), "{error}");
}

#[test]
fn pacing_keeps_to_the_speed_leaps_over_the_oven_and_can_be_stopped() {
    let mut small = specimen(0, 11);
    small.liquid.truncate(1);
    small.plastic.clear();
    small.natural.clear();
    let day = day(vec![small]);
    let (result, free) = run(&day, &Play::default(), |_| ());
    let end = result.unwrap().end_utc_us;
    assert!(end - START > 16 * 3_600 * 1_000_000);
    // Some six minutes at the bench at 600 times; the oven alone would take 96 s.
    let began = Instant::now();
    let (result, paced) = run(&day, &Play { speed: Some(600.0), ..Play::default() }, |_| ());
    assert_eq!(result.unwrap().end_utc_us, end);
    let took = began.elapsed();
    assert!((300..5_000).contains(&took.as_millis()), "{took:?}");
    assert_eq!(paced.times, free.times, "pacing changed a time");

    let (result, stopped) = run(&day, &Play { speed: Some(0.001), ..Play::default() }, |m| m.stop_after = Some(1));
    assert!(result.unwrap().stopped);
    assert_eq!(stopped.steps.len(), 1);
}
