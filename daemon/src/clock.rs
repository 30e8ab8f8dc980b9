//! Where stamps come from: the machine's clocks, or a virtual day.

use std::sync::OnceLock;
use std::sync::atomic::{AtomicI64, AtomicU32, Ordering};
use std::time::Instant;
use tarecup_core::stamp::{Boot, Stamp};
use tarecup_drivers::heard::Clock;

/// The machine's clocks.
pub struct MachineClock {
    boot: AtomicU32,
}

impl MachineClock {
    /// A clock whose boot number is told once the ledger is open.
    pub fn new() -> Self {
        Self { boot: AtomicU32::new(0) }
    }
}

impl Default for MachineClock {
    fn default() -> Self {
        Self::new()
    }
}

/// A clock that the ledger can tell which boot it runs in.
pub trait BootClock: Clock {
    /// From now on, stamps belong to this boot.
    fn set_boot(&self, boot: Boot);
}

impl BootClock for MachineClock {
    fn set_boot(&self, boot: Boot) {
        self.boot.store(boot.0, Ordering::Relaxed);
    }
}

impl Clock for MachineClock {
    fn now(&self) -> Stamp {
        // The clock that also counts while the machine sleeps: an oven does not sleep with it.
        let mono = rustix::time::clock_gettime(rustix::time::ClockId::Boottime);
        let mono_us = mono.tv_sec.saturating_mul(1_000_000).saturating_add(mono.tv_nsec / 1_000);
        Stamp { utc_us: wall_us(), mono_us, boot: Boot(self.boot.load(Ordering::Relaxed)) }
    }
}

/// Wall time, asked by way of the C library: so it can be put wrong for tests without putting the machine's clock wrong.
fn wall_us() -> i64 {
    let us = |d: std::time::Duration| i64::try_from(d.as_micros()).unwrap_or(i64::MAX);
    std::time::SystemTime::now().duration_since(std::time::UNIX_EPOCH).map_or_else(|before| -us(before.duration()), us)
}

/// A clock that stands still until it is set: the demo's virtual day.
pub struct VirtualClock {
    utc_us: AtomicI64,
    boot: AtomicU32,
    runs_since: OnceLock<Instant>,
}

impl VirtualClock {
    /// Starts at a moment.
    pub fn new(utc_us: i64) -> Self {
        Self { utc_us: AtomicI64::new(utc_us), boot: AtomicU32::new(0), runs_since: OnceLock::new() }
    }
    /// Moves on; never back.
    pub fn set(&self, utc_us: i64) {
        self.utc_us.fetch_max(utc_us, Ordering::Relaxed);
    }
    /// From now on it goes as fast as any clock.
    pub fn run(&self) {
        self.runs_since.get_or_init(Instant::now);
    }
    /// Leaps ahead.
    pub fn leap(&self, us: i64) {
        self.utc_us.fetch_add(us, Ordering::Relaxed);
    }
}

impl BootClock for VirtualClock {
    fn set_boot(&self, boot: Boot) {
        self.boot.store(boot.0, Ordering::Relaxed);
    }
}

impl Clock for VirtualClock {
    fn now(&self) -> Stamp {
        let ran = self.runs_since.get().map_or(0, |since| i64::try_from(since.elapsed().as_micros()).unwrap_or(0));
        let utc_us = self.utc_us.load(Ordering::Relaxed) + ran;
        Stamp { utc_us, mono_us: utc_us, boot: Boot(self.boot.load(Ordering::Relaxed)) }
    }
}

/// The kernel's name for this start of the machine.
pub fn boot_id() -> String {
    let text = std::fs::read_to_string("/proc/sys/kernel/random/boot_id").unwrap_or_default();
    let text = text.trim();
    // Without it every start of the service counts as a start of the machine: durations then rest on wall time.
    if text.is_empty() { format!("unknown-{}", std::process::id()) } else { text.to_string() }
}
