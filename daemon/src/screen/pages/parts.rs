//! What several pages are made of: times, numbers, marks of state, forms.

use super::super::pictures::icon;
use super::super::view::{Connected, Frame, Freshness, Kind};
use super::super::words::{Words, fill};
use maud::{Markup, html};

/// A moment. The script puts it into the reader's clock; without it UTC stands there and says so.
pub fn moment(at: &str, w: &Words) -> Markup {
    html! { time datetime=(at) data-time="clock" { (clock(at)) " " (w.utc) } }
}

/// A moment with its day.
pub fn day_and_time(at: &str, w: &Words) -> Markup {
    html! { time datetime=(at) data-time="both" { (day(at)) " " (clock(at)) " " (w.utc) } }
}

/// A moment with year and zone, as a record and a printed sheet need it.
pub fn dated(at: &str, w: &Words) -> Markup {
    html! { time datetime=(at) data-time="full" { (day(at)) " " (clock(at)) " " (w.utc) } }
}

/// `08:14` of an RFC 3339 time; an empty text of anything else.
fn clock(at: &str) -> &str {
    at.get(11..16).unwrap_or("")
}

fn day(at: &str) -> &str {
    at.get(..10).unwrap_or(at)
}

/// A number that the script shows with the reader's decimal sign.
pub fn number(text: &str) -> Markup {
    html! { span.number data-number=(text) { (text) } }
}

/// A mass in grams.
pub fn grams(text: &str, w: &Words) -> Markup {
    html! { (number(text)) span.unit { " " (w.gram) } }
}

/// A number with so many decimals; what is not finite is a dash.
pub fn decimals(value: f64, places: usize) -> String {
    if value.is_finite() { format!("{value:.places$}") } else { String::from("–") }
}

/// State of a value in word and shape.
pub fn freshness(state: &Freshness, w: &Words) -> Markup {
    let (word, shape, text) = match state {
        Freshness::Live => ("live", "live", w.live),
        Freshness::Stale { .. } => ("stale", "stale", w.stale_since),
        Freshness::Never => ("never", "never", w.never_seen),
    };
    html! {
        span.state data-state=(word) {
            (icon(shape)) span { (text) }
            @if let Freshness::Stale { since: Some(since) } = state { " " (moment(since, w)) }
        }
    }
}

/// State of a connection in word and shape.
pub fn connection(state: Connected, w: &Words) -> Markup {
    let (word, shape) = match state {
        Connected::Waiting => ("waiting", "never"),
        Connected::Speaking => ("speaking", "live"),
        Connected::Silent => ("silent", "stale"),
        Connected::WrongLanguage => ("wrong_language", "alarm"),
        Connected::PortLost => ("port_lost", "alarm"),
    };
    html! { span.state data-state=(word) { (icon(shape)) span { (w.connected(state)) } } }
}

/// A value of a person's hand is marked as such wherever it stands.
pub fn typed(is: bool, w: &Words) -> Markup {
    html! { @if is { span.typed { (icon("hand")) (w.typed) } } }
}

/// Name of a determination, such as `Liquid 2`.
pub fn trial_name(kind: Kind, no: u32, w: &Words) -> String {
    let name = match kind {
        Kind::Liquid => w.trial_liquid,
        Kind::Thread => w.trial_thread,
        Kind::Natural => w.trial_natural,
    };
    fill(name, &[&no.to_string()])
}

/// The word of a kind in an ask.
pub fn kind_word(kind: Kind) -> &'static str {
    match kind {
        Kind::Liquid => "liquid",
        Kind::Thread => "thread",
        Kind::Natural => "natural",
    }
}

/// A form that makes an ask. Without the script it is posted to `act`; with it the same members go as JSON.
pub struct Form<'a> {
    frame: &'a Frame,
    bench: Option<&'a str>,
    ask: &'a str,
    members: Vec<(&'a str, String, &'a str)>,
    class: &'a str,
}

impl<'a> Form<'a> {
    /// A form that asks for this.
    pub fn new(frame: &'a Frame, ask: &'a str) -> Self {
        Self { frame, bench: None, ask, members: Vec::new(), class: "" }
    }
    /// The ask names this bench.
    pub fn at(mut self, bench: &'a str) -> Self {
        self.bench = Some(bench);
        self.with("bench", bench)
    }
    /// A member that is text.
    pub fn with(mut self, name: &'a str, value: impl Into<String>) -> Self {
        self.members.push((name, value.into(), "text"));
        self
    }
    /// A member that is a number.
    pub fn number(mut self, name: &'a str, value: impl ToString) -> Self {
        self.members.push((name, value.to_string(), "number"));
        self
    }
    /// A member that is a list of names.
    pub fn list(mut self, name: &'a str, values: &[&str]) -> Self {
        self.members.push((name, values.join(","), "list"));
        self
    }
    /// With this class.
    pub fn class(mut self, class: &'a str) -> Self {
        self.class = class;
        self
    }
    /// The form around what a person fills in or presses.
    pub fn around(self, inside: Markup) -> Markup {
        let action = match self.bench {
            Some(bench) => format!("/bench/{bench}/act"),
            None => String::from("/act"),
        };
        html! {
            form method="post" action=(action) class=[(!self.class.is_empty()).then_some(self.class)] data-ask=(self.ask) {
                input type="hidden" name="ask" value=(self.ask);
                @if !self.frame.token.is_empty() { input type="hidden" name="token" value=(self.frame.token); }
                @for (name, value, kind) in &self.members {
                    input type="hidden" name=(name) value=(value) data-type=(kind);
                }
                (inside)
            }
        }
    }
}

/// A field with its label, and a key that opens the keys on the screen for it.
pub struct Field<'a> {
    /// Unique in the page.
    pub id: &'a str,
    /// Member of the ask.
    pub name: &'a str,
    /// Label.
    pub label: &'a str,
    /// `text`, `number` (in JSON) or `list`.
    pub kind: &'a str,
    /// Keyboard that a touch device should show.
    pub mode: &'a str,
    /// What stands in it at first.
    pub value: &'a str,
    /// It must be filled in.
    pub required: bool,
}

impl Field<'_> {
    /// The field.
    pub fn draw(&self, w: &Words) -> Markup {
        html! {
            div.field {
                label for=(self.id) { (self.label) }
                div.entry {
                    input id=(self.id) name=(self.name) type=(if self.name == "pin" { "password" } else { "text" }) inputmode=(self.mode)
                        data-type=(self.kind) value=(self.value) autocomplete="off" maxlength="1000" required[self.required];
                    (pad_key(self.id, w))
                }
            }
        }
    }
}

/// A key that opens the keys on the screen for a field.
pub fn pad_key(id: &str, w: &Words) -> Markup {
    html! { button.pad-key type="button" data-pad-for=(id) aria-label=(w.pad_open) title=(w.pad_open) { (icon("keys")) } }
}

/// Keys that put a text into a field, for a finger in a glove.
pub fn offers<'a>(into: &str, label: &str, texts: impl IntoIterator<Item = &'a str>) -> Markup {
    html! {
        div.offers role="group" aria-label=(label) {
            @for text in texts { button.offer type="button" data-fill=(text) data-into=(into) { (text) } }
        }
    }
}

/// Who says it and why, with the PIN where it is asked. `id` makes the fields unique in the page.
pub fn who_and_why(frame: &Frame, id: &str, why: (&str, &str), reasons: &[&str], w: &Words) -> Markup {
    let (why_name, why_label) = why;
    let why_id = format!("{id}-why");
    html! {
        (Field { id: &why_id, name: why_name, label: why_label, kind: "text", mode: "text", value: "", required: true }.draw(w))
        (offers(&why_id, w.usual_reasons, reasons.iter().copied()))
        (who(frame, id, w))
    }
}

/// Who says it, with the PIN where it is asked.
pub fn who(frame: &Frame, id: &str, w: &Words) -> Markup {
    let (who_id, pin_id) = (format!("{id}-who"), format!("{id}-pin"));
    let value = frame.who.as_deref().unwrap_or("");
    html! {
        div.signed {
            (Field { id: &who_id, name: "who", label: w.who, kind: "text", mode: "text", value, required: true }.draw(w))
            @if frame.asks_pin {
                (Field { id: &pin_id, name: "pin", label: w.pin, kind: "text", mode: "numeric", value: "", required: true }.draw(w))
            }
        }
    }
}

/// A sheet that opens over the lower part of the page: the first of two separated taps.
/// `key` is what the closed key shows; it becomes the key that closes.
pub fn sheet(id: &str, class: &str, key: Markup, title: &str, inside: Markup, w: &Words) -> Markup {
    html! {
        details.sheet id=(id) name="sheet" {
            summary class=(class) {
                span.when-closed { (key) }
                span.when-open { (icon("close")) (w.close) }
            }
            div.sheet-body { h2 { (title) } (inside) }
        }
    }
}

/// A caution where it matters.
pub fn caution(text: &str) -> Markup {
    html! { p.caution { (icon("caution")) span { (text) } } }
}

/// Shape of going back.
pub fn undo_shape() -> Markup {
    icon("undo")
}
