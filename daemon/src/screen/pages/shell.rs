//! What stands around every page: head, strip, ways to the other pages.

use super::super::pictures::icon;
use super::super::view::Frame;
use super::super::words::Words;
use super::parts;
use maud::{DOCTYPE, Markup, html};

/// Which page it is, for the ways to the others and the events it listens to.
pub struct Page<'a> {
    /// Stable word: `bench`, `shelf`, `loose`, `specimen`, `laboratory` …
    pub name: &'a str,
    /// Query of its events: `bench=north` or `page=shelf`; `None` for a page that does not change.
    pub events: Option<String>,
    /// Title.
    pub title: String,
    /// Classes of the body.
    pub class: &'a str,
}

/// The whole document.
pub fn document(page: &Page, frame: &Frame, strip: Markup, main: Markup, w: &Words) -> Markup {
    let events = page.events.as_ref().map(|q| format!("/events?{q}"));
    html! {
        (DOCTYPE)
        html lang=(w.language) {
            head {
                meta charset="utf-8";
                meta name="viewport" content="width=device-width, initial-scale=1";
                meta name="color-scheme" content="light dark";
                title { (page.title) " · " (frame.lab) }
                link rel="icon" type="image/svg+xml" href="/assets/icon.svg";
                link rel="stylesheet" href="/assets/style.css";
                script src="/assets/script.js" defer {}
            }
            body class=(page.class) data-page=(page.name) data-connection="live" data-seq=(frame.seq) data-now=(frame.now)
                data-events=[events] data-bench=[frame.bench.as_deref()] data-token=(frame.token) {
                a.skip href="#main" { (w.skip) }
                div.heads {
                    (lost(w))
                    div #region-alarm role="alert" { (alarm(frame, w)) }
                }
                header.strip { (strip) (sound(w)) }
                (ways(page, frame, w))
                main #main tabindex="-1" {
                    noscript { p.note { (w.no_script) } }
                    (main)
                    div #region-answer role="status" aria-live="assertive" {}
                }
                (pad(w))
                (script_words(w))
            }
        }
    }
}

/// Shown by the script when no beat has come for three seconds.
fn lost(w: &Words) -> Markup {
    html! { div #lost role="alert" hidden { (icon("alarm")) strong { (w.lost) } span data-slot="lost" {} } }
}

/// Nothing is being recorded: cannot be overlooked, on every page.
pub fn alarm(frame: &Frame, w: &Words) -> Markup {
    html! {
        @if let Some(why) = &frame.not_recording {
            div.not-recording {
                (icon("alarm"))
                p { strong { (w.not_recording) } " " span { (why) } " " span { (w.not_recording_do) } }
            }
        }
    }
}

/// Whether the station records, in word and shape, and who is signed in.
pub fn standing(frame: &Frame, who: Option<&str>, w: &Words) -> Markup {
    let then = frame.bench.as_ref().map_or(String::from("/"), |b| format!("/bench/{b}"));
    html! {
        span.state data-state=(if frame.not_recording.is_some() { "port_lost" } else { "speaking" }) {
            (icon(if frame.not_recording.is_some() { "alarm" } else { "live" }))
            span { (if frame.not_recording.is_some() { w.not_recording_short } else { w.recording }) }
        }
        a.who href=(format!("/sign-in?then={then}")) {
            (icon("person"))
            @match who {
                Some(who) => { span { (w.signed_in) " " strong { (who) } } }
                None => { span { (w.nobody) } }
            }
        }
    }
}

fn sound(w: &Words) -> Markup {
    html! {
        button.sound type="button" id="sound" aria-pressed="true" data-on=(w.sound_on) data-off=(w.sound_off) hidden {
            (icon("sound")) span { (w.sound_on) }
        }
    }
}

fn ways(page: &Page, frame: &Frame, w: &Words) -> Markup {
    let bench = frame.bench.as_ref().map_or(String::from("/"), |b| format!("/bench/{b}"));
    let ways = [
        ("bench", bench.as_str(), "weigh", w.way_bench),
        ("shelf", "/shelf", "oven", w.way_shelf),
        ("loose", "/loose", "loose", w.way_loose),
        ("laboratory", "/laboratory", "lab", w.way_laboratory),
    ];
    html! {
        nav.ways aria-label=(w.ways) {
            @for (name, href, shape, text) in ways {
                a href=(href) aria-current=[(page.name == name).then_some("page")] {
                    (icon(shape)) span { (text) }
                    @if name == "loose" { span id="count-loose" { (badge(frame.loose, w.loose_things)) } }
                    @if name == "shelf" { span id="count-ready" { (badge(frame.ready, w.ready_things)) } }
                }
            }
        }
    }
}

/// A number beside a way, said in words to a screen reader.
pub fn badge(count: usize, about: &str) -> Markup {
    html! { @if count > 0 { span.badge { (count) span.unseen { " " (about) } } } }
}

/// Keys on the screen, for a panel without a keyboard. The script opens it.
fn pad(w: &Words) -> Markup {
    let rows = ["1234567890.", "QWERTYUIOP", "ASDFGHJKL-", "ZXCVBNM+"];
    html! {
        section #pad hidden aria-label=(w.pad) {
            output #pad-shows {}
            @for row in rows {
                div.pad-row.letters[!row.starts_with('1')] {
                    @for key in row.chars() { button type="button" data-key=(key) { (key) } }
                    @if row.starts_with('Z') {
                        button type="button" data-key="Space" aria-label=(w.pad_space) { "␣" }
                    }
                }
            }
            div.pad-row {
                button.wide type="button" data-key="Close" { (icon("close")) (w.close) }
                button.wide type="button" data-key="Back" { (w.pad_back) }
                button.wide.primary type="button" data-key="Enter" { (w.pad_enter) }
            }
        }
    }
}

/// Words that the script needs.
fn script_words(w: &Words) -> Markup {
    html! {
        template #words data-since=(w.since) data-steady=(w.steady) data-moving=(w.moving) data-unmarked=(w.unmarked)
            data-done=(w.done) data-sending=(w.sending) data-unreachable=(w.unreachable) data-ago=(w.ago) data-owed=(w.owed_for) data-live=(w.live) data-stale=(w.stale_since) {}
    }
}

/// A region with its content.
pub fn region(name: &str, inside: &Markup) -> Markup {
    html! { div id=(format!("region-{name}")) class=(format!("region {name}")) { (inside) } }
}

/// A region whose changes are read aloud.
pub fn spoken(name: &str, inside: &Markup) -> Markup {
    html! { div id=(format!("region-{name}")) class=(format!("region {name}")) aria-live="polite" { (inside) } }
}

/// A strip of a page that is no bench.
pub fn plain_strip(title: &str, frame: &Frame, w: &Words) -> Markup {
    html! {
        h1 { (title) }
        span.place { (frame.lab) }
        div #region-standing .standing { (standing(frame, frame.who.as_deref(), w)) }
    }
}

/// Regions of the frame, the same on every page.
pub fn frame_regions(frame: &Frame, who: Option<&str>, w: &Words) -> super::regions::Regions {
    vec![("alarm", alarm(frame, w)), ("standing", standing(frame, who, w))]
}

/// A link back with its shape.
pub fn back(href: &str, text: &str) -> Markup {
    html! { a.key href=(href) { (parts::undo_shape()) span { (text) } } }
}
