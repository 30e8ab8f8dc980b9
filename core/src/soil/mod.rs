//! Pure computation: from masses and drops to limits and indices.
//!
//! Nothing here knows a laboratory, a method file's origin or a ledger; every
//! function is total and its errors say what to do.

pub mod chart;
pub mod determined;
pub mod flow;
pub mod indices;
pub mod limits;
pub mod line;
pub mod precision;
pub mod rounding;
pub mod slopes;
pub mod stats;
pub mod student;
pub mod uncertainty;
pub mod water;

/// Drops at which the liquid limit is read off the flow line. This is the
/// definition of the limit in the cup (T 89, D4318), not a number of one method.
pub const DROPS_AT_LIMIT: f64 = 25.0;
