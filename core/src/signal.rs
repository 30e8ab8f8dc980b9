//! What an instrument said, after its dialect has been understood.

use crate::quantity::Mass;
use alloc::string::String;
use serde::{Deserialize, Serialize};

/// One understood message of an instrument.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Signal {
    /// A balance showed a mass.
    Mass(Reading),
    /// The pan holds more than the balance can weigh.
    Overload,
    /// The pan reads below what the balance can show.
    Underload,
    /// The instrument says that it cannot measure now.
    NotReady,
    /// The cup dropped once.
    Drop,
    /// The cup has dropped this often since the counter was last at zero.
    Total(u32),
    /// The counter says that the run is over, perhaps with its final count.
    End(Option<u32>),
    /// A scanner read this text (already freed of prefixes and suffixes).
    Code(String),
}

/// A mass as a balance showed it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Reading {
    /// The mass, exactly as printed.
    pub mass: Mass,
    /// One step of the last printed digit.
    pub step: Mass,
    /// What the balance says of steadiness.
    pub mark: Mark,
    /// What the balance says of its tare.
    pub basis: Basis,
}

/// A balance's own word about steadiness.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Mark {
    /// Marked steady.
    Steady,
    /// Marked as still moving.
    Moving,
    /// The dialect has no such mark.
    #[default]
    Unmarked,
}

/// Whether a printed mass includes the container.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Basis {
    /// Everything on the pan.
    Gross,
    /// What was tared away on the balance is left out.
    Net,
    /// The dialect does not say; taken as gross.
    #[default]
    Unmarked,
}
