//! Plays sessions through the real profiles, senses, decisions and checks.

use crate::desk::again::Again;
use crate::desk::{DeskSetup, Kind};
use crate::ledger::{InputKind, InputStored, LedgerError, Reader};
use crate::proof::Scratch;
use std::collections::{BTreeMap, BTreeSet};
use tarecup_config::station;
use tarecup_core::fact::Fact;
use tarecup_core::lab::Lab;
use tarecup_core::limits::{Limits, Severity, State};
use tarecup_core::stamp::{Boot, Stamp};
use tarecup_drivers::heard::What;
use tarecup_simulators::drill::{BALANCE, BENCH, Balance, CUP, Event, Play, Session, session};

/// What came of one specimen.
#[derive(Clone, Debug, PartialEq)]
pub struct Outcome {
    /// Its last result.
    pub limits: Option<Limits>,
    /// What was said of it up to the moment when its result was complete: check and what it is about.
    pub said: BTreeSet<(String, String)>,
}

/// What came of a session.
#[derive(Clone, Debug, Default)]
pub struct Played {
    /// By specimen.
    pub specimens: BTreeMap<String, Outcome>,
    /// What the bench itself said: refusals, loose things, slices owed for too long.
    pub bench: BTreeSet<String>,
}

/// A desk that sessions are played through.
pub struct Player {
    again: Again,
    _scratch: Scratch,
    reader: Reader,
}

impl Player {
    /// A desk without a ledger of its own.
    ///
    /// # Errors
    /// When no scratch folder can be made.
    pub fn new() -> Result<Self, LedgerError> {
        let scratch = Scratch::new()?;
        let again = Again::new(scratch.path(), crate::proof::nothing())?;
        let reader = Reader::open(scratch.path())?;
        Ok(Self { again, _scratch: scratch, reader })
    }

    /// Plays a session in a laboratory that has this behind it; gives what it has behind it afterwards.
    ///
    /// # Errors
    /// What the program could not take, which is a fault of the drill.
    pub fn play(&mut self, play: &Play, behind: Option<Lab>) -> Result<(Played, Lab), String> {
        let Session { events, .. } = session(play);
        let at = |us: i64| Stamp { utc_us: us, mono_us: us, boot: Boot(1) };
        let begin = events.first().map_or(play.begin_us, Event::at_us);
        self.again.begin(setup(play.balance)?, behind, at(begin));
        let mut played = Played::default();
        let mut now = begin;
        let mut no = 0;
        for event in &events {
            while let Some(due) = self.again.due_in_us(&at(now)).filter(|d| now + d < event.at_us()) {
                now += due.max(1);
                no += 1;
                self.take(InputStored { kind: InputKind::Timer, ..row(no, at(now), b"due") }, &mut played)?;
            }
            now = event.at_us();
            no += 1;
            self.take(input(no, at(now), event), &mut played)?;
        }
        Ok((played, self.again.lab().clone()))
    }

    fn take(&mut self, input: InputStored, played: &mut Played) -> Result<(), String> {
        for (recorded, _) in self.again.take(&input, &self.reader, None)? {
            note(&recorded.fact, played);
        }
        Ok(())
    }
}

fn row(no: u64, at: Stamp, bytes: &[u8]) -> InputStored {
    InputStored { no, at, kind: InputKind::Ask, instrument: None, bytes: bytes.to_vec(), reason: None }
}

fn input(no: u64, at: Stamp, event: &Event) -> InputStored {
    match event {
        Event::Ask { json, .. } => row(no, at, json.as_bytes()),
        Event::Line { instrument, bytes, .. } => {
            InputStored { kind: InputKind::Line, instrument: Some((*instrument).into()), ..row(no, at, bytes) }
        }
    }
}

fn note(fact: &Fact, played: &mut Played) {
    match fact {
        Fact::Refused { says, .. } => drop(played.bench.insert(without_digits(says))),
        Fact::Weighed(w) if w.link.is_none() => drop(played.bench.insert(String::from("a loose weighing"))),
        Fact::Counted(c) if c.specimen.is_none() => drop(played.bench.insert(String::from("a loose count"))),
        Fact::SliceOverdue { .. } => drop(played.bench.insert(String::from("a slice owed for too long"))),
        Fact::LimitsComputed { specimen, limits, .. } => {
            let outcome = played
                .specimens
                .entry(specimen.as_str().into())
                .or_insert_with(|| Outcome { limits: None, said: BTreeSet::new() });
            let complete = outcome.limits.as_ref().is_some_and(|l| l.state != State::Provisional);
            if !complete {
                outcome.said.extend(limits.checks.iter().map(|c| (c.check.clone(), c.about.clone())));
            }
            outcome.limits = Some((**limits).clone());
        }
        _ => (),
    }
}

/// The same words with other numbers are the same words.
fn without_digits(says: &str) -> String {
    says.chars().filter(|c| !c.is_ascii_digit()).collect()
}

/// The laboratory that sessions are played in: defaults, one bench, shipped profiles.
fn setup(balance: Balance) -> Result<DeskSetup, String> {
    let profile = match balance {
        Balance::Streaming => "signed-steady",
        Balance::PrintOnKey => "print-line",
    };
    let text = format!(
        "[[bench]]\nname = \"{BENCH}\"\n\
         [[instrument]]\nname = \"{BALANCE}\"\nkind = \"balance\"\nbench = \"{BENCH}\"\nport = \"/dev/null\"\nprofile = \"{profile}\"\n\
         [[instrument]]\nname = \"{CUP}\"\nkind = \"counter\"\nbench = \"{BENCH}\"\nport = \"/dev/zero\"\nprofile = \"drop-line\"\n"
    );
    let station = station::parse("(drill)", &text).map_err(|e| e.to_string())?;
    let compiled = crate::service::compile_profiles(&station).map_err(|e| e.to_string())?;
    Ok(crate::service::desk_setup(&station, &compiled, std::path::Path::new(""), None, false))
}

/// Whether every line of a session is one its profile understands: a drill of noise would prove nothing.
pub fn understood(play: &Play) -> bool {
    let Ok(mut setup) = setup(play.balance) else { return false };
    session(play).events.iter().all(|event| match event {
        Event::Ask { .. } => true,
        Event::Line { instrument, bytes, .. } => {
            let kind = if *instrument == BALANCE { Kind::Balance } else { Kind::Counter };
            let heard = setup.instruments.iter_mut().find(|i| i.kind == kind).map(|i| (i.decode)(bytes));
            matches!(heard, Some(What::Signal(_)))
        }
    })
}

impl Outcome {
    /// Whether a check of this severity stands in its last result.
    pub fn has(&self, severity: Severity) -> bool {
        self.limits.iter().flat_map(|l| &l.checks).any(|c| c.severity == severity)
    }
    /// The limits: liquid, plastic.
    pub fn values(&self) -> [Option<f64>; 2] {
        let limits = self.limits.as_ref();
        [
            limits.and_then(|l| l.liquid_limit.as_ref()).map(|l| l.value),
            limits.and_then(|l| l.plastic_limit.as_ref()).map(|l| l.value),
        ]
    }
    /// Whether its result is complete.
    pub fn complete(&self) -> bool {
        self.limits.as_ref().is_some_and(|l| l.state != State::Provisional)
    }
}
