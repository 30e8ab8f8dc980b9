//! Trials from which no liquid limit can be computed, although there are enough.

use super::{LIQUID_LIMIT, Worked, hold};
use crate::limits::CheckRow;
use crate::method::Device;
use crate::soil::flow::FlowError;
use crate::soil::limits::NoLiquid;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let (name, says) = match worked.no_liquid {
        None | Some(NoLiquid::Stated | NoLiquid::TooFew(_)) => return,
        Some(NoLiquid::Line(FlowError::SameDrops)) => {
            let says = match worked.method.device() {
                Device::Cup => {
                    "no line can be drawn: every trial closed at the same drops. Look for a copied number; else add a trial with wetter or drier paste."
                }
                Device::Cone => {
                    "no line can be drawn: every trial has the same penetration. Look for a copied number; else add a trial with wetter or drier paste."
                }
            };
            ("same_drops", says.into())
        }
        Some(NoLiquid::Line(error)) => ("flow_line", format!("no line can be drawn: {error}.")),
        Some(NoLiquid::NoExponent) => (
            "exponent",
            "the method computes by one point and gives no exponent: add `exponent` under [liquid] in the method file.".into(),
        ),
        Some(NoLiquid::NoCone) => {
            ("no_cone", "the method uses the cone and does not say which: add [cone] to the method file.".into())
        }
        Some(NoLiquid::OutOfReach(value)) => (
            "flow_line",
            format!(
                "the trials lead to a liquid limit of {value:.1} %, which no soil has; look for exchanged masses or drops, or set a trial aside."
            ),
        ),
    };
    rows.push(hold(name, LIQUID_LIMIT, says, worked.facts_of(worked.method.limit_kind())));
}
