//! Cup counters: a line for each drop, a running total, a final count.

use super::columns::{Line, Lines};
use super::pattern::escaped;
use super::read::Draft;
use super::tokens::Sort;
use super::words;
use super::{Hints, Refusal};
use crate::profile::text::{LineText, Means, ProfileText};
use crate::profile::{COUNT_MAX, Kind};
use std::collections::{BTreeMap, BTreeSet};

const UNCLEAR: &str = "the lines could be counts or something else: make a few drops and stop the counter, or say --kind counter";

fn refuse<T>(depth: u8, says: &str) -> Result<T, Refusal> {
    Err(Refusal::new(None, depth, says))
}

/// Lines of one shape.
struct Family<'a> {
    lines: Vec<(usize, &'a Line)>,
}

impl Family<'_> {
    fn number(&self, i: usize, ordinal: usize) -> Option<u32> {
        let line = self.lines.get(i)?.1;
        let text = line.text(line.numbers.get(ordinal)?.token);
        std::str::from_utf8(text).ok()?.parse().ok().filter(|n| *n <= COUNT_MAX)
    }

    fn series(&self, ordinal: usize) -> Option<Vec<u32>> {
        (0..self.lines.len()).map(|i| self.number(i, ordinal)).collect()
    }

    /// The number that goes up by one from line to line, starting again at most at each end.
    fn rising(&self) -> Option<usize> {
        let n = self.lines[0].1.numbers.len();
        (0..n).find(|o| {
            let Some(series) = self.series(*o) else { return false };
            runs(&series).is_some()
        })
    }

    fn text(&self) -> Vec<u8> {
        self.lines[0].1.body.clone()
    }

    /// The pattern of its lines with the number `ordinal` in a group.
    fn pattern(&self, ordinal: Option<(usize, &str)>) -> String {
        let line = self.lines[0].1;
        let mut out = String::new();
        for (i, token) in line.tokens.iter().enumerate() {
            let group = ordinal.filter(|(o, _)| line.numbers.get(*o).is_some_and(|n| n.token == i));
            match (group, token.sort) {
                (Some((_, name)), _) => out += &format!(r"(?<{name}>\d{{1,10}})"),
                (None, Sort::Number) => out += r"[.,]?\d[\d.,]*",
                (None, Sort::Stamp) => out += r"\d[\d.,:/-]*",
                (None, Sort::Blank) => out += " *",
                (None, _) => out += &escaped(token.of(&line.body)),
            }
        }
        out
    }
}

/// Whether numbers go up by one, some of them repeated while nothing happens, and begin anew: how many do neither, where
/// these are few, as after a line that was lost.
pub(super) fn runs(series: &[u32]) -> Option<usize> {
    let (mut up, mut again, mut odd) = (0, 0, 0);
    for w in series.windows(2) {
        match w[1] {
            n if n == w[0] + 1 => up += 1,
            n if n == w[0] || n <= 1 => again += 1,
            n if n == w[0] + 2 => odd += 1,
            _ => return None,
        }
    }
    (up >= 2 && up * 6 >= series.len() && odd <= 1 + series.len() / 30).then_some(odd).filter(|_| up + again + odd > 1)
}

/// Words of a shape, without its blanks: padding does not make another family.
fn key(line: &Line) -> Vec<u8> {
    let mut key = line.shape();
    key.retain(|b| *b != b' ');
    key
}

/// Learns a counter's lines.
pub(super) fn learn(lines: &Lines, hints: &Hints) -> Result<Draft, Refusal> {
    if !lines.checked.frame.single.is_empty() {
        return single(lines);
    }
    // Drops are whole.
    let decimal = |l: &Line| l.numbers.iter().any(|n| l.text(n.token).iter().any(|b| matches!(b, b'.' | b',')));
    if lines.lines.iter().filter(|l| decimal(l)).count() > 1 {
        return refuse(1, UNCLEAR);
    }
    let mut families: BTreeMap<Vec<u8>, Family<'_>> = BTreeMap::new();
    for (i, line) in lines.lines.iter().enumerate() {
        families.entry(key(line)).or_insert_with(|| Family { lines: Vec::new() }).lines.push((i, line));
    }
    let mut families: Vec<Family<'_>> = families.into_values().collect();
    families.sort_by_key(|f| std::cmp::Reverse(f.lines.len()));
    let Some((main, rest)) = families.split_first() else { return refuse(1, UNCLEAR) };
    let told = hints.kind == Some(Kind::Counter);
    if let Some(ordinal) = main.rising() {
        return running(lines, main, rest, ordinal, told);
    }
    let identical = main.lines.iter().map(|(_, l)| &l.body).collect::<BTreeSet<_>>().len() == 1;
    if identical && main.lines[0].1.numbers.is_empty() {
        return each_drop(lines, main, rest, told);
    }
    finals(lines, main, rest, told)
}

/// Running totals.
fn running(lines: &Lines, main: &Family<'_>, rest: &[Family<'_>], ordinal: usize, told: bool) -> Result<Draft, Refusal> {
    let text = main.text();
    // C1, C2, C3 may be containers read in their order.
    let line = main.lines[0].1;
    let at = line.numbers[ordinal].token;
    let glued = at > 0 && line.tokens[at - 1].sort == Sort::Word;
    let series = main.series(ordinal).unwrap_or_default();
    let place: Vec<usize> = main.lines.iter().map(|(i, _)| *i).collect();
    let last = |at: usize| place.iter().rposition(|p| *p < at).map(|i| series[i]);
    let ends: Vec<LineText> = rest.iter().filter_map(|f| ending(f, &last)).collect();
    // Runs that begin anew and are ended by their count are no containers.
    let ended = !ends.is_empty() && series.windows(2).any(|w| w[1] < w[0]);
    if glued && !words::counting(&text) && !told && !ended {
        return refuse(4, UNCLEAR);
    }
    if main.lines.len() < 4 && !words::counting(&text) && !told {
        return refuse(4, UNCLEAR);
    }
    let mut out = vec![plain(main.pattern(Some((ordinal, "total"))), None)];
    out.extend(ends);
    finish(lines, out)
}

/// The same text at each drop.
fn each_drop(lines: &Lines, main: &Family<'_>, rest: &[Family<'_>], told: bool) -> Result<Draft, Refusal> {
    let text = main.text();
    let busy = words::overload(&text) || words::underload(&text) || text.windows(3).any(|w| w == b"---");
    let ended = rest.iter().any(|f| f.lines[0].1.numbers.len() == 1 && (words::ending(&f.text()) || words::counting(&f.text())));
    let sure = told || words::counting(&text) || ended || main.lines.len() >= 5;
    if busy || !sure || (rest.len() > 2 && !told) {
        return refuse(3, UNCLEAR);
    }
    let mut out = vec![plain(main.pattern(None), Some(Means::Drop))];
    let place: Vec<usize> = main.lines.iter().map(|(i, _)| *i).collect();
    let ends: Vec<usize> = rest.iter().flat_map(|f| f.lines.iter().map(|(i, _)| *i)).collect();
    // The number of drops since the last line of another kind.
    let since = |at: usize| {
        let from = ends.iter().filter(|e| **e < at).max().copied();
        let n = place.iter().filter(|p| **p < at && from.is_none_or(|f| **p > f)).count();
        u32::try_from(n).ok()
    };
    for family in rest {
        out.extend(ending(family, &since));
    }
    finish(lines, out)
}

/// A family whose number is the count that went before, or whose word ends a count.
fn ending(family: &Family<'_>, last: &dyn Fn(usize) -> Option<u32>) -> Option<LineText> {
    let text = family.text();
    let line = family.lines[0].1;
    let named = words::ending(&text) || words::counting(&text);
    for ordinal in 0..line.numbers.len() {
        let Some(series) = family.series(ordinal) else { continue };
        let same = |(i, n): (usize, &u32)| last(family.lines[i].0).is_some_and(|l| l == *n);
        let agrees = series.iter().enumerate().filter(|(i, n)| same((*i, n))).count();
        // The first count may have begun before anybody listened.
        if agrees > 0 && agrees + 1 >= series.len() || (named && line.numbers.len() == 1) {
            return Some(plain(family.pattern(Some((ordinal, "drops"))), None));
        }
    }
    let bare = line.numbers.is_empty();
    (bare && words::ending(&text)).then(|| plain(family.pattern(None), Some(Means::End)))
}

/// Final counts alone.
fn finals(lines: &Lines, main: &Family<'_>, rest: &[Family<'_>], told: bool) -> Result<Draft, Refusal> {
    let line = main.lines[0].1;
    let counted = words::counting(&main.text());
    if line.numbers.len() != 1 || main.series(0).is_none() || !(counted || told) {
        return refuse(2, UNCLEAR);
    }
    if rest.iter().any(|f| !f.lines[0].1.numbers.is_empty()) {
        return refuse(4, UNCLEAR);
    }
    // Numbers that mostly go up by one are running totals of which some are odd, not ends of runs.
    let series = main.series(0).unwrap_or_default();
    let near = series.windows(2).filter(|w| w[1] == w[0] || w[1] == w[0] + 1).count();
    if near * 3 >= series.len() {
        return refuse(4, UNCLEAR);
    }
    finish(lines, vec![plain(main.pattern(Some((0, "drops"))), None)])
}

/// A byte at each drop, and perhaps a line with the count.
fn single(lines: &Lines) -> Result<Draft, Refusal> {
    let single = lines.checked.frame.single.clone();
    let drop = |l: &&Line| l.body == single.as_bytes();
    let (drops, others): (Vec<&Line>, Vec<&Line>) = lines.lines.iter().partition(drop);
    let mut out = vec![plain(escaped(single.as_bytes()), Some(Means::Drop))];
    if let Some(first) = others.first() {
        let same = others.iter().all(|l| key(l) == key(first) && l.numbers.len() == 1);
        if !same {
            return refuse(3, UNCLEAR);
        }
        let family = Family { lines: others.iter().map(|l| (0, *l)).collect() };
        let series = family.series(0).unwrap_or_default();
        let total: u32 = series.iter().sum();
        let drops = u32::try_from(drops.len()).unwrap_or(u32::MAX);
        // What is counted must be what was heard; the first run may have begun before.
        let but_first = total - series.first().copied().unwrap_or(0);
        if series.is_empty() || drops < but_first || (drops > total + 1 && !words::counting(&family.text())) {
            return refuse(3, UNCLEAR);
        }
        out.push(plain(family.pattern(Some((0, "drops"))), None));
    } else if drops.len() < 5 {
        return refuse(3, UNCLEAR);
    }
    finish(lines, out)
}

fn plain(pattern: String, means: Option<Means>) -> LineText {
    LineText { pattern, width: None, means, means_basis: None }
}

fn finish(lines: &Lines, line: Vec<LineText>) -> Result<Draft, Refusal> {
    Ok(Draft { text: profile(Kind::Counter, lines, line), expect: Vec::new() })
}

/// A profile without anything of masses.
pub(super) fn profile(kind: Kind, lines: &Lines, line: Vec<LineText>) -> ProfileText {
    ProfileText {
        modbus: None,
        name: None,
        kind,
        about: String::new(),
        talks: None,
        unit: None,
        decimals: None,
        largest_g: None,
        basis: BTreeMap::new(),
        frame: lines.checked.frame.clone(),
        line,
        check: lines.checked.check,
        ask: None,
        serial: None,
    }
}
