//! Facts change the state. Nothing is decided here.

use super::entities::{
    Bench, CheckAnswer, Container, Count, DryRecord, Entity, Hand, Holding, Latest, Loose, LooseWhat, OvenClock, Owed, Said,
    Specimen, TrialRecord, Weighing, Work,
};
use super::role::Role;
use super::{Lab, Pan};
use crate::fact::{Counted, Fact, Limit, Link, Recorded, SpecimenOpened, TrialRef, Weighed};
use crate::limits::State;
use crate::names::{BenchName, ContainerId, Operator, SpecimenId};
use crate::quantity::Mass;
use crate::sheet::Seq;
use crate::signal::Basis;
use alloc::collections::BTreeSet;
use alloc::string::String;
use alloc::vec::Vec;

/// Empty weighings kept with a container; older ones stay in the ledger.
const TARES_KEPT: usize = 20;

type Touched = BTreeSet<Entity>;

impl Lab {
    /// Applies one recorded fact and names the entities it touched.
    pub fn apply(&mut self, r: &Recorded, touched: &mut Touched) {
        match &r.fact {
            Fact::SettingsTaken { .. } | Fact::ServiceStarted { .. } | Fact::ServiceStopped {} | Fact::SlipRepeated { .. } => (),
            Fact::InstrumentChanged { .. } | Fact::LinesOverrun { .. } => self.apply_instrument(r, touched),
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
            Fact::WeighingTied { weighing, link, .. } => self.apply_tied(*weighing, link, r, touched),
            Fact::Counted(counted) => self.apply_counted(counted, r, touched),
            Fact::CountTied { count, bench, specimen, .. } => self.apply_count_tied(*count, bench, specimen, touched),
            Fact::CountSuperseded { count, why } => self.apply_superseded(*count, why, touched),
            Fact::SetAside { what, why } => self.apply_set_aside(*what, said(r, why), touched),
            Fact::TrialSetAside { specimen, trial, no, why } => {
                self.with_trial(specimen, TrialRef { kind: *trial, no: *no }, touched, |t| t.set_aside = Some(said(r, why)));
            }
            Fact::MassAmended { weighing, mass, .. } => self.apply_mass_amended(*weighing, *mass, touched),
            Fact::DropsAmended { count, drops, .. } => self.apply_drops_amended(*count, *drops, touched),
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
            _ => return,
        };
        let Some(state) = self.instruments.get_mut(name) else { return };
        match &r.fact {
            Fact::InstrumentChanged { state: new, detail, .. } => {
                (state.state, state.detail, state.since) = (*new, detail.clone(), Some(r.at));
            }
            Fact::LinesOverrun { lines, .. } => state.overrun_lines += lines,
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
            opened: r.at,
            counts: Vec::new(),
            trials: Vec::new(),
            liquid_not_obtainable: None,
            plastic_not_obtainable: None,
            answers: Vec::new(),
            revision: 0,
            reviewed: None,
            limits: None,
        };
        self.specimens.insert(o.specimen.clone(), specimen);
        touched.insert(Entity::Specimen(o.specimen));
    }

    fn apply_bench(&mut self, bench: &BenchName, r: &Recorded, touched: &mut Touched) {
        let shared = self.setup.instruments.values().any(|b| b.len() > 1 && b.contains(bench));
        let Some(state) = self.benches.get_mut(bench) else { return };
        let mut code = false;
        match &r.fact {
            Fact::SignedIn { operator, .. } => state.signed_in = Some(operator.clone()),
            Fact::SignedOut { .. } => state.signed_in = None,
            Fact::IntentionSet { specimen, intention, .. } => {
                state.intention = Some(Work { specimen: specimen.clone(), intention: *intention });
            }
            Fact::IntentionEnded { .. } => state.intention = None,
            Fact::TakenInHand { container, .. } => {
                state.hand = Some(Hand { container: container.clone(), since: r.at, weighing: None, shared });
                code = true;
            }
            Fact::HandEmptied { .. } => state.hand = None,
            Fact::Refused { says, .. } => state.refusal = Some(says.clone()),
            Fact::SliceOverdue { .. } => {
                if let Some(owed) = &mut state.owed {
                    owed.said = true;
                }
            }
            _ => (),
        }
        if !matches!(r.fact, Fact::Refused { .. } | Fact::SliceOverdue { .. }) {
            state.refusal = None;
            state.active = r.at;
        }
        touched.insert(Entity::Bench(bench.clone()));
        if code {
            self.code_seen(bench);
        }
    }

    fn code_seen(&mut self, bench: &BenchName) {
        for (balance, pan) in &mut self.pans {
            if self.setup.instruments.get(balance).is_some_and(|b| b.contains(bench)) {
                pan.code_since = true;
            }
        }
    }

    fn apply_weighed(&mut self, weighed: &Weighed, r: &Recorded, touched: &mut Touched) {
        let basis = weighed.taken.map_or(Basis::Gross, |t| t.basis);
        let mass = weighed.link.as_ref().map_or(weighed.mass_ug, |l| l.gross);
        let at = weighed.taken.map_or(r.at, |t| t.at);
        let typed = weighed.taken.is_none();
        let weighing = Weighing { seq: r.seq, mass, balance: weighed.balance.clone(), at, by: r.who.clone(), typed };
        if let (Some(balance), Some(taken)) = (&weighed.balance, &weighed.taken) {
            let loose = weighed.link.is_none();
            let pan = Pan { seq: r.seq, printed: taken.printed, mass: taken.mass, at, code_since: false, loose };
            self.pans.insert(balance.clone(), pan);
        }
        match &weighed.link {
            Some(link) => self.apply_link(&weighing, link, touched),
            None => {
                let why = weighed.loose.clone().unwrap_or_default();
                let what = LooseWhat::Weighing { weighing, basis };
                self.loose.insert(r.seq, Loose { seq: r.seq, bench: weighed.bench.clone(), what, why, at });
                touched.insert(Entity::Loose(r.seq));
            }
        }
        let latest = Latest {
            seq: r.seq,
            mass,
            container: weighed.link.as_ref().map(|l| l.container.clone()),
            role: weighed.link.as_ref().map(|l| l.role),
            loose: weighed.loose.clone(),
            at,
        };
        self.latest_at(weighed.bench.as_ref(), latest, touched);
    }

    fn latest_at(&mut self, bench: Option<&BenchName>, latest: Latest, touched: &mut Touched) {
        let Some(state) = bench.and_then(|b| self.benches.get_mut(b)) else { return };
        if let Some(hand) = state.hand.as_mut().filter(|h| latest.container.as_ref() == Some(&h.container)) {
            hand.weighing = Some(latest.seq);
        }
        state.active = latest.at;
        state.refusal = latest.loose.clone();
        state.latest = Some(latest);
        touched.insert(Entity::Bench(state.name.clone()));
    }

    fn apply_tied(&mut self, seq: Seq, link: &Link, r: &Recorded, touched: &mut Touched) {
        let (bench, weighing) = match self.loose.remove(&seq) {
            Some(Loose { bench, what: LooseWhat::Weighing { weighing, .. }, .. }) => (bench, Some(weighing)),
            _ => (None, self.untie(seq, touched)),
        };
        touched.insert(Entity::Loose(seq));
        let Some(mut weighing) = weighing else { return };
        weighing.mass = link.gross;
        weighing.by = weighing.by.or_else(|| r.who.clone());
        self.apply_link(&weighing, link, touched);
        for pan in self.pans.values_mut().filter(|p| p.seq == seq) {
            pan.loose = false;
        }
        let mine = |b: &&Bench| b.latest.as_ref().is_some_and(|l| l.seq == seq);
        let of_latest = self.benches.values().find(mine).map(|b| b.name.clone());
        let latest = Latest {
            seq,
            mass: link.gross,
            container: Some(link.container.clone()),
            role: Some(link.role),
            loose: None,
            at: weighing.at,
        };
        self.latest_at(of_latest.or(bench).as_ref(), latest, touched);
    }

    /// What a weighing is of, put where it belongs.
    fn apply_link(&mut self, weighing: &Weighing, link: &Link, touched: &mut Touched) {
        match (link.role, &link.specimen, link.trial) {
            (Role::Wet, Some(specimen), Some(trial)) => self.begin_trial(weighing, link, specimen, trial, touched),
            (Role::Grown, Some(specimen), Some(trial)) => {
                self.with_trial(specimen, trial, touched, |t| t.wets.push(weighing.clone()));
                self.with_container(&link.container, touched, |_| ());
            }
            (Role::Dry | Role::FurtherDry, Some(specimen), Some(trial)) => {
                let mut record: Option<DryRecord> = None;
                self.with_container(&link.container, touched, |c| {
                    record = c.holding.as_mut().map(|h| h.oven.weighed(weighing.clone()));
                });
                if let Some(record) = record {
                    self.with_trial(specimen, trial, touched, |t| t.dries.push(record));
                }
                self.with_container(&link.container, touched, |_| ());
            }
            (Role::Tare | Role::TareCheck | Role::Emptied, specimen, trial) => {
                if let (Some(specimen), Some(trial)) = (specimen, trial) {
                    self.with_trial(specimen, trial, touched, |t| {
                        t.tare.get_or_insert_with(|| weighing.clone());
                    });
                }
                self.new_tare(weighing, link, touched);
            }
            _ => self.with_container(&link.container, touched, |_| ()),
        }
    }

    /// The container was weighed empty: this is its tare from here on.
    fn new_tare(&mut self, weighing: &Weighing, link: &Link, touched: &mut Touched) {
        let holds = self.containers.get(&link.container).and_then(|c| c.holding.as_ref());
        let still_wet = holds.and_then(|h| self.held_trial(h)).is_some_and(|t| t.dries.is_empty() && t.set_aside.is_none());
        self.with_container(&link.container, touched, |c| {
            c.tares.push(weighing.clone());
            if c.tares.len() > TARES_KEPT {
                c.tares.remove(0);
            }
            if !still_wet {
                c.holding = None;
            }
        });
    }

    fn begin_trial(&mut self, weighing: &Weighing, link: &Link, specimen: &SpecimenId, trial: TrialRef, touched: &mut Touched) {
        let tare = self.containers.get(&link.container).and_then(|c| c.tare().cloned());
        let record = TrialRecord {
            kind: trial.kind,
            no: trial.no,
            container: link.container.clone(),
            counts: link.counts.clone(),
            tare,
            wets: alloc::vec![weighing.clone()],
            dries: Vec::new(),
            set_aside: None,
        };
        if let Some(state) = self.specimens.get_mut(specimen) {
            state.trials.push(record);
            touched.insert(Entity::Specimen(specimen.clone()));
        }
        let oven = OvenClock::new(weighing.at);
        self.with_container(&link.container, touched, |c| {
            c.holding = Some(Holding { specimen: specimen.clone(), trial, oven });
        });
        for bench in self.benches.values_mut() {
            if !link.counts.is_empty() && bench.owed.as_ref().is_some_and(|o| o.counts == link.counts) {
                bench.owed = None;
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    /// Takes a weighing out of wherever it is in force.
    pub(super) fn untie(&mut self, seq: Seq, touched: &mut Touched) -> Option<Weighing> {
        let mut found = None;
        let mut containers: Vec<ContainerId> = Vec::new();
        for specimen in self.specimens.values_mut() {
            for trial in &mut specimen.trials {
                let here = take_from_trial(trial, seq);
                if here.is_some() {
                    touched.insert(Entity::Specimen(specimen.id.clone()));
                    containers.push(trial.container.clone());
                    found = found.or(here);
                }
            }
            // A determination without a wet weighing never began.
            specimen.trials.retain(|t| !t.wets.is_empty());
        }
        for container in self.containers.values_mut() {
            if let Some(n) = container.tares.iter().position(|w| w.seq == seq) {
                found = found.or(Some(container.tares.remove(n)));
                containers.push(container.id.clone());
            }
        }
        for id in containers {
            let holding = self.containers.get(&id).and_then(|c| c.holding.as_ref());
            let gone = holding.is_some_and(|h| self.specimens.contains_key(&h.specimen) && self.held_trial(h).is_none());
            self.with_container(&id, touched, |c| {
                if gone {
                    c.holding = None;
                }
            });
            self.tare_before(&id);
        }
        found
    }

    /// A determination whose tare was taken out falls back on the empty weighing before it.
    fn tare_before(&mut self, id: &ContainerId) {
        let Some(container) = self.containers.get(id) else { return };
        for trial in self.specimens.values_mut().flat_map(|s| &mut s.trials).filter(|t| t.container == *id && t.tare.is_none()) {
            let wet = trial.wets.first().map_or(0, |w| w.seq);
            trial.tare = container.tares.iter().rev().find(|t| t.seq < wet).cloned();
        }
    }

    fn apply_counted(&mut self, counted: &Counted, r: &Recorded, touched: &mut Touched) {
        let run = counted.run.as_ref();
        let count = Count {
            seq: r.seq,
            drops: counted.drops,
            rate_per_s: run.and_then(|r| r.rate_per_s),
            gaps: run.map_or(0, |r| r.gaps),
            doubles: run.map_or(0, |r| r.doubles),
            interrupted: run.and_then(|r| r.interrupted.clone()),
            cup: counted.cup.clone(),
            at: run.map_or(r.at, |r| r.at),
            typed: run.is_none(),
            superseded: None,
            set_aside: None,
        };
        match (&counted.specimen, &counted.bench) {
            (Some(specimen), Some(bench)) => self.count_belongs(count, specimen, bench, touched),
            _ => {
                let why = counted.loose.clone().unwrap_or_default();
                let at = count.at;
                self.loose.insert(
                    r.seq,
                    Loose { seq: r.seq, bench: counted.bench.clone(), what: LooseWhat::Count(count), why: why.clone(), at },
                );
                touched.insert(Entity::Loose(r.seq));
                if let Some(state) = counted.bench.as_ref().and_then(|b| self.benches.get_mut(b)) {
                    state.refusal = Some(why);
                    touched.insert(Entity::Bench(state.name.clone()));
                }
            }
        }
    }

    fn count_belongs(&mut self, count: Count, specimen: &SpecimenId, bench: &BenchName, touched: &mut Touched) {
        let (seq, drops, ended) = (count.seq, count.drops, count.at);
        if let Some(state) = self.specimens.get_mut(specimen) {
            state.counts.push(count);
            touched.insert(Entity::Specimen(specimen.clone()));
        }
        if let Some(state) = self.benches.get_mut(bench) {
            let before = state.owed.take().filter(|o| o.specimen == *specimen).map_or(Vec::new(), |o| o.counts);
            let counts = before.into_iter().chain([seq]).collect();
            state.owed = Some(Owed { specimen: specimen.clone(), counts, drops, ended, said: false });
            (state.active, state.refusal) = (ended, None);
            touched.insert(Entity::Bench(bench.clone()));
        }
    }

    fn apply_count_tied(&mut self, seq: Seq, bench: &BenchName, specimen: &SpecimenId, touched: &mut Touched) {
        touched.insert(Entity::Loose(seq));
        if let Some(Loose { what: LooseWhat::Count(count), .. }) = self.loose.remove(&seq) {
            self.count_belongs(count, specimen, bench, touched);
        }
    }

    fn apply_superseded(&mut self, seq: Seq, why: &str, touched: &mut Touched) {
        self.with_count(seq, touched, |c| c.superseded = Some(String::from(why)));
        self.no_longer_owed(seq, touched);
    }

    fn no_longer_owed(&mut self, seq: Seq, touched: &mut Touched) {
        for bench in self.benches.values_mut() {
            let Some(owed) = bench.owed.as_mut().filter(|o| o.counts.contains(&seq)) else { continue };
            owed.counts.retain(|&c| c != seq);
            if owed.counts.is_empty() {
                bench.owed = None;
            }
            touched.insert(Entity::Bench(bench.name.clone()));
        }
    }

    fn apply_set_aside(&mut self, what: Seq, said: Said, touched: &mut Touched) {
        if self.loose.remove(&what).is_some() {
            touched.insert(Entity::Loose(what));
        }
        let mut was_count = false;
        self.with_count(what, touched, |c| {
            c.set_aside = Some(said);
            was_count = true;
        });
        if was_count {
            self.no_longer_owed(what, touched);
        } else if let Some(counts) = self.counts_of_slice(what) {
            self.untie(what, touched);
            self.owe_again(&counts, touched);
        } else {
            self.untie(what, touched);
        }
        for bench in self.benches.values_mut() {
            if bench.latest.as_ref().is_some_and(|l| l.seq == what) {
                bench.latest = None;
                touched.insert(Entity::Bench(bench.name.clone()));
            }
            if let Some(hand) = bench.hand.as_mut().filter(|h| h.weighing == Some(what)) {
                hand.weighing = None;
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    /// Counts of the liquid trial that this weighing began.
    fn counts_of_slice(&self, weighing: Seq) -> Option<Vec<Seq>> {
        let mut trials = self.specimens.values().flat_map(|s| &s.trials);
        let trial = trials.find(|t| t.wets.len() == 1 && t.wets[0].seq == weighing && !t.counts.is_empty())?;
        Some(trial.counts.clone())
    }

    /// A slice's weighing was taken back: the slice is owed again, at the bench where that bench is free for it.
    fn owe_again(&mut self, counts: &[Seq], touched: &mut Touched) {
        let Some((specimen, last)) =
            self.specimens.values().find_map(|s| counts.last().and_then(|&c| s.count(c)).map(|c| (s.id.clone(), c.clone())))
        else {
            return;
        };
        let at_work = |b: &&mut Bench| b.owed.is_none() && b.intention.as_ref().is_some_and(|w| w.specimen == specimen);
        if let Some(bench) = self.benches.values_mut().find(at_work) {
            bench.owed = Some(Owed { specimen, counts: counts.to_vec(), drops: last.drops, ended: last.at, said: false });
            touched.insert(Entity::Bench(bench.name.clone()));
        }
    }

    fn apply_mass_amended(&mut self, seq: Seq, mass: Mass, touched: &mut Touched) {
        let amend = |w: &mut Weighing| {
            let mine = w.seq == seq;
            if mine {
                (w.mass, w.typed) = (mass, true);
            }
            mine
        };
        for specimen in self.specimens.values_mut() {
            let mut hit = false;
            for trial in &mut specimen.trials {
                let dries = trial.dries.iter_mut().map(|d| &mut d.weighing);
                hit |= trial.tare.iter_mut().chain(&mut trial.wets).chain(dries).map(amend).fold(false, |a, b| a | b);
            }
            if hit {
                touched.insert(Entity::Specimen(specimen.id.clone()));
            }
        }
        for container in self.containers.values_mut() {
            if container.tares.iter_mut().map(amend).fold(false, |a, b| a | b) {
                touched.insert(Entity::Container(container.id.clone()));
            }
        }
        if let Some(Loose { what: LooseWhat::Weighing { weighing, .. }, .. }) = self.loose.get_mut(&seq) {
            amend(weighing);
            touched.insert(Entity::Loose(seq));
        }
    }

    fn apply_drops_amended(&mut self, seq: Seq, drops: u32, touched: &mut Touched) {
        self.with_count(seq, touched, |c| (c.drops, c.typed, c.interrupted) = (drops, true, None));
        if let Some(Loose { what: LooseWhat::Count(count), .. }) = self.loose.get_mut(&seq) {
            (count.drops, count.typed) = (drops, true);
            touched.insert(Entity::Loose(seq));
        }
        for bench in self.benches.values_mut() {
            if let Some(owed) = bench.owed.as_mut().filter(|o| o.counts.last() == Some(&seq)) {
                owed.drops = drops;
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    fn apply_oven(&mut self, r: &Recorded, touched: &mut Touched) {
        match &r.fact {
            Fact::IntoOven { containers, .. } => {
                for id in containers {
                    self.with_oven(id, touched, |oven| oven.put_in(r.at));
                }
            }
            Fact::OutOfOven { containers } => {
                for id in containers {
                    self.with_oven(id, touched, |oven| oven.take_out(&r.at));
                }
            }
            Fact::OvenOff { from_utc_us, to_utc_us, .. } => {
                let drying: Vec<ContainerId> =
                    self.containers.values().filter(|c| c.holding.is_some()).map(|c| c.id.clone()).collect();
                for id in drying {
                    self.with_oven(&id, touched, |oven| oven.off(*from_utc_us, *to_utc_us, &r.at));
                }
            }
            _ => (),
        }
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
                state.answers.push(CheckAnswer {
                    check: check.clone(),
                    about: about.clone(),
                    says: says.clone(),
                    by: r.who.clone(),
                });
            }
            Fact::Reviewed { revision, .. } => state.reviewed = Some((*revision, r.who.clone())),
            Fact::LimitsComputed { revision, limits, .. } => {
                state.revision = *revision;
                if limits.state == State::Reviewed
                    && let Some((of, _)) = &mut state.reviewed
                {
                    *of = *revision;
                }
                state.limits = Some((**limits).clone());
            }
            _ => (),
        }
    }

    fn with_oven(&mut self, id: &ContainerId, touched: &mut Touched, change: impl FnOnce(&mut OvenClock)) {
        self.with_container(id, touched, |c| {
            if let Some(holding) = &mut c.holding {
                change(&mut holding.oven);
            }
        });
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

    fn with_count(&mut self, seq: Seq, touched: &mut Touched, change: impl FnOnce(&mut Count)) {
        for specimen in self.specimens.values_mut() {
            if let Some(count) = specimen.counts.iter_mut().find(|c| c.seq == seq) {
                touched.insert(Entity::Specimen(specimen.id.clone()));
                return change(count);
            }
        }
    }
}

fn said(r: &Recorded, why: &str) -> Said {
    let by: Option<Operator> = r.who.clone();
    Said { by, why: String::from(why), seq: r.seq }
}

fn take_from_trial(trial: &mut TrialRecord, seq: Seq) -> Option<Weighing> {
    if trial.tare.as_ref().is_some_and(|w| w.seq == seq) {
        return trial.tare.take();
    }
    if let Some(n) = trial.wets.iter().position(|w| w.seq == seq) {
        return Some(trial.wets.remove(n));
    }
    let n = trial.dries.iter().position(|d| d.weighing.seq == seq)?;
    Some(trial.dries.remove(n).weighing)
}
