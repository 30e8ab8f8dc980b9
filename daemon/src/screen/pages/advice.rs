//! What the method and the counts so far suggest. Nothing here is recorded.

use super::super::view::{Advice, Bench, Paste, Water, WaterFrom};
use super::super::words::{Words, fill};
use super::parts::{self, decimals};
use maud::{Markup, html};

/// The panel.
pub fn advice(view: &Bench, w: &Words) -> Markup {
    let a = &view.advice;
    html! {
        h2 { (w.advice) }
        @if nothing(a) { p.note { (w.advice_nothing) } }
        ul.advice {
            @if let Some(p) = &a.paste { (paste(p, w)) }
            @if !a.windows_missing.is_empty() {
                @let windows: Vec<String> = a.windows_missing.iter().map(|[f, t]| fill(w.from_to, &[&f.to_string(), &t.to_string()])).collect();
                li { (fill(w.windows_missing, &[&windows.join(", ")])) }
            }
            @if a.liquid_needed > 0 { li { (fill(w.liquid_needed, &[&a.liquid_needed.to_string()])) } }
            @if a.threads_needed > 0 { li { (fill(w.threads_needed, &[&a.threads_needed.to_string()])) } }
        }
        @if let Some(water) = &a.water { (add_water(view, water, w)) }
    }
}

fn nothing(a: &Advice) -> bool {
    a.paste.is_none() && a.windows_missing.is_empty() && a.liquid_needed == 0 && a.threads_needed == 0
}

fn paste(p: &Paste, w: &Words) -> Markup {
    let [from, to] = p.allowed;
    let (drops, aim) = (p.drops.to_string(), p.aim.to_string());
    let range = [drops.as_str(), &from.to_string(), &to.to_string()].map(String::from);
    let [d, f, t] = &range;
    html! {
        @if p.drops < from { li.loud { (fill(w.too_few_drops, &[d, f, t])) } li { (w.never_dry_soil) } }
        @else if p.drops > to { li.loud { (fill(w.too_many_drops, &[d, f, t])) } }
        @else if p.drops < p.aim { li { (fill(w.dry_towards, &[d, &aim])) } li { (w.never_dry_soil) } }
        @else if p.drops > p.aim { li { (fill(w.wet_towards, &[d, &aim])) } }
    }
}

/// Grams of water for the paste mass that the operator types. The script multiplies; without it the server does.
fn add_water(view: &Bench, water: &Water, w: &Words) -> Markup {
    let typed = view.advice.paste_g.as_deref();
    let grams: Option<f64> =
        typed.and_then(|t| t.replace(',', ".").parse().ok()).filter(|g: &f64| g.is_finite() && *g > 0.0 && *g < 1e5);
    let from = match water.from {
        WaterFrom::FlowLine => w.water_from_line,
        WaterFrom::OneTrial => w.water_from_one,
        WaterFrom::Usual => w.water_from_usual,
    };
    let of = |per: f64| grams.map_or(String::from("–"), |g| decimals(g * per, 1));
    html! {
        form.water-form method="get" action=(format!("/bench/{}", view.name)) data-per-gram=(water.per_gram) data-per-gram-u=(water.per_gram_u) {
            label for="paste-g" { (w.paste_mass) }
            div.entry {
                input id="paste-g" name="paste_g" type="text" inputmode="decimal" value=[typed] autocomplete="off" maxlength="12" data-local="water";
                (parts::pad_key("paste-g", w))
            }
            p.water-answer { (w.water_to_add) " " strong { span data-slot="water" { (of(water.per_gram)) } " ± " span data-slot="water-u" { (of(water.per_gram_u)) } " " (w.gram) } }
            p.about { (from) }
        }
    }
}
