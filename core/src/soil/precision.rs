//! Whether two results of one soil lie as close together as the method's
//! published precision allows.

use crate::limits::Limits;
use crate::method::Precision;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// Who made the two results.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Apart {
    /// One operator with one set of instruments.
    OneOperator,
    /// Two laboratories.
    TwoLaboratories,
}

/// One limit of two results, compared.
#[derive(Clone, Debug, PartialEq, serde::Serialize)]
pub struct Compared {
    /// `liquid limit` or `plastic limit`.
    pub what: String,
    /// The two values, percent of dry mass, unrounded.
    pub values: [f64; 2],
    /// Their difference, percent of their mean.
    pub differ_percent: f64,
    /// What the method allows, percent of the mean.
    pub allowed_percent: f64,
    /// The difference is allowed.
    pub agree: bool,
}

impl Compared {
    /// In words, with what to do.
    pub fn says(&self) -> String {
        let [a, b] = self.values;
        let (differ, allowed) = (self.differ_percent, self.allowed_percent);
        if self.agree {
            return format!("{}: {a:.2} and {b:.2} differ by {differ:.1} % of their mean; {allowed} % are allowed.", self.what);
        }
        format!(
            "{}: {a:.2} and {b:.2} differ by {differ:.1} % of their mean, more than the {allowed} % that are allowed; both are suspect: look whether specimens were exchanged, and test again.",
            self.what
        )
    }
}

/// Compares the limits that both results have.
pub fn compare(a: &Limits, b: &Limits, precision: &Precision, apart: Apart) -> Vec<Compared> {
    let (liquid, plastic) = match apart {
        Apart::OneOperator => (precision.liquid_one_operator_percent, precision.plastic_one_operator_percent),
        Apart::TwoLaboratories => (precision.liquid_two_laboratories_percent, precision.plastic_two_laboratories_percent),
    };
    let ll = |l: &Limits| l.liquid_limit.as_ref().map(|v| v.value);
    let pl = |l: &Limits| l.plastic_limit.as_ref().map(|v| v.value);
    let both = [("liquid limit", ll(a), ll(b), liquid), ("plastic limit", pl(a), pl(b), plastic)];
    both.into_iter().filter_map(|(what, a, b, allowed)| one(what, [a?, b?], allowed)).collect()
}

fn one(what: &str, values: [f64; 2], allowed_percent: f64) -> Option<Compared> {
    let [a, b] = values;
    let differ_percent = 200.0 * libm::fabs(a - b) / (a + b);
    // The quotient of two decimals, not the soil, decides the last digits.
    let agree = differ_percent <= allowed_percent + 1e-9;
    differ_percent.is_finite().then(|| Compared { what: what.into(), values, differ_percent, allowed_percent, agree })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_difference_is_measured_against_the_mean() {
        // T 90-16, section 8: 10 % of the mean, one operator.
        let edge = one("plastic limit", [19.0, 21.0], 10.0).unwrap();
        assert!(edge.agree && (edge.differ_percent - 10.0).abs() < 1e-12);
        let far = one("plastic limit", [18.9, 21.0], 10.0).unwrap();
        assert!(!far.agree && far.says().contains("test again"));
        assert_eq!(one("plastic limit", [0.0, 0.0], 10.0), None);
    }
}
