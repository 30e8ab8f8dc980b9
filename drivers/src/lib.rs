//! From bytes to signals: frames, instrument profiles, ports.
#![forbid(unsafe_code)]

pub mod heard;
pub mod port;
