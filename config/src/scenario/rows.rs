//! Rows of a specimen: what was counted and weighed.

use super::Mode;
use crate::fault::{Place, Placed, quote};
use crate::reader::{Entry, Table};
use std::collections::BTreeMap;
use tarecup_core::names::ContainerId;
use tarecup_core::quantity::Mass;

/// Beyond this no moisture container goes: 60 kg.
const HEAVIEST: Mass = Mass::from_ug(60_000_000_000);
/// Most drops that anybody counts.
const MOST_DROPS: u32 = 500;
/// No cone goes deeper than its cup, millimetres.
const DEEPEST: f64 = 60.0;
/// Water contents beyond this are not soil's, percent of dry mass.
const WETTEST: f64 = 2_000.0;

/// A liquid determination.
#[derive(Clone, Debug, PartialEq)]
pub struct LiquidRow {
    /// Drops of each closure of the paste, in order; at least one.
    pub drops: Vec<Placed<u32>>,
    /// Drops per second, where the file says.
    pub rate_per_s: Option<f64>,
    /// The slice.
    pub weighed: Weighed,
}

/// A determination by the cone.
#[derive(Clone, Debug, PartialEq)]
pub struct ConeRow {
    /// Penetrations of the paste, millimetres, in order; at least one.
    pub penetration_mm: Vec<Placed<f64>>,
    /// The slice.
    pub weighed: Weighed,
}

/// A container with soil whose water content is determined.
#[derive(Clone, Debug, PartialEq)]
pub struct Weighed {
    /// Where its table begins.
    pub at: Place,
    /// The container; always there in [`Mode::Demo`].
    pub container: Option<ContainerId>,
    /// The masses, or the water content itself.
    pub water: Water,
    /// A person set it aside, because …
    pub set_aside: Option<String>,
}

/// What is known of the water content.
#[derive(Clone, Debug, PartialEq)]
pub enum Water {
    /// Three masses or more.
    Masses(Masses),
    /// Percent of dry mass, from a paper sheet without masses.
    Percent(f64),
}

/// The masses of one container.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Masses {
    /// Empty.
    pub tare: Placed<Mass>,
    /// With wet soil.
    pub wet: Placed<Mass>,
    /// With dried soil, in the order weighed; at least one.
    pub dry: Vec<Placed<Mass>>,
}

/// Reads all rows even when one is wrong; `None` when any was.
pub(super) fn liquid(tables: &[Table<'_>], mode: Mode) -> Option<Vec<LiquidRow>> {
    let rows: Vec<Option<LiquidRow>> = tables.iter().take_while(|t| !t.reading.is_full()).map(|t| liquid_row(t, mode)).collect();
    rows.into_iter().collect()
}

pub(super) fn weighed(tables: &[Table<'_>], mode: Mode) -> Option<Vec<Weighed>> {
    let rows: Vec<Option<Weighed>> = tables.iter().take_while(|t| !t.reading.is_full()).map(|t| weighed_row(t, mode)).collect();
    rows.into_iter().collect()
}

pub(super) fn cone(tables: &[Table<'_>], mode: Mode) -> Option<Vec<ConeRow>> {
    let rows: Vec<Option<ConeRow>> = tables.iter().take_while(|t| !t.reading.is_full()).map(|t| cone_row(t, mode)).collect();
    rows.into_iter().collect()
}

fn cone_row(table: &Table<'_>, mode: Mode) -> Option<ConeRow> {
    let try_this = "penetration_mm = 19.8, or [19.7, 19.9] for two penetrations of one paste";
    let read = table.need("penetration_mm", "how deep the cone went", try_this).map(|e| e.one_or_list()).unwrap_or_default();
    let one = |e: &Entry<'_>| e.number(0.1..=DEEPEST, "millimetres of penetration").map(|value| Placed { value, at: e.place() });
    let depths: Vec<Placed<f64>> = read.iter().filter_map(one).collect();
    let weighed = weighed_row(table, mode)?;
    (!depths.is_empty() && depths.len() == read.len()).then_some(ConeRow { penetration_mm: depths, weighed })
}

fn liquid_row(table: &Table<'_>, mode: Mode) -> Option<LiquidRow> {
    let drops =
        table.need("drops", "the drops at which the groove closed", "drops = 25, or [25, 26] for two closures of one paste");
    let drops = drops.map(|e| e.one_or_list()).unwrap_or_default();
    let one = |e: &Entry<'_>| e.whole(1..=MOST_DROPS, "drops").map(|value| Placed { value, at: e.place() });
    let counted: Vec<Placed<u32>> = drops.iter().filter_map(one).collect();
    let rate = table.get("rate_per_s").map(|e| e.number(0.1..=20.0, "drops per second"));
    let weighed = weighed_row(table, mode)?;
    let rate_per_s = match rate {
        Some(rate) => Some(rate?),
        None => None,
    };
    (!counted.is_empty() && counted.len() == drops.len()).then_some(LiquidRow { drops: counted, rate_per_s, weighed })
}

fn weighed_row(table: &Table<'_>, mode: Mode) -> Option<Weighed> {
    let percent = table.get("water_percent");
    let container = match (table.get("container"), mode) {
        (Some(entry), _) => Some(entry.name::<ContainerId>()),
        (None, Mode::Work) => None,
        (None, Mode::Demo) => {
            table.need("container", "the container's number", "container = \"C11\"");
            Some(None)
        }
    };
    let set_aside = table.get("set_aside").map(|e| e.words());
    let water = match percent {
        Some(entry) => water_percent(table, &entry, mode),
        None => masses(table, mode).map(Water::Masses),
    };
    let container = match container {
        Some(named) => Some(named?),
        None => None,
    };
    Some(Weighed { at: table.place(), container, water: water?, set_aside: set_aside.flatten() })
}

fn water_percent(table: &Table<'_>, entry: &Entry<'_>, mode: Mode) -> Option<Water> {
    if mode == Mode::Demo {
        let says = "cannot be weighed at a simulated balance";
        entry.fault_of_key(says, "tare_g, wet_g and dry_g", "the three masses, or `tarecup work` for a sheet without masses");
        return None;
    }
    if let Some(mass) = ["tare_g", "wet_g", "dry_g"].iter().find_map(|k| table.get(k)) {
        let says = "stands beside water_percent, and the two may disagree";
        mass.fault_of_key(says, "the masses or the water content", "taking water_percent out: it follows from the masses");
        return None;
    }
    entry.number(0.0..=WETTEST, "percent of dry mass").map(Water::Percent)
}

fn masses(table: &Table<'_>, mode: Mode) -> Option<Masses> {
    let instead = if mode == Mode::Work { ", or water_percent in place of the masses" } else { "" };
    let need = |key: &str, what: &str| table.need(key, what, &format!("{key} = 21.43 with the mass in grams{instead}"));
    let tare = need("tare_g", "the mass of the empty container").and_then(|e| e.grams(HEAVIEST));
    let wet = need("wet_g", "the mass with wet soil").and_then(|e| e.grams(HEAVIEST));
    let listed = need("dry_g", "the mass with dried soil").map(|e| e.one_or_list()).unwrap_or_default();
    let dry: Vec<Placed<Mass>> = listed.iter().filter_map(|e| e.grams(HEAVIEST)).collect();
    (!dry.is_empty() && dry.len() == listed.len()).then_some(Masses { tare: tare?, wet: wet?, dry })
}

/// One container cannot hold two things at once: within a specimen each is used once.
pub(super) fn each_container_once(specimen: &Table<'_>) {
    let mut used: BTreeMap<String, Place> = BTreeMap::new();
    for key in ["natural", "liquid", "cone", "plastic"] {
        for row in specimen.get(key).map(|e| e.subtables()).unwrap_or_default() {
            // What was set aside has set its container free.
            let Some(entry) = row.get("container").filter(|_| row.get("set_aside").is_none()) else { continue };
            let Some(name) = entry.quiet_text() else { continue };
            if let Some(first) = used.get(name) {
                let says = format!("is {}, which line {} of this specimen uses already", quote(name), first.line);
                entry.fault(&says, "each container once within a specimen", "the number of the container that was used");
            } else {
                used.insert(name.to_string(), entry.place());
            }
        }
    }
}
