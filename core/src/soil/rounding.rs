//! Rounding a result for the report.
//!
//! **The rule.** A computed value such as 30.499999999999996 stands for 30.5
//! and must meet the method's rule for halves. So the value is first written
//! in decimal with [`DIGITS`] significant digits, and that decimal number is
//! rounded by the method's rule. Anything closer to a half than the twelfth
//! digit counts as the half; no balance or count carries that many digits.

use crate::method::Tie;
use alloc::format;

/// Significant decimal digits that are looked at.
pub const DIGITS: usize = 12;

/// Rounds to so many decimals. A value that is not finite, or that has no
/// digits to lose, comes back unchanged.
pub fn round(value: f64, decimals: u32, tie: Tie) -> f64 {
    if !value.is_finite() {
        return value;
    }
    let text = format!("{:.*e}", DIGITS - 1, value.abs());
    let Some((mantissa, exponent)) = text.split_once('e') else { return value };
    let Ok(exponent) = exponent.parse::<i64>() else { return value };
    // Digits that stay: those before the decimal point and `decimals` after it.
    let stay = exponent + 1 + i64::from(decimals);
    if stay >= DIGITS as i64 {
        return value;
    }
    if stay < 0 {
        return 0.0;
    }
    let digits = || mantissa.bytes().filter(u8::is_ascii_digit).map(|b| u64::from(b - b'0'));
    let kept = digits().take(stay as usize).fold(0, |n, d| n * 10 + d);
    let next = digits().nth(stay as usize).unwrap_or(0);
    let more = digits().skip(stay as usize + 1).any(|d| d > 0);
    let up = next > 5 || (next == 5 && (more || tie == Tie::HalfUp || kept % 2 == 1));
    let kept = kept + u64::from(up);
    if kept == 0 {
        return 0.0;
    }
    // Through text, so that the result is the double nearest to the decimal.
    let rounded: f64 = format!("{kept}e-{decimals}").parse().unwrap_or(value);
    if value < 0.0 { -rounded } else { rounded }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn halves_go_where_the_method_says() {
        for (value, decimals, even, up) in [
            (30.5, 0, 30.0, 31.0),
            (31.5, 0, 32.0, 32.0),
            (0.5, 0, 0.0, 1.0),
            (-0.5, 0, 0.0, -1.0),
            (-2.5, 0, -2.0, -3.0),
            (18.25, 1, 18.2, 18.3),
            (9.5, 0, 10.0, 10.0),
            (99.95, 1, 100.0, 100.0),
            // The decimal that is meant decides, not the double beside it.
            (30.499999999999996, 0, 30.0, 31.0),
            (30.500000000000004, 0, 30.0, 31.0),
            (2.675, 2, 2.68, 2.68),
            (1.005, 2, 1.0, 1.01),
        ] {
            assert_eq!(round(value, decimals, Tie::HalfEven), even, "{value}");
            assert_eq!(round(value, decimals, Tie::HalfUp), up, "{value}");
        }
    }

    #[test]
    fn what_is_not_half_way_goes_to_the_nearest() {
        for tie in [Tie::HalfEven, Tie::HalfUp] {
            assert_eq!(round(30.5000001, 0, tie), 31.0);
            assert_eq!(round(30.4999999, 0, tie), 30.0);
            assert_eq!(round(0.04, 0, tie), 0.0);
            assert_eq!(round(1e-300, 0, tie), 0.0);
            assert_eq!(round(0.0, 3, tie), 0.0);
            assert_eq!(round(1.5e300, 0, tie), 1.5e300);
            assert_eq!(round(12.345, u32::MAX, tie), 12.345);
            assert!(round(f64::NAN, 0, tie).is_nan());
        }
    }
}
