//! The inside of the `tarecup` program.
#![forbid(unsafe_code)]

pub mod ledger;
pub mod publish;
