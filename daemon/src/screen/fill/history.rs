//! What happened to a specimen, from the ledger's facts.

use super::super::view::Change;
use super::super::words::{Words, fill};
use super::{role_word, text};
use std::collections::BTreeSet;
use tarecup_core::fact::{Fact, Limit, Link, Recorded};
use tarecup_core::names::{ContainerId, SpecimenId};
use tarecup_core::sheet::{Kind, Seq};

/// Weighings, counts and containers that were the specimen's when a fact came.
#[derive(Default)]
struct Own {
    facts: BTreeSet<Seq>,
    containers: BTreeSet<ContainerId>,
}

/// Changes of a specimen among facts in order, from its opening on.
pub fn history<'a>(facts: impl IntoIterator<Item = &'a Recorded>, specimen: &SpecimenId, w: &Words) -> Vec<Change> {
    let mut own = Own::default();
    facts.into_iter().filter_map(|r| change(r, specimen, &mut own, w)).collect()
}

impl Own {
    /// A link makes a weighing the specimen's, or no longer.
    fn linked(&mut self, seq: Seq, link: &Link, specimen: &SpecimenId) -> bool {
        let ours = link.specimen.as_ref() == Some(specimen);
        let was = self.facts.contains(&seq);
        if ours {
            self.facts.insert(seq);
            self.containers.insert(link.container.clone());
        } else {
            self.containers.remove(&link.container);
        }
        ours || was
    }
}

fn change(r: &Recorded, specimen: &SpecimenId, own: &mut Own, w: &Words) -> Option<Change> {
    let base = |what: String| Change { seq: r.seq, at: r.at.rfc3339(), who: text(r.who.as_ref()), what, ..Default::default() };
    match &r.fact {
        Fact::SpecimenOpened(o) if o.specimen == *specimen => Some(base(w.did_opened.into())),
        Fact::Weighed(f) => {
            let link = f.link.as_ref()?;
            let what = format!("{} {}, {}", w.did_weighed, link.container, w.role(role_word(link.role)));
            own.linked(r.seq, link, specimen).then(|| Change { is: Some(format!("{} {}", f.mass_ug, w.gram)), ..base(what) })
        }
        Fact::WeighingTied { weighing, link, why, .. } => {
            let what = format!(
                "{} {}: {}, {}",
                w.did_tied,
                fill(w.fact_no, &[&weighing.to_string()]),
                link.container,
                w.role(role_word(link.role))
            );
            own.linked(*weighing, link, specimen).then(|| corrected(base(what), why))
        }
        Fact::Counted(f) if f.specimen.as_ref() == Some(specimen) => {
            own.facts.insert(r.seq);
            Some(Change { is: Some(format!("{} {}", f.drops, w.drops)), ..base(w.did_counted.into()) })
        }
        Fact::CountTied { count, specimen: to, why, .. } => {
            let was = own.facts.contains(count);
            let ours = to == specimen && (own.facts.insert(*count) || was);
            let what = format!("{} {}", w.did_tied, fill(w.fact_no, &[&count.to_string()]));
            (ours || was).then(|| corrected(base(what), why))
        }
        Fact::IntoOven { containers, .. } => oven(base, w.did_into_oven, containers, own),
        Fact::OutOfOven { containers } => oven(base, w.did_out_of_oven, containers, own),
        _ => said(r, specimen, own, w).map(|(what, was, is, why)| {
            let correction =
                !matches!(r.fact, Fact::LimitsComputed { .. } | Fact::Reviewed { .. } | Fact::CountSuperseded { .. });
            Change { was, is, why, correction, ..base(what) }
        }),
    }
}

fn corrected(change: Change, why: &str) -> Change {
    Change { why: Some(why.into()), correction: true, ..change }
}

fn oven(base: impl Fn(String) -> Change, did: &str, containers: &[ContainerId], own: &Own) -> Option<Change> {
    let ours: Vec<&str> = containers.iter().filter(|c| own.containers.contains(*c)).map(ContainerId::as_str).collect();
    (!ours.is_empty()).then(|| base(format!("{did} {}", ours.join(", "))))
}

/// What was said, what it was before, what it is, why.
type Said = (String, Option<String>, Option<String>, Option<String>);

/// What persons said of what is there, and what came of it.
fn said(r: &Recorded, specimen: &SpecimenId, own: &Own, w: &Words) -> Option<Said> {
    let no = |seq: &Seq| fill(w.fact_no, &[&seq.to_string()]);
    match &r.fact {
        Fact::SetAside { what, why, .. } if own.facts.contains(what) => {
            Some((format!("{} {}", w.did_set_aside, no(what)), None, None, Some(why.clone())))
        }
        Fact::CountSuperseded { count, why } if own.facts.contains(count) => {
            Some((format!("{}, {}", w.did_superseded, no(count)), None, None, Some(why.clone())))
        }
        Fact::TrialSetAside { specimen: of, trial, no, why } if of == specimen => {
            let name = match trial {
                Kind::Liquid | Kind::Cone => w.trial_liquid,
                Kind::Thread => w.trial_thread,
                Kind::Natural => w.trial_natural,
            };
            Some((format!("{} {}", w.did_set_aside, fill(name, &[&no.to_string()])), None, None, Some(why.clone())))
        }
        Fact::MassAmended { weighing, was, mass, why } if own.facts.contains(weighing) => {
            let grams = |m: &tarecup_core::quantity::Mass| Some(format!("{m} {}", w.gram));
            Some((format!("{}, {}", w.did_amended_mass, no(weighing)), grams(was), grams(mass), Some(why.clone())))
        }
        Fact::DropsAmended { count, was, drops, why } if own.facts.contains(count) => {
            let shown = |d: &u32| Some(format!("{d} {}", w.drops));
            Some((format!("{}, {}", w.did_amended_drops, no(count)), shown(was), shown(drops), Some(why.clone())))
        }
        Fact::NotObtainable { specimen: of, limit, because } if of == specimen => {
            let limit = if *limit == Limit::Liquid { w.liquid_limit } else { w.plastic_limit };
            Some((format!("{} {limit}", w.did_not_obtainable), None, None, Some(because.clone())))
        }
        Fact::LimitsComputed { specimen: of, revision, changed, .. } if of == specimen => {
            let is = (!changed.is_empty()).then(|| changed.join("; "));
            Some((fill(w.did_limits, &[&revision.to_string()]), None, is, None))
        }
        Fact::CheckAnswered { specimen: of, check, about, says } if of == specimen => {
            Some((format!("{} {about} ({check})", w.did_answered), None, None, Some(says.clone())))
        }
        Fact::Reviewed { specimen: of, revision } if of == specimen => {
            Some((fill(w.did_reviewed, &[&revision.to_string()]), None, None, None))
        }
        _ => None,
    }
}
