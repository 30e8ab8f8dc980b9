//! Whether a container was dry when it was weighed.

use super::{Worked, container_text, facts, hold};
use crate::limits::CheckRow;
use crate::method::Drying;
use crate::quantity::Mass;
use crate::sheet::Trial;
use crate::soil::determined::Water;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let drying = &worked.method.drying;
    for t in worked.active().filter(|t| !matches!(t.water, Water::Wrong(_))) {
        let Some(hours) = oven_hours(t.trial) else { continue };
        if hours >= drying.hours || constant(t.trial, drying) {
            continue;
        }
        let clock = match t.trial.dry.last() {
            Some(last) if !last.oven_recorded => ", counted from the wet weighing because no oven record was made",
            _ => "",
        };
        let says = format!(
            "{} was in the oven for {hours:.1} h{clock}; the method asks for {} h, or for a change below {} % over {} h more. Put it back and weigh it again.",
            container_text(t.trial),
            drying.hours,
            drying.constant_percent,
            drying.constant_hours
        );
        rows.push(hold("not_dry", &t.about, says, facts(t.trial)));
    }
}

/// The longest time in the oven that is known of a container's dry weighings.
pub(super) fn oven_hours(trial: &Trial) -> Option<f64> {
    let known = trial.dry.iter().filter_map(|d| d.oven_hours).filter(|h| h.is_finite());
    known.reduce(f64::max)
}

/// Change between the last two dry weighings, percent of the dry soil (of
/// all that was weighed while the tare is owed). Positive: it lost mass.
pub(super) fn last_change_percent(trial: &Trial) -> Option<f64> {
    let [.., before, last] = trial.dry.as_slice() else { return None };
    let soil = last.mass - trial.tare.unwrap_or(Mass::ZERO);
    (soil > Mass::ZERO).then(|| 100.0 * (before.mass - last.mass).grams() / soil.grams())
}

/// The last two dry weighings prove constant mass: the change is small
/// enough, after long enough back in the oven.
fn constant(trial: &Trial, drying: &Drying) -> bool {
    let back = trial.dry.last().and_then(|d| d.since_previous_hours).is_some_and(|h| h >= drying.constant_hours);
    back && last_change_percent(trial).is_some_and(|c| c.abs() < drying.constant_percent)
}
