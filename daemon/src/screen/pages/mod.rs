//! The pages: view in, HTML out. Pure functions.
//!
//! What guided the layout, from public descriptions of them: ANSI/ISA-101.01
//! (grey while all is normal, colour only for what needs a person),
//! ISO 9241-110 (self-descriptive, forgiving of slips), MIL-STD-1472 (keys for
//! a gloved finger at least 19 mm across, here 72 CSS pixels), WCAG 2.2.
//!
//! No page carries a script or a style of its own, so that the policy of the
//! server can forbid both.

pub mod regions;

mod advice;
mod bench;
mod correct;
mod door;
mod import;
mod keys;
mod laboratory;
mod loose;
mod parts;
mod shelf;
mod shell;
mod specimen;
#[cfg(test)]
mod tests;
mod work;

pub use specimen::short_code;

use super::view;
use super::words::Words;
use maud::Markup;

/// Style sheet, at `/assets/style.css`.
pub const STYLE: &str = include_str!("../assets/style.css");
/// Script, at `/assets/script.js`.
pub const SCRIPT: &str = include_str!("../assets/script.js");
/// Icon of the pages, at `/assets/icon.svg`.
pub const ICON: &str = include_str!("../assets/icon.svg");

/// The bench page.
pub fn bench(view: &view::Bench, words: &Words) -> Markup {
    bench::page(view, words)
}
/// The oven shelf.
pub fn shelf(view: &view::Shelf, words: &Words) -> Markup {
    shelf::page(view, words)
}
/// Things tied to nothing.
pub fn loose(view: &view::LoosePage, words: &Words) -> Markup {
    loose::page(view, words)
}
/// A correction of a weighing, a count or a determination.
pub fn correct(view: &view::Correction, words: &Words) -> Markup {
    correct::page(view, words)
}
/// A specimen; prints on A4 or Letter.
pub fn specimen(view: &view::SpecimenPage, words: &Words) -> Markup {
    specimen::page(view, words)
}
/// The laboratory.
pub fn laboratory(view: &view::Laboratory, words: &Words) -> Markup {
    laboratory::page(view, words)
}
/// What an imported file would do.
pub fn import(view: &view::Import, words: &Words) -> Markup {
    import::page(view, words)
}
/// Sign-in.
pub fn sign_in(view: &view::SignIn, words: &Words) -> Markup {
    door::sign_in(view, words)
}
/// Something went wrong.
pub fn problem(view: &view::Problem, words: &Words) -> Markup {
    door::problem(view, words)
}
