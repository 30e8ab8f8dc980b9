//! A specimen's page; printed, it is the sheet that goes into the file.

use super::super::pictures::{flow_line, icon, plasticity_chart};
use super::super::view::{Change, Check, Head, SpecimenPage, Trial, Weighed};
use super::super::words::{Words, fill};
use super::parts::{self, Field, Form};
use super::regions::Regions;
use super::shell::{self, Page};
use super::work::figure;
use maud::{Markup, html};

/// The page.
pub fn page(view: &SpecimenPage, w: &Words) -> Markup {
    let title = fill(w.specimen_title, &[&view.id]);
    let page =
        Page { name: "specimen", events: Some(format!("specimen={}", view.id)), title: title.clone(), class: "at-specimen" };
    let main = html! {
        (shell::region("about", &about(view, w)))
        (shell::region("results", &results(view, w)))
        (shell::region("checks", &checks(view, w)))
        (shell::region("trials", &trials(view, w)))
        (shell::region("pictures", &pictures(view, w)))
        (shell::region("review", &review(view, w)))
        (shell::region("history", &history(view, w)))
        (shell::region("head", &head(view, w)))
    };
    shell::document(&page, &view.frame, shell::plain_strip(&title, &view.frame, w), main, w)
}

/// Its regions.
pub fn regions(view: &SpecimenPage, w: &Words) -> Regions {
    let mut all = shell::frame_regions(&view.frame, view.frame.who.as_deref(), w);
    all.extend([
        ("about", about(view, w)),
        ("results", results(view, w)),
        ("checks", checks(view, w)),
        ("trials", trials(view, w)),
        ("pictures", pictures(view, w)),
        ("review", review(view, w)),
        ("history", history(view, w)),
        ("head", head(view, w)),
    ]);
    all
}

fn about(view: &SpecimenPage, w: &Words) -> Markup {
    html! {
        div.about-row {
            div {
                @if let Some(text) = &view.description { p.lead { (text) } }
                p.about {
                    (view.method) ", " (view.edition) ". "
                    @if let Some(text) = &view.preparation { (text) ". " }
                    (w.opened) " " (parts::dated(&view.opened, w))
                }
            }
            p.standing-of {
                span.state data-state=(view.state) { (icon(shape(&view.state))) strong { (w.result_state(&view.state)) } }
                @if let Some(who) = &view.reviewed_by { " " (fill(w.by_person, &[who])) }
                " " span.about { (fill(w.revision, &[&view.revision.to_string()])) }
            }
            button.key.print type="button" data-print hidden { (icon("list")) span { (w.print) } }
        }
    }
}

fn shape(state: &str) -> &'static str {
    match state {
        "complete" | "reviewed" => "check",
        _ => "stale",
    }
}

fn results(view: &SpecimenPage, w: &Words) -> Markup {
    let r = &view.results;
    let none = |why: &Option<String>| match why {
        Some(why) => fill(w.not_obtainable_because, &[why]),
        None => String::from(w.not_yet),
    };
    html! {
        dl.figures {
            (figure(w.liquid_limit, r.liquid.as_ref(), &none(&r.liquid_not_obtainable), w))
            (figure(w.plastic_limit, r.plastic.as_ref(), &none(&r.plastic_not_obtainable), w))
            (figure(w.plasticity_index, r.index.as_ref().filter(|_| !r.non_plastic), if r.non_plastic { w.non_plastic } else { w.not_yet }, w))
            div.figure { dt { (w.group) } dd { @match &r.group { Some(g) => { strong { (g) } } None => { span.about { (w.not_yet) } } } } }
            @for (name, value) in [(w.natural_water, r.natural_percent), (w.liquidity, r.liquidity), (w.consistency, r.consistency), (w.flow_index, r.flow), (w.activity, r.activity)] {
                @if let Some(value) = value { div.figure.small { dt { (name) } dd { strong { (parts::number(&parts::decimals(value, 2))) } } } }
            }
        }
        p.about { (w.index_values) }
    }
}

fn checks(view: &SpecimenPage, w: &Words) -> Markup {
    html! {
        h2 { (w.checks) }
        @if view.checks.is_empty() { p.note { (icon("check")) (w.no_checks) } }
        ul.checks { @for (i, check) in view.checks.iter().enumerate() { (one_check(view, i, check, w)) } }
    }
}

fn one_check(view: &SpecimenPage, i: usize, check: &Check, w: &Words) -> Markup {
    let open = check.hold && check.answered.is_none();
    let (id, says) = (format!("check-{i}"), format!("check-{i}-says"));
    html! {
        li.open-hold[open] {
            span.state data-state=(if open { "hold" } else { "note" }) { (icon(if open { "alarm" } else { "live" })) span { (if check.hold { w.hold } else { w.note }) } }
            div {
                p { strong { (check.about) } ": " (check.says) }
                @if let Some(answer) = &check.answered { p { (w.answered) " " q { (answer) } } }
            }
            @if check.hold {
                (parts::sheet(&id, "key", html! { (icon("hand")) span { (if open { w.answer } else { w.answer_again }) } }, w.answer,
                    Form::new(&view.frame, "answer_check").with("specimen", view.id.as_str()).with("check", check.check.as_str()).with("about", check.about.as_str()).class("panel").around(html! {
                        p { strong { (check.about) } ": " (check.says) }
                        (Field { id: &says, name: "says", label: w.your_answer, kind: "text", mode: "text", value: "", required: true }.draw(w))
                        (parts::offers(&says, w.usual_reasons, [w.why_looked, w.why_repeated, w.why_soil]))
                        (parts::who(&view.frame, &id, w))
                        button.key.confirm type="submit" { (icon("check")) span { (w.record_answer) } }
                    }), w))
            }
        }
    }
}

fn trials(view: &SpecimenPage, w: &Words) -> Markup {
    html! {
        h2 { (w.trials) }
        @if view.trials.is_empty() { p.note { (w.no_trials) } } @else {
            div.wide-table tabindex="0" role="region" aria-label=(w.trials) {
                table.trials {
                    thead { tr {
                        th { (w.trial) } th.num { (w.drops_head) } th.num { (w.rate) } th { (w.container) } th.num { (w.tare_g) } th.num { (w.wet_g) }
                        th.num { (w.dry_g) } th.num { (w.water) } th { (w.used_head) } th.no-print { (w.correct) }
                    } }
                    tbody { @for t in &view.trials { (trial(view, t, w)) } }
                }
            }
        }
        @if !view.other_counts.is_empty() {
            h3 { (w.other_counts) }
            ul.plain {
                @for count in &view.other_counts {
                    li { a href=(format!("/correct/{}", count.seq)) { (count.drops) " " (w.drops) } ", " (parts::moment(&count.at, w)) ": " (count.why) }
                }
            }
        }
    }
}

fn trial(view: &SpecimenPage, t: &Trial, w: &Words) -> Markup {
    let correct = format!("/correct/{}/{}/{}", view.id, parts::kind_word(t.kind), t.no);
    html! {
        tr.aside[t.set_aside.is_some()] {
            th scope="row" { (parts::trial_name(t.kind, t.no, w)) (parts::typed(t.typed, w)) }
            td.num { @for (i, (drops, seq)) in t.drops.iter().enumerate() { @if i > 0 { ", " } a href=(format!("/correct/{seq}")) { (drops) } } }
            td.num { @if let Some(rate) = t.rate_per_s { (parts::number(&parts::decimals(rate, 2))) } }
            td { @if let Some(c) = &t.container { (c) } }
            td.num { (mass(t.tare.as_ref(), w.tare_owed)) }
            td.num { (mass(t.wet.as_ref(), "")) }
            td.num { (mass(t.dry.as_ref(), w.waits_for_oven)) }
            td.num { @if let Some(water) = t.water_percent { (parts::number(&parts::decimals(water, 2))) } }
            td {
                @match &t.set_aside {
                    Some(why) => { span.state { (icon("no")) (w.set_aside) } " " (why) }
                    None => { @if t.used { span.state { (icon("check")) (w.used) } } @else { (w.not_used) } }
                }
                @if let Some(by) = &t.by { " " span.about { (by) } }
            }
            td.no-print { @if t.set_aside.is_none() { a.key href=(correct) aria-label=(format!("{} {}", w.set_aside_do, parts::trial_name(t.kind, t.no, w))) { (icon("no")) } } }
        }
    }
}

fn mass(weighed: Option<&Weighed>, none: &str) -> Markup {
    html! {
        @match weighed {
            Some(m) => { a href=(format!("/correct/{}", m.seq)) { (parts::number(&m.mass_g)) } @if m.typed { (icon("hand")) } }
            None => { span.wait { (none) } }
        }
    }
}

fn pictures(view: &SpecimenPage, w: &Words) -> Markup {
    html! {
        div.picture-row {
            figure {
                (flow_line(&view.id, &view.flow, w))
                figcaption { (w.flow_caption) @if view.flow.fit.as_ref().is_some_and(|f| !f.band.is_empty()) { " " (w.flow_band) } }
            }
            figure { (plasticity_chart(&view.id, &view.chart, w)) figcaption { (fill(w.chart_caption, &[&view.chart.others.len().to_string()])) } }
        }
    }
}

fn review(view: &SpecimenPage, w: &Words) -> Markup {
    if view.state != "complete" {
        return html! { p.about.no-print { (if view.state == "reviewed" { w.reviewed_says } else { w.review_not_yet }) } };
    }
    let key = html! { (icon("check")) span { (w.review) } };
    parts::sheet(
        "review",
        "key primary",
        key,
        w.review,
        Form::new(&view.frame, "review").with("specimen", view.id.as_str()).class("panel").around(html! {
            p { (w.review_says) }
            (parts::who(&view.frame, "review", w))
            button.key.confirm type="submit" { (icon("check")) span { (w.record_review) } }
        }),
        w,
    )
}

fn history(view: &SpecimenPage, w: &Words) -> Markup {
    html! { h2 { (w.history) } @if view.history.is_empty() { p.note { (w.no_history) } } @else { (changes(&view.history, w)) } }
}

/// Changes in order, corrections marked.
pub fn changes(all: &[Change], w: &Words) -> Markup {
    html! {
        ol.history {
            @for c in all {
                li.correction[c.correction] {
                    span.when { (parts::dated(&c.at, w)) }
                    span {
                        @if c.correction { span.state { (icon("hand")) (w.correction) } " " }
                        (c.what)
                        @if let Some(was) = &c.was { " " del { (was) } }
                        @if let Some(is) = &c.is { " " ins { (is) } }
                        @if let Some(why) = &c.why { " " q { (why) } }
                    }
                    span.about { @if let Some(who) = &c.who { (who) } " " (fill(w.fact_no, &[&c.seq.to_string()])) }
                }
            }
        }
    }
}

/// The head of the ledger in a form that can be read out and compared.
fn head(view: &SpecimenPage, w: &Words) -> Markup {
    html! {
        @if let Some(head) = &view.head {
            footer.head { (w.ledger_head) " " strong.code { (short_code(head)) } " " (parts::dated(&head.at, w)) " " (view.frame.lab) ", " (view.frame.station) }
        }
    }
}

/// `1-412-3f2a-9c81-77d0`: epoch, last fact, the first twelve figures of its hash.
pub fn short_code(head: &Head) -> String {
    let figures: String = head.hash.chars().filter(char::is_ascii_hexdigit).take(12).collect();
    let groups: Vec<&str> = [0..4, 4..8, 8..12].into_iter().filter_map(|r| figures.get(r)).collect();
    format!("{}-{}-{}", head.epoch, head.seq, groups.join("-"))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_short_code_names_fact_and_hash() {
        let head = |hash: &str| Head { epoch: 1, seq: 412, hash: hash.into(), at: String::new() };
        assert_eq!(short_code(&head("3f2a9c8177d0ffff")), "1-412-3f2a-9c81-77d0");
        assert_eq!(short_code(&head("<b>")), "1-412-");
    }
}
