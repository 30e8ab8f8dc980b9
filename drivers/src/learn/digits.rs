//! What is otherwise written than it seems: digits of constant codes such as `OP07`, marks written as one digit, and
//! labels of gross and net that touch another mark.

use super::columns::{Line, is_unit, numbers};
use super::tokens::{Sort, Token};
use std::collections::{BTreeMap, BTreeSet};

/// Different digits that can be marks.
const MARKS_MAX: usize = 4;

/// A code: letters with digits that touch them, perhaps with one mark between.
fn code_at(line: &Line, at: usize) -> Option<usize> {
    let sort = |i: usize| line.tokens.get(i).map(|t| t.sort);
    let touches = at > 0 && !matches!(line.tokens[at - 1].sort, Sort::Blank | Sort::Mark);
    if sort(at) != Some(Sort::Word) || touches || is_unit(line.text(at)) {
        return None;
    }
    let to = match (sort(at + 1), sort(at + 2)) {
        (Some(Sort::Number), _) => at + 2,
        (Some(Sort::Mark), Some(Sort::Number)) if matches!(line.text(at + 1), b"-" | b"." | b"_" | b"/") => at + 3,
        _ => return None,
    };
    let whole = |text: &[u8]| text.iter().enumerate().all(|(i, b)| b.is_ascii_digit() || (i == 0 && *b == b'.'));
    let ended = !matches!(sort(to), Some(Sort::Word | Sort::Number | Sort::Stamp));
    (whole(line.text(to - 1)) && ended).then_some(to)
}

fn text(line: &Line, from: usize, to: usize) -> Vec<u8> {
    line.body[line.tokens[from].from..line.tokens[to - 1].to].to_vec()
}

/// Makes one word of each code that nearly every line holds.
pub(super) fn join_codes(lines: &mut [Line]) {
    let numbered = lines.iter().filter(|l| !l.numbers.is_empty()).count();
    let mut counts: BTreeMap<Vec<u8>, usize> = BTreeMap::new();
    for line in lines.iter() {
        let found = (0..line.tokens.len()).filter_map(|i| code_at(line, i).map(|to| text(line, i, to)));
        for code in found.collect::<BTreeSet<_>>() {
            *counts.entry(code).or_default() += 1;
        }
    }
    counts.retain(|_, n| *n >= 3 && *n + 1 + numbered / 8 >= numbered);
    if counts.is_empty() {
        return;
    }
    for line in lines {
        let mut at = 0;
        while at < line.tokens.len() {
            if let Some(to) = code_at(line, at).filter(|to| counts.contains_key(&text(line, at, *to))) {
                let joined = Token { sort: Sort::Word, from: line.tokens[at].from, to: line.tokens[to - 1].to };
                line.tokens.splice(at..to, [joined]);
            }
            at += 1;
        }
        line.numbers = numbers(&line.body, &line.tokens);
    }
}

/// Lines of equally many numbers, where these are most of the lines that have numbers.
fn most(lines: &[Line]) -> Option<(usize, Vec<usize>)> {
    let mut groups: BTreeMap<usize, Vec<usize>> = BTreeMap::new();
    for (i, line) in lines.iter().enumerate().filter(|(_, l)| !l.numbers.is_empty()) {
        groups.entry(line.numbers.len()).or_default().push(i);
    }
    let all: usize = groups.values().map(Vec::len).sum();
    groups.into_iter().find(|(_, g)| g.len() * 10 >= all * 8 && g.len() >= 4)
}

/// Makes marks of single digits beside a mass that come in a few kinds and do not count the lines.
pub(super) fn mark_digits(lines: &mut [Line]) {
    let Some((n, group)) = most(lines) else { return };
    let decimal = |l: &Line, o: usize| l.text(l.numbers[o].token).iter().any(|b| matches!(b, b'.' | b','));
    let mut found = BTreeSet::new();
    for o in 0..n {
        let texts: Vec<&[u8]> = group.iter().map(|i| lines[*i].text(lines[*i].numbers[o].token)).collect();
        let single = texts.iter().filter(|t| t.len() == 1).count();
        let kinds: BTreeSet<&[u8]> = texts.iter().copied().filter(|t| t.len() == 1).collect();
        let beside = group.iter().all(|i| {
            let l = &lines[*i];
            l.numbers[o].unit.is_none() && (0..n).any(|p| p != o && (decimal(l, p) || l.numbers[p].unit.is_some()))
        });
        let counts = texts.windows(2).filter(|w| w[0].len() == 1 && w[1].len() == 1 && w[1][0] == w[0][0] + 1).count();
        let marks = single + 1 >= texts.len() && (2..=MARKS_MAX).contains(&kinds.len()) && counts * 2 < texts.len();
        if beside && marks {
            found.insert(o);
        }
    }
    for line in lines.iter_mut().filter(|l| l.numbers.len() == n) {
        let places: Vec<usize> = found.iter().map(|o| line.numbers[*o].token).collect();
        for at in places {
            let token = &mut line.tokens[at];
            if token.to - token.from == 1 {
                token.sort = Sort::Mark;
            }
        }
        if !found.is_empty() {
            line.numbers = numbers(&line.body, &line.tokens);
        }
    }
}

/// Takes labels of gross and net off the end of words whose other letters change too: `TG`, `TN`, `OG`, `ON`.
pub(super) fn split_labels(lines: &mut [Line]) {
    let mut stems: BTreeMap<Vec<u8>, BTreeSet<u8>> = BTreeMap::new();
    for line in lines.iter() {
        for token in line.tokens.iter().filter(|t| t.sort == Sort::Word) {
            let word = token.of(&line.body);
            if let Some((last @ (b'G' | b'B' | b'N'), stem)) = word.split_last().filter(|(_, s)| !s.is_empty()) {
                stems.entry(stem.to_vec()).or_default().insert(*last);
            }
        }
    }
    let length = stems.iter().find(|(_, lasts)| lasts.len() > 1).map(|(stem, _)| stem.len());
    stems.retain(|stem, _| Some(stem.len()) == length);
    let Some(length) = length.filter(|_| stems.len() > 1) else { return };
    for line in lines {
        let mut tokens = Vec::new();
        for token in &line.tokens {
            let word = token.of(&line.body);
            let labelled = matches!(word.last(), Some(b'G' | b'B' | b'N')) && word.len() == length + 1;
            if token.sort == Sort::Word && labelled && stems.contains_key(&word[..length]) {
                tokens.push(Token { to: token.to - 1, ..*token });
                tokens.push(Token { from: token.to - 1, ..*token });
            } else {
                tokens.push(*token);
            }
        }
        line.tokens = tokens;
        line.numbers = numbers(&line.body, &line.tokens);
    }
}
