//! Specimens that are tested at the same time: what can be mixed up with one another.

use crate::names::{ContainerId, SpecimenId};
use crate::quantity::Mass;
use alloc::string::String;
use alloc::vec::Vec;

/// Another specimen that is being tested.
#[derive(Clone, Debug, PartialEq)]
pub struct Beside {
    /// Which.
    pub specimen: SpecimenId,
    /// Its determinations that count.
    pub trials: Vec<BesideTrial>,
    /// Its liquid limit so far, percent.
    pub liquid: Option<f64>,
    /// Its plastic limit so far, percent.
    pub plastic: Option<f64>,
    /// When its last threads were weighed wet, UTC µs.
    pub threads_at_utc_us: Option<i64>,
}

/// A determination of it.
#[derive(Clone, Debug, PartialEq)]
pub struct BesideTrial {
    /// How checks name it: `liquid 1`.
    pub about: String,
    /// Its container.
    pub container: ContainerId,
    /// Empty, wet and latest dry mass, as far as weighed.
    pub masses: [Option<Mass>; 3],
}
