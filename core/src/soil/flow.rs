//! The flow line: water content against the logarithm of the drops.

use super::DROPS_AT_LIMIT;
use super::line::{Line, LineError};
use alloc::vec::Vec;

/// Why trials give no flow line.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum FlowError {
    /// One trial is no line.
    #[error("a flow line needs at least two trials with different drops; there are {0} trials")]
    TooFew(usize),
    /// Every trial closed at the same drops.
    #[error("every trial closed at the same number of drops; add a trial at another water content")]
    SameDrops,
    /// No logarithm.
    #[error("{0} drops cannot be a closure; a count is 1 or more")]
    NoDrops(f64),
    /// A water content that is not a number.
    #[error("a water content is not a finite number; look at the masses")]
    NotFinite,
    /// Values that no soil has.
    #[error("the water contents lie too far apart to fit a line; look for a wrong unit")]
    Beyond,
}

impl From<LineError> for FlowError {
    fn from(error: LineError) -> Self {
        match error {
            LineError::TooFew(n) => Self::TooFew(n),
            LineError::SameX => Self::SameDrops,
            LineError::NotFinite => Self::NotFinite,
            LineError::Beyond => Self::Beyond,
        }
    }
}

/// A flow line `w = intercept + slope · log10 N`, fitted by least squares on
/// the logarithm of the drops.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FlowLine {
    line: Line,
}

impl FlowLine {
    /// Fits `(drops, water content in percent)`; all trials weigh the same.
    ///
    /// # Errors
    /// See [`FlowError`].
    pub fn fit(trials: &[(f64, f64)]) -> Result<FlowLine, FlowError> {
        if let Some(&(drops, _)) = trials.iter().find(|(drops, _)| !(drops.is_finite() && *drops > 0.0)) {
            return Err(FlowError::NoDrops(drops));
        }
        let points: Vec<_> = trials.iter().map(|&(drops, w)| (libm::log10(drops), w)).collect();
        Ok(FlowLine { line: Line::fit(&points)? })
    }

    /// The line on the logarithmic axis.
    pub fn line(&self) -> &Line {
        &self.line
    }
    /// Trials on the line.
    pub fn points(&self) -> usize {
        self.line.points()
    }
    /// Change of water content per tenfold number of drops; negative for a soil that behaves.
    pub fn slope(&self) -> f64 {
        self.line.slope()
    }
    /// Water content at one drop.
    pub fn intercept(&self) -> f64 {
        self.line.intercept()
    }
    /// Mean of log10 N.
    pub fn mean_x(&self) -> f64 {
        self.line.mean_x()
    }
    /// Sum of squares of log10 N about its mean.
    pub fn sxx(&self) -> f64 {
        self.line.sxx()
    }
    /// Residual standard deviation, percent water, from three trials on.
    pub fn residual_sd(&self) -> Option<f64> {
        self.line.residual_sd()
    }
    /// Water content on the line at so many drops.
    pub fn at(&self, drops: f64) -> f64 {
        self.line.at(libm::log10(drops))
    }
    /// Standard uncertainty of that water content, the covariance of slope and
    /// intercept included.
    pub fn u_at(&self, drops: f64) -> Option<f64> {
        self.line.u_at(libm::log10(drops))
    }
    /// Two-sided Student interval of that water content. With three trials
    /// (one degree of freedom) it is very wide; that is what three trials tell.
    pub fn interval(&self, drops: f64, confidence: f64) -> Option<[f64; 2]> {
        self.line.interval(libm::log10(drops), confidence)
    }
}

/// Liquid limit from one trial: `LL = w · (N/25)^exponent`.
pub fn one_point(drops: f64, water: f64, exponent: f64) -> f64 {
    water * libm::pow(drops / DROPS_AT_LIMIT, exponent)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_line_made_from_its_own_formula_is_found_again() {
        let made: Vec<_> = [15.0, 22.0, 31.0].map(|n: f64| (n, 60.0 - 12.0 * libm::log10(n))).into();
        let line = FlowLine::fit(&made).unwrap();
        assert!((line.slope() + 12.0).abs() < 1e-12 && (line.intercept() - 60.0).abs() < 1e-12);
        assert!((line.at(25.0) - (60.0 - 12.0 * libm::log10(25.0))).abs() < 1e-12);
    }

    #[test]
    fn errors_speak_of_trials() {
        assert_eq!(FlowLine::fit(&[(25.0, 40.0)]), Err(FlowError::TooFew(1)));
        assert_eq!(FlowLine::fit(&[(25.0, 40.0), (25.0, 41.0)]), Err(FlowError::SameDrops));
        assert_eq!(FlowLine::fit(&[(0.0, 40.0), (25.0, 41.0)]), Err(FlowError::NoDrops(0.0)));
        assert_eq!(FlowLine::fit(&[(20.0, f64::NAN), (25.0, 41.0)]), Err(FlowError::NotFinite));
        assert_eq!(FlowLine::fit(&[(20.0, 1e308), (25.0, -1e308)]), Err(FlowError::Beyond));
        assert!(matches!(FlowLine::fit(&[(f64::NAN, 1.0), (25.0, 41.0)]), Err(FlowError::NoDrops(_))));
    }
}
