//! The tarecup service, as a library for its binary and its tests.
#![forbid(unsafe_code)]

pub mod ledger;
