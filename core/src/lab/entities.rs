//! What the laboratory's state is made of. Each entity is stored as one
//! versioned document.

use crate::fact::{ClosureFault, Connection, Intention, TrialRef};
use crate::lab::role::Role;
use crate::limits::Limits;
use crate::names::{BenchName, ContainerId, InstrumentName, MethodName, Operator, SpecimenId};
use crate::quantity::Mass;
use crate::sense::{InputNo, Trace};
use crate::sheet::{Kind, Seq};
use crate::stamp::{Basis, Stamp};
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

pub use super::equipment::{BalanceCheck, CheckBegun, CupCheck, MassClass, Reference};

/// Names an entity.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Entity {
    /// A specimen.
    Specimen(SpecimenId),
    /// A container.
    Container(ContainerId),
    /// A bench.
    Bench(BenchName),
    /// An instrument.
    Instrument(InstrumentName),
    /// A weighing or count tied to nothing.
    Loose(Seq),
    /// What all finished results say together.
    Statistics,
    /// What is known of the wall clock.
    Clock,
}

/// One weighing as it is used.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Weighing {
    /// The fact.
    pub seq: Seq,
    /// Gross mass.
    pub mass: Mass,
    /// Which balance; `None` when typed.
    pub balance: Option<InstrumentName>,
    /// When.
    pub at: Stamp,
    /// Who was signed in.
    pub by: Option<Operator>,
    /// Typed by a person, or corrected by one.
    pub typed: bool,
    /// One step of the last digit that the balance printed.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub step: Option<Mass>,
    /// The latest correction.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub corrected: Option<Said>,
    /// What the balance showed around it, for checks; none when typed or printed on a key.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub seen: Option<Seen>,
    /// How the balance stood when last checked with a reference mass before it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub checked: Option<Checked>,
}

/// The latest check of a balance before a weighing.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Checked {
    /// It kept its tolerance.
    pub passed: bool,
    /// How long before the weighing, µs.
    pub ago_us: i64,
}

/// What a balance showed around a mass taken.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Seen {
    /// The empty pan before.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub zero: Option<Mass>,
    /// How the load settled.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub trace: Option<Trace>,
    /// Drift until it was lifted, where it was more than the balance's steps can hide.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub stay: Option<Drift>,
    /// What lay on the pan afterwards that did not before (negative: something went with the load).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub left: Option<Mass>,
}

/// A drift over some time.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Drift {
    /// µg a second; rising: positive.
    pub drift_ug_per_s: i64,
    /// Over so long, ms.
    pub watched_ms: u32,
}

/// A person's word: who, why, in which fact.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Said {
    /// Who.
    pub by: Option<Operator>,
    /// Why.
    pub why: String,
    /// The fact.
    pub seq: Seq,
}

/// A moisture container.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Container {
    /// Its number.
    pub id: ContainerId,
    /// Empty weighings, oldest first; the last one is in force.
    pub tares: Vec<Weighing>,
    /// Mass of its registered lid.
    pub lid: Option<Mass>,
    /// What it holds.
    pub holding: Option<Holding>,
    /// Where it stands, for people and topics.
    pub standing: Standing,
    /// Empty weighings with the lid on.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub with_lid: Vec<Weighing>,
    /// What it held before it was last weighed empty, so that this weighing can be taken back.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub released: Option<Released>,
    /// Specimens whose determinations use an empty weighing kept here.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub tare_uses: Vec<TareUse>,
}

/// What a container held before it was weighed empty.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Released {
    /// The empty weighing.
    pub by: Seq,
    /// What it held.
    pub holding: Holding,
}

/// An empty weighing is the tare of a specimen's determination.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct TareUse {
    /// The empty weighing.
    pub tare: Seq,
    /// The specimen.
    pub specimen: SpecimenId,
}

/// What a container holds.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Holding {
    /// Of which specimen.
    pub specimen: SpecimenId,
    /// Which determination.
    pub trial: TrialRef,
    /// Its drying.
    pub oven: OvenClock,
    /// The finished determination that this one took the place of, so that it can be taken back.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub before: Option<Box<Holding>>,
}

/// Time in the oven of what a container holds. What was recorded is kept, and
/// hours are computed from it, so that a weighing can be taken back and a report
/// of an oven that was off may come late.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct OvenClock {
    /// In the oven since, by the record.
    pub since: Option<Stamp>,
    /// Stays in the oven that are over.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub stays: Vec<Stay>,
    /// Times during which the oven did not heat, UTC µs from–to, in order and apart.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub off: Vec<(i64, i64)>,
    /// Somebody recorded the oven.
    pub recorded: bool,
    /// Where nobody did: when the wet weighing was.
    pub wet_at: Stamp,
    /// Oven temperature stated when it went in last, °C.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub celsius: Option<f64>,
}

/// A stay in the oven.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Stay {
    /// From.
    pub from: Stamp,
    /// To.
    pub to: Stamp,
    /// Somebody recorded its beginning; else it is counted from the wet weighing.
    pub recorded: bool,
    /// It ended because the container was weighed dry in this fact.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub ended_by: Option<Seq>,
}

/// Where a container stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Standing {
    /// Never weighed empty.
    Unknown,
    /// Empty, or holding something finished.
    Free,
    /// Holds wet soil outside the oven.
    Wet,
    /// In the oven, by the record.
    InOven,
    /// Dried, not yet as the method wants it.
    Drying,
    /// Dried as the method wants it: may be emptied.
    Dry,
}

/// A specimen under test.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Specimen {
    /// Its identifier.
    pub id: SpecimenId,
    /// The method.
    pub method: MethodName,
    /// Edition as the laboratory stated it.
    pub edition: String,
    /// For people.
    pub description: Option<String>,
    /// How the soil was prepared.
    pub preparation: Option<String>,
    /// Share passing 0.075 mm, percent.
    pub passing_75um_percent: Option<f64>,
    /// Share finer than clay size, percent.
    pub clay_percent: Option<f64>,
    /// Liquid limit of the same soil dried in the oven before the test, percent.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub liquid_limit_oven_dried: Option<f64>,
    /// When it was opened.
    pub opened: Stamp,
    /// Count runs that belong to it, in order.
    pub counts: Vec<Count>,
    /// Determinations, in order of their wet weighings.
    pub trials: Vec<TrialRecord>,
    /// The liquid limit cannot be obtained.
    pub liquid_not_obtainable: Option<Said>,
    /// The plastic limit cannot be obtained.
    pub plastic_not_obtainable: Option<Said>,
    /// Answers to checks.
    pub answers: Vec<CheckAnswer>,
    /// Revision of the result, 0 before the first.
    pub revision: u32,
    /// Revision that a second person reviewed.
    pub reviewed: Option<(u32, Option<Operator>)>,
    /// The latest result.
    pub limits: Option<Limits>,
    /// What is wanted of it; empty: liquid and plastic limit.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub wanted: Vec<Intention>,
}

/// A count run of a specimen, or a penetration of its cone.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Count {
    /// The fact.
    pub seq: Seq,
    /// Drops that count; 0 of a penetration.
    pub drops: u32,
    /// How deep the cone went, millimetres.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub penetration_mm: Option<f64>,
    /// Drops per second.
    pub rate_per_s: Option<f64>,
    /// Gaps noticed.
    pub gaps: u32,
    /// Doubles noticed.
    pub doubles: u32,
    /// Why part of it may be missing.
    pub interrupted: Option<String>,
    /// Which counter; `None` when typed.
    pub cup: Option<InstrumentName>,
    /// When it was over.
    pub at: Stamp,
    /// Typed or corrected by a person.
    pub typed: bool,
    /// No slice was taken after it, because …
    pub superseded: Option<String>,
    /// Set aside by a person.
    pub set_aside: Option<Said>,
    /// The latest correction.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub corrected: Option<Said>,
    /// Who was signed in.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub by: Option<Operator>,
    /// Where its slice is owed, or was.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub bench: Option<BenchName>,
    /// First line of the run, and when it began: tells a run that is told again.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub run: Option<(InputNo, Stamp)>,
    /// Set aside because the groove did not close as it should.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub failed: Option<ClosureFault>,
}

/// One determination.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct TrialRecord {
    /// Liquid, thread or natural.
    pub kind: Kind,
    /// Number within its kind.
    pub no: u32,
    /// The container.
    pub container: ContainerId,
    /// Counts of the paste whose slice this is.
    pub counts: Vec<Seq>,
    /// Tare in force at the wet weighing; `None` while owed.
    pub tare: Option<Weighing>,
    /// Wet weighings that count in turn; the last one is in force.
    pub wets: Vec<Weighing>,
    /// The wet container once more; changes nothing.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub repeats: Vec<Weighing>,
    /// Dry weighings in order.
    pub dries: Vec<DryRecord>,
    /// Set aside by a person.
    pub set_aside: Option<Said>,
    /// It was begun for another specimen and moved here.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub moved: Option<Moved>,
}

/// A determination that was begun for another specimen.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Moved {
    /// For which.
    pub from: SpecimenId,
    /// Its number there.
    pub no: u32,
    /// Who moved it, and why.
    pub said: Said,
}

/// One dry weighing with its oven time.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct DryRecord {
    /// The weighing.
    pub weighing: Weighing,
    /// Hours in the oven before it.
    pub oven_hours: f64,
    /// Hours back in the oven since the previous dry weighing.
    pub since_previous_hours: Option<f64>,
    /// Somebody recorded the oven.
    pub oven_recorded: bool,
    /// Clock the hours rest on.
    pub basis: Basis,
    /// Time since it came out of the oven, where somebody recorded that, µs.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub out_us: Option<i64>,
}

/// A person's answer to a check.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct CheckAnswer {
    /// Which check.
    pub check: String,
    /// About what.
    pub about: String,
    /// The answer.
    pub says: String,
    /// Who.
    pub by: Option<Operator>,
}

/// A bench.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Bench {
    /// Its name.
    pub name: BenchName,
    /// Who is signed in.
    pub signed_in: Option<Operator>,
    /// What it works on.
    pub intention: Option<Work>,
    /// The container in hand.
    pub hand: Option<Hand>,
    /// A slice is owed.
    pub owed: Option<Owed>,
    /// The latest weighing here.
    pub latest: Option<Latest>,
    /// The latest refusal, until something works again.
    pub refusal: Option<String>,
    /// When something last happened here.
    pub active: Stamp,
    /// The latest code of a container read here, by its fact.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub code: Option<Seq>,
    /// The run that goes on at the cup does not stand.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub failed: Option<FailedRun>,
}

/// A person said of a run that it does not stand, before it was over.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct FailedRun {
    /// What happened.
    pub fault: ClosureFault,
    /// Who, and why.
    pub said: Said,
    /// When.
    pub at: Stamp,
}

/// What a bench works on.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Work {
    /// For which specimen.
    pub specimen: SpecimenId,
    /// On what.
    pub intention: Intention,
}

/// The container in hand.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Hand {
    /// Which.
    pub container: ContainerId,
    /// Since when.
    pub since: Stamp,
    /// The mass taken with it in hand, loose or not.
    pub weighing: Option<Seq>,
    /// Other benches that share the scanner which read the code: the mass may be taken there.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub or_at: Vec<BenchName>,
    /// The container that was in hand before and got no mass.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub instead_of: Option<ContainerId>,
}

/// A count has ended and nothing was weighed yet.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Owed {
    /// For which specimen.
    pub specimen: SpecimenId,
    /// Closures of this paste so far.
    pub counts: Vec<Seq>,
    /// Drops of the last one.
    pub drops: u32,
    /// Its penetration, of the cone.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub penetration_mm: Option<f64>,
    /// When the last one was over.
    pub ended: Stamp,
    /// It has been said aloud.
    pub said: bool,
}

/// The latest weighing at a bench.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Latest {
    /// The fact.
    pub seq: Seq,
    /// The mass.
    pub mass: Mass,
    /// The container; `None` when loose.
    pub container: Option<ContainerId>,
    /// What it is of; `None` when loose.
    pub role: Option<Role>,
    /// Why it is loose.
    pub loose: Option<String>,
    /// When.
    pub at: Stamp,
}

/// A weighing or count tied to nothing.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Loose {
    /// The fact.
    pub seq: Seq,
    /// Where, when that is clear.
    pub bench: Option<BenchName>,
    /// What it is.
    pub what: LooseWhat,
    /// Why it is loose.
    pub why: String,
    /// When.
    pub at: Stamp,
    /// First and last line of its instrument that it rests on.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub inputs: Option<[InputNo; 2]>,
    /// A person said what it was; it stays loose and needs nobody any more.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub explained: Option<Said>,
}

/// What is loose.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum LooseWhat {
    /// A weighing, with the basis it was printed on.
    Weighing {
        /// The weighing, its mass as printed.
        weighing: Weighing,
        /// Gross, net or unmarked.
        basis: crate::signal::Basis,
    },
    /// A count.
    Count(Count),
}

/// An instrument.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Instrument {
    /// Its name.
    pub name: InstrumentName,
    /// Its connection.
    pub state: Connection,
    /// More, in words.
    pub detail: Option<String>,
    /// Since when.
    pub since: Option<Stamp>,
    /// Lines lost because nothing could take them.
    pub overrun_lines: u64,
    /// A mass that was printed, or lies loose on the pan.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub pan: Option<Pan>,
    /// A check with a reference mass was begun: the next mass is it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub check_begun: Option<CheckBegun>,
    /// Its latest checks with a reference mass, oldest first.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub checks: Vec<BalanceCheck>,
    /// Of a cup: its latest checks, oldest first.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub cup_checks: Vec<CupCheck>,
}

/// The latest mass of a balance, as long as another line or code can still refer to it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Pan {
    /// The weighing.
    pub seq: Seq,
    /// The line itself was the weighing (print key).
    pub printed: bool,
    /// Mass as printed.
    pub mass: Mass,
    /// When.
    pub at: Stamp,
    /// It is loose.
    pub loose: bool,
    /// The fact that tied it, when that came later.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub tied: Option<Seq>,
}

impl Container {
    /// A container that was never seen.
    pub fn new(id: ContainerId) -> Self {
        Self {
            id,
            tares: Vec::new(),
            lid: None,
            holding: None,
            standing: Standing::Unknown,
            with_lid: Vec::new(),
            released: None,
            tare_uses: Vec::new(),
        }
    }
    /// The empty weighing in force.
    pub fn tare(&self) -> Option<&Weighing> {
        self.tares.last()
    }
}

impl Count {
    /// A count that a person typed, with nothing in it yet.
    pub(super) fn typed(seq: Seq, at: Stamp, by: Option<Operator>) -> Self {
        Self {
            seq,
            drops: 0,
            penetration_mm: None,
            rate_per_s: None,
            gaps: 0,
            doubles: 0,
            interrupted: None,
            cup: None,
            at,
            typed: true,
            superseded: None,
            set_aside: None,
            corrected: None,
            by,
            bench: None,
            run: None,
            failed: None,
        }
    }
}

impl Bench {
    /// A bench at which nothing has happened.
    pub fn new(name: BenchName) -> Self {
        Self {
            name,
            signed_in: None,
            intention: None,
            hand: None,
            owed: None,
            latest: None,
            refusal: None,
            active: Stamp::default(),
            code: None,
            failed: None,
        }
    }
}

impl Instrument {
    /// How it stood when last checked before a moment.
    pub(super) fn checked_at(&self, at: &Stamp) -> Option<Checked> {
        let latest = self.checks.iter().rev().find(|c| at.since(&c.at).us >= 0)?;
        Some(Checked { passed: latest.passed(), ago_us: at.since(&latest.at).us })
    }
    /// An instrument that was never heard.
    pub fn new(name: InstrumentName) -> Self {
        Self {
            name,
            state: Connection::Waiting,
            detail: None,
            since: None,
            overrun_lines: 0,
            pan: None,
            check_begun: None,
            checks: Vec::new(),
            cup_checks: Vec::new(),
        }
    }
}

impl TrialRecord {
    /// Kind and number.
    pub fn reference(&self) -> TrialRef {
        TrialRef { kind: self.kind, no: self.no }
    }
    /// Every weighing of it: tare, wet, repeated, dry.
    pub fn weighings(&self) -> impl Iterator<Item = &Weighing> {
        let dries = self.dries.iter().map(|d| &d.weighing);
        self.tare.iter().chain(&self.wets).chain(&self.repeats).chain(dries)
    }
}

impl Specimen {
    /// A determination.
    pub fn trial(&self, which: TrialRef) -> Option<&TrialRecord> {
        self.trials.iter().find(|t| t.reference() == which)
    }
    /// A determination, to be changed.
    pub fn trial_mut(&mut self, which: TrialRef) -> Option<&mut TrialRecord> {
        self.trials.iter_mut().find(|t| t.reference() == which)
    }
    /// Weighings of all its determinations.
    pub fn weighings(&self) -> impl Iterator<Item = &Weighing> {
        self.trials.iter().flat_map(TrialRecord::weighings)
    }
    /// A count run.
    pub fn count(&self, seq: Seq) -> Option<&Count> {
        self.counts.iter().find(|c| c.seq == seq)
    }
    /// The number the next determination of this kind gets.
    pub fn next_no(&self, kind: Kind) -> u32 {
        self.trials.iter().filter(|t| t.kind == kind).map(|t| t.no).max().unwrap_or(0) + 1
    }
    /// Whether this is wanted of it.
    pub fn wants(&self, what: Intention) -> bool {
        match self.wanted.is_empty() {
            true => what != Intention::Natural,
            false => self.wanted.contains(&what),
        }
    }
    /// Whether work is still to be done on it.
    pub fn open(&self) -> bool {
        self.limits.as_ref().is_none_or(|l| l.state == crate::limits::State::Provisional)
    }
}
