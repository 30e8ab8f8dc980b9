//! A count that may have lost drops.

use super::{Worked, facts, hold, list_text, note};
use crate::limits::CheckRow;
use crate::sheet::{Closure, Kind};
use crate::soil::determined::counting;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.of(Kind::Liquid) {
        let counting = counting(&t.trial.closures, worked.method.liquid.closure_counts);
        let (why, earlier) = (reasons(counting), reasons(&t.trial.closures));
        if !why.is_empty() {
            let says = format!(
                "the count was interrupted ({}), so drops may be missing from it; answer if the number was seen to be right, else count again and set this trial aside.",
                list_text(&why)
            );
            rows.push(hold("interrupted", &t.about, says, facts(t.trial)));
        } else if !earlier.is_empty() {
            let says = format!(
                "an earlier closure was interrupted ({}); its drops do not enter the limit, but do not judge the agreement of closures by it.",
                list_text(&earlier)
            );
            rows.push(note("interrupted", &t.about, says, facts(t.trial)));
        }
    }
}

fn reasons(closures: &[Closure]) -> Vec<String> {
    closures.iter().filter_map(|c| c.interrupted.clone()).collect()
}
