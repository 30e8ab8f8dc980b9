//! The lines that balances of different make-up send, written from the description of each dialect.

use crate::balance::{Shown, Value};

/// How a balance speaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum BalanceDialect {
    /// All the time: sign, mass right-aligned in ten columns, blank, `g`, two blanks, `S` or `U` for steady and unsteady.
    SignedSteady,
}

impl BalanceDialect {
    /// All of them.
    pub const ALL: [BalanceDialect; 1] = [BalanceDialect::SignedSteady];

    /// The name, as the instrument profile has it.
    pub fn name(self) -> &'static str {
        match self {
            BalanceDialect::SignedSteady => "signed-steady",
        }
    }

    /// Finds a dialect by name.
    pub fn named(name: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|d| d.name() == name)
    }

    /// It speaks only when its print key is pressed; each line is a weighing.
    pub fn on_key(self) -> bool {
        false
    }

    /// It speaks only when asked.
    pub fn asked(self) -> bool {
        self.question().is_some()
    }

    /// What must be sent to it to hear a line; `None` for one that speaks by itself.
    pub fn question(self) -> Option<&'static [u8]> {
        match self {
            BalanceDialect::SignedSteady => None,
        }
    }

    /// Takes one whole question out of what has been received; false when there is none yet. What cannot become a
    /// question is thrown away, so that the buffer stays short.
    pub fn take_request(self, received: &mut Vec<u8>) -> bool {
        let Some(question) = self.question() else {
            received.clear();
            return false;
        };
        match received.windows(question.len()).position(|w| w == question) {
            Some(at) => {
                received.drain(..at + question.len());
                true
            }
            None => {
                let keep = received.len().min(question.len().saturating_sub(1));
                received.drain(..received.len() - keep);
                false
            }
        }
    }

    /// The line for what the display shows.
    pub fn line(self, decimals: u8, shown: &Shown) -> Vec<u8> {
        match self {
            BalanceDialect::SignedSteady => signed_steady(decimals, shown).into_bytes(),
        }
    }
}

/// `+   23.4571 g  S`, overload `+ ---------- g  O`.
fn signed_steady(decimals: u8, shown: &Shown) -> String {
    match shown.value {
        Value::Mass(ug) => {
            let steady = if shown.steady { 'S' } else { 'U' };
            format!("{}{:>10} g  {steady}\r\n", sign(ug), digits(ug, decimals))
        }
        Value::Overload => "+ ---------- g  O\r\n".to_string(),
    }
}

/// `-` below zero, else `+`.
fn sign(ug: i64) -> char {
    if ug < 0 { '-' } else { '+' }
}

/// The magnitude in grams with exactly so many decimals; what lies beyond them is cut off.
fn digits(ug: i64, decimals: u8) -> String {
    let micro = ug.unsigned_abs();
    let scale = 10u64.pow(6 - u32::from(decimals.clamp(1, 4)));
    let unit = 1_000_000 / scale;
    let steps = micro / scale;
    format!("{}.{:0width$}", steps / unit, steps % unit, width = usize::from(decimals.clamp(1, 4)))
}
