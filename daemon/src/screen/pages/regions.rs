//! The parts of a page that change while it is open. The server makes them
//! anew after each commit and sends those that differ; the page puts each into
//! the element `region-<name>`.

use super::super::view;
use super::super::words::Words;
use maud::Markup;

/// Regions by name.
pub type Regions = Vec<(&'static str, Markup)>;

/// Regions of the bench page.
pub fn bench(_view: &view::Bench, _words: &Words) -> Regions {
    Vec::new()
}
/// Regions of the oven shelf.
pub fn shelf(_view: &view::Shelf, _words: &Words) -> Regions {
    Vec::new()
}
/// Regions of the loose things.
pub fn loose(_view: &view::LoosePage, _words: &Words) -> Regions {
    Vec::new()
}
/// Regions of a specimen's page.
pub fn specimen(_view: &view::SpecimenPage, _words: &Words) -> Regions {
    Vec::new()
}
/// Regions of the laboratory's page.
pub fn laboratory(_view: &view::Laboratory, _words: &Words) -> Regions {
    Vec::new()
}
