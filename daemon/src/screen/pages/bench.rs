//! The bench page: what comes next, what is on the pan, what was recorded.

use super::super::pictures::icon;
use super::super::view::{Balance, Bench, Connected, Cup, Freshness, Recorded, Steady, Step};
use super::super::words::{Words, fill};
use super::parts::{self, Field, Form};
use super::regions::Regions;
use super::shell::{self, Page};
use super::{advice, keys, work};
use maud::{Markup, html};

/// Entries shown under the latest one.
const SHOWN: usize = 5;

/// Figures of a mass that fit in full size.
const FIT: usize = 6;
/// A sentence longer than this is set smaller.
const LONG: usize = 100;

/// The page.
pub fn page(view: &Bench, w: &Words) -> Markup {
    let page = Page {
        name: "bench",
        events: Some(format!("bench={}", view.name)),
        title: fill(w.bench_title, &[&view.name]),
        class: "at-bench",
    };
    let strip = html! {
        h1 { (fill(w.bench_title, &[&view.name])) }
        span.place { (view.frame.lab) }
        div #region-standing .standing { (shell::standing(&view.frame, view.signed_in.as_deref(), w)) }
    };
    let main = html! {
        (shell::spoken("next", &next(view, w)))
        (shell::region("live", &live(view, true, w)))
        (code(view, w))
        (shell::spoken("recorded", &recorded(view, w)))
        (shell::region("keys", &keys::keys(view, w)))
        div.side tabindex="0" role="region" aria-label=(w.specimen_in_work) {
            (shell::region("work", &work::work(view, w)))
            (shell::region("advice", &advice::advice(view, w)))
        }
    };
    shell::document(&page, &view.frame, strip, main, w)
}

/// Its regions. Readings are left out: they come as live events, and a region that changed with each
/// reading would be sent five times a second.
pub fn regions(view: &Bench, w: &Words) -> Regions {
    let mut all = shell::frame_regions(&view.frame, view.signed_in.as_deref(), w);
    all.extend([
        ("next", next(view, w)),
        ("live", live(view, false, w)),
        ("recorded", recorded(view, w)),
        ("keys", keys::keys(view, w)),
        ("work", work::work(view, w)),
        ("advice", advice::advice(view, w)),
    ]);
    all
}

fn next(view: &Bench, w: &Words) -> Markup {
    let shape = match view.next.step {
        Step::Scan => "scan",
        Step::Weigh => "weigh",
        Step::TakeOff => "take-off",
        Step::Slice => "slice",
        Step::Cup => "cup",
        Step::Refused => "alarm",
    };
    html! {
        div.next-step.urgent[view.next.urgent] data-step=(shape) {
            (icon(if view.next.urgent { "alarm" } else { shape }))
            div {
                p.sentence.long[view.next.sentence.chars().count() > LONG] { (view.next.sentence) }
                @if let Some(owed) = view.owed.as_ref().filter(|o| o.overdue) {
                    p.owed data-owed="overdue" { (w.owed_overdue) " " time datetime=(owed.since) data-time="ago" { (owed.since.get(11..16).unwrap_or("")) } }
                }
                @if view.next.step == Step::Cup { (parts::caution(w.caution_cam)) }
            }
            @if view.next.step == Step::Refused && view.loose > 0 {
                a.key.primary href="/loose" { (icon("loose")) span { (w.tie_or_explain) } }
            }
        }
    }
}

/// The one field that is always ready: a scanner that types, a keyboard, the keys on the screen.
fn code(view: &Bench, w: &Words) -> Markup {
    Form::new(&view.frame, "code").at(&view.name).class("code").around(html! {
        label for="code" { (w.code_label) }
        div.entry {
            input #code name="text" type="text" autocomplete="off" autocapitalize="characters" spellcheck="false" autofocus enterkeyhint="send" maxlength="64" placeholder=(w.code_hint) aria-describedby="code-ready";
            (parts::pad_key("code", w))
            button.enter.primary[view.next.step == Step::Scan] type="submit" { (w.enter) }
        }
        p #code-ready .code-ready { (icon("scan")) span data-ready=(w.code_ready) data-away=(w.code_away) { (w.code_ready) } }
    })
}

fn live(view: &Bench, readings: bool, w: &Words) -> Markup {
    let none = view.balances.is_empty() && view.cups.is_empty();
    html! {
        @for balance in &view.balances { (pan(balance, readings, w)) }
        @for cup in &view.cups { (drops(cup, readings, w)) }
        @if none { p.note { (w.no_instruments) } }
    }
}

fn attention(connected: Connected) -> bool {
    matches!(connected, Connected::WrongLanguage | Connected::PortLost)
}

fn pan(balance: &Balance, readings: bool, w: &Words) -> Markup {
    let reading = balance.reading.as_ref().filter(|_| readings);
    let (steady, word) = match reading.map(|r| r.steady) {
        Some(Steady::Steady) => ("steady", w.steady),
        Some(Steady::Moving) => ("moving", w.moving),
        Some(Steady::Unmarked) => ("unmarked", w.unmarked),
        None => ("none", ""),
    };
    html! {
        section.instrument.balance data-instrument=(balance.name) data-state=(word_of(&balance.freshness)) data-steady=(steady)
            aria-label=(fill(w.balance_named, &[&balance.name])) {
            h2 { (icon("weigh")) span { (balance.name) } (trust(&balance.freshness, balance.connected, w)) }
            p.digits { span.mass.many[reading.is_some_and(|r| r.mass_g.len() > FIT)] data-slot="mass" data-number=[reading.map(|r| r.mass_g.as_str())] { (reading.map_or("–", |r| r.mass_g.as_str())) } span.unit { (w.gram) } }
            p.rest {
                span.shape-steady { (icon("steady")) } span.shape-moving { (icon("moving")) } span.shape-unmarked { (icon("unmarked")) }
                span data-slot="steady" { (word) }
                @if !balance.shared_with.is_empty() { span.detail { (fill(w.shared_with, &[&balance.shared_with.join(", ")])) } }
            }
            @if let Some(detail) = &balance.detail { p.detail.attention[attention(balance.connected)] { (detail) } }
        }
    }
}

fn drops(cup: &Cup, readings: bool, w: &Words) -> Markup {
    let count = cup.drops.filter(|_| readings);
    let rate = cup.rate_per_s.filter(|_| readings);
    html! {
        section.instrument.cup data-instrument=(cup.name) data-state=(word_of(&cup.freshness)) data-running=(cup.running && readings)
            data-rate-from=[cup.rate_wanted.map(|r| r[0])] data-rate-to=[cup.rate_wanted.map(|r| r[1])]
            aria-label=(fill(w.cup_named, &[&cup.name])) {
            h2 { (icon("cup")) span { (cup.name) } (trust(&cup.freshness, cup.connected, w)) }
            p.digits { span.mass data-slot="drops" { (count.map_or(String::from("–"), |d| d.to_string())) } span.unit { (w.drops) } }
            p.rest {
                span data-slot="rate" data-number=[rate.map(|r| format!("{r:.2}"))] { (rate.map_or(String::from("–"), |r| format!("{r:.2}"))) }
                span { (w.per_second) }
                @if let Some([from, to]) = cup.rate_wanted { span.wanted { (fill(w.rate_wanted, &[&from.to_string(), &to.to_string()])) } }
            }
            @if let Some(detail) = &cup.detail { p.detail.attention[attention(cup.connected)] { (detail) } }
        }
    }
}

fn word_of(freshness: &Freshness) -> &'static str {
    match freshness {
        Freshness::Live => "live",
        Freshness::Stale { .. } => "stale",
        Freshness::Never => "never",
    }
}

/// The connection where it is at fault, else how fresh the value is.
fn trust(freshness: &Freshness, connected: Connected, w: &Words) -> Markup {
    if attention(connected) { parts::connection(connected, w) } else { parts::freshness(freshness, w) }
}

/// What was just recorded, large, with undo; below it the last few.
fn recorded(view: &Bench, w: &Words) -> Markup {
    html! {
        h2 { (w.recorded) }
        @match view.recorded.split_first() {
            None => { p.note { (w.nothing_recorded) } }
            Some((latest, earlier)) => {
                div.latest.is-loose[latest.loose.is_some()] data-recorded=(latest.seq) {
                    (entry(latest, w))
                    (Form::new(&view.frame, "undo").at(&view.name).class("undo").around(html! {
                        button.key type="submit" { (icon("undo")) span { (w.undo) } }
                    }))
                }
                @if let Some(why) = latest.loose.as_ref().filter(|why| **why != view.next.sentence) { p.detail.attention { (why) } }
                ol.earlier aria-label=(w.earlier) { @for one in earlier.iter().take(SHOWN) { li { (entry(one, w)) } } }
            }
        }
    }
}

fn entry(one: &Recorded, w: &Words) -> Markup {
    html! {
        a.entry-line.aside[one.set_aside.is_some()] href=(format!("/correct/{}", one.seq)) {
            strong {
                @if let Some(mass) = &one.mass_g { (parts::grams(mass, w)) }
                @if let Some(drops) = one.drops { (drops) " " (w.drops) }
            }
            " "
            span {
                @if let Some(container) = &one.container { (container) " " }
                @if let Some(role) = &one.role { (w.role(role)) " " }
                @if one.loose.is_some() { span.state data-state="loose" { (icon("loose")) (w.tied_to_nothing) } " " }
                @if let Some(specimen) = &one.specimen { (specimen) " " }
                @if one.set_aside.is_some() { span.state { (icon("no")) (w.set_aside) } " " }
                (parts::typed(one.typed, w))
            }
            " " span.when { (parts::moment(&one.at, w)) @if let Some(by) = &one.by { " " (by) } }
        }
    }
}

/// Counts and masses read by eye. They stay marked as typed.
pub fn by_hand(view: &Bench, w: &Words) -> Markup {
    let field = |id, name, label, kind, mode| Field { id, name, label, kind, mode, value: "", required: true };
    html! {
        p { (w.by_hand_says) }
        (Form::new(&view.frame, "type_drops").at(&view.name).class("panel").around(html! {
            h3 { (w.type_drops) }
            (field("hand-drops", "drops", w.drops_counted, "number", "numeric").draw(w))
            (parts::who(&view.frame, "hand-count", w))
            button.key.confirm type="submit" { (icon("check")) span { (w.record_count) } }
        }))
        (Form::new(&view.frame, "type_mass").at(&view.name).class("panel").around(html! {
            h3 { (w.type_mass) }
            (field("hand-container", "container", w.container, "text", "text").draw(w))
            (field("hand-mass", "mass_g", w.mass_in_grams, "text", "decimal").draw(w))
            (parts::who(&view.frame, "hand-weigh", w))
            button.key.confirm type="submit" { (icon("check")) span { (w.record_mass) } }
        }))
    }
}
