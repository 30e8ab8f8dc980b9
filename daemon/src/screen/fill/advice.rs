//! What the laboratory advises, as the bench page shows it.

use super::super::view::{Advice, Water};
use tarecup_core::lab::Lab;
use tarecup_core::lab::advice::{Fit, WaterStep, Wish};
use tarecup_core::names::BenchName;

/// Advice at a bench. Water is told for each gram of paste: the page multiplies by the mass that is typed there.
pub fn advice(lab: &Lab, bench: &BenchName, paste_g: Option<String>) -> Advice {
    let Some(advice) = lab.advice(bench, &Wish::default()) else { return Advice { paste_g, ..Default::default() } };
    let [begun, wanted] = advice.threads;
    Advice {
        loud: advice.count.as_ref().is_some_and(|c| matches!(c.fit, Fit::TooMany | Fit::TooFew)),
        threads_needed: wanted.saturating_sub(begun),
        water: advice.water.as_ref().and_then(to_add),
        says: advice.says.iter().map(|s| sentence(s)).collect(),
        paste_g,
    }
}

fn to_add(step: &WaterStep) -> Option<Water> {
    let per = |per_100g: f64| per_100g / 100.0;
    (step.water_g_per_100g > 0.0).then(|| Water {
        per_gram: per(step.water_g_per_100g),
        per_gram_u: per(step.water_u_g_per_100g),
        from: step.slope.from.clone(),
    })
}

/// With a capital and a full stop.
fn sentence(says: &str) -> String {
    let mut rest = says.chars();
    let first: String = rest.next().into_iter().flat_map(char::to_uppercase).collect();
    format!("{first}{}.", rest.as_str())
}
