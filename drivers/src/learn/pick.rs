//! Which number of a line is the mass.

use super::columns::{Line, Lines, Num};
use super::tokens::Sort;
use super::words::{self, Label};
use super::{Hints, Refusal};
use crate::profile::Kind;
use std::collections::{BTreeMap, BTreeSet};

/// A line with its mass; tokens are named by their place in the line.
#[derive(Clone, Debug)]
pub(super) struct MassLine {
    /// Place among the lines.
    pub(super) line: usize,
    pub(super) num: usize,
    pub(super) unit: Option<usize>,
    /// The sign in front of the number.
    pub(super) sign: Option<usize>,
    /// A plus or minus right after the number.
    pub(super) trail: Option<usize>,
    /// The first token whose word may label this mass.
    pub(super) label_from: usize,
    /// Several numbers of the line have a unit.
    pub(super) several: bool,
}

/// The mass lines of a capture.
pub(super) fn pick(lines: &Lines, hints: &Hints) -> Result<Vec<MassLine>, Refusal> {
    let with_unit = lines.weighs();
    // Where most numbers have decimals, a whole one is that of a fault or the like.
    let decimal = |l: &Line| l.numbers.iter().any(|n| l.text(n.token).iter().any(|b| matches!(b, b'.' | b',')));
    let numbered = lines.lines.iter().filter(|l| !l.numbers.is_empty()).count();
    let decimals = lines.lines.iter().filter(|l| decimal(l)).count() * 10 >= numbered * 7;
    let mut groups: BTreeMap<usize, Vec<usize>> = BTreeMap::new();
    for (i, line) in lines.lines.iter().enumerate() {
        let speaks = if with_unit { line.weighs() } else { !line.numbers.is_empty() && (!decimals || decimal(line)) };
        if speaks && !words::overload(&line.body) && !words::underload(&line.body) {
            groups.entry(line.numbers.len()).or_default().push(i);
        }
    }
    let all: usize = groups.values().map(Vec::len).sum();
    let mut out = Vec::new();
    for group in groups.values() {
        let few = group.len() == 1 && all >= 8;
        let members: Vec<&Line> = group.iter().map(|i| &lines.lines[*i]).collect();
        match if with_unit { ordinal(&members) } else { bare_ordinal(&members) } {
            Ok((ordinal, several)) => {
                let found = group.iter().filter_map(|i| mass_line(*i, &lines.lines[*i], ordinal, several, with_unit));
                out.extend(found);
            }
            // One odd line among many is noise.
            Err(_) if few => {}
            Err(refusal) => return Err(refusal),
        }
    }
    if with_unit {
        out.extend(without_unit(lines, &out));
    } else if hints.unit.is_none() && hints.masses.is_empty() {
        return no_unit(lines, &out);
    }
    out.sort_by_key(|m| m.line);
    if out.len() < 3 {
        return Err(Refusal::new(None, 2, "too few lines with a mass were heard: load and unload the pan once more"));
    }
    Ok(out)
}

/// What is said of numbers that have no unit.
fn no_unit(lines: &Lines, found: &[MassLine]) -> Result<Vec<MassLine>, Refusal> {
    let decimal = |m: &&MassLine| lines.lines[m.line].text(m.num).iter().any(|b| matches!(b, b'.' | b','));
    let foreign = lines.lines.iter().any(|l| (0..l.tokens.len()).any(|t| words::foreign_unit(l.text(t))));
    if foreign {
        let says = "the unit shown is not one of mass that is kept here: set the balance to g, kg or mg";
        return Err(Refusal::new(None, 5, says));
    }
    let depth = if found.iter().filter(decimal).count() >= 3 { 5 } else { 1 };
    let says =
        "the lines name no unit: say it with --unit g (or kg, mg), or say what was put on the pan with --mass 0 --mass 100.00g";
    Err(Refusal::new(None, depth, says))
}

/// The number that has the unit, of lines with equally many numbers, and whether several have one.
fn ordinal(members: &[&Line]) -> Result<(usize, bool), Refusal> {
    let n = members[0].numbers.len();
    let named: Vec<usize> =
        (0..n).filter(|o| members.iter().filter(|l| l.numbers[*o].unit.is_some()).count() * 5 >= members.len() * 4).collect();
    let refuse = |says: &str| Err(Refusal::new(Some(Kind::Balance), 6, says));
    match named[..] {
        [] => refuse("which number of a line is the mass cannot be told: load and unload the pan once more"),
        // `G 33.39 N 11.96 g`: the unit is that of both.
        [one] if members.iter().all(|l| shares_unit(l, one)) => {
            refuse("several masses of a line share one unit: set the balance to send one mass only")
        }
        [one] => Ok((one, false)),
        _ => {
            if let Some(found) = by_label(members, &named) {
                return Ok((found, true));
            }
            let text = |l: &&Line, o: usize| l.text(l.numbers[o].token).to_vec();
            let varying: Vec<usize> = named
                .iter()
                .copied()
                .filter(|o| members.iter().map(|l| text(l, *o)).collect::<BTreeSet<_>>().len() > 1)
                .collect();
            match varying[..] {
                [one] => Ok((one, true)),
                [first, ..] if members.iter().all(|l| varying.iter().all(|o| text(l, *o) == text(l, first))) => Ok((first, true)),
                [] => refuse("no number changes: load and unload the pan once more"),
                _ => refuse(
                    "several masses of a line change and no word tells gross from net: set the balance to send one mass only",
                ),
            }
        }
    }
}

/// Whether another number is labelled and printed as the mass is.
fn shares_unit(line: &Line, mass: usize) -> bool {
    let places = |n: &Num| {
        let text = line.text(n.token);
        text.iter().position(|b| matches!(b, b'.' | b',')).map(|at| text.len() - at)
    };
    let own = places(&line.numbers[mass]);
    let others = line.numbers.iter().enumerate().filter(|(i, _)| *i != mass);
    own.is_some() && others.into_iter().any(|(_, n)| n.label.is_some() && places(n) == own)
}

/// Of several masses the gross one, else the only net one.
fn by_label(members: &[&Line], named: &[usize]) -> Option<usize> {
    let label = |o: usize| {
        let first: Option<Label> = members[0].numbers[o].label;
        first.filter(|_| members.iter().all(|l| l.numbers[o].label == first))
    };
    let labels: Vec<(usize, Option<Label>)> = named.iter().map(|o| (*o, label(*o))).collect();
    let only = |wanted: Label| {
        let mut found = labels.iter().filter(|(_, l)| *l == Some(wanted));
        found.next().filter(|_| found.next().is_none()).map(|(o, _)| *o)
    };
    let all = labels.iter().all(|(_, l)| l.is_some());
    all.then(|| only(Label::Gross).or_else(|| only(Label::Net))).flatten()
}

/// The number that could be a mass in lines without units: the only one with decimals, else the only one.
fn bare_ordinal(members: &[&Line]) -> Result<(usize, bool), Refusal> {
    let n = members[0].numbers.len();
    let decimal = |l: &&Line, o: usize| l.text(l.numbers[o].token).iter().any(|b| matches!(b, b'.' | b','));
    let found: Vec<usize> = (0..n).filter(|o| members.iter().all(|l| decimal(l, *o))).collect();
    match (&found[..], n) {
        ([one], _) => Ok((*one, false)),
        ([], 1) => Ok((0, false)),
        _ => Err(Refusal::new(
            None,
            3,
            "which number of a line is the mass cannot be told: set the balance to send one mass with its unit",
        )),
    }
}

fn mass_line(at: usize, line: &Line, ordinal: usize, several: bool, with_unit: bool) -> Option<MassLine> {
    let Num { token, unit, .. } = *line.numbers.get(ordinal)?;
    if with_unit && unit.is_none() {
        return None;
    }
    let before = if several { ordinal.checked_sub(1).map(|o| line.numbers[o]) } else { None };
    let label_from = before.map_or(0, |n| n.unit.unwrap_or(n.token) + 1);
    Some(MassLine { line: at, num: token, unit, sign: sign(line, token), trail: trail(line, token), label_from, several })
}

/// Lines that are like the others and leave the unit out, as some balances do while the pan moves.
fn without_unit(lines: &Lines, found: &[MassLine]) -> Vec<MassLine> {
    let format = |l: &Line, token: usize| {
        let text = l.text(token);
        text.iter().rev().position(|b| matches!(b, b'.' | b',')).filter(|n| *n > 0)
    };
    let rest = |l: &Line, unit: Option<usize>| -> BTreeSet<Vec<u8>> {
        let word = |t: &usize| l.tokens[*t].sort == Sort::Word && Some(*t) != unit;
        (0..l.tokens.len()).filter(word).map(|t| l.text(t).to_vec()).collect()
    };
    let Some(first) = found.first() else { return Vec::new() };
    let place = |m: &MassLine| {
        let line = &lines.lines[m.line];
        (line.numbers.len(), line.numbers.iter().position(|n| n.token == m.num))
    };
    let (count, Some(ordinal)) = place(first) else { return Vec::new() };
    if found.iter().any(|m| m.several || place(m) != (count, Some(ordinal))) {
        return Vec::new();
    }
    let stamps = |l: &Line| l.tokens.iter().filter(|t| t.sort == Sort::Stamp).count();
    let known: BTreeSet<(usize, Option<usize>)> =
        found.iter().map(|m| (stamps(&lines.lines[m.line]), format(&lines.lines[m.line], m.num))).collect();
    let words: BTreeSet<Vec<u8>> = found.iter().flat_map(|m| rest(&lines.lines[m.line], m.unit)).collect();
    let most = found.iter().map(|m| rest(&lines.lines[m.line], m.unit).len()).max().unwrap_or(0);
    // They may have a mark of their own, which is no unit.
    let bare = lines.lines.iter().filter(|l| !l.weighs() && l.numbers.len() == count);
    let own: BTreeSet<Vec<u8>> = bare.flat_map(|l| rest(l, None)).filter(|w| !words.contains(w)).collect();
    let mark = own.len() == 1 && !own.iter().any(|w| words::foreign_unit(w) || w.eq_ignore_ascii_case(b"mg"));
    let words: BTreeSet<Vec<u8>> = if mark { words.union(&own).cloned().collect() } else { words };
    let shape = |i: usize, l: &Line| {
        let n = l.numbers.get(ordinal).filter(|_| l.numbers.len() == count && !l.weighs())?;
        let look = format(l, n.token);
        let same = look.is_some() && known.contains(&(stamps(l), look));
        let beside = rest(l, None);
        let fits = same && beside.is_subset(&words) && beside.len() <= most;
        fits.then(|| mass_line(i, l, ordinal, first.several, false)).flatten()
    };
    lines.lines.iter().enumerate().filter_map(|(i, l)| shape(i, l)).collect()
}

fn is_sign(line: &Line, token: usize) -> bool {
    line.tokens[token].sort == Sort::Mark && matches!(line.text(token), b"+" | b"-")
}

/// The sign in front of a number, perhaps with blanks between.
fn sign(line: &Line, num: usize) -> Option<usize> {
    let before = num.checked_sub(1)?;
    let at = if line.tokens[before].sort == Sort::Blank { before.checked_sub(1)? } else { before };
    let free = at == 0 || line.tokens[at - 1].sort != Sort::Number;
    (is_sign(line, at) && free).then_some(at)
}

/// A plus or minus after a number, perhaps with blanks between.
fn trail(line: &Line, num: usize) -> Option<usize> {
    let after = num + 1;
    let at = if line.tokens.get(after)?.sort == Sort::Blank { after + 1 } else { after };
    (at < line.tokens.len() && is_sign(line, at)).then_some(at)
}
