//! Scatter beyond what this laboratory's own record shows. Notes, since the
//! record moves with every finished specimen.

use super::{LIQUID_LIMIT, PLASTIC_LIMIT, Worked, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use crate::soil::flow::FlowLine;
use crate::soil::limits::waters;
use crate::soil::stats;
use crate::soil::uncertainty::{Pooled, usual};
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// Careful work is told so once in two hundred times (our own choice, no source).
const RARE: f64 = 0.005;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    line(worked, rows);
    threads(worked, rows);
}

fn line(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let (Some(line), Some(stated)) = (worked.line, worked.method.uncertainty.as_ref()) else { return };
    let Some(sd) = line.residual_sd().filter(|_| !said(rows, "scatter")) else { return };
    let freedom = (line.points() as u64).saturating_sub(2);
    let own = Pooled { sum_sq: sd * sd * freedom as f64, df: freedom };
    let usual = usual((stated.residual_sd, stated.residual_df), stated.history_from_df, worked.laboratory.lines);
    if !own.is_rarer_than(RARE, usual) {
        return;
    }
    let which = match furthest(worked) {
        Some((about, off)) => format!("{about} lies furthest from the line through the others, by {off:.2} %"),
        None => String::from("of three trials each fits the line through the other two as badly, so which one cannot be told"),
    };
    let says = format!(
        "the trials scatter about the line by {sd:.2} % water, this laboratory's usually by {:.2}; {which}. Look for an altered digit, soil spilt or water added after the count. Every trial is used as it is.",
        libm::sqrt(usual.variance())
    );
    rows.push(note("outlier", LIQUID_LIMIT, says, worked.facts_of(worked.method.limit_kind())));
}

/// The trial that lies furthest from the line through all others, from four trials on.
fn furthest(worked: &Worked) -> Option<(String, f64)> {
    let across = worked.line?.across();
    let points: Vec<_> = worked.of(worked.method.limit_kind()).filter_map(|t| Some((t, t.liquid_point()?))).collect();
    if points.len() < 4 {
        return None;
    }
    let off = |left_out: usize| {
        let others: Vec<(f64, f64)> = points.iter().enumerate().filter(|(n, _)| *n != left_out).map(|(_, p)| p.1).collect();
        let (reading, water) = points[left_out].1;
        let line = FlowLine::fit_across(&others, across).ok()?;
        Some((points[left_out].0.about.clone(), (water - line.at(reading)).abs()))
    };
    (0..points.len()).filter_map(off).max_by(|a, b| a.1.total_cmp(&b.1))
}

fn threads(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(stated) = worked.method.uncertainty.as_ref().filter(|_| !said(rows, "threads")) else { return };
    let waters: Vec<f64> = waters(worked.trials, Kind::Thread);
    let (Some(mean), Some((low, high))) = (stats::mean(&waters), stats::range(waters.iter().copied())) else { return };
    if waters.len() < 2 {
        return;
    }
    let sum_sq = waters.iter().map(|w| (w - mean) * (w - mean)).sum();
    let own = Pooled { sum_sq, df: waters.len() as u64 - 1 };
    let usual = usual((stated.thread_sd, stated.thread_df), stated.history_from_df, worked.laboratory.threads);
    // Ranges that no method minds are no matter, however even the record (half of the 1 % of `threads`, our own choice, no source).
    if own.is_rarer_than(RARE, usual) && high - low > 0.5 {
        let says = format!(
            "the thread containers lie between {low:.2} and {high:.2} %, further apart than this laboratory's are but once in two hundred times; repeat the plastic limit with fresh threads, or look for a slip in one mass."
        );
        rows.push(note("threads_apart", PLASTIC_LIMIT, says, worked.facts_of(Kind::Thread)));
    }
}

fn said(rows: &[CheckRow], check: &str) -> bool {
    rows.iter().any(|r| r.check == check)
}
