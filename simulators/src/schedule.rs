//! From the description of a day to its steps in virtual time.
//!
//! Work goes in *rounds*. A round is a working day: containers are weighed
//! empty, trials are made, everything goes into the oven; next morning the dry
//! masses are weighed. A container that two specimens use is in two different
//! rounds, so it is never in two uses at once. Specimens of one round are
//! spread over the benches, which work side by side.

use crate::balance;
use crate::counter::CupRun;
use crate::day::{Bench, Day, DayFault, Kind, Limit, Specimen, Weighed};
use serde_json::{Value, json};
use std::collections::{BTreeMap, BTreeSet};

/// Most specimens that one bench takes in one round.
pub const PER_BENCH: usize = 8;
/// The oven overnight, µs.
pub const OVEN_US: i64 = 16 * HOUR_US;
/// Back in the oven before a further dry weighing, µs.
pub const BACK_IN_OVEN_US: i64 = 2 * HOUR_US;
/// Cooling with the lid on, µs.
pub const COOLING_US: i64 = 30 * MINUTE_US;

const SECOND_US: i64 = 1_000_000;
const MINUTE_US: i64 = 60 * SECOND_US;
const HOUR_US: i64 = 60 * MINUTE_US;
/// Between two steps at a bench.
const HANDS_US: i64 = 5 * SECOND_US;
/// Mixing the paste, filling the cup, cutting the groove.
const MIXING_US: i64 = 4 * MINUTE_US;
/// Between two closures of one paste.
const REMIXING_US: i64 = 90 * SECOND_US;
/// From the end of a count to the slice in its container. Longer than any pause that ends a run without an end line.
const SLICING_US: i64 = 30 * SECOND_US;
/// Rolling threads.
const ROLLING_US: i64 = 8 * MINUTE_US;
/// From the code to the container on the pan.
pub(crate) const SCAN_TO_PAN_US: i64 = 2 * SECOND_US;

/// What a weighing is meant to be.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Role {
    /// The empty container.
    Tare,
    /// With wet soil.
    Wet,
    /// With dried soil.
    Dry,
}

impl Role {
    /// The word used in asks.
    pub fn word(self) -> &'static str {
        match self {
            Role::Tare => "tare",
            Role::Wet => "wet",
            Role::Dry => "dry",
        }
    }
}

/// What is done in a step.
#[derive(Clone, Debug, PartialEq)]
pub enum What {
    /// Something is asked of the program.
    Ask(Value),
    /// A code is scanned and the container weighed.
    Weigh {
        /// The container.
        container: String,
        /// What the mass is.
        role: Role,
        /// What the balance will show, µg.
        mass_ug: i64,
        /// The container was in use before in this day: it must have come free.
        used_before: bool,
    },
    /// The cup runs.
    Count(CupRun),
    /// Time passes; it is leapt over however the day is paced.
    Leap,
}

/// One step of the day.
#[derive(Clone, Debug, PartialEq)]
pub struct Step {
    /// When it begins, virtual time, µs UTC.
    pub at_utc_us: i64,
    /// How long it lasts, µs.
    pub takes_us: i64,
    /// Index of the bench; asks of the whole laboratory are made at the first one.
    pub bench: usize,
    /// The specimen it is about.
    pub specimen: Option<String>,
    /// What is done.
    pub what: What,
    /// The same for people.
    pub says: String,
}

/// Turns a day into steps ordered by time.
pub fn schedule(day: &Day) -> Result<Vec<Step>, DayFault> {
    day.check()?;
    let mut plan = Plan {
        day,
        steps: Vec::new(),
        clock: vec![day.start_utc_us; day.benches.len()],
        busy: BTreeMap::new(),
        used: BTreeSet::new(),
    };
    for round in rounds(day) {
        plan.round(&round);
    }
    let mut steps = plan.steps;
    // Stable: steps of one bench at one time stay in their order.
    steps.sort_by_key(|s| s.at_utc_us);
    Ok(steps)
}

/// One round: for every bench the indices of its specimens.
pub type Round = Vec<Vec<usize>>;

/// Puts every specimen into the earliest round that comes after all earlier specimens with a container in common and
/// in which its bench has room.
pub fn rounds(day: &Day) -> Vec<Round> {
    let mut rounds: Vec<Round> = Vec::new();
    let mut next_for: BTreeMap<&str, usize> = BTreeMap::new();
    for (index, specimen) in day.specimens.iter().enumerate() {
        let containers = || specimen.weighed().map(|(_, _, w)| w.container.as_str());
        let fixed = specimen.bench.as_ref().and_then(|want| day.benches.iter().position(|b| b.name == *want));
        let mut number = containers().filter_map(|c| next_for.get(c).copied()).max().unwrap_or(0);
        let bench = loop {
            if number >= rounds.len() {
                rounds.push(vec![Vec::new(); day.benches.len()]);
            }
            let least = (0..day.benches.len()).min_by_key(|&b| rounds[number][b].len()).unwrap_or(0);
            let bench = fixed.unwrap_or(least);
            if rounds[number][bench].len() < PER_BENCH {
                break bench;
            }
            number += 1;
        };
        rounds[number][bench].push(index);
        for container in containers() {
            next_for.insert(container, number + 1);
        }
    }
    rounds
}

struct Plan<'a> {
    day: &'a Day,
    steps: Vec<Step>,
    /// Until when each bench is busy.
    clock: Vec<i64>,
    /// When each balance is busy, start to end: benches may share one.
    busy: BTreeMap<&'a str, BTreeMap<i64, i64>>,
    /// Containers that have been used in this day.
    used: BTreeSet<&'a str>,
}

impl<'a> Plan<'a> {
    fn round(&mut self, round: &Round) {
        self.sign_in(round);
        self.side_by_side(round, Self::first_day);
        let most = round.iter().flatten().map(|&s| dries(&self.day.specimens[s])).max().unwrap_or(0);
        for nth in 0..most {
            if nth > 0 {
                self.oven(round, nth, "into_oven");
            }
            self.leap("the oven is leapt over", if nth == 0 { OVEN_US } else { BACK_IN_OVEN_US });
            if nth == 0 {
                self.sign_in(round);
            }
            self.oven(round, nth, "out_of_oven");
            self.leap("containers cool with the lid on", COOLING_US);
            self.side_by_side(round, |plan, bench, specimen| plan.dry_weighings(bench, specimen, nth));
        }
        self.leap("the next lot is fetched", HANDS_US);
    }

    /// Lets the bench whose clock is behind take its next specimen.
    fn side_by_side(&mut self, round: &Round, mut work: impl FnMut(&mut Self, usize, &'a Specimen)) {
        let day = self.day;
        let mut next = vec![0; round.len()];
        while let Some(bench) = (0..round.len()).filter(|&b| next[b] < round[b].len()).min_by_key(|&b| self.clock[b]) {
            work(self, bench, &day.specimens[round[bench][next[bench]]]);
            next[bench] += 1;
        }
    }

    /// From opening the specimen to its containers in the oven.
    fn first_day(&mut self, bench: usize, specimen: &'a Specimen) {
        self.ask(bench, Some(specimen), open_ask(specimen), format!("opens {}", specimen.id));
        for (_, _, weighed) in specimen.weighed() {
            self.weigh(bench, specimen, weighed, Role::Tare, weighed.tare_ug);
        }
        for kind in [Kind::Liquid, Kind::Thread, Kind::Natural] {
            if specimen.weighed().any(|(k, _, _)| k == kind) {
                self.wet_weighings(bench, specimen, kind);
            }
        }
        let name = self.bench(bench).name.as_str();
        self.ask(bench, Some(specimen), json!({"ask": "intend_nothing", "bench": name}), "has nothing more in mind".into());
        for not in &specimen.not_obtainable {
            let limit = match not.limit {
                Limit::Liquid => "liquid",
                Limit::Plastic => "plastic",
            };
            let who = self.bench(bench).operator.as_str();
            let ask =
                json!({"ask": "not_obtainable", "specimen": specimen.id, "limit": limit, "because": not.because, "who": who});
            self.ask(bench, Some(specimen), ask, format!("states that the {limit} limit cannot be obtained"));
        }
        let containers: Vec<&str> = drying(specimen, 0).collect();
        if !containers.is_empty() {
            let says = format!("puts {} into the oven", containers.join(", "));
            self.ask(bench, Some(specimen), json!({"ask": "into_oven", "containers": containers}), says);
        }
    }

    fn wet_weighings(&mut self, bench: usize, specimen: &'a Specimen, kind: Kind) {
        let name = self.bench(bench).name.as_str();
        let ask = json!({"ask": "intend", "bench": name, "specimen": specimen.id, "intention": kind.intention()});
        self.ask(bench, Some(specimen), ask, format!("turns to {}, {}", specimen.id, kind.intention()));
        for (_, no, weighed) in specimen.weighed().filter(|(k, _, _)| *k == kind) {
            match kind {
                Kind::Liquid => self.closures(bench, specimen, no),
                Kind::Thread => self.clock[bench] += ROLLING_US,
                Kind::Natural => self.clock[bench] += MINUTE_US,
            }
            self.weigh(bench, specimen, weighed, Role::Wet, weighed.wet_ug);
            if weighed.dry_ug.is_empty() {
                self.set_aside(bench, specimen, kind, no, weighed);
            }
        }
    }

    fn closures(&mut self, bench: usize, specimen: &'a Specimen, no: u32) {
        let liquid = &specimen.liquid[no as usize - 1];
        for (nth, &drops) in liquid.drops.iter().enumerate() {
            self.clock[bench] += if nth == 0 { MIXING_US } else { REMIXING_US };
            let run = CupRun { jitter_us: 8_000, ..CupRun::clean(drops, liquid.rate_per_s) };
            let says = format!("{}, liquid {no}: {drops} drops", specimen.id);
            let takes = run.lasts_us() as i64;
            self.step(bench, Some(specimen), takes, What::Count(run), says);
        }
        self.clock[bench] += SLICING_US;
    }

    fn dry_weighings(&mut self, bench: usize, specimen: &'a Specimen, nth: usize) {
        for (kind, no, weighed) in specimen.weighed() {
            if let Some(&mass_ug) = weighed.dry_ug.get(nth) {
                self.weigh(bench, specimen, weighed, Role::Dry, mass_ug);
                if nth + 1 == weighed.dry_ug.len() {
                    self.set_aside(bench, specimen, kind, no, weighed);
                }
            }
        }
    }

    fn set_aside(&mut self, bench: usize, specimen: &'a Specimen, kind: Kind, no: u32, weighed: &Weighed) {
        if let Some(why) = &weighed.set_aside {
            let who = self.bench(bench).operator.as_str();
            let kind = kind.word();
            let ask = json!({"ask": "set_aside_trial", "specimen": specimen.id, "kind": kind, "no": no, "who": who, "why": why});
            self.ask(bench, Some(specimen), ask, format!("sets {}, {kind} {no} aside: {why}", specimen.id));
        }
    }

    /// One bench after the other puts its containers into the oven or takes them out.
    fn oven(&mut self, round: &Round, nth: usize, which: &str) {
        let day = self.day;
        for (bench, specimens) in round.iter().enumerate() {
            let containers: Vec<&str> = specimens.iter().flat_map(|&s| drying(&day.specimens[s], nth)).collect();
            if !containers.is_empty() {
                let way = if which == "into_oven" { "into" } else { "out of" };
                let says = format!("{} {way} the oven", containers.join(", "));
                self.ask(bench, None, json!({"ask": which, "containers": containers}), says);
            }
        }
    }

    fn sign_in(&mut self, round: &Round) {
        for bench in (0..round.len()).filter(|&b| !round[b].is_empty()) {
            let Bench { name, operator, .. } = self.bench(bench);
            let ask = json!({"ask": "sign_in", "bench": name, "operator": operator});
            self.ask(bench, None, ask, format!("{operator} signs in"));
        }
    }

    fn weigh(&mut self, bench: usize, specimen: &'a Specimen, weighed: &'a Weighed, role: Role, mass_ug: i64) {
        let balance = &self.bench(bench).balance;
        let takes = SCAN_TO_PAN_US + balance::placement_lasts_us(&balance.settings);
        self.clock[bench] = self.reserve(&balance.name, self.clock[bench], takes);
        let used_before = role == Role::Tare && !self.used.insert(&weighed.container);
        let says = format!("{}: weighs {} {}, {} g", specimen.id, weighed.container, role.word(), crate::grams(mass_ug));
        let what = What::Weigh { container: weighed.container.clone(), role, mass_ug, used_before };
        self.step(bench, Some(specimen), takes, what, says);
    }

    /// The first time from `from` at which the balance is free for so long; it is taken.
    fn reserve(&mut self, balance: &'a str, from: i64, takes: i64) -> i64 {
        let busy = self.busy.entry(balance).or_default();
        let mut start = from;
        // Only the last one that began before can reach into `start`; then every later one that begins too early pushes it on.
        if let Some((_, &end)) = busy.range(..=start).next_back() {
            start = start.max(end + HANDS_US);
        }
        while let Some((_, &end)) = busy.range(start..start + takes + HANDS_US).next() {
            start = end + HANDS_US;
        }
        busy.insert(start, start + takes);
        start
    }

    fn leap(&mut self, says: &str, takes_us: i64) {
        let at = self.clock.iter().copied().max().unwrap_or(self.day.start_utc_us);
        self.clock.fill(at);
        self.step(0, None, takes_us, What::Leap, says.to_string());
        let after = self.clock[0];
        self.clock.fill(after);
    }

    fn ask(&mut self, bench: usize, specimen: Option<&Specimen>, ask: Value, says: String) {
        self.step(bench, specimen, 0, What::Ask(ask), says);
    }

    fn step(&mut self, bench: usize, specimen: Option<&Specimen>, takes_us: i64, what: What, says: String) {
        let at_utc_us = self.clock[bench];
        self.steps.push(Step { at_utc_us, takes_us, bench, specimen: specimen.map(|s| s.id.clone()), what, says });
        self.clock[bench] = at_utc_us + takes_us + HANDS_US;
    }

    fn bench(&self, bench: usize) -> &'a Bench {
        &self.day.benches[bench]
    }
}

/// How often some container of the specimen is weighed dry.
fn dries(specimen: &Specimen) -> usize {
    specimen.weighed().map(|(_, _, w)| w.dry_ug.len()).max().unwrap_or(0)
}

/// Containers that are in the oven before the dry weighing with this index.
fn drying(specimen: &Specimen, nth: usize) -> impl Iterator<Item = &str> {
    specimen.weighed().filter(move |(_, _, w)| w.dry_ug.len() > nth).map(|(_, _, w)| w.container.as_str())
}

fn open_ask(specimen: &Specimen) -> Value {
    let mut ask = json!({"ask": "open_specimen", "specimen": specimen.id, "method": specimen.method});
    for (key, value) in [
        ("description", specimen.description.as_ref().map(|t| json!(t))),
        ("preparation", specimen.preparation.as_ref().map(|t| json!(t))),
        ("passing_75um_percent", specimen.passing_75um_percent.map(|p| json!(p))),
        ("clay_percent", specimen.clay_percent.map(|p| json!(p))),
    ] {
        if let Some(value) = value {
            ask[key] = value;
        }
    }
    // Only its water content as it came is to be determined.
    if specimen.liquid.is_empty() && specimen.plastic.is_empty() && specimen.not_obtainable.is_empty() {
        ask["wanted"] = json!(["natural"]);
    }
    ask
}
