//! What marks mean, by how the numbers beside them behave.
//!
//! A mark of rest stands where a value agrees with its neighbours; a mark of
//! movement where it does not. Both must be seen, and nothing may speak
//! against it.

use std::collections::BTreeMap;

/// What the lines of one word did.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
struct Tally {
    lines: usize,
    /// Agreeing with every neighbour.
    still: usize,
    /// Agreeing with no neighbour.
    alone: usize,
}

/// Differences that are still agreement, in steps of the last digit.
const TOLERANCES: [i64; 4] = [2, 0, 1, 5];

/// A value of the series and its step, in micrograms; a change of `part` parts neighbours.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Value {
    pub(super) ug: i64,
    pub(super) step: i64,
    pub(super) part: u32,
}

fn tally<'a>(values: &[Value], words: &[&'a [u8]], tolerance: i64) -> BTreeMap<&'a [u8], Tally> {
    let mut out: BTreeMap<&[u8], Tally> = BTreeMap::new();
    let apart = |a: &Value, b: &Value| (a.part == b.part).then(|| (a.ug - b.ug).abs() > tolerance * a.step.max(b.step));
    for (i, (value, word)) in values.iter().zip(words).enumerate() {
        let before = i.checked_sub(1).and_then(|j| apart(&values[j], value));
        let after = values.get(i + 1).and_then(|next| apart(value, next));
        let sides: Vec<bool> = before.into_iter().chain(after).collect();
        let t = out.entry(word).or_default();
        t.lines += 1;
        t.still += usize::from(!sides.is_empty() && sides.iter().all(|apart| !apart));
        t.alone += usize::from(!sides.is_empty() && sides.iter().all(|apart| *apart));
    }
    out
}

/// What the words of one place mean.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) enum Meaning {
    /// These words are of rest, those of movement.
    Steadiness { steady: Vec<Vec<u8>>, moving: Vec<Vec<u8>> },
    /// The numbers do not tell.
    Unclear,
}

/// Which words mean rest. `words` has one for each value; an absent mark is empty.
pub(super) fn steadiness(values: &[Value], words: &[&[u8]]) -> Meaning {
    let mut found = None;
    for tolerance in TOLERANCES {
        let tallies = tally(values, words, tolerance);
        let (steady, moving) = split(&tallies);
        if steady.is_empty() || moving.is_empty() {
            continue;
        }
        if proven(&tallies, &steady, &moving) {
            let own = |w: &[&[u8]]| w.iter().map(|w| w.to_vec()).collect::<Vec<_>>();
            let meaning = Meaning::Steadiness { steady: own(&steady), moving: own(&moving) };
            match &found {
                None => found = Some(meaning),
                // Another tolerance must not tell the opposite.
                Some(first) if *first != meaning => return Meaning::Unclear,
                Some(_) => {}
            }
        }
    }
    found.unwrap_or(Meaning::Unclear)
}

fn split<'a>(tallies: &BTreeMap<&'a [u8], Tally>) -> (Vec<&'a [u8]>, Vec<&'a [u8]>) {
    tallies.keys().partition(|w| {
        let t = tallies[*w];
        t.still * t.lines.max(1) > t.alone * t.lines.max(1) && t.still * 4 >= t.lines
    })
}

fn proven(tallies: &BTreeMap<&[u8], Tally>, steady: &[&[u8]], moving: &[&[u8]]) -> bool {
    let sum = |words: &[&[u8]], of: fn(&Tally) -> usize| words.iter().map(|w| of(&tallies[w])).sum::<usize>();
    let (s_lines, s_still, s_alone) = (sum(steady, |t| t.lines), sum(steady, |t| t.still), sum(steady, |t| t.alone));
    let (m_lines, m_still, m_alone) = (sum(moving, |t| t.lines), sum(moving, |t| t.still), sum(moving, |t| t.alone));
    // Movement may creep at its end, a balance may call a value steady a line late or early.
    let clear = s_alone == 0 && m_alone >= 3;
    let speaks_against = s_alone * 8 > s_lines || m_still * if clear { 3 } else { 5 } > m_lines;
    let spoken_for = s_still >= 2 && (m_alone >= 1 || m_lines >= 2);
    let single = m_lines == 1 && m_still == 0 && s_still >= 4;
    let each = steady.iter().all(|w| tallies[w].still > 0);
    !speaks_against && each && (spoken_for || single)
}

/// Whether a word stands exactly where the value is zero (a mark of the zero range).
pub(super) fn marks_zero(values: &[Value], words: &[&[u8]], word: &[u8]) -> bool {
    let near = |v: &Value| v.ug.abs() <= v.step;
    let on = values.iter().zip(words).filter(|(_, w)| **w == word);
    let off = values.iter().zip(words).filter(|(_, w)| **w != word);
    let exact = |v: &Value| v.ug == 0;
    let parts = |zero: &dyn Fn(&Value) -> bool| on.clone().all(|(v, _)| zero(v)) && off.clone().all(|(v, _)| !zero(v));
    on.clone().count() >= 2 && off.clone().count() >= 2 && (parts(&near) || parts(&exact))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn meaning(lines: &[(i64, &str)]) -> Meaning {
        let values: Vec<Value> = lines.iter().map(|(ug, _)| Value { ug: *ug, step: 1, part: 0 }).collect();
        let words: Vec<&[u8]> = lines.iter().map(|(_, w)| w.as_bytes()).collect();
        steadiness(&values, &words)
    }

    fn is(lines: &[(i64, &str)], steady: &str) -> bool {
        matches!(meaning(lines), Meaning::Steadiness { steady: s, .. } if s == [steady.as_bytes().to_vec()])
    }

    #[test]
    fn marks_follow_the_numbers_and_not_their_letters() {
        assert!(is(
            &[
                (0, "D"),
                (0, "D"),
                (700, "S"),
                (2400, "S"),
                (2500, "D"),
                (2500, "D"),
                (2501, "D"),
                (3900, "S"),
                (5000, "D"),
                (5000, "D")
            ],
            "D"
        ));
        assert!(is(
            &[(0, ""), (0, ""), (0, ""), (900, "~"), (2500, ""), (2500, ""), (2500, ""), (4100, "~"), (5000, ""), (5000, "")],
            ""
        ));
    }

    #[test]
    fn what_contradicts_is_unclear() {
        for lines in [
            // Another word at another load.
            &[(0, "A"), (0, "A"), (0, "A"), (2500, "B"), (2500, "B"), (2500, "B"), (5000, "A"), (5000, "A")][..],
            // Every line differs.
            &[(0, "A"), (100, "B"), (2500, "A"), (900, "B"), (4000, "A"), (7000, "B")],
            // Movement while nothing moves.
            &[(0, "A"), (0, "B"), (0, "A"), (0, "B"), (2500, "A"), (2500, "A"), (2500, "B"), (2500, "B")],
            &[(0, "A"), (0, "A"), (0, "A")],
        ] {
            assert_eq!(meaning(lines), Meaning::Unclear, "{lines:?}");
        }
    }

    #[test]
    fn a_mark_of_zero_is_seen() {
        let values = [0, 0, 2500, 2500, 0].map(|ug| Value { ug, step: 1, part: 0 });
        let words: Vec<&[u8]> = vec![b"Z", b"Z", b"", b"", b"Z"];
        assert!(marks_zero(&values, &words, b"Z"));
        assert!(!marks_zero(&values, &words, b""));
    }
}
