//! Corrections. The first tap opens a sheet, the second one, elsewhere, records: who and why are asked,
//! and what stood in the record stays visible.

use super::super::pictures::icon;
use super::super::view::{Correction, Frame, SpecimenKey, Subject, What};
use super::super::words::{ROLES, Words, fill};
use super::loose::{origin, subject_line};
use super::parts::{self, Field, Form};
use super::shell::{self, Page};
use super::specimen::changes;
use maud::{Markup, html};

/// What can be chosen in a correction.
pub struct Choices<'a> {
    /// The frame.
    pub frame: &'a Frame,
    /// Open specimens.
    pub specimens: &'a [SpecimenKey],
    /// Containers.
    pub containers: &'a [String],
}

/// The page of one correction.
pub fn page(view: &Correction, w: &Words) -> Markup {
    let page = Page { name: "correct", events: None, title: w.correct_title.into(), class: "at-correct" };
    let s = &view.subject;
    let choices = Choices { frame: &view.frame, specimens: &view.specimens, containers: &view.containers };
    let open = |id: &str, shape: &str, text: &str, inside: Markup| {
        parts::sheet(id, "key", html! { (icon(shape)) span { (text) } }, text, inside, w)
    };
    let main = html! {
        section.stands {
            h2 { (subject_line(s, w)) }
            p { (place(s, w)) }
            p.about { (origin(s, w)) }
            @if let Some(why) = &s.set_aside { p { span.state { (icon("no")) (w.set_aside) } " " (why) } }
            @if !s.before.is_empty() { h3 { (w.before) } (changes(&s.before, w)) }
        }
        p { (w.correct_says) }
        div.row {
            @match &s.what {
                What::Weighing { .. } => {
                    (open("tie", "tin", w.wrong_container_or_role, tie(s, &choices, w)))
                    (open("amend", "hand", w.wrong_mass, amend(s, &choices, w)))
                }
                What::Count { .. } => {
                    (open("tie", "list", w.wrong_specimen, tie(s, &choices, w)))
                    (open("amend", "hand", w.wrong_drops, amend(s, &choices, w)))
                }
                What::Trial => {}
            }
            (open("aside", "no", w.set_aside_do, set_aside(s, &choices, w)))
        }
        div.row { (shell::back(&view.then, w.leave_unchanged)) }
    };
    shell::document(&page, &view.frame, shell::plain_strip(w.correct_title, &view.frame, w), main, w)
}

fn place(s: &Subject, w: &Words) -> Markup {
    html! {
        @if let Some(container) = &s.container { (w.container) " " strong { (container) } " " }
        @if let Some(role) = &s.role { strong { (w.role(role)) } " " }
        @if let Some(specimen) = &s.specimen { a href=(format!("/specimen/{specimen}")) { (specimen) } " " }
        @if !matches!(s.what, What::Trial) && let Some((kind, no)) = s.trial { (parts::trial_name(kind, no, w)) }
    }
}

fn confirm(text: &str, of: &Subject, w: &Words) -> Markup {
    html! {
        div.confirm-row {
            p.about { (w.original_stays) " " (subject_line(of, w)) }
            button.key.confirm type="submit" { (icon("check")) span { (text) } }
        }
    }
}

/// The benches a tie may name; the one of the subject first.
fn bench_choice(s: &Subject, c: &Choices, id: &str, w: &Words) -> Markup {
    let here = s.bench.as_deref().or(c.frame.bench.as_deref()).or(c.frame.benches.first().map(String::as_str));
    html! {
        @if c.frame.benches.len() > 1 {
            fieldset.radios {
                legend { (w.bench) }
                @for bench in &c.frame.benches {
                    label.radio { input type="radio" name="bench" value=(bench) checked[here == Some(bench.as_str())]; span { (bench) } }
                }
            }
        } @else { input type="hidden" id=(format!("{id}-bench")) name="bench" value=(here.unwrap_or("")); }
    }
}

/// Ties a weighing to a container and role, or a count to a specimen.
pub fn tie(s: &Subject, c: &Choices, w: &Words) -> Markup {
    let id = format!("tie-{}", s.seq);
    match s.what {
        What::Count { .. } => Form::new(c.frame, "tie_count").number("count", s.seq).class("panel").around(html! {
            (bench_choice(s, c, &id, w))
            fieldset.radios {
                legend { (w.specimen) }
                @for one in c.specimens {
                    label.radio { input type="radio" name="specimen" value=(one.id) required checked[s.specimen.as_ref() == Some(&one.id)]; span { (one.id) } }
                }
            }
            @if c.specimens.is_empty() { p.note { (w.no_specimen_open) } }
            (parts::who_and_why(c.frame, &id, ("why", w.why), &[w.why_other_specimen, w.why_nothing_in_work], w))
            (confirm(w.record_tie, s, w))
        }),
        _ => Form::new(c.frame, "tie").number("weighing", s.seq).class("panel").around(html! {
            (bench_choice(s, c, &id, w))
            (container_choice(s, c, &id, w))
            fieldset.radios {
                legend { (w.role_label) }
                @for role in ROLES {
                    label.radio { input type="radio" name="role" value=(role) required checked[s.role.as_deref() == Some(role)]; span { (w.role(role)) } }
                }
            }
            (parts::who_and_why(c.frame, &id, ("why", w.why), &[w.why_wrong_code, w.why_no_code, w.why_other_role], w))
            (confirm(w.record_tie, s, w))
        }),
    }
}

fn container_choice(s: &Subject, c: &Choices, id: &str, w: &Words) -> Markup {
    let field = format!("{id}-container");
    let value = s.container.as_deref().unwrap_or("");
    html! {
        (Field { id: &field, name: "container", label: w.container, kind: "text", mode: "text", value, required: true }.draw(w))
        (parts::offers(&field, w.choose_container, c.containers.iter().map(String::as_str)))
    }
}

/// Sets a weighing, count or determination aside.
pub fn set_aside(s: &Subject, c: &Choices, w: &Words) -> Markup {
    let id = format!("aside-{}", s.seq);
    let form = match (&s.what, s.trial) {
        (What::Trial, Some((kind, no))) => Form::new(c.frame, "set_aside_trial")
            .with("specimen", s.specimen.clone().unwrap_or_default())
            .with("kind", parts::kind_word(kind))
            .number("no", no),
        _ => Form::new(c.frame, "set_aside").number("what", s.seq),
    };
    form.class("panel").around(html! {
        p { (w.set_aside_says) }
        (parts::who_and_why(c.frame, &id, ("why", w.why), &[w.why_not_zero, w.why_warm, w.why_spilled, w.why_try_out], w))
        (confirm(w.record_set_aside, s, w))
    })
}

/// Corrects a mass or a number of drops.
pub fn amend(s: &Subject, c: &Choices, w: &Words) -> Markup {
    let id = format!("amend-{}", s.seq);
    let value = format!("{id}-value");
    let (form, field, was) = match &s.what {
        What::Count { drops } => (
            Form::new(c.frame, "amend_drops").number("count", s.seq),
            Field {
                id: &value,
                name: "drops",
                label: w.drops_counted,
                kind: "number",
                mode: "numeric",
                value: "",
                required: true,
            },
            fill(w.was, &[&drops.to_string()]),
        ),
        What::Weighing { mass_g } => (
            Form::new(c.frame, "amend_mass").number("weighing", s.seq),
            Field {
                id: &value,
                name: "mass_g",
                label: w.mass_in_grams,
                kind: "text",
                mode: "decimal",
                value: "",
                required: true,
            },
            fill(w.was, &[mass_g]),
        ),
        What::Trial => return html! {},
    };
    form.class("panel").around(html! {
        p { (was) }
        (field.draw(w))
        (parts::who_and_why(c.frame, &id, ("why", w.why), &[w.why_misread, w.why_display], w))
        (confirm(w.record_correction, s, w))
    })
}
