//! Drops that lie too close together, or all on one side of 25.

use super::{LIQUID_LIMIT, Worked, drops_text, note};
use crate::limits::CheckRow;
use crate::method::LiquidHow;
use crate::sheet::Kind;
use crate::soil::{DROPS_AT_LIMIT, stats};
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let counted: Vec<f64> = worked.of(Kind::Liquid).filter_map(|t| t.drops).collect();
    let Some((least, most)) = stats::range(counted.iter().copied()) else { return };
    if counted.len() < 2 || worked.method.liquid.how != LiquidHow::FlowLine {
        return;
    }
    let facts = || worked.facts_of(Kind::Liquid);
    if let Some(wanted) = worked.method.liquid.spread_at_least.filter(|&s| most - least < f64::from(s)) {
        let says = format!(
            "the trials lie between {} and {} drops, the method asks for a spread of {wanted}; add a trial with wetter or drier paste.",
            drops_text(least),
            drops_text(most)
        );
        rows.push(note("spread", LIQUID_LIMIT, says, facts()));
    }
    let (low, high) = (least < DROPS_AT_LIMIT, most > DROPS_AT_LIMIT);
    if worked.method.liquid.both_sides && !(low && high) {
        let remedy = if high { "add water and mix well" } else { "let the paste dry by mixing, never add dry soil" };
        let says = format!(
            "the trials do not lie on both sides of 25 drops ({} to {}), so the limit is read beyond them; {remedy}, then count again.",
            drops_text(least),
            drops_text(most)
        );
        rows.push(note("both_sides", LIQUID_LIMIT, says, facts()));
    }
}
