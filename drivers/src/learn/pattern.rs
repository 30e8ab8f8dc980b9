//! From what was learned to line patterns.

use super::slots::{Aligned, Blanks, Key};
use std::collections::BTreeSet;

/// What a place beside the number turned out to be.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) enum Role {
    /// Always this text.
    Literal(Vec<u8>),
    /// The unit; written out it is no group.
    Unit { words: BTreeSet<Vec<u8>>, group: bool },
    /// The unit, left out while the pan moves.
    UnitAtRest { words: BTreeSet<Vec<u8>>, group: bool },
    /// Words of rest and of movement; absence is the other.
    Steadiness { steady: Vec<Vec<u8>>, moving: Vec<Vec<u8>> },
    /// Words that label the mass: those kept as readings, those read past.
    Basis { kept: Vec<Vec<u8>>, passed: Vec<Vec<u8>>, optional: bool },
    /// Words that label the line and say nothing of tare.
    Label { kept: Vec<Vec<u8>>, passed: Vec<Vec<u8>> },
    /// One of these texts, with no meaning for the mass; perhaps absent.
    Any { words: Vec<Vec<u8>>, optional: bool },
    /// Other numbers.
    Digits { stamp: bool, optional: bool },
}

/// How the number is printed.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub(super) struct NumberLook {
    /// Digits before the decimal sign, when always filled up with zeros.
    pub(super) filled: Option<usize>,
    /// Least and most digits after the decimal sign; zero when there is none.
    pub(super) decimals: (usize, usize),
    pub(super) comma: bool,
    /// Some numbers begin with the decimal sign.
    pub(super) bare_point: bool,
    /// Whole numbers end with the decimal sign.
    pub(super) end_point: bool,
    pub(super) plus: bool,
    /// Every number has a sign.
    pub(super) always_signed: bool,
    /// The sign stands after the number.
    pub(super) sign_after: bool,
    pub(super) tabs: bool,
}

/// A text as a pattern.
pub(super) fn escaped(text: &[u8]) -> String {
    let mut out = String::new();
    for &b in text {
        match b {
            b' ' => out.push(' '),
            b if b.is_ascii_alphanumeric() => out.push(char::from(b)),
            b if b.is_ascii_graphic() => {
                // Only what has a meaning in a pattern.
                if br"\.+*?()|[]{}^$".contains(&b) {
                    out.push('\\');
                }
                out.push(char::from(b));
            }
            b => out.push_str(&format!("\\x{b:02X}")),
        }
    }
    out
}

fn either(words: &[Vec<u8>]) -> String {
    // The longer first, so that one word may begin another.
    let mut words: Vec<&Vec<u8>> = words.iter().filter(|w| !w.is_empty()).collect();
    words.sort_by_key(|w| (std::cmp::Reverse(w.len()), (*w).clone()));
    words.iter().map(|w| escaped(w)).collect::<Vec<_>>().join("|")
}

fn grouped(words: &[Vec<u8>]) -> String {
    let text = either(words);
    if words.len() > 1 { format!("(?:{text})") } else { text }
}

fn optional(text: String, optional: bool) -> String {
    if optional { format!("(?:{text})?") } else { text }
}

fn blanks(b: Blanks, tabs: bool) -> String {
    let one = if tabs { r"[ \t]" } else { " " };
    match (b.seen, b.none) {
        (false, _) => String::new(),
        (true, false) => format!("{one}+"),
        (true, true) => format!("{one}*"),
    }
}

impl Role {
    fn pattern(&self, passed_over: bool) -> String {
        let set = |words: &BTreeSet<Vec<u8>>| either(&words.iter().cloned().collect::<Vec<_>>());
        let unit = |words: &BTreeSet<Vec<u8>>, group: bool| match group && !passed_over {
            true => format!("(?<unit>{})", set(words)),
            false => format!("(?:{})", set(words)),
        };
        match self {
            Self::Literal(text) => escaped(text),
            Self::Unit { words, group } => unit(words, *group),
            Self::UnitAtRest { words, .. } if passed_over => format!("(?:{})?", set(words)),
            Self::UnitAtRest { words, group } => format!("(?<steady>{})?", unit(words, *group)),
            Self::Steadiness { steady, moving } => steadiness(steady, moving, passed_over),
            Self::Basis { passed, .. } | Self::Label { passed, .. } if passed_over => grouped(passed),
            Self::Basis { kept, optional: o, .. } => format!("(?<basis>{}){}", either(kept), if *o { "?" } else { "" }),
            Self::Label { kept, .. } => grouped(kept),
            Self::Any { words, optional: o } => optional(grouped(words), *o),
            Self::Digits { stamp: true, optional: o } => optional(r"\d[\d.,:/-]*".into(), *o),
            Self::Digits { stamp: false, optional: o } => optional(r"(?:[+-] *)?[.,]?\d[\d.,]*".into(), *o),
        }
    }
}

fn steadiness(steady: &[Vec<u8>], moving: &[Vec<u8>], passed_over: bool) -> String {
    let absent = |words: &[Vec<u8>]| words.iter().any(Vec::is_empty);
    let group = |name: &str, words: &[Vec<u8>]| match either(words) {
        text if text.is_empty() => None,
        text if passed_over => Some(text),
        text => Some(format!("(?<{name}>{text})")),
    };
    let parts: Vec<String> = [group("steady", steady), group("moving", moving)].into_iter().flatten().collect();
    let parts = parts.join("|");
    if absent(steady) || absent(moving) { format!("(?:{parts})?") } else { format!("(?:{parts})") }
}

impl NumberLook {
    fn pattern(&self, passed_over: bool) -> String {
        let gap = if self.tabs { r"[ \t]*" } else { " *" };
        let sign = match (self.sign_after, self.plus, self.always_signed) {
            (true, ..) => String::new(),
            (_, true, true) => format!("[+-]{gap}"),
            (_, true, false) => format!("[+-]?{gap}"),
            (..) => format!("-?{gap}"),
        };
        let whole = match (self.filled, self.bare_point) {
            (Some(n), _) => format!(r"\d{{{n}}}"),
            (None, true) => r"\d*".into(),
            (None, false) => r"\d+".into(),
        };
        let point = if self.comma { "," } else { r"\." };
        let part = match self.decimals {
            (_, 0) => String::new(),
            (a, b) if a == b => format!(r"{point}\d{{{a}}}"),
            (0, b) => format!(r"(?:{point}\d{{1,{b}}})?"),
            (a, b) => format!(r"{point}\d{{{a},{b}}}"),
        };
        let end = if self.end_point { r"\.?" } else { "" };
        let mass = format!("{sign}{whole}{part}{end}");
        let mass = if passed_over { mass } else { format!("(?<mass>{mass})") };
        match (self.sign_after, passed_over) {
            (false, _) => mass,
            (true, false) => format!("{mass}{gap}(?<sign>[+-])?"),
            (true, true) => format!("{mass}{gap}[+-]?"),
        }
    }
}

/// The two sides of a mass with their roles.
#[derive(Clone, Debug)]
pub(super) struct Layout<'a> {
    pub(super) before: (&'a Aligned, Vec<Role>),
    pub(super) after: (&'a Aligned, Vec<Role>),
    pub(super) number: NumberLook,
}

impl Layout<'_> {
    /// The pattern of mass lines, or of the lines that are like them and are read past.
    pub(super) fn pattern(&self, passed_over: bool) -> String {
        let side = |(aligned, roles): &(&Aligned, Vec<Role>)| {
            let mut out = String::new();
            for (i, role) in roles.iter().enumerate() {
                out += &blanks(aligned.blanks[i], self.number.tabs);
                out += &role.pattern(passed_over);
            }
            out + &blanks(aligned.blanks[roles.len()], self.number.tabs)
        };
        format!("{}{}{}", side(&self.before), self.number.pattern(passed_over), side(&self.after))
    }

    pub(super) fn roles(&self) -> impl Iterator<Item = &Role> {
        self.before.1.iter().chain(&self.after.1)
    }
}

/// The texts that a place holds; absence is the empty text.
pub(super) fn words(cells: &[Option<Key>]) -> Vec<&[u8]> {
    fn text(cell: &Option<Key>) -> &[u8] {
        match cell {
            Some(Key::Text(text, _) | Key::Unit(text)) => text,
            _ => b"",
        }
    }
    cells.iter().map(text).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn texts_are_quoted() {
        assert_eq!(escaped(b"W=1.5* (g)\x03"), r"W=1\.5\* \(g\)\x03");
    }

    #[test]
    fn numbers_of_every_look() {
        let look = NumberLook { decimals: (2, 2), ..NumberLook::default() };
        assert_eq!(look.pattern(false), r"(?<mass>-? *\d+\.\d{2})");
        let look = NumberLook { decimals: (3, 3), comma: true, filled: Some(4), plus: true, always_signed: true, ..look };
        assert_eq!(look.pattern(false), r"(?<mass>[+-] *\d{4},\d{3})");
        let look = NumberLook { decimals: (2, 2), sign_after: true, ..NumberLook::default() };
        assert_eq!(look.pattern(false), r"(?<mass>\d+\.\d{2}) *(?<sign>[+-])?");
    }

    #[test]
    fn marks_of_rest_and_their_absence() {
        let own = |w: &[&str]| w.iter().map(|w| w.as_bytes().to_vec()).collect::<Vec<_>>();
        let role = Role::Steadiness { steady: own(&["S"]), moving: own(&["U", "?"]) };
        assert_eq!(role.pattern(false), r"(?:(?<steady>S)|(?<moving>\?|U))");
        let role = Role::Steadiness { steady: own(&["*"]), moving: own(&[""]) };
        assert_eq!(role.pattern(false), r"(?:(?<steady>\*))?");
    }
}
