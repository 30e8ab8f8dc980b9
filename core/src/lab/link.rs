//! From a container and a mass to what the mass belongs to.

use super::entities::{Bench, Container, Holding, TrialRecord};
use super::role::{Before, Held, Role, role};
use super::{Lab, oven};
use crate::fact::{Intention, Link, TrialRef};
use crate::names::{BenchName, ContainerId, SpecimenId};
use crate::quantity::Mass;
use crate::sheet::{Kind, Seq};
use crate::signal::Basis;
use crate::stamp::{HOUR_US, Stamp};
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// Where nobody records the oven, soil weighed wet so long ago has been in it.
const OVERNIGHT_US: i64 = 4 * HOUR_US;

/// What a wet weighing would begin.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct WetFor {
    specimen: SpecimenId,
    kind: Kind,
    counts: Vec<Seq>,
}

impl Lab {
    /// Ties a mass to a container by the role table.
    pub(super) fn link(
        &self,
        bench: &BenchName,
        container: &ContainerId,
        shared: bool,
        mass: Mass,
        basis: Basis,
        at: &Stamp,
    ) -> Result<Link, String> {
        let unknown = Container::new(container.clone());
        let state = self.containers.get(container).unwrap_or(&unknown);
        let gross = gross(state, mass, basis)?;
        let wet_for = self.wet_for(bench, shared, at, false);
        let held = self.held(state, at)?;
        let before = Before { tare: state.tare().map(|w| w.mass), lid: state.lid, held, wet_open: !wet_for.is_empty() };
        let role = role(&before, gross, self.setup.linking.near)?;
        self.link_as(state, role, gross, &wet_for)
    }

    /// Ties a mass to a container in the role that a person said.
    pub(super) fn link_said(
        &self,
        bench: &BenchName,
        container: &ContainerId,
        said: Role,
        mass: Mass,
        basis: Basis,
        at: &Stamp,
    ) -> Result<Link, String> {
        let unknown = Container::new(container.clone());
        let state = self.containers.get(container).unwrap_or(&unknown);
        let gross = if said == Role::Tare { mass } else { gross(state, mass, basis)? };
        let wet_for = self.wet_for(bench, false, at, true);
        let held = self.held(state, at)?;
        match (said, held) {
            (Role::Wet, Some(held)) if !held.finished => Err(format!(
                "{container} already holds a determination that is not finished: set that trial aside first, or use another container"
            )),
            (Role::Dry | Role::FurtherDry | Role::Repeat | Role::Grown, None) => {
                Err(format!("{container} holds no determination: it was never weighed wet, or was freed since"))
            }
            (Role::FurtherDry, Some(held)) if held.dry.is_none() => self.link_as(state, Role::Dry, gross, &wet_for),
            (Role::Dry, Some(held)) if held.dry.is_some() => self.link_as(state, Role::FurtherDry, gross, &wet_for),
            (Role::Tare, Some(held)) if held.dry.is_none() && state.tare().is_some() => {
                Err(format!("{container} holds wet soil and its tare is known: set its trial aside first if the soil is gone"))
            }
            (role, _) => self.link_as(state, role, gross, &wet_for),
        }
    }

    fn link_as(&self, state: &Container, role: Role, gross: Mass, wet_for: &[WetFor]) -> Result<Link, String> {
        let mut link = Link { container: state.id.clone(), role, gross, specimen: None, trial: None, counts: Vec::new() };
        match role {
            Role::Wet => {
                let wet = one_wet(wet_for)?;
                let specimen =
                    self.specimens.get(&wet.specimen).ok_or_else(|| format!("specimen {} is not open", wet.specimen))?;
                link.trial = Some(TrialRef { kind: wet.kind, no: specimen.next_no(wet.kind) });
                link.specimen = Some(wet.specimen.clone());
                link.counts = wet.counts.clone();
            }
            Role::TareCheck | Role::TareWithLid | Role::Emptied => (),
            Role::Tare | Role::Repeat | Role::Grown | Role::Dry | Role::FurtherDry => {
                if let Some(holding) = &state.holding {
                    link.specimen = Some(holding.specimen.clone());
                    link.trial = Some(holding.trial);
                }
            }
        }
        Ok(link)
    }

    /// What a wet weighing at this bench would begin now. A person who says
    /// "wet" may also mean a slice that was taken late.
    fn wet_for(&self, bench: &BenchName, shared: bool, at: &Stamp, late: bool) -> Vec<WetFor> {
        let here = |b: &&Bench| b.name == *bench || (shared && self.share_an_instrument(&b.name, bench));
        self.benches.values().filter(here).filter_map(|b| self.wet_at(b, at, late)).collect()
    }

    fn wet_at(&self, bench: &Bench, at: &Stamp, late: bool) -> Option<WetFor> {
        if let Some(owed) = &bench.owed
            && (late || at.since(&owed.ended).us < self.setup.linking.slice_us)
        {
            return Some(WetFor { specimen: owed.specimen.clone(), kind: Kind::Liquid, counts: owed.counts.clone() });
        }
        let work = bench.intention.as_ref()?;
        let kind = match work.intention {
            Intention::Liquid => return None,
            Intention::Plastic => Kind::Thread,
            Intention::Natural => Kind::Natural,
        };
        Some(WetFor { specimen: work.specimen.clone(), kind, counts: Vec::new() })
    }

    fn share_an_instrument(&self, a: &BenchName, b: &BenchName) -> bool {
        self.setup.instruments.values().any(|benches| benches.contains(a) && benches.contains(b))
    }

    /// The determination a container holds, as the role table sees it.
    pub(super) fn held(&self, container: &Container, at: &Stamp) -> Result<Option<Held>, String> {
        let Some(holding) = &container.holding else { return Ok(None) };
        let trial = self.held_trial(holding).ok_or_else(|| {
            format!("{} belongs to specimen {}, which could not be read from the ledger", container.id, holding.specimen)
        })?;
        let Some(wet) = trial.wets.last() else { return Ok(None) };
        Ok(Some(Held {
            kind: trial.kind,
            wet: wet.mass,
            dry: trial.dries.last().map(|d| d.weighing.mass),
            finished: self.finished(holding, trial),
            been_in_oven: holding.oven.recorded || at.since(&holding.oven.wet_at).us >= OVERNIGHT_US,
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

fn gross(container: &Container, mass: Mass, basis: Basis) -> Result<Mass, String> {
    match (basis, container.tare()) {
        (Basis::Gross | Basis::Unmarked, _) => Ok(mass),
        (Basis::Net, Some(tare)) => Ok(mass + tare.mass),
        (Basis::Net, None) => Err(format!(
            "the balance shows a net mass, but the tare of {} is not known: weigh it empty without the tare key, or say what the mass is",
            container.id
        )),
    }
}

fn one_wet(wet_for: &[WetFor]) -> Result<&WetFor, String> {
    match wet_for {
        [one] => Ok(one),
        [] => Err(String::from(
            "no slice is owed here and no plastic limit or natural water content is in work: say what the bench works on, or count first",
        )),
        several => {
            let names: Vec<&str> = several.iter().map(|w| w.specimen.as_str()).collect();
            Err(format!("slices are owed for {}: say whose this is", names.join(" and ")))
        }
    }
}
