//! The lines of a capture, taken apart, and the numbers in them that have a unit.

use super::Refusal;
use super::checksum::Checked;
use super::digits;
use super::tokens::{self, Commas, Sort, Token};
use super::words::{self, Label};
use std::collections::{BTreeMap, BTreeSet};

/// A line that is text.
#[derive(Clone, Debug)]
pub(super) struct Line {
    pub(super) body: Vec<u8>,
    pub(super) tokens: Vec<Token>,
    /// Its place among everything the framer cut.
    pub(super) at: usize,
    pub(super) numbers: Vec<Num>,
}

/// A number and what stands around it; tokens are named by their place in the line.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Num {
    pub(super) token: usize,
    pub(super) unit: Option<usize>,
    /// A unit in front of it.
    before: Option<usize>,
    pub(super) label: Option<Label>,
}

/// All lines.
#[derive(Clone, Debug)]
pub(super) struct Lines {
    pub(super) lines: Vec<Line>,
    pub(super) checked: Checked,
    pub(super) commas: Commas,
}

impl Line {
    pub(super) fn text(&self, token: usize) -> &[u8] {
        self.tokens[token].of(&self.body)
    }

    /// Whether a number of it has a unit.
    pub(super) fn weighs(&self) -> bool {
        self.numbers.iter().any(|n| n.unit.is_some())
    }

    /// Its shape: digits made alike.
    pub(super) fn shape(&self) -> Vec<u8> {
        let mut shape: Vec<u8> = Vec::new();
        for t in &self.tokens {
            match t.sort {
                Sort::Number => shape.push(b'#'),
                Sort::Stamp => shape.push(b'@'),
                Sort::Blank => shape.push(b' '),
                Sort::Word | Sort::Mark => shape.extend(t.of(&self.body)),
            }
        }
        shape
    }
}

/// Whether a line is text: printable, but for the few control characters that dialects use.
/// Letters beyond ASCII only where most lines have them.
pub(super) fn is_text(body: &[u8], letters: bool) -> bool {
    body.iter().all(|b| {
        b.is_ascii_graphic()
            || (letters && *b >= 0x80)
            || matches!(b, b' ' | b'\t' | 0x01..=0x07 | 0x0C | b'\r' | b'\n' | 0x10..=0x17)
    })
}

impl Lines {
    /// Takes all lines apart.
    pub(super) fn new(checked: &Checked) -> Result<Self, Refusal> {
        let spoken: Vec<&(usize, Vec<u8>)> = checked.lines.iter().filter(|(_, b)| !b.trim_ascii().is_empty()).collect();
        let high = spoken.iter().filter(|(_, b)| !b.is_ascii()).count();
        let letters =
            high * 2 >= spoken.len() && spoken.iter().all(|(_, b)| b.iter().filter(|b| **b >= 0x80).count() * 2 <= b.len());
        let texts: Vec<&[u8]> = spoken.iter().map(|(_, b)| b.as_slice()).filter(|b| is_text(b, letters)).collect();
        if texts.len() * 10 < spoken.len() * 7 || texts.len() < 3 {
            let says = "the bytes are no text: listen again with another speed or character frame, such as 7E1 or 7O1";
            return Err(Refusal::new(None, 1, says));
        }
        let commas = tokens::commas(&texts);
        let mut memo: BTreeMap<&[u8], (Vec<Token>, Vec<Num>)> = BTreeMap::new();
        for body in &texts {
            memo.entry(body).or_insert_with(|| {
                let tokens = tokens::tokens(body, commas);
                let numbers = numbers(body, &tokens);
                (tokens, numbers)
            });
        }
        let lines = spoken.iter().filter_map(|(at, body)| {
            let (tokens, numbers) = memo.get(body.as_slice())?.clone();
            Some(Line { body: body.clone(), tokens, at: *at, numbers })
        });
        let mut lines = Self { lines: lines.collect(), checked: checked.clone(), commas };
        digits::split_labels(&mut lines.lines);
        digits::join_codes(&mut lines.lines);
        lines.turn_units();
        digits::mark_digits(&mut lines.lines);
        lines.turn_units();
        lines.forget_false_units();
        Ok(lines)
    }

    /// Whether the capture speaks of masses.
    pub(super) fn weighs(&self) -> bool {
        let n = self.lines.iter().filter(|l| l.weighs()).count();
        n >= 2 && n * 8 >= self.lines.len()
    }

    /// In `#3 g 12.34` the unit belongs to the number that follows: to the one with decimals, or that changes and
    /// does not count the lines.
    fn turn_units(&mut self) {
        let texts = |of: fn(&Num) -> Option<usize>| {
            let all = self.lines.iter().flat_map(|l| l.numbers.iter().filter(move |n| of(n).is_some()).map(|n| l.text(n.token)));
            all.collect::<Vec<_>>()
        };
        let decimal = |t: &[u8]| t.iter().any(|b| matches!(b, b'.' | b','));
        let (after, before) = (texts(|n| n.unit), texts(|n| n.before));
        let decimals = |texts: &[&[u8]]| texts.iter().filter(|t| decimal(t)).count();
        let by_decimals =
            decimals(&after) * 10 <= after.len() && decimals(&before) >= 3 && decimals(&before) * 10 >= before.len() * 9;
        let value = |t: &[u8]| std::str::from_utf8(t).ok().and_then(|t| t.parse::<u64>().ok());
        let up =
            after.windows(2).filter(|w| matches!((value(w[0]), value(w[1])), (Some(a), Some(b)) if a.checked_add(1) == Some(b)));
        let counts_lines = after.len() >= 4 && up.count() * 10 >= (after.len() - 1) * 8;
        if by_decimals || (counts_lines && before.len() * 10 >= after.len() * 8) {
            for n in self.lines.iter_mut().flat_map(|l| &mut l.numbers) {
                n.unit = n.before;
            }
            return;
        }
        let changes = |unit: fn(&Num) -> Option<usize>| {
            let texts =
                self.lines.iter().flat_map(|l| l.numbers.iter().filter(move |n| unit(n).is_some()).map(|n| l.text(n.token)));
            texts.collect::<BTreeSet<_>>().len() > 1
        };
        if !changes(|n| n.unit) && changes(|n| n.before) {
            for n in self.lines.iter_mut().flat_map(|l| &mut l.numbers) {
                n.unit = n.before;
            }
        }
    }

    /// A capital G after a number is no unit where N or NT can stand in its place, or where some other word is the unit.
    fn forget_false_units(&mut self) {
        let capital = |l: &Line, n: &Num| n.unit.is_some_and(|u| l.text(u) == b"G");
        let (mut labels, mut others, mut capitals) = (false, false, false);
        for l in &self.lines {
            for (i, n) in l.numbers.iter().enumerate() {
                match n.unit {
                    Some(_) if capital(l, n) => capitals = true,
                    Some(_) => others = true,
                    None if i + 1 < l.numbers.len() => {}
                    None => {
                        let after = l.tokens.get(n.token + 1..).unwrap_or_default();
                        let word = after.iter().find(|t| t.sort == Sort::Word).map(|t| t.of(&l.body));
                        labels |= word.is_some_and(|w| words::label(w).is_some_and(|l| l != Label::Gross));
                    }
                }
            }
        }
        if capitals && (labels || others) {
            for l in &mut self.lines {
                let body = &l.body;
                for n in &mut l.numbers {
                    n.unit = n.unit.filter(|u| l.tokens[*u].of(body) != b"G");
                }
            }
        }
    }
}

/// A unit word, short or written out.
pub(super) fn is_unit(word: &[u8]) -> bool {
    words::unit(word).is_some() || words::long_unit(word).is_some()
}

/// The numbers of a line with unit and label.
pub(super) fn numbers(body: &[u8], tokens: &[Token]) -> Vec<Num> {
    let places: Vec<usize> = (0..tokens.len()).filter(|i| tokens[*i].sort == Sort::Number).collect();
    let edge = |i: usize| matches!(tokens[i].sort, Sort::Number | Sort::Stamp);
    let word = |i: &usize| tokens[*i].sort == Sort::Word;
    // Words between a number and its unit are marks, which only the last number of a line can have there.
    let after = |at: usize| {
        let next = (at + 1..tokens.len()).find(|i| edge(*i));
        let to = next.unwrap_or(tokens.len());
        let words: Vec<usize> = (at + 1..to).filter(word).collect();
        let units = words.iter().filter(|i| is_unit(tokens[**i].of(body)));
        // After a sample's number a capital G labels the mass that follows.
        let whole = !tokens[at].of(body).iter().any(|b| matches!(b, b'.' | b','));
        let label = |i: &usize| next.is_some() && whole && tokens[*i].of(body) == b"G";
        // Letters that touch the digits on both sides make a code, such as A12G.
        let code = |i: &usize| whole && *i == at + 1 && at > 0 && tokens[at - 1].sort == Sort::Word;
        let label = |i: &usize| label(i) || code(i);
        let near = |i: &&usize| Some(*i) == words.first() && !label(i);
        let far = |i: &&usize| next.is_none() && !code(i) && tokens[**i].of(body) != b"G";
        let mut units = units.filter(|i| near(i) || far(i));
        units.clone().find(|i| tokens[**i].of(body) != b"G").or(units.next()).copied()
    };
    let region = |at: usize| (0..at).rev().find(|i| edge(*i)).map_or(0, |i| i + 1)..at;
    let before = |at: usize| {
        let units = region(at).rev().filter(word);
        units.into_iter().find(|i| is_unit(tokens[*i].of(body)) && !matches!(tokens[*i].of(body), b"G"))
    };
    // Behind a number that has its unit in front, a G is a label.
    let own = |p: usize| after(p).is_some_and(|u| tokens[u].of(body) != b"G" || before(p).is_none());
    let any_after = places.iter().any(|p| own(*p));
    let of = |at: &usize| {
        let before = before(*at);
        let unit = if any_after { after(*at) } else { before };
        let label = region(*at).rev().filter(word).filter(|i| Some(*i) != unit).find_map(|i| words::label(tokens[i].of(body)));
        Num { token: *at, unit, before, label }
    };
    places.iter().map(of).collect()
}
