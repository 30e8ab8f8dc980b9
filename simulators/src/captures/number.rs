//! How a dialect writes numbers.

use super::pick;
use crate::rng::Rng;

/// Where the sign stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Sign {
    /// `+` or `-`, always, before the digits.
    Always,
    /// `-` before the digits, nothing for the others.
    Negative,
    /// `+` or `-` in the first column, blanks, digits.
    AlwaysApart,
    /// `-` or a blank in the first column, blanks, digits.
    NegativeApart,
    /// `+` or `-` after the digits.
    Trailing,
    /// `-` or a blank after the digits.
    TrailingNegative,
    /// Never written.
    Never,
}

/// How a number is written.
#[derive(Clone, Copy, Debug)]
pub(super) struct Number {
    pub decimals: usize,
    pub point: char,
    /// Columns of the digits, decimal sign included; 0 for no more than needed.
    pub width: usize,
    pub zeros: bool,
    pub left: bool,
    pub sign: Sign,
    /// The decimal sign is not written.
    pub implied: bool,
    /// Written between groups of three digits.
    pub group: Option<char>,
}

impl Number {
    /// For numbers of up to `most` steps of the last digit.
    pub fn invent(rng: &mut Rng, decimals: usize, most: i64) -> Self {
        let needs = most.to_string().len().max(decimals + 1) + 1;
        let sign = match rng.between(0, 99) {
            0..=29 => Sign::Always,
            30..=57 => Sign::Negative,
            58..=68 => Sign::AlwaysApart,
            69..=78 => Sign::NegativeApart,
            79..=84 => Sign::Trailing,
            85..=91 => Sign::TrailingNegative,
            _ => Sign::Never,
        };
        let point = if rng.chance(0.72) { '.' } else { ',' };
        let mut number = Self { decimals, point, width: 0, zeros: false, left: false, sign, implied: false, group: None };
        match rng.between(0, 9) {
            0..=1 => {}
            2..=4 => {
                number.width = needs + super::size(rng, 0, 2);
                number.zeros = true;
            }
            5..=8 => number.width = needs + super::size(rng, 0, 4),
            _ => {
                number.width = needs + super::size(rng, 0, 3);
                number.left = true;
            }
        }
        // Signs in a column of their own need columns.
        if matches!(sign, Sign::AlwaysApart | Sign::NegativeApart) && number.width == 0 {
            number.width = needs + pick(rng, &[1, 2, 3]);
        }
        number
    }

    /// Whether every number has as many columns.
    pub fn fixed(&self) -> bool {
        self.width > 0
    }

    fn digits(&self, steps: i64) -> String {
        let size = steps.unsigned_abs().to_string();
        let size = format!("{size:0>width$}", width = self.decimals + 1);
        let (whole, part) = size.split_at(size.len() - self.decimals);
        if self.implied {
            return format!("{whole}{part}");
        }
        let whole = match self.group {
            Some(between) => grouped(whole, between),
            None => whole.to_string(),
        };
        if part.is_empty() { whole } else { format!("{whole}{}{part}", self.point) }
    }

    /// `steps` of the last digit, written.
    pub fn write(&self, steps: i64) -> String {
        let digits = self.digits(steps);
        let digits = if self.zeros { format!("{digits:0>width$}", width = self.width) } else { digits };
        let both = if steps < 0 { "-" } else { "+" };
        let minus = if steps < 0 { "-" } else { "" };
        let blank = if steps < 0 { "-" } else { " " };
        let (width, wide) = (self.width, self.width + usize::from(self.width > 0));
        match (self.sign, self.left) {
            (Sign::Always, false) => format!("{:>wide$}", format!("{both}{digits}")),
            (Sign::Always, true) => format!("{:<wide$}", format!("{both}{digits}")),
            (Sign::Negative, false) => format!("{:>wide$}", format!("{minus}{digits}")),
            (Sign::Negative, true) => format!("{:<wide$}", format!("{minus}{digits}")),
            (Sign::AlwaysApart, false) => format!("{both}{digits:>width$}"),
            (Sign::AlwaysApart, true) => format!("{both} {digits:<width$}"),
            (Sign::NegativeApart, false) => format!("{blank}{digits:>width$}"),
            (Sign::NegativeApart, true) => format!("{blank} {digits:<width$}"),
            (Sign::Trailing, false) => format!("{:>wide$}", format!("{digits}{both}")),
            (Sign::Trailing, true) => format!("{:<wide$}", format!("{digits}{both}")),
            (Sign::TrailingNegative, false) => format!("{:>wide$}", format!("{digits}{blank}")),
            (Sign::TrailingNegative, true) => format!("{:<wide$}", format!("{digits}{blank}")),
            (Sign::Never, false) => format!("{digits:>width$}"),
            (Sign::Never, true) => format!("{digits:<width$}"),
        }
    }
}

fn grouped(whole: &str, between: char) -> String {
    let mut out = String::new();
    for (i, c) in whole.chars().enumerate() {
        if i > 0 && (whole.len() - i).is_multiple_of(3) {
            out.push(between);
        }
        out.push(c);
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_are_written_as_described() {
        let plain = Number {
            decimals: 2,
            point: '.',
            width: 0,
            zeros: false,
            left: false,
            sign: Sign::Negative,
            implied: false,
            group: None,
        };
        let cases = [
            (plain, -5, "-0.05"),
            (Number { width: 7, ..plain }, 1234, "   12.34"),
            (Number { width: 7, zeros: true, sign: Sign::Always, point: ',', ..plain }, 1234, "+0012,34"),
            (Number { width: 7, sign: Sign::AlwaysApart, ..plain }, -1234, "-  12.34"),
            (Number { width: 7, sign: Sign::Trailing, ..plain }, -1234, "  12.34-"),
            (Number { sign: Sign::TrailingNegative, ..plain }, 1234, "12.34 "),
            (Number { width: 7, left: true, ..plain }, -1234, "-12.34  "),
            (Number { width: 7, zeros: true, implied: true, sign: Sign::Never, ..plain }, 5, "0000005"),
            (Number { group: Some(','), ..plain }, 123_456_789, "1,234,567.89"),
            (Number { decimals: 0, ..plain }, 0, "0"),
        ];
        for (number, steps, text) in cases {
            assert_eq!(number.write(steps), text);
        }
    }
}
