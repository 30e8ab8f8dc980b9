//! How steep the flow lines of a laboratory's soils are, against their liquid
//! limits: wetter soils have steeper lines.
//!
//! Sums in whole units, so that what is taken back leaves no trace.

use serde::{Deserialize, Serialize};

/// Parts of one percent, and of its square, in the sums.
const COARSE: f64 = 1e6;
/// Beyond this no limit or slope is a soil's, percent.
const MOST: f64 = 1e4;

/// Slopes of flow lines against liquid limits, one pair of each specimen.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Slopes {
    /// Specimens in it.
    pub n: u64,
    /// Sum of liquid limits, 10⁻⁶ percent.
    pub limit: i64,
    /// Sum of slopes per decade, 10⁻⁶ percent.
    pub slope: i64,
    /// Sum of squares of liquid limits, 10⁻⁶ (percent)².
    pub limit_sq: i64,
    /// Sum of products, 10⁻⁶ (percent)².
    pub product: i64,
    /// Sum of squares of slopes, 10⁻⁶ (percent)².
    pub slope_sq: i64,
}

impl Slopes {
    /// One specimen; nothing where the numbers are no soil's.
    pub fn of(limit: f64, slope: f64) -> Slopes {
        let within = |v: f64| v.is_finite() && libm::fabs(v) <= MOST;
        if !(within(limit) && within(slope)) {
            return Slopes::default();
        }
        let parts = |v: f64| libm::round(v * COARSE) as i64;
        Slopes {
            n: 1,
            limit: parts(limit),
            slope: parts(slope),
            limit_sq: parts(limit * limit),
            product: parts(limit * slope),
            slope_sq: parts(slope * slope),
        }
    }
    /// With others.
    pub fn plus(self, other: Slopes) -> Slopes {
        Slopes {
            n: self.n.saturating_add(other.n),
            limit: self.limit.saturating_add(other.limit),
            slope: self.slope.saturating_add(other.slope),
            limit_sq: self.limit_sq.saturating_add(other.limit_sq),
            product: self.product.saturating_add(other.product),
            slope_sq: self.slope_sq.saturating_add(other.slope_sq),
        }
    }
    /// With others taken back.
    pub fn minus(self, other: Slopes) -> Slopes {
        Slopes {
            n: self.n.saturating_sub(other.n),
            limit: self.limit.saturating_sub(other.limit),
            slope: self.slope.saturating_sub(other.slope),
            limit_sq: self.limit_sq.saturating_sub(other.limit_sq),
            product: self.product.saturating_sub(other.product),
            slope_sq: self.slope_sq.saturating_sub(other.slope_sq),
        }
    }

    /// The slope that soils of this liquid limit have here, with the standard
    /// deviation of single ones about it; from ten specimens on.
    pub fn expected(&self, limit: f64) -> Option<(f64, f64)> {
        if self.n < 10 {
            return None;
        }
        let n = self.n as f64;
        let [x, y, xx, xy, yy] = [self.limit, self.slope, self.limit_sq, self.product, self.slope_sq].map(|v| v as f64 / COARSE);
        let (sxx, sxy, syy) = (xx - x * x / n, xy - x * y / n, yy - y * y / n);
        let slope = if sxx > 0.0 { sxy / sxx } else { 0.0 };
        let rest = (syy - slope * sxy).max(0.0);
        let expected = y / n + slope * (limit - x / n);
        let sd = libm::sqrt(rest / (n - 2.0));
        (expected.is_finite() && sd.is_finite()).then_some((expected, sd))
    }

    /// What a new specimen of this liquid limit is expected to have, with the standard deviation of such a
    /// prediction (that of the line at this place included) and its degrees of freedom; from so many specimens on.
    pub fn predicted(&self, limit: f64, from: u64) -> Option<Predicted> {
        if self.n < from.max(4) {
            return None;
        }
        let n = self.n as f64;
        let [x, y, xx, xy, yy] = [self.limit, self.slope, self.limit_sq, self.product, self.slope_sq].map(|v| v as f64 / COARSE);
        let (sxx, sxy, syy) = (xx - x * x / n, xy - x * y / n, yy - y * y / n);
        if sxx <= 0.0 {
            return None;
        }
        let (slope, off) = (sxy / sxx, limit - x / n);
        let variance = (syy - slope * sxy).max(0.0) / (n - 2.0) * (1.0 + 1.0 / n + off * off / sxx);
        let (mean, sd) = (y / n + slope * off, libm::sqrt(variance));
        (mean.is_finite() && sd.is_finite() && sd > 0.0).then_some(Predicted { mean, sd, freedom: self.n - 2 })
    }
}

/// What is expected of a new specimen.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Predicted {
    /// The expected value.
    pub mean: f64,
    /// Standard deviation of a single one about it.
    pub sd: f64,
    /// Degrees of freedom of that.
    pub freedom: u64,
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn slopes_follow_the_limits() {
        let mut slopes = Slopes::default();
        for i in 0..20 {
            let limit = 25.0 + 2.0 * f64::from(i);
            let off = if i % 2 == 0 { 0.5 } else { -0.5 };
            slopes = slopes.plus(Slopes::of(limit, -0.2 * limit + off));
        }
        let (expected, sd) = slopes.expected(50.0).unwrap();
        assert!((expected + 10.0).abs() < 0.1 && (sd - 0.53).abs() < 0.05, "{expected} {sd}");
        assert_eq!(Slopes { n: 9, ..slopes }.expected(50.0), None);
    }
}
