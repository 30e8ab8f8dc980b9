//! The laboratory at a glance.

use super::super::pictures::icon;
use super::super::view::{ContainerRow, DueCheck, InstrumentRow, Laboratory, SpecimenRow};
use super::super::words::{Words, fill};
use super::parts::{self, Field, Form};
use super::regions::Regions;
use super::shell::{self, Page};
use maud::{Markup, html};

/// The page.
pub fn page(view: &Laboratory, w: &Words) -> Markup {
    let page = Page {
        name: "laboratory",
        events: Some(String::from("page=laboratory")),
        title: w.way_laboratory.into(),
        class: "at-laboratory",
    };
    let main = html! {
        nav.row.benches aria-label=(w.benches) {
            @for bench in &view.frame.benches { a.key href=(format!("/bench/{bench}")) { (icon("weigh")) span { (fill(w.bench_title, &[bench])) } } }
        }
        (shell::region("open", &open(view, w)))
        (open_specimen(view, w))
        (shell::region("day", &day(view, w)))
        (shell::region("instruments", &instruments(view, w)))
        (shell::region("due", &due(view, w)))
        (shell::region("register", &register(view, w)))
        (imports(view, w))
    };
    shell::document(&page, &view.frame, shell::plain_strip(w.way_laboratory, &view.frame, w), main, w)
}

/// Its regions.
pub fn regions(view: &Laboratory, w: &Words) -> Regions {
    let mut all = shell::frame_regions(&view.frame, view.frame.who.as_deref(), w);
    all.extend([
        ("open", open(view, w)),
        ("day", day(view, w)),
        ("instruments", instruments(view, w)),
        ("due", due(view, w)),
        ("register", register(view, w)),
    ]);
    all
}

fn open(view: &Laboratory, w: &Words) -> Markup {
    html! {
        h2 { (w.open_specimens) }
        @if view.open.is_empty() { p.note { (w.no_specimen_open) } } @else { (specimens(&view.open, w.open_specimens, w)) }
    }
}

fn day(view: &Laboratory, w: &Words) -> Markup {
    html! {
        h2 { (w.results_of_day) }
        @if view.results.is_empty() { p.note { (w.no_results) } } @else { (specimens(&view.results, w.results_of_day, w)) }
    }
}

fn specimens(rows: &[SpecimenRow], about: &str, w: &Words) -> Markup {
    let of = |(done, wanted): (u32, u32)| fill(w.so_many_of, &[&done.to_string(), &wanted.to_string()]);
    let number = |text: &Option<String>| html! { @if let Some(t) = text { (parts::number(t)) } };
    html! {
        div.wide-table tabindex="0" role="region" aria-label=(about) {
            table {
                thead { tr { th { (w.specimen) } th { (w.state) } th.num { (w.liquid_trials) } th.num { (w.threads) } th.num { (w.ll) } th.num { (w.pl) } th.num { (w.pi) } th { (w.group) } } }
                tbody {
                    @for row in rows {
                        tr {
                            th scope="row" { a href=(format!("/specimen/{}", row.id)) { (row.id) } @if let Some(about) = &row.description { span.about { (about) } } }
                            td {
                                @if row.holds > 0 { span.state data-state="hold" { (icon("alarm")) span { (fill(w.holds_open, &[&row.holds.to_string()])) } } }
                                @else { span.state { (icon(if row.state == "provisional" { "stale" } else { "check" })) span { (w.result_state(&row.state)) } } }
                            }
                            td.num { (of(row.liquid)) }
                            td.num { (of(row.threads)) }
                            td.num { (number(&row.liquid_limit)) }
                            td.num { (number(&row.plastic_limit)) }
                            td.num { (number(&row.index)) }
                            td { @if let Some(group) = &row.group { (group) } }
                        }
                    }
                }
            }
        }
    }
}

fn instruments(view: &Laboratory, w: &Words) -> Markup {
    html! {
        h2 { (w.instruments) }
        @if view.instruments.is_empty() { p.note { (w.no_instruments) } }
        ul.instruments { @for one in &view.instruments { (instrument(one, w)) } }
    }
}

fn instrument(one: &InstrumentRow, w: &Words) -> Markup {
    html! {
        li {
            strong { (one.name) } " " span.about { (w.kind(&one.kind)) ", " (one.benches.join(", ")) }
            (parts::connection(one.connected, w))
            span.about {
                @match &one.last_heard { Some(at) => { (w.last_heard) " " (parts::day_and_time(at, w)) } None => { (w.never_heard) } }
                @if one.rejects > 0 { ". " (fill(w.not_understood, &[&one.rejects.to_string()])) }
                @if let Some(detail) = &one.detail { ". " (detail) }
            }
        }
    }
}

fn due(view: &Laboratory, w: &Words) -> Markup {
    html! {
        h2 { (w.due_checks) }
        @if view.due.is_empty() { p.note { (w.no_due_checks) } }
        ul.instruments { @for one in &view.due { (due_check(one, w)) } }
        p.backup.attention[view.backup_proven.is_none()] {
            (icon(if view.backup_proven.is_some() { "check" } else { "alarm" })) " " (w.backup_proven) " "
            @match &view.backup_proven { Some(at) => { strong { (parts::day_and_time(at, w)) } } None => { strong { (w.never) } " " (w.backup_do) } }
        }
    }
}

fn due_check(one: &DueCheck, w: &Words) -> Markup {
    html! {
        li {
            strong { (one.what) }
            span.state data-state=(if one.overdue { "overdue" } else { "note" }) { (icon(if one.overdue { "alarm" } else { "check" })) span { (if one.overdue { w.overdue } else { w.not_due }) } }
            span.about {
                @match &one.last { Some(at) => { (w.last_done) " " (parts::day_and_time(at, w)) } None => { (w.never_done) } }
                @if let Some(at) = &one.due { ". " (w.due_at) " " (parts::day_and_time(at, w)) }
            }
        }
    }
}

fn register(view: &Laboratory, w: &Words) -> Markup {
    html! {
        h2 { (w.register) }
        @if view.containers.is_empty() { p.note { (w.no_containers) } } @else {
            div.wide-table tabindex="0" role="region" aria-label=(w.register) {
                table {
                    thead { tr { th { (w.container) } th { (w.state) } th.num { (w.tare_g) } th.num { (w.lid_g) } th { (w.weighed_empty) } th { (w.specimen) } } }
                    tbody { @for row in &view.containers { (container(row, w)) } }
                }
            }
        }
    }
}

fn container(row: &ContainerRow, w: &Words) -> Markup {
    html! {
        tr {
            th scope="row" { (row.id) }
            td { (w.standing(&row.standing)) }
            td.num { @if let Some(g) = &row.tare_g { (parts::number(g)) } }
            td.num { @if let Some(g) = &row.lid_g { (parts::number(g)) } }
            td { @if let Some(at) = &row.weighed { (parts::day_and_time(at, w)) } }
            td { @if let Some(s) = &row.specimen { a href=(format!("/specimen/{s}")) { (s) } } }
        }
    }
}

fn open_specimen(view: &Laboratory, w: &Words) -> Markup {
    let field = |id, name, label, required| Field { id, name, label, kind: "text", mode: "text", value: "", required };
    parts::sheet("open-specimen", "key", html! { (icon("list")) span { (w.open_specimen) } }, w.open_specimen,
        Form::new(&view.frame, "open_specimen").class("panel").around(html! {
            (field("new-id", "specimen", w.specimen, true).draw(w))
            (field("new-about", "description", w.description, false).draw(w))
            (field("new-preparation", "preparation", w.preparation, false).draw(w))
            fieldset.radios {
                legend { (w.method) }
                @for (i, (name, title)) in view.methods.iter().enumerate() {
                    label.radio { input type="radio" name="method" value=(name) checked[i == 0]; span { (title) } }
                }
            }
            (Field { kind: "number", mode: "decimal", ..field("new-clay", "clay_percent", w.clay_percent, false) }.draw(w))
            (Field { kind: "number", mode: "decimal", ..field("new-fines", "passing_75um_percent", w.fines_percent, false) }.draw(w))
            (parts::who(&view.frame, "new", w))
            button.key.confirm type="submit" { (icon("check")) span { (w.record_specimen) } }
        }), w)
}

/// Nothing is taken here: the next page shows each line first.
fn imports(view: &Laboratory, w: &Words) -> Markup {
    html! {
        section {
            h2 { (w.import) }
            p { (w.import_says) }
            form.panel method="post" action="/import" {
                @if !view.frame.token.is_empty() { input type="hidden" name="token" value=(view.frame.token); }
                fieldset.radios {
                    legend { (w.import_what) }
                    label.radio { input type="radio" name="what" value="containers" checked; span { (w.import_containers) } }
                    label.radio { input type="radio" name="what" value="specimens"; span { (w.import_specimens) } }
                }
                p.about { (w.import_columns) }
                div.field { label for="csv-file" { (w.import_file) } input id="csv-file" type="file" accept=".csv,text/csv,text/plain" data-reads-into="csv"; }
                div.field { label for="csv" { (w.import_text) } textarea id="csv" name="text" rows="6" spellcheck="false" required {} }
                button.key type="submit" { (icon("list")) span { (w.import_look) } }
            }
        }
    }
}
