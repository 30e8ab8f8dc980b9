//! The hand at a simulated bench, so that a visitor of the demo can take part.
//! The demo gives one; the service never does.

use std::collections::BTreeMap;

/// A container that the hand can take.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Held {
    /// Its number.
    pub container: String,
    /// What is in it, in a few words.
    pub holds: String,
}

/// How things stand at the simulated bench.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Standing {
    /// Containers to take.
    pub containers: Vec<Held>,
    /// What lies on the pan.
    pub pan: Option<String>,
    /// The cup runs.
    pub cup_runs: bool,
    /// What was done last, or why it could not be.
    pub says: String,
}

/// What moves simulated instruments.
pub trait Hand: Send + Sync {
    /// The bench it works at.
    fn bench(&self) -> &str;
    /// How things stand.
    fn standing(&self) -> Standing;
    /// Does something: `do` says what. Errors are sentences.
    fn act(&self, what: &BTreeMap<String, String>) -> Result<(), String>;
}
