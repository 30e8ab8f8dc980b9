//! From bytes to signals: frames, instrument profiles, ports.
#![forbid(unsafe_code)]

pub mod frame;
pub mod heard;
pub mod intake;
pub mod learn;
pub mod port;
pub mod profile;
