//! What is known of the wall clock: where it jumped, and whether it can be trusted.
//!
//! Order rests on numbers and durations within one start of the machine on the
//! clock that only runs forward. What is left to the wall clock is a duration
//! across starts of the machine, and that is proven only where nothing is known
//! against it.

use super::{Lab, New, Refusal};
use crate::fact::Fact;
use crate::names::Operator;
use crate::stamp::{Boot, Stamp, rfc3339};
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

/// Marks that are kept; older ones stay in the ledger.
const MARKS_KEPT: usize = 100;

/// What was noticed of the wall clock.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(tag = "clock", rename_all = "snake_case")]
pub enum ClockSeen {
    /// It moved against the clock that only runs forward.
    Stepped {
        /// By so much, µs; negative when it was set back.
        by_us: i64,
        /// It can be right where it is now.
        trusted: bool,
    },
    /// It is earlier than it can be.
    Untrusted {
        /// It cannot be earlier than this, UTC µs.
        not_before_utc_us: i64,
    },
    /// It is no longer earlier than it can be.
    Caught,
}

/// A moment at which something was noticed of the wall clock.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct ClockMark {
    /// When.
    pub at: Stamp,
    /// Whether it could be trusted from then on.
    pub trusted: bool,
}

/// What is known of the wall clock.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct ClockRecord {
    /// What was noticed, in order.
    pub marks: Vec<ClockMark>,
    /// While it is not trusted: it cannot be earlier than this, UTC µs.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub not_before_utc_us: Option<i64>,
}

/// Moments in the order in which they happened, whatever the wall clock said.
fn order(at: &Stamp) -> (Boot, i64) {
    (at.boot, at.mono_us)
}

impl ClockRecord {
    /// Whether nothing is known against the wall clock now.
    pub fn trusted(&self) -> bool {
        self.marks.last().is_none_or(|m| m.trusted)
    }

    /// Whether something is known against the wall clock at one of two moments or in between.
    pub(super) fn doubtful(&self, from: &Stamp, to: &Stamp) -> bool {
        let (from, to) = (order(from), order(to));
        let until = self.marks.iter().take_while(|m| order(&m.at) <= to);
        let mut before = true;
        for mark in until {
            if order(&mark.at) > from {
                return true;
            }
            before = mark.trusted;
        }
        !before
    }

    /// What is the matter with it, in words.
    pub fn says(&self) -> Option<String> {
        let mark = self.marks.last().filter(|m| !m.trusted)?;
        let least = self.not_before_utc_us.map_or(String::new(), |us| format!(", and it must be later than {}", rfc3339(us)));
        Some(format!(
            "the clock of this machine cannot be right: it said {}{least}; set it. Nothing is lost: order and hours within a start of the machine do not rest on it",
            mark.at.rfc3339()
        ))
    }

    fn mark(&mut self, at: Stamp, trusted: bool, not_before_utc_us: Option<i64>) {
        self.marks.push(ClockMark { at, trusted });
        if self.marks.len() > MARKS_KEPT {
            self.marks.remove(0);
        }
        self.not_before_utc_us = not_before_utc_us.filter(|_| !trusted);
    }

    pub(super) fn apply(&mut self, fact: &Fact, at: Stamp) {
        match fact {
            Fact::ClockStepped { by_us, trusted } => {
                let least = self.not_before_utc_us.unwrap_or_else(|| at.utc_us.saturating_sub(*by_us));
                self.mark(at, *trusted, Some(least));
            }
            Fact::ClockUntrusted { not_before_utc_us } => self.mark(at, false, Some(*not_before_utc_us)),
            Fact::ClockTrusted { .. } => self.mark(at, true, None),
            _ => (),
        }
    }
}

impl Lab {
    /// What is known of the wall clock.
    pub fn clock(&self) -> &ClockRecord {
        &self.clock
    }

    pub(super) fn clock_seen(&self, seen: &ClockSeen) -> Vec<New> {
        let fact = match *seen {
            ClockSeen::Stepped { by_us, trusted } => Fact::ClockStepped { by_us, trusted },
            ClockSeen::Untrusted { not_before_utc_us } => Fact::ClockUntrusted { not_before_utc_us },
            ClockSeen::Caught => Fact::ClockTrusted { why: String::from("it is later again than it has to be") },
        };
        alloc::vec![New::plain(fact)]
    }

    /// A person looked and says that the clock is right: what seemed later before was the error.
    pub(super) fn ask_clock_right(&self, who: Operator, why: String) -> Result<Vec<New>, Refusal> {
        super::ask::needs_words(&why)?;
        if self.clock.trusted() {
            return Err(super::ask::no(String::from("nothing is known against the clock; there is nothing to answer")));
        }
        Ok(alloc::vec![New::by(Some(who), Fact::ClockTrusted { why })])
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(boot: u32, mono: i64, utc: i64) -> Stamp {
        Stamp { utc_us: utc, mono_us: mono, boot: Boot(boot) }
    }

    #[test]
    fn a_duration_is_doubtful_across_a_mark_and_from_an_untrusted_moment() {
        let mut clock = ClockRecord::default();
        assert!(!clock.doubtful(&at(1, 0, 0), &at(2, 0, 100)));
        clock.apply(&Fact::ClockUntrusted { not_before_utc_us: 1_000 }, at(2, 10, 5));
        assert!(!clock.trusted() && clock.says().is_some_and(|s| s.contains("1970-01-01T00:00:00.001000Z")));
        assert!(!clock.doubtful(&at(1, 0, 0), &at(2, 9, 4)), "before the mark");
        assert!(clock.doubtful(&at(1, 0, 0), &at(2, 11, 6)), "across it");
        assert!(clock.doubtful(&at(2, 11, 6), &at(3, 1, 2_000)), "from where it was wrong");
        clock.apply(&Fact::ClockStepped { by_us: 3_000, trusted: true }, at(2, 20, 3_015));
        assert!(clock.trusted() && clock.says().is_none());
        assert!(!clock.doubtful(&at(2, 21, 3_016), &at(3, 1, 4_000)), "after it was set");
        assert!(clock.doubtful(&at(2, 19, 14), &at(3, 1, 4_000)));
    }

    #[test]
    fn marks_do_not_grow_for_ever() {
        let mut clock = ClockRecord::default();
        (0..500).for_each(|n| clock.apply(&Fact::ClockStepped { by_us: 9_000_000, trusted: true }, at(1, n, n)));
        assert_eq!(clock.marks.len(), MARKS_KEPT);
    }
}
