//! tarecup: ties balances and a liquid-limit cup counter to moisture
//! containers, keeps the record, publishes soil limits.
//!
//! This library is the inside of the `tarecup` program; its parts are public
//! for the project's own tests, not as an interface to build on.
#![forbid(unsafe_code)]

pub mod asks;
pub mod backup;
pub mod clock;
pub mod command;
pub mod desk;
pub mod drill;
pub mod heard;
pub mod import;
pub mod keys;
pub mod labels;
pub mod ledger;
mod opening;
pub mod proof;
pub mod publish;
pub mod recording;
pub mod screen;
pub mod service;
pub mod signals;
pub mod socket;
pub mod watch;
