//! The limits from worked determinations, by a method.

use super::determined::Determined;
use super::flow::{Across, FlowError, FlowLine, one_point};
use super::rounding::round;
use super::{DROPS_AT_LIMIT, stats};
use crate::limits::{LiquidLimit, PlasticLimit, PlasticityIndex};
use crate::method::{Axes, Device, Digits, LiquidHow, Method};
use crate::sheet::{Kind, Sheet};
use alloc::string::ToString;
use alloc::vec::Vec;

/// Confidence of the intervals in a result.
pub const CONFIDENCE: f64 = 0.95;

/// Why there is no liquid limit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum NoLiquid {
    /// A person stated that it cannot be obtained.
    Stated,
    /// So many usable trials are too few to compute anything.
    TooFew(usize),
    /// No line.
    Line(FlowError),
    /// The method asks for the one-point formula and gives no exponent.
    NoExponent,
    /// The method uses the cone and does not say which.
    NoCone,
    /// The value is no water content that a soil can have.
    OutOfReach(f64),
}

/// Trials that a limit needs: the method's number, and never fewer than the
/// arithmetic needs.
pub fn liquid_trials_needed(method: &Method) -> usize {
    let least = match method.liquid.how {
        LiquidHow::FlowLine | LiquidHow::Cone => 2,
        LiquidHow::OnePoint => 1,
    };
    least.max(method.liquid.trials as usize)
}

/// Thread containers that the plastic limit needs.
pub fn threads_needed(method: &Method) -> usize {
    1.max(method.plastic.containers as usize)
}

/// The liquid limit from all trials that count, and the line it lies on.
///
/// The interval given here is the classical Student interval: for a point on
/// the line, or by one point, for a mean.
///
/// # Errors
/// See [`NoLiquid`].
pub fn liquid(sheet: &Sheet, trials: &[Determined], method: &Method) -> Result<(LiquidLimit, Option<FlowLine>), NoLiquid> {
    if sheet.liquid_not_obtainable.is_some() {
        return Err(NoLiquid::Stated);
    }
    let points: Vec<(f64, f64)> = trials.iter().filter_map(Determined::liquid_point).collect();
    let (limit, line) = match method.liquid.how {
        LiquidHow::FlowLine => by_line(&points, Across::Drops, method)?,
        LiquidHow::Cone => {
            let axes = method.cone.as_ref().ok_or(NoLiquid::NoCone)?.axes;
            by_line(&points, Across::Depth(axes), method)?
        }
        LiquidHow::OnePoint => (by_one_point(&points, method)?, None),
    };
    if limit.value.is_finite() && limit.value > 0.0 { Ok((limit, line)) } else { Err(NoLiquid::OutOfReach(limit.value)) }
}

/// Drops or millimetres at which the limit is read off the line.
pub fn reading_at_limit(method: &Method) -> f64 {
    match (method.device(), &method.cone) {
        (Device::Cone, Some(cone)) => cone.at_mm,
        _ => DROPS_AT_LIMIT,
    }
}

fn by_line(points: &[(f64, f64)], across: Across, method: &Method) -> Result<(LiquidLimit, Option<FlowLine>), NoLiquid> {
    if points.len() < 2 {
        return Err(NoLiquid::TooFew(points.len()));
    }
    let line = FlowLine::fit_across(points, across).map_err(NoLiquid::Line)?;
    let at = reading_at_limit(method);
    let value = line.at(at);
    let linear = across == Across::Depth(Axes::Linear);
    let limit = LiquidLimit {
        value,
        rounded: report(value, method),
        u: line.u_at(at),
        interval_95: line.interval(at, CONFIDENCE),
        u_from: None,
        interval_95_classical: None,
        points: points.len() as u32,
        slope_per_decade: (!linear).then(|| line.slope()),
        slope_per_mm: linear.then(|| line.slope()),
        residual_sd: line.residual_sd(),
        how: if across == Across::Drops { "flow line".to_string() } else { "cone".to_string() },
    };
    Ok((limit, Some(line)))
}

fn by_one_point(points: &[(f64, f64)], method: &Method) -> Result<LiquidLimit, NoLiquid> {
    let exponent = method.liquid.exponent.filter(|e| e.is_finite()).ok_or(NoLiquid::NoExponent)?;
    if points.is_empty() {
        return Err(NoLiquid::TooFew(0));
    }
    let limit = |&(drops, water): &(f64, f64)| one_point(drops, water, exponent_for(drops, water, exponent, method));
    let limits: Vec<f64> = points.iter().map(limit).collect();
    let value = stats::mean(&limits).ok_or(NoLiquid::OutOfReach(f64::INFINITY))?;
    let u = stats::mean_uncertainty(&limits);
    let half = u.and_then(|u| Some(u * super::student::two_sided(CONFIDENCE, limits.len() as u64 - 1)?));
    Ok(LiquidLimit {
        value,
        rounded: report(value, method),
        u,
        interval_95: half.filter(|h| h.is_finite()).map(|h| [value - h, value + h]),
        u_from: None,
        interval_95_classical: None,
        slope_per_mm: None,
        points: limits.len() as u32,
        slope_per_decade: None,
        residual_sd: None,
        how: "one point".to_string(),
    })
}

/// The exponent for a trial: a method may have another one for wetter soils.
pub fn exponent_for(drops: f64, water: f64, exponent: f64, method: &Method) -> f64 {
    let wet = one_point(drops, water, exponent) >= 50.0;
    method.liquid.exponent_from_50_percent.filter(|e| wet && e.is_finite()).unwrap_or(exponent)
}

/// The plastic limit: mean of the thread determinations, `u = sd/√n`. `None`
/// when stated not obtainable or when no determination is finished.
pub fn plastic(sheet: &Sheet, trials: &[Determined], method: &Method) -> Option<PlasticLimit> {
    if sheet.plastic_not_obtainable.is_some() {
        return None;
    }
    let waters = waters(trials, Kind::Thread);
    let value = stats::mean(&waters)?;
    let u = stats::mean_uncertainty(&waters);
    Some(PlasticLimit { value, rounded: report(value, method), u, interval_95: None, u_from: None, points: waters.len() as u32 })
}

/// Mean natural water content.
pub fn natural(trials: &[Determined]) -> Option<f64> {
    stats::mean(&waters(trials, Kind::Natural))
}

/// Water contents of the determinations of a kind that count.
pub fn waters(trials: &[Determined], kind: Kind) -> Vec<f64> {
    trials.iter().filter(|t| t.counts_as(kind)).filter_map(Determined::water).collect()
}

/// The plasticity index, or that there is none.
///
/// Non-plastic when either limit was stated not obtainable, or when the
/// plastic limit is not below the liquid limit, compared as the method says
/// (T 90-16, section 7). What is uncertain in it comes later.
pub fn index(sheet: &Sheet, ll: Option<&LiquidLimit>, pl: Option<&PlasticLimit>, method: &Method) -> PlasticityIndex {
    let non_plastic = PlasticityIndex { non_plastic: true, ..PlasticityIndex::default() };
    if sheet.liquid_not_obtainable.is_some() || sheet.plastic_not_obtainable.is_some() {
        return non_plastic;
    }
    let (Some(ll), Some(pl)) = (ll, pl) else { return PlasticityIndex::default() };
    if not_below(ll, pl, method.non_plastic.compare) {
        return non_plastic;
    }
    let value = ll.value - pl.value;
    let rounded = match method.rounding.index_from {
        Digits::Rounded => ll.rounded - pl.rounded,
        Digits::Unrounded => value,
    };
    PlasticityIndex { value: Some(value), rounded: Some(report(rounded, method)), u: None, interval_95: None, non_plastic: false }
}

/// The plastic limit is not below the liquid limit.
pub fn not_below(ll: &LiquidLimit, pl: &PlasticLimit, compare: Digits) -> bool {
    match compare {
        Digits::Rounded => pl.rounded >= ll.rounded,
        Digits::Unrounded => pl.value >= ll.value,
    }
}

fn report(value: f64, method: &Method) -> f64 {
    round(value, method.rounding.decimals, method.rounding.tie)
}
