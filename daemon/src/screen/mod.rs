//! The bench screen.

pub mod board;
pub mod fill;
pub mod mailbox;
pub mod pages;
pub mod pictures;
pub mod view;
pub mod words;
