//! Lines that look like another kind of instrument's.

use regex::bytes::{Regex, RegexBuilder};
use std::sync::LazyLock;

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
