//! Facts and results, told to people on a terminal.

use tarecup_core::fact::{Fact, Intention, Link, Recorded};
use tarecup_core::lab::role::Role;
use tarecup_core::limits::{Limits, Severity, State};
use tarecup_core::stamp::rfc3339;

/// One line for a fact that people care about.
pub fn line(r: &Recorded) -> Option<String> {
    let time = rfc3339(r.at.utc_us);
    let time = time.get(11..16).unwrap_or_default().to_string();
    let text = match &r.fact {
        Fact::SpecimenOpened(o) => {
            let about = o.description.as_deref().map(|d| format!(", {d}")).unwrap_or_default();
            format!("         specimen {} opened by {}{about}", o.specimen, o.method)
        }
        Fact::IntentionSet { bench, specimen, intention } => {
            let what = match intention {
                Intention::Liquid => "liquid limit",
                Intention::Plastic => "plastic limit",
                Intention::Natural => "natural water content",
            };
            format!("{:<8} {what} of {specimen}", bench.as_str())
        }
        Fact::Counted(c) => {
            let bench = c.bench.as_ref().map_or("?", |b| b.as_str());
            let rate = c.run.as_ref().and_then(|r| r.rate_per_s).map(|r| format!(" at {r:.2}/s")).unwrap_or_default();
            let whose = c.specimen.as_ref().map_or_else(|| String::from("LOOSE"), |s| s.to_string());
            let cut =
                c.run.as_ref().and_then(|r| r.interrupted.as_ref()).map(|w| format!(" INTERRUPTED: {w}")).unwrap_or_default();
            format!("{bench:<8} cup      {:>3} drops{rate}  {whose}{cut}", c.drops)
        }
        Fact::PenetrationEntered { penetration_mm, bench, specimen } => {
            format!("{:<8} cone     {penetration_mm:>5.1} mm  {specimen}", bench.as_str())
        }
        Fact::Weighed(w) => {
            let bench = w.bench.as_ref().map_or("?", |b| b.as_str());
            match &w.link {
                Some(link) => format!("{bench:<8} {}", linked(link)),
                None => format!(
                    "{bench:<8} ?        {:>9} g  LOOSE: {}",
                    w.mass_ug.to_string(),
                    w.loose.as_deref().unwrap_or_default()
                ),
            }
        }
        Fact::WeighingTied { link, why, .. } => format!("         {}  (tied: {why})", linked(link)),
        Fact::SetAside { what, why, .. } => format!("         fact {what} set aside: {why}"),
        Fact::TrialSetAside { specimen, trial, no, why } => {
            format!("         {specimen} {} {no} set aside: {why}", format!("{trial:?}").to_lowercase())
        }
        Fact::NotObtainable { specimen, limit, because } => {
            format!("         {specimen}: {} limit not obtainable: {because}", format!("{limit:?}").to_lowercase())
        }
        Fact::IntoOven { containers, .. } => format!("         into the oven: {}", names(containers)),
        Fact::OutOfOven { containers } => format!("         out of the oven: {}", names(containers)),
        Fact::Refused { bench, says } => format!("{:<8} REFUSED: {says}", bench.as_str()),
        Fact::SliceOverdue { bench, .. } => format!("{:<8} A SLICE IS OWED: weigh it now", bench.as_str()),
        Fact::LimitsComputed { specimen, limits, .. } if limits.state != State::Provisional => {
            format!("         RESULT {specimen}: {}", short(limits))
        }
        _ => return None,
    };
    Some(format!("{time}  {text}"))
}

fn names(containers: &[tarecup_core::names::ContainerId]) -> String {
    containers.iter().map(|c| c.as_str()).collect::<Vec<_>>().join(" ")
}

fn linked(link: &Link) -> String {
    let role = match link.role {
        Role::Tare => "empty",
        Role::TareCheck => "empty again",
        Role::TareWithLid => "empty with lid",
        Role::Wet => "wet",
        Role::Repeat => "wet again",
        Role::Grown => "threads added",
        Role::Dry => "dry",
        Role::FurtherDry => "dry again",
        Role::Emptied => "emptied",
    };
    let whose = match (&link.specimen, link.trial) {
        (Some(s), Some(t)) => format!("  {s} {} {}", format!("{:?}", t.kind).to_lowercase(), t.no),
        _ => String::new(),
    };
    format!("{:<8} {:>9} g  {role}{whose}", link.container.as_str(), link.gross.to_string())
}

fn short(l: &Limits) -> String {
    let number = |v: Option<f64>| v.map_or_else(|| String::from("-"), |v| format!("{v:.2}"));
    if l.plasticity_index.non_plastic {
        return String::from("NP (non-plastic)");
    }
    if let (None, None, Some(water)) = (&l.liquid_limit, &l.plastic_limit, l.natural_water_percent) {
        return format!("natural water content {water:.2} %");
    }
    format!(
        "LL {}  PL {}  PI {}  {}",
        number(l.liquid_limit.as_ref().map(|v| v.value)),
        number(l.plastic_limit.as_ref().map(|v| v.value)),
        number(l.plasticity_index.value),
        l.group.as_deref().unwrap_or_default()
    )
}

/// The 95 % intervals of one specimen, and what they rest on; nothing where there are none.
fn intervals(l: &Limits) -> String {
    let (ll, pl) = (l.liquid_limit.as_ref(), l.plastic_limit.as_ref());
    let all =
        [("LL", ll.and_then(|v| v.interval_95)), ("PL", pl.and_then(|v| v.interval_95)), ("PI", l.plasticity_index.interval_95)];
    let told: Vec<String> =
        all.iter().filter_map(|(name, i)| i.map(|[low, high]| format!("{name} {low:.2} to {high:.2}"))).collect();
    if told.is_empty() {
        return String::new();
    }
    let from = ll.and_then(|v| v.u_from.as_deref()).or_else(|| pl.and_then(|v| v.u_from.as_deref()));
    format!("  95 %  {} {} ({})\n", l.specimen, told.join(", "), from.unwrap_or_default())
}

/// Results as a table, with what the checks say below it.
pub fn table(results: &[Limits]) -> String {
    let mut out = format!(
        "\n{:<14} {:>8} {:>5} {:>8} {:>5} {:>8} {:>5} {:>8}  {:<6} {}\n",
        "specimen", "LL", "", "PL", "", "PI", "", "slope", "group", "state"
    );
    let number = |v: Option<f64>| v.map_or_else(|| String::from("-"), |v| format!("{v:.2}"));
    let whole = |v: Option<f64>| v.map_or_else(String::new, |v| format!("({v})"));
    for l in results {
        let (ll, pl, pi) = (l.liquid_limit.as_ref(), l.plastic_limit.as_ref(), &l.plasticity_index);
        let index = if pi.non_plastic { String::from("NP") } else { number(pi.value) };
        out += &format!(
            "{:<14} {:>8} {:>5} {:>8} {:>5} {:>8} {:>5} {:>8}  {:<6} {}\n",
            l.specimen.as_str(),
            number(ll.map(|v| v.value)),
            whole(ll.map(|v| v.rounded)),
            number(pl.map(|v| v.value)),
            whole(pl.map(|v| v.rounded)),
            index,
            whole(pi.rounded),
            number(ll.and_then(|v| v.slope_per_decade)),
            l.group.as_deref().unwrap_or("-"),
            format!("{:?}", l.state).to_lowercase(),
        );
    }
    for l in results.iter() {
        if let Some(water) = l.natural_water_percent {
            out += &format!("{:<14} natural water content {water:.2}\n", l.specimen.as_str());
        }
    }
    out += "water contents in percent of dry mass; as reported in brackets\n";
    for l in results {
        out += &intervals(l);
    }
    for l in results {
        for c in l.checks.iter().filter(|c| c.answered.is_none()) {
            let mark = if c.severity == Severity::Hold { "HOLD" } else { "note" };
            out += &format!("  {mark}  {} {}: {}\n", l.specimen, c.about, c.says);
        }
    }
    out
}
