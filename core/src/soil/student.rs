//! Student's t.

use core::f64::consts::PI;
use statrs::distribution::{Continuous, ContinuousCDF, Normal, StudentsT};

/// From here on the expansion about the normal quantile is exact to twelve digits.
const MANY: u64 = 1_000;

/// The factor by which a standard uncertainty is multiplied for a two-sided
/// interval of the given confidence: the (1 + confidence)/2 quantile of
/// Student's t. `None` without degrees of freedom or for a confidence outside
/// 0–1 (both ends excluded).
pub fn two_sided(confidence: f64, degrees_of_freedom: u64) -> Option<f64> {
    if !(confidence > 0.0 && confidence < 1.0) {
        return None;
    }
    let p = (1.0 + confidence) / 2.0;
    let t = match degrees_of_freedom {
        0 => return None,
        // The two cases laboratories meet most have closed forms.
        1 => libm::tan(PI * confidence / 2.0),
        2 => confidence * libm::sqrt(2.0 / ((1.0 - confidence) * (1.0 + confidence))),
        few if few < MANY => by_newton(p, few as f64)?,
        many => about_normal(p, many as f64)?,
    };
    t.is_finite().then_some(t)
}

/// Newton on the distribution function. The library's own inverse is not used:
/// it loses digits, and for very many degrees of freedom it never returns.
fn by_newton(p: f64, freedom: f64) -> Option<f64> {
    let student = StudentsT::new(0.0, 1.0, freedom).ok()?;
    let mut t = about_normal(p, freedom)?;
    // Right of zero the function is concave, so the steps come from below and
    // settle; the bound is for the far tails, where they are small.
    for _ in 0..200 {
        let step = (student.cdf(t) - p) / student.pdf(t);
        if !step.is_finite() {
            return None;
        }
        t = (t - step).max(0.0);
        if step.abs() <= 4.0 * f64::EPSILON * t {
            break;
        }
    }
    Some(t)
}

/// The quantile as a series in 1/freedom about the normal one (Cornish and
/// Fisher; Abramowitz and Stegun 26.7.5, from memory, tested against `scipy`).
fn about_normal(p: f64, freedom: f64) -> Option<f64> {
    let z = Normal::new(0.0, 1.0).ok()?.inverse_cdf(p);
    let q = z * z;
    let first = z * (q + 1.0) / 4.0;
    let second = z * ((5.0 * q + 16.0) * q + 3.0) / 96.0;
    let third = z * (((3.0 * q + 19.0) * q + 17.0) * q - 15.0) / 384.0;
    Some(z + (first + (second + third / freedom) / freedom) / freedom)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_tables_values() {
        // Published tables of t(0.975), to the three decimals they print.
        for (df, t) in [(1, 12.706), (2, 4.303), (3, 3.182), (4, 2.776)] {
            assert!((two_sided(0.95, df).unwrap() - t).abs() < 5.1e-4, "{df}");
        }
    }

    #[test]
    fn newton_and_series_meet() {
        let (below, above) = (by_newton(0.975, 1000.0).unwrap(), about_normal(0.975, 1000.0).unwrap());
        assert!((below - above).abs() < 1e-10, "{below} {above}");
    }

    #[test]
    fn every_argument_is_answered() {
        assert_eq!(two_sided(0.95, 0), None);
        for c in [0.0, 1.0, -0.1, 1.1, f64::NAN] {
            assert_eq!(two_sided(c, 3), None);
        }
        for df in [3, 10, 999, 1_000, u64::MAX] {
            for c in [1e-12, 0.5, 0.95, 0.999_999] {
                assert!(two_sided(c, df).is_some_and(|t| t >= 0.0), "{c} {df}");
            }
        }
        let normal = two_sided(0.95, u64::MAX).unwrap();
        assert!((normal - 1.959_963_984_540_054).abs() < 1e-12, "{normal}");
    }
}
