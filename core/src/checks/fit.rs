//! How well masses and drops fit together: what slips that are tried out are judged by.
//!
//! No check of its own. The scatter it measures against is what the method
//! states, not the laboratory's record: a hold may rest on it.

use super::Worked;
use crate::quantity::Mass;
use crate::sheet::Kind;
use crate::soil::flow::FlowLine;
use crate::soil::water::water_percent;
use alloc::vec::Vec;

/// Scatter where the method states none, percent water: pooled residual sd of 45 flow lines of one skilled
/// operator, and what ranges of three of his thread containers stand for `[calc]`.
const USUAL: (f64, f64) = (0.17, 0.28);
/// Mean square, in those of usual scatter, beyond which determinations do not belong together: with the 8 degrees of
/// freedom that methods state, careful work exceeds it once in a thousand times (F with 2 and 8) `[calc]`.
const NOT_TOGETHER: f64 = 18.5;
/// Below this they do: exceeded once in a hundred and fifty times (the same) `[calc]` …
const TOGETHER: f64 = 10.0;
/// … when it is also so much better than as they are (our own choice, no source).
const BETTER: f64 = 20.0;
/// More determinations than this are not tried out in pairs.
const MOST: usize = 24;

/// A determination with all it needs: a copy that slips can be tried out on.
#[derive(Clone, Copy, Debug)]
pub(super) struct Piece {
    pub kind: Kind,
    /// Drops or millimetres.
    pub reading: f64,
    /// Empty, wet, dry.
    pub masses: [Mass; 3],
}

/// The determinations of a sheet that have all their masses, with their places among `worked.trials`.
pub(super) fn pieces(worked: &Worked) -> Vec<(usize, Piece)> {
    let limit_kind = worked.method.limit_kind();
    let piece = |(n, t): (usize, &crate::soil::determined::Determined)| {
        let kind = t.trial.kind;
        let reading = if kind == limit_kind { t.reading()? } else { 0.0 };
        let masses = [t.trial.tare?, t.trial.wet?, t.trial.dry.last()?.mass];
        (t.active && kind != Kind::Natural).then_some((n, Piece { kind, reading, masses }))
    };
    let all: Vec<_> = worked.trials.iter().enumerate().filter_map(piece).collect();
    if all.len() > MOST { Vec::new() } else { all }
}

/// Mean square about line and mean in those of usual scatter; endless where masses are impossible or the line
/// runs the wrong way. `None` when there is nothing to judge by.
pub(super) fn misfit(worked: &Worked, pieces: &[(usize, Piece)]) -> Option<f64> {
    let across = worked.line.map(|l| l.across());
    let (mut line, mut threads) = (Vec::new(), Vec::new());
    for (_, p) in pieces {
        let [tare, wet, dry] = p.masses;
        let Ok(water) = water_percent(tare, wet, dry) else { return Some(f64::INFINITY) };
        if p.kind == Kind::Thread { threads.push(water) } else { line.push((p.reading, water)) }
    }
    let stated = worked.method.uncertainty.as_ref();
    let (of_line, of_threads) = stated.map_or(USUAL, |u| (u.residual_sd, u.thread_sd));
    let (mut sum, mut freedom) = (0.0, 0usize);
    if let (Some(across), true) = (across, line.len() > 2) {
        let fitted = FlowLine::fit_across(&line, across).ok()?;
        if !across.behaves(fitted.slope()) {
            return Some(f64::INFINITY);
        }
        sum += line.iter().map(|&(x, w)| libm::pow((w - fitted.at(x)) / of_line, 2.0)).sum::<f64>();
        freedom += line.len() - 2;
    }
    if threads.len() > 1 {
        let mean = threads.iter().sum::<f64>() / threads.len() as f64;
        sum += threads.iter().map(|w| libm::pow((w - mean) / of_threads, 2.0)).sum::<f64>();
        freedom += threads.len() - 1;
    }
    let mean = sum / freedom as f64;
    (freedom > 0 && !mean.is_nan()).then_some(mean)
}

/// Whether determinations do not belong together as they are, so that slips are worth trying out.
pub(super) fn apart(misfit: f64) -> bool {
    misfit > NOT_TOGETHER
}

/// Whether they do once something is put back.
pub(super) fn mends(tried: f64, now: f64) -> bool {
    tried < TOGETHER && tried * BETTER < now
}
