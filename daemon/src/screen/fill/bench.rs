//! A bench.

use super::super::view::{self, Balance, Bench, ContainerKey, Cup, Next, Owed, Recorded, SpecimenKey, Step, Work};
use super::specimen::{flow, freshness, results, trials};
use super::{Around, Heard, advice, connected, frame, role_word, standing_word, text};
use std::collections::BTreeMap;
use tarecup_core::fact::Intention;
use tarecup_core::lab::Lab;
use tarecup_core::lab::entities::{self, Instrument, LooseWhat, Specimen, TrialRecord, Weighing};
use tarecup_core::method::Method;
use tarecup_core::names::{BenchName, InstrumentName};
use tarecup_core::sheet::{Kind, Seq};
use tarecup_core::soil::limits::{liquid_trials_needed, threads_needed};
use tarecup_core::stamp::Stamp;

/// Entries of what was recorded.
const RECORDED: usize = 6;
/// Containers and specimens offered to a finger.
const OFFERED: usize = 60;

/// A bench's page; `None` when there is no such bench.
pub fn bench(lab: &Lab, name: &BenchName, now: &Stamp, around: &Around) -> Option<Bench> {
    let b = lab.bench(name)?;
    let here = |i: &InstrumentName| lab.setup().instruments.get(i).is_some_and(|benches| benches.contains(name));
    let served = || lab.instruments().filter(|i| here(&i.name));
    let heard = |i: &Instrument| around.instruments.get(&i.name).cloned().unwrap_or_default();
    let of = |kind| served().map(|i| (i, heard(i))).filter(move |(_, h)| h.kind == kind);
    let work = b.intention.as_ref().and_then(|w| lab.specimen(&w.specimen).map(|s| (w, s)));
    let method = work.and_then(|(_, s)| lab.setup().methods.get(&s.method));
    let mut frame = frame(lab, now, around);
    frame.bench = Some(name.to_string());
    Some(Bench {
        frame,
        name: name.to_string(),
        signed_in: text(b.signed_in.as_ref()),
        next: next(lab, b, work.map(|(_, s)| s), method),
        balances: of("balance").map(|(i, h)| balance(lab, name, i, &h)).collect(),
        cups: of("counter").map(|(i, h)| cup(i, &h, method)).collect(),
        hand: b.hand.as_ref().filter(|h| h.weighing.is_none()).map(|h| h.container.to_string()),
        owed: b.owed.as_ref().map(|o| Owed {
            specimen: o.specimen.to_string(),
            drops: o.drops,
            since: o.ended.rfc3339(),
            overdue: o.said,
        }),
        work: work.map(|(w, s)| in_work(w.intention, s, method)),
        recorded: recorded(lab, b),
        specimens: specimens(lab, work.map(|(_, s)| s)),
        containers: containers(lab),
        advice: advice::advice(lab, name, around.paste_g.clone()),
        loose: lab.loose_things().filter(|l| l.bench.as_ref() == Some(name)).count(),
    })
}

fn next(lab: &Lab, b: &entities::Bench, s: Option<&Specimen>, method: Option<&Method>) -> Next {
    let guide = lab.guide(&b.name);
    let liquid = b.intention.as_ref().is_some_and(|w| w.intention == Intention::Liquid);
    let wanted = method.map_or(0, liquid_trials_needed);
    let done = s.map_or(0, |s| s.trials.iter().filter(|t| t.kind == Kind::Liquid && t.set_aside.is_none()).count());
    let step = match (&b.refusal, &b.hand, &b.owed) {
        (Some(_), _, _) => Step::Refused,
        (None, Some(hand), _) if hand.weighing.is_some() => Step::TakeOff,
        (None, Some(_), _) => Step::Weigh,
        (None, None, Some(_)) => Step::Slice,
        (None, None, None) if liquid && done < wanted => Step::Cup,
        (None, None, None) => Step::Scan,
    };
    Next { sentence: guide.as_ref().map_or(String::new(), |g| g.next.clone()), urgent: guide.is_some_and(|g| g.urgent), step }
}

fn since<'a>(i: &'a Instrument, h: &'a Heard) -> Option<&'a Stamp> {
    h.last_heard.as_ref().or(i.since.as_ref())
}

fn balance(lab: &Lab, here: &BenchName, i: &Instrument, h: &Heard) -> Balance {
    let benches = lab.setup().instruments.get(&i.name);
    Balance {
        name: i.name.to_string(),
        connected: connected(i.state),
        detail: i.detail.clone(),
        freshness: freshness(i.state, since(i, h)),
        reading: h.reading.clone(),
        shared_with: benches.into_iter().flatten().filter(|b| *b != here).map(ToString::to_string).collect(),
    }
}

fn cup(i: &Instrument, h: &Heard, method: Option<&Method>) -> Cup {
    Cup {
        name: i.name.to_string(),
        connected: connected(i.state),
        detail: i.detail.clone(),
        freshness: freshness(i.state, since(i, h)),
        drops: h.drops.map(|(drops, _)| drops),
        rate_per_s: h.drops.and_then(|(_, rate)| rate),
        rate_wanted: method.map(|m| m.liquid.rate_per_s),
        running: h.running,
    }
}

fn in_work(intention: Intention, s: &Specimen, method: Option<&Method>) -> Work {
    let intention = match intention {
        Intention::Liquid => "liquid",
        Intention::Plastic => "plastic",
        Intention::Natural => "natural",
    };
    Work {
        specimen: s.id.to_string(),
        description: s.description.clone(),
        intention: intention.into(),
        liquid_wanted: method.map_or(0, |m| liquid_trials_needed(m) as u32),
        threads_wanted: method.map_or(0, |m| threads_needed(m) as u32),
        trials: trials(s),
        flow: flow(s),
        results: results(s),
    }
}

fn specimens(lab: &Lab, chosen: Option<&Specimen>) -> Vec<SpecimenKey> {
    let keep = |s: &&Specimen| s.open() || chosen.is_some_and(|c| c.id == s.id);
    let key = |s: &Specimen| SpecimenKey {
        id: s.id.to_string(),
        description: s.description.clone(),
        chosen: chosen.is_some_and(|c| c.id == s.id),
    };
    lab.specimens().filter(keep).take(OFFERED).map(key).collect()
}

fn containers(lab: &Lab) -> Vec<ContainerKey> {
    let key = |c: &entities::Container| ContainerKey { id: c.id.to_string(), standing: standing_word(c.standing).into() };
    lab.containers().take(OFFERED).map(key).collect()
}

/// What was weighed and counted at a bench, newest first. The record keeps no bench with a weighing that found its
/// place; its balance tells, and for a typed one only the latest is known to be of here.
fn recorded(lab: &Lab, b: &entities::Bench) -> Vec<Recorded> {
    let mut all: BTreeMap<Seq, Recorded> = BTreeMap::new();
    let here = |w: &Weighing| match &w.balance {
        Some(balance) => lab.setup().instruments.get(balance).is_some_and(|benches| benches.contains(&b.name)),
        None => b.latest.as_ref().is_some_and(|l| l.seq == w.seq),
    };
    for c in lab.containers() {
        for (i, w) in c.tares.iter().enumerate().filter(|(_, w)| here(w)) {
            all.insert(w.seq, weighing(w, c.id.as_str(), if i == 0 { "tare" } else { "tare_check" }, None));
        }
        for w in c.with_lid.iter().filter(|w| here(w)) {
            all.insert(w.seq, weighing(w, c.id.as_str(), "tare_with_lid", None));
        }
    }
    for s in lab.specimens() {
        for (t, w, role) in s.trials.iter().flat_map(of_trial).filter(|(_, w, _)| here(w)) {
            let aside = t.set_aside.as_ref().map(|a| a.why.clone());
            all.insert(w.seq, Recorded { set_aside: aside, ..weighing(w, t.container.as_str(), role, Some(s.id.as_str())) });
        }
        let counts = s.counts.iter().filter(|c| c.bench.as_ref() == Some(&b.name));
        all.extend(counts.map(|c| (c.seq, count(c, Some(s.id.as_str())))));
    }
    for l in lab.loose_things().filter(|l| l.bench.as_ref() == Some(&b.name)) {
        let entry = match &l.what {
            LooseWhat::Weighing { weighing: w, .. } => Recorded { container: None, role: None, ..weighing(w, "", "", None) },
            LooseWhat::Count(c) => count(c, None),
        };
        all.insert(l.seq, Recorded { loose: Some(l.why.clone()), ..entry });
    }
    if let Some((l, entry)) = b.latest.as_ref().and_then(|l| all.get_mut(&l.seq).map(|e| (l, e))) {
        entry.role = l.role.map(|r| role_word(r).into());
        entry.container = text(l.container.as_ref());
    }
    all.into_values().rev().take(RECORDED).collect()
}

fn of_trial(t: &TrialRecord) -> impl Iterator<Item = (&TrialRecord, &Weighing, &'static str)> {
    let wets = t.wets.iter().enumerate().map(|(i, w)| (w, if i == 0 { "wet" } else { "grown" }));
    let repeats = t.repeats.iter().map(|w| (w, "repeat"));
    let dries = t.dries.iter().enumerate().map(|(i, d)| (&d.weighing, if i == 0 { "dry" } else { "further_dry" }));
    wets.chain(repeats).chain(dries).map(move |(w, role)| (t, w, role))
}

fn weighing(w: &Weighing, container: &str, role: &str, specimen: Option<&str>) -> Recorded {
    Recorded {
        seq: w.seq,
        mass_g: Some(w.mass.to_string()),
        container: Some(container.into()),
        role: Some(role.into()),
        specimen: specimen.map(String::from),
        typed: w.typed,
        at: w.at.rfc3339(),
        by: text(w.by.as_ref()),
        ..Default::default()
    }
}

fn count(c: &entities::Count, specimen: Option<&str>) -> Recorded {
    Recorded {
        seq: c.seq,
        drops: Some(c.drops),
        specimen: specimen.map(String::from),
        typed: c.typed,
        set_aside: c.set_aside.as_ref().map(|a| a.why.clone()).or_else(|| c.superseded.clone()),
        at: c.at.rfc3339(),
        by: text(c.by.as_ref()),
        ..Default::default()
    }
}

/// Choices for the corrections, too.
pub(super) fn choices(lab: &Lab) -> (Vec<SpecimenKey>, Vec<String>) {
    (specimens(lab, None), lab.containers().take(OFFERED).map(|c| c.id.to_string()).collect())
}

/// Weighings of a determination with their roles; its tare left out, which is the container's.
pub(super) fn trial_roles(t: &TrialRecord) -> impl Iterator<Item = (&Weighing, &'static str)> {
    of_trial(t).map(|(_, w, role)| (w, role))
}

/// Kind and number of a determination, for a page.
pub(super) fn trial_of(t: &TrialRecord) -> Option<(view::Kind, u32)> {
    super::kind(t.kind).map(|k| (k, t.no))
}
