//! The count of what was planted and what was caught.

use super::player::{Outcome, Played};
use serde_json::{Value, json};
use std::collections::{BTreeMap, BTreeSet};
use tarecup_core::limits::Severity;
use tarecup_simulators::drill::{Balance, Mistake, seen_how};

/// A result has moved when a limit differs by more than this, percent water.
const MOVED: f64 = 1.0;

/// Mistakes of one kind.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Row {
    /// How often.
    pub planted: u64,
    /// How often a limit moved by more than one.
    pub moved: u64,
    /// How often something was said.
    pub flagged: u64,
    /// How often both.
    pub flagged_of_moved: u64,
    /// What was said, and how often.
    pub said: BTreeMap<String, u64>,
}

/// Specimens in which nothing went wrong.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Clean {
    /// How many.
    pub specimens: u64,
    /// With a hold in their result.
    pub holds: u64,
    /// With a note in their result.
    pub notes: u64,
    /// Not complete at the end.
    pub incomplete: u64,
    /// What was said, and how often.
    pub said: BTreeMap<String, u64>,
}

/// Everything that was counted.
#[derive(Clone, Debug, PartialEq)]
pub struct Tally {
    seed: u64,
    specimens: u64,
    mistakes: BTreeMap<(Mistake, Balance), Row>,
    clean: BTreeMap<Balance, Clean>,
}

fn share(part: u64, of: u64) -> Option<f64> {
    (of > 0).then(|| part as f64 / of as f64)
}

impl Tally {
    /// Nothing counted yet.
    pub fn new(seed: u64, specimens: u64) -> Self {
        Self { seed, specimens, mistakes: BTreeMap::new(), clean: BTreeMap::new() }
    }

    /// Counts a session in which nothing went wrong.
    pub fn clean(&mut self, balance: Balance, played: &Played) {
        let clean = self.clean.entry(balance).or_default();
        for outcome in played.specimens.values() {
            clean.specimens += 1;
            clean.holds += u64::from(outcome.has(Severity::Hold));
            clean.notes += u64::from(outcome.has(Severity::Note));
            clean.incomplete += u64::from(!outcome.complete());
            for check in outcome.limits.iter().flat_map(|l| &l.checks) {
                *clean.said.entry(check.check.clone()).or_default() += 1;
            }
        }
        for says in &played.bench {
            *clean.said.entry(format!("bench: {says}")).or_default() += 1;
        }
    }

    /// Counts a mistake against the same session without it.
    pub fn planted(&mut self, balance: Balance, mistake: Mistake, without: &Played, with: &Played) {
        let moved = with.specimens.iter().any(|(id, o)| without.specimens.get(id).is_some_and(|clean| has_moved(clean, o)));
        let said = new_words(without, with);
        let row = self.mistakes.entry((mistake, balance)).or_default();
        row.planted += 1;
        row.moved += u64::from(moved);
        row.flagged += u64::from(!said.is_empty());
        row.flagged_of_moved += u64::from(moved && !said.is_empty());
        for word in said {
            *row.said.entry(word).or_default() += 1;
        }
    }

    /// Both kinds of balance taken together.
    pub fn by_mistake(&self) -> BTreeMap<Mistake, Row> {
        let mut all: BTreeMap<Mistake, Row> = BTreeMap::new();
        for ((mistake, _), row) in &self.mistakes {
            add(all.entry(*mistake).or_default(), row);
        }
        all
    }

    fn of_balance(&self, balance: Option<Balance>) -> (Row, Clean) {
        let (mut sum, mut clean) = (Row::default(), Clean::default());
        self.mistakes.iter().filter(|((_, b), _)| balance.is_none_or(|w| w == *b)).for_each(|(_, row)| add(&mut sum, row));
        for (_, c) in self.clean.iter().filter(|(b, _)| balance.is_none_or(|w| w == **b)) {
            clean.specimens += c.specimens;
            clean.holds += c.holds;
            clean.notes += c.notes;
            clean.incomplete += c.incomplete;
            c.said.iter().for_each(|(word, n)| *clean.said.entry(word.clone()).or_default() += n);
        }
        (sum, clean)
    }

    /// Everything as one object.
    pub fn json(&self) -> Value {
        let mistakes: Vec<Value> = self.by_mistake().iter().map(|(m, row)| row_json(*m, row)).collect();
        let (sum, clean) = self.of_balance(None);
        let balances: serde_json::Map<String, Value> = Balance::ALL
            .iter()
            .map(|b| {
                let (sum, clean) = self.of_balance(Some(*b));
                (b.word().into(), json!({"overall": overall(&sum), "clean": clean_json(&clean)}))
            })
            .collect();
        json!({
            "seed": self.seed, "specimens": self.specimens, "mistakes": mistakes, "clean": clean_json(&clean),
            "overall": overall(&sum), "balances": balances,
        })
    }

    /// The table for people.
    pub fn table(&self) -> String {
        let percent = |part, of| share(part, of).map_or_else(|| String::from("    -"), |s| format!("{:>4.0}%", s * 100.0));
        let mut out = format!("{:<40}{:>8}{:>7}{:>9}{:>15}\n", "mistake", "planted", "moved", "flagged", "of those moved");
        let mut never: Vec<Mistake> = Vec::new();
        for (mistake, row) in self.by_mistake() {
            let caught = percent(row.flagged_of_moved, row.moved);
            let line = (mistake.word(), row.planted, row.moved, percent(row.flagged, row.planted), caught);
            out += &format!("{:<40}{:>8}{:>7}{:>9}{:>15}\n", line.0, line.1, line.2, line.3, line.4);
            if row.flagged * 20 < row.planted * 19 {
                never.push(mistake);
            }
        }
        for balance in [None, Some(Balance::Streaming), Some(Balance::PrintOnKey)] {
            let (sum, clean) = self.of_balance(balance);
            let name = balance.map_or("all", Balance::word);
            out += &format!(
                "\n{name}: {} of {} mistakes that moved a limit by more than 1 were flagged ({}); of {} clean specimens {} with a false hold ({:.2} %), {} with a false note ({:.2} %)",
                sum.flagged_of_moved,
                sum.moved,
                percent(sum.flagged_of_moved, sum.moved).trim(),
                clean.specimens,
                clean.holds,
                share(clean.holds, clean.specimens).unwrap_or(0.0) * 100.0,
                clean.notes,
                share(clean.notes, clean.specimens).unwrap_or(0.0) * 100.0
            );
        }
        out += "\n\nnot always noticed, and how each can be seen at all:\n";
        for mistake in never {
            out += &format!("  {:<38} {}\n", mistake.word(), seen_how(mistake));
        }
        out
    }
}

fn add(sum: &mut Row, row: &Row) {
    sum.planted += row.planted;
    sum.moved += row.moved;
    sum.flagged += row.flagged;
    sum.flagged_of_moved += row.flagged_of_moved;
    row.said.iter().for_each(|(word, n)| *sum.said.entry(word.clone()).or_default() += n);
}

fn overall(sum: &Row) -> Value {
    json!({"planted": sum.planted, "moved_result": sum.moved, "flagged": sum.flagged,
           "flagged_of_moved": share(sum.flagged_of_moved, sum.moved)})
}

fn row_json(mistake: Mistake, row: &Row) -> Value {
    json!({"kind": mistake.word(), "planted": row.planted, "moved_result": row.moved, "flagged": row.flagged,
           "flagged_of_moved": share(row.flagged_of_moved, row.moved), "said": row.said})
}

fn clean_json(clean: &Clean) -> Value {
    json!({"specimens": clean.specimens, "false_holds": share(clean.holds, clean.specimens),
           "false_notes": share(clean.notes, clean.specimens), "incomplete": clean.incomplete, "said": clean.said})
}

fn has_moved(clean: &Outcome, other: &Outcome) -> bool {
    let pairs = clean.values().into_iter().zip(other.values());
    pairs.into_iter().any(|(a, b)| a.zip(b).is_some_and(|(a, b)| (a - b).abs() > MOVED))
}

/// What was said only where the mistake was made.
fn new_words(without: &Played, with: &Played) -> BTreeSet<String> {
    let mut said: BTreeSet<String> = with.bench.difference(&without.bench).map(|s| format!("bench: {s}")).collect();
    for (id, outcome) in &with.specimens {
        let before = without.specimens.get(id).map(|o| &o.said);
        let new = outcome.said.iter().filter(|s| before.is_none_or(|b| !b.contains(*s)));
        said.extend(new.map(|(check, _)| check.clone()));
    }
    said
}
