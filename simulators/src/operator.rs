//! An operator who plays a day on simulated instruments, in lock-step with the program under test.
//!
//! Virtual time goes to the next event, bytes go out, and nothing further happens before the program has said that it
//! has heard them. A hiccup of the machine therefore changes no result. After each weighing the operator looks at what
//! the program made of it, as a technician looks at the screen, and says the role where the program asks for it.

use crate::Timed;
use crate::balance::{Balance, Noise, PLACEMENT_LINES};
use crate::day::{Day, DayFault};
use crate::pty::{Pty, PtyError};
use crate::rng::Rng;
use crate::schedule::{Role, SCAN_TO_PAN_US, Step, What, schedule};
use serde_json::{Value, json};
use std::collections::{BTreeMap, BinaryHeap};
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

/// The program under test, as the operator needs it.
pub trait World {
    /// Sets virtual time, µs UTC. It never goes back.
    fn set_time(&mut self, utc_us: i64);
    /// Blocks until everything written to this instrument's port has been heard and committed. `bytes` counts from the
    /// opening of the port. `Err` says why it was not.
    fn heard(&mut self, instrument: &str, bytes: u64) -> Result<(), String>;
    /// Puts an ask (JSON text) and returns the JSON answer, `{"ok":true,…}` or `{"ok":false,"error":{"says":"…"}}`.
    fn ask(&mut self, json: &str) -> String;
    /// Told before each step.
    fn progress(&mut self, step: &StepInfo);
    /// True when the day should end early; asked between events and while waiting.
    fn stop(&mut self) -> bool {
        false
    }
}

/// A step, for showing.
#[derive(Clone, Debug, PartialEq)]
pub struct StepInfo {
    /// Number from 1, in the order of time.
    pub no: usize,
    /// How many steps the day has.
    pub of: usize,
    /// Virtual time at which it begins, µs UTC.
    pub at_utc_us: i64,
    /// The bench.
    pub bench: String,
    /// The specimen it is about.
    pub specimen: Option<String>,
    /// What is done.
    pub says: String,
}

/// How the day is played.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Play {
    /// Virtual seconds per real second; `None` does not wait at all. The oven is leapt over either way.
    pub speed: Option<f64>,
    /// Lines of a balance that go out in one write, at the virtual time of the last of them.
    pub lines_together: usize,
    /// Seed of jitter and noise.
    pub seed: u64,
    /// Noise of the balances.
    pub noise: Noise,
    /// Waits of more than this are leapt over when the day is paced, µs of virtual time.
    pub leap_from_us: i64,
    /// A streaming balance that nobody uses sends a line of its empty pan this often, µs of virtual time, so that it does
    /// not seem to have fallen silent; `None`: it sends nothing between weighings. Not while time leaps.
    pub idle_line_us: Option<i64>,
}

impl Default for Play {
    fn default() -> Self {
        Self {
            speed: None,
            lines_together: 4,
            seed: 1,
            noise: Noise::NONE,
            leap_from_us: 20 * 60 * 1_000_000,
            idle_line_us: None,
        }
    }
}

/// What was played.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Summary {
    /// Steps done.
    pub steps: usize,
    /// Weighings.
    pub weighings: usize,
    /// Count runs.
    pub counts: usize,
    /// Drops sent.
    pub drops: u64,
    /// Roles that the operator had to say.
    pub roles_said: usize,
    /// Virtual time at the end, µs UTC.
    pub end_utc_us: i64,
    /// The world asked for an early end.
    pub stopped: bool,
}

/// Why a day ended before its time.
#[derive(Debug, thiserror::Error)]
pub enum PlayError {
    /// The day itself cannot be played.
    #[error(transparent)]
    Day(#[from] DayFault),
    /// A speed that is none.
    #[error("a day cannot be played at speed {0}; give a number above 0, such as 60")]
    Speed(f64),
    /// An instrument of the day has no cable.
    #[error("instrument '{0}' has no simulated port; open the instruments for this very day")]
    NoPort(String),
    /// A cable failed.
    #[error("{step}: {why}")]
    Port {
        /// The step, in words.
        step: String,
        /// What happened.
        why: PtyError,
    },
    /// The program did not hear.
    #[error("{step}: what {instrument} sent was not heard: {why}; see the program's log")]
    NotHeard {
        /// The step, in words.
        step: String,
        /// The instrument.
        instrument: String,
        /// The world's words.
        why: String,
    },
    /// The program refused.
    #[error("{step}: the program refused {ask}: {says}")]
    Refused {
        /// The step, in words.
        step: String,
        /// What was asked.
        ask: String,
        /// The program's words.
        says: String,
    },
    /// The program took something else than was shown.
    #[error("{step}: {why}")]
    Mismatch {
        /// The step, in words.
        step: String,
        /// What differs.
        why: String,
    },
}

/// The cables of a day's instruments.
pub struct Instruments {
    ports: BTreeMap<String, Pty>,
}

impl Instruments {
    /// One pseudo-terminal for each instrument of the day, linked under its name in `dir`.
    pub fn open(dir: &Path, day: &Day) -> Result<Self, PtyError> {
        let mut ports = BTreeMap::new();
        for bench in &day.benches {
            for name in [&bench.balance.name, &bench.cup.name, &bench.scanner] {
                if !ports.contains_key(name) {
                    ports.insert(name.clone(), Pty::open(&dir.join(name))?);
                }
            }
        }
        Ok(Self { ports })
    }

    /// Every instrument with its link.
    pub fn links(&self) -> impl Iterator<Item = (&str, PathBuf)> {
        self.ports.iter().map(|(name, pty)| (name.as_str(), pty.link().to_path_buf()))
    }

    /// One cable, to make trouble with.
    pub fn pty(&mut self, name: &str) -> Option<&mut Pty> {
        self.ports.get_mut(name)
    }
}

/// Plays the day to its end.
pub fn play(day: &Day, instruments: &mut Instruments, settings: &Play, world: &mut dyn World) -> Result<Summary, PlayError> {
    if let Some(speed) = settings.speed
        && !(speed.is_finite() && speed > 0.0)
    {
        return Err(PlayError::Speed(speed));
    }
    let steps = schedule(day)?;
    for bench in &day.benches {
        for name in [&bench.balance.name, &bench.cup.name, &bench.scanner] {
            if !instruments.ports.contains_key(name) {
                return Err(PlayError::NoPort(name.clone()));
            }
        }
    }
    let mut operator = Operator::new(day, &steps, instruments, settings, world);
    operator.run()?;
    Ok(operator.summary)
}

/// Something due at a time. The order is that of time, then of steps, then within the step.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
struct Event {
    at_utc_us: i64,
    step: usize,
    nth: usize,
    due: Due,
}

#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
enum Due {
    Write {
        instrument: String,
        bytes: Vec<u8>,
    },
    /// Look at what the program made of the weighing.
    Look,
}

struct Operator<'a> {
    day: &'a Day,
    steps: &'a [Step],
    instruments: &'a mut Instruments,
    world: &'a mut dyn World,
    settings: &'a Play,
    balances: BTreeMap<&'a str, Balance>,
    rng: Rng,
    due: BinaryHeap<std::cmp::Reverse<Event>>,
    pace: Pace,
    /// How often a balance that nobody uses speaks.
    idle_line_us: Option<i64>,
    /// When each streaming balance last said something.
    spoke: BTreeMap<&'a str, i64>,
    /// Number of the latest weighing at each bench.
    latest: BTreeMap<usize, u64>,
    /// The tare of each container as last weighed.
    tares: BTreeMap<&'a str, i64>,
    summary: Summary,
}

impl<'a> Operator<'a> {
    fn new(
        day: &'a Day,
        steps: &'a [Step],
        instruments: &'a mut Instruments,
        settings: &'a Play,
        world: &'a mut dyn World,
    ) -> Self {
        let mut rng = Rng::new(settings.seed);
        let mut balances = BTreeMap::new();
        for bench in &day.benches {
            balances
                .entry(bench.balance.name.as_str())
                .or_insert_with(|| Balance::new(bench.balance.settings, settings.noise, rng.next_u64()));
        }
        let pace = Pace::new(settings, day.start_utc_us);
        let summary = Summary { end_utc_us: day.start_utc_us, ..Summary::default() };
        let slowest = day.benches.iter().map(|b| b.balance.settings.interval_us).max().unwrap_or(0);
        let placed_us = slowest.saturating_mul(settings.lines_together.min(PLACEMENT_LINES) as u64) as i64;
        let idle_line_us = settings.idle_line_us.map(|us| us.max(IDLE_LINE_MIN_US).max(placed_us.saturating_mul(2)));
        let streaming = |(_, b): &(&&'a str, &Balance)| !b.settings().dialect.on_key();
        let spoke = balances.iter().filter(streaming).map(|(name, _)| (*name, day.start_utc_us)).collect();
        let (due, latest, tares) = (BinaryHeap::new(), BTreeMap::new(), BTreeMap::new());
        Self { day, steps, instruments, world, settings, balances, rng, due, pace, idle_line_us, spoke, latest, tares, summary }
    }

    fn run(&mut self) -> Result<(), PlayError> {
        let mut next_step = 0;
        while !self.summary.stopped {
            let begins = self.steps.get(next_step).map(|s| s.at_utc_us);
            let due = self.due.peek().map(|e| e.0.at_utc_us);
            match (due, begins) {
                // What is already under way goes first at the same time.
                (Some(due), begins) if begins.is_none_or(|b| due <= b) => {
                    if let Some(std::cmp::Reverse(event)) = self.due.pop() {
                        self.idle_until(event.at_utc_us, event.step)?;
                        self.event(event)?;
                    }
                }
                (_, Some(begins)) => {
                    self.idle_until(begins, next_step)?;
                    self.begin(next_step)?;
                    next_step += 1;
                }
                _ => break,
            }
        }
        Ok(())
    }

    /// Goes on to a time; false when the day is to end instead.
    fn go_to(&mut self, utc_us: i64) -> bool {
        if self.pace.wait(utc_us, &mut *self.world) {
            self.summary.stopped = true;
            return false;
        }
        self.summary.end_utc_us = utc_us;
        self.world.set_time(utc_us);
        true
    }

    /// Lets balances that nobody uses show their empty pans until something else is due.
    fn idle_until(&mut self, utc_us: i64, step: usize) -> Result<(), PlayError> {
        let Some(every) = self.idle_line_us else {
            return Ok(());
        };
        while let Some((&name, &spoke)) = self.spoke.iter().min_by_key(|(_, spoke)| **spoke) {
            if spoke + every >= utc_us || !self.go_to(spoke + every) {
                break;
            }
            // A placement speaks more often than this: an idle line never comes between its lines.
            if let Some(line) = self.balances.get_mut(name).map(Balance::next_line) {
                self.write(step, name, &line)?;
            }
            self.spoke.insert(name, spoke + every);
        }
        Ok(())
    }

    fn begin(&mut self, no: usize) -> Result<(), PlayError> {
        let step = &self.steps[no];
        if !self.go_to(step.at_utc_us) {
            return Ok(());
        }
        let bench = &self.day.benches[step.bench];
        self.world.progress(&StepInfo {
            no: no + 1,
            of: self.steps.len(),
            at_utc_us: step.at_utc_us,
            bench: bench.name.clone(),
            specimen: step.specimen.clone(),
            says: step.says.clone(),
        });
        self.summary.steps += 1;
        match &step.what {
            What::Leap => {
                // The time itself passes when the next event is gone to.
                let after = step.at_utc_us + step.takes_us;
                self.pace.leap_to(after);
                self.spoke.values_mut().for_each(|spoke| *spoke = after);
            }
            What::Ask(ask) => {
                self.ask(no, ask)?;
            }
            What::Count(run) => {
                let name = bench.cup.name.clone();
                let timed = run.bytes(bench.cup.dialect, &mut self.rng).map_err(|e| self.mismatch(no, e.to_string()))?;
                self.summary.counts += 1;
                self.summary.drops += u64::from(run.drops);
                self.enqueue(no, step.at_utc_us, &name, timed, 0);
            }
            What::Weigh { container, mass_ug, .. } => self.begin_weighing(no, container, *mass_ug),
        }
        Ok(())
    }

    fn begin_weighing(&mut self, no: usize, container: &str, mass_ug: i64) {
        let step = &self.steps[no];
        let bench = &self.day.benches[step.bench];
        self.enqueue(no, step.at_utc_us, &bench.scanner, vec![(0, crate::scanner_bytes(container))], 0);
        // From here the placement speaks for the balance; idle lines may show the empty pan until it is loaded.
        let timed = match self.balances.get_mut(bench.balance.name.as_str()) {
            Some(balance) => together(balance.placement(mass_ug), self.settings.lines_together),
            None => Vec::new(),
        };
        let (nth, at) = (timed.len() + 1, step.at_utc_us + step.takes_us);
        self.enqueue(no, step.at_utc_us + SCAN_TO_PAN_US, &bench.balance.name, timed, 1);
        self.due.push(std::cmp::Reverse(Event { at_utc_us: at, step: no, nth, due: Due::Look }));
        self.summary.weighings += 1;
    }

    fn enqueue(&mut self, step: usize, from_utc_us: i64, instrument: &str, timed: Vec<Timed>, first: usize) {
        let mut at_utc_us = from_utc_us;
        for (i, (delay, bytes)) in timed.into_iter().enumerate() {
            at_utc_us += delay as i64;
            let due = Due::Write { instrument: instrument.to_string(), bytes };
            self.due.push(std::cmp::Reverse(Event { at_utc_us, step, nth: first + i, due }));
        }
    }

    fn event(&mut self, event: Event) -> Result<(), PlayError> {
        if !self.go_to(event.at_utc_us) {
            return Ok(());
        }
        match event.due {
            Due::Write { instrument, bytes } => self.write(event.step, &instrument, &bytes),
            Due::Look => self.look(event.step),
        }
    }

    fn write(&mut self, step: usize, instrument: &str, bytes: &[u8]) -> Result<(), PlayError> {
        if let Some(spoke) = self.spoke.get_mut(instrument) {
            *spoke = self.summary.end_utc_us;
        }
        let Some(pty) = self.instruments.ports.get_mut(instrument) else {
            return Err(PlayError::NoPort(instrument.to_string()));
        };
        let written = pty.write(bytes);
        let count = pty.counts().bytes;
        written.map_err(|why| PlayError::Port { step: self.words(step), why })?;
        self.world.heard(instrument, count).map_err(|why| PlayError::NotHeard {
            step: self.words(step),
            instrument: instrument.to_string(),
            why,
        })
    }

    /// Puts an ask that must not be refused.
    fn ask(&mut self, step: usize, ask: &Value) -> Result<Value, PlayError> {
        let text = self.world.ask(&ask.to_string());
        let refused = |says: String| {
            let ask = ask["ask"].as_str().unwrap_or("something").to_string();
            PlayError::Refused { step: self.words(step), ask, says }
        };
        let answer: Value = serde_json::from_str(&text).map_err(|e| refused(format!("its answer is not JSON ({e})")))?;
        if answer["ok"] == json!(true) {
            return Ok(answer);
        }
        let says = answer["error"]["says"].as_str().unwrap_or("without a reason");
        Err(refused(says.to_string()))
    }

    /// Looks at what the program made of the weighing, and says the role where it is not the one meant.
    fn look(&mut self, no: usize) -> Result<(), PlayError> {
        let What::Weigh { container, role, mass_ug, used_before } = &self.steps[no].what else {
            return Ok(());
        };
        let bench = self.steps[no].bench;
        let answer = self.ask(no, &json!({"ask": "latest", "bench": self.day.benches[bench].name}))?;
        let latest = &answer["latest"];
        self.same_mass(no, latest, *mass_ug)?;
        if let Some(seq) = latest["seq"].as_u64()
            && self.latest.insert(bench, seq) == Some(seq)
        {
            return Err(self.mismatch(no, "the program took no new mass; its latest one is the one before".into()));
        }
        match latest["container"].as_str() {
            Some(found) if found != container => {
                return Err(self.mismatch(no, format!("the program weighed container {found}, {container} was scanned")));
            }
            _ => {}
        }
        let loose = latest["loose"] == json!(true) || latest["container"].is_null();
        let agrees = self.agrees(latest["role"].as_str(), *role, container, *mass_ug);
        if loose || !agrees {
            self.say_role(no, container, *role)?;
        }
        if *role == Role::Tare {
            self.tares.insert(container, *mass_ug);
        }
        if *used_before {
            self.came_free(no, container)?;
        }
        Ok(())
    }

    fn same_mass(&self, no: usize, latest: &Value, shown_ug: i64) -> Result<(), PlayError> {
        match latest["mass_ug"].as_i64() {
            Some(taken) if taken == shown_ug => Ok(()),
            Some(taken) => Err(self.mismatch(
                no,
                format!("the balance showed {} g, the program took {} g", crate::grams(shown_ug), crate::grams(taken)),
            )),
            None => Err(self.mismatch(no, format!("the program took no mass; the balance showed {} g", crate::grams(shown_ug)))),
        }
    }

    /// Whether the program's role will do. A container weighed empty again may be called checked or emptied, as long as
    /// the tare on record is the mass now shown.
    fn agrees(&self, found: Option<&str>, meant: Role, container: &str, mass_ug: i64) -> bool {
        match (found, meant) {
            (Some(found), meant) if found == meant.word() => true,
            (Some("further_dry"), Role::Dry) => true,
            (Some("tare_check" | "emptied"), Role::Tare) => self.tares.get(container) == Some(&mass_ug),
            _ => false,
        }
    }

    fn say_role(&mut self, no: usize, container: &str, role: Role) -> Result<(), PlayError> {
        let bench = &self.day.benches[self.steps[no].bench];
        let why = format!("{} was weighed {}", container, role.word());
        let ask = json!({"ask": "say_role", "bench": bench.name, "container": container, "role": role.word(),
                         "who": bench.operator, "why": why});
        self.ask(no, &ask)?;
        self.summary.roles_said += 1;
        Ok(())
    }

    /// A container that another specimen used must be free once it has been weighed empty.
    fn came_free(&mut self, no: usize, container: &str) -> Result<(), PlayError> {
        let answer = self.ask(no, &json!({"ask": "document", "kind": "container", "id": container}))?;
        match answer["document"]["standing"].as_str() {
            Some(standing @ ("wet" | "in_oven")) => {
                Err(self.mismatch(no, format!("container {container} should be free by now but stands as {standing}")))
            }
            _ => Ok(()),
        }
    }

    fn mismatch(&self, step: usize, why: String) -> PlayError {
        PlayError::Mismatch { step: self.words(step), why }
    }

    fn words(&self, no: usize) -> String {
        let step = &self.steps[no];
        format!("step {} of {}, bench {}, {}", no + 1, self.steps.len(), self.day.benches[step.bench].name, step.says)
    }
}

/// Gathers so many pieces into one, at the time of the last of them.
fn together(timed: Vec<Timed>, n: usize) -> Vec<Timed> {
    timed
        .chunks(n.max(1))
        .map(|chunk| (chunk.iter().map(|(delay, _)| delay).sum(), chunk.iter().flat_map(|(_, b)| b.clone()).collect()))
        .collect()
}

/// Real time that keeps up with virtual time.
struct Pace {
    speed: Option<f64>,
    leap_from_us: i64,
    real: Instant,
    virtual_us: i64,
    now_us: i64,
}

/// Balances that are not used speak no more often than this, µs.
const IDLE_LINE_MIN_US: i64 = 3_000_000;
/// Longest sleep before the world is asked whether to stop.
const NAP: Duration = Duration::from_millis(50);
/// A wait that would be longer than this (some thirty years) is cut short to what the clock can hold, seconds.
const LONGEST_WAIT_S: f64 = 1e9;

impl Pace {
    fn new(settings: &Play, start_us: i64) -> Self {
        let Play { speed, leap_from_us, .. } = *settings;
        Self { speed, leap_from_us, real: Instant::now(), virtual_us: start_us, now_us: start_us }
    }

    /// From here on, real time counts from this virtual time.
    fn leap_to(&mut self, utc_us: i64) {
        (self.real, self.virtual_us, self.now_us) = (Instant::now(), utc_us, utc_us);
    }

    /// Waits for a virtual time; true when the day is to end early.
    fn wait(&mut self, utc_us: i64, world: &mut dyn World) -> bool {
        if let Some(speed) = self.speed {
            if utc_us - self.now_us > self.leap_from_us {
                self.leap_to(utc_us);
            }
            let seconds = ((utc_us - self.virtual_us).max(0) as f64 / 1e6 / speed).min(LONGEST_WAIT_S);
            let until = Duration::try_from_secs_f64(seconds).ok().and_then(|d| self.real.checked_add(d));
            while let Some(left) = until.and_then(|u| u.checked_duration_since(Instant::now())).filter(|d| !d.is_zero()) {
                if world.stop() {
                    return true;
                }
                std::thread::sleep(left.min(NAP));
            }
        }
        self.now_us = utc_us;
        world.stop()
    }
}
