//! What an imported file would do, line by line, before anything is taken.

use super::super::pictures::icon;
use super::super::view::{Import, ImportLine};
use super::super::words::{Words, fill};
use super::parts;
use super::shell::{self, Page};
use maud::{Markup, html};

/// The page.
pub fn page(view: &Import, w: &Words) -> Markup {
    let page = Page { name: "import", events: None, title: w.import.into(), class: "at-import" };
    let bad = view.lines.iter().filter(|l| l.refused.is_some()).count();
    let good = view.lines.len() - bad;
    let main = html! {
        p.lead { (if view.what == "specimens" { w.import_specimens } else { w.import_containers }) }
        @if let Some(why) = &view.refused { p.attention { (icon("alarm")) " " (why) } }
        p { (fill(w.import_counts, &[&good.to_string(), &bad.to_string()])) }
        @if !view.lines.is_empty() {
            div.wide-table tabindex="0" role="region" aria-label=(w.import) {
                table { thead { tr { th.num { (w.line) } th { (w.import_read_as) } th { (w.import_verdict) } } } tbody { @for l in &view.lines { (line(l, w)) } } }
            }
        }
        @if bad > 0 { p.attention { (icon("alarm")) " " (w.import_whole) } }
        @if good > 0 && bad == 0 && view.refused.is_none() {
            form.panel method="post" action="/import/take" {
                @if !view.frame.token.is_empty() { input type="hidden" name="token" value=(view.frame.token); }
                input type="hidden" name="what" value=(view.what);
                textarea.unseen name="text" aria-hidden="true" tabindex="-1" readonly { (view.text) }
                (parts::who(&view.frame, "import", w))
                button.key.confirm.primary type="submit" { (icon("check")) span { (fill(w.import_take, &[&good.to_string()])) } }
            }
        }
        div.row { (shell::back("/laboratory", w.import_leave)) }
    };
    shell::document(&page, &view.frame, shell::plain_strip(w.import, &view.frame, w), main, w)
}

fn line(l: &ImportLine, w: &Words) -> Markup {
    html! {
        tr.aside[l.refused.is_some()] {
            td.num { (l.no) }
            td { (l.fields.join(" · ")) }
            td {
                @match (&l.refused, &l.note) {
                    (Some(why), _) => { span.state data-state="hold" { (icon("alarm")) span { (w.import_refused) } } " " (why) }
                    (None, Some(note)) => { span.state { (icon("live")) span { (w.import_taken) } } " " (note) }
                    (None, None) => { span.state { (icon("check")) span { (w.import_taken) } } }
                }
            }
        }
    }
}
