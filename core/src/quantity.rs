//! Exact quantities.
//!
//! A mass is a whole number of micrograms, so that what a balance printed is
//! stored as it was printed: `12.34 g` is 12 340 000 µg and never
//! 12.339999… . A text that would need rounding is refused.

use core::fmt;
use serde::{Deserialize, Serialize};

/// Micrograms in a gram.
pub const UG_PER_G: i64 = 1_000_000;

/// The largest mass that is believed: 1 000 kg. Anything above is a wrong
/// unit or a torn line, never a moisture container.
pub const LARGEST: Mass = Mass(1_000_000 * UG_PER_G);

/// A mass in whole micrograms. Serialised as that whole number.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Mass(i64);

/// Units a balance may print.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub enum MassUnit {
    /// Microgram.
    #[serde(rename = "ug")]
    Microgram,
    /// Milligram.
    #[serde(rename = "mg")]
    Milligram,
    /// Gram.
    #[serde(rename = "g")]
    Gram,
    /// Kilogram.
    #[serde(rename = "kg")]
    Kilogram,
}

impl MassUnit {
    /// Reads a unit as printed, whatever its case.
    pub fn parse(text: &str) -> Option<Self> {
        Some(match text {
            t if t.eq_ignore_ascii_case("g") => Self::Gram,
            t if t.eq_ignore_ascii_case("kg") => Self::Kilogram,
            t if t.eq_ignore_ascii_case("mg") => Self::Milligram,
            t if t.eq_ignore_ascii_case("ug") => Self::Microgram,
            _ => return None,
        })
    }
    /// Micrograms in one of this unit.
    pub const fn micrograms(self) -> i64 {
        match self {
            Self::Microgram => 1,
            Self::Milligram => 1_000,
            Self::Gram => UG_PER_G,
            Self::Kilogram => 1_000 * UG_PER_G,
        }
    }
}

/// Why a text is not a mass.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum MassError {
    /// No digit at all.
    #[error("there is no number")]
    NoDigits,
    /// Something other than sign, digits and one decimal sign.
    #[error("'{0}' does not belong in a mass; write digits with one decimal point")]
    Character(char),
    /// Finer than a microgram: storing it would mean rounding it.
    #[error("more decimals than a whole microgram can hold; nothing is rounded on the way in")]
    TooFine,
    /// Beyond [`LARGEST`].
    #[error("beyond 1000 kg; look at the unit")]
    TooLarge,
    /// A number that is not finite.
    #[error("not a finite number")]
    NotFinite,
}

impl Mass {
    /// Nothing on the pan.
    pub const ZERO: Mass = Mass(0);

    /// From whole micrograms.
    pub const fn from_ug(ug: i64) -> Self {
        Mass(ug)
    }
    /// Whole micrograms.
    pub const fn ug(self) -> i64 {
        self.0
    }
    /// Grams as the nearest double to the exact decimal value.
    pub fn grams(self) -> f64 {
        self.0 as f64 / UG_PER_G as f64
    }
    /// The absolute value.
    pub const fn abs(self) -> Self {
        Mass(self.0.saturating_abs())
    }

    /// Reads a decimal number, `.` or `,` as decimal sign, in the given unit.
    ///
    /// Blanks are allowed around the number and between sign and number, as
    /// balances print them. Exponents, grouping and rounding are refused.
    pub fn parse(text: &str, unit: MassUnit) -> Result<Mass, MassError> {
        Self::parse_bytes(text.as_bytes(), unit).map(|(mass, _)| mass)
    }

    /// Like [`Mass::parse`], and also tells the printed resolution: the mass
    /// of one step of the last digit.
    pub fn parse_bytes(text: &[u8], unit: MassUnit) -> Result<(Mass, Mass), MassError> {
        let text = text.trim_ascii();
        let (negative, text) = match text.first() {
            Some(b'-') => (true, text[1..].trim_ascii_start()),
            Some(b'+') => (false, text[1..].trim_ascii_start()),
            _ => (false, text),
        };
        let mut value: i64 = 0;
        let (mut digits, mut decimals, mut point) = (0u32, 0u32, false);
        for &b in text {
            match b {
                b'0'..=b'9' => {
                    value = value.checked_mul(10).and_then(|v| v.checked_add(i64::from(b - b'0'))).ok_or(MassError::TooLarge)?;
                    digits += 1;
                    decimals += u32::from(point);
                }
                b'.' | b',' if !point => point = true,
                other => return Err(MassError::Character(other as char)),
            }
        }
        if digits == 0 {
            return Err(MassError::NoDigits);
        }
        let (mass, step) = scale(value, decimals, unit)?;
        if mass > LARGEST.0 {
            return Err(MassError::TooLarge);
        }
        Ok((Mass(if negative { -mass } else { mass }), Mass(step)))
    }
}

/// `value · 10^-decimals` units in micrograms, exactly, with the size of one
/// step of the last decimal (at least a microgram).
fn scale(value: i64, decimals: u32, unit: MassUnit) -> Result<(i64, i64), MassError> {
    let (mut value, mut factor) = (value, unit.micrograms());
    for _ in 0..decimals {
        if factor % 10 == 0 {
            factor /= 10;
        } else if value % 10 == 0 {
            // A trailing zero beyond the microgram loses nothing.
            value /= 10;
        } else {
            return Err(MassError::TooFine);
        }
    }
    let mass = value.checked_mul(factor).ok_or(MassError::TooLarge)?;
    Ok((mass, factor))
}

impl core::ops::Add for Mass {
    type Output = Mass;
    fn add(self, other: Mass) -> Mass {
        Mass(self.0.saturating_add(other.0))
    }
}
impl core::ops::Sub for Mass {
    type Output = Mass;
    fn sub(self, other: Mass) -> Mass {
        Mass(self.0.saturating_sub(other.0))
    }
}

impl fmt::Display for Mass {
    /// Grams with as many decimals as it takes, at least two.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let ug = self.0.unsigned_abs();
        let (whole, mut part, mut width) = (ug / 1_000_000, ug % 1_000_000, 6);
        while width > 2 && part % 10 == 0 {
            part /= 10;
            width -= 1;
        }
        let sign = if self.0 < 0 { "-" } else { "" };
        write!(f, "{sign}{whole}.{part:0width$}")
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use alloc::string::ToString;
    use proptest::prelude::*;

    #[test]
    fn texts_become_exact_masses() {
        let g = MassUnit::Gram;
        for (text, unit, ug) in [
            ("12.34", g, 12_340_000),
            ("+   23.4571", g, 23_457_100),
            ("- 0,5", g, -500_000),
            ("0.000001", g, 1),
            ("0.0000010", g, 1),
            ("0.04321", MassUnit::Kilogram, 43_210_000),
            ("150", MassUnit::Milligram, 150_000),
            ("12.", g, 12_000_000),
            (".5", g, 500_000),
        ] {
            assert_eq!(Mass::parse(text, unit), Ok(Mass(ug)), "{text}");
        }
        for (text, why) in [
            ("", MassError::NoDigits),
            ("+", MassError::NoDigits),
            (".", MassError::NoDigits),
            ("1e3", MassError::Character('e')),
            ("1.2.3", MassError::Character('.')),
            ("1 2", MassError::Character(' ')),
            ("0.0000001", MassError::TooFine),
            ("2000000", MassError::TooLarge),
            ("99999999999999999999", MassError::TooLarge),
            ("nan", MassError::Character('n')),
        ] {
            assert_eq!(Mass::parse(text, g), Err(why), "{text}");
        }
    }

    #[test]
    fn the_printed_step_is_told() {
        assert_eq!(Mass::parse_bytes(b"12.34", MassUnit::Gram).unwrap().1, Mass(10_000));
        assert_eq!(Mass::parse_bytes(b"0.0123", MassUnit::Kilogram).unwrap().1, Mass(100_000));
    }

    #[test]
    fn shown_without_loss() {
        assert_eq!(Mass(12_340_000).to_string(), "12.34");
        assert_eq!(Mass(-500).to_string(), "-0.0005");
        assert_eq!(Mass(12_000_000).to_string(), "12.00");
    }

    proptest! {
        #[test]
        fn display_and_parse_agree(ug in -1_000_000_000_000i64..1_000_000_000_000) {
            prop_assert_eq!(Mass::parse(&Mass(ug).to_string(), MassUnit::Gram), Ok(Mass(ug)));
        }
        #[test]
        fn any_bytes_are_answered(bytes: std::vec::Vec<u8>) {
            let _ = Mass::parse_bytes(&bytes, MassUnit::Kilogram);
        }
    }
}
