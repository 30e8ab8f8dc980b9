//! Scenario files, which are also the sheet files of old paper sheets: one
//! format, read more strictly for a demonstration than for computing.

mod rows;
mod sheet;

use crate::fault::{Faults, Place, quote};
use crate::methods::Methods;
use crate::reader::{Entry, Table, read};
use crate::station::known_method;
use crate::{defaults, keys};
use std::collections::BTreeMap;
use tarecup_core::names::{BenchName, MethodName, SpecimenId};

pub use rows::{ConeRow, LiquidRow, Masses, Water, Weighed};
pub use sheet::to_sheet;

/// What the file is read for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Mode {
    /// To be played at simulated instruments: containers and masses are needed.
    Demo,
    /// To be computed: a water content may stand in place of the masses.
    Work,
}

/// A scenario or sheet file.
#[derive(Clone, Debug, PartialEq)]
pub struct Scenario {
    /// Its title; the file's name where it has none.
    pub title: String,
    /// The method, where a specimen names none of its own.
    pub method: Option<MethodName>,
    /// The specimens, in order.
    pub specimens: Vec<ScenarioSpecimen>,
}

impl Scenario {
    /// The method of one of its specimens: its own, the file's, or `default`.
    pub fn method_of<'s>(&'s self, specimen: &'s ScenarioSpecimen, default: &'s MethodName) -> &'s MethodName {
        specimen.method.as_ref().or(self.method.as_ref()).unwrap_or(default)
    }
}

/// One specimen of the file.
#[derive(Clone, Debug, PartialEq)]
pub struct ScenarioSpecimen {
    /// Its number.
    pub id: SpecimenId,
    /// Where its table begins.
    pub at: Place,
    /// Its own method.
    pub method: Option<MethodName>,
    /// What the soil is.
    pub description: Option<String>,
    /// How it was prepared.
    pub preparation: Option<String>,
    /// The bench it is tested at.
    pub bench: Option<BenchName>,
    /// Natural water content.
    pub natural: Vec<Weighed>,
    /// The liquid limit cannot be obtained, because …
    pub liquid_not_obtainable: Option<String>,
    /// The plastic limit cannot be obtained, because …
    pub plastic_not_obtainable: Option<String>,
    /// Share passing 0.075 mm, percent of dry mass.
    pub passing_75um_percent: Option<f64>,
    /// Share finer than clay size, percent of dry mass.
    pub clay_percent: Option<f64>,
    /// Liquid limit of the same soil dried in the oven before the test, percent of dry mass.
    pub liquid_limit_oven_dried: Option<f64>,
    /// Cone determinations in the order tested.
    pub cone: Vec<ConeRow>,
    /// Liquid determinations in the order tested.
    pub liquid: Vec<LiquidRow>,
    /// Plastic determinations in the order tested.
    pub plastic: Vec<Weighed>,
}

/// Reads a scenario or sheet file.
///
/// # Errors
/// What is wrong, with its place. Masses that a laboratory can produce by
/// mistake (a dry mass above the wet one) are not faults of the file.
pub fn parse(file: &str, text: &str, mode: Mode, methods: &Methods) -> Result<Scenario, Faults> {
    read(file, text, |root| scenario(root, file, mode, methods))
}

fn scenario(root: &Table<'_>, file: &str, mode: Mode, methods: &Methods) -> Option<Scenario> {
    root.only(keys::SCENARIO);
    let title = match root.get("title") {
        Some(entry) => entry.words(),
        None => Some(std::path::Path::new(file).file_stem().unwrap_or_default().to_string_lossy().into_owned()),
    };
    let method = root.get("method").map(|e| known_method(&e, methods));
    let list = root.need("specimen", "at least one specimen", "[[specimen]] with id = \"S-101\" and its determinations");
    let mut specimens: Vec<ScenarioSpecimen> = Vec::new();
    let mut above: BTreeMap<SpecimenId, Place> = BTreeMap::new();
    let mut whole = true;
    for table in list.map(|e| e.tables("specimen", keys::SPECIMEN)).unwrap_or_default() {
        if table.reading.is_full() {
            break;
        }
        match specimen(&table, mode, methods, &mut above) {
            Some(specimen) => specimens.push(specimen),
            None => whole = false,
        }
    }
    let method = match method {
        Some(named) => Some(named?),
        None => None,
    };
    (whole && !specimens.is_empty()).then_some(Scenario { title: title?, method, specimens })
}

fn specimen(
    table: &Table<'_>,
    mode: Mode,
    methods: &Methods,
    above: &mut BTreeMap<SpecimenId, Place>,
) -> Option<ScenarioSpecimen> {
    let id = id(table, above);
    let words = |key: &str| table.get(key).and_then(|e| e.words());
    let percent = |key: &str| table.get(key).and_then(|e| e.number(0.0..=100.0, "percent of dry mass"));
    if let (Some(cone), Mode::Demo) = (table.get("cone"), mode) {
        cone.fault_of_key(
            "is a fall-cone determination, and a demonstration has no simulated cone",
            "cup and thread determinations",
            "[[specimen.liquid]] rows with drops, or `tarecup work` to compute this file",
        );
    }
    let (liquid_not_obtainable, plastic_not_obtainable) = not_obtainable(table);
    let list = |key: &str, name: &str, known: &[&str]| table.get(key).map(|e| e.tables(name, known)).unwrap_or_default();
    let liquid = rows::liquid(&list("liquid", "liquid", keys::LIQUID), mode);
    let cone = match mode {
        Mode::Work => rows::cone(&list("cone", "cone", keys::CONE), mode),
        Mode::Demo => Some(Vec::new()),
    };
    let plastic = rows::weighed(&list("plastic", "plastic", keys::WEIGHED), mode);
    let natural = rows::weighed(&list("natural", "natural", keys::WEIGHED), mode);
    rows::each_container_once(table);
    nothing_to_do(table);
    // Everything is read before anything is missed, so that all faults are told.
    let method = table.get("method").and_then(|e| known_method(&e, methods));
    let (description, preparation) = (words("description"), words("preparation"));
    let (passing_75um_percent, clay_percent) = (percent("passing_75um_percent"), percent("clay_percent"));
    let oven_dried = table.get("liquid_limit_oven_dried").and_then(|e| e.number(1.0..=1_000.0, "percent of dry mass"));
    let bench = table.get("bench").and_then(|e| e.name());
    let (id, natural, liquid, cone, plastic) = (id?, natural?, liquid?, cone?, plastic?);
    Some(ScenarioSpecimen {
        id,
        at: table.place(),
        method,
        description,
        preparation,
        bench,
        natural,
        liquid_not_obtainable,
        plastic_not_obtainable,
        passing_75um_percent,
        clay_percent,
        liquid_limit_oven_dried: oven_dried,
        cone,
        liquid,
        plastic,
    })
}

fn id(table: &Table<'_>, above: &mut BTreeMap<SpecimenId, Place>) -> Option<SpecimenId> {
    let entry = table.need("id", "the specimen's number", "id = \"S-101\" below [[specimen]]")?;
    let id: SpecimenId = entry.name()?;
    if let Some(first) = above.get(&id) {
        let says = format!("is {}, as the specimen of line {}", quote(id.as_str()), first.line);
        entry.fault(&says, "a number of its own for each specimen", "another number, or one [[specimen]] with all its rows");
        return None;
    }
    above.insert(id.clone(), table.place());
    Some(id)
}

/// Which limit cannot be obtained, with the reason.
fn not_obtainable(table: &Table<'_>) -> (Option<String>, Option<String>) {
    let Some(entry) = table.get("not_obtainable") else {
        if let Some(because) = table.get("because") {
            let says = "gives a reason, but nothing is said to be not obtainable";
            because.fault_of_key(says, "not_obtainable beside it", "not_obtainable = \"plastic\" or \"liquid\"");
        }
        return (None, None);
    };
    let try_this = "because = \"threads crumble at every water content\", or what was seen";
    let because = table.need("because", "the reason why it cannot be obtained", try_this).and_then(|e| e.words());
    let choices = [("liquid", true), ("plastic", false)];
    let said: Vec<bool> = entry.one_or_list().iter().filter_map(|e: &Entry<'_>| e.one_of(&choices)).collect();
    let reason = |limit: bool| because.clone().filter(|_| said.contains(&limit));
    (reason(true), reason(false))
}

fn nothing_to_do(table: &Table<'_>) {
    if !["liquid", "plastic", "natural", "not_obtainable", "cone"].iter().any(|k| table.get(k).is_some()) {
        let expected = "liquid, cone, plastic or natural determinations, or not_obtainable";
        table.fault("has no determination", expected, "[[specimen.liquid]] and [[specimen.plastic]] rows below it");
    }
}

impl LiquidRow {
    /// Drops per second at which a demonstration turns the cup.
    pub fn rate(&self) -> f64 {
        self.rate_per_s.unwrap_or(defaults::RATE_PER_S)
    }
}
