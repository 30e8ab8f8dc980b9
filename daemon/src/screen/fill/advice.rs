//! What the method and the counts so far suggest at a bench.

use super::super::view::{Advice, Paste, Water, WaterFrom};
use tarecup_core::checks::windows_missing;
use tarecup_core::lab::entities::Specimen;
use tarecup_core::method::Method;
use tarecup_core::sheet::Kind;
use tarecup_core::soil::DROPS_AT_LIMIT;
use tarecup_core::soil::flow::FlowLine;
use tarecup_core::soil::limits::{liquid_trials_needed, threads_needed};

/// Steepness of flow lines on two logarithmic scales: the exponent of the one-point method (ASTM D4318), and by
/// how much lines of other soils differ (common practice, no source).
const STEEPNESS: (f64, f64) = (0.121, 0.03);
/// Water content of a fine soil near its liquid limit where nothing is dried yet, percent, and ± (common practice, no source).
const USUAL: (f64, f64) = (40.0, 15.0);

/// Advice for a specimen in work.
pub fn advice(specimen: &Specimen, method: &Method, liquid: bool, owed: Option<u32>, paste_g: Option<String>) -> Advice {
    let active = |kind| specimen.trials.iter().filter(move |t| t.kind == kind && t.set_aside.is_none());
    let needed = |wanted: usize, done: usize| wanted.saturating_sub(done) as u32;
    let drops_of = |t: &tarecup_core::lab::entities::TrialRecord| {
        t.counts.last().and_then(|c| specimen.count(*c)).map(|c| f64::from(c.drops))
    };
    // The paste whose slice is owed will be a trial.
    let counted: Vec<f64> = active(Kind::Liquid).filter_map(drops_of).chain(owed.map(f64::from)).collect();
    let missing = windows_missing(&method.liquid.windows, &counted);
    let liquid_needed = needed(liquid_trials_needed(method), counted.len());
    let latest = specimen.counts.iter().rev().find(|c| c.set_aside.is_none()).map(|c| c.drops);
    let more = liquid_needed > 0 || !missing.is_empty();
    let paste = latest.filter(|_| liquid).map(|drops| Paste { drops, allowed: method.liquid.drops, aim: aim(&missing, drops) });
    let paste = paste.filter(|p| more || !(p.allowed[0]..=p.allowed[1]).contains(&p.drops));
    let points = points(specimen);
    let water = paste.as_ref().filter(|p| p.drops > p.aim);
    let water =
        water.and_then(|p| self::water(f64::from(p.drops), f64::from(p.aim), f64::from(method.liquid.closures_within), &points));
    Advice {
        windows_missing: if liquid { missing } else { Vec::new() },
        liquid_needed,
        threads_needed: needed(threads_needed(method), active(Kind::Thread).count()),
        paste,
        water,
        paste_g,
    }
}

/// Drops and water content of the trials that entered the result.
fn points(specimen: &Specimen) -> Vec<(f64, f64)> {
    let rows = specimen.limits.iter().flat_map(|l| &l.trials).filter(|t| t.kind == Kind::Liquid && t.set_aside.is_none());
    rows.filter_map(|t| t.drops.zip(t.water_percent)).filter(|(d, w)| *d > 0.0 && *w > 0.0).collect()
}

/// Drops that the next trial should have: the middle of the nearest window that is missing, else 25.
fn aim(missing: &[[u32; 2]], drops: u32) -> u32 {
    let middles = missing.iter().map(|[from, to]| from.midpoint(*to));
    middles.min_by_key(|m| m.abs_diff(drops)).unwrap_or(DROPS_AT_LIMIT as u32)
}

/// Water to add to each gram of paste, to come from so many drops to so many, and ±; `None` where none is to be
/// added. A paste of water content w holds 1 / (100 + w) of dry soil for each part, so that a change of w by d takes
/// d / (100 + w). The ± comes from the steepness, from w, and from hitting the drops within `within`.
pub fn water(drops: f64, aim: f64, within: f64, points: &[(f64, f64)]) -> Option<Water> {
    if !(drops > aim && aim >= 1.0 && drops.is_finite()) {
        return None;
    }
    let near = (aim - within).max(1.0);
    if let Some(line) = FlowLine::fit(points).ok().filter(|l| l.slope() < 0.0) {
        let now = line.at(drops);
        let per = |to: f64| (line.at(to) - now) / (100.0 + now);
        if now > 0.0 {
            return Some(Water { per_gram: per(aim), per_gram_u: (per(near) - per(aim)).abs(), from: WaterFrom::FlowLine });
        }
    }
    let one = points.first().map(|(d, w)| w * (d / drops).powf(STEEPNESS.0));
    let (now, now_u, from) = match one {
        Some(w) => (w, w * 0.05, WaterFrom::OneTrial),
        None => (USUAL.0, USUAL.1, WaterFrom::Usual),
    };
    let per = |w: f64, steep: f64, to: f64| w / (100.0 + w) * ((drops / to).powf(steep) - 1.0);
    let value = per(now, STEEPNESS.0, aim);
    let off = [per(now, STEEPNESS.0 + STEEPNESS.1, aim), per(now + now_u, STEEPNESS.0, aim), per(now, STEEPNESS.0, near)];
    let u = off.iter().map(|o| (o - value).powi(2)).sum::<f64>().sqrt();
    Some(Water { per_gram: value, per_gram_u: u, from })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// By hand: w 40, from 32 to 25 drops. (32/25)^0.121 = 1.03032; 40/140 · 0.03032 = 0.00866: 0.87 g for 100 g of paste.
    #[test]
    fn water_by_the_usual_steepness() {
        let w = water(32.0, 25.0, 2.0, &[]).unwrap();
        assert!((w.per_gram - 0.008_66).abs() < 1e-5, "{w:?}");
        assert!(w.per_gram_u > 0.002 && w.per_gram_u < 0.006, "{w:?}");
        assert_eq!(w.from, WaterFrom::Usual);
        let one = water(32.0, 25.0, 2.0, &[(32.0, 40.0)]).unwrap();
        assert!((one.per_gram - w.per_gram).abs() < 1e-12 && one.per_gram_u < w.per_gram_u);
    }

    /// By hand: w = 60 − 12 · log10 N: at 30 drops 42.2745, at 20 drops 44.3876; 2.1131 / 142.2745 = 0.014852.
    #[test]
    fn water_by_the_own_line() {
        let made: Vec<(f64, f64)> = [15.0, 22.0, 31.0].map(|n: f64| (n, 60.0 - 12.0 * n.log10())).into();
        let w = water(30.0, 20.0, 2.0, &made).unwrap();
        assert!((w.per_gram - 0.014_852).abs() < 1e-5, "{w:?}");
        assert_eq!(w.from, WaterFrom::FlowLine);
    }

    #[test]
    fn no_water_for_a_paste_that_is_too_wet_and_none_by_a_rising_line() {
        assert_eq!(water(18.0, 30.0, 2.0, &[]), None);
        assert_eq!(water(f64::NAN, 20.0, 2.0, &[]), None);
        let rising = [(15.0, 30.0), (30.0, 35.0)];
        assert_eq!(water(30.0, 20.0, 2.0, &rising).unwrap().from, WaterFrom::OneTrial);
    }

    #[test]
    fn the_nearest_missing_window_is_aimed_at() {
        assert_eq!(aim(&[[25, 35], [15, 25]], 28), 30);
        assert_eq!(aim(&[[25, 35], [15, 25]], 18), 20);
        assert_eq!(aim(&[], 40), 25);
    }
}
