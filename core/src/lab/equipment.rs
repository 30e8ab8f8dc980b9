//! How balances and cups were found when they were checked.

use crate::names::Operator;
use crate::quantity::Mass;
use crate::sheet::Seq;
use crate::stamp::Stamp;
use alloc::string::String;
use serde::{Deserialize, Serialize};

/// A check of a balance that waits for its mass.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct CheckBegun {
    /// With this reference mass.
    pub reference: Reference,
    /// When.
    pub at: Stamp,
    /// Who.
    pub by: Option<Operator>,
}

/// A reference mass.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Reference {
    /// Its nominal mass.
    pub nominal: Mass,
    /// Its mass by its certificate.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub certificate: Option<Mass>,
    /// Its class.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub class: Option<MassClass>,
}

/// Class of a reference mass by OIML R 111-1.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub enum MassClass {
    /// F2.
    F2,
    /// M1.
    M1,
}

/// A balance was checked with a reference mass.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct BalanceCheck {
    /// The fact.
    pub seq: Seq,
    /// When.
    pub at: Stamp,
    /// What it showed, less the reference mass.
    pub error: Mass,
    /// What it may be off by.
    pub tolerance: Mass,
    /// Who.
    pub by: Option<Operator>,
}

/// A cup was checked.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct CupCheck {
    /// The fact.
    pub seq: Seq,
    /// When.
    pub at: Stamp,
    /// Height of fall, millimetres.
    pub drop_height_mm: f64,
    /// What the wear is like.
    pub wear: String,
    /// Its base.
    pub base: String,
    /// The grooving tool.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub tool: Option<String>,
    /// Who.
    pub by: Option<Operator>,
}

impl BalanceCheck {
    /// It kept its tolerance.
    pub fn passed(&self) -> bool {
        self.error.abs() <= self.tolerance
    }
}
