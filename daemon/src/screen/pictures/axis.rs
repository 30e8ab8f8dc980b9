//! From values to places in a picture.

/// One axis: values `from`–`to` lie at places `at`–`end`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Axis {
    from: f64,
    to: f64,
    at: f64,
    end: f64,
    log: bool,
}

impl Axis {
    /// A linear axis; a span of nothing is widened so that there is one.
    pub fn linear(from: f64, to: f64, at: f64, end: f64) -> Self {
        let (from, to) = wide(from, to);
        Self { from, to, at, end, log: false }
    }

    /// A logarithmic axis, from at least a tenth.
    pub fn log(from: f64, to: f64, at: f64, end: f64) -> Self {
        let (from, to) = wide(from.max(0.1).log10(), to.max(0.1).log10());
        Self { from, to, at, end, log: true }
    }

    /// Place of a value, kept a little outside the picture at most so that no number grows without bound.
    pub fn place(&self, value: f64) -> f64 {
        let value = if self.log { value.max(1e-9).log10() } else { value };
        let share = ((value - self.from) / (self.to - self.from)).clamp(-10.0, 10.0);
        let place = self.at + share * (self.end - self.at);
        if place.is_finite() { place } else { self.at }
    }

    /// Whether a value lies on the axis.
    pub fn holds(&self, value: f64) -> bool {
        let value = if self.log { value.max(1e-9).log10() } else { value };
        value >= self.from - 1e-9 && value <= self.to + 1e-9
    }
}

fn wide(from: f64, to: f64) -> (f64, f64) {
    if from.is_finite() && to.is_finite() && to - from > 1e-9 { (from, to) } else { (0.0, 1.0) }
}

/// A tick as people write it.
pub fn label(value: f64) -> String {
    if value.fract() == 0.0 { format!("{value:.0}") } else { format!("{value:.1}") }
}

/// Round values between two limits, about so many: 1, 2 or 5 times a power of ten apart.
pub fn ticks(from: f64, to: f64, about: usize) -> Vec<f64> {
    let span = to - from;
    if !(span.is_finite() && span > 1e-9) {
        return Vec::new();
    }
    let rough = span / about.max(1) as f64;
    let power = 10f64.powf(rough.log10().floor());
    let step = [1.0, 2.0, 5.0, 10.0].map(|m| m * power).into_iter().find(|s| *s >= rough).unwrap_or(10.0 * power);
    let first = (from / step - 1e-9).ceil() as i64;
    (first..).take(50).map(|n| n as f64 * step).take_while(|v| *v <= to + step * 1e-9).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    /// By hand: log10 25 = 1.39794, between log10 10 = 1 and log10 50 = 1.69897 at 0.39794 / 0.69897 = 0.569323 of the way.
    #[test]
    fn twenty_five_drops_lie_where_the_logarithm_says() {
        let axis = Axis::log(10.0, 50.0, 40.0, 340.0);
        assert!((axis.place(25.0) - (40.0 + 0.569_323 * 300.0)).abs() < 1e-3);
        assert_eq!(axis.place(10.0), 40.0);
        assert!((axis.place(50.0) - 340.0).abs() < 1e-9);
    }

    #[test]
    fn nothing_is_without_bound() {
        for axis in [Axis::log(0.0, 0.0, 0.0, 100.0), Axis::linear(f64::NAN, 1.0, 0.0, 100.0), Axis::linear(3.0, 3.0, 0.0, 100.0)]
        {
            for value in [f64::NAN, f64::INFINITY, -1e300, 0.0, 1e300] {
                assert!(axis.place(value).abs() <= 1_100.0, "{value} on {axis:?}");
            }
        }
        assert!(ticks(0.0, f64::INFINITY, 5).is_empty() && ticks(1.0, 1.0, 5).is_empty());
        assert!(ticks(0.0, 1e300, 3).len() <= 50);
    }

    #[test]
    fn ticks_are_round() {
        assert_eq!(ticks(23.1, 27.9, 4), [24.0, 26.0]);
        assert_eq!(ticks(0.0, 60.0, 6), [0.0, 10.0, 20.0, 30.0, 40.0, 50.0, 60.0]);
    }
}
