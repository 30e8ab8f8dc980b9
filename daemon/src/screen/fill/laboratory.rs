//! The laboratory at a glance.

use super::super::view::{ContainerRow, InstrumentRow, Laboratory, SpecimenRow};
use super::specimen::{results, state_word};
use super::{Around, connected, frame, standing_word};
use tarecup_core::evaluate::open_holds;
use tarecup_core::lab::Lab;
use tarecup_core::lab::entities::{Container, Instrument, Specimen};
use tarecup_core::sheet::Kind;
use tarecup_core::soil::limits::{liquid_trials_needed, threads_needed};
use tarecup_core::stamp::{HOUR_US, Stamp};

/// The laboratory.
pub fn laboratory(lab: &Lab, now: &Stamp, around: &Around) -> Laboratory {
    let setup = lab.setup();
    let mut methods: Vec<(String, String)> = setup.methods.values().map(|m| (m.name.to_string(), m.title.clone())).collect();
    methods.sort_by_key(|(name, _)| name != setup.default_method.as_str());
    Laboratory {
        frame: frame(lab, now, around),
        open: lab.specimens().filter(|s| s.open()).map(|s| specimen(lab, s)).collect(),
        results: lab.specimens().filter(|s| !s.open() && of_today(s, now)).map(|s| specimen(lab, s)).collect(),
        instruments: lab.instruments().map(|i| instrument(lab, i, around)).collect(),
        due: around.due.clone(),
        backup_proven: around.backup_proven.clone(),
        containers: lab.containers().map(container).collect(),
        methods,
    }
}

/// Something was weighed for it within a day.
fn of_today(s: &Specimen, now: &Stamp) -> bool {
    let last = s.weighings().map(|w| w.at.utc_us).max();
    last.is_some_and(|at| now.utc_us.saturating_sub(at) < 24 * HOUR_US)
}

fn specimen(lab: &Lab, s: &Specimen) -> SpecimenRow {
    let method = lab.setup().methods.get(&s.method);
    let done = |kind| s.trials.iter().filter(|t| t.kind == kind && t.set_aside.is_none()).count() as u32;
    let r = results(s);
    let index = if r.non_plastic { Some(String::from("NP")) } else { r.index.map(|f| f.rounded) };
    SpecimenRow {
        id: s.id.to_string(),
        description: s.description.clone(),
        state: state_word(s).into(),
        liquid: (done(Kind::Liquid), method.map_or(0, |m| liquid_trials_needed(m) as u32)),
        threads: (done(Kind::Thread), method.map_or(0, |m| threads_needed(m) as u32)),
        liquid_limit: r.liquid.map(|f| f.rounded),
        plastic_limit: r.plastic.map(|f| f.rounded),
        index,
        group: r.group,
        holds: s.limits.as_ref().map_or(0, |l| open_holds(l).len()),
    }
}

fn instrument(lab: &Lab, i: &Instrument, around: &Around) -> InstrumentRow {
    let heard = around.instruments.get(&i.name);
    let benches = lab.setup().instruments.get(&i.name);
    InstrumentRow {
        name: i.name.to_string(),
        kind: heard.map_or("", |h| h.kind).into(),
        benches: benches.into_iter().flatten().map(ToString::to_string).collect(),
        connected: connected(i.state),
        detail: i.detail.clone(),
        last_heard: heard.and_then(|h| h.last_heard).map(|at| at.rfc3339()),
        rejects: heard.map_or(0, |h| h.rejects),
    }
}

fn container(c: &Container) -> ContainerRow {
    ContainerRow {
        id: c.id.to_string(),
        standing: standing_word(c.standing).into(),
        tare_g: c.tare().map(|w| w.mass.to_string()),
        lid_g: c.lid.map(|m| m.to_string()),
        weighed: c.tare().map(|w| w.at.rfc3339()),
        specimen: c.holding.as_ref().map(|h| h.specimen.to_string()),
    }
}
