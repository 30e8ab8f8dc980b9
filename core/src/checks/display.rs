//! So little soil that the balance's last digit alone moves the water content.

use super::{Worked, container_text, facts, note};
use crate::limits::CheckRow;
use crate::soil::water::display_uncertainty;
use alloc::format;
use alloc::vec::Vec;

/// Standard uncertainty from the display alone that is worth a word, percent
/// water. Our own choice, no source: a quarter of a percent is half of what
/// two thread containers are commonly asked to agree within.
const WORTH_A_WORD: f64 = 0.25;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let step = worked.method.liquid.balance_reads_g;
    for t in worked.active() {
        let (Some(water), Some(tare), Some(dry)) = (t.water(), t.trial.tare, t.trial.dry.last()) else { continue };
        let soil = (dry.mass - tare).grams();
        let u = display_uncertainty(water, soil, step);
        if u > WORTH_A_WORD && u.is_finite() {
            let says = format!(
                "{} holds only {soil} g of dry soil: a balance that shows {step} g makes its water content uncertain by {u:.2} %. Take a larger slice; look also for a mass in the wrong unit.",
                container_text(t.trial)
            );
            rows.push(note("display", &t.about, says, facts(t.trial)));
        }
    }
}
