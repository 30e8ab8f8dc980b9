//! Every text of the bench screen in one place, so that it can be translated.

/// Texts of the screen in one language.
#[derive(Clone, Copy, Debug)]
pub struct Words {}

/// English.
pub const ENGLISH: Words = Words {};
