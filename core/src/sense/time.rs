//! Differences of stamps that hold whatever the stamps are: a replayed or
//! damaged record may carry any number, and none of them may stop a sense.

use crate::stamp::Stamp;

/// Microseconds from `from` to `to` by the monotonic clock, if both lie in one boot.
pub(super) fn within_boot(from: &Stamp, to: &Stamp) -> Option<i64> {
    (from.boot == to.boot).then(|| to.mono_us.saturating_sub(from.mono_us))
}

/// Microseconds from `from` to `to`: monotonic within a boot, wall time across boots.
pub(super) fn passed(from: &Stamp, to: &Stamp) -> i64 {
    within_boot(from, to).unwrap_or_else(|| to.utc_us.saturating_sub(from.utc_us))
}

/// The moment `us` later, at the end of time if it comes to that.
pub(super) fn later(from: &Stamp, us: i64) -> Stamp {
    Stamp { utc_us: from.utc_us.saturating_add(us), mono_us: from.mono_us.saturating_add(us), boot: from.boot }
}

/// A setting in milliseconds as microseconds.
pub(super) fn ms(setting: u32) -> i64 {
    i64::from(setting) * 1_000
}
