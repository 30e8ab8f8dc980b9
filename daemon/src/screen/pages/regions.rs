//! The parts of a page that change while it is open. The server makes them
//! anew after each commit and sends those that differ; the page puts each into
//! the element `region-<name>`. They hold no time that passes by itself, so
//! that a region differs only when something happened.

use super::super::view;
use super::super::words::Words;
use maud::Markup;

/// Regions by name.
pub type Regions = Vec<(&'static str, Markup)>;

/// Regions of the bench page; without readings, which come as live events.
pub fn bench(view: &view::Bench, words: &Words) -> Regions {
    super::bench::regions(view, words)
}
/// Regions of the oven shelf.
pub fn shelf(view: &view::Shelf, words: &Words) -> Regions {
    super::shelf::regions(view, words)
}
/// Regions of the loose things.
pub fn loose(view: &view::LoosePage, words: &Words) -> Regions {
    super::loose::regions(view, words)
}
/// Regions of a specimen's page.
pub fn specimen(view: &view::SpecimenPage, words: &Words) -> Regions {
    super::specimen::regions(view, words)
}
/// Regions of the laboratory's page.
pub fn laboratory(view: &view::Laboratory, words: &Words) -> Regions {
    super::laboratory::regions(view, words)
}
