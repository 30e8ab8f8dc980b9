//! A flow line that does not fall. Sandy, nearly non-plastic soil can do it;
//! exchanged containers do it more often.

use super::{LIQUID_LIMIT, Worked, hold};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(line) = worked.line.filter(|line| line.slope() >= 0.0) else { return };
    let says = format!(
        "the water content changes by {:+.1} % per tenfold number of drops; wetter paste should close at fewer drops. Look for exchanged containers or drops. Sandy, nearly non-plastic soil can behave so: then answer this.",
        line.slope()
    );
    rows.push(hold("slope", LIQUID_LIMIT, says, worked.facts_of(Kind::Liquid)));
}
