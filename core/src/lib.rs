//! The part of tarecup that only thinks: masses, soil limits, senses and the
//! laboratory's state. No file, clock, thread or network can be reached from
//! here; time and input come in as values, facts come out.
#![no_std]
#![forbid(unsafe_code)]

extern crate alloc;
#[cfg(test)]
extern crate std;

pub mod beside;
pub mod checks;
pub mod evaluate;
pub mod fact;
pub mod lab;
pub mod limits;
pub mod method;
pub mod names;
pub mod near;
pub mod quantity;
pub mod sense;
pub mod sheet;
pub mod signal;
pub mod soil;
pub mod stamp;
