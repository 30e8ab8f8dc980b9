//! The cup dropped too fast or too slowly.

use super::{Worked, facts, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use crate::soil::stats;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let [low, high] = worked.method.liquid.rate_per_s;
    for t in worked.of(Kind::Liquid) {
        let rates = t.trial.closures.iter().filter_map(|c| c.rate_per_s).filter(|r| r.is_finite());
        let Some((slowest, fastest)) = stats::range(rates) else { continue };
        let (rate, remedy) = if slowest < low {
            (slowest, "turn faster")
        } else if fastest > high {
            (fastest, "turn slower")
        } else {
            continue;
        };
        let says = format!(
            "{rate:.2} drops per second, the method asks for {low} to {high}; {remedy}, or look at the motor's speed, before the next count."
        );
        rows.push(note("rate", &t.about, says, facts(t.trial)));
    }
}
