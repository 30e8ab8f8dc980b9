//! Text in, settings or pointed faults out: the configuration file
//! ([`station`]), scenario and sheet files ([`scenario`]), method files
//! ([`methods`]) and the shipped profiles ([`profiles`]).
//!
//! Nothing here touches the disk except [`text::read_file`] and
//! [`station::load`], which reads through it. Every fault has a file, a line, a
//! column and a remedy; one pass reports as many as it can tell apart.
#![forbid(unsafe_code)]

pub mod defaults;
mod depth;
mod embedded;
pub mod fault;
mod keys;
pub mod learned;
pub mod methods;
pub mod profiles;
mod reader;
pub mod scenario;
pub mod schema;
pub mod station;
pub mod text;

pub use fault::{Fault, Faults, Place, Placed};
