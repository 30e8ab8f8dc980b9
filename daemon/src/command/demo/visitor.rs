//! A bench for whoever watches the demo: a simulated balance and cup counter
//! in real time, moved by a hand on the bench page.
//!
//! The soil is invented: a clay whose flow line and plastic limit are set
//! below, so that a visitor who works as the page says gets a believable
//! result.

use super::day::config_of;
use crate::clock::VirtualClock;
use crate::desk::inbox::Inbox;
use crate::screen::hand::{Hand, Held, Standing};
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::path::Path;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, OnceLock, PoisonError, mpsc};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};
use tarecup_core::stamp::HOUR_US;
use tarecup_simulators::balance::{Balance, Noise, Settings};
use tarecup_simulators::counter::CupDialect;
use tarecup_simulators::day::Day;
use tarecup_simulators::dialect::BalanceDialect;
use tarecup_simulators::pty::{Pty, PtyError};
use tarecup_simulators::rng::Rng;

/// Its balance and cup counter.
const PAN: &str = "pan-visitor";
const CUP: &str = "cup-visitor";
/// Its specimen.
const SPECIMEN: &str = "V-1";
/// Containers on its shelf.
const CONTAINERS: usize = 8;
/// Between two lines of the balance.
const LINE: Duration = Duration::from_millis(100);
/// Between two drops.
const DROP: Duration = Duration::from_millis(500);
/// From the last drop to the hand on the switch.
const SWITCH: Duration = Duration::from_millis(1_200);
/// The invented soil: water content at 25 drops and at which threads crumble, percent; fall over a tenfold of drops.
const LIQUID_LIMIT: f64 = 46.0;
const PLASTIC_LIMIT: f64 = 22.0;
const SLOPE: f64 = 11.0;
/// A night in the oven.
const NIGHT_US: i64 = 16 * HOUR_US;

#[derive(Clone, Copy)]
enum Soil {
    None,
    Wet { dry_ug: i64, water_ug: i64 },
    Dry { dry_ug: i64 },
}

struct Tin {
    name: String,
    tare_ug: i64,
    soil: Soil,
}

impl Tin {
    fn mass_ug(&self) -> i64 {
        self.tare_ug
            + match self.soil {
                Soil::None => 0,
                Soil::Wet { dry_ug, water_ug } => dry_ug + water_ug,
                Soil::Dry { dry_ug } => dry_ug,
            }
    }
}

struct Run {
    drops: u32,
    closes_at: u32,
    next: Instant,
}

struct Bench {
    balance: Balance,
    tins: Vec<Tin>,
    on_pan: Option<usize>,
    /// Water content of the paste in the cup, percent.
    paste: f64,
    run: Option<Run>,
    says: String,
    rng: Rng,
}

/// The visitor's bench.
pub struct Visitor {
    bench: String,
    work: Arc<Mutex<Bench>>,
    stop: Arc<AtomicBool>,
    thread: Mutex<Option<JoinHandle<()>>>,
    inbox: OnceLock<Arc<Inbox>>,
    clock: Arc<VirtualClock>,
    day_over: AtomicBool,
}

impl Visitor {
    /// Opens its cables in the folder and sets its instruments to work.
    pub fn open(dir: &Path, day: &Day, clock: Arc<VirtualClock>) -> Result<Arc<Self>, PtyError> {
        let taken = |name: &String| day.benches.iter().any(|b| b.name == *name);
        let names = std::iter::once(String::from("visitor")).chain((2..).map(|n| format!("visitor-{n}")));
        let bench = names.into_iter().find(|n| !taken(n)).unwrap_or_default();
        let (pan, cup) = (Pty::open(&dir.join(PAN))?, Pty::open(&dir.join(CUP))?);
        let settings = Settings::new(BalanceDialect::SignedSteady, 2);
        let tins = (1..=CONTAINERS).map(|n| Tin {
            name: format!("V{n}"),
            // Invented masses of tins, as every other number here.
            tare_ug: 19_400_000 + 370_000 * ((n as i64 * 5) % 11),
            soil: Soil::None,
        });
        let work = Arc::new(Mutex::new(Bench {
            balance: Balance::new(settings, Noise::BENCH, 7),
            tins: tins.collect(),
            on_pan: None,
            paste: LIQUID_LIMIT - 2.0,
            run: None,
            says: String::from("Weigh some containers empty first; then fill the cup."),
            rng: Rng::new(11),
        }));
        let stop = Arc::new(AtomicBool::new(false));
        let thread = {
            let (work, stop) = (Arc::clone(&work), Arc::clone(&stop));
            std::thread::Builder::new().name("visitor".into()).spawn(move || move_on(&work, &stop, pan, cup)).ok()
        };
        Ok(Arc::new(Self {
            bench,
            work,
            stop,
            thread: Mutex::new(thread),
            inbox: OnceLock::new(),
            clock,
            day_over: AtomicBool::new(false),
        }))
    }

    /// How many cables it has.
    pub const PORTS: usize = 2;

    /// Its part of the config.
    pub fn config(&self, dir: &Path) -> String {
        let of = |name: &str, kind: &str, profile: &str| config_of(name, kind, &self.bench, &dir.join(name), profile);
        format!(
            "[[bench]]\nname = \"{}\"\n{}{}",
            self.bench,
            of(PAN, "balance", "signed-steady"),
            of(CUP, "counter", CupDialect::RunningTotal.name())
        )
    }

    /// The service runs: the visitor's specimen is opened and put to work.
    pub fn begin(&self, inbox: &Arc<Inbox>) {
        let _ = self.inbox.set(Arc::clone(inbox));
        self.ask(&json!({"ask": "open_specimen", "specimen": SPECIMEN, "description": "invented clay for visitors"}));
        self.intend();
    }

    /// The day at the other benches is over: from now on time passes by itself.
    pub fn day_over(&self) {
        self.day_over.store(true, Ordering::Relaxed);
        self.intend();
    }

    fn intend(&self) {
        self.ask(&json!({"ask": "intend", "bench": self.bench, "specimen": SPECIMEN, "intention": "liquid"}));
    }

    /// Takes the hand away and closes the cables.
    pub fn close(&self) {
        self.stop.store(true, Ordering::Relaxed);
        if let Some(thread) = self.thread.lock().unwrap_or_else(PoisonError::into_inner).take() {
            let _ = thread.join();
        }
    }

    fn lock(&self) -> MutexGuard<'_, Bench> {
        self.work.lock().unwrap_or_else(PoisonError::into_inner)
    }

    fn ask(&self, ask: &Value) -> Value {
        let Some(inbox) = self.inbox.get() else { return Value::Null };
        let (tx, rx) = mpsc::channel();
        inbox.ask("visitor".into(), ask.to_string(), Box::new(move |answer| drop(tx.send(answer))));
        let answer = rx.recv_timeout(Duration::from_secs(10)).unwrap_or_default();
        serde_json::from_str(&answer).unwrap_or_default()
    }

    fn night(&self) -> Result<(), String> {
        if !self.day_over.load(Ordering::Relaxed) {
            let says = "the day at the other benches is still being played, and a night cannot be leapt over before it ends; \
                        weigh wet until then";
            return Err(String::from(says));
        }
        let wet: Vec<String> = {
            let bench = self.lock();
            if bench.on_pan.is_some() {
                return Err(String::from("take the container off the pan first"));
            }
            bench.tins.iter().filter(|t| matches!(t.soil, Soil::Wet { .. })).map(|t| t.name.clone()).collect()
        };
        // Only what was weighed wet is known to hold soil: the others go in without a record.
        let known = |answer: &Value| answer["ok"] == Value::Bool(true);
        let recorded: Vec<&String> =
            wet.iter().filter(|c| known(&self.ask(&json!({"ask": "into_oven", "containers": [c], "celsius": 110})))).collect();
        if recorded.is_empty() {
            return Err(String::from("no container that was weighed wet is here to be dried"));
        }
        self.clock.leap(NIGHT_US);
        self.ask(&json!({"ask": "out_of_oven", "containers": recorded}));
        self.intend();
        let mut bench = self.lock();
        for tin in &mut bench.tins {
            if let Soil::Wet { dry_ug, .. } = tin.soil {
                tin.soil = Soil::Dry { dry_ug };
            }
        }
        bench.says = format!("A night at 110 °C went by in a moment; dry now: {}. Weigh each again.", wet.join(", "));
        Ok(())
    }
}

impl Hand for Visitor {
    fn bench(&self) -> &str {
        &self.bench
    }

    fn standing(&self) -> Standing {
        let bench = self.lock();
        let holds = |t: &Tin| match t.soil {
            Soil::None => "empty",
            Soil::Wet { .. } => "wet soil",
            Soil::Dry { .. } => "dry soil",
        };
        Standing {
            containers: bench.tins.iter().map(|t| Held { container: t.name.clone(), holds: holds(t).into() }).collect(),
            pan: bench.on_pan.map(|n| bench.tins[n].name.clone()),
            cup_runs: bench.run.is_some(),
            says: bench.says.clone(),
        }
    }

    fn act(&self, what: &BTreeMap<String, String>) -> Result<(), String> {
        let word = |name: &str| what.get(name).map_or("", String::as_str);
        match word("do") {
            "oven" => self.night(),
            "put" => self.lock().put(word("container"), word("with")),
            "lift" => self.lock().lift(),
            "cup" => self.lock().cup(),
            "stop" => self.lock().switch_off(),
            "wetter" => self.lock().mix(1.5),
            "drier" => self.lock().mix(-1.5),
            _ => Err(String::from("the hand can put, lift, cup, stop, wetter, drier, oven")),
        }
    }
}

impl Bench {
    fn put(&mut self, container: &str, with: &str) -> Result<(), String> {
        if self.on_pan.is_some() {
            return Err(String::from("something is on the pan; take it off first"));
        }
        let none = || {
            format!(
                "there is no container {} here; the containers are V1 to V{CONTAINERS}",
                &container.chars().take(40).collect::<String>()
            )
        };
        let at = self.tins.iter().position(|t| t.name == container).ok_or_else(none)?;
        let soil_ug = |rng: &mut Rng| rng.between(850, 1_150) * 10_000;
        let wet =
            |dry_ug: i64, percent: f64| Soil::Wet { dry_ug, water_ug: (dry_ug as f64 * percent / 1e6).round() as i64 * 10_000 };
        let empty = matches!(self.tins[at].soil, Soil::None);
        let soil = match with {
            "" | "as-it-is" => self.tins[at].soil,
            "nothing" => Soil::None,
            "slice" | "threads" if !empty => {
                return Err(format!("{container} holds soil already; take another, or empty it first"));
            }
            "slice" => wet(soil_ug(&mut self.rng), self.paste),
            "threads" => wet(soil_ug(&mut self.rng), PLASTIC_LIMIT + self.rng.between(-4, 4) as f64 / 10.0),
            _ => return Err(String::from("it can be put on as-it-is, with a slice, with threads, or with nothing")),
        };
        self.tins[at].soil = soil;
        self.balance.put(self.tins[at].mass_ug());
        self.on_pan = Some(at);
        self.says = format!("{container} is on the pan.");
        Ok(())
    }

    fn lift(&mut self) -> Result<(), String> {
        self.on_pan.take().ok_or("nothing is on the pan")?;
        self.balance.lift();
        self.says = String::from("The pan is empty.");
        Ok(())
    }

    fn cup(&mut self) -> Result<(), String> {
        if self.run.is_some() {
            return Err(String::from("the cam runs already"));
        }
        let closes_at = (25.0 * 10f64.powf((LIQUID_LIMIT - self.paste) / SLOPE)).round().clamp(2.0, 120.0) as u32;
        self.run = Some(Run { drops: 0, closes_at, next: Instant::now() + DROP });
        self.says = String::from("The cam runs; the hand stops it when the groove has closed.");
        Ok(())
    }

    fn switch_off(&mut self) -> Result<(), String> {
        let run = self.run.as_mut().ok_or("the cam stands still")?;
        run.closes_at = run.drops;
        run.next = Instant::now();
        Ok(())
    }

    fn mix(&mut self, percent: f64) -> Result<(), String> {
        if self.run.is_some() {
            return Err(String::from("the cam runs; stop it first"));
        }
        self.paste = (self.paste + percent).clamp(LIQUID_LIMIT - 7.0, LIQUID_LIMIT + 6.0);
        self.says = String::from(if percent > 0.0 {
            "The paste is wetter now: fewer drops."
        } else {
            "The paste is drier now: more drops."
        });
        Ok(())
    }

    /// What the cup counter sends now.
    fn cup_line(&mut self, now: Instant) -> Option<Vec<u8>> {
        let run = self.run.as_mut().filter(|r| now >= r.next)?;
        if run.drops >= run.closes_at {
            let drops = run.drops;
            self.run = None;
            self.says = format!("The groove closed after {drops} drops: take a slice.");
            // A counter that was stopped before its first drop has nothing to tell.
            return CupDialect::RunningTotal.end_bytes(drops).filter(|_| drops > 0);
        }
        run.drops += 1;
        run.next += if run.drops == run.closes_at { SWITCH } else { DROP };
        Some(CupDialect::RunningTotal.drop_bytes(run.drops))
    }
}

/// Sends what balance and counter send, until told to stop.
fn move_on(work: &Mutex<Bench>, stop: &AtomicBool, mut pan: Pty, mut cup: Pty) {
    let mut next = Instant::now();
    while !stop.load(Ordering::Relaxed) {
        std::thread::sleep(Duration::from_millis(20));
        let now = Instant::now();
        let (drop, line) = {
            let mut bench = work.lock().unwrap_or_else(PoisonError::into_inner);
            let line = (now >= next).then(|| bench.balance.next_line());
            (bench.cup_line(now), line)
        };
        // A cable whose other end nobody holds loses bytes; that is all.
        if let Some(bytes) = drop {
            let _ = cup.write_or_lose(&bytes);
        }
        if let Some(bytes) = line {
            next = now + LINE;
            let _ = pan.write_or_lose(&bytes);
        }
    }
}
