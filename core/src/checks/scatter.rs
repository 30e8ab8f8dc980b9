//! Trials that lie further from their line than careful work leaves them.

use super::{LIQUID_LIMIT, Worked, note};
use crate::limits::{CheckRow, Severity};
use crate::method::Device;
use crate::soil::uncertainty::{Pooled, usual};
use alloc::format;
use alloc::vec::Vec;

/// Residual standard deviation worth a word, percent water. Computed for this
/// project from 45 flow lines of one skilled operator: median 0.13, nine in
/// ten below 0.24, worst 0.38; two dry masses exchanged leave more than 0.5.
const WORTH_A_WORD: f64 = 0.5;
/// The same of the cone. Our own choice, no source: a published sheet of it, which was taken as good, leaves 0.60.
const WORTH_A_WORD_OF_THE_CONE: f64 = 1.0;

/// A laboratory whose own record scatters so is told by its uncertainties, not at every specimen: less often than
/// this, as uncertainties have it. Where the method makes a hold of it the record has no say.
const RARE: f64 = 0.01;

fn usual_here(worked: &Worked, sd: f64) -> bool {
    let lab = worked.laboratory.lines;
    let (Some(line), Some(stated)) = (worked.line, worked.method.uncertainty.as_ref()) else { return false };
    if lab.df == 0 || worked.method.severity.get("scatter") == Some(&Severity::Hold) {
        return false;
    }
    let freedom = (line.points() as u64).saturating_sub(2);
    let own = Pooled { sum_sq: sd * sd * freedom as f64, df: freedom };
    !own.is_rarer_than(RARE, usual((stated.residual_sd, stated.residual_df), stated.history_from_df, lab))
}

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(line) = worked.line else { return };
    let most = match worked.method.device() {
        Device::Cup => WORTH_A_WORD,
        Device::Cone => WORTH_A_WORD_OF_THE_CONE,
    };
    let Some(sd) = line.residual_sd().filter(|sd| *sd > most && !usual_here(worked, *sd)) else { return };
    let distance = |&(drops, water): &(f64, f64)| (water - line.at(drops)).abs();
    let points = worked.of(worked.method.limit_kind()).filter_map(|t| Some((t, t.liquid_point()?)));
    let Some((furthest, point)) = points.max_by(|a, b| distance(&a.1).total_cmp(&distance(&b.1))) else { return };
    let says = format!(
        "the trials scatter about the line by {sd:.2} % water, careful work stays below {most}; {} lies furthest off, by {:.2} %. Look for exchanged containers or an altered digit. Every trial is used as it is.",
        furthest.about,
        distance(&point)
    );
    rows.push(note("scatter", LIQUID_LIMIT, says, worked.facts_of(worked.method.limit_kind())));
}
