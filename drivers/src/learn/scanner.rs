//! Scanners: lines that are codes.

use super::columns::Lines;
use super::counter::profile;
use super::pattern::escaped;
use super::read::Draft;
use super::words;
use super::{Hints, Refusal};
use crate::profile::text::LineText;
use crate::profile::{CODE_MAX, Kind};
use std::collections::BTreeSet;

const UNCLEAR: &str = "the lines could be codes, counts or masses: read a few different codes, or say --kind scanner";

fn refuse<T>() -> Result<T, Refusal> {
    Err(Refusal::new(None, 2, UNCLEAR))
}

/// Learns a scanner's lines.
pub(super) fn learn(lines: &Lines, hints: &Hints) -> Result<Draft, Refusal> {
    let told = hints.kind == Some(Kind::Scanner);
    let codes: Vec<&[u8]> = lines.lines.iter().map(|l| l.body.trim_ascii()).collect();
    let prefix = prefix(&codes);
    let bare: Vec<&[u8]> = codes.iter().map(|c| &c[prefix.len()..]).map(without_symbology).collect();
    let different: BTreeSet<&[u8]> = bare.iter().copied().collect();
    let identified =
        prefix.is_empty() && codes.iter().filter(|c| without_symbology(c).len() < c.len()).count() * 10 >= codes.len() * 9;
    let blanks = identified || told || kinds(&different) > 1;
    let good = bare.iter().filter(|c| is_code(c, blanks)).count();
    let measured = codes.iter().any(|c| words::overload(c) || words::underload(c) || words::counting(c));
    if good * 10 < bare.len() * 9 || different.len() < 3 || (measured && !told) {
        return refuse();
    }
    if !told && !identified && (rising(&bare) || !(lettered(&different) || numbered(&bare, &different))) {
        return refuse();
    }
    let head = if prefix.is_empty() { r"(?:\][A-Za-z][0-9A-Za-z])?".to_owned() } else { escaped(prefix) };
    let line = LineText { pattern: format!("{head}(?<code>.+)"), width: None, means: None, means_basis: None };
    Ok(Draft { text: profile(Kind::Scanner, lines, vec![line]), expect: Vec::new() })
}

/// What all lines begin with, up to a separator: it is no part of a code.
fn prefix<'a>(codes: &[&'a [u8]]) -> &'a [u8] {
    let Some(first) = codes.first() else { return b"" };
    let end = first.iter().position(|b| matches!(b, b':' | b'=' | b' '));
    let Some(end) = end.map(|e| e + 1) else { return b"" };
    let letters = first[..end - 1].iter().all(u8::is_ascii_alphabetic) && end > 1;
    // After a word and a blank a short number may be the rest of the code.
    let rest = |c: &[u8]| first[end - 1] != b' ' || c.len() - end >= 8 || c[end..].iter().any(u8::is_ascii_alphabetic);
    let all = codes.iter().all(|c| c.len() > end && c.starts_with(&first[..end]) && rest(c));
    if letters && all { &first[..end] } else { b"" }
}

/// A code without its symbology identifier (ISO/IEC 15424).
fn without_symbology(code: &[u8]) -> &[u8] {
    match code {
        [b']', a, b, rest @ ..] if a.is_ascii_alphabetic() && b.is_ascii_alphanumeric() && !rest.is_empty() => rest,
        _ => code,
    }
}

/// `blanks` says whether a code may hold one, as in `tin 17`.
fn is_code(text: &[u8], blanks: bool) -> bool {
    let begins = text.first().is_some_and(|b| b.is_ascii_alphanumeric() || *b == b'+' || *b >= 0x80);
    let words = text.split(|b| *b == b' ').count();
    let plain = words == 1 || (blanks && words == 2 && !text[0].is_ascii_digit());
    begins
        && plain
        && text.len() <= CODE_MAX
        && std::str::from_utf8(text).is_ok()
        && text.iter().all(|b| b.is_ascii_graphic() || *b == b' ' || *b >= 0x80)
        && !decimal(text)
}

/// How many different words codes begin with.
fn kinds(different: &BTreeSet<&[u8]>) -> usize {
    let word = |c: &&[u8]| c.iter().take_while(|b| b.is_ascii_alphabetic()).copied().collect::<Vec<u8>>();
    different.iter().map(word).collect::<BTreeSet<_>>().len()
}

/// A decimal number by itself, or in a text.
fn decimal(text: &[u8]) -> bool {
    text.windows(3).any(|w| w[0].is_ascii_digit() && matches!(w[1], b'.' | b',') && w[2].is_ascii_digit())
}

/// Letters and digits in many arrangements, as codes have them.
fn lettered(different: &BTreeSet<&[u8]>) -> bool {
    let of = |is: fn(&u8) -> bool| different.iter().filter(|c| c.iter().any(is)).count();
    let n = different.len();
    of(u8::is_ascii_alphabetic) * 10 >= n * 8 && of(u8::is_ascii_digit) * 10 >= n * 5
}

/// Codes of digits alone: all of one length, different, not going up by ones, and longer than a count or with the check
/// digit of trade item numbers (GS1 General Specifications, section 7.9).
fn numbered(all: &[&[u8]], different: &BTreeSet<&[u8]>) -> bool {
    let digits = different.iter().all(|c| c.iter().all(u8::is_ascii_digit));
    let lengths: BTreeSet<usize> = different.iter().map(|c| c.len()).collect();
    let length = lengths.first().copied().unwrap_or(0);
    let repeats = all.len() - different.len();
    let item = matches!(length, 8 | 12 | 13 | 14) && different.iter().all(|c| checked(c));
    let long = length >= 11 && different.iter().all(|c| c[0] != b'0');
    digits && lengths.len() == 1 && (long || repeats * 2 <= all.len()) && (item || length >= 9)
}

/// One word and numbers that go up by one or stay: containers read in their order, or a counter.
fn rising(all: &[&[u8]]) -> bool {
    let split = |c: &[u8]| {
        let at = c.iter().rposition(|b| !b.is_ascii_digit()).map_or(0, |i| i + 1);
        let n = std::str::from_utf8(&c[at..]).ok().and_then(|t| t.parse::<u64>().ok());
        n.map(|n| (c[..at].to_vec(), n))
    };
    let parts: Vec<Option<(Vec<u8>, u64)>> = all.iter().map(|c| split(c)).collect();
    let near = |n: u64, m: u64| n == m || n.checked_add(1) == Some(m) || n.checked_add(2) == Some(m);
    let up = parts.windows(2).filter(|w| matches!((&w[0], &w[1]), (Some((a, n)), Some((b, m))) if a == b && near(*n, *m)));
    up.count() * 10 >= (parts.len() - 1) * 8
}

fn checked(code: &[u8]) -> bool {
    let weigh = |(i, b): (usize, &u8)| u32::from(b - b'0') * if i % 2 == 0 { 1 } else { 3 };
    code.iter().rev().enumerate().map(weigh).sum::<u32>() % 10 == 0
}

#[cfg(test)]
mod tests {
    use super::*;

    /// 4006381333931 is a worked example of the check digit (GS1, from memory).
    #[test]
    fn the_check_digit_of_item_numbers() {
        assert!(checked(b"4006381333931") && !checked(b"4006381333930"));
    }
}
