//! Fines that are organic by the liquid limit of the oven-dried soil.

use super::{LIQUID_LIMIT, Worked, note};
use crate::limits::CheckRow;
use crate::soil::chart;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(dried) = worked.sheet.liquid_limit_oven_dried else { return };
    let Some(limit) = worked.liquid else { return };
    if chart::organic(limit.value, dried).is_none() {
        return;
    }
    let cooler =
        worked.method.drying.note.as_deref().map_or(alloc::string::String::new(), |n| format!(" {}.", n.trim_end_matches('.')));
    let says = format!(
        "oven-dried first, the soil has a liquid limit of {dried} %, less than three quarters of {:.1} %: its fines are organic.{cooler} Look at which temperature the containers were dried.",
        limit.value
    );
    rows.push(note("organic", LIQUID_LIMIT, says, Vec::new()));
}
