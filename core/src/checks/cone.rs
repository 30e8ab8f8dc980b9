//! Cone determinations in a sheet that is worked by a cup method.

use super::{Worked, facts, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.of(Kind::Cone) {
        let says =
            "the method of this specimen is the cup's; cone and cup points are never mixed in one line, so this one is not used.";
        rows.push(note("cone", &t.about, says.into(), facts(t.trial)));
    }
}
