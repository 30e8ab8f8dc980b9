//! The flow line: water content against the logarithm of the drops, or against
//! the penetration of a cone.

use super::DROPS_AT_LIMIT;
use super::line::{Line, LineError};
use crate::method::Axes;
use alloc::vec::Vec;

/// Why trials give no flow line.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum FlowError {
    /// One trial is no line.
    #[error("a flow line needs at least two trials with different drops; there are {0} trials")]
    TooFew(usize),
    /// Every trial closed at the same drops, or at the same penetration.
    #[error("every trial closed at the same number of drops; add a trial at another water content")]
    SameDrops,
    /// No logarithm.
    #[error("{0} drops cannot be a closure; a count is 1 or more")]
    NoDrops(f64),
    /// No depth.
    #[error("{0} mm is no penetration; read the gauge again")]
    NoDepth(f64),
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

/// What stands on the line's horizontal axis.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Across {
    /// log10 of the drops of the cup.
    Drops,
    /// Penetration of the cone in millimetres, or its log10.
    Depth(Axes),
}

impl Across {
    /// Where a reading lies on the axis.
    pub fn place(self, reading: f64) -> f64 {
        match self {
            Self::Drops | Self::Depth(Axes::Log) => libm::log10(reading),
            Self::Depth(Axes::Linear) => reading,
        }
    }
    /// Change of the place on the axis with the reading.
    pub fn rate(self, reading: f64) -> f64 {
        match self {
            Self::Drops | Self::Depth(Axes::Log) => core::f64::consts::LOG10_E / reading,
            Self::Depth(Axes::Linear) => 1.0,
        }
    }
    /// A slope that careful work shows: drier paste takes more drops, wetter paste lets the cone deeper in.
    pub fn behaves(self, slope: f64) -> bool {
        match self {
            Self::Drops => slope < 0.0,
            Self::Depth(_) => slope > 0.0,
        }
    }
    fn refuse(self, reading: f64) -> FlowError {
        match self {
            Self::Drops => FlowError::NoDrops(reading),
            Self::Depth(_) => FlowError::NoDepth(reading),
        }
    }
}

/// A flow line `w = intercept + slope · x`, fitted by least squares; x is the
/// logarithm of the drops, or what [`Across`] says.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FlowLine {
    line: Line,
    across: Across,
}

impl FlowLine {
    /// Fits `(drops, water content in percent)`; all trials weigh the same.
    ///
    /// # Errors
    /// See [`FlowError`].
    pub fn fit(trials: &[(f64, f64)]) -> Result<FlowLine, FlowError> {
        Self::fit_across(trials, Across::Drops)
    }

    /// Fits `(drops or millimetres, water content in percent)`.
    ///
    /// # Errors
    /// See [`FlowError`].
    pub fn fit_across(trials: &[(f64, f64)], across: Across) -> Result<FlowLine, FlowError> {
        if let Some(&(reading, _)) = trials.iter().find(|(reading, _)| !(reading.is_finite() && *reading > 0.0)) {
            return Err(across.refuse(reading));
        }
        let points: Vec<_> = trials.iter().map(|&(reading, w)| (across.place(reading), w)).collect();
        Ok(FlowLine { line: Line::fit(&points)?, across })
    }

    /// What stands on the horizontal axis.
    pub fn across(&self) -> Across {
        self.across
    }
    /// The line on its axes.
    pub fn line(&self) -> &Line {
        &self.line
    }
    /// Trials on the line.
    pub fn points(&self) -> usize {
        self.line.points()
    }
    /// Change of water content per unit of the axis: per tenfold number of drops, negative for a soil that
    /// behaves; per millimetre or tenfold penetration, positive.
    pub fn slope(&self) -> f64 {
        self.line.slope()
    }
    /// Water content where the axis begins: at one drop.
    pub fn intercept(&self) -> f64 {
        self.line.intercept()
    }
    /// Mean on the axis.
    pub fn mean_x(&self) -> f64 {
        self.line.mean_x()
    }
    /// Sum of squares on the axis about its mean.
    pub fn sxx(&self) -> f64 {
        self.line.sxx()
    }
    /// Residual standard deviation, percent water, from three trials on.
    pub fn residual_sd(&self) -> Option<f64> {
        self.line.residual_sd()
    }
    /// Water content on the line at so many drops or millimetres.
    pub fn at(&self, reading: f64) -> f64 {
        self.line.at(self.across.place(reading))
    }
    /// Standard uncertainty of that water content, the covariance of slope and
    /// intercept included.
    pub fn u_at(&self, reading: f64) -> Option<f64> {
        self.line.u_at(self.across.place(reading))
    }
    /// Two-sided Student interval of that water content. With three trials
    /// (one degree of freedom) it is very wide; that is what three trials tell.
    pub fn interval(&self, reading: f64, confidence: f64) -> Option<[f64; 2]> {
        self.line.interval(self.across.place(reading), confidence)
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
