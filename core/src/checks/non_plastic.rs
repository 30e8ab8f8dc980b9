//! The plastic limit is not below the liquid limit.

use super::{PLASTICITY_INDEX, Worked, note};
use crate::limits::CheckRow;
use crate::method::Digits;
use crate::soil::limits::not_below;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let (Some(ll), Some(pl)) = (worked.liquid, worked.plastic) else { return };
    let compare = worked.method.non_plastic.compare;
    if !not_below(ll, pl, compare) {
        return;
    }
    let compared = match compare {
        Digits::Rounded => format!("plastic limit {}, liquid limit {}, as reported", pl.rounded, ll.rounded),
        Digits::Unrounded => format!("plastic limit {:.2}, liquid limit {:.2}, unrounded", pl.value, ll.value),
    };
    let says = format!(
        "the plastic limit is not below the liquid limit ({compared}), so the soil is reported as non-plastic (NP). If that is a surprise, look whether containers of the two limits were exchanged."
    );
    rows.push(note("non_plastic", PLASTICITY_INDEX, says, Vec::new()));
}
