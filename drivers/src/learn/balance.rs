//! Balances: from mass lines to a profile.

use super::behave::{self, Meaning, Value};
use super::columns::Lines;
use super::numbers::{self, How};
use super::pattern::{self, Layout, Role};
use super::pick::{self, MassLine};
use super::read::Draft;
use super::slots::{self, Aligned, Key, Side};
use super::tokens::Sort;
use super::words::{self, Label};
use super::{Hints, Refusal};
use crate::profile::text::{BasisWord, LineText, Means, ProfileText};
use crate::profile::{Kind, LARGEST_G_DEFAULT, Talks};
use std::collections::{BTreeMap, BTreeSet};
use tarecup_core::quantity::UG_PER_G;
use tarecup_core::signal::Basis;

/// Different words in one place that can be marks; more are a changing text.
const WORDS_MAX: usize = 6;

fn refuse<T>(depth: u8, says: impl Into<String>) -> Result<T, Refusal> {
    Err(Refusal::new(Some(Kind::Balance), depth, says))
}

/// Every way the lines can be read that nothing speaks against; known masses choose among them.
pub(super) fn learn(lines: &Lines, hints: &Hints) -> Vec<Result<Draft, Refusal>> {
    let found = pick::pick(lines, hints).and_then(|masses| {
        let masses = numbers::usual(lines, masses)?;
        let masses = of_one_width(lines, masses);
        let hows = numbers::ways(lines, &masses, hints)?;
        let masses = usual_arrangements(lines, masses);
        Ok((masses, hows))
    });
    match found {
        Ok((masses, hows)) => hows.iter().map(|how| draft(lines, &masses, how)).collect(),
        Err(refusal) => vec![Err(refusal)],
    }
}

/// The two sides of a mass line.
fn sides(lines: &Lines, m: &MassLine, sign_after: bool) -> (Side, Side) {
    let line = &lines.lines[m.line];
    // Blanks between number and sign belong to the number.
    let trail = m.trail.filter(|_| sign_after).unwrap_or(m.num);
    let before: Vec<usize> = (0..m.sign.unwrap_or(m.num)).collect();
    let after: Vec<usize> = (trail + 1..line.tokens.len()).collect();
    let end = line.tokens[m.num].to;
    (slots::side(line, &before, m.unit, 0), slots::side(line, &after, m.unit, end))
}

/// Leaves out the first line where none is like it (it may be cut), and single lines among many.
fn usual_arrangements(lines: &Lines, masses: Vec<MassLine>) -> Vec<MassLine> {
    let keys = |m: &MassLine| -> Vec<Vec<Key>> {
        let (a, b) = sides(lines, m, false);
        [a, b].into_iter().map(|s| s.items.into_iter().map(|i| i.key).collect()).collect()
    };
    let mut counts: BTreeMap<Vec<Vec<Key>>, usize> = BTreeMap::new();
    let all: Vec<Vec<Vec<Key>>> = masses.iter().map(keys).collect();
    for k in &all {
        *counts.entry(k.clone()).or_default() += 1;
    }
    let many = masses.len() >= 40;
    let first = lines.lines.first().map(|l| l.at);
    let odd = |m: &MassLine, k: &Vec<Vec<Key>>| counts[k] == 1 && (many || first == Some(lines.lines[m.line].at));
    masses.into_iter().zip(&all).filter(|(m, k)| !odd(m, k)).map(|(m, _)| m).collect()
}

/// Leaves out lines of another length where numbers are filled up to one width: they have lost or gained bytes.
fn of_one_width(lines: &Lines, masses: Vec<MassLine>) -> Vec<MassLine> {
    let length = |m: &MassLine| lines.lines[m.line].body.len();
    let mut counts: BTreeMap<usize, usize> = BTreeMap::new();
    for m in &masses {
        *counts.entry(length(m)).or_default() += 1;
    }
    let Some((&usual, &n)) = counts.iter().max_by_key(|(_, n)| **n) else { return masses };
    let digits = |m: &MassLine| lines.lines[m.line].text(m.num);
    let of_usual = || masses.iter().filter(|m| length(m) == usual);
    let lengths: BTreeSet<usize> = of_usual().map(|m| digits(m).len()).collect();
    let filled = of_usual().any(|m| matches!(digits(m), [b'0', b'0'..=b'9', ..]));
    // Several of one other length, or two in a row, are a wider number or mark and no loss.
    let first = lines.lines.first().map(|l| l.at);
    let odd = |m: &&MassLine| length(m) != usual && first != Some(lines.lines[m.line].at);
    let several = counts.iter().any(|(l, n)| *l != usual && *n > 1 + masses.len() / 50);
    let together = masses.windows(2).any(|w| odd(&&w[0]) && odd(&&w[1]));
    let few = masses.len() >= 8 && masses.len() - n <= 2 + masses.len() / 20 && !several && !together;
    if few && (lengths.len() > 1 || filled) { masses.into_iter().filter(|m| length(m) == usual).collect() } else { masses }
}

/// Whole numbers that touch a capital unit and never come again: `12G` may be a container.
fn like_codes(lines: &Lines, masses: &[MassLine], values: &[Value]) -> bool {
    let glued = |m: &MassLine| {
        let line = &lines.lines[m.line];
        let digits = line.text(m.num).iter().all(u8::is_ascii_digit);
        digits && m.num == 0 && m.unit == Some(1) && line.text(1)[0].is_ascii_uppercase() && line.tokens.len() == 2
    };
    let different = values.iter().map(|v| v.ug).collect::<BTreeSet<_>>().len();
    masses.iter().all(glued) && different * 10 >= values.len() * 8
}

/// Everything about the mass lines that the roles are found from.
struct Scene<'a> {
    lines: &'a Lines,
    masses: &'a [MassLine],
    values: Vec<Value>,
    /// For each place of a label that comes and goes, the lines that have it.
    labelled: Vec<Vec<bool>>,
}

fn draft(lines: &Lines, masses: &[MassLine], how: &How) -> Result<Draft, Refusal> {
    if masses.len() < 3 {
        return refuse(2, "too few lines with a mass were heard: load and unload the pan once more");
    }
    let values = numbers::values(lines, masses, how)?;
    if values.iter().map(|v| v.ug).collect::<BTreeSet<_>>().len() < 2 {
        return refuse(7, "the mass never changes: load and unload the pan once more");
    }
    if like_codes(lines, masses, &values) {
        return Err(Refusal::new(
            None,
            7,
            "the lines could be codes or masses: load and unload the pan once more, or say --kind balance with --mass",
        ));
    }
    let (before, after): (Vec<Side>, Vec<Side>) = masses.iter().map(|m| sides(lines, m, how.look.sign_after)).unzip();
    let many = || {
        Refusal::new(
            Some(Kind::Balance),
            7,
            "the texts beside the mass change with every line: set the balance to send the mass alone",
        )
    };
    let before = slots::align(&before).ok_or_else(many)?;
    let after = slots::align(&after).ok_or_else(many)?;
    let mut scene = Scene { lines, masses, values, labelled: Vec::new() };
    scene.part_by_label(&before, &after);
    let mut roles_before = scene.roles(&before, true)?;
    let mut roles_after = scene.roles(&after, false)?;
    one_mark(&mut roles_before, &mut roles_after);
    let number = how.look.clone();
    let layout = Layout { before: (&before, roles_before), after: (&after, roles_after), number };
    scene.profile(&layout, how)
}

/// A unit that is left out while the pan moves says nothing more where marks say it.
fn one_mark(before: &mut [Role], after: &mut [Role]) {
    if before.iter().chain(after.iter()).any(|r| matches!(r, Role::Steadiness { .. })) {
        for role in before.iter_mut().chain(after) {
            if let Role::UnitAtRest { words, .. } = role {
                *role = Role::Any { words: words.iter().cloned().collect(), optional: true };
            }
        }
    }
}

impl Scene<'_> {
    /// Where the label beside the mass changes, the value may change too: such neighbours are not compared.
    fn part_by_label(&mut self, before: &Aligned, after: &Aligned) {
        let mut part = vec![0u32; self.values.len()];
        for cells in before.cells.iter().chain(&after.cells) {
            let words = pattern::words(cells);
            let kinds: BTreeSet<Option<Label>> = words.iter().map(|w| words::label(w)).collect();
            let all = words.iter().all(|w| w.is_empty() || words::label(w).is_some());
            if all && kinds.len() > 1 {
                if kinds.contains(&None) {
                    self.labelled.push(words.iter().map(|w| !w.is_empty()).collect());
                }
                for (p, w) in part.iter_mut().zip(&words) {
                    *p = *p * 4 + words::label(w).map_or(0, |l| l as u32 + 1);
                }
            }
        }
        for (v, p) in self.values.iter_mut().zip(part) {
            v.part = p;
        }
    }

    fn roles(&self, aligned: &Aligned, is_before: bool) -> Result<Vec<Role>, Refusal> {
        (0..aligned.cells.len()).map(|i| self.role(aligned, i, is_before)).collect()
    }

    /// What a label says when another number follows it, such as in `N 17  12.34 g` or `12.34 g  T 21.5 C`:
    /// whether it still labels the mass.
    fn label_before_number(&self, aligned: &Aligned, at: usize, is_before: bool) -> Result<bool, Refusal> {
        let number = |cells: &Vec<Option<Key>>| cells.iter().flatten().all(|k| matches!(k, Key::Num | Key::Stamp));
        if self.masses.iter().any(|m| m.several) || !aligned.cells.get(at + 1).is_some_and(number) {
            return Ok(true);
        }
        let words = pattern::words(&aligned.cells[at]);
        let word = words.first().copied().unwrap_or_default();
        let Some(label) = words::label(word).filter(|_| words.iter().all(|w| *w == word)) else { return Ok(true) };
        let nearer = aligned.cells[at + 1..].iter().flatten().flatten();
        let other = nearer.into_iter().any(|k| matches!(k, Key::Text(t, true) if words::label(t).is_some()));
        match (is_before, label, word.len()) {
            (true, _, _) if other => Ok(false),
            (true, Label::Gross, _) | (true, Label::Net, 2..) => Ok(true),
            (false, Label::Tare, 1) | (false, _, 2..) => Ok(false),
            _ => {
                let word = String::from_utf8_lossy(word);
                refuse(
                    7,
                    format!(
                        "'{word}' before another number may be a label of the mass or not: set the balance to send the mass alone"
                    ),
                )
            }
        }
    }

    /// What one place is.
    fn role(&self, aligned: &Aligned, at: usize, is_before: bool) -> Result<Role, Refusal> {
        let cells = aligned.cells[at].as_slice();
        let absent = cells.iter().any(Option::is_none);
        let present = || cells.iter().flatten();
        if present().all(|k| matches!(k, Key::Num | Key::Stamp)) {
            // `4 371.13`: digits in groups look so.
            if absent && is_before && at + 1 == aligned.cells.len() && present().any(|k| *k == Key::Num) {
                return refuse(7, "a number stands in front of some masses only: set the balance to group no digits");
            }
            // `4C`, `46`: check digits that no check was found for.
            let text = |c: &Option<Key>| c.is_none() || matches!(c, Some(Key::Text(_, true)));
            let glued = |cells: &Vec<Option<Key>>| cells.iter().all(text) && cells.iter().any(Option::is_none);
            if !aligned.blanks[at + 1].seen && aligned.cells.get(at + 1).is_some_and(glued) {
                return refuse(
                    7,
                    "a text beside the mass changes all the time and is no check that is known: set the balance to send the mass alone",
                );
            }
            return Ok(Role::Digits { stamp: present().any(|k| *k == Key::Stamp), optional: absent });
        }
        if present().all(|k| matches!(k, Key::Unit(_))) {
            return self.unit(cells, absent);
        }
        if !present().all(|k| matches!(k, Key::Text(..))) {
            return refuse(7, "in one place stand numbers and words by turns: load and unload the pan once more");
        }
        let words = pattern::words(cells);
        let distinct: BTreeSet<&[u8]> = words.iter().copied().collect();
        let labelled = self.labels_here(cells, is_before) && self.label_before_number(aligned, at, is_before)?;
        if distinct.len() == 1 {
            return self.constant(words[0], labelled);
        }
        if distinct.len() > WORDS_MAX {
            return refuse(
                7,
                "a text beside the mass changes all the time and is no check that is known: set the balance to send the mass alone",
            );
        }
        self.changing(&words, &distinct, labelled)
    }

    /// Whether words of this place may label the mass: with several masses in a line only those right before it.
    fn labels_here(&self, cells: &[Option<Key>], is_before: bool) -> bool {
        let Some(several) = self.masses.iter().position(|m| m.several) else { return true };
        if !is_before {
            return false;
        }
        let m = &self.masses[several];
        let line = &self.lines.lines[m.line];
        let own = cells[several].as_ref();
        (m.label_from..m.num).any(|t| line.tokens[t].sort == Sort::Word && own == Some(&Key::Text(line.text(t).to_vec(), true)))
    }

    fn unit(&self, cells: &[Option<Key>], absent: bool) -> Result<Role, Refusal> {
        let texts: Vec<&[u8]> = pattern::words(cells);
        let words: BTreeSet<Vec<u8>> = texts.iter().filter(|t| !t.is_empty()).map(|t| t.to_vec()).collect();
        let group = words.iter().all(|w| words::unit(w).is_some());
        if !group
            && words
                .iter()
                .filter_map(|w| words::long_unit(w).or(words::unit(w)))
                .map(|u| u.micrograms())
                .collect::<BTreeSet<_>>()
                .len()
                > 1
        {
            return refuse(6, "the unit changes and is written out: set the balance to one unit, g, kg or mg");
        }
        if !absent {
            return Ok(Role::Unit { words, group });
        }
        let presence: Vec<&[u8]> = texts.iter().map(|t| if t.is_empty() { &b""[..] } else { &b"u"[..] }).collect();
        match behave::steadiness(&self.values, &presence) {
            Meaning::Steadiness { steady, .. } if steady == [b"u".to_vec()] && words.len() == 1 => {
                Ok(Role::UnitAtRest { words, group })
            }
            _ => refuse(
                7,
                "some lines leave the unit out, and it does not show why: load and unload the pan once more and wait until it is at rest",
            ),
        }
    }

    fn constant(&self, word: &[u8], labelled: bool) -> Result<Role, Refusal> {
        let label = words::label(word).filter(|_| labelled);
        match label {
            Some(Label::Tare) => refuse(7, "only tare masses were heard: set the balance to send what is on the pan"),
            Some(_) => Ok(Role::Basis { kept: vec![word.to_vec()], passed: Vec::new(), optional: false }),
            None => Ok(Role::Literal(word.to_vec())),
        }
    }

    fn changing(&self, words: &[&[u8]], distinct: &BTreeSet<&[u8]>, labelled: bool) -> Result<Role, Refusal> {
        let own = |it: &mut dyn Iterator<Item = &&[u8]>| it.map(|w| w.to_vec()).collect::<Vec<_>>();
        let present: Vec<&[u8]> = distinct.iter().copied().filter(|w| !w.is_empty()).collect();
        let labels: BTreeSet<Label> = present.iter().filter_map(|w| words::label(w)).collect();
        let optional = present.len() < distinct.len();
        let meaning = behave::steadiness(&self.values, words);
        let of_basis = present.iter().all(|w| words::label(w).is_some()) && labels.len() + usize::from(optional) >= 2;
        if of_basis && !labelled {
            return refuse(
                8,
                "a word may tell gross from net or belong to another number: set the balance to send the mass alone",
            );
        }
        if of_basis && labelled {
            if self.follows_movement(words) {
                return refuse(
                    8,
                    "words that usually tell gross from net change with the movement of the pan: load and unload it once more",
                );
            }
            return self.basis(words, &present, &labels, optional);
        }
        // Brackets about a label come and go with it.
        if optional && present.len() == 1 && self.labelled.iter().any(|l| l.iter().zip(words).all(|(l, w)| *l != w.is_empty())) {
            return Ok(Role::Any { words: own(&mut present.iter()), optional: true });
        }
        // Many words, or words seen once, are rather check digits that no check was found for.
        let once = |w: &&[u8]| words.iter().filter(|o| *o == w).count() == 1;
        let many = present.len() > 4 || (present.len() > 2 && present.iter().filter(|w| once(w)).count() > 1);
        if let Meaning::Steadiness { steady, moving } = meaning
            && !many
        {
            return Ok(Role::Steadiness { steady, moving });
        }
        if let Some(role) = self.zero_among(words, &present).filter(|_| !many) {
            return Ok(role);
        }
        if let Some(role) = self.cycle(words, distinct)? {
            return Ok(role);
        }
        if let [word] = present[..]
            && behave::marks_zero(&self.values, words, word)
        {
            return Ok(Role::Any { words: own(&mut present.iter()), optional: true });
        }
        // Of two marks the one of zero says nothing of rest, nor does the other where equal masses stand beside it.
        if let [a, b] = present[..]
            && !optional
            && [(a, b), (b, a)]
                .iter()
                .any(|(zero, other)| behave::marks_zero(&self.values, words, zero) && self.repeats(words, other))
        {
            return Ok(Role::Any { words: own(&mut present.iter()), optional });
        }
        if let [a, b] = present[..]
            && !optional
            && self.never_agrees()
        {
            for (steady, moving) in [(a, b), (b, a)] {
                if words::plain_pair(steady, moving) {
                    return Ok(Role::Steadiness { steady: vec![steady.to_vec()], moving: vec![moving.to_vec()] });
                }
            }
        }
        let shown: Vec<String> = distinct
            .iter()
            .map(|w| if w.is_empty() { "a blank".into() } else { format!("'{}'", String::from_utf8_lossy(w)) })
            .collect();
        refuse(
            8,
            format!(
                "what {} beside the mass mean does not show: load and unload the pan once more and wait until it is at rest each time",
                shown.join(" and ")
            ),
        )
    }

    /// Labels that change exactly with rest and movement would be marks of steadiness.
    fn follows_movement(&self, words: &[&[u8]]) -> bool {
        let unparted: Vec<Value> = self.values.iter().map(|v| Value { part: 0, ..*v }).collect();
        matches!(behave::steadiness(&unparted, words), Meaning::Steadiness { .. })
    }

    /// Marks of which one stands for rest at zero: taken together with that of rest elsewhere they are plain.
    fn zero_among(&self, words: &[&[u8]], present: &[&[u8]]) -> Option<Role> {
        let at_zero = |word: &&&[u8]| words.iter().zip(&self.values).all(|(w, v)| w != *word || v.ug == 0);
        let zero: &[u8] = present.iter().find(at_zero).copied().filter(|_| present.len() >= 3)?;
        let mut found = present.iter().filter(|w| **w != zero).filter_map(|rest| {
            let merged: Vec<&[u8]> = words.iter().map(|w| if *w == zero { *rest } else { *w }).collect();
            match behave::steadiness(&self.values, &merged) {
                Meaning::Steadiness { mut steady, moving } if steady.iter().any(|s| s == rest) => {
                    steady.push(zero.to_vec());
                    Some(Role::Steadiness { steady, moving })
                }
                _ => None,
            }
        });
        found.next().filter(|_| found.next().is_none())
    }

    /// Whether a mass stands twice in a row beside this word.
    fn repeats(&self, words: &[&[u8]], word: &[u8]) -> bool {
        let same = |(w, v): (&[&[u8]], &[Value])| w[0] == word && w[1] == word && (v[0].ug - v[1].ug).abs() <= 2 * v[0].step;
        words.windows(2).zip(self.values.windows(2)).any(same)
    }

    /// Whether every value differs from the one before.
    fn never_agrees(&self) -> bool {
        self.values.windows(2).all(|w| (w[0].ug - w[1].ug).abs() > 2 * w[0].step)
    }

    fn basis(&self, words: &[&[u8]], present: &[&[u8]], labels: &BTreeSet<Label>, optional: bool) -> Result<Role, Refusal> {
        let one_slip = !optional && by_turns(words);
        // On a slip gross and net are of one weighing: the gross mass is what stands on the pan.
        let keep = |l: Label| match l {
            Label::Gross => true,
            Label::Net => !(one_slip && labels.contains(&Label::Gross)),
            Label::Tare => false,
        };
        let (kept, passed): (Vec<&[u8]>, Vec<&[u8]>) = present.iter().partition(|w| words::label(w).is_some_and(keep));
        if kept.is_empty() {
            return refuse(7, "only tare masses were heard: set the balance to send what is on the pan");
        }
        let own = |w: Vec<&[u8]>| w.into_iter().map(<[u8]>::to_vec).collect();
        Ok(Role::Basis { kept: own(kept), passed: own(passed), optional })
    }

    /// Lines of a slip, told apart by a word: the mass is the one that changes while the others stay.
    fn cycle(&self, words: &[&[u8]], distinct: &BTreeSet<&[u8]>) -> Result<Option<Role>, Refusal> {
        if distinct.contains(&b""[..]) || !cyclic(words) {
            return Ok(None);
        }
        let varies = |word: &[u8]| {
            let own = self.values.iter().zip(words).filter(|(_, w)| **w == word).map(|(v, _)| v.ug);
            own.collect::<BTreeSet<_>>().len() > 1
        };
        let labelled: Vec<&[u8]> = distinct.iter().copied().filter(|w| words::label(w) == Some(Label::Gross)).collect();
        let (kept, passed): (Vec<&[u8]>, Vec<&[u8]>) = distinct.iter().partition(|w| varies(w));
        if kept.len() != 1 || !labelled.is_empty() {
            return refuse(
                8,
                "each slip holds several masses and no word tells gross from net: set the balance to print one mass only",
            );
        }
        let own = |w: Vec<&[u8]>| w.into_iter().map(<[u8]>::to_vec).collect();
        Ok(Some(Role::Label { kept: own(kept), passed: own(passed) }))
    }

    fn profile(&self, layout: &Layout<'_>, how: &How) -> Result<Draft, Refusal> {
        let marks = layout.roles().filter(|r| matches!(r, Role::Steadiness { .. } | Role::UnitAtRest { .. })).count();
        let bases = layout.roles().filter(|r| matches!(r, Role::Basis { .. })).count();
        let passing = layout
            .roles()
            .filter(|r| matches!(r, Role::Basis { passed, .. } | Role::Label { passed, .. } if !passed.is_empty()))
            .count();
        if marks > 1 || bases > 1 || passing > 1 {
            return refuse(8, "two places beside the mass could be its marks: set the balance to send fewer of them");
        }
        let (kept, passed) = self.kept(layout);
        let mut line =
            vec![LineText { pattern: layout.pattern(false), width: self.width(&kept, how), means: None, means_basis: None }];
        if passing > 0 {
            line.push(LineText { pattern: layout.pattern(true), width: None, means: Some(Means::Nothing), means_basis: None });
        }
        line.extend(self.extras(&kept));
        let unit_read = layout.roles().any(|r| matches!(r, Role::Unit { group: true, .. }));
        let slip = passed > 0;
        let series: Vec<i64> = kept.iter().map(|i| self.values[*i].ug).collect();
        let steps = kept.iter().map(|i| self.values[*i].step).max().unwrap_or(0);
        // A balance that speaks by itself repeats what it shows; one that prints on a key does not.
        let prints = slip || (series.len() >= 5 && series.windows(2).all(|w| (w[0] - w[1]).abs() > 2 * steps));
        let text = ProfileText {
            modbus: None,
            name: None,
            kind: Kind::Balance,
            about: String::new(),
            talks: prints.then_some(Talks::PrintOnKey),
            unit: if unit_read { None } else { Some(how.unit_word()) },
            decimals: how.implied,
            largest_g: self.largest(),
            basis: basis_map(layout),
            frame: self.lines.checked.frame.clone(),
            line,
            check: self.lines.checked.check,
            ask: None,
            serial: None,
        };
        let expect = kept.iter().map(|i| (self.lines.lines[self.masses[*i].line].at, self.values[*i].ug)).collect();
        Ok(Draft { text, expect })
    }

    /// A scale for more than is usually believed.
    fn largest(&self) -> Option<u32> {
        let usual = i64::from(LARGEST_G_DEFAULT) * UG_PER_G;
        self.values.iter().any(|v| v.ug.abs() > usual).then_some(1_000_000)
    }

    /// The mass lines that are readings, and how many are read past.
    fn kept(&self, layout: &Layout<'_>) -> (Vec<usize>, usize) {
        let passed = |i: usize| {
            let side = |(aligned, roles): &(&Aligned, Vec<Role>)| {
                roles.iter().zip(&aligned.cells).any(|(role, cells)| match role {
                    Role::Basis { passed, .. } | Role::Label { passed, .. } => {
                        passed.iter().any(|p| p.as_slice() == pattern::words(cells)[i])
                    }
                    _ => false,
                })
            };
            side(&layout.before) || side(&layout.after)
        };
        let (passed, kept): (Vec<usize>, Vec<usize>) = (0..self.masses.len()).partition(|i| passed(*i));
        (kept, passed.len())
    }

    /// The length of every line, where numbers are filled up so that it stays the same.
    fn width(&self, kept: &[usize], how: &How) -> Option<usize> {
        if self.lines.checked.frame.length.is_some() {
            return None;
        }
        let body = |i: &usize| &self.lines.lines[self.masses[*i].line].body;
        let first = body(kept.first()?).len();
        let same = kept.iter().all(|i| body(i).len() == first);
        let digits = |i: &usize| {
            let m = &self.masses[*i];
            self.lines.lines[m.line].text(m.num).len()
        };
        let padded = kept.iter().map(digits).collect::<BTreeSet<_>>().len() > 1;
        (same && (padded || how.look.filled.is_some())).then_some(first)
    }

    /// Lines without a mass that are always the same.
    fn extras(&self, kept: &[usize]) -> Vec<LineText> {
        let known: BTreeSet<usize> = self.masses.iter().map(|m| m.line).collect();
        let mut out: BTreeMap<Vec<u8>, Option<Means>> = BTreeMap::new();
        for (i, line) in self.lines.lines.iter().enumerate() {
            let (over, under) = (words::overload(&line.body), words::underload(&line.body));
            let means = match (over, under) {
                (true, false) => Some(Means::Overload),
                (false, true) => Some(Means::Underload),
                _ => Some(Means::Nothing),
            };
            let plain = !line.body.iter().any(u8::is_ascii_digit);
            if plain && !known.contains(&i) && i > 0 && !kept.is_empty() {
                out.insert(line.body.clone(), means);
            }
        }
        // Rows of dashes may stand for anything from overload to no value yet.
        let dashes = |body: &[u8]| body.windows(3).any(|w| w == b"---") && body.iter().any(u8::is_ascii_alphabetic);
        out.retain(|body, means| *means != Some(Means::Nothing) || !dashes(body));
        let line = |(body, means): (Vec<u8>, Option<Means>)| LineText {
            pattern: pattern::escaped(&body),
            width: None,
            means,
            means_basis: None,
        };
        out.into_iter().take(16).map(line).collect()
    }
}

/// Whether hardly a word follows itself: lines of slips, of which one may have been lost.
fn by_turns(words: &[&[u8]]) -> bool {
    let same = words.windows(2).filter(|w| w[0] == w[1]).count();
    words.len() >= 4 && same * 5 < words.len() - 1
}

/// Whether the words come round and round in one order, each once.
fn cyclic(words: &[&[u8]]) -> bool {
    let distinct: BTreeSet<&[u8]> = words.iter().copied().collect();
    let k = distinct.len();
    let round = words.len() >= 2 * k && words.windows(k).all(|w| w.iter().collect::<BTreeSet<_>>().len() == k);
    k >= 2 && round
}

fn basis_map(layout: &Layout<'_>) -> BTreeMap<String, BasisWord> {
    let mut out = BTreeMap::new();
    for role in layout.roles() {
        if let Role::Basis { kept, .. } = role {
            for word in kept {
                let basis = match words::label(word).map(Label::basis) {
                    Some(Basis::Gross) => BasisWord::Gross,
                    Some(Basis::Net) => BasisWord::Net,
                    _ => BasisWord::Unmarked,
                };
                out.insert(String::from_utf8_lossy(word).into_owned(), basis);
            }
        }
    }
    out
}
