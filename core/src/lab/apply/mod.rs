//! Facts change the state. Nothing is decided here, and nothing but the fact
//! and the state is looked at: facts read back give the same state.

mod count;
mod moved;
mod weighing;

use super::Lab;
use super::entities::{CheckAnswer, Container, Entity, FailedRun, Hand, OvenClock, Said, Specimen, TrialRecord, Work};
use super::oven::work_hours;
use super::statistics::Statistics;
use crate::fact::{Fact, Limit, Recorded, SpecimenOpened, TrialRef};
use crate::limits::State;
use crate::names::{BenchName, ContainerId, Operator, SpecimenId};
use crate::stamp::Stamp;
use alloc::collections::BTreeSet;
use alloc::string::String;
use alloc::vec::Vec;

pub(super) use weighing::Untied;

type Touched = BTreeSet<Entity>;

impl Lab {
    /// Applies one recorded fact and names the entities it touched.
    pub fn apply(&mut self, r: &Recorded, touched: &mut Touched) {
        match &r.fact {
            Fact::SettingsTaken { .. }
            | Fact::ServiceStarted { .. }
            | Fact::ServiceStopped {}
            | Fact::LinesKept { .. }
            | Fact::SlipRepeated { .. } => (),
            Fact::InstrumentChanged { .. } | Fact::LinesOverrun { .. } | Fact::PanCleared { .. } => {
                self.apply_instrument(r, touched);
            }
            Fact::ClockStepped { .. } | Fact::ClockUntrusted { .. } | Fact::ClockTrusted { .. } => {
                self.clock.apply(&r.fact, r.at);
                touched.insert(Entity::Clock);
            }
            Fact::SpecimenOpened(opened) => self.apply_opened(opened, r, touched),
            Fact::SignedIn { bench, .. }
            | Fact::SignedOut { bench }
            | Fact::IntentionSet { bench, .. }
            | Fact::IntentionEnded { bench, .. }
            | Fact::TakenInHand { bench, .. }
            | Fact::HandEmptied { bench, .. }
            | Fact::Refused { bench, .. }
            | Fact::SliceOverdue { bench, .. } => self.apply_bench(bench, r, touched),
            Fact::Weighed(weighed) => self.apply_weighed(weighed, r, touched),
            Fact::WeighingTied { weighing, link, bench, .. } => self.apply_tied(*weighing, link, bench.as_ref(), r, touched),
            Fact::Counted(counted) => self.apply_counted(counted, r, touched),
            Fact::CountTied { count, bench, specimen, .. } => self.apply_count_tied(*count, bench, specimen, r, touched),
            Fact::PenetrationEntered { penetration_mm, bench, specimen } => {
                self.apply_penetration(*penetration_mm, bench, specimen, r, touched);
            }
            Fact::PenetrationAmended { penetration, penetration_mm, why, .. } => {
                self.apply_penetration_amended(*penetration, *penetration_mm, &said(r, why), touched);
            }
            Fact::CountSuperseded { count, why } => self.apply_superseded(*count, why, touched),
            Fact::SetAside { what, fault, why } => self.apply_set_aside(*what, *fault, said(r, why), touched),
            Fact::ClosureFailed { bench, .. } => self.apply_bench(bench, r, touched),
            Fact::PanWatched { .. } | Fact::LeftOnPan { .. } => self.apply_seen(r, touched),
            Fact::BalanceCheckBegun { .. } | Fact::BalanceChecked(_) | Fact::CupChecked(_) => self.apply_checked(r, touched),
            Fact::Explained { what, says } => self.apply_explained(*what, said(r, says), touched),
            Fact::TrialMoved { .. } => self.apply_moved(r, touched),
            Fact::TrialSetAside { specimen, trial, no, why } => {
                self.with_trial(specimen, TrialRef { kind: *trial, no: *no }, touched, |t| t.set_aside = Some(said(r, why)));
            }
            Fact::MassAmended { weighing, mass, why, .. } => self.apply_mass_amended(*weighing, *mass, &said(r, why), touched),
            Fact::DropsAmended { count, drops, why, .. } => self.apply_drops_amended(*count, *drops, &said(r, why), touched),
            Fact::ContainerRegistered { container, lid } => {
                self.with_container(container, touched, |c| c.lid = *lid);
            }
            Fact::ContainerFreed { container, .. } => self.with_container(container, touched, |c| c.holding = None),
            Fact::IntoOven { .. } | Fact::OutOfOven { .. } | Fact::OvenOff { .. } => self.apply_oven(r, touched),
            Fact::NotObtainable { .. } | Fact::CheckAnswered { .. } | Fact::Reviewed { .. } | Fact::LimitsComputed { .. } => {
                self.apply_result(r, touched);
            }
        }
    }

    fn apply_instrument(&mut self, r: &Recorded, touched: &mut Touched) {
        let name = match &r.fact {
            Fact::InstrumentChanged { instrument, .. } | Fact::LinesOverrun { instrument, .. } => instrument,
            Fact::PanCleared { balance } => balance,
            _ => return,
        };
        let Some(state) = self.instruments.get_mut(name) else { return };
        match &r.fact {
            Fact::InstrumentChanged { state: new, detail, .. } => {
                (state.state, state.detail, state.since) = (*new, detail.clone(), Some(r.at));
            }
            Fact::LinesOverrun { lines, .. } => state.overrun_lines = state.overrun_lines.saturating_add(*lines),
            Fact::PanCleared { .. } => state.pan = None,
            _ => (),
        }
        touched.insert(Entity::Instrument(name.clone()));
    }

    fn apply_opened(&mut self, opened: &SpecimenOpened, r: &Recorded, touched: &mut Touched) {
        let o = opened.clone();
        let specimen = Specimen {
            id: o.specimen.clone(),
            method: o.method,
            edition: o.edition,
            description: o.description,
            preparation: o.preparation,
            passing_75um_percent: o.passing_75um_percent,
            clay_percent: o.clay_percent,
            liquid_limit_oven_dried: o.liquid_limit_oven_dried,
            opened: r.at,
            counts: Vec::new(),
            trials: Vec::new(),
            liquid_not_obtainable: None,
            plastic_not_obtainable: None,
            answers: Vec::new(),
            revision: 0,
            reviewed: None,
            limits: None,
            wanted: o.wanted,
        };
        self.specimens.insert(o.specimen.clone(), specimen);
        touched.insert(Entity::Specimen(o.specimen));
    }

    fn apply_bench(&mut self, bench: &BenchName, r: &Recorded, touched: &mut Touched) {
        let Some(state) = self.benches.get_mut(bench) else { return };
        match &r.fact {
            Fact::SignedIn { operator, .. } => state.signed_in = Some(operator.clone()),
            Fact::SignedOut { .. } => state.signed_in = None,
            Fact::IntentionSet { specimen, intention, .. } => {
                state.intention = Some(Work { specimen: specimen.clone(), intention: *intention });
            }
            Fact::IntentionEnded { .. } => state.intention = None,
            Fact::TakenInHand { container, or_at, instead_of, .. } => {
                let (or_at, instead_of) = (or_at.clone(), instead_of.clone());
                state.hand = Some(Hand { container: container.clone(), since: r.at, weighing: None, or_at, instead_of });
                state.code = Some(r.seq);
            }
            Fact::HandEmptied { .. } => state.hand = None,
            Fact::ClosureFailed { fault, running, why, .. } => {
                let failed = FailedRun { fault: *fault, said: said(r, why), at: r.at };
                state.failed = running.then_some(failed);
            }
            Fact::Refused { says, .. } => state.refusal = Some(says.clone()),
            Fact::SliceOverdue { .. } => {
                if let Some(owed) = &mut state.owed {
                    owed.said = true;
                }
            }
            _ => (),
        }
        // A pan that is emptied says nothing about what was refused.
        if !matches!(r.fact, Fact::Refused { .. } | Fact::SliceOverdue { .. } | Fact::HandEmptied { .. }) {
            state.refusal = None;
        }
        if !matches!(r.fact, Fact::SliceOverdue { .. }) {
            state.active = r.at;
        }
        touched.insert(Entity::Bench(bench.clone()));
    }

    fn apply_oven(&mut self, r: &Recorded, touched: &mut Touched) {
        match &r.fact {
            Fact::IntoOven { containers, celsius } => {
                for id in containers {
                    self.with_oven(id, touched, |oven, last_dry| {
                        oven.put_in(r.at, last_dry);
                        oven.celsius = *celsius;
                    });
                }
            }
            Fact::OutOfOven { containers } => {
                for id in containers {
                    self.with_oven(id, touched, |oven, _| oven.take_out(r.at));
                }
            }
            Fact::OvenOff { from_utc_us, to_utc_us, .. } => {
                for id in self.wet_before(*to_utc_us) {
                    self.with_oven(&id, touched, |oven, _| oven.was_off(*from_utc_us, *to_utc_us));
                }
            }
            _ => (),
        }
    }

    /// Containers whose soil had been weighed wet before the oven was on again.
    pub(super) fn wet_before(&self, to_utc_us: i64) -> Vec<ContainerId> {
        let drying = |c: &&Container| c.holding.as_ref().is_some_and(|h| h.oven.wet_at.utc_us < to_utc_us);
        self.containers.values().filter(drying).map(|c| c.id.clone()).collect()
    }

    fn apply_result(&mut self, r: &Recorded, touched: &mut Touched) {
        let id = match &r.fact {
            Fact::NotObtainable { specimen, .. }
            | Fact::CheckAnswered { specimen, .. }
            | Fact::Reviewed { specimen, .. }
            | Fact::LimitsComputed { specimen, .. } => specimen,
            _ => return,
        };
        let Some(state) = self.specimens.get_mut(id) else { return };
        touched.insert(Entity::Specimen(id.clone()));
        match &r.fact {
            Fact::NotObtainable { limit, because, .. } => match limit {
                Limit::Liquid => state.liquid_not_obtainable = Some(said(r, because)),
                Limit::Plastic => state.plastic_not_obtainable = Some(said(r, because)),
            },
            Fact::CheckAnswered { check, about, says, .. } => {
                // The latest answer counts; the ledger has them all.
                state.answers.retain(|a| a.check != *check || a.about != *about);
                let (check, about, says) = (check.clone(), about.clone(), says.clone());
                state.answers.push(CheckAnswer { check, about, says, by: r.who.clone() });
            }
            Fact::Reviewed { revision, .. } => state.reviewed = Some((*revision, r.who.clone())),
            Fact::LimitsComputed { revision, limits, .. } => {
                state.revision = *revision;
                if limits.state == State::Reviewed
                    && let Some((of, _)) = &mut state.reviewed
                {
                    *of = *revision;
                }
                let was = state.limits.as_ref().map_or(Statistics::default(), Statistics::of);
                let sums = self.statistics.minus(was).plus(Statistics::of(limits));
                state.limits = Some((**limits).clone());
                if sums != self.statistics {
                    self.statistics = sums;
                    touched.insert(Entity::Statistics);
                }
            }
            _ => (),
        }
    }

    /// Changes the oven's record of what a container holds, and works its dry weighings anew.
    fn with_oven(&mut self, id: &ContainerId, touched: &mut Touched, change: impl FnOnce(&mut OvenClock, Option<Stamp>)) {
        let Some(holding) = self.containers.get_mut(id).and_then(|c| c.holding.as_mut()) else { return };
        let trial = self.specimens.get_mut(&holding.specimen).and_then(|s| s.trial_mut(holding.trial));
        let last_dry = trial.as_ref().and_then(|t| t.dries.last()).map(|d| d.weighing.at);
        change(&mut holding.oven, last_dry);
        if let Some(trial) = trial.filter(|t| !t.dries.is_empty()) {
            work_hours(&mut trial.dries, &holding.oven, &self.clock);
            touched.insert(Entity::Specimen(holding.specimen.clone()));
        }
        self.with_container(id, touched, |_| ());
    }

    fn with_container(&mut self, id: &ContainerId, touched: &mut Touched, change: impl FnOnce(&mut Container)) {
        change(self.containers.entry(id.clone()).or_insert_with(|| Container::new(id.clone())));
        self.restate(id);
        touched.insert(Entity::Container(id.clone()));
    }

    fn restate(&mut self, id: &ContainerId) {
        let standing = self.containers.get(id).map(|c| self.standing(c));
        if let (Some(container), Some(standing)) = (self.containers.get_mut(id), standing) {
            container.standing = standing;
        }
    }

    fn with_trial(&mut self, id: &SpecimenId, which: TrialRef, touched: &mut Touched, change: impl FnOnce(&mut TrialRecord)) {
        let Some(specimen) = self.specimens.get_mut(id) else { return };
        let Some(trial) = specimen.trial_mut(which) else { return };
        change(trial);
        let container = trial.container.clone();
        touched.insert(Entity::Specimen(id.clone()));
        self.with_container(&container, touched, |_| ());
    }
}

fn said(r: &Recorded, why: &str) -> Said {
    let by: Option<Operator> = r.who.clone();
    Said { by, why: String::from(why), seq: r.seq }
}
