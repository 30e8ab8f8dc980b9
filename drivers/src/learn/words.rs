//! Words of the trade that lines of instruments carry.

use tarecup_core::quantity::MassUnit;
use tarecup_core::signal::Basis;

/// What a label says of the number beside it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(super) enum Label {
    /// Everything on the pan.
    Gross,
    /// Without what was tared away.
    Net,
    /// What was tared away: not on the pan.
    Tare,
}

impl Label {
    /// The basis of a mass so labelled.
    pub(super) fn basis(self) -> Basis {
        match self {
            Self::Gross => Basis::Gross,
            Self::Net | Self::Tare => Basis::Net,
        }
    }
}

/// Trade words and abbreviations of gross, net and tare in the languages that balances print (common
/// practice, no source). One letter counts as a capital only: small ones are units and parts of words.
pub(super) fn label(word: &[u8]) -> Option<Label> {
    if word.len() == 1 && !word[0].is_ascii_uppercase() {
        return None;
    }
    Some(match word.to_ascii_uppercase().as_slice() {
        b"G" | b"GS" | b"GR" | b"GRS" | b"GROSS" | b"B" | b"BR" | b"BTO" | b"BRT" | b"BRUTTO" | b"BRUTO" | b"BRUT" | b"LORDO"
        | b"LORDA" => Label::Gross,
        b"N" | b"NT" | b"NTO" | b"NET" | b"NETT" | b"NETTO" | b"NETTA" | b"NETO" => Label::Net,
        b"T" | b"TR" | b"TARE" | b"TARA" | b"TAARA" | b"TARRA" | b"PT" => Label::Tare,
        _ => return None,
    })
}

/// A unit of mass as a profile's group `unit` takes it. `Mg` is none: it may be a mark and a unit, or a megagram.
pub(super) fn unit(word: &[u8]) -> Option<MassUnit> {
    if word == b"Mg" {
        return None;
    }
    std::str::from_utf8(word).ok().and_then(MassUnit::parse)
}

/// A unit written out, which a pattern holds as a literal.
pub(super) fn long_unit(word: &[u8]) -> Option<MassUnit> {
    Some(match word.to_ascii_lowercase().as_slice() {
        b"gram" | b"grams" | b"gramm" | b"gm" => MassUnit::Gram,
        b"kilogram" | b"kilograms" | b"kilogramm" | b"kgs" => MassUnit::Kilogram,
        b"milligram" | b"milligrams" | b"milligramm" => MassUnit::Milligram,
        _ => return None,
    })
}

/// Units that balances print and that are not kept here.
pub(super) fn foreign_unit(word: &[u8]) -> bool {
    matches!(
        word.to_ascii_lowercase().as_slice(),
        b"lb" | b"lbs" | b"oz" | b"ozt" | b"ct" | b"dwt" | b"gn" | b"pcs" | b"tl" | b"mom"
    )
}

/// Pairs of words that say themselves which is at rest and which moves.
pub(super) fn plain_pair(steady: &[u8], moving: &[u8]) -> bool {
    let pair = (steady.to_ascii_uppercase(), moving.to_ascii_uppercase());
    matches!(
        (pair.0.as_slice(), pair.1.as_slice()),
        (b"ST", b"US") | (b"STABLE", b"UNSTABLE" | b"MOTION" | b"MOVING") | (b"STEADY", b"UNSTEADY" | b"MOVING" | b"MOTION")
    )
}

/// More on the pan than can be shown.
pub(super) fn overload(text: &[u8]) -> bool {
    let text = text.to_ascii_uppercase();
    let words: Vec<&[u8]> = text.split(|b| !b.is_ascii_alphabetic()).collect();
    words.iter().any(|w| matches!(*w, b"OL" | b"OVL" | b"OVER" | b"OVERLOAD" | b"OVERRANGE"))
        || words.iter().any(|w| w.len() >= 3 && w.iter().all(|b| *b == b'H'))
        || text.windows(3).any(|w| w == b"^^^")
}

/// Less on the pan than can be shown.
pub(super) fn underload(text: &[u8]) -> bool {
    let text = text.to_ascii_uppercase();
    let words: Vec<&[u8]> = text.split(|b| !b.is_ascii_alphabetic()).collect();
    words.iter().any(|w| matches!(*w, b"UL" | b"UNDER" | b"UNDERLOAD" | b"UNDERRANGE"))
        || words.iter().any(|w| w.len() >= 3 && w.iter().all(|b| *b == b'L'))
        || text.windows(3).any(|w| w == b"___")
}

/// A word that stands beside a count of drops.
pub(super) fn counting(text: &[u8]) -> bool {
    let text = text.to_ascii_lowercase();
    let known: [&[u8]; 12] =
        [b"drop", b"drops", b"blow", b"blows", b"count", b"counts", b"cnt", b"tap", b"taps", b"stroke", b"strokes", b"hits"];
    text.split(|b| !b.is_ascii_alphabetic()).any(|w| known.contains(&w))
}

/// A word that ends a count.
pub(super) fn ending(text: &[u8]) -> bool {
    let text = text.to_ascii_lowercase();
    let known: [&[u8]; 12] =
        [b"stop", b"end", b"done", b"final", b"total", b"closed", b"finish", b"finished", b"result", b"ended", b"fin", b"sum"];
    text.split(|b| !b.is_ascii_alphabetic()).any(|w| known.contains(&w))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn labels_of_the_trade() {
        for (word, says) in [
            ("GS", Some(Label::Gross)),
            ("brutto", Some(Label::Gross)),
            ("lordo", Some(Label::Gross)),
            ("BRUT", Some(Label::Gross)),
            ("NETO", Some(Label::Net)),
            ("N", Some(Label::Net)),
            ("n", None),
            ("PT", Some(Label::Tare)),
            ("ST", None),
            ("g", None),
        ] {
            assert_eq!(label(word.as_bytes()), says, "{word}");
        }
    }

    #[test]
    fn overload_only_when_clearly_so() {
        for text in ["+^^^^^^ g", "OL", " OVER g", "HHHHHH", "ST,OL"] {
            assert!(overload(text.as_bytes()) && !underload(text.as_bytes()), "{text}");
        }
        for text in ["--------", "COLD", "OLD", "H", "READY"] {
            assert!(!overload(text.as_bytes()) && !underload(text.as_bytes()), "{text}");
        }
        assert!(underload(b"UNDER") && underload(b"______ g"));
    }
}
