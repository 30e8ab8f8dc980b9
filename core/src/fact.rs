//! Facts: what was decided, in the past tense, once and for all.
//!
//! A fact is stored as JSON and never rewritten. The enum is closed; its
//! serialised form is frozen by examples in the tests: a changed shape gets a
//! new variant, never a changed old one.

use crate::lab::entities::Reference;
use crate::lab::role::Role;
use crate::limits::Limits;
use crate::names::{BenchName, ContainerId, InstrumentName, MethodName, Operator, SpecimenId};
use crate::quantity::Mass;
use crate::sense::{CountRun, InputNo, MassTaken};
use crate::sheet::{Kind, Seq};
use crate::stamp::Stamp;
use alloc::boxed::Box;
use alloc::string::String;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

/// Version of the stored form of facts.
pub const VERSION: u32 = 1;

/// A fact with its place in the ledger.
#[derive(Clone, Debug, PartialEq)]
pub struct Recorded {
    /// Gapless number.
    pub seq: Seq,
    /// When the input that led to it was heard.
    pub at: Stamp,
    /// Who was named by it or signed in at the bench.
    pub who: Option<Operator>,
    /// Last input of its instrument that the fact has consumed (facts made by a sense).
    pub through: Option<InputNo>,
    /// What happened.
    pub fact: Fact,
}

/// What happened.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(tag = "kind", content = "fact", rename_all = "snake_case")]
pub enum Fact {
    /// The service came up.
    ServiceStarted {
        /// Program version.
        program: String,
        /// Whether the previous run ended in order.
        after_orderly_stop: bool,
    },
    /// The service went down in order.
    ServiceStopped {},
    /// These settings are in force from here on.
    SettingsTaken {
        /// The input row that holds them in full.
        input: InputNo,
        /// SHA-256 of that row's text.
        digest: String,
    },
    /// An instrument's connection changed.
    InstrumentChanged {
        /// Which.
        instrument: InstrumentName,
        /// Its new state.
        state: Connection,
        /// More, in words.
        #[serde(default, skip_serializing_if = "Option::is_none")]
        detail: Option<String>,
    },
    /// Lines were dropped because nothing could take them.
    LinesOverrun {
        /// Whose.
        instrument: InstrumentName,
        /// How many.
        lines: u64,
    },
    /// Many lines came that led to nothing: the chain takes them in here, so that a start need not read them all.
    LinesKept {
        /// How many since the fact before.
        lines: u64,
    },
    /// The wall clock moved against the one that only runs forward: it was set, or it jumped.
    ClockStepped {
        /// By so much, µs; negative when it was set back.
        by_us: i64,
        /// It can be right where it is now.
        trusted: bool,
    },
    /// The wall clock is earlier than it can be.
    ClockUntrusted {
        /// It cannot be earlier than this, UTC µs.
        not_before_utc_us: i64,
    },
    /// Nothing speaks against the wall clock any more.
    ClockTrusted {
        /// Why.
        why: String,
    },
    /// A specimen's tests began.
    SpecimenOpened(SpecimenOpened),
    /// A person signed in at a bench.
    SignedIn {
        /// Where.
        bench: BenchName,
        /// Who.
        operator: Operator,
    },
    /// Nobody is signed in at a bench any more.
    SignedOut {
        /// Where.
        bench: BenchName,
    },
    /// A bench works on something from now on.
    IntentionSet {
        /// Where.
        bench: BenchName,
        /// For which specimen.
        specimen: SpecimenId,
        /// On what.
        intention: Intention,
    },
    /// A bench works on nothing in particular.
    IntentionEnded {
        /// Where.
        bench: BenchName,
        /// Why.
        why: String,
    },
    /// A container's code was read: the next mass is its.
    TakenInHand {
        /// Where.
        bench: BenchName,
        /// Which container.
        container: ContainerId,
        /// Other benches that share the scanner: the mass may be taken there.
        #[serde(default, skip_serializing_if = "Vec::is_empty")]
        or_at: Vec<BenchName>,
        /// The container that was in hand and got no mass.
        #[serde(default, skip_serializing_if = "Option::is_none")]
        instead_of: Option<ContainerId>,
    },
    /// No container is in hand any more.
    HandEmptied {
        /// Where.
        bench: BenchName,
        /// Why.
        why: String,
    },
    /// Something that was read or asked at a bench could not be done.
    Refused {
        /// Where.
        bench: BenchName,
        /// Why, and what to try.
        says: String,
    },
    /// A mass was taken.
    Weighed(Weighed),
    /// The same slip came again and is the same weighing.
    SlipRepeated {
        /// The weighing.
        weighing: Seq,
        /// The line that repeats it.
        input: InputNo,
    },
    /// A loose mass was taken off the pan: a code read from here on is not its.
    PanCleared {
        /// Which balance.
        balance: InstrumentName,
    },
    /// A mass drifted while it lay on the pan, more than the balance's steps can hide.
    PanWatched {
        /// Which balance.
        balance: InstrumentName,
        /// The weighing.
        weighing: Seq,
        /// Slope from the mass taken until it was lifted, µg a second.
        drift_ug_per_s: i64,
        /// Time watched, ms.
        watched_ms: u32,
    },
    /// The empty pan shows something else after a weighing than before.
    LeftOnPan {
        /// Which balance.
        balance: InstrumentName,
        /// The weighing.
        weighing: Seq,
        /// What it shows now, less what it showed before.
        left: Mass,
    },
    /// A weighing was tied to a container, or to another one than before.
    WeighingTied {
        /// The weighing.
        weighing: Seq,
        /// What it now belongs to.
        link: Link,
        /// The bench that says so, when several showed the weighing.
        #[serde(default, skip_serializing_if = "Option::is_none")]
        bench: Option<BenchName>,
        /// Why.
        why: String,
    },
    /// A run of the cup ended.
    Counted(Counted),
    /// A count was tied to a specimen, or to another one than before; its slice is owed.
    CountTied {
        /// The count.
        count: Seq,
        /// Where its slice is owed.
        bench: BenchName,
        /// The specimen.
        specimen: SpecimenId,
        /// Why.
        why: String,
    },
    /// No slice was taken after a count.
    CountSuperseded {
        /// The count.
        count: Seq,
        /// Why.
        why: String,
    },
    /// A slice has been owed for long.
    SliceOverdue {
        /// Where.
        bench: BenchName,
        /// The count.
        count: Seq,
    },
    /// A weighing or count does not count.
    SetAside {
        /// The weighing or count.
        what: Seq,
        /// How the groove failed to close, when that is why.
        #[serde(default, skip_serializing_if = "Option::is_none")]
        fault: Option<ClosureFault>,
        /// Why.
        why: String,
    },
    /// A groove failed before there was a count: in a run that still goes on, or when it was cut.
    ClosureFailed {
        /// Where.
        bench: BenchName,
        /// The specimen in work.
        specimen: SpecimenId,
        /// How.
        fault: ClosureFault,
        /// A run was going on: its count does not stand.
        running: bool,
        /// Why.
        why: String,
    },
    /// A loose weighing or count was explained by a person; it stays loose.
    Explained {
        /// The weighing or count.
        what: Seq,
        /// What it was.
        says: String,
    },
    /// A determination was begun for the wrong specimen and moved to another, with its counts.
    TrialMoved {
        /// The specimen it was begun for.
        specimen: SpecimenId,
        /// Liquid, thread or natural.
        trial: Kind,
        /// Its number there.
        no: u32,
        /// The specimen it belongs to.
        to: SpecimenId,
        /// Its number there.
        to_no: u32,
        /// Why.
        why: String,
    },
    /// A whole determination does not count.
    TrialSetAside {
        /// Of which specimen.
        specimen: SpecimenId,
        /// Liquid, thread or natural.
        trial: Kind,
        /// Its number.
        no: u32,
        /// Why.
        why: String,
    },
    /// A mass was corrected by a person.
    MassAmended {
        /// The weighing.
        weighing: Seq,
        /// What it was.
        was: Mass,
        /// What it is.
        mass: Mass,
        /// Why.
        why: String,
    },
    /// A number of drops was corrected by a person.
    DropsAmended {
        /// The count.
        count: Seq,
        /// What it was.
        was: u32,
        /// What it is.
        drops: u32,
        /// Why.
        why: String,
    },
    /// A penetration of the cone was entered by a person; the slice of its paste is owed.
    PenetrationEntered {
        /// How deep, millimetres.
        penetration_mm: f64,
        /// Where its slice is owed.
        bench: BenchName,
        /// The specimen.
        specimen: SpecimenId,
    },
    /// A penetration was corrected by a person.
    PenetrationAmended {
        /// The penetration.
        penetration: Seq,
        /// What it was, millimetres.
        was_mm: f64,
        /// What it is, millimetres.
        penetration_mm: f64,
        /// Why.
        why: String,
    },
    /// A container was entered in the register.
    ContainerRegistered {
        /// Which.
        container: ContainerId,
        /// Mass of its lid.
        lid: Option<Mass>,
    },
    /// A container was declared free by a person.
    ContainerFreed {
        /// Which.
        container: ContainerId,
        /// Why.
        why: String,
    },
    /// Containers went into the oven.
    IntoOven {
        /// Which.
        containers: Vec<ContainerId>,
        /// Oven temperature, °C.
        #[serde(default, skip_serializing_if = "Option::is_none")]
        celsius: Option<f64>,
    },
    /// Containers came out of the oven.
    OutOfOven {
        /// Which.
        containers: Vec<ContainerId>,
    },
    /// The oven was not heating for a while.
    OvenOff {
        /// From, UTC µs.
        from_utc_us: i64,
        /// To, UTC µs.
        to_utc_us: i64,
        /// Why.
        why: String,
    },
    /// A person stated that a limit cannot be obtained.
    NotObtainable {
        /// Of which specimen.
        specimen: SpecimenId,
        /// Which limit.
        limit: Limit,
        /// Why.
        because: String,
    },
    /// Limits were computed.
    LimitsComputed {
        /// Of which specimen.
        specimen: SpecimenId,
        /// Revision, from 1.
        revision: u32,
        /// What changed against the revision before, and why.
        changed: Vec<String>,
        /// The limits.
        limits: Box<Limits>,
    },
    /// A person answered a check.
    CheckAnswered {
        /// Of which specimen.
        specimen: SpecimenId,
        /// Which check.
        check: String,
        /// About what.
        about: String,
        /// The answer.
        says: String,
    },
    /// A check of a balance was begun: its next mass is the reference mass.
    BalanceCheckBegun {
        /// Which balance.
        balance: InstrumentName,
        /// With which reference mass.
        reference: Reference,
    },
    /// A balance was checked with a reference mass.
    BalanceChecked(BalanceChecked),
    /// A cup was checked by hand.
    CupChecked(CupChecked),
    /// A second person looked at a result.
    Reviewed {
        /// Of which specimen.
        specimen: SpecimenId,
        /// Which revision.
        revision: u32,
    },
}

/// State of an instrument's connection.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Connection {
    /// Nothing heard yet.
    #[default]
    Waiting,
    /// Lines arrive and are understood.
    Speaking,
    /// Has spoken, and is silent now.
    Silent,
    /// Lines arrive that its profile does not understand.
    WrongLanguage,
    /// The port is gone.
    PortLost,
}

/// A specimen at its opening.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct SpecimenOpened {
    /// Its identifier.
    pub specimen: SpecimenId,
    /// The method.
    pub method: MethodName,
    /// Edition, as the laboratory states it.
    pub edition: String,
    /// For people.
    #[serde(default)]
    pub description: Option<String>,
    /// How the soil was prepared.
    #[serde(default)]
    pub preparation: Option<String>,
    /// Share passing 0.075 mm, percent.
    #[serde(default)]
    pub passing_75um_percent: Option<f64>,
    /// Share finer than clay size, percent.
    #[serde(default)]
    pub clay_percent: Option<f64>,
    /// Liquid limit of the same soil dried in the oven before the test, percent.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub liquid_limit_oven_dried: Option<f64>,
    /// What is wanted of it; empty: liquid and plastic limit.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub wanted: Vec<Intention>,
}

/// What a bench works on.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Intention {
    /// Liquid limit: counts belong to the specimen.
    Liquid,
    /// Plastic limit: wet weighings are threads.
    Plastic,
    /// Natural water content.
    Natural,
}

/// How a groove failed to close as it should.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum ClosureFault {
    /// The soil slid on the cup instead of flowing together.
    Slid,
    /// The sides of the groove tore.
    Tore,
}

/// A limit.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Limit {
    /// Liquid limit.
    Liquid,
    /// Plastic limit.
    Plastic,
}

/// One determination of a specimen.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
pub struct TrialRef {
    /// Liquid, thread or natural.
    pub kind: Kind,
    /// Number within its kind, from 1.
    pub no: u32,
}

/// What a weighing belongs to.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Link {
    /// The container.
    pub container: ContainerId,
    /// What the mass is of.
    pub role: Role,
    /// Gross mass, the tare added where the balance gave a net one.
    pub gross: Mass,
    /// The specimen, where the mass belongs to one.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub specimen: Option<SpecimenId>,
    /// The determination.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub trial: Option<TrialRef>,
    /// Counts whose slice this is (wet weighing of a liquid trial).
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub counts: Vec<Seq>,
}

/// A mass taken and what it was tied to at once.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Weighed {
    /// Mass as printed.
    pub mass_ug: Mass,
    /// Where, when that is clear.
    pub bench: Option<BenchName>,
    /// Benches that a loose mass may belong to as well, when the balance or the scanner is shared.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub or_at: Vec<BenchName>,
    /// Which balance; `None` when a person typed the value.
    pub balance: Option<InstrumentName>,
    /// How the stream led to it; `None` when typed.
    pub taken: Option<MassTaken>,
    /// What it belongs to; `None` when loose.
    pub link: Option<Link>,
    /// Why it is loose, and what to do.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub loose: Option<String>,
}

/// A count run and what it was tied to at once.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Counted {
    /// Drops that count.
    pub drops: u32,
    /// Where, when that is clear.
    pub bench: Option<BenchName>,
    /// Which counter; `None` when a person typed the value.
    pub cup: Option<InstrumentName>,
    /// The run; `None` when typed.
    pub run: Option<CountRun>,
    /// The specimen; `None` when loose.
    pub specimen: Option<SpecimenId>,
    /// An earlier count of the same run, told before the counter was done.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub replaces: Option<Seq>,
    /// Why it is loose, and what to do.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub loose: Option<String>,
    /// A person had said of the run, before it was over, that it does not stand.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub failed: Option<RunFailed>,
}

/// A run that does not stand.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct RunFailed {
    /// How.
    pub fault: ClosureFault,
    /// Who said so.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub by: Option<Operator>,
    /// Why.
    pub why: String,
}

/// A balance was checked with a reference mass.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct BalanceChecked {
    /// Which balance.
    pub balance: InstrumentName,
    /// The weighing.
    pub weighing: Seq,
    /// The reference mass.
    pub reference: Reference,
    /// What the balance showed.
    pub mass: Mass,
    /// That, less the reference mass.
    pub error: Mass,
    /// What it may be off by.
    pub tolerance: Mass,
    /// It is not off by more.
    pub passed: bool,
}

/// A cup was checked by hand.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct CupChecked {
    /// Which cup, by its counter.
    pub cup: InstrumentName,
    /// Height of fall, millimetres.
    pub drop_height_mm: f64,
    /// What the wear of cup and tool is like.
    pub wear: String,
    /// The base: hard or soft, and of what.
    pub base: String,
    /// The grooving tool.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub tool: Option<String>,
}

impl Fact {
    /// Stable word for the kind of fact.
    pub fn kind(&self) -> &'static str {
        match self {
            Fact::ServiceStarted { .. } => "service_started",
            Fact::ServiceStopped {} => "service_stopped",
            Fact::SettingsTaken { .. } => "settings_taken",
            Fact::InstrumentChanged { .. } => "instrument_changed",
            Fact::LinesOverrun { .. } => "lines_overrun",
            Fact::LinesKept { .. } => "lines_kept",
            Fact::ClockStepped { .. } => "clock_stepped",
            Fact::ClockUntrusted { .. } => "clock_untrusted",
            Fact::ClockTrusted { .. } => "clock_trusted",
            Fact::SpecimenOpened(_) => "specimen_opened",
            Fact::SignedIn { .. } => "signed_in",
            Fact::SignedOut { .. } => "signed_out",
            Fact::IntentionSet { .. } => "intention_set",
            Fact::IntentionEnded { .. } => "intention_ended",
            Fact::TakenInHand { .. } => "taken_in_hand",
            Fact::HandEmptied { .. } => "hand_emptied",
            Fact::Refused { .. } => "refused",
            Fact::Weighed(_) => "weighed",
            Fact::SlipRepeated { .. } => "slip_repeated",
            Fact::PanCleared { .. } => "pan_cleared",
            Fact::PanWatched { .. } => "pan_watched",
            Fact::LeftOnPan { .. } => "left_on_pan",
            Fact::WeighingTied { .. } => "weighing_tied",
            Fact::Counted(_) => "counted",
            Fact::CountTied { .. } => "count_tied",
            Fact::CountSuperseded { .. } => "count_superseded",
            Fact::SliceOverdue { .. } => "slice_overdue",
            Fact::SetAside { .. } => "set_aside",
            Fact::ClosureFailed { .. } => "closure_failed",
            Fact::Explained { .. } => "explained",
            Fact::TrialMoved { .. } => "trial_moved",
            Fact::TrialSetAside { .. } => "trial_set_aside",
            Fact::MassAmended { .. } => "mass_amended",
            Fact::DropsAmended { .. } => "drops_amended",
            Fact::PenetrationEntered { .. } => "penetration_entered",
            Fact::PenetrationAmended { .. } => "penetration_amended",
            Fact::ContainerRegistered { .. } => "container_registered",
            Fact::ContainerFreed { .. } => "container_freed",
            Fact::IntoOven { .. } => "into_oven",
            Fact::OutOfOven { .. } => "out_of_oven",
            Fact::OvenOff { .. } => "oven_off",
            Fact::NotObtainable { .. } => "not_obtainable",
            Fact::LimitsComputed { .. } => "limits_computed",
            Fact::CheckAnswered { .. } => "check_answered",
            Fact::BalanceCheckBegun { .. } => "balance_check_begun",
            Fact::BalanceChecked(_) => "balance_checked",
            Fact::CupChecked(_) => "cup_checked",
            Fact::Reviewed { .. } => "reviewed",
        }
    }
}
