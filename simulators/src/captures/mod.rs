//! Captures of instruments that nobody makes: bytes as they come from a port, and what they say.
//!
//! Whoever works out an instrument's dialect from what it sent is tried on these. Every seed invents another dialect and
//! plays a session in it. The truth is written down while the lines are made, never read back from them.
//!
//! A capture is *fair* when a careful person with the bytes and the hints alone could say what each line means. One that is
//! not fair may be refused; it must not be read as something else.

mod balance;
mod check;
mod counter;
mod line;
mod number;
mod scanner;
mod score;
mod session;
mod slip;
mod surround;
mod unfair;
mod words;

pub use score::{Answer, Score, score};

use crate::rng::Rng;

/// Kinds of instrument.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// Shows masses.
    Balance,
    /// Counts the drops of a cup.
    Counter,
    /// Reads codes.
    Scanner,
}

/// What a mass includes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Basis {
    /// Everything on the pan.
    Gross,
    /// Without what was tared away.
    Net,
    /// The dialect does not say.
    Unmarked,
}

/// A mass that a line says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Reading {
    /// The mass in micrograms, exactly as printed.
    pub mass_ug: i64,
    /// What the dialect says of rest; `None` where it has no marks.
    pub steady: Option<bool>,
    /// What the mass includes.
    pub basis: Basis,
    /// Whoever understands the dialect reads it; else it may be left out with reason, such as the first line heard.
    pub must: bool,
}

/// What a counter says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Count {
    /// One drop, without a number.
    Drop,
    /// Drops since the counter was at zero.
    Total(u32),
    /// The run is over, perhaps with its count.
    End(Option<u32>),
}

/// A code that was read, free of what the scanner puts around it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Code {
    /// The text.
    pub text: String,
    /// As [`Reading::must`].
    pub must: bool,
}

/// What a capture says.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Truth {
    /// The kind of instrument.
    pub kind: Kind,
    /// Masses, in order.
    pub readings: Vec<Reading>,
    /// Counts, in order, each with whether it must be read.
    pub counts: Vec<(Count, bool)>,
    /// Codes, in order.
    pub codes: Vec<Code>,
    /// The evidence suffices.
    pub fair: bool,
    /// The bytes show what the marks of steadiness mean.
    pub steady_evident: bool,
    /// The bytes show which masses are net.
    pub basis_evident: bool,
}

impl Truth {
    /// Nothing said yet.
    pub fn new(kind: Kind) -> Self {
        Self {
            kind,
            readings: Vec::new(),
            counts: Vec::new(),
            codes: Vec::new(),
            fair: true,
            steady_evident: true,
            basis_evident: true,
        }
    }
}

/// What a person told beforehand.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Told {
    /// Masses that were put on the pan, in micrograms.
    pub masses_ug: Vec<i64>,
    /// The unit, as printed on the instrument.
    pub unit: Option<&'static str>,
    /// The kind of instrument.
    pub kind: Option<Kind>,
}

/// Bytes of one session with one instrument.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Capture {
    /// The bytes.
    pub bytes: Vec<u8>,
    /// What it is, for people.
    pub about: String,
    /// What was told beforehand.
    pub told: Told,
    /// What it says.
    pub truth: Truth,
}

/// Invents a dialect and plays a session in it.
pub fn generate(seed: u64) -> Capture {
    let mut rng = Rng::new(seed);
    let mut capture = match rng.between(0, 99) {
        0..=8 => unfair::capture(&mut rng),
        9..=68 => balance::capture(&mut rng),
        69..=76 => slip::capture(&mut rng),
        77..=89 => counter::capture(&mut rng),
        _ => scanner::capture(&mut rng),
    };
    // What comes first may have begun before anybody listened.
    if let Some(first) = capture.truth.readings.first_mut() {
        first.must = false;
    }
    if let Some(first) = capture.truth.counts.first_mut() {
        first.1 = false;
    }
    if let Some(first) = capture.truth.codes.first_mut() {
        first.must = false;
    }
    capture
}

/// One of several.
fn pick<T: Clone>(rng: &mut Rng, of: &[T]) -> T {
    let last = i64::try_from(of.len()).unwrap_or(1) - 1;
    of[usize::try_from(rng.between(0, last)).unwrap_or(0)].clone()
}

/// A size from `low` to `high`.
fn size(rng: &mut Rng, low: usize, high: usize) -> usize {
    let bound = |n: usize| i64::try_from(n).unwrap_or(i64::MAX);
    usize::try_from(rng.between(bound(low), bound(high))).unwrap_or(low)
}

#[cfg(test)]
mod tests;
