//! Weighings and counts tied to nothing, with the balance around them.

use super::super::pictures::{icon, trace};
use super::super::view::{LoosePage, LooseThing, Subject, What};
use super::super::words::{Words, fill};
use super::correct::{self, Choices};
use super::parts;
use super::regions::Regions;
use super::shell::{self, Page};
use maud::{Markup, html};

/// The page.
pub fn page(view: &LoosePage, w: &Words) -> Markup {
    let page = Page { name: "loose", events: Some(String::from("page=loose")), title: w.way_loose.into(), class: "at-loose" };
    let main = html! {
        p { (w.loose_says) }
        (shell::spoken("things", &things(view, w)))
    };
    shell::document(&page, &view.frame, shell::plain_strip(w.loose_title, &view.frame, w), main, w)
}

/// Its regions.
pub fn regions(view: &LoosePage, w: &Words) -> Regions {
    let mut all = shell::frame_regions(&view.frame, view.frame.who.as_deref(), w);
    all.push(("things", things(view, w)));
    all
}

fn things(view: &LoosePage, w: &Words) -> Markup {
    html! {
        @if view.things.is_empty() { p.note { (icon("check")) (w.nothing_loose) } }
        @for thing in &view.things { (one(thing, view, w)) }
    }
}

fn one(thing: &LooseThing, view: &LoosePage, w: &Words) -> Markup {
    let choices = Choices { frame: &view.frame, specimens: &view.specimens, containers: &view.containers };
    let id = format!("loose-{}", thing.subject.seq);
    html! {
        article.loose-thing id=(id) {
            div {
                h2 { (subject_line(&thing.subject, w)) }
                p.attention { (thing.why) }
                p.about { (origin(&thing.subject, w)) }
            }
            @if let Some(t) = &thing.trace { figure { (trace(t, w)) figcaption { (w.trace_caption) } } }
            div.row {
                (parts::sheet(&format!("{id}-tie"), "key", html! { (icon("loose")) span { (w.tie) } }, w.tie, correct::tie(&thing.subject, &choices, w), w))
                (parts::sheet(&format!("{id}-aside"), "key", html! { (icon("no")) span { (w.set_aside_do) } }, w.set_aside_do, correct::set_aside(&thing.subject, &choices, w), w))
            }
        }
    }
}

/// What a subject is, in one line.
pub fn subject_line(subject: &Subject, w: &Words) -> Markup {
    html! {
        @match &subject.what {
            What::Weighing { mass_g } => { (w.weighing) " " (parts::grams(mass_g, w)) }
            What::Count { drops } => { (w.count) " " (drops) " " (w.drops) }
            What::Trial => { @if let Some((kind, no)) = subject.trial { (parts::trial_name(kind, no, w)) } }
        }
        (parts::typed(subject.typed, w))
    }
}

/// When, where, by which instrument, who.
pub fn origin(subject: &Subject, w: &Words) -> Markup {
    html! {
        @if !subject.at.is_empty() { (parts::dated(&subject.at, w)) " " }
        @if let Some(instrument) = &subject.instrument { (fill(w.by_instrument, &[instrument])) " " }
        @if let Some(bench) = &subject.bench { (fill(w.at_bench, &[bench])) " " }
        @match &subject.by { Some(by) => { (fill(w.by_person, &[by])) } None => { (w.by_nobody) } }
        @if subject.seq > 0 { " " (fill(w.fact_no, &[&subject.seq.to_string()])) }
    }
}
