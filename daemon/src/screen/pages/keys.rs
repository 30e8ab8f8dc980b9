//! The big keys of the bench: the few intentions, and what only a person sees.

use super::super::pictures::icon;
use super::super::view::Bench;
use super::super::words::Words;
use super::bench::by_hand;
use super::parts::{self, Form};
use maud::{Markup, html};

/// All keys. Those that mean nothing now say why instead of vanishing: a key keeps its place.
pub fn keys(view: &Bench, w: &Words) -> Markup {
    html! {
        div.keys role="group" aria-label=(w.intentions) {
            @for (word, shape, text) in [("liquid", "cup", w.key_liquid), ("plastic", "thread", w.key_plastic), ("natural", "water", w.key_natural)] {
                (intention(view, word, shape, text, w))
            }
            (parts::sheet("pick-specimen", "key", face("list", w.key_specimen), w.choose_specimen, specimens(view, w), w))
            (parts::sheet("pick-container", "key", face("tin", w.key_container), w.choose_container, containers(view, w), w))
        }
        div.keys role="group" aria-label=(w.person_sees) {
            @for (ask, why, shape, text) in [("slid", w.why_slid, "slid", w.key_slid), ("groove_tore", w.why_tore, "tore", w.key_tore), ("new_paste", w.why_new_paste, "paste", w.key_new_paste)] {
                (Form::new(&view.frame, ask).at(&view.name).with("why", why).around(html! {
                    button.key type="submit" disabled[view.owed.is_none()] title=[view.owed.is_none().then_some(w.after_a_count)] { (face(shape, text)) }
                }))
            }
            (parts::sheet("not-obtainable", "key", face("no", w.key_not_obtainable), w.not_obtainable_title, not_obtainable(view, w), w))
            (parts::sheet("by-hand", "key", face("hand", w.key_by_hand), w.by_hand_title, by_hand(view, w), w))
        }
    }
}

fn face(shape: &str, text: &str) -> Markup {
    html! { (icon(shape)) span { (text) } }
}

fn intention(view: &Bench, word: &str, shape: &str, text: &str, w: &Words) -> Markup {
    let work = view.work.as_ref();
    let on = work.is_some_and(|k| k.intention == word);
    let specimen = work.map_or("", |k| k.specimen.as_str());
    Form::new(&view.frame, "intend").at(&view.name).with("specimen", specimen).with("intention", word).around(html! {
        button.key type="submit" aria-pressed=(on) disabled[work.is_none()] title=[work.is_none().then_some(w.specimen_first)] {
            (face(shape, text))
            @if on { span.pressed { (icon("check")) (w.in_work) } }
        }
    })
}

fn specimens(view: &Bench, w: &Words) -> Markup {
    html! {
        @if view.specimens.is_empty() { p.note { (w.no_specimen_open) } }
        div.choices {
            (Form::new(&view.frame, "code").at(&view.name).around(html! {
                @for one in &view.specimens {
                    button.key type="submit" name="text" value=(one.id) aria-pressed=(one.chosen) {
                        span { strong { (one.id) } @if let Some(about) = &one.description { " " span.about { (about) } } }
                    }
                }
            }))
            a.key href="/laboratory#open-specimen" { (icon("list")) span { (w.open_another) } }
        }
    }
}

fn containers(view: &Bench, w: &Words) -> Markup {
    html! {
        p { (w.choose_container_says) }
        (parts::caution(w.caution_hot))
        div.choices {
            (Form::new(&view.frame, "code").at(&view.name).around(html! {
                @for one in &view.containers {
                    button.key type="submit" name="text" value=(one.id) { span { strong { (one.id) } " " span.about { (w.standing(&one.standing)) } } }
                }
            }))
        }
        @if view.containers.is_empty() { p.note { (w.no_containers) } }
    }
}

fn not_obtainable(view: &Bench, w: &Words) -> Markup {
    let Some(work) = &view.work else { return html! { p.note { (w.specimen_first) } } };
    let limit = if work.intention == "plastic" { "plastic" } else { "liquid" };
    Form::new(&view.frame, "not_obtainable").with("specimen", work.specimen.as_str()).class("panel").around(html! {
        p { strong { (work.specimen) } }
        fieldset.radios {
            legend { (w.which_limit) }
            @for (word, text) in [("liquid", w.liquid_limit), ("plastic", w.plastic_limit)] {
                label.radio { input type="radio" name="limit" value=(word) checked[word == limit]; span { (text) } }
            }
        }
        (parts::who_and_why(&view.frame, "no-limit", ("because", w.why), &[w.why_crumbles, w.why_slides, w.why_too_fast], w))
        button.key.confirm type="submit" { (icon("check")) span { (w.record_not_obtainable) } }
    })
}
