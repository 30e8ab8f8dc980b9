//! Masses that no soil can have. The determination has no water content and
//! cannot be used.

use super::{Worked, facts, hold};
use crate::limits::CheckRow;
use crate::soil::determined::Water;
use crate::soil::water::WaterError;
use alloc::format;
use alloc::vec::Vec;

const REMEDY: &str = "No water content follows. Correct the mass, weigh again, or set the determination aside.";

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active() {
        let (check, says) = match t.water {
            Water::Wrong(error) => (name(error), format!("{error}. {REMEDY}")),
            Water::NotAWater(given) => ("water_value", format!("{given} % is given as water content, which is none. {REMEDY}")),
            Water::Known(_) | Water::Open => continue,
        };
        rows.push(hold(check, &t.about, says, facts(t.trial)));
    }
}

fn name(error: WaterError) -> &'static str {
    match error {
        WaterError::NegativeTare { .. } => "tare_below_zero",
        WaterError::WetNotAboveTare { .. } => "wet_below_tare",
        WaterError::DryNotAboveTare { .. } => "dry_below_tare",
        WaterError::DryAboveWet { .. } => "dry_above_wet",
    }
}
