//! What is wrong in a file, where, and what to try.

use std::fmt;
use tarecup_core::near::nearest;

/// Faults kept of one file; beyond this they are only counted.
pub const MOST_FAULTS: usize = 100;

/// A place in a text file, counted from 1; columns are characters.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Place {
    /// Line, from 1.
    pub line: u32,
    /// Column in characters, from 1.
    pub column: u32,
}

/// A value that remembers where it was written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Placed<T> {
    /// The value.
    pub value: T,
    /// Where it stands.
    pub at: Place,
}

/// One thing that is wrong in a file.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Fault {
    /// The file, as it was named by the caller.
    pub file: String,
    /// Line, from 1.
    pub line: u32,
    /// Column in characters, from 1.
    pub column: u32,
    /// Which key, such as `specimen 2, liquid 1: wet_g`; empty for the file as a whole.
    pub path: String,
    /// What is wrong, to be read after the path.
    pub says: String,
    /// What would be right.
    pub expected: String,
    /// What to try.
    pub try_this: String,
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}:{}:{}: ", self.file, self.line, self.column)?;
        if !self.path.is_empty() {
            write!(f, "{} ", self.path)?;
        }
        write!(f, "{} — expected {}; try {}", self.says, self.expected, self.try_this)
    }
}

/// Everything found wrong in one pass, in the order of the file.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Faults {
    /// The first [`MOST_FAULTS`] faults.
    pub list: Vec<Fault>,
    /// How many more there were at least; very long lists of faults are not read to their end.
    pub more: usize,
}

impl fmt::Display for Faults {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, fault) in self.list.iter().enumerate() {
            if i > 0 {
                writeln!(f)?;
            }
            write!(f, "{fault}")?;
        }
        if self.more > 0 {
            write!(f, "\nand at least {} more; correct these first", self.more)?;
        }
        Ok(())
    }
}

impl std::error::Error for Faults {}

impl From<Fault> for Faults {
    fn from(fault: Fault) -> Self {
        Self { list: vec![fault], more: 0 }
    }
}

/// A text from a file, fit to stand in a message: in quotes, control
/// characters escaped, cut when long.
pub(crate) fn quote(text: &str) -> String {
    const LONGEST: usize = 48;
    let shown: String = text.chars().take(LONGEST).flat_map(char::escape_debug).collect();
    if text.chars().nth(LONGEST).is_some() { format!("\"{shown}…\"") } else { format!("\"{shown}\"") }
}

/// A sentence that holds texts from a file, fit to stand in a message: control
/// characters escaped, cut when long.
pub(crate) fn harmless(sentence: &str) -> String {
    const LONGEST: usize = 400;
    let mut shown = String::new();
    for c in sentence.chars().take(LONGEST) {
        if c.is_control() { shown.extend(c.escape_debug()) } else { shown.push(c) }
    }
    if sentence.chars().nth(LONGEST).is_some() {
        shown.push('…');
    }
    shown
}

/// The candidate that `word` was probably meant to be.
pub fn did_you_mean<'c>(word: &str, candidates: impl IntoIterator<Item = &'c str>) -> Option<&'c str> {
    nearest(word, candidates.into_iter())
}

/// The remedy for a name that is not known: the nearest one, or the list.
pub(crate) fn remedy_for_name(word: &str, known: &[&str]) -> String {
    match did_you_mean(word, known.iter().copied()) {
        Some(near) => format!("{}: did you mean that?", quote(near)),
        None if known.is_empty() => "leaving it out".to_string(),
        None => format!("one of {}", known.join(", ")),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn near_words_are_found_and_far_ones_are_not() {
        let known = ["baud", "bench", "frame", "steady_readings"];
        for (word, meant) in [
            ("buad", Some("baud")),
            ("Baud", Some("baud")),
            ("steady_reading", Some("steady_readings")),
            ("colour", None),
            ("", None),
        ] {
            assert_eq!(did_you_mean(word, known), meant, "{word}");
        }
        assert_eq!(did_you_mean(&"x".repeat(1_000_000), known), None);
    }

    #[test]
    fn hostile_text_is_shown_harmlessly() {
        assert_eq!(quote("a\u{1b}[31m\n"), "\"a\\u{1b}[31m\\n\"");
        assert!(quote(&"y".repeat(500)).len() < 60);
        assert_eq!(harmless("the \"unit\" a\u{1b}[31m\n is none"), "the \"unit\" a\\u{1b}[31m\\n is none");
        assert!(harmless(&"\u{1}".repeat(1_000_000)).len() < 3_000);
    }
}
