//! Endless believable work at a simulated bench, for people who build or try something that listens to it.

use crate::balance::{Balance, Noise, Settings};
use crate::counter::{CupDialect, CupError, CupRun};
use crate::pty::{Pty, PtyError};
use crate::rng::Rng;
use crate::trouble::{Act, Trouble, act};
use crate::{Timed, scanner_bytes};
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};

/// Trials of one made-up specimen.
const TRIALS: usize = 3;
/// Numbered containers that go round.
const CONTAINERS: usize = 60;
/// From the code to the container on the pan, µs.
const SCAN_TO_PAN_US: u64 = 2_000_000;
/// How long a container stands on the pan, µs.
const ON_PAN_US: u64 = 4_000_000;
/// Afterwards, µs.
const EMPTY_US: u64 = 2_000_000;
/// Longest sleep before looking whether to stop or whether a balance was asked.
const NAP: Duration = Duration::from_millis(20);

/// What is at the bench and how it behaves.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Scene {
    /// The balance.
    pub balance: Settings,
    /// Its noise.
    pub noise: Noise,
    /// The cup counter.
    pub cup: CupDialect,
    /// Drops per second.
    pub rate_per_s: f64,
    /// Time between pieces of work, µs.
    pub pause_us: u64,
    /// Simulated seconds per real second.
    pub speed: f64,
    /// Trouble on all cables.
    pub trouble: Trouble,
}

/// Which instrument of the bench.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Which {
    /// The code scanner.
    Scanner,
    /// The balance.
    Balance,
    /// The cup counter.
    Cup,
}

impl Which {
    const ALL: [Which; 3] = [Which::Scanner, Which::Balance, Which::Cup];
}

/// One piece of work.
#[derive(Clone, Debug, PartialEq)]
pub enum Job {
    /// The container's code is scanned, then it is weighed.
    Weigh {
        /// The container.
        container: String,
        /// Its mass with what is in it, µg.
        mass_ug: i64,
        /// The same for people.
        says: String,
    },
    /// The cup runs.
    Count(CupRun),
}

impl std::fmt::Display for Job {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Job::Weigh { container, mass_ug, says } => write!(f, "{container} {says} {} g", crate::grams(*mass_ug)),
            Job::Count(run) => write!(f, "{} drops", run.drops),
        }
    }
}

/// Work without end: specimen after specimen, each with [`TRIALS`] containers weighed empty, counted and weighed wet, weighed dry.
pub struct Work {
    rng: Rng,
    step_ug: i64,
    rate_per_s: f64,
    next_container: usize,
    ready: std::collections::VecDeque<Job>,
}

impl Work {
    /// The same seed gives the same work. Masses are whole steps of the balance.
    pub fn new(seed: u64, step_ug: i64, rate_per_s: f64) -> Self {
        Self { rng: Rng::new(seed), step_ug: step_ug.max(1), rate_per_s, next_container: 0, ready: Default::default() }
    }

    fn specimen(&mut self) {
        // A flow line: water content falls with the logarithm of the drops; limit and slope of ordinary clays (invented).
        let at_25 = self.rng.between(28, 65) as f64;
        let slope = self.rng.between(6, 14) as f64;
        let windows = [(26, 34), (21, 29), (16, 24)];
        let (mut tares, mut wets, mut dries) = (Vec::new(), Vec::new(), Vec::new());
        for (low, high) in windows.into_iter().take(TRIALS) {
            let container = format!("C{}", 11 + self.next_container);
            self.next_container = (self.next_container + 1) % CONTAINERS;
            let drops = self.rng.between(low, high) as u32;
            let tare = self.drawn(19_500_000, 23_000_000);
            let soil = self.drawn(9_000_000, 14_000_000);
            let water_percent = at_25 - slope * (f64::from(drops) / 25.0).log10();
            let water = self.whole((soil as f64 * water_percent / 100.0) as i64);
            let weigh = |mass_ug, says: &str| Job::Weigh { container: container.clone(), mass_ug, says: says.into() };
            tares.push(weigh(tare, "empty"));
            wets.push(Job::Count(CupRun { jitter_us: 8_000, ..CupRun::clean(drops, self.rate_per_s) }));
            wets.push(weigh(tare + soil + water, "wet"));
            dries.push(weigh(tare + soil, "dry"));
        }
        self.ready.extend(tares.into_iter().chain(wets).chain(dries));
    }

    fn drawn(&mut self, low: i64, high: i64) -> i64 {
        let ug = self.rng.between(low, high);
        self.whole(ug)
    }

    fn whole(&self, ug: i64) -> i64 {
        ug / self.step_ug * self.step_ug
    }
}

impl Iterator for Work {
    type Item = Job;
    fn next(&mut self) -> Option<Job> {
        if self.ready.is_empty() {
            self.specimen();
        }
        self.ready.pop_front()
    }
}

/// What the hand does to the balance.
enum Hand {
    Put(i64),
    Lift,
    Key,
}

/// One bench with its three cables.
pub struct PlayedBench {
    scene: Scene,
    balance: Balance,
    rng: Rng,
    ports: [Pty; 3],
    /// The line an asked balance would answer with, and what it has been asked so far.
    current: Vec<u8>,
    asked: Vec<u8>,
}

impl PlayedBench {
    /// Opens the three cables of bench number `no` in `dir`: `scan-1`, `pan-1`, `cup-1` and so on.
    pub fn open(dir: &Path, no: usize, scene: Scene, seed: u64) -> Result<Self, PtyError> {
        let open = |name: &str| Pty::open(&dir.join(format!("{name}-{no}")));
        let ports = [open("scan")?, open("pan")?, open("cup")?];
        let mut rng = Rng::new(seed);
        let mut balance = Balance::new(scene.balance, scene.noise, rng.next_u64());
        let current = balance.next_line();
        Ok(Self { scene, balance, rng, ports, current, asked: Vec::new() })
    }

    /// The links in the order scanner, balance, cup counter.
    pub fn links(&self) -> [PathBuf; 3] {
        [0, 1, 2].map(|i| self.ports[i].link().to_path_buf())
    }

    /// All bytes of one piece of work and the pause after it, with times from its beginning, µs, in order.
    pub fn timeline(&mut self, job: &Job) -> Result<Vec<(u64, Which, Vec<u8>)>, CupError> {
        let mut out = Vec::new();
        let mut hands = Vec::new();
        let lasts = match job {
            Job::Weigh { container, mass_ug, .. } => {
                out.push((0, Which::Scanner, scanner_bytes(container)));
                let lifted = SCAN_TO_PAN_US + ON_PAN_US;
                hands.extend([(SCAN_TO_PAN_US, Hand::Put(*mass_ug)), (lifted - 1, Hand::Key), (lifted, Hand::Lift)]);
                lifted + EMPTY_US
            }
            Job::Count(run) => {
                let mut at = 0;
                for (delay, bytes) in run.bytes(self.scene.cup, &mut self.rng)? {
                    at += delay;
                    out.push((at, Which::Cup, bytes));
                }
                run.lasts_us()
            }
        };
        self.balance_lines(&mut out, hands, lasts + self.scene.pause_us);
        out.sort_by_key(|(at, which, _)| (*at, *which));
        Ok(out)
    }

    /// The balance's own lines while the hand puts and lifts.
    fn balance_lines(&mut self, out: &mut Vec<(u64, Which, Vec<u8>)>, hands: Vec<(u64, Hand)>, lasts: u64) {
        let on_key = self.scene.balance.dialect.on_key();
        let interval = self.scene.balance.interval_us.max(1_000);
        let mut hands = hands.into_iter().peekable();
        let mut at = 0;
        while at < lasts {
            while let Some((when, hand)) = hands.next_if(|(when, _)| *when <= at) {
                match hand {
                    Hand::Put(mass_ug) => self.balance.put(mass_ug),
                    Hand::Lift => self.balance.lift(),
                    Hand::Key if on_key => out.push((when, Which::Balance, self.balance.next_line())),
                    Hand::Key => {}
                }
            }
            let line = self.balance.next_line();
            if !on_key {
                out.push((at, Which::Balance, line));
            }
            at += interval;
        }
    }

    /// Plays one piece of work in real time; returns early when told to stop.
    pub fn play(&mut self, job: &Job, stop: &AtomicBool) -> Result<(), PlayFault> {
        let timeline = self.timeline(job)?;
        let began = Instant::now();
        for (at, which, to_do) in self.troubled(timeline) {
            let due = began + Duration::from_secs_f64(at as f64 / 1e6 / self.scene.speed);
            while let Some(left) = due.checked_duration_since(Instant::now()).filter(|d| !d.is_zero()) {
                if stop.load(Ordering::Relaxed) {
                    return Ok(());
                }
                self.nap(left.min(NAP))?;
            }
            match to_do {
                Act::Write(line) if which == Which::Balance && self.scene.balance.dialect.asked() => self.current = line,
                to_do => act(&mut self.ports[which as usize], &to_do)?,
            }
        }
        Ok(())
    }

    /// Sleeps, or waits for a question where the balance speaks only when asked.
    fn nap(&mut self, time: Duration) -> Result<(), PtyError> {
        let pan = &mut self.ports[Which::Balance as usize];
        let dialect = self.scene.balance.dialect;
        if !dialect.asked() || pan.device().is_none() {
            std::thread::sleep(time);
            return Ok(());
        }
        self.asked.extend(pan.read_sent(time)?);
        if dialect.take_request(&mut self.asked) {
            pan.write_or_lose(&self.current)?;
        }
        Ok(())
    }

    /// Trouble comes to each cable by itself.
    fn troubled(&mut self, timeline: Vec<(u64, Which, Vec<u8>)>) -> Vec<(u64, Which, Act)> {
        let mut out = Vec::with_capacity(timeline.len());
        for which in Which::ALL {
            let mut before = 0;
            let timed: Vec<Timed> = timeline
                .iter()
                .filter(|(_, w, _)| *w == which)
                .map(|(at, _, bytes)| (at - std::mem::replace(&mut before, *at), bytes.clone()))
                .collect();
            let mut at = 0;
            for (delay, to_do) in self.scene.trouble.on(timed, &mut self.rng) {
                at += delay;
                out.push((at, which, to_do));
            }
        }
        out.sort_by_key(|(at, which, _)| (*at, *which));
        out
    }
}

/// Why playing ended.
#[derive(Debug, thiserror::Error)]
pub enum PlayFault {
    /// A cable failed.
    #[error(transparent)]
    Pty(#[from] PtyError),
    /// A count that no cup can make.
    #[error(transparent)]
    Cup(#[from] CupError),
}
