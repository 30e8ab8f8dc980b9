//! What the method and the counts so far suggest. Nothing here is recorded.

use super::super::view::{Bench, Water};
use super::super::words::{Words, fill};
use super::parts::{self, decimals};
use maud::{Markup, html};

/// The panel.
pub fn advice(view: &Bench, w: &Words) -> Markup {
    let a = &view.advice;
    html! {
        h2 { (w.advice) }
        @if a.says.is_empty() && a.threads_needed == 0 { p.note { (if view.work.is_some() { w.advice_nothing } else { w.advice_no_work }) } }
        ul.advice {
            @for (i, says) in a.says.iter().enumerate() { li.loud[a.loud && i == 0] { (says) } }
            @if a.threads_needed > 0 { li { (fill(w.threads_needed, &[&a.threads_needed.to_string()])) } }
        }
        @if let Some(water) = &a.water { (add_water(view, water, w)) }
    }
}

/// Grams of water for the paste mass that the operator types. The script multiplies; without it the server does.
fn add_water(view: &Bench, water: &Water, w: &Words) -> Markup {
    let typed = view.advice.paste_g.as_deref();
    let grams: Option<f64> =
        typed.and_then(|t| t.replace(',', ".").parse().ok()).filter(|g: &f64| g.is_finite() && *g > 0.0 && *g < 1e5);
    let of = |per: f64| grams.map_or(String::from("–"), |g| decimals(g * per, 1));
    html! {
        form.water-form method="get" action=(format!("/bench/{}", view.name)) data-per-gram=(water.per_gram) data-per-gram-u=(water.per_gram_u) {
            label for="paste-g" { (w.paste_mass) }
            div.entry {
                input id="paste-g" name="paste_g" type="text" inputmode="decimal" value=[typed] autocomplete="off" maxlength="12" data-local="water";
                (parts::pad_key("paste-g", w))
            }
            p.water-answer { (w.water_to_add) " " strong { span data-slot="water" { (of(water.per_gram)) } " ± " span data-slot="water-u" { (of(water.per_gram_u)) } " " (w.gram) } }
            p.about { (fill(w.water_from, &[&water.from])) }
        }
    }
}
