//! The oven shelf: what dries, since when, and what is ready.

use super::super::pictures::icon;
use super::super::view::{Drying, Due, Place, Shelf};
use super::super::words::{Words, fill};
use super::parts::{self, Field, Form};
use super::regions::Regions;
use super::shell::{self, Page};
use maud::{Markup, html};

/// The page.
pub fn page(view: &Shelf, w: &Words) -> Markup {
    let page = Page { name: "shelf", events: Some(String::from("page=shelf")), title: w.way_shelf.into(), class: "at-shelf" };
    let main = html! {
        (parts::caution(w.caution_hot))
        (parts::caution(w.caution_dust))
        (shell::region("all", &all(view, w)))
        (shell::spoken("shelf", &rows(view, w)))
        (shell::region("outage", &outage(view, w)))
    };
    shell::document(&page, &view.frame, shell::plain_strip(w.way_shelf, &view.frame, w), main, w)
}

/// Its regions.
pub fn regions(view: &Shelf, w: &Words) -> Regions {
    let mut all_of = shell::frame_regions(&view.frame, view.frame.who.as_deref(), w);
    all_of.extend([("all", all(view, w)), ("shelf", rows(view, w)), ("outage", outage(view, w))]);
    all_of
}

fn celsius(view: &Shelf) -> String {
    parts::decimals(view.celsius, 0)
}

/// Everything that waits goes in at one touch, everything that is ready comes out.
fn all(view: &Shelf, w: &Words) -> Markup {
    let at = |keep: &dyn Fn(&Drying) -> bool| -> Vec<&str> {
        view.rows.iter().filter(|r| keep(r)).map(|r| r.container.as_str()).collect()
    };
    let (wet, ready) = (at(&|r| r.place == Place::Wet), at(&|r| r.place == Place::In && r.due != Due::NotYet));
    html! {
        div.row {
            @if wet.len() > 1 {
                (Form::new(&view.frame, "into_oven").list("containers", &wet).number("celsius", celsius(view)).around(html! {
                    button.key.wide type="submit" { (icon("oven")) span { (fill(w.all_in, &[&wet.len().to_string(), &celsius(view)])) } }
                }))
            }
            @if ready.len() > 1 {
                (Form::new(&view.frame, "out_of_oven").list("containers", &ready).around(html! {
                    button.key.wide type="submit" { (icon("take-off")) span { (fill(w.all_out, &[&ready.len().to_string()])) } }
                }))
            }
        }
    }
}

fn rows(view: &Shelf, w: &Words) -> Markup {
    html! {
        @if view.rows.is_empty() { p.note { (w.shelf_empty) } }
        ul.shelf { @for row in &view.rows { (one(row, view, w)) } }
    }
}

fn one(row: &Drying, view: &Shelf, w: &Words) -> Markup {
    let (due, shape, text) = match (row.due, row.place) {
        (Due::Overdue, _) => ("overdue", "alarm", w.due_overdue),
        (Due::Ready, _) => ("ready", "check", w.due_ready),
        (Due::NotYet, Place::Wet) => ("wet", "water", w.place_wet),
        (Due::NotYet, Place::In) => ("in", "oven", w.due_not_yet),
        (Due::NotYet, Place::Out) => ("out", "take-off", w.place_out),
        (Due::NotYet, Place::Drying) => ("drying", "stale", w.place_drying),
        (Due::NotYet, Place::Dry) => ("dry", "check", w.place_dry),
    };
    html! {
        li.shelf-row data-due=(due) {
            strong.tin { (row.container) }
            span { a href=(format!("/specimen/{}", row.specimen)) { (row.specimen) } " " span.about { (parts::trial_name(row.kind, row.no, w)) } }
            span.state data-state=(due) { (icon(shape)) span { (text) } }
            span.about { (times(row, w)) }
            (action(row, view, w))
        }
    }
}

fn times(row: &Drying, w: &Words) -> Markup {
    let hours = fill(w.hours_of, &[&row.hours.to_string(), &parts::decimals(row.hours_wanted, 0)]);
    html! {
        @if let Some(since) = &row.since {
            (match row.place { Place::In => w.in_since, Place::Wet => w.wet_since, _ => w.out_since }) " " (parts::day_and_time(since, w)) ". "
        }
        @if row.place != Place::Wet { (hours) " " }
        @if !row.recorded && row.place != Place::Wet { (icon("caution")) " " (w.oven_not_recorded) " " }
        @if row.due == Due::NotYet && row.place == Place::In {
            @if let Some(ready) = &row.ready_at { (w.ready_at) " " (parts::day_and_time(ready, w)) }
        }
    }
}

fn action(row: &Drying, view: &Shelf, w: &Words) -> Markup {
    let one = [row.container.as_str()];
    match row.place {
        Place::In => Form::new(&view.frame, "out_of_oven").list("containers", &one).around(html! {
            button.key type="submit" aria-label=(fill(w.take_out_of, &[&row.container])) { (icon("take-off")) span { (w.take_out) } }
        }),
        Place::Dry => html! {},
        Place::Wet | Place::Out | Place::Drying => {
            Form::new(&view.frame, "into_oven").list("containers", &one).number("celsius", celsius(view)).around(html! {
                button.key type="submit" aria-label=(fill(w.put_in_of, &[&row.container, &celsius(view)])) { (icon("oven")) span { (fill(w.put_in, &[&celsius(view)])) } }
            })
        }
    }
}

/// The oven was off: time that did not dry.
fn outage(view: &Shelf, w: &Words) -> Markup {
    html! {
        h2 { (w.oven) }
        form.row method="get" action="/shelf" {
            (Field { id: "celsius", name: "celsius", label: w.celsius, kind: "number", mode: "numeric", value: &celsius(view), required: true }.draw(w))
            button.key type="submit" { (icon("check")) span { (w.set_celsius) } }
            @if let Some([from, to]) = view.celsius_wanted { p.about { (fill(w.celsius_wanted, &[&from.to_string(), &to.to_string()])) } }
        }
        @if let Some(since) = &view.off_since { (on_again(view, since, w)) }
        @else if view.holds_outage {
            (Form::new(&view.frame, "oven_off").with("from", "now").with("who", view.frame.who.clone().unwrap_or_default()).with("why", w.why_oven_off).around(html! {
                button.key.wide type="submit" { (icon("no")) span { (w.oven_off_now) } }
            }))
        }
        (parts::sheet("oven-off", "key", html! { (icon("no")) span { (w.oven_was_off) } }, w.oven_was_off, was_off(view, w), w))
    }
}

fn on_again(view: &Shelf, since: &str, w: &Words) -> Markup {
    let form = Form::new(&view.frame, "oven_off").with("from", since).with("to", "now");
    form.with("who", view.frame.who.clone().unwrap_or_default()).with("why", w.why_oven_off).class("row call").around(html! {
        (icon("alarm")) p { strong { (w.oven_is_off) } " " (parts::day_and_time(since, w)) }
        button.key.primary type="submit" { (icon("oven")) span { (w.oven_on_again) } }
    })
}

fn was_off(view: &Shelf, w: &Words) -> Markup {
    Form::new(&view.frame, "oven_off").class("panel").around(html! {
        p { (w.oven_off_says) }
        div.row {
            @for (id, name, label) in [("off-from", "from", w.from), ("off-to", "to", w.to)] {
                div.field { label for=(id) { (label) } input id=(id) name=(name) type="datetime-local" step="60" data-type="time" required; }
            }
        }
        (parts::who_and_why(&view.frame, "off", ("why", w.why), &[w.why_oven_off, w.why_power, w.why_door], w))
        button.key.confirm type="submit" { (icon("check")) span { (w.record_oven_off) } }
    })
}
