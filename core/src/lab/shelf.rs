//! The oven shelf: what is drying, since when, and what comes next for it.

use super::Lab;
use super::clock::ClockRecord;
use super::entities::{Container, Holding, Standing, TrialRecord};
use super::guide::Early;
use super::oven::{hours, last_stay};
use crate::fact::TrialRef;
use crate::method::{Drying, Method};
use crate::names::{ContainerId, SpecimenId};
use crate::quantity::Mass;
use crate::sheet::Seq;
use crate::soil::determined::about;
use crate::stamp::{Basis, Stamp};
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;
use serde::Serialize;

/// What stands wet or drying for longer is forgotten rather than dried (common practice, no source).
const OVERDUE_HOURS: f64 = 72.0;

/// A container whose soil is to be dried and weighed.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct OnShelf {
    /// The container.
    pub container: ContainerId,
    /// Of which specimen.
    pub specimen: SpecimenId,
    /// Which determination.
    pub trial: TrialRef,
    /// Wet, in the oven, or drying.
    pub standing: Standing,
    /// Latest wet mass.
    #[serde(rename = "wet_ug")]
    pub wet: Option<Mass>,
    /// Latest dry mass.
    #[serde(rename = "dry_ug")]
    pub dry: Option<Mass>,
    /// In the oven since, by the record; else weighed wet at.
    pub since: Stamp,
    /// Somebody recorded that it went into the oven.
    pub recorded: bool,
    /// Temperature that was stated when it went in, °C.
    pub celsius: Option<f64>,
    /// Hours in the oven so far, times off taken away; without a record from the wet weighing.
    pub hours: f64,
    /// Hours since the latest dry weighing, in the oven.
    pub hours_since_dry: Option<f64>,
    /// Clock the hours rest on.
    pub basis: Basis,
    /// Hours that the method asks for.
    pub hours_wanted: f64,
    /// The method's time is over: cool it and weigh it.
    pub ready: bool,
    /// Hours until then.
    pub ready_in_hours: f64,
    /// It has stood for days.
    pub overdue: bool,
    /// Its determination was set aside: there is nothing to weigh.
    pub set_aside: bool,
    /// The stated temperature lies outside the method's.
    pub wrong_heat: bool,
    /// What comes next.
    pub next: String,
}

impl Lab {
    /// Everything that is to be dried and weighed, what is ready first, then what is longest in.
    pub fn shelf(&self, now: &Stamp) -> Vec<OnShelf> {
        let mut all: Vec<OnShelf> = self.containers.values().filter_map(|c| self.on_shelf(c, now)).collect();
        all.sort_by(|a, b| b.ready.cmp(&a.ready).then(b.hours.total_cmp(&a.hours)).then(a.container.cmp(&b.container)));
        all
    }

    fn on_shelf(&self, container: &Container, now: &Stamp) -> Option<OnShelf> {
        let holding = container.holding.as_ref()?;
        let trial = self.held_trial(holding)?;
        let dries = matches!(container.standing, Standing::Wet | Standing::InOven | Standing::Drying);
        // What was set aside still lies in the oven until somebody takes it out.
        if !dries || (trial.set_aside.is_some() && container.standing != Standing::InOven) {
            return None;
        }
        let method = self.method_of(&holding.specimen)?;
        Some(worked(container, holding, trial, method, (now, &self.clock)))
    }

    pub(super) fn method_of(&self, specimen: &SpecimenId) -> Option<&Method> {
        self.specimens.get(specimen).and_then(|s| self.setup.methods.get(&s.method))
    }

    /// A dry weighing in force that came before the method's time and was neither put back nor answered.
    pub(super) fn early(&self, container: &ContainerId, weighing: Seq) -> Option<Early> {
        let state = self.containers.get(container)?;
        let holding = state.holding.as_ref().filter(|h| h.oven.since.is_none())?;
        let trial = self.held_trial(holding)?;
        let dry = trial.dries.last().filter(|d| d.weighing.seq == weighing)?;
        if self.finished(holding, trial) {
            return None;
        }
        let specimen = self.specimens.get(&holding.specimen)?;
        let drying = &self.method_of(&holding.specimen)?.drying;
        let about = about(holding.trial.kind, holding.trial.no);
        let answered = specimen.answers.iter().any(|a| a.check == "not_dry" && a.about == about);
        (!answered).then(|| Early {
            container: container.clone(),
            specimen: specimen.id.clone(),
            about,
            hours: dry.oven_hours,
            wanted: drying.hours,
            again: drying.constant_hours,
            recorded: dry.oven_recorded,
        })
    }
}

fn worked(
    container: &Container,
    holding: &Holding,
    trial: &TrialRecord,
    method: &Method,
    (now, clock): (&Stamp, &ClockRecord),
) -> OnShelf {
    let (drying, oven) = (&method.drying, &holding.oven);
    let (us, basis) = oven.total(now, clock);
    let so_far = hours(us);
    let hours_since_dry = trial.dries.last().map(|d| (so_far - d.oven_hours).max(0.0));
    let ready_in_hours = ready_in(drying, so_far, hours_since_dry, oven.since.is_some(), trial);
    let since = oven.since.or_else(|| last_stay(oven)).unwrap_or(oven.wet_at);
    let standing_hours = hours(now.since(&oven.wet_at).us);
    let celsius = oven.celsius;
    let wrong_heat = celsius.is_some_and(|c| !(drying.oven_celsius[0]..=drying.oven_celsius[1]).contains(&c));
    let mut item = OnShelf {
        container: container.id.clone(),
        specimen: holding.specimen.clone(),
        trial: holding.trial,
        standing: container.standing,
        wet: trial.wets.last().map(|w| w.mass),
        dry: trial.dries.last().map(|d| d.weighing.mass),
        since,
        recorded: oven.recorded,
        celsius,
        hours: so_far,
        hours_since_dry,
        basis,
        hours_wanted: drying.hours,
        ready: ready_in_hours <= 0.0 && trial.set_aside.is_none(),
        set_aside: trial.set_aside.is_some(),
        ready_in_hours: ready_in_hours.max(0.0),
        overdue: standing_hours >= OVERDUE_HOURS,
        wrong_heat,
        next: String::new(),
    };
    item.next = next(&item, drying);
    item
}

/// Hours until the next weighing can prove dryness: by the hours, or by the interval since the last dry weighing.
fn ready_in(drying: &Drying, so_far: f64, since_dry: Option<f64>, inside: bool, trial: &TrialRecord) -> f64 {
    let by_hours = drying.hours - so_far;
    match since_dry {
        Some(back) if inside || !trial.dries.is_empty() => by_hours.min(drying.constant_hours - back),
        _ => by_hours,
    }
}

fn next(item: &OnShelf, drying: &Drying) -> String {
    let heat = match item.celsius.filter(|_| item.wrong_heat) {
        Some(c) => format!(
            "; the oven was stated at {c} °C, the method asks for {} to {}",
            drying.oven_celsius[0], drying.oven_celsius[1]
        ),
        None => String::new(),
    };
    let days = if item.overdue { format!("; it has stood since {}", day(&item.since)) } else { String::new() };
    let id = &item.container;
    let step = match (item.standing, item.ready) {
        _ if item.set_aside => format!("{id}: its determination was set aside: take it out"),
        (Standing::Wet, false) if !item.recorded => format!("{id}: put it into the oven and say so"),
        (Standing::Wet, _) if item.recorded => format!("{id}: out of the oven and not weighed: weigh it when cool"),
        (Standing::Drying, false) => {
            format!("{id}: weighed too early: put it back for {:.1} h", item.ready_in_hours)
        }
        (_, true) => format!("{id}: {:.1} h in: take it out, cool it with the lid on and weigh it", item.hours),
        (_, false) => format!("{id}: {:.1} h to go", item.ready_in_hours),
    };
    format!("{step}{heat}{days}")
}

fn day(at: &Stamp) -> String {
    at.rfc3339().chars().take(10).collect()
}
