//! Two containers whose masses or drops fit better when put the other way round.
//! Tried out only where the determinations do not belong together as they are.

use super::fit::{Piece, apart, mends, misfit, pieces};
use super::{Worked, facts, hold, in_order, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// What two determinations may have exchanged.
#[derive(Clone, Copy)]
enum What {
    Dry,
    Wet,
    /// The codes at the wet weighing: each slice lies in the other's container.
    Containers,
    Drops,
}

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let pieces = pieces(worked);
    // Where the line runs the wrong way there may be no line to speak of yet.
    let Some(now) = misfit(worked, &pieces).filter(|m| apart(*m)) else { return };
    let mut best: Option<(f64, What, usize, usize)> = None;
    // Drops close to each other change places within the scatter: only a line that runs the wrong way speaks of them.
    let whats = [What::Dry, What::Wet, What::Containers, What::Drops];
    let whats = if now.is_finite() { &whats[..3] } else { &whats[..] };
    for i in 0..pieces.len() {
        for j in i + 1..pieces.len() {
            for &what in whats {
                let Some(tried) = put_back(&pieces, i, j, what).and_then(|p| misfit(worked, &p)) else { continue };
                if mends(tried, now) && best.is_none_or(|(least, ..)| tried < least) {
                    best = Some((tried, what, i, j));
                }
            }
        }
    }
    match best {
        Some((tried, what, i, j)) => {
            let (a, b) = (&worked.trials[pieces[i].0], &worked.trials[pieces[j].0]);
            let what = match what {
                What::Dry => "dry masses",
                What::Wet => "wet masses",
                What::Containers => "containers at the wet weighing",
                What::Drops => "drops",
            };
            let says = format!(
                "the determinations do not fit together ({}); with the {what} of {} and {} put the other way round they do ({tried:.1}). Look which code was read for which, and tie or correct the two.",
                fits(now),
                a.about,
                b.about
            );
            let both = facts(a.trial).into_iter().chain(facts(b.trial)).collect();
            rows.push(hold("exchanged", &format!("{} and {}", a.about, b.about), says, in_order(both)));
        }
        None => across(worked, now, &pieces, rows),
    }
}

fn fits(misfit: f64) -> String {
    if misfit.is_finite() {
        format!("mean square {misfit:.0} times that of careful work")
    } else {
        String::from("masses no soil has, or a line the wrong way")
    }
}

fn put_back(pieces: &[(usize, Piece)], i: usize, j: usize, what: What) -> Option<Vec<(usize, Piece)>> {
    let (a, b) = (pieces[i].1, pieces[j].1);
    let of_line = a.kind != Kind::Thread && b.kind != Kind::Thread;
    let mut tried = pieces.to_vec();
    match what {
        What::Dry => (tried[i].1.masses[2], tried[j].1.masses[2]) = (b.masses[2], a.masses[2]),
        What::Wet => (tried[i].1.masses[1], tried[j].1.masses[1]) = (b.masses[1], a.masses[1]),
        What::Containers => {
            (tried[i].1.masses[0], tried[j].1.masses[0]) = (b.masses[0], a.masses[0]);
            (tried[i].1.masses[2], tried[j].1.masses[2]) = (b.masses[2], a.masses[2]);
        }
        What::Drops if of_line && a.reading != b.reading => {
            (tried[i].1.reading, tried[j].1.reading) = (b.reading, a.reading);
        }
        What::Drops => return None,
    }
    Some(tried)
}

/// A dry mass that fits when taken from a container of a specimen tested beside this one.
fn across(worked: &Worked, now: f64, pieces: &[(usize, Piece)], rows: &mut Vec<CheckRow>) {
    let others = worked.laboratory.beside.iter().flat_map(|s| s.trials.iter().map(move |t| (s, t)));
    let mut best: Option<(f64, usize, String)> = None;
    for (of, other) in others {
        let Some(dry) = other.masses[2] else { continue };
        for i in 0..pieces.len() {
            let mut tried = pieces.to_vec();
            tried[i].1.masses[2] = dry;
            let Some(tried) = misfit(worked, &tried).filter(|m| mends(*m, now)) else { continue };
            if best.as_ref().is_none_or(|(least, ..)| tried < *least) {
                best = Some((tried, i, format!("{} of specimen {}", other.about, of.specimen)));
            }
        }
    }
    let Some((_, i, other)) = best else { return };
    let t = &worked.trials[pieces[i].0];
    let says = format!(
        "the determinations do not fit together; with the dry mass of {other} in place of its own {} would fit. Look which code was read for which, and tie or correct the two.",
        t.about
    );
    rows.push(note("exchanged_across", &t.about, says, facts(t.trial)));
}
