//! The laboratory's state and its decisions.
//!
//! [`Lab::take`] is the only way in: it decides what an input means (facts),
//! applies each fact, and follows up with the results that change. Deciding
//! reads the state and never changes it; applying changes it and decides
//! nothing, so that facts read back from the ledger lead to the same state.

pub mod ask;
pub mod entities;
mod equipment;
pub mod role;
pub mod statistics;

pub mod advice;
mod apply;
mod checked;
pub mod clock;
mod code;
mod correct;
mod count;
pub mod guide;
mod link;
pub mod loose;
mod oven;
mod result;
pub mod shelf;
mod weigh;

use crate::fact::{Connection, Fact, Recorded};
use crate::method::Method;
use crate::names::{BenchName, ContainerId, InstrumentName, MethodName, Operator, SpecimenId};
use crate::quantity::Mass;
use crate::sense::{CountRun, InputNo, LeftOnPan, MassTaken, Stayed};
use crate::sheet::Seq;
use crate::soil::uncertainty::{Balance, BalanceRule};
use crate::stamp::{SECOND_US, Stamp};
use alloc::boxed::Box;
use alloc::collections::{BTreeMap, BTreeSet};
use alloc::string::String;
use alloc::sync::Arc;
use alloc::vec::Vec;
use ask::Ask;
use clock::{ClockRecord, ClockSeen};
use entities::{Bench, Container, Entity, Instrument, Loose, Specimen};
use statistics::Statistics;

pub use advice::{Advice, Slope, Wish};
pub use code::CARDS;
pub use guide::Guide;
pub use loose::LooseThing;
pub use oven::dried;
pub use shelf::OnShelf;

/// Loose things kept at hand; older ones stay in the ledger.
const LOOSE_AT_HAND: usize = 1_000;

/// What the laboratory is set up as.
#[derive(Clone, Debug, PartialEq)]
pub struct Setup {
    /// Benches.
    pub benches: Vec<BenchName>,
    /// Instruments and the benches each of them serves.
    pub instruments: BTreeMap<InstrumentName, Vec<BenchName>>,
    /// Methods by name.
    pub methods: BTreeMap<MethodName, Method>,
    /// Method of a specimen that names none.
    pub default_method: MethodName,
    /// Limits of linking.
    pub linking: Linking,
    /// What is known of balances beside their lines.
    pub balances: BTreeMap<InstrumentName, Balance>,
    /// How often balances are to be checked with a reference mass, when that is asked for.
    pub balance_rule: Option<BalanceRule>,
}

/// Limits of linking weighings and counts.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Linking {
    /// Two masses this close are the same thing weighed twice.
    pub near: Mass,
    /// A slice is expected within this time after its count, µs.
    pub slice_us: i64,
    /// With a print key, a code read this long after the mass still belongs to it, µs.
    pub code_after_us: i64,
    /// The same printed value within this time is one weighing, µs.
    pub repeat_print_us: i64,
    /// An intention ends when nothing happens at the bench for this long, µs.
    pub intention_us: i64,
    /// A slice owed for this long is said aloud, µs.
    pub slice_aloud_us: i64,
}

impl Default for Linking {
    fn default() -> Self {
        Self {
            near: Mass::from_ug(50_000),
            slice_us: 15 * 60 * SECOND_US,
            code_after_us: 20 * SECOND_US,
            repeat_print_us: 10 * SECOND_US,
            intention_us: 6 * 3_600 * SECOND_US,
            slice_aloud_us: 5 * 60 * SECOND_US,
        }
    }
}

/// What can come in.
#[derive(Clone, Debug)]
pub enum Input {
    /// A balance took a mass.
    Mass {
        /// Which balance.
        balance: InstrumentName,
        /// The mass.
        taken: MassTaken,
    },
    /// A pan is empty again.
    Unloaded {
        /// Which balance.
        balance: InstrumentName,
        /// The line that showed it.
        input: InputNo,
    },
    /// How a mass drifted until it was lifted.
    PanWatched {
        /// Which balance.
        balance: InstrumentName,
        /// What was seen.
        stayed: Stayed,
        /// The line that showed the empty pan.
        input: InputNo,
    },
    /// The empty pan shows something else than before the mass.
    LeftOnPan {
        /// Which balance.
        balance: InstrumentName,
        /// What was seen.
        left: LeftOnPan,
    },
    /// A count run ended.
    Count {
        /// Which counter.
        cup: InstrumentName,
        /// The run.
        run: CountRun,
    },
    /// A scanner read a code.
    Code {
        /// Which scanner.
        scanner: InstrumentName,
        /// The text.
        text: String,
        /// The line.
        input: InputNo,
    },
    /// A scanner sent something that is no code.
    CodeUnread {
        /// Which scanner.
        scanner: InstrumentName,
        /// The line.
        input: InputNo,
    },
    /// A person asks for something.
    Ask(Ask),
    /// An instrument's connection changed.
    Instrument {
        /// Which.
        instrument: InstrumentName,
        /// Its state.
        state: Connection,
        /// More, in words.
        detail: Option<String>,
    },
    /// Lines of an instrument were lost for want of room.
    Overrun {
        /// Whose.
        instrument: InstrumentName,
        /// How many.
        lines: u64,
    },
    /// Many lines have come since the last fact.
    LinesKept {
        /// How many.
        lines: u64,
    },
    /// The service came up.
    Started {
        /// Program version.
        program: String,
        /// The previous run ended in order.
        after_orderly_stop: bool,
    },
    /// Settings came into force.
    Settings {
        /// Input row that holds them.
        input: InputNo,
        /// SHA-256 of its text.
        digest: String,
    },
    /// Something was noticed of the wall clock.
    Clock(ClockSeen),
    /// The service goes down in order.
    Stopping,
    /// Time has passed.
    Due,
}

/// Why an ask could not be done, and what to try.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("{0}")]
pub struct Refusal(pub String);

/// What came of an input.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Outcome {
    /// Facts, with their numbers.
    pub facts: Vec<Recorded>,
    /// Entities they touched.
    pub touched: BTreeSet<Entity>,
}

/// A fact to be, before it has a number.
pub(crate) struct New {
    fact: Fact,
    who: Option<Operator>,
    through: Option<InputNo>,
}

impl New {
    fn by(who: Option<Operator>, fact: Fact) -> Self {
        Self { fact, who, through: None }
    }
    fn plain(fact: Fact) -> Self {
        Self::by(None, fact)
    }
    fn through(mut self, input: InputNo) -> Self {
        self.through = Some(input);
        self
    }
}

/// The laboratory.
#[derive(Clone, Debug)]
pub struct Lab {
    setup: Arc<Setup>,
    specimens: BTreeMap<SpecimenId, Specimen>,
    containers: BTreeMap<ContainerId, Container>,
    benches: BTreeMap<BenchName, Bench>,
    instruments: BTreeMap<InstrumentName, Instrument>,
    loose: BTreeMap<Seq, Loose>,
    statistics: Statistics,
    clock: ClockRecord,
    /// Counters whose run goes on, and since when. Heard, not decided: it is in no document.
    running: BTreeMap<InstrumentName, Stamp>,
}

impl Lab {
    /// A laboratory in which nothing has happened.
    pub fn new(setup: Setup) -> Self {
        let benches = setup.benches.iter().map(|b| (b.clone(), Bench::new(b.clone()))).collect();
        let instruments = setup.instruments.keys().map(|i| (i.clone(), Instrument::new(i.clone()))).collect();
        Self {
            setup: Arc::new(setup),
            specimens: BTreeMap::new(),
            containers: BTreeMap::new(),
            benches,
            instruments,
            loose: BTreeMap::new(),
            statistics: Statistics::default(),
            clock: ClockRecord::default(),
            running: BTreeMap::new(),
        }
    }

    /// Tells which counters are in a run, and since when; said before an ask or a code is taken, since a card
    /// that gives a run up may be read before its pause is over.
    pub fn counting(&mut self, runs: impl IntoIterator<Item = (InstrumentName, Stamp)>) {
        self.running = runs.into_iter().collect();
    }

    /// Takes an input: decides, applies, follows up. Nothing has changed when it is refused.
    pub fn take(&mut self, input: Input, at: Stamp, next_seq: Seq) -> Result<Outcome, Refusal> {
        let new = self.decide(input, &at)?;
        let mut outcome = Outcome::default();
        self.record(new, at, next_seq, &mut outcome);
        let checks = self.checks_completed(&outcome);
        let next = next_seq.saturating_add(outcome.facts.len() as Seq);
        self.record(checks, at, next, &mut outcome);
        let follow = self.follow(&outcome);
        let next = next_seq.saturating_add(outcome.facts.len() as Seq);
        self.record(follow, at, next, &mut outcome);
        Ok(outcome)
    }

    /// Which of these asks would be refused if they were made one after the other; nothing changes.
    pub fn would_refuse(&self, asks: &[Ask], at: &Stamp, next_seq: Seq) -> Vec<(usize, Refusal)> {
        let mut trial = self.clone();
        let mut next = next_seq;
        let mut refused = Vec::new();
        for (n, ask) in asks.iter().enumerate() {
            match trial.take(Input::Ask(ask.clone()), *at, next) {
                Ok(outcome) => next = next.saturating_add(outcome.facts.len() as Seq),
                Err(refusal) => refused.push((n, refusal)),
            }
        }
        refused
    }

    /// What an input means, as facts.
    fn decide(&self, input: Input, at: &Stamp) -> Result<Vec<New>, Refusal> {
        Ok(match input {
            Input::Mass { balance, taken } => self.mass_taken(&balance, taken),
            Input::Unloaded { balance, input } => self.unloaded(&balance, input),
            Input::PanWatched { balance, stayed, input } => self.pan_watched(balance, &stayed, input),
            Input::LeftOnPan { balance, left } => self.left_on_pan(balance, &left),
            Input::Count { cup, run } => self.count_ended(&cup, run),
            Input::Code { scanner, text, input } => self.code_read(&scanner, &text, at, input),
            Input::CodeUnread { scanner, input } => self.code_unread(&scanner, input),
            Input::Ask(ask) => self.asked(ask, at)?,
            Input::Instrument { instrument, state, detail } => self.instrument_changed(instrument, state, detail),
            Input::Overrun { instrument, lines } => alloc::vec![New::plain(Fact::LinesOverrun { instrument, lines })],
            Input::Started { program, after_orderly_stop } => {
                alloc::vec![New::plain(Fact::ServiceStarted { program, after_orderly_stop })]
            }
            Input::LinesKept { lines } => alloc::vec![New::plain(Fact::LinesKept { lines })],
            Input::Settings { input, digest } => alloc::vec![New::plain(Fact::SettingsTaken { input, digest })],
            Input::Clock(seen) => self.clock_seen(&seen),
            Input::Stopping => self.stopping(),
            Input::Due => self.due(at),
        })
    }

    fn record(&mut self, new: Vec<New>, at: Stamp, first: Seq, outcome: &mut Outcome) {
        for (n, New { fact, who, through }) in new.into_iter().enumerate() {
            let recorded = Recorded { seq: first.saturating_add(n as Seq), at, who, through, fact };
            self.apply(&recorded, &mut outcome.touched);
            outcome.facts.push(recorded);
        }
    }

    fn instrument_changed(&self, instrument: InstrumentName, state: Connection, detail: Option<String>) -> Vec<New> {
        let same = self.instruments.get(&instrument).is_some_and(|i| i.state == state && i.detail == detail);
        if same { Vec::new() } else { alloc::vec![New::plain(Fact::InstrumentChanged { instrument, state, detail })] }
    }

    fn stopping(&self) -> Vec<New> {
        let ended = self.benches.values().flat_map(|b| let_go(b, "the service was stopped"));
        ended.chain([New::plain(Fact::ServiceStopped {})]).collect()
    }

    /// Facts that are due because time has passed.
    fn due(&self, now: &Stamp) -> Vec<New> {
        let mut facts = Vec::new();
        for bench in self.benches.values() {
            if self.idle_in_us(bench, now).is_some_and(|us| us <= 0) {
                facts.extend(let_go(bench, "nothing happened here for the set time; say again what the bench works on"));
                let owed = bench.owed.iter().flat_map(|o| &o.counts);
                let why = || String::from("no slice was taken, and nothing happened at the bench for the set time");
                facts.extend(owed.map(|&count| New::plain(Fact::CountSuperseded { count, why: why() })));
            } else if self.aloud_in_us(bench, now).is_some_and(|us| us <= 0)
                && let Some(&count) = bench.owed.as_ref().and_then(|o| o.counts.last())
            {
                facts.push(New::plain(Fact::SliceOverdue { bench: bench.name.clone(), count }));
            }
        }
        facts
    }

    /// Microseconds until a bench at which nothing happens lets go of everything.
    fn idle_in_us(&self, bench: &Bench, now: &Stamp) -> Option<i64> {
        let holds = bench.intention.is_some() || bench.hand.is_some() || bench.owed.is_some();
        holds.then(|| self.setup.linking.intention_us.saturating_sub(now.since(&bench.active).us))
    }

    /// Microseconds until a slice owed is said aloud.
    fn aloud_in_us(&self, bench: &Bench, now: &Stamp) -> Option<i64> {
        let owed = bench.owed.as_ref().filter(|o| !o.said)?;
        Some(self.setup.linking.slice_aloud_us.saturating_sub(now.since(&owed.ended).us))
    }

    /// Microseconds from now until [`Input::Due`] has something to say.
    pub fn due_in_us(&self, now: &Stamp) -> Option<i64> {
        let of_bench = |b: &Bench| self.idle_in_us(b, now).into_iter().chain(self.aloud_in_us(b, now)).min();
        self.benches.values().filter_map(of_bench).min().map(|us| us.max(0))
    }

    /// Specimens that containers hold or benches work on and that are not at hand: load them after the documents.
    pub fn missing(&self) -> Vec<SpecimenId> {
        self.needed().into_iter().filter(|id| !self.specimens.contains_key(id)).collect()
    }

    /// Specimens that an input concerns and that are not at hand: those whose
    /// determinations rest on an empty weighing of a container. Load them first;
    /// without them a correction of that weighing is refused.
    pub fn wants(&self, input: &Input) -> Vec<SpecimenId> {
        let undo = |bench: Option<&Bench>| bench.and_then(|b| b.latest.as_ref()).map(|l| l.seq);
        let weighing = match input {
            Input::Code { scanner, text, .. } if text.trim() == "+undo" => {
                undo(self.benches_of(scanner).first().and_then(|b| self.benches.get(b)))
            }
            Input::Ask(Ask::Code { bench, text }) if text.trim() == "+undo" => undo(self.benches.get(bench)),
            Input::Ask(Ask::Undo { bench, .. } | Ask::SayRole { bench, .. }) => undo(self.benches.get(bench)),
            Input::Ask(Ask::Tie { weighing, .. } | Ask::AmendMass { weighing, .. } | Ask::SetAside { what: weighing, .. }) => {
                Some(*weighing)
            }
            _ => None,
        };
        weighing.map_or(Vec::new(), |seq| self.rests_on(seq))
    }

    /// Specimens not at hand whose determinations rest on an empty weighing.
    fn rests_on(&self, tare: Seq) -> Vec<SpecimenId> {
        let uses = self.containers.values().flat_map(|c| &c.tare_uses).filter(|u| u.tare == tare).map(|u| &u.specimen);
        let released = self.containers.values().filter_map(|c| c.released.as_ref());
        let released = released.filter(|r| r.by == tare).map(|r| &r.holding.specimen);
        let away: BTreeSet<&SpecimenId> = uses.chain(released).filter(|id| !self.specimens.contains_key(id)).collect();
        away.into_iter().cloned().collect()
    }

    /// Takes a fact that was decided before: applies it and decides nothing. The
    /// state that results is the one the fact led to when it was made.
    pub fn fold(&mut self, recorded: &Recorded) -> BTreeSet<Entity> {
        let mut touched = BTreeSet::new();
        self.apply(recorded, &mut touched);
        touched
    }

    /// The same state under other settings, as a start with changed settings makes it.
    pub fn set_up_anew(self, setup: Setup) -> Self {
        let mut lab = Self::new(setup);
        lab.specimens = self.specimens;
        lab.containers = self.containers;
        lab.loose = self.loose;
        lab.statistics = self.statistics;
        lab.clock = self.clock;
        self.benches.into_values().for_each(|b| lab.load(Loaded::Bench(b)));
        self.instruments.into_values().for_each(|i| lab.load(Loaded::Instrument(i)));
        lab
    }

    /// Puts an entity read from the ledger in place.
    pub fn load(&mut self, entity: Loaded) {
        match entity {
            Loaded::Specimen(s) => drop(self.specimens.insert(s.id.clone(), *s)),
            Loaded::Container(c) => drop(self.containers.insert(c.id.clone(), c)),
            Loaded::Bench(b) if self.benches.contains_key(&b.name) => drop(self.benches.insert(b.name.clone(), b)),
            Loaded::Instrument(i) if self.instruments.contains_key(&i.name) => drop(self.instruments.insert(i.name.clone(), i)),
            Loaded::Loose(l) => drop(self.loose.insert(l.seq, l)),
            Loaded::Statistics(s) => self.statistics = s,
            Loaded::Clock(c) => self.clock = c,
            // A bench or instrument that the settings no longer have stays in the ledger only.
            Loaded::Bench(_) | Loaded::Instrument(_) => (),
        }
    }

    /// Takes a loose thing out of place: it was tied or set aside.
    pub fn unload_loose(&mut self, seq: Seq) {
        self.loose.remove(&seq);
    }

    /// Forgets finished specimens that no container holds and no bench works on; they come back from the ledger when named.
    pub fn forget_finished(&mut self) {
        let needed = self.needed();
        self.specimens.retain(|id, s| s.open() || needed.contains(id));
        while self.loose.len() > LOOSE_AT_HAND {
            self.loose.pop_first();
        }
    }

    /// Specimens that containers hold or benches work on.
    fn needed(&self) -> BTreeSet<SpecimenId> {
        let held = self.containers.values().filter_map(|c| c.holding.as_ref()).flat_map(|h| {
            let before = h.before.as_ref().map(|b| b.specimen.clone());
            [Some(h.specimen.clone()), before].into_iter().flatten()
        });
        let at_work = self.benches.values().flat_map(|b| {
            let work = b.intention.as_ref().map(|w| w.specimen.clone());
            work.into_iter().chain(b.owed.as_ref().map(|o| o.specimen.clone()))
        });
        held.chain(at_work).collect()
    }

    /// A specimen at hand.
    pub fn specimen(&self, id: &SpecimenId) -> Option<&Specimen> {
        self.specimens.get(id)
    }
    /// A container at hand.
    pub fn container(&self, id: &ContainerId) -> Option<&Container> {
        self.containers.get(id)
    }
    /// A bench.
    pub fn bench(&self, name: &BenchName) -> Option<&Bench> {
        self.benches.get(name)
    }
    /// An instrument.
    pub fn instrument(&self, name: &InstrumentName) -> Option<&Instrument> {
        self.instruments.get(name)
    }
    /// A loose thing at hand.
    pub fn loose(&self, seq: Seq) -> Option<&Loose> {
        self.loose.get(&seq)
    }
    /// All benches.
    pub fn benches(&self) -> impl Iterator<Item = &Bench> {
        self.benches.values()
    }
    /// All specimens at hand.
    pub fn specimens(&self) -> impl Iterator<Item = &Specimen> {
        self.specimens.values()
    }
    /// All containers.
    pub fn containers(&self) -> impl Iterator<Item = &Container> {
        self.containers.values()
    }
    /// All instruments.
    pub fn instruments(&self) -> impl Iterator<Item = &Instrument> {
        self.instruments.values()
    }
    /// Loose things at hand.
    pub fn loose_things(&self) -> impl Iterator<Item = &Loose> {
        self.loose.values()
    }
    /// What all finished results say together.
    pub fn statistics(&self) -> &Statistics {
        &self.statistics
    }
    /// The setup in force.
    pub fn setup(&self) -> &Setup {
        &self.setup
    }

    /// Benches that an instrument serves.
    pub(crate) fn benches_of(&self, instrument: &InstrumentName) -> &[BenchName] {
        self.setup.instruments.get(instrument).map_or(&[], Vec::as_slice)
    }

    /// The bench, when an instrument serves only one.
    pub(crate) fn only_bench(&self, instrument: &InstrumentName) -> Option<BenchName> {
        match self.benches_of(instrument) {
            [one] => Some(one.clone()),
            _ => None,
        }
    }

    pub(crate) fn signed_in(&self, bench: Option<&BenchName>) -> Option<Operator> {
        bench.and_then(|b| self.benches.get(b)).and_then(|b| b.signed_in.clone())
    }
}

/// Ends what a bench works on and has in hand.
fn let_go(bench: &Bench, why: &str) -> Vec<New> {
    let name = || bench.name.clone();
    let intention = bench.intention.as_ref().map(|_| Fact::IntentionEnded { bench: name(), why: String::from(why) });
    let hand = bench.hand.as_ref().map(|_| Fact::HandEmptied { bench: name(), why: String::from(why) });
    intention.into_iter().chain(hand).map(New::plain).collect()
}

/// An entity read from the ledger.
#[derive(Clone, Debug)]
pub enum Loaded {
    /// A specimen.
    Specimen(Box<Specimen>),
    /// A container.
    Container(Container),
    /// A bench.
    Bench(Bench),
    /// An instrument.
    Instrument(Instrument),
    /// A loose thing.
    Loose(Loose),
    /// What all finished results say together.
    Statistics(Statistics),
    /// What is known of the wall clock.
    Clock(ClockRecord),
}
