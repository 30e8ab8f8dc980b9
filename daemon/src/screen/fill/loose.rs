//! Loose things, and what a correction is about.

use super::super::view::{Correction, LoosePage, LooseThing, Subject, What};
use super::bench::{choices, trial_of, trial_roles};
use super::{Around, frame, text};
use tarecup_core::fact::TrialRef;
use tarecup_core::lab::Lab;
use tarecup_core::lab::entities::{Count, Loose, LooseWhat, Weighing};
use tarecup_core::names::SpecimenId;
use tarecup_core::sheet::Seq;
use tarecup_core::stamp::Stamp;

/// Loose things, newest first.
pub fn loose(lab: &Lab, now: &Stamp, around: &Around) -> LoosePage {
    let (specimens, containers) = choices(lab);
    let thing = |l: &Loose| LooseThing { subject: of_loose(l), why: l.why.clone(), trace: around.traces.get(&l.seq).cloned() };
    let mut things: Vec<LooseThing> = lab.loose_things().map(thing).collect();
    things.reverse();
    LoosePage { frame: frame(lab, now, around), things, specimens, containers }
}

/// The page that corrects a weighing or count; `None` when no such fact is at hand. What it was before comes as
/// `around.history`.
pub fn correction(lab: &Lab, seq: Seq, now: &Stamp, around: &Around) -> Option<Correction> {
    subject(lab, seq).map(|subject| page(lab, subject, now, around))
}

/// The page that sets a determination aside.
pub fn trial_correction(lab: &Lab, specimen: &SpecimenId, trial: TrialRef, now: &Stamp, around: &Around) -> Option<Correction> {
    let t = lab.specimen(specimen)?.trial(trial)?;
    let subject = Subject {
        what: What::Trial,
        container: Some(t.container.to_string()),
        specimen: Some(specimen.to_string()),
        trial: trial_of(t),
        at: t.wets.last().map_or(String::new(), |w| w.at.rfc3339()),
        by: t.wets.last().and_then(|w| text(w.by.as_ref())),
        set_aside: t.set_aside.as_ref().map(|a| a.why.clone()),
        ..Default::default()
    };
    Some(page(lab, subject, now, around))
}

fn page(lab: &Lab, subject: Subject, now: &Stamp, around: &Around) -> Correction {
    let (specimens, containers) = choices(lab);
    let subject = Subject { before: around.history.clone(), ..subject };
    Correction { frame: frame(lab, now, around), subject, specimens, containers, then: around.then.clone() }
}

fn subject(lab: &Lab, seq: Seq) -> Option<Subject> {
    if let Some(l) = lab.loose(seq) {
        return Some(of_loose(l));
    }
    for c in lab.containers() {
        let lids = c.with_lid.iter().map(|w| (w, "tare_with_lid"));
        let tares = c.tares.iter().enumerate().map(|(i, w)| (w, if i == 0 { "tare" } else { "tare_check" }));
        if let Some((w, role)) = tares.chain(lids).find(|(w, _)| w.seq == seq) {
            return Some(Subject { container: Some(c.id.to_string()), role: Some(role.into()), ..of_weighing(w) });
        }
    }
    for s in lab.specimens() {
        for t in &s.trials {
            let tare = t.tare.iter().map(|w| (w, "tare"));
            if let Some((w, role)) = trial_roles(t).chain(tare).find(|(w, _)| w.seq == seq) {
                return Some(Subject {
                    container: Some(t.container.to_string()),
                    role: Some(role.into()),
                    specimen: Some(s.id.to_string()),
                    trial: trial_of(t),
                    set_aside: t.set_aside.as_ref().map(|a| a.why.clone()),
                    ..of_weighing(w)
                });
            }
        }
        if let Some(c) = s.count(seq) {
            let trial = s.trials.iter().find(|t| t.counts.contains(&seq)).and_then(trial_of);
            return Some(Subject { specimen: Some(s.id.to_string()), trial, ..of_count(c) });
        }
    }
    None
}

fn of_loose(l: &Loose) -> Subject {
    let subject = match &l.what {
        LooseWhat::Weighing { weighing, .. } => of_weighing(weighing),
        LooseWhat::Count(count) => of_count(count),
    };
    Subject { bench: text(l.bench.as_ref()), ..subject }
}

fn of_weighing(w: &Weighing) -> Subject {
    Subject {
        seq: w.seq,
        what: What::Weighing { mass_g: w.mass.to_string() },
        instrument: text(w.balance.as_ref()),
        typed: w.typed,
        at: w.at.rfc3339(),
        by: text(w.by.as_ref()),
        ..Default::default()
    }
}

fn of_count(c: &Count) -> Subject {
    Subject {
        seq: c.seq,
        bench: text(c.bench.as_ref()),
        what: What::Count { drops: c.drops },
        instrument: text(c.cup.as_ref()),
        typed: c.typed,
        at: c.at.rfc3339(),
        by: text(c.by.as_ref()),
        set_aside: c.set_aside.as_ref().map(|a| a.why.clone()).or_else(|| c.superseded.clone()),
        ..Default::default()
    }
}
