//! How the numbers of mass lines are printed: sign, decimal sign, decimals, unit.

use super::behave::{self, Meaning, Value};
use super::columns::Lines;
use super::pattern::NumberLook;
use super::pick::MassLine;
use super::tokens::Commas;
use super::words;
use super::{Hints, Refusal};
use crate::profile::Kind;
use std::collections::{BTreeMap, BTreeSet};
use tarecup_core::quantity::{Mass, MassUnit};

/// One way to read the numbers.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) struct How {
    pub(super) look: NumberLook,
    /// Unit of numbers without one.
    pub(super) unit: Option<MassUnit>,
    /// Decimals that are not printed.
    pub(super) implied: Option<u8>,
}

impl How {
    /// The unit as a profile writes it.
    pub(super) fn unit_word(&self) -> String {
        let word = match self.unit {
            Some(MassUnit::Kilogram) => "kg",
            Some(MassUnit::Milligram) => "mg",
            Some(MassUnit::Microgram) => "ug",
            _ => "g",
        };
        word.into()
    }
}

fn refuse<T>(depth: u8, says: &str) -> Result<T, Refusal> {
    Err(Refusal::new(Some(Kind::Balance), depth, says))
}

fn unit_of(lines: &Lines, m: &MassLine) -> Option<MassUnit> {
    let word = lines.lines[m.line].text(m.unit?);
    words::unit(word).or(words::long_unit(word))
}

/// Digits after the decimal sign; `None` without one.
fn decimals(text: &[u8]) -> Option<usize> {
    text.iter().position(|b| matches!(b, b'.' | b',')).map(|at| text.len() - at - 1)
}

/// Leaves out single lines whose number looks otherwise; refuses two looks.
pub(super) fn usual(lines: &Lines, masses: Vec<MassLine>) -> Result<Vec<MassLine>, Refusal> {
    type Look = (Option<u8>, Option<usize>, bool, bool);
    let look = |m: &MassLine| -> Look {
        let text = lines.lines[m.line].text(m.num);
        let unit = unit_of(lines, m).map(|u| u as u8);
        (unit, decimals(text), text.contains(&b','), !text[0].is_ascii_digit())
    };
    let mut counts: BTreeMap<Look, usize> = BTreeMap::new();
    // A line that leaves the unit out is like those that have it.
    let only = masses.iter().filter_map(|m| unit_of(lines, m)).map(|u| u as u8).collect::<BTreeSet<_>>();
    let of = |m: &MassLine| {
        let mut l = look(m);
        if only.len() == 1 {
            l.0 = only.first().copied();
        }
        l
    };
    for m in &masses {
        *counts.entry(of(m)).or_default() += 1;
    }
    let all = masses.len();
    let first = lines.lines.first().map(|l| l.at);
    let rare = |m: &MassLine| {
        let n = counts[&of(m)];
        n == 1 && (all >= 8 || first == Some(lines.lines[m.line].at))
    };
    let kept: Vec<MassLine> = masses.iter().filter(|m| !rare(m)).cloned().collect();
    let mut per_unit: BTreeMap<Option<u8>, BTreeSet<(Option<usize>, bool)>> = BTreeMap::new();
    for m in &kept {
        let l = of(m);
        per_unit.entry(l.0).or_default().insert((l.1, l.2));
    }
    if per_unit.values().any(|looks| looks.len() > 1) {
        return refuse(
            6,
            "numbers of one unit are printed in two ways: see that one instrument alone is connected, and that it groups no thousands",
        );
    }
    Ok(kept)
}

/// Every way the numbers can be read; several only where known masses will choose.
pub(super) fn ways(lines: &Lines, masses: &[MassLine], hints: &Hints) -> Result<Vec<How>, Refusal> {
    let texts: BTreeSet<&[u8]> = masses.iter().map(|m| lines.lines[m.line].text(m.num)).collect();
    let known = hints.masses.iter().any(|m| m.ug() != 0);
    let comma = texts.iter().any(|t| t.contains(&b','));
    if comma && texts.iter().any(|t| t.contains(&b'.')) {
        return refuse(6, "numbers hold both a comma and a point: set the balance to group no thousands");
    }
    if lines.commas == Commas::Unclear {
        return refuse(
            6,
            "commas part fields and may also be decimal signs: set the balance to a decimal point, or to another separator",
        );
    }
    if comma && !known && could_be_thousands(&texts) {
        return refuse(
            6,
            "the comma could part thousands: take everything off the pan so that zero is shown, or say what is on it with --mass",
        );
    }
    let mut look = sign(lines, masses)?;
    let filled = |t: &&[u8]| t.len() > 1 && t[0] == b'0' && t[1].is_ascii_digit();
    let zero_filled = texts.iter().any(filled);
    let whole = texts.iter().all(|t| decimals(t).is_none());
    let front: BTreeSet<usize> = texts.iter().map(|t| t.iter().position(|b| !b.is_ascii_digit()).unwrap_or(t.len())).collect();
    look.comma = comma;
    look.filled = front.first().copied().filter(|_| zero_filled && front.len() == 1);
    look.bare_point = front.contains(&0);
    look.end_point = texts.iter().any(|t| decimals(t) == Some(0));
    let places: Vec<usize> = texts.iter().map(|t| decimals(t).unwrap_or(0)).collect();
    look.decimals = (places.iter().min().copied().unwrap_or(0), places.iter().max().copied().unwrap_or(0));
    look.tabs = masses.iter().any(|m| lines.lines[m.line].body.contains(&b'\t'));
    let implied: Vec<Option<u8>> = match (whole && zero_filled, known) {
        (true, false) => {
            return refuse(
                6,
                "numbers are filled up with zeros and show no decimal point: say what was put on the pan with --mass 0 --mass 100.00g",
            );
        }
        (true, true) => [None].into_iter().chain((1..=6).map(Some)).collect(),
        (false, _) => vec![None],
    };
    let units = units(lines, masses, hints);
    Ok(implied.iter().flat_map(|i| units.iter().map(|u| How { look: look.clone(), unit: *u, implied: *i })).collect())
}

/// Units that numbers without one could have.
fn units(lines: &Lines, masses: &[MassLine], hints: &Hints) -> Vec<Option<MassUnit>> {
    let printed: BTreeSet<i64> = masses.iter().filter_map(|m| unit_of(lines, m)).map(MassUnit::micrograms).collect();
    let units = [MassUnit::Gram, MassUnit::Kilogram, MassUnit::Milligram];
    match (printed.len(), hints.unit) {
        (0, Some(unit)) => vec![Some(unit)],
        (0, None) => units.map(Some).to_vec(),
        (1, _) => vec![[MassUnit::Microgram].into_iter().chain(units).find(|u| printed.contains(&u.micrograms()))],
        _ => vec![None],
    }
}

/// One to three digits, a comma and three digits, and nothing that shows a zero before the comma.
fn could_be_thousands(texts: &BTreeSet<&[u8]>) -> bool {
    texts.iter().all(|t| decimals(t) == Some(3)) && !texts.iter().any(|t| t[0] == b'0' || t.len() > 7)
}

/// Where the sign stands.
fn sign(lines: &Lines, masses: &[MassLine]) -> Result<NumberLook, Refusal> {
    let text = |m: &MassLine, t: Option<usize>| t.map(|t| lines.lines[m.line].text(t));
    let front: Vec<Option<&[u8]>> = masses.iter().map(|m| text(m, m.sign)).collect();
    let trail: Vec<Option<&[u8]>> = masses.iter().map(|m| text(m, m.trail)).collect();
    let mut look = NumberLook {
        plus: front.contains(&Some(b"+")),
        always_signed: front.iter().all(Option::is_some),
        ..NumberLook::default()
    };
    // But for one that is cut.
    let dashes = front.iter().filter(|s| **s == Some(b"-")).count();
    if dashes + 1 + front.len() / 20 >= front.len()
        || (front.iter().all(Option::is_none) && trail.iter().all(|s| *s == Some(b"-")))
    {
        return refuse(
            6,
            "every number has a minus sign, which could be a dash: put something on the pan that is heavier than what was tared away",
        );
    }
    if front.iter().any(Option::is_some) || trail.iter().all(Option::is_none) {
        return Ok(look);
    }
    if trail.iter().all(|s| *s == Some(b"+")) {
        return Ok(look);
    }
    let plain: Vec<Value> = masses.iter().filter_map(|m| value(lines, m, false, None, MassUnit::Gram).ok()).collect();
    let words: Vec<&[u8]> = trail.iter().map(|t| t.unwrap_or(b"")).collect();
    let both = trail.contains(&Some(b"+")) && trail.iter().all(Option::is_some);
    let close = |a: &Value, b: Option<&Value>| b.is_none_or(|b| (a.ug - b.ug).abs() <= 2 * a.step);
    let side = |i: usize| (i.checked_sub(1).and_then(|j| plain.get(j)), plain.get(i + 1));
    let still = |i: usize| plain.get(i).is_some_and(|v| close(v, side(i).0) && close(v, side(i).1));
    let far = |a: &Value, b: Option<&Value>| b.is_some_and(|b| (a.ug - b.ug).abs() > 5 * a.step);
    let alone = |i: usize| plain.get(i).is_some_and(|v| far(v, side(i).0) && far(v, side(i).1));
    let any = |dash: bool, is: &dyn Fn(usize) -> bool| words.iter().enumerate().any(|(i, w)| (*w == b"-") == dash && is(i));
    // Without a dash the pan rests and moves: the dash is neither mark.
    let at_rest = any(true, &still) || (any(false, &still) && any(false, &alone));
    let moves = matches!(behave::steadiness(&plain, &words), Meaning::Steadiness { .. });
    // A dash that stands only while the numbers change is a mark of movement, not a sign.
    look.sign_after = match (both, at_rest, moves) {
        (true, _, false) | (_, true, false) => true,
        (false, false, true) => false,
        _ => {
            return refuse(
                6,
                "a dash after some numbers may be a sign or a mark: load and unload the pan once more and wait until it is at rest",
            );
        }
    };
    Ok(look)
}

fn value(lines: &Lines, m: &MassLine, sign_after: bool, implied: Option<u8>, unit: MassUnit) -> Result<Value, Refusal> {
    let line = &lines.lines[m.line];
    let digits = line.text(m.num);
    let minus = |t: Option<usize>| t.is_some_and(|t| line.text(t) == b"-");
    let unit = unit_of(lines, m).unwrap_or(unit);
    let wrong = || {
        Refusal::new(Some(Kind::Balance), 6, "a number is too long to be a mass: set the balance to send the mass with its unit")
    };
    let text = match implied.map(usize::from) {
        Some(n) => {
            let at = digits.len().checked_sub(n).ok_or_else(wrong)?;
            [&digits[..at], b".", &digits[at..]].concat()
        }
        None => digits.to_vec(),
    };
    let (mass, step): (Mass, Mass) = Mass::parse_bytes(&text, unit).map_err(|_| wrong())?;
    let below = minus(m.sign) || (sign_after && minus(m.trail));
    Ok(Value { ug: if below { -mass.ug() } else { mass.ug() }, step: step.ug(), part: 0 })
}

/// Whether the last digits count the lines: another number stands right behind the mass.
fn counts_lines(lines: &Lines, masses: &[MassLine]) -> bool {
    let last = |m: &MassLine| {
        let text = lines.lines[m.line].text(m.num);
        let digits: Vec<u8> = text.iter().copied().filter(u8::is_ascii_digit).collect();
        digits.get(digits.len().saturating_sub(2)..).and_then(|d| std::str::from_utf8(d).ok()?.parse::<u32>().ok())
    };
    let up = masses.windows(2).filter(|w| matches!((last(&w[0]), last(&w[1])), (Some(a), Some(b)) if (a + 1) % 100 == b)).count();
    masses.len() >= 5 && up * 10 >= (masses.len() - 1) * 7
}

/// The masses so read.
pub(super) fn values(lines: &Lines, masses: &[MassLine], how: &How) -> Result<Vec<Value>, Refusal> {
    if counts_lines(lines, masses) {
        return refuse(7, "another number stands right behind the mass: set the balance to send the mass alone");
    }
    let unit = how.unit.unwrap_or(MassUnit::Gram);
    masses.iter().map(|m| value(lines, m, how.look.sign_after, how.implied, unit)).collect()
}
