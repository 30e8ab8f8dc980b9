//! What a correction is about, as it stands in the record.

use super::view::{Change, Kind, Subject, What};
use tarecup_core::lab::Lab;
use tarecup_core::lab::entities::{Count, LooseWhat, Said, Specimen, TrialRecord, Weighing};
use tarecup_core::names::SpecimenId;
use tarecup_core::sheet::{self, Seq};

fn kind(of: sheet::Kind) -> Option<Kind> {
    match of {
        sheet::Kind::Liquid => Some(Kind::Liquid),
        sheet::Kind::Thread => Some(Kind::Thread),
        sheet::Kind::Natural => Some(Kind::Natural),
        sheet::Kind::Cone => None,
    }
}

fn corrected(said: Option<&Said>) -> Vec<Change> {
    let change = |s: &Said| Change {
        seq: s.seq,
        who: s.by.as_ref().map(ToString::to_string),
        why: Some(s.why.clone()),
        what: String::from("corrected"),
        correction: true,
        ..Change::default()
    };
    said.map(change).into_iter().collect()
}

fn weighing(w: &Weighing) -> Subject {
    Subject {
        seq: w.seq,
        what: What::Weighing { mass_g: w.mass.to_string() },
        instrument: w.balance.as_ref().map(ToString::to_string),
        typed: w.typed,
        at: w.at.rfc3339(),
        by: w.by.as_ref().map(ToString::to_string),
        before: corrected(w.corrected.as_ref()),
        ..Subject::default()
    }
}

fn count(c: &Count) -> Subject {
    Subject {
        seq: c.seq,
        bench: c.bench.as_ref().map(ToString::to_string),
        what: What::Count { drops: c.drops },
        instrument: c.cup.as_ref().map(ToString::to_string),
        typed: c.typed,
        at: c.at.rfc3339(),
        by: c.by.as_ref().map(ToString::to_string),
        set_aside: c.set_aside.as_ref().map(|s| s.why.clone()).or(c.superseded.clone()),
        before: corrected(c.corrected.as_ref()),
        ..Subject::default()
    }
}

fn role(t: &TrialRecord, seq: Seq) -> Option<(&Weighing, &'static str)> {
    let tare = t.tare.iter().map(|w| (w, "tare"));
    let wets = t.wets.iter().enumerate().map(|(n, w)| (w, if n == 0 { "wet" } else { "grown" }));
    let repeats = t.repeats.iter().map(|w| (w, "repeat"));
    let dries = t.dries.iter().enumerate().map(|(n, d)| (&d.weighing, if n == 0 { "dry" } else { "further_dry" }));
    tare.chain(wets).chain(repeats).chain(dries).find(|(w, _)| w.seq == seq)
}

fn of_specimen(s: &Specimen, seq: Seq) -> Option<Subject> {
    if let Some(c) = s.count(seq) {
        let trial = s.trials.iter().find(|t| t.counts.contains(&seq));
        let trial = trial.and_then(|t| Some((kind(t.kind)?, t.no)));
        return Some(Subject { specimen: Some(s.id.to_string()), trial, ..count(c) });
    }
    s.trials.iter().find_map(|t| {
        let (w, role) = role(t, seq)?;
        Some(Subject {
            container: Some(t.container.to_string()),
            role: Some(role.into()),
            specimen: Some(s.id.to_string()),
            trial: kind(t.kind).map(|k| (k, t.no)),
            set_aside: t.set_aside.as_ref().map(|a| a.why.clone()),
            ..weighing(w)
        })
    })
}

/// A weighing or count by the number of its fact.
pub(super) fn of_fact(lab: &Lab, seq: Seq) -> Option<Subject> {
    let mut found = lab.specimens().find_map(|s| of_specimen(s, seq)).or_else(|| {
        lab.containers().find_map(|c| {
            let tare = c.tares.iter().map(|w| (w, "tare")).chain(c.with_lid.iter().map(|w| (w, "tare_with_lid")));
            let (w, role) = tare.into_iter().find(|(w, _)| w.seq == seq)?;
            Some(Subject { container: Some(c.id.to_string()), role: Some(role.into()), ..weighing(w) })
        })
    });
    found = found.or_else(|| {
        let loose = lab.loose(seq)?;
        let subject = match &loose.what {
            LooseWhat::Weighing { weighing: w, .. } => weighing(w),
            LooseWhat::Count(c) => count(c),
        };
        Some(Subject { bench: loose.bench.as_ref().map(ToString::to_string), ..subject })
    });
    found.map(|subject| {
        let at = lab.benches().find(|b| b.latest.as_ref().is_some_and(|l| l.seq == seq)).map(|b| b.name.to_string());
        Subject { bench: subject.bench.clone().or(at), ..subject }
    })
}

/// A determination.
pub(super) fn of_trial(lab: &Lab, specimen: &SpecimenId, word: &str, no: u32) -> Option<Subject> {
    let of = |t: &&TrialRecord| kind(t.kind).is_some_and(|k| word_of(k) == word) && t.no == no;
    let trial = lab.specimen(specimen)?.trials.iter().find(of)?;
    let wet = trial.wets.last();
    Some(Subject {
        what: What::Trial,
        container: Some(trial.container.to_string()),
        specimen: Some(specimen.to_string()),
        trial: kind(trial.kind).map(|k| (k, no)),
        at: wet.map(|w| w.at.rfc3339()).unwrap_or_default(),
        by: wet.and_then(|w| w.by.as_ref()).map(ToString::to_string),
        set_aside: trial.set_aside.as_ref().map(|s| s.why.clone()),
        ..Subject::default()
    })
}

fn word_of(kind: Kind) -> &'static str {
    match kind {
        Kind::Liquid => "liquid",
        Kind::Thread => "thread",
        Kind::Natural => "natural",
    }
}
