//! A point above the U-line of the plasticity chart.

use super::{PLASTICITY_INDEX, Worked, note};
use crate::limits::CheckRow;
use crate::soil::chart::above_u_line;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let (Some(ll), Some(pi)) = (worked.liquid, worked.index.rounded) else { return };
    if above_u_line(ll.rounded, pi) {
        let says = format!(
            "liquid limit {} with plasticity index {pi} lies above the U-line, where natural soils are hardly ever found; check masses, drops and which specimen the threads came from.",
            ll.rounded
        );
        rows.push(note("u_line", PLASTICITY_INDEX, says, Vec::new()));
    }
}
