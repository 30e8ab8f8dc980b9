//! The bench screen.

pub mod fill;
pub mod pages;
pub mod pictures;
pub mod view;
pub mod words;
