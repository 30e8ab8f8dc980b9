//! Plain description of a day in the laboratory: what is on the benches, which
//! specimens are tested, and what every count and weighing will show.

use crate::balance::Settings;
use crate::counter::{CupDialect, CupRun};
use std::collections::{BTreeMap, BTreeSet};

/// A day to be played (with the mornings after it, when soil comes out of the oven).
#[derive(Clone, Debug, PartialEq)]
pub struct Day {
    /// Virtual time at which work begins, µs UTC.
    pub start_utc_us: i64,
    /// The benches.
    pub benches: Vec<Bench>,
    /// The specimens, in the order in which they reach the laboratory.
    pub specimens: Vec<Specimen>,
}

/// One place to work at.
#[derive(Clone, Debug, PartialEq)]
pub struct Bench {
    /// Name of the bench.
    pub name: String,
    /// Initials of who works there.
    pub operator: String,
    /// The balance; benches that name the same one share it.
    pub balance: Balance,
    /// The cup counter.
    pub cup: Cup,
    /// Name of the code scanner.
    pub scanner: String,
}

/// A balance at a bench.
#[derive(Clone, Debug, PartialEq)]
pub struct Balance {
    /// Instrument name.
    pub name: String,
    /// Dialect, decimals, capacity.
    pub settings: Settings,
}

/// A cup counter at a bench.
#[derive(Clone, Debug, PartialEq)]
pub struct Cup {
    /// Instrument name.
    pub name: String,
    /// Its dialect.
    pub dialect: CupDialect,
}

/// One specimen and all that will be measured of it.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Specimen {
    /// Specimen number.
    pub id: String,
    /// Name of the test method.
    pub method: String,
    /// What it is.
    pub description: Option<String>,
    /// How it was prepared.
    pub preparation: Option<String>,
    /// Share passing 0.075 mm, percent of dry mass.
    pub passing_75um_percent: Option<f64>,
    /// Share finer than clay size, percent of dry mass.
    pub clay_percent: Option<f64>,
    /// The bench it is tested at; `None`: whichever has least to do.
    pub bench: Option<String>,
    /// Liquid-limit trials in order.
    pub liquid: Vec<Liquid>,
    /// Plastic-limit threads in order.
    pub plastic: Vec<Weighed>,
    /// Natural water contents in order.
    pub natural: Vec<Weighed>,
    /// Limits that cannot be obtained, and why.
    pub not_obtainable: Vec<NotObtainable>,
}

/// One liquid-limit trial.
#[derive(Clone, Debug, PartialEq)]
pub struct Liquid {
    /// Drops of each closure of the paste.
    pub drops: Vec<u32>,
    /// Drops per second.
    pub rate_per_s: f64,
    /// The slice.
    pub slice: Weighed,
}

/// One container with soil.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Weighed {
    /// Container number.
    pub container: String,
    /// Empty, µg.
    pub tare_ug: i64,
    /// With wet soil, µg.
    pub wet_ug: i64,
    /// With dried soil, µg, once for each dry weighing. Empty: the soil is thrown away wet.
    pub dry_ug: Vec<i64>,
    /// A person sets the determination aside, because … (after its last weighing).
    pub set_aside: Option<String>,
}

/// A limit that a person states cannot be obtained.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct NotObtainable {
    /// Which.
    pub limit: Limit,
    /// Why.
    pub because: String,
}

/// One of the two limits.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Limit {
    /// The liquid limit.
    Liquid,
    /// The plastic limit.
    Plastic,
}

/// What a determination is for.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Kind {
    /// A slice from the cup.
    Liquid,
    /// Threads.
    Thread,
    /// Natural water content.
    Natural,
}

impl Kind {
    /// The word used in asks that name a determination.
    pub fn word(self) -> &'static str {
        match self {
            Kind::Liquid => "liquid",
            Kind::Thread => "thread",
            Kind::Natural => "natural",
        }
    }

    /// The word used in asks that say what a bench is about to do.
    pub fn intention(self) -> &'static str {
        match self {
            Kind::Thread => "plastic",
            other => other.word(),
        }
    }
}

impl Specimen {
    /// Every container of the specimen in the order of work, with what it is for and its number within that kind.
    pub fn weighed(&self) -> impl Iterator<Item = (Kind, u32, &Weighed)> {
        let liquid = self.liquid.iter().map(|l| &l.slice).zip(1..).map(|(w, no)| (Kind::Liquid, no, w));
        let plastic = self.plastic.iter().zip(1..).map(|(w, no)| (Kind::Thread, no, w));
        let natural = self.natural.iter().zip(1..).map(|(w, no)| (Kind::Natural, no, w));
        liquid.chain(plastic).chain(natural)
    }
}

/// Why a day cannot be played. Each says where, and what to do.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum DayFault {
    /// A start outside the years that dates can be written for.
    #[error("the day begins at {0} µs UTC; give a time from 1970 to 9000")]
    Start(i64),
    /// Nothing to work at.
    #[error("the day has no bench; give at least one")]
    NoBench,
    /// A name outside the alphabet of identifiers.
    #[error("{what} '{name}' cannot be a name; use 1 to 32 letters, digits, '.', '_' or '-'")]
    Name {
        /// What it would have named.
        what: &'static str,
        /// The text.
        name: String,
    },
    /// A name given twice where it must be its own.
    #[error("{what} '{name}' occurs twice; give each its own name")]
    Twice {
        /// What it names.
        what: &'static str,
        /// The name.
        name: String,
    },
    /// A shared balance described in two ways.
    #[error("balance '{0}' is shared but described differently at two benches; describe it alike")]
    SharedUnlike(String),
    /// A balance slower or faster than any.
    #[error("balance '{name}' would send a line every {interval_us} µs; give 10000 to 5000000")]
    Interval {
        /// The balance.
        name: String,
        /// Its interval.
        interval_us: u64,
    },
    /// A balance that only answers.
    #[error("balance '{0}' speaks only when asked; a day is played ahead of the questions, so give it another dialect")]
    AskedBalance(String),
    /// A specimen at a bench that is not there.
    #[error("specimen '{specimen}' is to be tested at bench '{bench}', which the day does not have; name one of: {known}")]
    NoSuchBench {
        /// The specimen.
        specimen: String,
        /// The bench it names.
        bench: String,
        /// The benches there are.
        known: String,
    },
    /// A container twice in one specimen.
    #[error(
        "specimen '{specimen}' uses container '{container}' twice; it cannot be emptied in between, so take another container"
    )]
    ContainerTwice {
        /// The specimen.
        specimen: String,
        /// The container.
        container: String,
    },
    /// Masses that cannot be weighed so.
    #[error("specimen '{specimen}', container '{container}': {why}")]
    Mass {
        /// The specimen.
        specimen: String,
        /// The container.
        container: String,
        /// What is wrong and what to do.
        why: String,
    },
    /// A count that cannot be played.
    #[error("specimen '{specimen}', liquid trial {no}: {why}")]
    Count {
        /// The specimen.
        specimen: String,
        /// Which trial.
        no: u32,
        /// What is wrong and what to do.
        why: String,
    },
    /// More than is sensible.
    #[error("the day has {0} specimens; play at most 5000 at a time")]
    TooMany(usize),
}

/// Time between the lines of a balance, µs.
const INTERVAL_US: std::ops::RangeInclusive<u64> = 10_000..=5_000_000;
/// 1970 up to the year 9000, µs UTC: leaves room for all the mornings after.
const START_US: std::ops::Range<i64> = 0..221_845_392_000_000_000;
/// Most specimens in a day.
pub const SPECIMENS_MAX: usize = 5_000;

fn name(what: &'static str, text: &str) -> Result<(), DayFault> {
    let allowed = |c: char| c.is_ascii_alphanumeric() || matches!(c, '.' | '_' | '-');
    if (1..=32).contains(&text.len()) && text.chars().all(allowed) {
        return Ok(());
    }
    Err(DayFault::Name { what, name: text.chars().take(64).collect() })
}

impl Day {
    /// Refuses what could not be played, with the first reason found.
    pub fn check(&self) -> Result<(), DayFault> {
        if self.specimens.len() > SPECIMENS_MAX {
            return Err(DayFault::TooMany(self.specimens.len()));
        }
        if !START_US.contains(&self.start_utc_us) {
            return Err(DayFault::Start(self.start_utc_us));
        }
        self.check_benches()?;
        let mut seen = BTreeSet::new();
        for specimen in &self.specimens {
            name("specimen", &specimen.id)?;
            name("method", &specimen.method)?;
            if !seen.insert(&specimen.id) {
                return Err(DayFault::Twice { what: "specimen", name: specimen.id.clone() });
            }
            self.check_specimen(specimen)?;
        }
        Ok(())
    }

    /// Decimals of a gram that a balance needs to show every mass of these specimens exactly (1 to 6).
    pub fn decimals_needed(specimens: &[Specimen]) -> u8 {
        let masses = specimens.iter().flat_map(|s| s.weighed().flat_map(|(_, _, w)| masses(w).map(|(_, ug)| ug)));
        masses.map(decimals_of).max().unwrap_or(1).max(1)
    }

    fn check_benches(&self) -> Result<(), DayFault> {
        if self.benches.is_empty() {
            return Err(DayFault::NoBench);
        }
        let mut balances: BTreeMap<&str, &Balance> = BTreeMap::new();
        let (mut benches, mut instruments) = (BTreeSet::new(), BTreeSet::new());
        for bench in &self.benches {
            name("bench", &bench.name)?;
            name("operator", &bench.operator)?;
            name("balance", &bench.balance.name)?;
            if !benches.insert(&bench.name) {
                return Err(DayFault::Twice { what: "bench", name: bench.name.clone() });
            }
            for (what, instrument) in [("cup counter", &bench.cup.name), ("scanner", &bench.scanner)] {
                name(what, instrument)?;
                if !instruments.insert(instrument.as_str()) {
                    return Err(DayFault::Twice { what, name: instrument.clone() });
                }
            }
            if bench.balance.settings.dialect.asked() {
                return Err(DayFault::AskedBalance(bench.balance.name.clone()));
            }
            let interval_us = bench.balance.settings.interval_us;
            if !INTERVAL_US.contains(&interval_us) {
                return Err(DayFault::Interval { name: bench.balance.name.clone(), interval_us });
            }
            if balances.insert(&bench.balance.name, &bench.balance).is_some_and(|other| *other != bench.balance) {
                return Err(DayFault::SharedUnlike(bench.balance.name.clone()));
            }
        }
        match balances.keys().find(|b| instruments.contains(**b)) {
            Some(both) => Err(DayFault::Twice { what: "instrument", name: (*both).to_string() }),
            None => Ok(()),
        }
    }

    fn check_specimen(&self, specimen: &Specimen) -> Result<(), DayFault> {
        if let Some(bench) = &specimen.bench
            && !self.benches.iter().any(|b| b.name == *bench)
        {
            let known: Vec<&str> = self.benches.iter().map(|b| b.name.as_str()).collect();
            return Err(DayFault::NoSuchBench { specimen: specimen.id.clone(), bench: bench.clone(), known: known.join(", ") });
        }
        let mut containers = BTreeSet::new();
        for (_, _, weighed) in specimen.weighed() {
            name("container", &weighed.container)?;
            if !containers.insert(&weighed.container) {
                return Err(DayFault::ContainerTwice { specimen: specimen.id.clone(), container: weighed.container.clone() });
            }
            self.check_masses(specimen, weighed)?;
        }
        for (liquid, no) in specimen.liquid.iter().zip(1..) {
            let fault = |why: String| DayFault::Count { specimen: specimen.id.clone(), no, why };
            if liquid.drops.is_empty() {
                return Err(fault("no closure is given; give the drops of at least one".into()));
            }
            for &drops in &liquid.drops {
                CupRun::clean(drops, liquid.rate_per_s).check().map_err(|e| fault(e.to_string()))?;
            }
        }
        Ok(())
    }

    fn check_masses(&self, specimen: &Specimen, weighed: &Weighed) -> Result<(), DayFault> {
        let fault = |why| DayFault::Mass { specimen: specimen.id.clone(), container: weighed.container.clone(), why };
        // The coarsest balance of any bench the specimen may be sent to decides.
        let benches = self.benches.iter().filter(|b| specimen.bench.as_ref().is_none_or(|want| *want == b.name));
        for bench in benches {
            let settings = &bench.balance.settings;
            for (what, ug) in masses(weighed) {
                let grams = crate::grams(ug);
                let balance = &bench.balance.name;
                if ug <= 0 {
                    return Err(fault(format!("the {what} mass is {grams} g; a mass is more than 0 g")));
                }
                if ug > settings.capacity_ug {
                    let most = crate::grams(settings.capacity_ug);
                    return Err(fault(format!(
                        "the {what} mass {grams} g is more than balance '{balance}' can weigh ({most} g); give it more capacity"
                    )));
                }
                if decimals_of(ug) > settings.decimals {
                    return Err(fault(format!(
                        "the {what} mass {grams} g has more decimals than balance '{balance}' shows ({}); \
                         round it or give the balance more decimals",
                        settings.decimals
                    )));
                }
            }
        }
        Ok(())
    }
}

/// Every mass of one container, with its name.
pub(crate) fn masses(weighed: &Weighed) -> impl Iterator<Item = (&'static str, i64)> {
    let dry = weighed.dry_ug.iter().map(|&ug| ("dry", ug));
    [("tare", weighed.tare_ug), ("wet", weighed.wet_ug)].into_iter().chain(dry)
}

/// Decimals of a gram that a mass has.
fn decimals_of(ug: i64) -> u8 {
    (0..6).find(|&d| ug % 10i64.pow(6 - u32::from(d)) == 0).unwrap_or(6)
}
