//! A plastic limit that hardly belongs to its liquid limit, by what this
//! laboratory's own soils show: threads of another specimen give lines and means
//! that are perfect by themselves.
//!
//! Soils of one region lie along the A-line, and scatter about it the more the
//! wetter they are; so what is compared is the plasticity index as a share of
//! that of the A-line.

use super::{PLASTICITY_INDEX, Worked, note};
use crate::beside::Beside;
use crate::limits::CheckRow;
use crate::sheet::Kind;
use crate::soil::chart::a_line_ratio;
use crate::soil::student;
use alloc::format;
use alloc::vec::Vec;

/// Specimens in the record before it says anything of a new one (our own choice, no source).
const FROM: u64 = 8;
/// Honest pairs are told so once in a hundred times (our own choice, no source).
const CONFIDENCE: f64 = 0.99;
/// Exchanged must be ten times likelier than not, as a difference of chi squares 2 ln 10 (our own choice, no source).
const LIKELIER: f64 = 4.6;
/// Threads rolled within this time of each other can be mixed up: a working day (common practice, no source).
const A_DAY_US: i64 = 12 * crate::stamp::HOUR_US;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let (Some(ll), Some(pl)) = (worked.liquid.map(|l| l.value), worked.plastic.map(|p| p.value)) else { return };
    let pairs = &worked.laboratory.pairs;
    let Some(own) = pairs.predicted(ll, FROM) else { return };
    let facts = || worked.facts_of(Kind::Thread);
    if let Some((other, likelier)) = better(worked, ll, pl) {
        let says = format!(
            "with the plastic limits of this specimen ({pl:.1}) and of {} exchanged, both would suit their liquid limits better than now, some {likelier:.0} times likelier by this laboratory's own soils. Look whether the threads of the two were mixed up; else answer this.",
            other.specimen
        );
        return rows.push(note("pairing", PLASTICITY_INDEX, says, facts()));
    }
    let Some(ratio) = a_line_ratio(ll, pl) else { return };
    let off = (ratio - own.mean).abs() / own.sd;
    if student::two_sided(CONFIDENCE, own.freedom).is_some_and(|t| off > t) {
        let says = format!(
            "a plastic limit of {pl:.1} is improbable beside a liquid limit of {ll:.1}: the plasticity index is {ratio:.2} times that of the A-line, where this laboratory's own soils have {:.2}, give or take {:.2}. Look whether the threads are of this specimen; else answer this.",
            own.mean, own.sd
        );
        rows.push(note("pairing", PLASTICITY_INDEX, says, facts()));
    }
}

/// The specimen tested beside this one with which an exchange of threads would suit both.
fn better<'a>(worked: &Worked<'a>, ll: f64, pl: f64) -> Option<(&'a Beside, f64)> {
    let pairs = &worked.laboratory.pairs;
    let mine = threads_at(worked)?;
    let near: Vec<&Beside> =
        worked.laboratory.beside.iter().filter(|b| b.threads_at_utc_us.is_some_and(|at| (at - mine).abs() < A_DAY_US)).collect();
    let off = |ll: f64, pl: f64| {
        let (p, ratio) = (pairs.predicted(ll, FROM)?, a_line_ratio(ll, pl)?);
        Some(libm::pow((ratio - p.mean) / p.sd, 2.0))
    };
    let gain = |b: &&'a Beside| {
        let (l, p) = (b.liquid?, b.plastic?);
        Some((*b, off(ll, pl)? + off(l, p)? - off(ll, p)? - off(l, pl)?))
    };
    // Of many neighbours one is likelier by chance alone.
    let needed = LIKELIER + 2.0 * libm::log(near.len().max(1) as f64);
    let best = near.iter().filter_map(gain).max_by(|a, b| a.1.total_cmp(&b.1))?;
    (best.1 > needed).then(|| (best.0, libm::exp(best.1.min(20.0) / 2.0)))
}

/// When the last threads were weighed wet.
fn threads_at(worked: &Worked) -> Option<i64> {
    worked.of(Kind::Thread).filter_map(|t| t.trial.at_utc_us).max()
}
