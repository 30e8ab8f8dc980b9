//! One determination, worked as far as its own masses and drops allow.

use super::water::{WaterError, water_percent};
use crate::limits::TrialRow;
use crate::method::{ClosureCounts, Method};
use crate::quantity::Mass;
use crate::sheet::{Closure, Kind, Penetration, Sheet, Trial};
use crate::stamp;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// A typed water content beyond this is a slip: even peat holds some two
/// thousand percent (common practice, no source), and sums stay finite.
const MOST_WATER_PERCENT: f64 = 100_000.0;

/// What is known of a determination's water content.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Water {
    /// Percent of dry mass, from the masses or as given.
    Known(f64),
    /// Masses are still to come.
    Open,
    /// The masses contradict each other.
    Wrong(WaterError),
    /// The value given in place of the masses is no water content.
    NotAWater(f64),
}

/// A determination of the sheet with what follows from it alone.
#[derive(Clone, Debug)]
pub struct Determined<'a> {
    /// As it stands in the sheet.
    pub trial: &'a Trial,
    /// How checks name it: `liquid 1`.
    pub about: String,
    /// It counts: no person set it aside, its limit was not stated to be not
    /// obtainable, and it was made with the method's device.
    pub active: bool,
    /// It would count, but was made with the cup where the method has the cone, or the other way round.
    pub other_device: bool,
    /// Kind of determination that the liquid limit rests on.
    pub limit_kind: Kind,
    /// Drops that count by the method.
    pub drops: Option<f64>,
    /// Penetration that counts, millimetres.
    pub penetration: Option<f64>,
    /// Its water content.
    pub water: Water,
}

/// Works every determination of a sheet, in the sheet's order.
pub fn determine<'a>(sheet: &'a Sheet, method: &Method) -> Vec<Determined<'a>> {
    let given_up = |kind| match kind {
        Kind::Liquid | Kind::Cone => sheet.liquid_not_obtainable.is_some(),
        Kind::Thread => sheet.plastic_not_obtainable.is_some(),
        Kind::Natural => false,
    };
    let limit_kind = method.limit_kind();
    let one = |trial: &'a Trial| {
        let stands = trial.set_aside.is_none() && !given_up(trial.kind);
        let other = matches!(trial.kind, Kind::Liquid | Kind::Cone) && trial.kind != limit_kind;
        Determined {
            trial,
            about: about(trial.kind, trial.no),
            active: stands && !other,
            other_device: stands && other,
            limit_kind,
            drops: drops(&trial.closures, method.liquid.closure_counts),
            penetration: penetration(&trial.penetrations),
            water: water(trial),
        }
    };
    sheet.trials.iter().map(one).collect()
}

/// How a determination is named in checks and answers.
pub fn about(kind: Kind, no: u32) -> String {
    let kind = match kind {
        Kind::Liquid => "liquid",
        Kind::Thread => "thread",
        Kind::Natural => "natural",
        Kind::Cone => "cone",
    };
    format!("{kind} {no}")
}

/// The closures whose drops count.
pub fn counting(closures: &[Closure], how: ClosureCounts) -> &[Closure] {
    match how {
        ClosureCounts::Last => &closures[closures.len().saturating_sub(1)..],
        ClosureCounts::Mean => closures,
    }
}

/// Drops of a trial; `None` without a count or with a count of nothing.
fn drops(closures: &[Closure], how: ClosureCounts) -> Option<f64> {
    let counting = counting(closures, how);
    if counting.is_empty() || counting.iter().any(|c| c.drops == 0) {
        return None;
    }
    let sum: f64 = counting.iter().map(|c| f64::from(c.drops)).sum();
    Some(sum / counting.len() as f64)
}

/// Mean penetration of a paste; `None` without one or with one that is no depth.
fn penetration(of_paste: &[Penetration]) -> Option<f64> {
    let depths: Vec<f64> = of_paste.iter().map(|p| p.mm).collect();
    let sound = depths.iter().all(|mm| mm.is_finite() && *mm > 0.0);
    if sound { super::stats::mean(&depths) } else { None }
}

/// Masses come first; a given value stands in for masses that are not there.
fn water(trial: &Trial) -> Water {
    let dry = trial.dry.last().map(|d| d.mass);
    if let (Some(tare), Some(wet), Some(dry)) = (trial.tare, trial.wet, dry) {
        return water_percent(tare, wet, dry).map_or_else(Water::Wrong, Water::Known);
    }
    if let Some(given) = trial.water_percent {
        let believable = (0.0..=MOST_WATER_PERCENT).contains(&given);
        return if believable { Water::Known(given) } else { Water::NotAWater(given) };
    }
    early(trial.tare, trial.wet, dry).map_or(Water::Open, Water::Wrong)
}

/// A contradiction that shows before the last mass has come: better said on
/// the first day than after the oven.
fn early(tare: Option<Mass>, wet: Option<Mass>, dry: Option<Mass>) -> Option<WaterError> {
    match (tare, wet, dry) {
        (Some(tare), _, _) if tare < Mass::ZERO => Some(WaterError::NegativeTare { tare }),
        (Some(tare), Some(wet), _) if wet <= tare => Some(WaterError::WetNotAboveTare { tare, wet }),
        (Some(tare), _, Some(dry)) if dry <= tare => Some(WaterError::DryNotAboveTare { tare, dry }),
        (_, Some(wet), Some(dry)) if dry > wet => Some(WaterError::DryAboveWet { wet, dry }),
        _ => None,
    }
}

impl Determined<'_> {
    /// Of this kind and counting.
    pub fn counts_as(&self, kind: Kind) -> bool {
        self.active && self.trial.kind == kind
    }

    /// Water content, when it is known.
    pub fn water(&self) -> Option<f64> {
        match self.water {
            Water::Known(w) => Some(w),
            _ => None,
        }
    }

    /// Drops or millimetres at which the paste was found.
    pub fn reading(&self) -> Option<f64> {
        match self.limit_kind {
            Kind::Cone => self.penetration,
            _ => self.drops,
        }
    }

    /// Drops (of a cone method: millimetres) and water content, when both are known and the trial counts.
    pub fn liquid_point(&self) -> Option<(f64, f64)> {
        if self.counts_as(self.limit_kind) { Some((self.reading()?, self.water()?)) } else { None }
    }

    /// The row of the result. `used`: it entered a limit; `water_u`: what the balance leaves uncertain.
    pub fn row(&self, used: bool, water_u: Option<f64>, method: &Method) -> TrialRow {
        let trial = self.trial;
        TrialRow {
            kind: trial.kind,
            no: trial.no,
            drops: self.drops,
            closures: trial.closures.iter().map(|c| c.drops).collect(),
            rate_per_s: rate(counting(&trial.closures, method.liquid.closure_counts)),
            penetration_mm: self.penetration,
            penetrations_mm: trial.penetrations.iter().map(|p| p.mm).filter(|mm| mm.is_finite()).collect(),
            container: trial.container.clone(),
            tare_g: trial.tare.map(Mass::grams),
            wet_g: trial.wet.map(Mass::grams),
            dry_g: trial.dry.last().map(|d| d.mass.grams()),
            water_percent: self.water(),
            water_u,
            used,
            set_aside: trial.set_aside.clone(),
            typed: trial.typed || trial.closures.iter().any(|c| c.typed) || trial.penetrations.iter().any(|p| p.typed),
            by: trial.by.clone(),
            balance: trial.balance.clone(),
            cup: trial.cup.clone(),
            at: trial.at_utc_us.map(stamp::rfc3339),
        }
    }
}

/// Mean of the rates that are known.
fn rate(closures: &[Closure]) -> Option<f64> {
    let rates: Vec<f64> = closures.iter().filter_map(|c| c.rate_per_s).filter(|r| r.is_finite()).collect();
    super::stats::mean(&rates)
}
