//! How much of each port has been taken by the desk: what the demo waits for
//! before its virtual day goes on.

use std::collections::BTreeMap;
use std::sync::{Condvar, Mutex, PoisonError};
use std::time::{Duration, Instant};

/// Bytes taken, by instrument.
#[derive(Default)]
pub struct Heard {
    bytes: Mutex<BTreeMap<u16, u64>>,
    more: Condvar,
}

impl Heard {
    /// Adds what a step has taken.
    pub fn add(&self, taken: &[(u16, u64)]) {
        if taken.is_empty() {
            return;
        }
        let mut bytes = self.bytes.lock().unwrap_or_else(PoisonError::into_inner);
        for (instrument, n) in taken {
            *bytes.entry(*instrument).or_default() += n;
        }
        drop(bytes);
        self.more.notify_all();
    }

    /// Waits until at least so many bytes of an instrument were taken; false after the timeout.
    pub fn wait(&self, instrument: u16, at_least: u64, timeout: Duration) -> bool {
        let until = Instant::now() + timeout;
        let mut bytes = self.bytes.lock().unwrap_or_else(PoisonError::into_inner);
        while bytes.get(&instrument).copied().unwrap_or(0) < at_least {
            let left = until.saturating_duration_since(Instant::now());
            if left.is_zero() {
                return false;
            }
            bytes = self.more.wait_timeout(bytes, left).unwrap_or_else(PoisonError::into_inner).0;
        }
        true
    }
}
