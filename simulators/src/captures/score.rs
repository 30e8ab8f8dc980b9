//! How well an answer says what a capture says.

use super::{Basis, Code, Count, Kind, Reading, Truth};

/// What somebody made of a capture.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Answer {
    /// No dialect was worked out.
    pub refused: bool,
    /// The kind of instrument, if it was said.
    pub kind: Option<Kind>,
    /// Masses in order: micrograms, steadiness, what they include.
    pub readings: Vec<(i64, Option<bool>, Basis)>,
    /// Counts in order.
    pub counts: Vec<Count>,
    /// Codes in order.
    pub codes: Vec<String>,
}

/// The verdict.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Score {
    /// Everything that must be read was read rightly.
    Understood,
    /// Nothing was read wrongly, but something was left out.
    Partly(String),
    /// It was not read at all.
    Refused,
    /// Something was read that the bytes do not say.
    Wrong(String),
}

/// Judges an answer.
pub fn score(truth: &Truth, answer: &Answer) -> Score {
    if answer.refused {
        return Score::Refused;
    }
    if answer.kind != Some(truth.kind) {
        return Score::Wrong(format!("kind {:?}, but it is {:?}", answer.kind, truth.kind));
    }
    let verdicts = [
        verdict("mass", place(&truth.readings, &answer.readings, |t| t.must, |t, g| fit_mass(truth, t, g))),
        verdict("count", place(&truth.counts, &answer.counts, |t| t.1, |t, g| fit_count(t.0, *g))),
        verdict("code", place(&truth.codes, &answer.codes, |t| t.must, fit_code)),
    ];
    let wrong = verdicts.iter().find(|v| matches!(v, Score::Wrong(_)));
    let partly = verdicts.iter().find(|v| matches!(v, Score::Partly(_)));
    wrong.or(partly).cloned().unwrap_or(Score::Understood)
}

fn verdict(word: &str, placed: Placed) -> Score {
    match placed {
        Placed::Not(text) => Score::Wrong(format!("{word} {text}")),
        Placed::All { missing: 0, inexact: 0 } => Score::Understood,
        Placed::All { missing, inexact } => Score::Partly(format!("{word}: {missing} missing, {inexact} not fully said")),
    }
}

/// `None` when the reading contradicts; else whether it says all there is.
fn fit_mass(truth: &Truth, said: &Reading, got: &(i64, Option<bool>, Basis)) -> Option<bool> {
    let steady = match (got.1, said.steady) {
        (None, None) => true,
        (None, Some(_)) => !truth.steady_evident,
        (Some(a), Some(b)) if a == b => true,
        _ => return None,
    };
    let basis = match (got.2, said.basis) {
        (a, b) if a == b => true,
        (Basis::Unmarked, Basis::Gross) => true,
        // A program takes the unmarked as gross: where the bytes tell, that is a misreading.
        (Basis::Unmarked, Basis::Net) if !truth.basis_evident => true,
        (Basis::Gross, Basis::Unmarked) => false,
        _ => return None,
    };
    (got.0 == said.mass_ug).then_some(steady && basis)
}

fn fit_count(said: Count, got: Count) -> Option<bool> {
    match (said, got) {
        (a, b) if a == b => Some(true),
        (Count::End(Some(a)), Count::Total(b)) if a == b => Some(false),
        (Count::End(Some(_)), Count::End(None)) => Some(false),
        _ => None,
    }
}

fn fit_code(said: &Code, got: &String) -> Option<bool> {
    (said.text == *got).then_some(true)
}

#[derive(Debug, PartialEq, Eq)]
enum Placed {
    /// The first that has no place, in words.
    Not(String),
    All {
        missing: usize,
        inexact: usize,
    },
}

/// Finds for everything that was got its place in what was said, in order, so that as little as possible is missing.
fn place<T, G: std::fmt::Debug>(
    said: &[T],
    got: &[G],
    must: impl Fn(&T) -> bool,
    fit: impl Fn(&T, &G) -> Option<bool>,
) -> Placed {
    // Best worth of the first i got among the first j said; a must weighs more than all exactness together.
    const MUST: i64 = 1 << 20;
    let worth = |t: &T, exact: bool| 1 + i64::from(exact) + if must(t) { MUST } else { 0 };
    let mut row: Vec<Option<i64>> = vec![Some(0); said.len() + 1];
    for (i, g) in got.iter().enumerate() {
        let mut next = vec![None; said.len() + 1];
        for (j, t) in said.iter().enumerate() {
            let here = row[j].zip(fit(t, g)).map(|(before, exact)| before + worth(t, exact));
            next[j + 1] = here.max(next[j]);
        }
        row = next;
        if row[said.len()].is_none() {
            return Placed::Not(format!("{g:?} (number {}) is not what was said", i + 1));
        }
    }
    let best = row[said.len()].unwrap_or(0);
    let musts = said.iter().filter(|t| must(t)).count();
    let found = usize::try_from(best / MUST).unwrap_or(0);
    let exact = usize::try_from(best % MUST).unwrap_or(0).saturating_sub(got.len());
    Placed::All { missing: musts - found, inexact: got.len() - exact }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn truth() -> Truth {
        let mut truth = Truth::new(Kind::Balance);
        for (mass_ug, steady, basis) in
            [(0, true, Basis::Gross), (21, false, Basis::Gross), (21, true, Basis::Gross), (7, true, Basis::Net)]
        {
            truth.readings.push(Reading { mass_ug, steady: Some(steady), basis, must: mass_ug != 0 });
        }
        truth
    }

    fn answer(readings: &[(i64, Option<bool>, Basis)]) -> Answer {
        Answer { kind: Some(Kind::Balance), readings: readings.to_vec(), ..Answer::default() }
    }

    #[test]
    fn verdicts_are_as_described() {
        use Basis::{Gross, Net, Unmarked};
        let truth = truth();
        let all = [(21, Some(false), Gross), (21, Some(true), Unmarked), (7, Some(true), Net)];
        assert_eq!(score(&truth, &answer(&all)), Score::Understood);
        assert!(matches!(score(&truth, &answer(&all[1..])), Score::Partly(_)));
        let unmarked = [(21, None, Gross), (21, Some(true), Gross), (7, Some(true), Net)];
        assert!(matches!(score(&truth, &answer(&unmarked)), Score::Partly(_)));
        for wrong in [
            [(21, Some(true), Gross), (21, Some(true), Gross), (7, Some(true), Net)],
            [(21, Some(false), Gross), (21, Some(true), Gross), (7, Some(true), Gross)],
            [(21, Some(false), Gross), (21, Some(true), Gross), (7, Some(true), Unmarked)],
            [(21, Some(false), Gross), (21, Some(true), Gross), (70, Some(true), Net)],
            [(21, Some(false), Net), (21, Some(true), Gross), (7, Some(true), Net)],
        ] {
            assert!(matches!(score(&truth, &answer(&wrong)), Score::Wrong(_)), "{wrong:?}");
        }
        assert_eq!(score(&truth, &Answer { refused: true, ..Answer::default() }), Score::Refused);
        let other = Answer { kind: Some(Kind::Scanner), ..answer(&all) };
        assert!(matches!(score(&truth, &other), Score::Wrong(_)));
    }

    #[test]
    fn counts_are_told_apart() {
        let mut truth = Truth::new(Kind::Counter);
        truth.counts = vec![(Count::Total(1), true), (Count::Total(2), true), (Count::End(Some(2)), true)];
        let got =
            |counts: &[Count]| score(&truth, &Answer { kind: Some(Kind::Counter), counts: counts.to_vec(), ..Answer::default() });
        assert_eq!(got(&[Count::Total(1), Count::Total(2), Count::End(Some(2))]), Score::Understood);
        assert!(matches!(got(&[Count::Total(1), Count::Total(2), Count::Total(2)]), Score::Partly(_)));
        assert!(matches!(got(&[Count::Total(2), Count::Total(1)]), Score::Wrong(_)));
        assert!(matches!(got(&[Count::Drop, Count::Drop]), Score::Wrong(_)));
    }
}
