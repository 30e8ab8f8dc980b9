//! The wall clock, watched against the one that only runs forward.
//!
//! What is noticed is stored as an input like any other, so that deciding again
//! from the ledger comes to the same facts.

use tarecup_core::lab::clock::{ClockRecord, ClockSeen};
use tarecup_core::stamp::{HOUR_US, SECOND_US, Stamp};

/// A clock that is only being slowed or hurried into place does not move more than this at once, µs…
const AT_ONCE_US: i64 = SECOND_US / 2;
/// …nor by more than this share of the time passed.
const SLEW: i64 = 1_000;
/// Set back further than this below the time that has passed, it is no correction but an error.
const FAR_US: i64 = 24 * HOUR_US;
/// 2026-01-01: no record of this program is older than the program.
const MADE_UTC_US: i64 = 1_767_225_600_000_000;

/// Watches the wall clock from one look to the next.
#[derive(Default)]
pub(super) struct ClockWatch {
    last: Option<Stamp>,
    /// A moment at which it was trusted: with the time passed since, it tells what the clock must about say.
    line: Option<Stamp>,
}

/// By how much the wall clock moved against the other between two moments of one start of the machine.
fn stepped(before: &Stamp, now: &Stamp) -> Option<i64> {
    let passed = now.mono_us.saturating_sub(before.mono_us);
    let by_us = now.utc_us.saturating_sub(before.utc_us).saturating_sub(passed);
    (by_us.saturating_abs() > AT_ONCE_US + passed.max(0) / SLEW).then_some(by_us)
}

impl ClockWatch {
    /// The service comes up; `last` is the latest input in the ledger.
    pub fn start(&mut self, last: Option<Stamp>, now: &Stamp, known: &ClockRecord) -> Option<ClockSeen> {
        (self.last, self.line) = (last, last);
        let seen = match last.filter(|l| l.boot == now.boot) {
            Some(_) => self.look(now, known),
            None => across(last, now, known),
        };
        (self.last, self.line) = (Some(*now), Some(*now));
        seen
    }

    /// What is to be said of the clock now.
    pub fn look(&mut self, now: &Stamp, known: &ClockRecord) -> Option<ClockSeen> {
        let before = self.last.replace(*now)?;
        let Some(by_us) = (before.boot == now.boot).then(|| stepped(&before, now)).flatten() else {
            let caught = known.not_before_utc_us.is_some_and(|least| now.utc_us >= least);
            return (!known.trusted() && caught).then_some(ClockSeen::Caught);
        };
        let line = self.line.unwrap_or(before);
        let passed = now.mono_us.saturating_sub(line.mono_us);
        let least = match known.not_before_utc_us.filter(|_| !known.trusted()) {
            Some(least) => least,
            None => line.utc_us.saturating_add(passed).saturating_sub(FAR_US),
        };
        let trusted = now.utc_us >= least.max(MADE_UTC_US);
        if trusted && !known.trusted() {
            self.line = Some(*now);
        }
        Some(ClockSeen::Stepped { by_us, trusted })
    }
}

/// Another start of the machine: all that is known is that it came later.
fn across(last: Option<Stamp>, now: &Stamp, known: &ClockRecord) -> Option<ClockSeen> {
    let recorded = last.filter(|_| known.trusted()).map(|l| l.utc_us);
    let least = known.not_before_utc_us.or(recorded).unwrap_or(MADE_UTC_US).max(MADE_UTC_US);
    let right = now.utc_us >= least.saturating_sub(SECOND_US);
    match (known.trusted(), right) {
        (true, false) => Some(ClockSeen::Untrusted { not_before_utc_us: least }),
        (false, true) => Some(ClockSeen::Caught),
        _ => None,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use tarecup_core::stamp::Boot;

    const NOW: i64 = 1_790_000_000_000_000;

    fn at(boot: u32, mono_s: i64, utc_us: i64) -> Stamp {
        Stamp { utc_us, mono_us: mono_s * SECOND_US, boot: Boot(boot) }
    }

    fn marked(trusted: bool, least: Option<i64>) -> ClockRecord {
        let marks = vec![tarecup_core::lab::clock::ClockMark { at: Stamp::default(), trusted }];
        ClockRecord { marks, not_before_utc_us: least }
    }

    #[test]
    fn a_clock_that_runs_evenly_or_is_slewed_says_nothing() {
        let (mut watch, known) = (ClockWatch::default(), ClockRecord::default());
        assert_eq!(watch.start(None, &at(1, 5, NOW), &known), None);
        assert_eq!(watch.look(&at(1, 6, NOW + SECOND_US), &known), None);
        // 500 parts in a million for a day is 43 s, and no step.
        let slewed = NOW + SECOND_US + 86_400 * SECOND_US + 43 * SECOND_US;
        assert_eq!(watch.look(&at(1, 86_406, slewed), &known), None);
    }

    #[test]
    fn steps_are_told_with_their_size_and_whether_the_clock_can_be_right() {
        let (mut watch, known) = (ClockWatch::default(), ClockRecord::default());
        watch.start(None, &at(1, 0, NOW), &known);
        let hour = 3_600 * SECOND_US;
        let back = ClockSeen::Stepped { by_us: -hour, trusted: true };
        assert_eq!(watch.look(&at(1, 1, NOW + SECOND_US - hour), &known), Some(back));
        let gone = watch.look(&at(1, 2, 2 * SECOND_US), &known);
        assert!(matches!(gone, Some(ClockSeen::Stepped { trusted: false, .. })), "1970: {gone:?}");
        let known = marked(false, Some(NOW + SECOND_US));
        assert_eq!(watch.look(&at(1, 3, 3 * SECOND_US), &known), None, "said once");
        let set = watch.look(&at(1, 4, NOW + 4 * SECOND_US), &known);
        assert!(matches!(set, Some(ClockSeen::Stepped { trusted: true, .. })), "{set:?}");
        // Years ahead and back again: where it comes back to is what the time passed says.
        let known = marked(true, None);
        let year = 365 * 24 * hour;
        watch.look(&at(1, 5, NOW + 10 * year), &known);
        let back = watch.look(&at(1, 6, NOW + 6 * SECOND_US), &known);
        assert!(matches!(back, Some(ClockSeen::Stepped { trusted: true, .. })), "{back:?}");
    }

    #[test]
    fn another_start_with_an_earlier_clock_is_noticed_and_so_is_its_end() {
        let known = ClockRecord::default();
        let last = Some(at(1, 9, NOW));
        let seen = ClockWatch::default().start(last, &at(2, 1, 60 * SECOND_US), &known);
        assert_eq!(seen, Some(ClockSeen::Untrusted { not_before_utc_us: NOW }));
        // Control: a later clock says nothing.
        assert_eq!(ClockWatch::default().start(last, &at(2, 1, NOW + 60), &known), None);
        let known = marked(false, Some(NOW));
        assert_eq!(ClockWatch::default().start(last, &at(3, 1, 90 * SECOND_US), &known), None, "still wrong, said before");
        assert_eq!(ClockWatch::default().start(last, &at(3, 1, NOW + 1), &known), Some(ClockSeen::Caught));
        // A new ledger on a machine that never knew the time.
        let fresh = ClockWatch::default().start(None, &at(1, 1, 5), &ClockRecord::default());
        assert_eq!(fresh, Some(ClockSeen::Untrusted { not_before_utc_us: MADE_UTC_US }));
        // Set while the service was away, in the same start of the machine.
        let away = ClockWatch::default().start(last, &at(1, 19, NOW + 100 * SECOND_US), &ClockRecord::default());
        assert_eq!(away, Some(ClockSeen::Stepped { by_us: 90 * SECOND_US, trusted: true }));
    }
}
