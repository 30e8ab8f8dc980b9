//! A straight line by least squares, with the uncertainty of what is read off it.
//!
//! JCGM 100:2008, H.3: because the line is carried by its centre
//! `(x̄, ȳ)`, slope and mean are uncorrelated, and the covariance of slope and
//! intercept is included in every uncertainty given here.

use super::{stats, student};
use alloc::vec::Vec;

/// Why there is no line.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum LineError {
    /// Fewer than two points.
    #[error("a line needs at least two points, there are {0}")]
    TooFew(usize),
    /// All x are the same.
    #[error("all points have the same x; a line needs two that differ")]
    SameX,
    /// An x or y that is not a finite number.
    #[error("a point is not a finite number")]
    NotFinite,
    /// The sums leave the range of a double.
    #[error("the values are too large or too close together to fit a line")]
    Beyond,
}

/// A fitted straight line `y = intercept + slope · x`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Line {
    n: usize,
    mean_x: f64,
    mean_y: f64,
    sxx: f64,
    slope: f64,
    residual_sd: Option<f64>,
}

impl Line {
    /// Fits by ordinary least squares on `(x, y)`, all sums about the means.
    ///
    /// # Errors
    /// See [`LineError`].
    pub fn fit(points: &[(f64, f64)]) -> Result<Line, LineError> {
        let n = points.len();
        if points.iter().any(|(x, y)| !x.is_finite() || !y.is_finite()) {
            return Err(LineError::NotFinite);
        }
        if n < 2 {
            return Err(LineError::TooFew(n));
        }
        if points.iter().all(|p| p.0 == points[0].0) {
            return Err(LineError::SameX);
        }
        let (x, y): (Vec<f64>, Vec<f64>) = points.iter().copied().unzip();
        let mean_x = stats::mean(&x).ok_or(LineError::Beyond)?;
        let mean_y = stats::mean(&y).ok_or(LineError::Beyond)?;
        let centred = || points.iter().map(|(x, y)| (x - mean_x, y - mean_y));
        let sxx: f64 = centred().map(|(dx, _)| dx * dx).sum();
        let sxy: f64 = centred().map(|(dx, dy)| dx * dy).sum();
        let slope = sxy / sxx;
        let rest: f64 = centred().map(|(dx, dy)| dy - slope * dx).map(|r| r * r).sum();
        if sxx <= 0.0 || ![sxx, sxy, slope, rest, mean_y - slope * mean_x].iter().all(|v| v.is_finite()) {
            return Err(LineError::Beyond);
        }
        // Two parameters are spent; two points leave nothing to judge by.
        let residual_sd = (n > 2).then(|| libm::sqrt(rest / (n - 2) as f64));
        Ok(Line { n, mean_x, mean_y, sxx, slope, residual_sd })
    }

    /// Number of points.
    pub fn points(&self) -> usize {
        self.n
    }
    /// Degrees of freedom left for the residuals.
    pub fn degrees_of_freedom(&self) -> usize {
        self.n - 2
    }
    /// Slope.
    pub fn slope(&self) -> f64 {
        self.slope
    }
    /// y at x = 0.
    pub fn intercept(&self) -> f64 {
        self.at(0.0)
    }
    /// Mean of x.
    pub fn mean_x(&self) -> f64 {
        self.mean_x
    }
    /// Mean of y.
    pub fn mean_y(&self) -> f64 {
        self.mean_y
    }
    /// Sum of squares of x about its mean.
    pub fn sxx(&self) -> f64 {
        self.sxx
    }
    /// Residual standard deviation about the line, `√(Σr²/(n−2))`, from three points on.
    pub fn residual_sd(&self) -> Option<f64> {
        self.residual_sd
    }
    /// y on the line.
    pub fn at(&self, x: f64) -> f64 {
        self.mean_y + self.slope * (x - self.mean_x)
    }
    /// Standard uncertainty of y on the line: `s · √(1/n + (x − x̄)²/Sxx)`.
    pub fn u_at(&self, x: f64) -> Option<f64> {
        let away = x - self.mean_x;
        self.residual_sd.map(|s| s * libm::sqrt(1.0 / self.n as f64 + away * away / self.sxx))
    }
    /// Standard uncertainty of the slope.
    pub fn u_slope(&self) -> Option<f64> {
        self.residual_sd.map(|s| s / libm::sqrt(self.sxx))
    }
    /// Standard uncertainty of the intercept.
    pub fn u_intercept(&self) -> Option<f64> {
        self.u_at(0.0)
    }
    /// Correlation of intercept and slope.
    pub fn correlation(&self) -> f64 {
        -self.mean_x / libm::sqrt(self.sxx / self.n as f64 + self.mean_x * self.mean_x)
    }
    /// Interval for y on the line by Student's t at the given two-sided
    /// confidence (such as 0.95).
    pub fn interval(&self, x: f64, confidence: f64) -> Option<[f64; 2]> {
        let half = student::two_sided(confidence, self.degrees_of_freedom() as u64)? * self.u_at(x)?;
        let y = self.at(x);
        (half.is_finite() && y.is_finite()).then_some([y - half, y + half])
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn exact_points_give_the_exact_line() {
        let line = Line::fit(&[(0.0, 1.0), (1.0, 3.0), (3.0, 7.0)]).unwrap();
        assert!((line.slope() - 2.0).abs() < 1e-14 && (line.intercept() - 1.0).abs() < 1e-14);
        assert!(line.residual_sd().unwrap() < 1e-14);
        let two = Line::fit(&[(0.0, 1.0), (1.0, 3.0)]).unwrap();
        assert_eq!((two.residual_sd(), two.u_at(0.5), two.interval(0.5, 0.95)), (None, None, None));
    }

    #[test]
    fn a_far_away_origin_costs_nothing() {
        // The same line moved by 1e9: textbook sums of squares would lose every digit of s.
        let near = [(1.0, 2.1), (2.0, 3.9), (3.0, 6.2), (4.0, 7.8)];
        let far: Vec<_> = near.iter().map(|(x, y)| (x + 1e9, *y)).collect();
        let (a, b) = (Line::fit(&near).unwrap(), Line::fit(&far).unwrap());
        assert!((a.slope() - b.slope()).abs() < 1e-12);
        assert!((a.residual_sd().unwrap() - b.residual_sd().unwrap()).abs() < 1e-12);
    }

    #[test]
    fn what_is_no_line_is_named() {
        assert_eq!(Line::fit(&[]), Err(LineError::TooFew(0)));
        assert_eq!(Line::fit(&[(1.0, 1.0)]), Err(LineError::TooFew(1)));
        assert_eq!(Line::fit(&[(1.0, 1.0), (1.0, 2.0)]), Err(LineError::SameX));
        assert_eq!(Line::fit(&[(f64::NAN, 1.0), (1.0, 2.0)]), Err(LineError::NotFinite));
        assert_eq!(Line::fit(&[(0.0, f64::INFINITY), (1.0, 2.0)]), Err(LineError::NotFinite));
        assert_eq!(Line::fit(&[(1.0, f64::MAX), (2.0, f64::MAX)]), Err(LineError::Beyond));
        assert_eq!(Line::fit(&[(0.0, 1.0), (f64::MIN_POSITIVE, 2.0)]), Err(LineError::Beyond));
    }
}
