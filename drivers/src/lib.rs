//! From bytes to signals: frames, instrument profiles, ports.
#![forbid(unsafe_code)]

pub mod frame;
pub mod heard;
pub mod intake;
pub mod learn;
pub mod modbus;
pub mod port;
pub mod profile;
pub mod pulse;
