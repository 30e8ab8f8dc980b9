//! Facts that move or explain what is there change the state.

use super::{Lab, Touched, said};
use crate::fact::{Fact, Recorded, TrialRef};
use crate::lab::entities::{Count, Drift, Entity, Holding, Loose, LooseWhat, Moved, Said, TrialRecord, Weighing};
use crate::names::SpecimenId;
use crate::sheet::Seq;
use alloc::vec::Vec;

impl Lab {
    pub(super) fn apply_explained(&mut self, what: Seq, said: Said, touched: &mut Touched) {
        let Some(loose) = self.loose.get_mut(&what) else { return };
        let why = Some(loose.why.clone());
        loose.explained = Some(said);
        touched.insert(Entity::Loose(what));
        for bench in self.benches.values_mut() {
            let shows = bench.latest.as_ref().is_some_and(|l| l.seq == what) || bench.refusal == why;
            if shows && bench.refusal == why {
                bench.refusal = None;
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    /// What the balance showed later belongs to the weighing, wherever that is by now.
    pub(super) fn apply_seen(&mut self, r: &Recorded, touched: &mut Touched) {
        match r.fact {
            Fact::PanWatched { weighing, drift_ug_per_s, watched_ms, .. } => self.with_weighing(weighing, touched, |w| {
                w.seen.get_or_insert_default().stay = Some(Drift { drift_ug_per_s, watched_ms });
            }),
            Fact::LeftOnPan { weighing, left, .. } => self.with_weighing(weighing, touched, |w| {
                w.seen.get_or_insert_default().left = Some(left);
            }),
            _ => (),
        }
    }

    /// Changes a weighing everywhere it stands.
    fn with_weighing(&mut self, seq: Seq, touched: &mut Touched, change: impl Fn(&mut Weighing)) {
        let each = |w: &mut Weighing| {
            let mine = w.seq == seq;
            if mine {
                change(w);
            }
            mine
        };
        for specimen in self.specimens.values_mut() {
            for trial in &mut specimen.trials {
                let dries = trial.dries.iter_mut().map(|d| &mut d.weighing);
                let all = trial.tare.iter_mut().chain(&mut trial.wets).chain(&mut trial.repeats).chain(dries);
                if all.map(each).fold(false, |a, b| a | b) {
                    touched.insert(Entity::Specimen(specimen.id.clone()));
                }
            }
        }
        for container in self.containers.values_mut() {
            if container.tares.iter_mut().chain(&mut container.with_lid).map(each).fold(false, |a, b| a | b) {
                touched.insert(Entity::Container(container.id.clone()));
            }
        }
        if let Some(Loose { what: LooseWhat::Weighing { weighing, .. }, .. }) = self.loose.get_mut(&seq) {
            each(weighing);
            touched.insert(Entity::Loose(seq));
        }
    }

    pub(super) fn apply_moved(&mut self, r: &Recorded, touched: &mut Touched) {
        let Fact::TrialMoved { specimen: from, trial: kind, no, to, to_no, why } = &r.fact else { return };
        let (was, is) = (TrialRef { kind: *kind, no: *no }, TrialRef { kind: *kind, no: *to_no });
        if !self.specimens.contains_key(to) {
            return;
        }
        let Some((mut trial, counts)) = self.specimens.get_mut(from).and_then(|s| take_trial(s, was)) else { return };
        let container = trial.container.clone();
        let tare = trial.tare.as_ref().map(|t| t.seq);
        trial.no = is.no;
        trial.moved = Some(Moved { from: from.clone(), no: was.no, said: said(r, why) });
        if let Some(specimen) = self.specimens.get_mut(to) {
            for count in counts {
                let place = specimen.counts.partition_point(|c| c.seq < count.seq);
                specimen.counts.insert(place, count);
            }
            let first = trial.wets.first().map_or(0, |w| w.seq);
            let place = specimen.trials.partition_point(|t| t.wets.first().is_some_and(|w| w.seq < first));
            specimen.trials.insert(place, trial);
        }
        touched.insert(Entity::Specimen(from.clone()));
        touched.insert(Entity::Specimen(to.clone()));
        let still = tare.is_some_and(|t| self.uses_tare(from, t));
        self.with_container(&container, touched, |c| {
            let released = c.released.iter_mut().map(|r| &mut r.holding);
            for holding in c.holding.iter_mut().chain(released) {
                rename(holding, from, was, to, is);
            }
            if let Some(tare) = tare {
                if !still {
                    c.tare_uses.retain(|u| u.tare != tare || u.specimen != *from);
                }
                super::weighing::used(c, tare, to);
            }
        });
    }

    fn uses_tare(&self, specimen: &SpecimenId, tare: Seq) -> bool {
        let uses = |t: &TrialRecord| t.tare.as_ref().is_some_and(|w| w.seq == tare);
        self.specimens.get(specimen).is_some_and(|s| s.trials.iter().any(uses))
    }
}

/// A determination and its counts, taken out of their specimen.
fn take_trial(specimen: &mut crate::lab::entities::Specimen, which: TrialRef) -> Option<(TrialRecord, Vec<Count>)> {
    let at = specimen.trials.iter().position(|t| t.reference() == which)?;
    let trial = specimen.trials.remove(at);
    let (counts, kept) = core::mem::take(&mut specimen.counts).into_iter().partition(|c| trial.counts.contains(&c.seq));
    specimen.counts = kept;
    Some((trial, counts))
}

fn rename(holding: &mut Holding, from: &SpecimenId, was: TrialRef, to: &SpecimenId, is: TrialRef) {
    if holding.specimen == *from && holding.trial == was {
        (holding.specimen, holding.trial) = (to.clone(), is);
    }
    if let Some(before) = &mut holding.before {
        rename(before, from, was, to, is);
    }
}
