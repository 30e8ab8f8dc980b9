//! Words beside a number, put in their places over all lines.

use super::columns::Line;
use super::tokens::Sort;
use super::words::label;
use std::collections::{BTreeMap, BTreeSet};

/// Different arrangements of words that one dialect may have.
const ARRANGEMENTS_MAX: usize = 96;

/// A word or number at the side of the mass.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub(super) enum Key {
    /// The unit of the mass.
    Unit(Vec<u8>),
    /// A word or mark.
    Text(Vec<u8>, bool),
    /// Another number.
    Num,
    /// A date, a time.
    Stamp,
}

/// A key, where it stands, and how many blanks stand in front of it.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub(super) struct Item {
    pub(super) key: Key,
    /// Bytes from the line's beginning, or from the end of the number.
    pub(super) column: usize,
    pub(super) blank: usize,
}

/// One side of a line: its items, and whether blanks stand at its inner or outer end.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub(super) struct Side {
    pub(super) items: Vec<Item>,
    pub(super) blank_after: bool,
}

/// The items of some tokens of a line.
pub(super) fn side(line: &Line, tokens: &[usize], unit: Option<usize>, origin: usize) -> Side {
    let (mut items, mut blank) = (Vec::new(), 0);
    for (n, &i) in tokens.iter().enumerate() {
        let token = line.tokens[i];
        // The sign of another number belongs to it.
        let next = tokens[n + 1..].iter().map(|t| line.tokens[*t].sort).find(|s| *s != Sort::Blank);
        if token.sort == Sort::Mark && matches!(token.of(&line.body), b"+" | b"-") && next == Some(Sort::Number) {
            continue;
        }
        let text = token.of(&line.body).to_vec();
        let key = match token.sort {
            Sort::Blank => {
                blank = text.len();
                continue;
            }
            _ if Some(i) == unit => Key::Unit(text),
            Sort::Number => Key::Num,
            Sort::Stamp => Key::Stamp,
            Sort::Word => Key::Text(text, true),
            Sort::Mark => Key::Text(text, false),
        };
        items.push(Item { key, column: token.from - origin.min(token.from), blank });
        blank = 0;
    }
    abbreviations(&mut items);
    Side { items, blank_after: blank > 0 }
}

/// `S/N` and the like are one word, and their N is no net.
fn abbreviations(items: &mut Vec<Item>) {
    let text = |item: &Item| match &item.key {
        Key::Text(text, _) => text.clone(),
        _ => Vec::new(),
    };
    let mut i = 0;
    while i + 2 < items.len() {
        let whole = items[i..i + 3].iter().flat_map(text).collect::<Vec<u8>>();
        let close = items[i + 1].blank == 0 && items[i + 2].blank == 0;
        if close && matches!(whole.to_ascii_uppercase().as_slice(), b"S/N" | b"P/N" | b"I/N" | b"L/N" | b"N/A" | b"B/W") {
            items[i].key = Key::Text(whole, true);
            items.drain(i + 1..i + 3);
        }
        i += 1;
    }
}

/// A place beside the number.
#[derive(Clone, Debug, Default)]
pub(super) struct Slot {
    keys: BTreeSet<Key>,
    columns: BTreeSet<usize>,
}

/// Blanks in front of a slot.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub(super) struct Blanks {
    pub(super) seen: bool,
    pub(super) none: bool,
}

/// Slots of one side, with what every line has there.
#[derive(Clone, Debug)]
pub(super) struct Aligned {
    /// For each slot, what each line has there.
    pub(super) cells: Vec<Vec<Option<Key>>>,
    /// Blanks in front of each slot, and at the end.
    pub(super) blanks: Vec<Blanks>,
}

fn likeness(slot: &Slot, item: &Item) -> i32 {
    let column = i32::from(slot.columns.contains(&item.column));
    if slot.keys.contains(&item.key) {
        return 5 + column;
    }
    let first = slot.keys.first();
    match (&item.key, first) {
        (Key::Unit(_), Some(Key::Unit(_))) => 5 + column,
        (Key::Text(a, word), Some(Key::Text(b, other))) => {
            // What parts fields stays what it is.
            let parts = |t: &[u8]| matches!(t, b"," | b";" | b"|");
            match (parts(a) || parts(b), word == other) {
                (true, _) => -100,
                (_, true) => 2 + column,
                (_, false) => 1 + column,
            }
        }
        _ => -100,
    }
}

/// Puts the items of one arrangement into slots; makes new slots where none fits. Returns the slot of each item.
fn place(slots: &mut Vec<Slot>, items: &[Item]) -> Vec<usize> {
    let (n, m) = (slots.len(), items.len());
    let mut best = vec![vec![0i32; m + 1]; n + 1];
    for (j, cell) in best[n].iter_mut().enumerate() {
        *cell = -((m - j) as i32);
    }
    for i in (0..n).rev() {
        for j in (0..m).rev() {
            let put = likeness(&slots[i], &items[j]) + best[i + 1][j + 1];
            best[i][j] = put.max(best[i + 1][j]).max(best[i][j + 1] - 1);
        }
    }
    let (mut i, mut j) = (0, 0);
    let mut made: Vec<Slot> = Vec::new();
    let mut at = Vec::new();
    while i < n || j < m {
        if i < n && j < m && best[i][j] == likeness(&slots[i], &items[j]) + best[i + 1][j + 1] {
            let mut slot = slots[i].clone();
            slot.keys.insert(items[j].key.clone());
            slot.columns.insert(items[j].column);
            at.push(made.len());
            made.push(slot);
            (i, j) = (i + 1, j + 1);
        } else if i < n && (j == m || best[i][j] == best[i + 1][j]) {
            made.push(slots[i].clone());
            i += 1;
        } else {
            let slot = Slot { keys: [items[j].key.clone()].into(), columns: [items[j].column].into() };
            at.push(made.len());
            made.push(slot);
            j += 1;
        }
    }
    *slots = made;
    at
}

/// Aligns one side of all lines; `None` when hardly two are alike.
pub(super) fn align(sides: &[Side]) -> Option<Aligned> {
    let mut counts: BTreeMap<&Vec<Item>, usize> = BTreeMap::new();
    let mut keys: BTreeMap<Vec<&Key>, usize> = BTreeMap::new();
    for side in sides {
        *counts.entry(&side.items).or_default() += 1;
        *keys.entry(side.items.iter().map(|i| &i.key).collect()).or_default() += 1;
    }
    if keys.len() > ARRANGEMENTS_MAX {
        return None;
    }
    let frequency = |items: &Vec<Item>| keys.get(&items.iter().map(|i| &i.key).collect::<Vec<_>>()).copied().unwrap_or(0);
    let mut order: Vec<&Vec<Item>> = counts.keys().copied().collect();
    order.sort_by_key(|items| (std::cmp::Reverse(items.len()), std::cmp::Reverse(frequency(items)), (*items).clone()));
    // One pass makes the slots, the second finds each arrangement's place in them.
    let mut slots: Vec<Slot> = Vec::new();
    let mut done: BTreeSet<Vec<&Key>> = BTreeSet::new();
    for items in &order {
        if done.insert(items.iter().map(|i| &i.key).collect()) {
            place(&mut slots, items);
        }
    }
    let mut memo: BTreeMap<&Vec<Item>, Vec<usize>> = BTreeMap::new();
    for items in order {
        let mut trial = slots.clone();
        let at = place(&mut trial, items);
        if trial.len() != slots.len() {
            return None;
        }
        memo.insert(items, at);
    }
    let mut cells = vec![vec![None; sides.len()]; slots.len()];
    let mut gaps = vec![vec![0; sides.len()]; slots.len()];
    let mut blanks = vec![Blanks::default(); slots.len() + 1];
    for (l, side) in sides.iter().enumerate() {
        let at = &memo[&side.items];
        let mut from = 0;
        for (item, &slot) in side.items.iter().zip(at) {
            cells[slot][l] = Some(item.key.clone());
            gaps[slot][l] = item.blank;
            note(&mut blanks[from..=slot], item.blank > 0);
            from = slot + 1;
        }
        note(&mut blanks[from..], side.blank_after);
    }
    merge(&mut cells, &mut gaps, &mut blanks);
    phrases(&mut cells, &mut gaps, &mut blanks);
    Some(Aligned { cells, blanks })
}

/// Neighbouring places of which every line has exactly one are one place.
fn merge(cells: &mut Vec<Vec<Option<Key>>>, gaps: &mut Vec<Vec<usize>>, blanks: &mut Vec<Blanks>) {
    let mut i = 0;
    while i + 1 < cells.len() {
        let text = |k: &Option<Key>| k.as_ref().is_none_or(|k| matches!(k, Key::Text(..)));
        let pairs = || cells[i].iter().zip(&cells[i + 1]);
        if pairs().all(|(a, b)| a.is_some() != b.is_some() && text(a) && text(b)) {
            let (second, gap) = (cells.remove(i + 1), gaps.remove(i + 1));
            for (l, b) in second.into_iter().enumerate().filter(|(_, b)| b.is_some()) {
                (cells[i][l], gaps[i][l]) = (b, gap[l]);
            }
            let other = blanks.remove(i + 1);
            blanks[i].seen |= other.seen;
            blanks[i].none |= other.none;
        } else {
            i += 1;
        }
    }
}

/// Blanks over absent slots may stand on either side of them.
fn note(places: &mut [Blanks], seen: bool) {
    let absent = places.len() > 1;
    for place in places {
        place.seen |= seen;
        place.none |= !seen || absent;
    }
}

/// Words that change only together are one phrase, such as `at rest`.
fn phrases(cells: &mut Vec<Vec<Option<Key>>>, gaps: &mut Vec<Vec<usize>>, blanks: &mut Vec<Blanks>) {
    let mut i = 0;
    while i + 1 < cells.len() {
        // What tells gross from net is a word of its own, however it changes.
        let word = |k: &Option<Key>| k.as_ref().is_none_or(|k| matches!(k, Key::Text(t, _) if label(t).is_none()));
        let pairs: BTreeSet<(&Option<Key>, &Option<Key>)> = cells[i].iter().zip(&cells[i + 1]).collect();
        let (a, b): (BTreeSet<_>, BTreeSet<_>) = pairs.iter().copied().unzip();
        let together = pairs.len() == a.len().max(b.len()) && a.len() > 1 && b.len() > 1;
        let both = cells[i].iter().zip(&cells[i + 1]).any(|(a, b)| a.is_some() && b.is_some());
        if !(together && both && cells[i].iter().chain(&cells[i + 1]).all(word)) {
            i += 1;
            continue;
        }
        let (second, gap) = (cells.remove(i + 1), gaps.remove(i + 1));
        for (l, b) in second.into_iter().enumerate() {
            cells[i][l] = match (cells[i][l].take(), b) {
                (Some(Key::Text(a, w)), Some(Key::Text(b, _))) => Some(Key::Text([a, vec![b' '; gap[l]], b].concat(), w)),
                (None, Some(b)) => {
                    gaps[i][l] = gap[l];
                    Some(b)
                }
                (a, _) => a,
            };
        }
        blanks.remove(i + 1);
        // A blank inside the phrase is not one in front of it.
        let absent = cells[i].iter().any(Option::is_none);
        blanks[i].seen |= gaps[i].iter().any(|g| *g > 0);
        blanks[i].none = absent || gaps[i].contains(&0);
    }
}
