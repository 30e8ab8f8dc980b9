//! When something was heard, as a value that comes in with the input.

use alloc::string::{String, ToString};
use serde::{Deserialize, Serialize};

/// Microseconds in a second.
pub const SECOND_US: i64 = 1_000_000;
/// Microseconds in an hour.
pub const HOUR_US: i64 = 3_600 * SECOND_US;

/// One start of the machine: durations measured by the monotonic clock hold
/// only within it.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
pub struct Boot(pub u32);

/// A moment: wall time for people, monotonic time for durations.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Stamp {
    /// Microseconds since 1970-01-01T00:00:00Z by the wall clock.
    pub utc_us: i64,
    /// Microseconds by the monotonic clock of this boot.
    pub mono_us: i64,
    /// Which boot `mono_us` belongs to.
    pub boot: Boot,
}

/// Which clock a duration rests on.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Basis {
    /// Both moments lie in one boot.
    Monotonic,
    /// The machine was started in between, so only wall time is left.
    Wall,
    /// The machine was started in between and something is known against its wall clock: only what is proven counts.
    Doubtful,
}

/// A duration and the clock it rests on.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Elapsed {
    /// Microseconds; negative only when a wall clock was set back.
    pub us: i64,
    /// The clock used.
    pub basis: Basis,
}

impl Elapsed {
    /// The duration in seconds.
    pub fn seconds(self) -> f64 {
        self.us as f64 / SECOND_US as f64
    }
    /// The duration in hours.
    pub fn hours(self) -> f64 {
        self.us as f64 / HOUR_US as f64
    }
}

impl Stamp {
    /// Whether this happened at that moment or later, whatever the wall clock said.
    pub fn not_before(&self, that: &Stamp) -> bool {
        (self.boot, self.mono_us) >= (that.boot, that.mono_us)
    }

    /// Time passed from `earlier` to this moment.
    pub fn since(&self, earlier: &Stamp) -> Elapsed {
        if self.boot == earlier.boot {
            Elapsed { us: self.mono_us.saturating_sub(earlier.mono_us), basis: Basis::Monotonic }
        } else {
            Elapsed { us: self.utc_us.saturating_sub(earlier.utc_us), basis: Basis::Wall }
        }
    }

    /// The same boot, this much later.
    pub fn plus_us(&self, us: i64) -> Stamp {
        Stamp { utc_us: self.utc_us.saturating_add(us), mono_us: self.mono_us.saturating_add(us), boot: self.boot }
    }

    /// UTC in RFC 3339 with six decimals, as every record and payload has it.
    pub fn rfc3339(&self) -> String {
        rfc3339(self.utc_us)
    }
}

/// UTC in RFC 3339 with six decimals. A clock outside the years −9999…9999 is
/// shown at the limit rather than refused: the raw microseconds stay stored.
pub fn rfc3339(utc_us: i64) -> String {
    use jiff::Timestamp;
    let at = Timestamp::from_microsecond(utc_us).unwrap_or(if utc_us < 0 { Timestamp::MIN } else { Timestamp::MAX });
    alloc::format!("{at:.6}").to_string()
}

/// Reads an RFC 3339 time into microseconds since 1970.
pub fn parse_rfc3339(text: &str) -> Option<i64> {
    text.parse::<jiff::Timestamp>().ok().map(|t| t.as_microsecond())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn within_a_boot_the_monotonic_clock_counts() {
        let a = Stamp { utc_us: 5_000, mono_us: 100, boot: Boot(1) };
        let b = Stamp { utc_us: 0, mono_us: 400, boot: Boot(1) };
        assert_eq!(b.since(&a), Elapsed { us: 300, basis: Basis::Monotonic });
        let c = Stamp { utc_us: 9_000, mono_us: 1, boot: Boot(2) };
        assert_eq!(c.since(&a), Elapsed { us: 4_000, basis: Basis::Wall });
    }

    #[test]
    fn times_are_written_and_read_back() {
        assert_eq!(rfc3339(0), "1970-01-01T00:00:00.000000Z");
        assert_eq!(rfc3339(1_772_439_245_123_456), "2026-03-02T08:14:05.123456Z");
        assert_eq!(parse_rfc3339("2026-03-02T08:14:05.123456Z"), Some(1_772_439_245_123_456));
        assert!(rfc3339(i64::MAX).starts_with("9999"));
    }
}
