//! What the laboratory's own finished results say together: how far its trials
//! lie from their lines and its thread containers from their means.
//!
//! Running sums in whole units, so that a result which is corrected can be taken
//! back exactly, whatever came in between. A specimen's share follows from its
//! limits alone, so the same facts always lead to the same sums.

use crate::limits::{Limits, LiquidLimit, State};
use crate::method::Device;
use crate::sheet::Kind;
use crate::soil::chart;
use crate::soil::slopes::Slopes;
use crate::soil::stats;
use crate::soil::uncertainty::Pooled;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

/// Parts of one (percent water)² in the sums.
const PARTS: f64 = 1e9;
/// A specimen counts no more than this, (percent water)²: beyond it something else is wrong.
const MOST: f64 = 1e4;

/// Squares and degrees of freedom.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Sums {
    /// Sum of squares in 10⁻⁹ (percent water)².
    pub sum_sq: u64,
    /// Degrees of freedom.
    pub df: u64,
    /// Specimens in it.
    pub specimens: u64,
}

/// What all finished results say together.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Statistics {
    /// Trials in the cup about their flow lines.
    pub cup: Sums,
    /// Trials with the cone about their lines.
    pub cone: Sums,
    /// Thread containers about their means.
    pub threads: Sums,
    /// Slopes of flow lines in the cup.
    pub slopes: Slopes,
    /// Plasticity indices, as shares of what the A-line has at their liquid limit, against liquid limits.
    #[serde(default)]
    pub pairs: Slopes,
}

impl Sums {
    fn of(sum_sq: f64, df: u64) -> Sums {
        let parts = libm::round(sum_sq.clamp(0.0, MOST) * PARTS);
        if df == 0 || !sum_sq.is_finite() { Sums::default() } else { Sums { sum_sq: parts as u64, df, specimens: 1 } }
    }
    fn plus(self, other: Sums) -> Sums {
        Sums {
            sum_sq: self.sum_sq.saturating_add(other.sum_sq),
            df: self.df.saturating_add(other.df),
            specimens: self.specimens.saturating_add(other.specimens),
        }
    }
    fn minus(self, other: Sums) -> Sums {
        Sums {
            sum_sq: self.sum_sq.saturating_sub(other.sum_sq),
            df: self.df.saturating_sub(other.df),
            specimens: self.specimens.saturating_sub(other.specimens),
        }
    }
    /// As uncertainties use it.
    pub fn pooled(self) -> Pooled {
        Pooled { sum_sq: self.sum_sq as f64 / PARTS, df: self.df }
    }
}

impl Statistics {
    /// What one result says. A provisional one says nothing yet.
    pub fn of(limits: &Limits) -> Statistics {
        let mut share = Statistics::default();
        if limits.state == State::Provisional {
            return share;
        }
        if let Some(limit) = &limits.liquid_limit {
            let about_line = about_line(limit);
            match device(limit) {
                Some(Device::Cup) => {
                    share.cup = about_line;
                    share.slopes = limit.slope_per_decade.map_or(Slopes::default(), |s| Slopes::of(limit.value, s));
                }
                Some(Device::Cone) => share.cone = about_line,
                None => (),
            }
        }
        let used = limits.trials.iter().filter(|t| t.used && t.kind == Kind::Thread);
        let waters: Vec<f64> = used.filter_map(|t| t.water_percent).collect();
        if let Some(mean) = stats::mean(&waters).filter(|_| limits.plastic_limit.is_some()) {
            let squares = waters.iter().map(|w| (w - mean) * (w - mean)).sum();
            share.threads = Sums::of(squares, waters.len() as u64 - 1);
        }
        if let (Some(liquid), Some(plastic)) = (&limits.liquid_limit, &limits.plastic_limit)
            && let Some(ratio) = chart::a_line_ratio(liquid.value, plastic.value)
        {
            share.pairs = Slopes::of(liquid.value, ratio);
        }
        share
    }

    /// With one more result.
    pub fn plus(self, other: Statistics) -> Statistics {
        Statistics {
            cup: self.cup.plus(other.cup),
            cone: self.cone.plus(other.cone),
            threads: self.threads.plus(other.threads),
            slopes: self.slopes.plus(other.slopes),
            pairs: self.pairs.plus(other.pairs),
        }
    }

    /// With one result taken back.
    pub fn minus(self, other: Statistics) -> Statistics {
        Statistics {
            cup: self.cup.minus(other.cup),
            cone: self.cone.minus(other.cone),
            threads: self.threads.minus(other.threads),
            slopes: self.slopes.minus(other.slopes),
            pairs: self.pairs.minus(other.pairs),
        }
    }

    /// Trials about their lines, of a device.
    pub fn lines(&self, device: Device) -> Sums {
        match device {
            Device::Cup => self.cup,
            Device::Cone => self.cone,
        }
    }
}

/// By one point there is no line to lie off.
fn device(limit: &LiquidLimit) -> Option<Device> {
    match limit.how.as_str() {
        "flow line" => Some(Device::Cup),
        "cone" => Some(Device::Cone),
        _ => None,
    }
}

fn about_line(limit: &LiquidLimit) -> Sums {
    let df = u64::from(limit.points).saturating_sub(2);
    limit.residual_sd.map_or(Sums::default(), |sd| Sums::of(sd * sd * df as f64, df))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_taken_back_leaves_no_trace() {
        let one = Statistics {
            cup: Sums::of(0.031, 1),
            threads: Sums::of(0.11, 1),
            slopes: Slopes::of(41.3, -9.7),
            ..Statistics::default()
        };
        let two = Statistics { cup: Sums::of(1.0 / 3.0, 2), slopes: Slopes::of(1e3 / 7.0, -1.0 / 3.0), ..Statistics::default() };
        let mut sums = Statistics::default();
        for _ in 0..1_000 {
            sums = sums.plus(one).plus(two).minus(one);
        }
        for _ in 0..1_000 {
            sums = sums.minus(two);
        }
        assert_eq!(sums, Statistics::default());
        assert_eq!(Sums::of(f64::NAN, 1), Sums::default());
        assert_eq!(Slopes::of(f64::INFINITY, 1.0), Slopes::default());
    }
}
