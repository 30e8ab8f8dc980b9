//! Sign-in, and the page that says that something went wrong.

use super::super::pictures::icon;
use super::super::view::{Problem, SignIn};
use super::super::words::{Words, fill};
use super::parts::{self, Field};
use super::shell::{self, Page};
use maud::{Markup, html};

/// Sign-in by initials and PIN, or by the code of a badge.
pub fn sign_in(view: &SignIn, w: &Words) -> Markup {
    let page = Page { name: "sign-in", events: None, title: w.sign_in.into(), class: "at-door" };
    let main = html! {
        @if let Some(why) = &view.refused { p.attention role="alert" { (icon("alarm")) " " (why) } }
        @if let Some(until) = &view.locked_until { p.attention role="alert" { (icon("no")) " " (w.locked_until) " " (parts::moment(until, w)) } }
        form.panel method="post" action="/sign-in" {
            @if !view.frame.token.is_empty() { input type="hidden" name="token" value=(view.frame.token); }
            input type="hidden" name="then" value=(view.then);
            (Field { id: "operator", name: "operator", label: w.initials_or_badge, kind: "text", mode: "text", value: "", required: true }.draw(w))
            (parts::offers("operator", w.people, view.operators.iter().map(String::as_str)))
            (Field { id: "pin", name: "pin", label: w.pin, kind: "text", mode: "numeric", value: "", required: false }.draw(w))
            p.about { (w.badge_says) }
            button.key.confirm.primary type="submit" { (icon("person")) span { (w.sign_in) } }
        }
        @if let Some(who) = &view.frame.who {
            form method="post" action="/sign-out" {
                @if !view.frame.token.is_empty() { input type="hidden" name="token" value=(view.frame.token); }
                button.key type="submit" { (icon("undo")) span { (fill(w.sign_out, &[who])) } }
            }
        }
    };
    shell::document(&page, &view.frame, shell::plain_strip(w.sign_in, &view.frame, w), main, w)
}

/// What went wrong and what to try.
pub fn problem(view: &Problem, w: &Words) -> Markup {
    let page = Page { name: "problem", events: None, title: w.problem.into(), class: "at-door" };
    let main = html! {
        p.lead.attention role="alert" { (icon("alarm")) " " (view.says) }
        div.row { (shell::back("/", w.to_the_start)) }
    };
    shell::document(&page, &view.frame, shell::plain_strip(w.problem, &view.frame, w), main, w)
}
