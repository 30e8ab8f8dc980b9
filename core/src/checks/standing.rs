//! How long something stood before it was weighed: a slice after its count, a
//! container after the oven.

use super::{Worked, container_text, facts, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use crate::stamp::SECOND_US;
use alloc::format;
use alloc::vec::Vec;

const MINUTE_US: i64 = 60 * SECOND_US;
/// A container is cool enough to weigh no sooner than this after the oven (common practice, no source; that it is
/// cooled with its lid on before weighing: AASHTO T 265 `[pub]`).
const COOL_US: i64 = 10 * MINUTE_US;
/// Dried soil is weighed within this time, or kept in a desiccator (common practice, no source).
const DRY_US: i64 = 120 * MINUTE_US;
/// A slice is weighed within this time after its count (common practice, no source; the bench says so aloud after
/// as long).
const SLICE_US: i64 = 5 * MINUTE_US;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active() {
        let [_, wet, dry] = &t.trial.readings;
        let minutes = |us: i64| us / MINUTE_US;
        let container = container_text(t.trial);
        if let Some(us) = dry.after_us.filter(|us| (0..COOL_US).contains(us)) {
            let says = format!(
                "{container} was weighed {} min after it left the oven, too soon to be cool: a warm container reads low, and the water content comes out high. Let it cool with the lid on and weigh it again.",
                minutes(us)
            );
            rows.push(note("warm", &t.about, says, facts(t.trial)));
        }
        if let Some(us) = dry.after_us.filter(|us| *us > DRY_US) {
            let says = format!(
                "{container} stood {:.1} h between oven and weighing: dried soil takes up moisture from the air, unless it stood in a desiccator. Answer so, or put it back for an hour and weigh it again.",
                us as f64 / (60 * MINUTE_US) as f64
            );
            rows.push(note("stood_dry", &t.about, says, facts(t.trial)));
        }
        let slice = t.trial.kind == Kind::Liquid;
        if let Some(us) = wet.after_us.filter(|us| slice && *us > SLICE_US) {
            let says = format!(
                "the slice was weighed {} min after its count: wet soil loses water meanwhile. Weigh at once next time, and look whether its point lies below the line.",
                minutes(us)
            );
            rows.push(note("stood_wet", &t.about, says, facts(t.trial)));
        }
    }
}
