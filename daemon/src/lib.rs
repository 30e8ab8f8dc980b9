//! The parts of the `tarecup` service that tests and the program itself share.

#![forbid(unsafe_code)]
#![deny(missing_docs)]

pub mod publish;
