use super::*;
use std::collections::BTreeSet;

const SEEDS: std::ops::Range<u64> = 0..3_000;

#[test]
fn the_same_seed_gives_the_same_capture() {
    for seed in 0..200 {
        assert_eq!(generate(seed), generate(seed));
    }
    let different: BTreeSet<Vec<u8>> = (0..200).map(|s| generate(s).bytes).collect();
    assert!(different.len() > 195, "{} of 200 differ", different.len());
}

/// Digits of a mass as printed in any unit with any number of decimals, without zeros at either end.
fn significant(text: impl Iterator<Item = u8>) -> Vec<u8> {
    let digits: Vec<u8> = text.filter(u8::is_ascii_digit).collect();
    let digits = String::from_utf8(digits).unwrap();
    digits.trim_matches('0').as_bytes().to_vec()
}

#[test]
fn each_mass_of_the_truth_stands_in_the_bytes_in_order() {
    let mut masses = 0;
    for seed in SEEDS {
        let capture = generate(seed);
        // A whole number of micrograms loses its point and its outer zeros; the bytes keep theirs, so both are stripped.
        let bytes: Vec<u8> = capture.bytes.iter().copied().filter(|b| !matches!(b, b'.' | b',' | b'\'')).collect();
        let mut from = 0;
        for reading in capture.truth.readings.iter().filter(|r| r.must && r.mass_ug != 0 && capture.truth.fair) {
            let wanted = significant(reading.mass_ug.to_string().bytes());
            let found = bytes[from..].windows(wanted.len()).position(|w| w == wanted.as_slice());
            let found = found.unwrap_or_else(|| panic!("seed {seed}: {} after byte {from}: {}", reading.mass_ug, capture.about));
            // Slips print the net mass after tare; what is only allowed is not looked for.
            from += found + wanted.len();
            masses += 1;
        }
    }
    assert!(masses > 20_000, "{masses}");
}

#[test]
fn every_axis_occurs() {
    let all: Vec<Capture> = SEEDS.map(generate).collect();
    let having = |word: &str| all.iter().filter(|c| c.about.contains(word)).count();
    let words = [
        "TrailingNegative",
        "AlwaysApart",
        "point: ','",
        "zeros: true",
        "left: true",
        "Bits",
        "Three",
        "of_steady: true",
        "of_steady: false",
        "even: false",
        "NetOnly",
        "before: true",
        "at_rest_only: true",
        "Xor",
        "Plain",
        "Complement",
        "Reflected",
        "Forward",
        "binary",
        "after the end",
        "end \"\"",
        "end \"\\0\"",
        "end \";\"",
        "end \"\\n\\r\"",
        "on a key",
        "\"mg\"",
        "\"kg\"",
        "\"KG\"",
        "cut_first: true",
        "cut_last: true",
        "noise: true",
        "echo: true",
        "banner: true",
        "slips",
        "counter Byte",
        "counter Word",
        "counter Running",
        "counter Silent",
        "scanner, Some",
        "scanner, None",
        "unit told",
        "masses told",
    ];
    for word in words {
        assert!(having(word) >= 8, "{word}: {}", having(word));
    }
    let fair = all.iter().filter(|c| c.truth.fair).count();
    assert!((2_400..2_950).contains(&fair), "{fair}");
    for kind in [Kind::Balance, Kind::Counter, Kind::Scanner] {
        assert!(all.iter().filter(|c| c.truth.kind == kind).count() > 200);
    }
    let marks = |want| all.iter().flat_map(|c| &c.truth.readings).filter(|r| r.steady == want).count();
    assert!(marks(Some(true)) > 5_000 && marks(Some(false)) > 5_000 && marks(None) > 5_000);
    let basis = |want| all.iter().flat_map(|c| &c.truth.readings).filter(|r| r.basis == want).count();
    assert!(basis(Basis::Net) > 5_000 && basis(Basis::Gross) > 5_000 && basis(Basis::Unmarked) > 5_000);
}

#[test]
fn a_balance_shows_an_empty_pan_and_two_loads() {
    for capture in SEEDS.map(generate).filter(|c| c.truth.fair && c.about.contains("balance")) {
        let readings = &capture.truth.readings;
        let masses: BTreeSet<i64> = readings.iter().map(|r| r.mass_ug).collect();
        assert!(readings.len() >= 8 && masses.len() >= 4, "{}", capture.about);
        assert!(masses.iter().any(|m| m.abs() < masses.last().unwrap() / 20), "{}", capture.about);
    }
}

#[test]
fn the_truth_itself_is_understood_and_a_shifted_point_is_not() {
    for capture in SEEDS.map(generate).filter(|c| c.truth.fair) {
        let mut answer = said(&capture.truth);
        assert_eq!(score(&capture.truth, &answer), Score::Understood, "{}", capture.about);
        if answer.readings.iter().any(|r| r.0 != 0) {
            answer.readings.iter_mut().for_each(|r| r.0 *= 10);
            assert!(matches!(score(&capture.truth, &answer), Score::Wrong(_)), "{}", capture.about);
        }
    }
}

/// The answer of somebody who knows it.
fn said(truth: &Truth) -> Answer {
    Answer {
        refused: false,
        kind: Some(truth.kind),
        readings: truth.readings.iter().map(|r| (r.mass_ug, r.steady, r.basis)).collect(),
        counts: truth.counts.iter().map(|c| c.0).collect(),
        codes: truth.codes.iter().map(|c| c.text.clone()).collect(),
    }
}

#[test]
fn what_a_check_value_contradicts_is_not_in_the_truth() {
    // With a check value and no other mishap, every frame whose value agrees is said, and no other.
    let mut lost = 0;
    for seed in 0..400 {
        let mut rng = Rng::new(seed);
        let mut made = balance::invent(&mut rng);
        made.plan.trouble = false;
        if made.wrap.check.is_none() {
            continue;
        }
        let moments = session::play(&mut rng, made.plan).0;
        let capture = balance::from_moments(&mut rng, &made, &moments);
        if ["cut_first: true", "cut_last: true", "noise: true"].iter().all(|w| !capture.about.contains(w)) {
            let missing = moments.len() - capture.truth.readings.len();
            assert!(missing <= 1, "{missing}: {}", capture.about);
            lost += missing;
        }
    }
    assert!(lost > 5, "{lost}");
}
