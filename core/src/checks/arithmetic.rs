//! A paper sheet gives masses and a water content that do not agree.

use super::{Worked, facts, note};
use crate::limits::CheckRow;
use crate::soil::determined::Water;
use alloc::format;
use alloc::vec::Vec;

/// Sheets print one decimal; half of it and a little is rounding.
const ROUNDING_PERCENT: f64 = 0.06;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active() {
        let (Water::Known(water), Some(given)) = (t.water, t.trial.water_percent) else { continue };
        let differs = (water - given).abs() > ROUNDING_PERCENT || !given.is_finite();
        if differs {
            let says = format!(
                "the sheet says {given} % water, its masses give {water:.2} %; the masses are used. Look for a slip in the sheet's subtraction or an altered digit."
            );
            rows.push(note("arithmetic", &t.about, says, facts(t.trial)));
        }
    }
}
