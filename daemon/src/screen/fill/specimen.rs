//! A specimen with all its result rests on.

use super::super::view::{
    Chart, Check, Figure, Fit, Flow, FlowPoint, Freshness, OtherCount, Results, SpecimenPage, Trial, Weighed,
};
use super::{Around, frame, kind, text};
use tarecup_core::lab::Lab;
use tarecup_core::lab::entities::{Specimen, TrialRecord, Weighing};
use tarecup_core::limits::{Limits, Severity, State, TrialRow};
use tarecup_core::names::SpecimenId;
use tarecup_core::sheet::Kind;
use tarecup_core::soil::flow::FlowLine;
use tarecup_core::stamp::Stamp;

/// Steps of the band: enough for a smooth edge, few enough for a small page.
const BAND_STEPS: u32 = 16;

/// A specimen's page; `None` when the specimen is not at hand.
pub fn specimen(lab: &Lab, id: &SpecimenId, now: &Stamp, around: &Around) -> Option<SpecimenPage> {
    let s = lab.specimen(id)?;
    let method = lab.setup().methods.get(&s.method);
    Some(SpecimenPage {
        frame: frame(lab, now, around),
        id: s.id.to_string(),
        description: s.description.clone(),
        preparation: s.preparation.clone(),
        method: method.map_or_else(|| s.method.to_string(), |m| m.title.clone()),
        edition: s.edition.clone(),
        opened: s.opened.rfc3339(),
        state: state_word(s).into(),
        revision: s.revision,
        reviewed_by: s.reviewed.as_ref().filter(|_| state_word(s) == "reviewed").and_then(|(_, by)| text(by.as_ref())),
        trials: trials(s),
        other_counts: other_counts(s),
        checks: s.limits.iter().flat_map(|l| &l.checks).map(check).collect(),
        results: results(s),
        flow: flow(s),
        chart: chart(lab, s),
        history: around.history.clone(),
        head: around.head.clone(),
    })
}

/// `provisional`, `complete` or `reviewed`.
pub fn state_word(s: &Specimen) -> &'static str {
    match s.limits.as_ref().map(|l| l.state) {
        Some(State::Complete) => "complete",
        Some(State::Reviewed) => "reviewed",
        Some(State::Provisional) | None => "provisional",
    }
}

fn check(row: &tarecup_core::limits::CheckRow) -> Check {
    Check {
        check: row.check.clone(),
        hold: row.severity == Severity::Hold,
        about: row.about.clone(),
        says: row.says.clone(),
        answered: row.answered.clone(),
    }
}

/// Determinations as they stand, with what the latest result says of them.
pub fn trials(s: &Specimen) -> Vec<Trial> {
    s.trials.iter().filter_map(|t| trial(s, t)).collect()
}

fn row<'a>(s: &'a Specimen, t: &TrialRecord) -> Option<&'a TrialRow> {
    s.limits.iter().flat_map(|l| &l.trials).find(|r| r.kind == t.kind && r.no == t.no)
}

fn trial(s: &Specimen, t: &TrialRecord) -> Option<Trial> {
    let row = row(s, t);
    let weighed = |w: &Weighing| Weighed { mass_g: w.mass.to_string(), seq: w.seq, typed: w.typed };
    let counts = t.counts.iter().filter_map(|c| s.count(*c));
    Some(Trial {
        kind: kind(t.kind)?,
        no: t.no,
        container: Some(t.container.to_string()),
        drops: counts.clone().map(|c| (c.drops, c.seq)).collect(),
        rate_per_s: counts.clone().next_back().and_then(|c| c.rate_per_s),
        tare: t.tare.as_ref().map(weighed),
        wet: t.wets.last().map(weighed),
        dry: t.dries.last().map(|d| weighed(&d.weighing)),
        water_percent: row.and_then(|r| r.water_percent),
        used: row.is_some_and(|r| r.used),
        set_aside: t.set_aside.as_ref().map(|a| a.why.clone()),
        typed: t.weighings().any(|w| w.typed) || counts.clone().any(|c| c.typed),
        by: t.wets.last().and_then(|w| text(w.by.as_ref())),
    })
}

fn other_counts(s: &Specimen) -> Vec<OtherCount> {
    let without = s.counts.iter().filter_map(|c| {
        let why = c.set_aside.as_ref().map(|a| a.why.clone()).or_else(|| c.superseded.clone())?;
        Some(OtherCount { seq: c.seq, drops: c.drops, why, at: c.at.rfc3339() })
    });
    without.collect()
}

/// Limits and indices as far as they go.
pub fn results(s: &Specimen) -> Results {
    let decimals = |rounded: f64| if rounded.fract() == 0.0 { format!("{rounded:.0}") } else { format!("{rounded}") };
    let figure = |rounded: f64, value, u| Figure { rounded: decimals(rounded), value, u };
    let because = |said: &Option<tarecup_core::lab::entities::Said>| said.as_ref().map(|s| s.why.clone());
    let (liquid_not_obtainable, plastic_not_obtainable) = (because(&s.liquid_not_obtainable), because(&s.plastic_not_obtainable));
    let Some(l) = &s.limits else {
        return Results { liquid_not_obtainable, plastic_not_obtainable, ..Default::default() };
    };
    let index = &l.plasticity_index;
    Results {
        liquid: l.liquid_limit.as_ref().map(|f| figure(f.rounded, f.value, f.u)),
        plastic: l.plastic_limit.as_ref().map(|f| figure(f.rounded, f.value, f.u)),
        index: index.rounded.zip(index.value).map(|(rounded, value)| figure(rounded, value, index.u)),
        non_plastic: index.non_plastic,
        group: l.group.clone(),
        natural_percent: l.natural_water_percent,
        liquidity: l.liquidity_index,
        consistency: l.consistency_index,
        flow: l.flow_index,
        activity: l.activity,
        liquid_not_obtainable,
        plastic_not_obtainable,
    }
}

/// The flow line as far as it goes: drawn from the points of the latest result, with the core's own fit.
pub fn flow(s: &Specimen) -> Flow {
    let rows = |l: &Limits| -> Vec<FlowPoint> {
        let liquid = l.trials.iter().filter(|t| t.kind == Kind::Liquid);
        let point = |t: &TrialRow| {
            let (drops, water_percent) = t.drops.zip(t.water_percent)?;
            Some(FlowPoint { no: t.no, drops, water_percent, used: t.used })
        };
        liquid.filter_map(point).collect()
    };
    let points = s.limits.as_ref().map(rows).unwrap_or_default();
    let begun =
        s.trials.iter().filter(|t| t.kind == Kind::Liquid && t.set_aside.is_none() && !points.iter().any(|p| p.no == t.no));
    let waiting = begun.filter_map(|t| t.counts.last().and_then(|c| s.count(*c))).map(|c| f64::from(c.drops)).collect();
    let drawn = s.limits.as_ref().and_then(|l| l.liquid_limit.as_ref()).is_some_and(|l| l.slope_per_decade.is_some());
    let used: Vec<(f64, f64)> = points.iter().filter(|p| p.used).map(|p| (p.drops, p.water_percent)).collect();
    let fit = FlowLine::fit(&used).ok().filter(|_| drawn).map(|line| fit(&line, &used));
    Flow { points, waiting, fit }
}

fn fit(line: &FlowLine, used: &[(f64, f64)]) -> Fit {
    let drops = || used.iter().map(|(d, _)| *d);
    let (from, to) = (drops().fold(25.0, f64::min), drops().fold(25.0, f64::max));
    let steps = (0..=BAND_STEPS).map(|i| from * (to / from).powf(f64::from(i) / f64::from(BAND_STEPS)));
    let band = steps.filter_map(|d| line.interval(d, 0.95).map(|[low, high]| (d, low, high))).collect();
    Fit { at_one: line.intercept(), slope: line.slope(), band }
}

fn chart(lab: &Lab, s: &Specimen) -> Chart {
    let place = |s: &Specimen| {
        let l = s.limits.as_ref()?;
        Some((l.liquid_limit.as_ref()?.rounded, l.plasticity_index.rounded?))
    };
    let others = lab.specimens().filter(|o| o.id != s.id);
    let others = others.filter_map(|o| place(o).map(|(ll, pi)| (o.id.to_string(), ll, pi))).collect();
    Chart { this: place(s), others }
}

/// How fresh a value of an instrument is, from its connection.
pub fn freshness(state: tarecup_core::fact::Connection, since: Option<&Stamp>) -> Freshness {
    use tarecup_core::fact::Connection;
    match state {
        Connection::Speaking => Freshness::Live,
        Connection::Waiting => Freshness::Never,
        Connection::Silent | Connection::WrongLanguage | Connection::PortLost => {
            Freshness::Stale { since: since.map(Stamp::rfc3339) }
        }
    }
}
