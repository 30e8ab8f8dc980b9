//! Facts about weighings change the state.

use super::{Lab, Touched};
use crate::fact::{ClosureFault, Link, Recorded, TrialRef, Weighed};
use crate::lab::entities::{
    Bench, Container, DryRecord, Entity, Holding, Latest, Loose, LooseWhat, OvenClock, Pan, Released, Said, Seen, TareUse,
    TrialRecord, Weighing,
};
use crate::lab::oven::work_hours;
use crate::lab::role::Role;
use crate::names::{BenchName, ContainerId, SpecimenId};
use crate::quantity::Mass;
use crate::sheet::Seq;
use crate::signal::Basis;
use crate::stamp::Basis as Clock;
use alloc::boxed::Box;
use alloc::vec;
use alloc::vec::Vec;

/// Empty weighings, and repeated wet ones, kept at hand; older ones stay in the ledger.
const KEPT: usize = 20;

/// A weighing taken out of where it was in force.
#[derive(Clone, Debug)]
pub(in crate::lab) struct Untied {
    /// The weighing.
    pub weighing: Weighing,
    /// The container it was tied to.
    pub container: ContainerId,
    /// The determination it alone had begun.
    pub began: Option<Began>,
}

/// A determination that is no more.
#[derive(Clone, Debug)]
pub(in crate::lab) struct Began {
    pub specimen: SpecimenId,
    pub trial: TrialRef,
    pub counts: Vec<Seq>,
}

/// Where in a determination a weighing was.
enum Place {
    Tare,
    Wet,
    Repeat,
    Dry,
}

impl Lab {
    pub(super) fn apply_weighed(&mut self, weighed: &Weighed, r: &Recorded, touched: &mut Touched) {
        let basis = weighed.taken.map_or(Basis::Gross, |t| t.basis);
        let mass = weighed.link.as_ref().map_or(weighed.mass_ug, |l| l.gross);
        let at = weighed.taken.map_or(r.at, |t| t.at);
        let (typed, by) = (weighed.taken.is_none(), r.who.clone());
        let step = weighed.taken.map(|t| t.step);
        let seen = weighed.taken.map(|t| Seen { zero: t.zero.map(|z| z.mass), trace: t.trace, ..Seen::default() });
        let seen = seen.filter(|s| *s != Seen::default());
        let checked = weighed.balance.as_ref().and_then(|b| self.instruments.get(b)).and_then(|i| i.checked_at(&at));
        let balance = weighed.balance.clone();
        let weighing = Weighing { seq: r.seq, mass, balance, at, by, typed, step, corrected: None, seen, checked };
        self.lies_on_pan(weighed, r.seq, touched);
        match &weighed.link {
            Some(link) => self.apply_link(&weighing, link, touched),
            None => {
                let why = weighed.loose.clone().unwrap_or_default();
                let what = LooseWhat::Weighing { weighing, basis };
                let inputs = weighed.taken.map(|t| [t.first_input, t.input]);
                let (seq, bench) = (r.seq, weighed.bench.clone());
                self.loose.insert(seq, Loose { seq, bench, what, why, at, inputs, explained: None });
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
        self.mark_hands(weighed, &latest, touched);
        for bench in weighed.bench.iter().chain(&weighed.or_at) {
            let Some(state) = self.benches.get_mut(bench) else { continue };
            (state.active, state.refusal, state.latest) = (r.at, latest.loose.clone(), Some(latest.clone()));
            touched.insert(Entity::Bench(bench.clone()));
        }
    }

    /// Remembers a mass that a code or a second slip may still refer to.
    fn lies_on_pan(&mut self, weighed: &Weighed, seq: Seq, touched: &mut Touched) {
        let (Some(balance), Some(taken)) = (&weighed.balance, &weighed.taken) else { return };
        let Some(instrument) = self.instruments.get_mut(balance) else { return };
        let loose = weighed.link.is_none();
        let pan = Pan { seq, printed: taken.printed, mass: taken.mass, at: taken.at, loose, tied: None };
        let pan = (pan.printed || loose).then_some(pan);
        if instrument.pan != pan {
            instrument.pan = pan;
            touched.insert(Entity::Instrument(balance.clone()));
        }
    }

    /// The container in hand has got its mass; a loose mass uses the hand up as well.
    fn mark_hands(&mut self, weighed: &Weighed, latest: &Latest, touched: &mut Touched) {
        let Some(bench) = &weighed.bench else { return };
        for state in self.benches.values_mut() {
            let Some(hand) = state.hand.as_mut() else { continue };
            let here = state.name == *bench || hand.or_at.contains(bench);
            let its = match &latest.container {
                Some(container) => *container == hand.container,
                None => weighed.balance.is_some(),
            };
            if here && its {
                hand.weighing = Some(latest.seq);
                touched.insert(Entity::Bench(state.name.clone()));
            }
        }
    }

    pub(super) fn apply_tied(&mut self, seq: Seq, link: &Link, said_at: Option<&BenchName>, r: &Recorded, touched: &mut Touched) {
        let (home, weighing) = match self.loose.remove(&seq) {
            Some(Loose { bench, what: LooseWhat::Weighing { weighing, .. }, .. }) => {
                touched.insert(Entity::Loose(seq));
                (bench, weighing)
            }
            _ => {
                let Some(untied) = self.untie(seq, touched) else { return };
                if let Some(began) = untied.began.filter(|b| b.counts != link.counts) {
                    self.owe_again(&began.specimen, &began.counts, touched);
                }
                (None, untied.weighing)
            }
        };
        let by = weighing.by.or_else(|| r.who.clone());
        let weighing = Weighing { mass: link.gross, by, ..weighing };
        self.apply_link(&weighing, link, touched);
        self.tied_on_pan(seq, link, r, touched);
        let latest = Latest {
            seq,
            mass: link.gross,
            container: Some(link.container.clone()),
            role: Some(link.role),
            loose: None,
            at: weighing.at,
        };
        self.show_tied(latest, home.as_ref(), said_at, r, touched);
    }

    /// Benches that showed the weighing as loose show what it is now; where several did, only the one it is of.
    fn show_tied(
        &mut self,
        latest: Latest,
        home: Option<&BenchName>,
        said_at: Option<&BenchName>,
        r: &Recorded,
        touched: &mut Touched,
    ) {
        for state in self.benches.values_mut() {
            let shown = state.latest.as_ref().map(|l| l.seq);
            let is_home = home == Some(&state.name) && shown.is_none_or(|l| l < latest.seq);
            if shown != Some(latest.seq) && !is_home {
                continue;
            }
            (state.active, state.refusal) = (r.at, None);
            state.latest = said_at.is_none_or(|b| *b == state.name).then(|| latest.clone());
            touched.insert(Entity::Bench(state.name.clone()));
        }
    }

    /// The mass on a pan has found its container: the hand that brought it there is used up.
    fn tied_on_pan(&mut self, seq: Seq, link: &Link, r: &Recorded, touched: &mut Touched) {
        let mut on_pan = false;
        for (name, instrument) in &mut self.instruments {
            let Some(pan) = instrument.pan.as_mut().filter(|p| p.seq == seq) else { continue };
            on_pan = true;
            (pan.loose, pan.tied) = (false, Some(r.seq));
            if !pan.printed {
                instrument.pan = None;
            }
            touched.insert(Entity::Instrument(name.clone()));
        }
        let its = |b: &&mut Bench| b.hand.as_ref().is_some_and(|h| h.container == link.container);
        for bench in self.benches.values_mut().filter(|_| on_pan).filter(its) {
            if let Some(hand) = &mut bench.hand {
                hand.weighing = Some(seq);
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    /// What a weighing is of, put where it belongs.
    fn apply_link(&mut self, weighing: &Weighing, link: &Link, touched: &mut Touched) {
        let seq = weighing.seq;
        match (link.role, &link.specimen, link.trial) {
            (Role::Wet, Some(specimen), Some(trial)) => self.begin_trial(weighing, link, specimen, trial, touched),
            (Role::Grown, Some(specimen), Some(trial)) => {
                self.with_trial(specimen, trial, touched, |t| put_in_order(&mut t.wets, weighing.clone()));
            }
            (Role::Repeat, Some(specimen), Some(trial)) => {
                self.with_trial(specimen, trial, touched, |t| {
                    put_in_order(&mut t.repeats, weighing.clone());
                    keep_latest(&mut t.repeats);
                });
            }
            (Role::Dry | Role::FurtherDry, Some(specimen), Some(trial)) => {
                self.weighed_dry(weighing, &link.container, specimen, trial, touched);
            }
            (Role::Tare | Role::TareCheck | Role::Emptied, specimen, trial) => {
                if let (Some(specimen), Some(trial)) = (specimen, trial) {
                    let mut given = false;
                    self.with_trial(specimen, trial, touched, |t| {
                        given = t.tare.is_none();
                        t.tare.get_or_insert_with(|| weighing.clone());
                    });
                    self.new_tare(weighing, link, given.then_some(specimen), touched);
                } else {
                    self.new_tare(weighing, link, None, touched);
                }
            }
            (Role::TareWithLid, ..) => self.with_container(&link.container, touched, |c| {
                put_in_order(&mut c.with_lid, weighing.clone());
                keep_latest(&mut c.with_lid);
            }),
            (Role::Wet | Role::Grown | Role::Repeat | Role::Dry | Role::FurtherDry, ..) => {
                debug_assert!(false, "fact {seq} names no determination");
            }
        }
    }

    fn weighed_dry(
        &mut self,
        weighing: &Weighing,
        container: &ContainerId,
        specimen: &SpecimenId,
        trial: TrialRef,
        touched: &mut Touched,
    ) {
        let held = self.containers.get_mut(container).and_then(|c| clock_of(c, specimen, trial));
        let record = self.specimens.get_mut(specimen).and_then(|s| s.trial_mut(trial));
        let (Some(oven), Some(record)) = (held, record) else { return };
        oven.weighed(weighing.at, weighing.seq);
        let place = record.dries.partition_point(|d| d.weighing.seq < weighing.seq);
        let dry = DryRecord {
            weighing: weighing.clone(),
            oven_hours: 0.0,
            since_previous_hours: None,
            oven_recorded: false,
            basis: Clock::Monotonic,
            out_us: None,
        };
        record.dries.insert(place, dry);
        work_hours(&mut record.dries, oven, &self.clock);
        touched.insert(Entity::Specimen(specimen.clone()));
        self.with_container(container, touched, |_| ());
    }

    /// The container was weighed empty: this is its tare from here on.
    fn new_tare(&mut self, weighing: &Weighing, link: &Link, owed_by: Option<&SpecimenId>, touched: &mut Touched) {
        let holds = self.containers.get(&link.container).and_then(|c| c.holding.as_ref());
        let still_wet = holds.and_then(|h| self.held_trial(h)).is_some_and(|t| t.dries.is_empty() && t.set_aside.is_none());
        self.with_container(&link.container, touched, |c| {
            put_in_order(&mut c.tares, weighing.clone());
            keep_latest(&mut c.tares);
            if let Some(specimen) = owed_by {
                used(c, weighing.seq, specimen);
            }
            let kept = core::mem::take(&mut c.tare_uses).into_iter();
            c.tare_uses = kept.filter(|u| c.tares.iter().any(|t| t.seq == u.tare)).collect();
            if !still_wet && let Some(holding) = c.holding.take() {
                c.released = Some(Released { by: weighing.seq, holding });
            }
        });
    }

    fn begin_trial(&mut self, weighing: &Weighing, link: &Link, id: &SpecimenId, trial: TrialRef, touched: &mut Touched) {
        let tare = self.containers.get(&link.container).and_then(|c| tare_for(c, weighing.seq));
        let Some(specimen) = self.specimens.get_mut(id) else { return };
        let record = TrialRecord {
            kind: trial.kind,
            no: trial.no,
            container: link.container.clone(),
            counts: link.counts.clone(),
            tare: tare.clone(),
            wets: vec![weighing.clone()],
            repeats: Vec::new(),
            dries: Vec::new(),
            set_aside: None,
            moved: None,
        };
        let place = specimen.trials.partition_point(|t| t.wets.first().is_some_and(|w| w.seq < weighing.seq));
        specimen.trials.insert(place, record);
        touched.insert(Entity::Specimen(id.clone()));
        let oven = OvenClock::new(weighing.at);
        self.with_container(&link.container, touched, |c| {
            if let Some(tare) = &tare {
                used(c, tare.seq, id);
            }
            let before = c.holding.take().map(|h| Box::new(Holding { before: None, ..h }));
            c.holding = Some(Holding { specimen: id.clone(), trial, oven, before });
        });
        for &count in &link.counts {
            self.no_longer_owed(count, touched);
        }
    }

    /// Takes a weighing out of wherever it is in force.
    pub(in crate::lab) fn untie(&mut self, seq: Seq, touched: &mut Touched) -> Option<Untied> {
        let mut found = self.untie_tare(seq, touched);
        let mut at: Option<(SpecimenId, TrialRef, Place)> = None;
        for specimen in self.specimens.values_mut() {
            let taken = specimen.trials.iter_mut().find_map(|t| take_from_trial(t, seq).map(|w| (t, w)));
            let Some((trial, (weighing, place))) = taken else { continue };
            at = Some((specimen.id.clone(), trial.reference(), place));
            let container = trial.container.clone();
            let counts = trial.counts.clone();
            let over = trial.wets.is_empty();
            let began = over.then(|| Began { specimen: specimen.id.clone(), trial: trial.reference(), counts });
            found = Some(Untied { weighing, container, began });
            // A determination without a wet weighing never began.
            specimen.trials.retain(|t| !t.wets.is_empty());
            touched.insert(Entity::Specimen(specimen.id.clone()));
            break;
        }
        let untied = found?;
        if let Some((specimen, trial, Place::Dry)) = &at {
            self.not_dry(seq, &untied.container, specimen, *trial);
        }
        let began = untied.began.clone();
        self.with_container(&untied.container, touched, |c| {
            let gone = |h: &Holding| began.as_ref().is_some_and(|b| b.specimen == h.specimen && b.trial == h.trial);
            if c.holding.as_ref().is_some_and(gone) {
                c.holding = c.holding.take().and_then(|h| h.before).map(|h| *h);
            }
        });
        Some(untied)
    }

    /// An empty weighing, with or without its lid, is taken out; determinations fall back on the tare before it.
    fn untie_tare(&mut self, seq: Seq, touched: &mut Touched) -> Option<Untied> {
        let has = |c: &&mut Container| c.tares.iter().chain(&c.with_lid).any(|w| w.seq == seq);
        let container = self.containers.values_mut().find(has)?;
        let list = if container.tares.iter().any(|w| w.seq == seq) { &mut container.tares } else { &mut container.with_lid };
        let weighing = list.remove(list.iter().position(|w| w.seq == seq)?);
        container.tare_uses.retain(|u| u.tare != seq);
        if let Some(released) = container.released.take_if(|r| r.by == seq) {
            match &mut container.holding {
                None => container.holding = Some(released.holding),
                Some(now) => now.before = Some(Box::new(Holding { before: None, ..released.holding })),
            }
        }
        for specimen in self.specimens.values_mut() {
            for trial in specimen.trials.iter_mut().filter(|t| t.tare.as_ref().is_some_and(|w| w.seq == seq)) {
                trial.tare = trial.wets.first().and_then(|w| tare_for(container, w.seq));
                if let Some(tare) = &trial.tare {
                    used(container, tare.seq, &specimen.id);
                }
                touched.insert(Entity::Specimen(specimen.id.clone()));
            }
        }
        Some(Untied { weighing, container: container.id.clone(), began: None })
    }

    fn not_dry(&mut self, seq: Seq, container: &ContainerId, specimen: &SpecimenId, trial: TrialRef) {
        let oven = self.containers.get_mut(container).and_then(|c| clock_of(c, specimen, trial));
        let record = self.specimens.get_mut(specimen).and_then(|s| s.trial_mut(trial));
        if let (Some(oven), Some(record)) = (oven, record) {
            oven.not_weighed(seq);
            work_hours(&mut record.dries, oven, &self.clock);
        }
    }

    pub(super) fn apply_set_aside(&mut self, what: Seq, fault: Option<ClosureFault>, said: Said, touched: &mut Touched) {
        if self.loose.remove(&what).is_some() {
            touched.insert(Entity::Loose(what));
        }
        let mut was_count = false;
        self.with_count(what, touched, |c| {
            (c.set_aside, c.failed) = (Some(said), fault);
            was_count = true;
        });
        if was_count {
            self.no_longer_owed(what, touched);
        } else if let Some(began) = self.untie(what, touched).and_then(|u| u.began) {
            self.owe_again(&began.specimen, &began.counts, touched);
        }
        for (name, instrument) in &mut self.instruments {
            if instrument.pan.take_if(|p| p.seq == what).is_some() {
                touched.insert(Entity::Instrument(name.clone()));
            }
        }
        for bench in self.benches.values_mut() {
            let latest = bench.latest.take_if(|l| l.seq == what);
            if latest.as_ref().is_some_and(|l| l.loose == bench.refusal) {
                bench.refusal = None;
            }
            let hand = bench.hand.as_mut().and_then(|h| h.weighing.take_if(|w| *w == what));
            if latest.is_some() || hand.is_some() {
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    pub(super) fn apply_mass_amended(&mut self, seq: Seq, mass: Mass, said: &Said, touched: &mut Touched) {
        let amend = |w: &mut Weighing| {
            let mine = w.seq == seq;
            if mine {
                (w.mass, w.typed, w.corrected) = (mass, true, Some(said.clone()));
            }
            mine
        };
        let mut containers: Vec<ContainerId> = Vec::new();
        for specimen in self.specimens.values_mut() {
            for trial in &mut specimen.trials {
                let dries = trial.dries.iter_mut().map(|d| &mut d.weighing);
                let all = trial.tare.iter_mut().chain(&mut trial.wets).chain(&mut trial.repeats).chain(dries);
                if all.map(amend).fold(false, |a, b| a | b) {
                    touched.insert(Entity::Specimen(specimen.id.clone()));
                    containers.push(trial.container.clone());
                }
            }
        }
        for container in self.containers.values_mut() {
            if container.tares.iter_mut().chain(&mut container.with_lid).map(amend).fold(false, |a, b| a | b) {
                containers.push(container.id.clone());
            }
        }
        for id in containers {
            self.with_container(&id, touched, |_| ());
        }
        if let Some(Loose { what: LooseWhat::Weighing { weighing, .. }, .. }) = self.loose.get_mut(&seq) {
            amend(weighing);
            touched.insert(Entity::Loose(seq));
        }
        for bench in self.benches.values_mut() {
            if let Some(latest) = bench.latest.as_mut().filter(|l| l.seq == seq) {
                latest.mass = mass;
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }
}

/// The oven's record of a determination that a container holds, or held last.
fn clock_of<'a>(c: &'a mut Container, specimen: &SpecimenId, trial: TrialRef) -> Option<&'a mut OvenClock> {
    let released = c.released.as_mut().map(|r| &mut r.holding);
    let held = c.holding.iter_mut().flat_map(|h| {
        let Holding { specimen, trial, oven, before } = h;
        let before = before.as_mut().map(|b| (&b.specimen, b.trial, &mut b.oven));
        core::iter::once((&*specimen, *trial, oven)).chain(before)
    });
    let all = held.chain(released.map(|h| (&h.specimen, h.trial, &mut h.oven)));
    all.into_iter().find(|(s, t, _)| *s == specimen && *t == trial).map(|(_, _, oven)| oven)
}

/// The tare in force at a wet weighing; where none was, the first one after it.
fn tare_for(container: &Container, wet: Seq) -> Option<Weighing> {
    let before = container.tares.iter().rev().find(|t| t.seq < wet);
    before.or_else(|| container.tares.first()).cloned()
}

pub(super) fn used(container: &mut Container, tare: Seq, specimen: &SpecimenId) {
    let known = container.tare_uses.iter().any(|u| u.tare == tare && u.specimen == *specimen);
    if !known && container.tares.iter().any(|t| t.seq == tare) {
        container.tare_uses.push(TareUse { tare, specimen: specimen.clone() });
    }
}

fn put_in_order(list: &mut Vec<Weighing>, weighing: Weighing) {
    let place = list.partition_point(|w| w.seq < weighing.seq);
    list.insert(place, weighing);
}

fn keep_latest(list: &mut Vec<Weighing>) {
    let surplus = list.len().saturating_sub(KEPT);
    list.drain(..surplus);
}

fn take_from_trial(trial: &mut TrialRecord, seq: Seq) -> Option<(Weighing, Place)> {
    if let Some(n) = trial.wets.iter().position(|w| w.seq == seq) {
        return Some((trial.wets.remove(n), Place::Wet));
    }
    if let Some(n) = trial.repeats.iter().position(|w| w.seq == seq) {
        return Some((trial.repeats.remove(n), Place::Repeat));
    }
    if let Some(n) = trial.dries.iter().position(|d| d.weighing.seq == seq) {
        return Some((trial.dries.remove(n).weighing, Place::Dry));
    }
    // The container no longer keeps this empty weighing, but the determination does.
    trial.tare.take_if(|w| w.seq == seq).map(|w| (w, Place::Tare))
}
