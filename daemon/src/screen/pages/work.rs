//! The specimen in work: its trials and the growing flow line.

use super::super::pictures::{flow_line, icon};
use super::super::view::{Bench, Figure, Kind, Results, Trial, Weighed};
use super::super::words::{Words, fill};
use super::parts;
use maud::{Markup, html};

/// The specimen in work at a bench.
pub fn work(view: &Bench, w: &Words) -> Markup {
    let Some(work) = &view.work else {
        return html! { h2 { (w.specimen_in_work) } p.note { (w.no_specimen_in_work) } };
    };
    let done = |kind: Kind| work.trials.iter().filter(|t| t.kind == kind && t.set_aside.is_none()).count();
    let liquid = fill(w.so_many_of, &[&done(Kind::Liquid).to_string(), &work.liquid_wanted.to_string()]);
    let threads = fill(w.so_many_of, &[&done(Kind::Thread).to_string(), &work.threads_wanted.to_string()]);
    html! {
        h2 { a href=(format!("/specimen/{}", work.specimen)) { (work.specimen) } @if let Some(about) = &work.description { span.about { (about) } } }
        p.progress {
            span { (w.liquid_trials) " " strong { (liquid) } }
            span { (w.threads) " " strong { (threads) } }
            (short_results(&work.results, w))
        }
        @if work.trials.is_empty() { p.note { (w.no_trials) } } @else { (brief(&work.trials, w)) }
        @if done(Kind::Liquid) > 0 || !work.flow.points.is_empty() || !work.flow.waiting.is_empty() {
            figure { (flow_line(&work.specimen, &work.flow, w)) }
        }
    }
}

fn short_results(results: &Results, w: &Words) -> Markup {
    html! {
        @if let Some(ll) = &results.liquid { span { (w.ll) " " strong { (parts::number(&ll.rounded)) } } }
        @if let Some(pl) = &results.plastic { span { (w.pl) " " strong { (parts::number(&pl.rounded)) } } }
        @if results.non_plastic { span { strong { (w.np) } } }
        @else if let Some(pi) = &results.index { span { (w.pi) " " strong { (parts::number(&pi.rounded)) } } }
    }
}

/// Trials without their history, narrow enough for the bench.
fn brief(trials: &[Trial], w: &Words) -> Markup {
    html! {
        table.trials {
            thead { tr { th { (w.trial) } th.num { (w.drops_head) } th { (w.container) } th.num { (w.wet_g) } th.num { (w.dry_g) } th.num { (w.water) } } }
            tbody {
                @for t in trials {
                    tr.aside[t.set_aside.is_some()] {
                        th scope="row" { (parts::trial_name(t.kind, t.no, w)) (parts::typed(t.typed, w)) @if t.set_aside.is_some() { span.state { (icon("no")) (w.set_aside) } } }
                        td.num { (drops(t)) }
                        td { @if let Some(c) = &t.container { (c) } }
                        td.num { (mass(t.wet.as_ref())) }
                        td.num { (mass(t.dry.as_ref())) @if t.dry.is_none() { span.wait { (w.waits_for_oven) } } }
                        td.num { @if let Some(water) = t.water_percent { (parts::number(&parts::decimals(water, 1))) } }
                    }
                }
            }
        }
    }
}

fn drops(trial: &Trial) -> Markup {
    let all: Vec<String> = trial.drops.iter().map(|(d, _)| d.to_string()).collect();
    html! { (all.join(", ")) }
}

fn mass(weighed: Option<&Weighed>) -> Markup {
    html! { @if let Some(m) = weighed { (parts::number(&m.mass_g)) } }
}

/// A limit as it is reported, with what lies behind it.
pub fn figure(name: &str, figure: Option<&Figure>, none: &str, w: &Words) -> Markup {
    html! {
        div.figure {
            dt { (name) }
            dd {
                @match figure {
                    Some(f) => {
                        strong { (parts::number(&f.rounded)) }
                        span.about { (parts::number(&parts::decimals(f.value, 2))) @if let Some(u) = f.u { " ± " (parts::number(&parts::decimals(u, 2))) " " (w.standard_uncertainty) } }
                    }
                    None => { span.about { (none) } }
                }
            }
        }
    }
}
