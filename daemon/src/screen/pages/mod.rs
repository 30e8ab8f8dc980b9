//! The pages: view in, HTML out. Pure functions.

pub mod regions;

use super::view;
use super::words::Words;
use maud::{Markup, html};

/// A page under way: its heading alone until the page is filled in.
fn heading(title: &str) -> Markup {
    html! { h1 { (title) } }
}

/// The bench page.
pub fn bench(view: &view::Bench, _words: &Words) -> Markup {
    heading(&view.name)
}
/// The oven shelf.
pub fn shelf(view: &view::Shelf, _words: &Words) -> Markup {
    heading(&view.frame.station)
}
/// Things tied to nothing.
pub fn loose(view: &view::LoosePage, _words: &Words) -> Markup {
    heading(&view.frame.station)
}
/// A correction of a weighing, a count or a determination.
pub fn correct(view: &view::Correction, _words: &Words) -> Markup {
    heading(&view.frame.station)
}
/// A specimen; prints on A4 or Letter.
pub fn specimen(view: &view::SpecimenPage, _words: &Words) -> Markup {
    heading(&view.id)
}
/// The laboratory.
pub fn laboratory(view: &view::Laboratory, _words: &Words) -> Markup {
    heading(&view.frame.lab)
}
/// What an imported file would do.
pub fn import(view: &view::Import, _words: &Words) -> Markup {
    heading(&view.what)
}
/// Sign-in.
pub fn sign_in(view: &view::SignIn, _words: &Words) -> Markup {
    heading(&view.frame.lab)
}
/// Something went wrong.
pub fn problem(view: &view::Problem, _words: &Words) -> Markup {
    heading(&view.says)
}
