//! A line that runs the wrong way. Sandy, nearly non-plastic soil can do it;
//! exchanged containers do it more often.

use super::{LIQUID_LIMIT, Worked, hold};
use crate::limits::CheckRow;
use crate::method::Axes;
use crate::soil::flow::Across;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(line) = worked.line.filter(|line| !line.across().behaves(line.slope())) else { return };
    let (per, should, of) = match line.across() {
        Across::Drops => ("tenfold number of drops", "close at fewer drops", "drops"),
        Across::Depth(Axes::Linear) => ("millimetre of penetration", "let the cone deeper in", "penetrations"),
        Across::Depth(Axes::Log) => ("tenfold penetration", "let the cone deeper in", "penetrations"),
    };
    let says = format!(
        "the water content changes by {:+.1} % per {per}; wetter paste should {should}. Look for exchanged containers or {of}. Sandy, nearly non-plastic soil can behave so: then answer this.",
        line.slope()
    );
    rows.push(hold("slope", LIQUID_LIMIT, says, worked.facts_of(worked.method.limit_kind())));
}
