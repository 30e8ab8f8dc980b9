//! A person stated that a limit cannot be obtained.

use super::{LIQUID_LIMIT, PLASTIC_LIMIT, Worked, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let sheet = worked.sheet;
    let stated = [
        (LIQUID_LIMIT, Kind::Liquid, &sheet.liquid_not_obtainable, &sheet.plastic_not_obtainable),
        (PLASTIC_LIMIT, Kind::Thread, &sheet.plastic_not_obtainable, &sheet.liquid_not_obtainable),
    ];
    for (about, kind, own, other) in stated {
        let says = if let Some(because) = own {
            format!(
                "stated not obtainable: {because}. The soil is reported non-plastic, and determinations made for this limit are not used."
            )
        } else if other.is_some() && worked.of(kind).next().is_none() {
            "not determined: the other limit cannot be obtained, so the soil is non-plastic whatever this one would be.".into()
        } else {
            continue;
        };
        rows.push(note("not_obtainable", about, says, worked.facts_of(kind)));
    }
}
