//! From a container and a mass to what the mass belongs to.

use super::apply::Untied;
use super::entities::{Bench, Container, Holding, Specimen, TrialRecord};
use super::role::{Before, Held, Role, role};
use super::{Lab, Refusal, oven};
use crate::fact::{Fact, Intention, Link, TrialRef, Weighed};
use crate::names::{BenchName, ContainerId, Operator, SpecimenId};
use crate::quantity::{LARGEST, Mass};
use crate::sheet::{Kind, Seq};
use crate::signal::Basis;
use crate::stamp::{HOUR_US, Stamp};
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// Where nobody records the oven, soil weighed wet so long ago has been in it.
const OVERNIGHT_US: i64 = 4 * HOUR_US;

/// More determinations than any test of one specimen has.
const TRIALS_OF_SPECIMEN: usize = 200;
/// More weighings in turn than any determination has.
const WEIGHINGS_OF_TRIAL: usize = 100;
/// Specimens that one empty weighing may serve.
const USES_OF_TARE: usize = 50;

/// What a wet weighing would begin.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct WetFor {
    specimen: SpecimenId,
    kind: Kind,
    counts: Vec<Seq>,
    /// Its number, where it had one before.
    no: Option<u32>,
}

impl Lab {
    /// Ties a mass to a container by the role table. `places`: the benches it may have been weighed for.
    pub(super) fn link(
        &self,
        places: &[BenchName],
        container: &ContainerId,
        mass: Mass,
        basis: Basis,
        at: &Stamp,
    ) -> Result<Link, String> {
        let unknown = Container::new(container.clone());
        let state = self.containers.get(container).unwrap_or(&unknown);
        let gross = gross(state, mass, basis)?;
        let wet_for = self.wet_for(places, at, false);
        let held = self.held(state, at)?;
        let before = Before { tare: state.tare().map(|w| w.mass), lid: state.lid, held, wet_open: !wet_for.is_empty() };
        let role = role(&before, gross, self.setup.linking.near)?;
        self.link_as(state, role, gross, &wet_for)
    }

    /// Ties a mass to a container in the role that a person said. `was`: what the weighing was tied to before.
    pub(super) fn link_said(
        &self,
        bench: &BenchName,
        container: &ContainerId,
        said: Role,
        mass: (Mass, Basis),
        at: &Stamp,
        was: Option<&Untied>,
    ) -> Result<Link, String> {
        let unknown = Container::new(container.clone());
        let state = self.containers.get(container).unwrap_or(&unknown);
        let gross = gross(state, mass.0, mass.1)?;
        let held = self.held(state, at)?;
        may_be(state, said, gross, held.as_ref())?;
        let wet_for = match said {
            Role::Wet => self.wet_said(bench, container, at, was),
            _ => Vec::new(),
        };
        let role = match (said, held.and_then(|h| h.dry)) {
            (Role::FurtherDry, None) => Role::Dry,
            (Role::Dry, Some(_)) => Role::FurtherDry,
            (role, _) => role,
        };
        self.link_as(state, role, gross, &wet_for)
    }

    /// An empty mass that a person typed from a register, as a weighing that was never on a balance.
    pub(super) fn typed_tare(
        &self,
        container: &ContainerId,
        tare: Mass,
        who: Option<&Operator>,
        at: &Stamp,
    ) -> Result<Option<Fact>, Refusal> {
        let unknown = Container::new(container.clone());
        let state = self.containers.get(container).unwrap_or(&unknown);
        if who.is_none() {
            return Err(Refusal(String::from("say who read the empty mass from the register: results rest on it")));
        }
        if state.tare().is_some_and(|t| t.mass == tare) {
            return Ok(None);
        }
        if state.holding.is_some() && state.tare().is_some() {
            return Err(Refusal(format!("{container} holds soil: correct its empty weighing, or register it when it is empty")));
        }
        let held = self.held(state, at).map_err(Refusal)?;
        may_be(state, Role::Tare, tare, held.as_ref()).map_err(Refusal)?;
        let link = Some(self.link_as(state, Role::Tare, tare, &[]).map_err(Refusal)?);
        let weighed = Weighed { mass_ug: tare, bench: None, or_at: vec![], balance: None, taken: None, link, loose: None };
        Ok(Some(Fact::Weighed(weighed)))
    }

    fn link_as(&self, state: &Container, role: Role, gross: Mass, wet_for: &[WetFor]) -> Result<Link, String> {
        let mut link = Link { container: state.id.clone(), role, gross, specimen: None, trial: None, counts: Vec::new() };
        match role {
            Role::Wet => {
                let wet = one_wet(wet_for)?;
                let specimen =
                    self.specimens.get(&wet.specimen).ok_or_else(|| format!("specimen {} is not open", wet.specimen))?;
                room_for_trial(specimen, state)?;
                link.trial = Some(TrialRef { kind: wet.kind, no: wet.no.unwrap_or_else(|| specimen.next_no(wet.kind)) });
                link.specimen = Some(wet.specimen.clone());
                link.counts = wet.counts.clone();
            }
            Role::TareCheck | Role::TareWithLid | Role::Emptied => (),
            Role::Tare | Role::Repeat | Role::Grown | Role::Dry | Role::FurtherDry => {
                if let Some(holding) = &state.holding {
                    self.room_for_weighing(holding)?;
                    link.specimen = Some(holding.specimen.clone());
                    link.trial = Some(holding.trial);
                }
            }
        }
        Ok(link)
    }

    fn room_for_weighing(&self, holding: &Holding) -> Result<(), String> {
        let full = |t: &TrialRecord| t.wets.len().max(t.dries.len()) >= WEIGHINGS_OF_TRIAL;
        match self.held_trial(holding).is_some_and(full) {
            true => Err(format!(
                "{WEIGHINGS_OF_TRIAL} weighings belong to this determination already: is the balance repeating itself?"
            )),
            false => Ok(()),
        }
    }

    /// What a wet weighing at one of these benches would begin now. A person who
    /// says "wet" may also mean a slice that was taken late.
    fn wet_for(&self, places: &[BenchName], at: &Stamp, late: bool) -> Vec<WetFor> {
        places.iter().filter_map(|b| self.benches.get(b)).filter_map(|b| self.wet_at(b, at, late)).collect()
    }

    /// What a person who says "wet" means. A weighing that began a determination
    /// begins the same one again, in the right container; only where the
    /// container stays, it was of the bench's specimen instead.
    fn wet_said(&self, bench: &BenchName, container: &ContainerId, at: &Stamp, was: Option<&Untied>) -> Vec<WetFor> {
        let here = self.wet_for(core::slice::from_ref(bench), at, true);
        let Some((untied, began)) = was.and_then(|u| u.began.as_ref().map(|b| (u, b))) else { return here };
        let again = WetFor {
            specimen: began.specimen.clone(),
            kind: began.trial.kind,
            counts: began.counts.clone(),
            no: Some(began.trial.no),
        };
        let other = |w: &WetFor| w.kind == again.kind && w.specimen != again.specimen;
        if untied.container == *container && here.iter().any(other) { here } else { vec![again] }
    }

    fn wet_at(&self, bench: &Bench, at: &Stamp, late: bool) -> Option<WetFor> {
        if let Some(owed) = &bench.owed
            && (late || at.since(&owed.ended).us < self.setup.linking.slice_us)
        {
            let (specimen, counts) = (owed.specimen.clone(), owed.counts.clone());
            let kind = if owed.penetration_mm.is_some() { Kind::Cone } else { Kind::Liquid };
            return Some(WetFor { specimen, kind, counts, no: None });
        }
        let work = bench.intention.as_ref()?;
        let kind = match work.intention {
            Intention::Liquid => return None,
            Intention::Plastic => Kind::Thread,
            Intention::Natural => Kind::Natural,
        };
        Some(WetFor { specimen: work.specimen.clone(), kind, counts: Vec::new(), no: None })
    }

    /// The determination a container holds, as the role table sees it.
    pub(super) fn held(&self, container: &Container, at: &Stamp) -> Result<Option<Held>, String> {
        let Some(holding) = &container.holding else { return Ok(None) };
        let trial = self.held_trial(holding).ok_or_else(|| {
            format!("{} belongs to specimen {}, which could not be read from the ledger", container.id, holding.specimen)
        })?;
        let Some(wet) = trial.wets.last() else { return Ok(None) };
        let finished = self.finished(holding, trial);
        let oven = &holding.oven;
        let again = trial.dries.last().is_some_and(|d| {
            let since = |s: &Stamp| s.since(&d.weighing.at).us >= 0;
            let by_record = oven.since.as_ref().is_some_and(since) || oven.stays.iter().any(|s| since(&s.from));
            by_record || (!oven.recorded && at.since(&d.weighing.at).us >= OVERNIGHT_US)
        });
        Ok(Some(Held {
            kind: trial.kind,
            wet: wet.mass,
            dry: trial.dries.last().map(|d| d.weighing.mass),
            finished,
            set_aside: trial.set_aside.is_some(),
            been_in_oven: holding.oven.recorded || at.since(&holding.oven.wet_at).us >= OVERNIGHT_US,
            oven_recorded: holding.oven.recorded,
            dried_on: again && !finished,
        }))
    }

    pub(super) fn held_trial(&self, holding: &Holding) -> Option<&TrialRecord> {
        self.specimens.get(&holding.specimen)?.trial(holding.trial)
    }

    /// Dried as the method wants it, or set aside.
    pub(super) fn finished(&self, holding: &Holding, trial: &TrialRecord) -> bool {
        let method = self.specimens.get(&holding.specimen).and_then(|s| self.setup.methods.get(&s.method));
        trial.set_aside.is_some() || method.is_some_and(|m| oven::dried_record(&m.drying, trial))
    }
}

impl Lab {
    /// Room in a specimen for a determination that is moved to it.
    pub(super) fn room_for_moved(&self, to: &Specimen) -> Result<(), Refusal> {
        match to.trials.len() >= TRIALS_OF_SPECIMEN {
            true => Err(Refusal(format!("{} has {TRIALS_OF_SPECIMEN} determinations already: open another specimen", to.id))),
            false => Ok(()),
        }
    }
}

/// Room in a specimen, and a tare that is not too old, for one more determination.
fn room_for_trial(specimen: &Specimen, container: &Container) -> Result<(), String> {
    if specimen.trials.len() >= TRIALS_OF_SPECIMEN {
        return Err(format!("{} has {TRIALS_OF_SPECIMEN} determinations already: open another specimen", specimen.id));
    }
    let served = container.tare().map_or(0, |t| container.tare_uses.iter().filter(|u| u.tare == t.seq).count());
    match served >= USES_OF_TARE {
        true => Err(format!("the tare of {} has served {USES_OF_TARE} specimens: weigh it empty again", container.id)),
        false => Ok(()),
    }
}

/// Whether a person's word fits the container's state.
fn may_be(container: &Container, said: Role, gross: Mass, held: Option<&Held>) -> Result<(), String> {
    let id = &container.id;
    let wet = held.filter(|h| h.dry.is_none() && !h.set_aside);
    match said {
        Role::Wet if held.is_some_and(|h| !h.finished) => Err(format!(
            "{id} already holds a determination that is not finished: set that trial aside first, or use another container"
        )),
        Role::Wet if container.tare().is_some_and(|t| gross <= t.mass) => {
            Err(format!("{gross} g is not more than the empty {id}: it cannot hold wet soil"))
        }
        Role::Dry | Role::FurtherDry | Role::Repeat | Role::Grown if held.is_none() => {
            Err(format!("{id} holds no determination: it was never weighed wet, or was freed since"))
        }
        Role::Grown if held.is_some_and(|h| h.kind != Kind::Thread || h.dry.is_some()) => {
            Err(format!("{id} holds no threads that others could be added to"))
        }
        Role::Tare if wet.is_some() && container.tare().is_none() => Ok(()),
        Role::Tare | Role::TareCheck | Role::TareWithLid | Role::Emptied if wet.is_some() => {
            Err(format!("{id} holds wet soil that was not weighed dry: set its trial aside first if the soil is gone"))
        }
        _ => Ok(()),
    }
}

fn gross(container: &Container, mass: Mass, basis: Basis) -> Result<Mass, String> {
    let gross = match (basis, container.tare()) {
        (Basis::Gross | Basis::Unmarked, _) => mass,
        (Basis::Net, Some(tare)) => mass + tare.mass,
        (Basis::Net, None) => {
            return Err(format!(
                "the balance shows a net mass, but the tare of {} is not known: weigh it empty without the tare key, or say what the mass is",
                container.id
            ));
        }
    };
    if gross <= Mass::ZERO || gross > LARGEST {
        return Err(format!("{gross} g is no mass of a container: zero the balance and weigh again"));
    }
    Ok(gross)
}

fn one_wet(wet_for: &[WetFor]) -> Result<&WetFor, String> {
    match wet_for {
        [one] => Ok(one),
        [] => Err(String::from(
            "no slice is owed here and no plastic limit or natural water content is in work: say what the bench works on, or count first",
        )),
        several => {
            let names: Vec<&str> = several.iter().map(|w| w.specimen.as_str()).collect();
            Err(format!(
                "wet soil of {} may be weighed here: say at the bench whose it is that this mass is wet",
                names.join(" or of ")
            ))
        }
    }
}
