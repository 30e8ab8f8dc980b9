//! The shapes of what the HTTP interface takes and gives. What goes out goes
//! through them, so that the description made of them cannot differ from it.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use serde_json::Value;
use std::collections::BTreeMap;

/// Why something was not done.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Refusal {
    /// Always false.
    pub ok: bool,
    /// What is the matter.
    pub error: Says,
}

/// A sentence.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Says {
    /// In words, with what to try.
    pub says: String,
}

/// What came of an ask that writes.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Done {
    /// Always true.
    pub ok: bool,
    /// Numbers of the facts it led to.
    pub facts: Option<Vec<Value>>,
    /// Answer to `status`.
    pub status: Option<Status>,
    /// Answer to `latest`: the latest weighing at the bench.
    pub latest: Option<Value>,
    /// Answer to `latest`: what comes next.
    pub next: Option<String>,
    /// Answer to `document`: its kind.
    pub kind: Option<String>,
    /// Answer to `document`: which.
    pub id: Option<String>,
    /// Answer to `document`: the fact it reflects.
    pub seq: Option<u64>,
    /// Answer to `document`: as it is stored.
    pub document: Option<Value>,
}

/// How the service is doing.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Status {
    /// Version of the shape.
    pub v: u32,
    /// Now, UTC.
    pub at: String,
    /// Version of the program.
    pub program: String,
    /// Name of the station.
    pub station: String,
    /// Why nothing is being recorded; null while recording.
    pub not_recording: Option<String>,
    /// The ledger's id.
    pub ledger: String,
    /// Raised when the ledger was restored from a backup.
    pub epoch: u64,
    /// The last fact.
    pub seq: u64,
    /// Hash of the chain at that fact.
    pub hash: String,
    /// The last input.
    pub inputs: u64,
    /// Facts that the broker has acknowledged.
    pub delivered_through: u64,
    /// Why there is no broker; null while connected.
    pub broker_trouble: Option<String>,
    /// Where the ledger lies.
    pub state_dir: String,
    /// Specimens in work.
    pub open_specimens: Vec<String>,
    /// Weighings and counts tied to nothing.
    pub loose: u64,
    /// Every instrument.
    pub instruments: Vec<Instrument>,
    /// Every bench.
    pub benches: Vec<Bench>,
    /// The last proven backup, and why a later one failed.
    pub backup: Option<serde_json::Value>,
    /// What the laboratory's own results say of its scatter.
    pub own_scatter: Option<serde_json::Value>,
    /// Ports that nobody uses.
    pub offers: Option<serde_json::Value>,
    /// How a recording does.
    pub recording: Option<serde_json::Value>,
    /// How a recording of what was not understood does.
    pub unread: Option<serde_json::Value>,
    /// Why space on the disk is wanted.
    pub room: Option<String>,
    /// Why the clock of the machine cannot be right.
    pub clock: Option<String>,
}

/// Connection of an instrument.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum Connection {
    Waiting,
    Speaking,
    Silent,
    WrongLanguage,
    PortLost,
}

/// A balance, cup counter or scanner.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Instrument {
    /// Version of the shape.
    pub v: u32,
    /// The fact it reflects.
    pub seq: u64,
    /// When something was last known of it, UTC.
    pub at: Option<String>,
    /// Its name.
    pub instrument: String,
    /// `balance`, `counter` or `scanner`.
    pub kind: String,
    /// Benches it serves.
    pub benches: Vec<String>,
    /// What it speaks.
    pub profile: String,
    /// Its port.
    pub port: String,
    /// Its connection.
    pub state: Connection,
    /// Its port is open.
    pub port_open: bool,
    /// More of its connection, in words.
    pub detail: Option<String>,
    /// Since when it is so, UTC.
    pub since: Option<String>,
    /// When it was last heard, UTC.
    pub last_heard: Option<String>,
    /// Lines understood.
    pub lines: u64,
    /// Lines not understood, by reason.
    pub rejects: BTreeMap<String, u64>,
    /// The last of them.
    pub last_reject: Option<String>,
    /// Lines lost because nothing could take them.
    pub overrun_lines: u64,
    /// Of a balance: its latest checks with a reference mass.
    pub balance_checks: Option<serde_json::Value>,
    /// Of a cup: its latest check.
    pub cup_check: Option<serde_json::Value>,
    /// What a balance last showed, and whether that is stale.
    pub live: Option<serde_json::Value>,
    /// What is shown of it is not what it shows now.
    pub stale: Option<bool>,
    /// Its adapter may be the twin of the one meant.
    pub unconfirmed: Option<serde_json::Value>,
}

/// A bench.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Bench {
    /// Version of the shape.
    pub v: u32,
    /// The fact it reflects.
    pub seq: u64,
    /// When something last happened here, UTC.
    pub at: Option<String>,
    /// Its name.
    pub bench: String,
    /// Who is signed in.
    pub signed_in: Option<String>,
    /// The container in hand.
    pub in_hand: Option<InHand>,
    /// What it works on.
    pub intention: Option<Work>,
    /// A count has ended and its slice was not weighed yet.
    pub slice_owed: Option<Owed>,
    /// The latest weighing.
    pub latest: Option<Latest>,
    /// Weighings and counts tied to nothing here.
    pub loose: u64,
    /// What comes next, in one sentence.
    pub next: Option<String>,
    /// A person is needed now.
    pub urgent: bool,
    /// What to do next, as data: `do` and what it is about.
    pub action: Option<serde_json::Value>,
    /// Advice while it can still help, as sentences.
    pub advice: Option<serde_json::Value>,
    /// A caution that belongs to the next step.
    pub caution: Option<String>,
    /// Why the clock of the machine cannot be right.
    pub clock: Option<String>,
    /// Since when that comes next, UTC.
    pub next_since: Option<String>,
}

/// A container in hand.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct InHand {
    /// Which.
    pub container: String,
    /// Since when, UTC.
    pub since: String,
    /// Its mass was taken.
    pub weighed: bool,
}

/// What a bench works on.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Work {
    /// For which specimen.
    pub specimen: String,
    /// On what.
    pub intention: Intention,
}

/// What a bench works on.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum Intention {
    Liquid,
    Plastic,
    Natural,
}

/// A slice owed.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Owed {
    /// For which specimen.
    pub specimen: String,
    /// Drops of the last closure.
    pub drops: u32,
    /// Closures of the paste.
    pub closures: u64,
    /// Since when, UTC.
    pub since: String,
    /// It has been said aloud.
    pub overdue: bool,
    /// Penetration of the cone, where the method uses one.
    pub penetration_mm: Option<f64>,
}

/// The latest weighing at a bench.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Latest {
    /// The fact.
    pub seq: u64,
    /// Grams.
    pub mass_g: f64,
    /// The container; null when loose.
    pub container: Option<String>,
    /// What it is of; null when loose.
    pub role: Option<Role>,
    /// Why it is loose.
    pub loose: Option<String>,
    /// When, UTC.
    pub at: String,
}

/// What a mass is of.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum Role {
    Tare,
    TareCheck,
    TareWithLid,
    Wet,
    Repeat,
    Grown,
    Dry,
    FurtherDry,
    Emptied,
}

/// Where a container stands.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum Standing {
    Unknown,
    Free,
    Wet,
    InOven,
    Drying,
    Dry,
}

/// What a determination is for.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum Kind {
    Liquid,
    Thread,
    Natural,
    Cone,
}

/// A moisture container.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Container {
    /// Version of the shape.
    pub v: u32,
    /// The fact it reflects.
    pub seq: u64,
    /// When it was last weighed empty, UTC.
    pub at: Option<String>,
    /// Its number.
    pub container: String,
    /// Where it stands.
    pub standing: Standing,
    /// Empty mass in force, grams.
    pub tare_g: Option<f64>,
    /// Mass of its lid, grams.
    pub lid_g: Option<f64>,
    /// What it holds.
    pub holding: Option<Holding>,
}

/// What a container holds.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Holding {
    /// Of which specimen.
    pub specimen: String,
    /// Of which kind of determination.
    pub trial: Kind,
    /// Its number within its kind.
    pub no: u32,
    /// With wet soil, grams.
    pub wet_g: Option<f64>,
    /// With dried soil, grams.
    pub dry_g: Option<f64>,
    /// In the oven since, UTC.
    pub in_oven_since: Option<String>,
    /// Somebody recorded the oven.
    pub oven_recorded: bool,
}

/// A specimen: what is done and what is missing.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Specimen {
    /// Version of the shape.
    pub v: u32,
    /// The fact it reflects.
    pub seq: u64,
    /// When it was opened, UTC.
    pub at: Option<String>,
    /// Its identifier.
    pub specimen: String,
    /// The method.
    pub method: String,
    /// Its edition.
    pub edition: String,
    /// For people.
    pub description: Option<String>,
    /// How the soil was prepared.
    pub preparation: Option<String>,
    /// Whether its result stands.
    pub state: State,
    /// Revision of the result, 0 before the first.
    pub revision: u32,
    /// Its determinations.
    pub trials: Vec<Trial>,
    /// What is not answered, in words.
    pub checks: Vec<String>,
}

/// A determination under way.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Trial {
    /// What it is for.
    pub kind: Kind,
    /// Number within its kind.
    pub no: u32,
    /// The container.
    pub container: String,
    /// Drops of its last closure.
    pub drops: Option<u32>,
    /// Its empty mass is known.
    pub tare: bool,
    /// It was weighed wet.
    pub wet: bool,
    /// Dry weighings.
    pub dry: u64,
    /// Why a person set it aside.
    pub set_aside: Option<String>,
    /// Penetration of the cone.
    pub penetration_mm: Option<f64>,
}

/// Whether a result stands.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum State {
    Provisional,
    Complete,
    Reviewed,
}

/// A result. Water contents and limits are percent of dry mass.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[allow(missing_docs)]
pub struct Limits {
    pub v: u32,
    pub seq: u64,
    pub at: Option<String>,
    pub specimen: String,
    pub revision: u32,
    pub state: State,
    pub method: String,
    pub edition: String,
    pub liquid_limit: Option<LiquidLimit>,
    pub plastic_limit: Option<PlasticLimit>,
    pub plasticity_index: PlasticityIndex,
    pub natural_water_percent: Option<f64>,
    pub liquidity_index: Option<f64>,
    pub consistency_index: Option<f64>,
    pub flow_index: Option<f64>,
    pub toughness_index: Option<f64>,
    pub activity: Option<f64>,
    pub group: Option<String>,
    pub trials: Vec<Row>,
    pub checks: Vec<Check>,
    /// What changed since the last revision, in words; empty here.
    pub changed: Vec<String>,
    /// Where it stands in the ledger.
    pub ledger: Option<Place>,
    /// Plasticity after EN ISO 14688-2.
    pub group_en_iso_14688_2: Option<String>,
    /// Group index after AASHTO M 145.
    pub group_index: Option<f64>,
    /// Group after AASHTO M 145.
    pub group_m145: Option<String>,
}

/// Liquid limit.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[allow(missing_docs)]
pub struct LiquidLimit {
    pub value: f64,
    pub rounded: f64,
    /// Standard uncertainty.
    pub u: Option<f64>,
    pub interval_95: Option<[f64; 2]>,
    pub points: u32,
    pub slope_per_decade: Option<f64>,
    pub residual_sd: Option<f64>,
    pub how: String,
    /// The interval that these trials alone give.
    pub interval_95_classical: Option<[f64; 2]>,
    /// What the uncertainty rests on.
    pub u_from: Option<String>,
}

/// Plastic limit.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[allow(missing_docs)]
pub struct PlasticLimit {
    pub value: f64,
    pub rounded: f64,
    /// Standard uncertainty.
    pub u: Option<f64>,
    pub points: u32,
    /// 95 % interval.
    pub interval_95: Option<[f64; 2]>,
    /// What the uncertainty rests on.
    pub u_from: Option<String>,
}

/// Plasticity index.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[allow(missing_docs)]
pub struct PlasticityIndex {
    pub value: Option<f64>,
    pub rounded: Option<f64>,
    /// Standard uncertainty.
    pub u: Option<f64>,
    pub non_plastic: bool,
    /// 95 % interval.
    pub interval_95: Option<[f64; 2]>,
}

/// A determination in a result.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[allow(missing_docs)]
pub struct Row {
    pub kind: Kind,
    pub no: u32,
    pub drops: Option<f64>,
    pub closures: Vec<u32>,
    pub rate_per_s: Option<f64>,
    pub penetration_mm: Option<f64>,
    pub container: Option<String>,
    pub tare_g: Option<f64>,
    pub wet_g: Option<f64>,
    pub dry_g: Option<f64>,
    pub water_percent: Option<f64>,
    pub used: bool,
    pub set_aside: Option<String>,
    pub typed: bool,
    pub by: Option<String>,
    pub balance: Option<String>,
    pub cup: Option<String>,
    pub at: Option<String>,
    /// Standard uncertainty of the water content.
    pub water_u: Option<f64>,
}

/// What a check says.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[allow(missing_docs)]
pub struct Check {
    pub check: String,
    pub severity: Severity,
    pub about: String,
    pub says: String,
    pub answered: Option<String>,
    pub facts: Vec<u64>,
}

/// How much a check weighs.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum Severity {
    Note,
    Hold,
}

/// A place in the ledger.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[allow(missing_docs)]
pub struct Place {
    pub id: String,
    pub epoch: u64,
    pub seq: u64,
    pub hash: Option<String>,
}

/// A weighing or count tied to nothing.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Loose {
    /// The fact.
    pub seq: u64,
    /// Where, when that is clear.
    pub bench: Option<String>,
    /// Grams, for a weighing.
    pub mass_g: Option<f64>,
    /// Drops, for a count.
    pub drops: Option<u32>,
    /// Which instrument; null when typed.
    pub instrument: Option<String>,
    /// Why it is tied to nothing.
    pub why: String,
    /// When, UTC.
    pub at: String,
}

/// A fact, as it is stored.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Fact {
    /// Version of the shape.
    pub v: u32,
    /// Its number; there is no gap.
    pub seq: u64,
    /// When, UTC.
    pub at: String,
    /// The machine's own clock, microseconds since its start.
    pub mono_us: i64,
    /// Which start of the machine.
    pub boot: u32,
    /// Who was named by it or signed in at the bench.
    pub who: Option<String>,
    /// The last input of its instrument that it rests on.
    pub through: Option<u64>,
    /// What kind of fact.
    pub kind: String,
    /// What happened: members depend on the kind.
    pub fact: Value,
}

macro_rules! lists {
    ($($(#[$doc:meta])* $name:ident { $member:ident: $of:ty };)*) => {$(
        $(#[$doc])*
        #[derive(Serialize, Deserialize, JsonSchema)]
        #[serde(deny_unknown_fields)]
        pub struct $name {
            /// The last fact that the list reflects.
            pub seq: u64,
            /// The list.
            pub $member: Vec<$of>,
        }
    )*};
}

lists! {
    /// Every bench.
    Benches { benches: Bench };
    /// Specimens at hand: those in work, and finished ones that a container still holds.
    Specimens { specimens: Specimen };
    /// The register of containers.
    Containers { containers: Container };
    /// Every instrument.
    Instruments { instruments: Instrument };
    /// Everything that is tied to nothing.
    LooseThings { loose: Loose };
    /// Facts in order.
    Facts { facts: Fact };
}

/// What a list of containers or specimens would do, or has done.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Imported {
    /// Whether lines were taken; false: only looked at.
    pub taken: bool,
    /// Its lines.
    pub lines: Vec<ImportedLine>,
}

/// A line of a list.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct ImportedLine {
    /// Its number in the file, from 1.
    pub line: usize,
    /// Its fields as they were read.
    pub fields: Vec<String>,
    /// What is wrong with it.
    pub refused: Option<String>,
    /// Worth knowing.
    pub note: Option<String>,
}

/// A person signs in at the screen.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct SignIn {
    /// Initials.
    pub operator: String,
    /// The PIN. Only over TLS or from the service's machine.
    pub pin: String,
}

/// Who is signed in at the screen.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Session {
    /// Initials; null: nobody.
    pub operator: Option<String>,
    /// The PIN was given a short time ago: corrections need none.
    pub proven: bool,
}
