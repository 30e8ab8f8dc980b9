//! Guesses that help people: the nearest known word, and lines that look like
//! another kind of instrument's.

use regex::bytes::{Regex, RegexBuilder};
use std::sync::LazyLock;

/// The candidate that differs least from `word`, if it differs little.
pub fn nearest<'a>(word: &str, candidates: &[&'a str]) -> Option<&'a str> {
    let scored = candidates.iter().map(|c| (distance(word.as_bytes(), c.as_bytes()), *c));
    scored.min_by_key(|(d, _)| *d).filter(|(d, c)| *d <= 1.max(c.len() / 3)).map(|(_, c)| c)
}

/// Number of single-letter changes between two words.
fn distance(a: &[u8], b: &[u8]) -> usize {
    let mut row: Vec<usize> = (0..=b.len()).collect();
    for (i, x) in a.iter().take(64).enumerate() {
        let mut diagonal = row[0];
        row[0] = i + 1;
        for (j, y) in b.iter().enumerate() {
            let change = diagonal + usize::from(!x.eq_ignore_ascii_case(y));
            diagonal = row[j + 1];
            row[j + 1] = change.min(diagonal + 1).min(row[j] + 1);
        }
    }
    row[b.len()]
}

fn fixed(pattern: &str) -> Option<Regex> {
    RegexBuilder::new(pattern).unicode(false).case_insensitive(true).build().ok()
}

static MASS: LazyLock<Option<Regex>> = LazyLock::new(|| {
    fixed(r"(?:\A|[^0-9a-z])(?:[0-9]+[.,][0-9]+ *[kmu]?g(?:\z|[^0-9a-z])|[kmu]?g *[+-]? *[0-9]+[.,][0-9]+(?:\z|[^0-9a-z]))")
});

static COUNT: LazyLock<Option<Regex>> =
    LazyLock::new(|| fixed(r"\A *(?:drops?|blows?|count|total|stop|end)[ =:#]+[0-9]{1,5} *\z"));

/// A decimal number with a unit of mass beside it.
pub fn looks_like_mass(body: &[u8]) -> bool {
    MASS.as_ref().is_some_and(|r| r.is_match(body))
}

/// A counting word and a whole number.
pub fn looks_like_count(body: &[u8]) -> bool {
    COUNT.as_ref().is_some_and(|r| r.is_match(body))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn near_words() {
        let known = ["mass", "unit", "steady"];
        assert_eq!(nearest("stead", &known), Some("steady"));
        assert_eq!(nearest("Mass", &known), Some("mass"));
        assert_eq!(nearest("weight", &known), None);
    }

    #[test]
    fn masses_and_counts_look_different() {
        for line in ["+   23.4571 g  S", "g 23,45", "12.3kg", "N 0.5 mg"] {
            assert!(looks_like_mass(line.as_bytes()), "{line}");
            assert!(!looks_like_count(line.as_bytes()), "{line}");
        }
        for line in ["DROP 17", "stop=25", "END 25", "blows: 3"] {
            assert!(looks_like_count(line.as_bytes()), "{line}");
            assert!(!looks_like_mass(line.as_bytes()), "{line}");
        }
        for line in ["C11", "S-101", "tick", "=27", "*", "1.2.3", "bag 12"] {
            assert!(!looks_like_count(line.as_bytes()) && !looks_like_mass(line.as_bytes()), "{line}");
        }
    }
}
