//! Cup counters: one closure of the groove as timed bytes.

use crate::Timed;
use crate::rng::Rng;

/// How a counter speaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum CupDialect {
    /// `DROP n` with each drop, n from 1; `STOP n` at the end.
    RunningTotal,
    /// `tick` with each drop and nothing at the end.
    DropLine,
    /// `*` with each drop, no line end; `=n` and CR LF at the end.
    BytePerDrop,
}

/// Shortest and longest time between drops that a run may ask for, µs.
const INTERVAL_US: std::ops::RangeInclusive<f64> = 20_000.0..=20_000_000.0;
/// A doubled drop comes this long after the first, µs: contact bounce, well within any debounce.
const BOUNCE_US: u64 = 40_000;
/// From the last drop to the end line, µs: the operator's hand on the switch.
const STOP_US: u64 = 1_200_000;
/// Most drops in one run.
pub const DROPS_MAX: u32 = 2_000;

/// Why a run cannot be played.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum CupError {
    /// Rate out of range.
    #[error("a cup cannot drop {0} times a second; give a rate from 0.05 to 50")]
    Rate(f64),
    /// Number of drops out of range.
    #[error("a run of {0} drops cannot be played; give 1 to 2000")]
    Drops(u32),
}

impl CupDialect {
    /// All of them.
    pub const ALL: [CupDialect; 3] = [CupDialect::RunningTotal, CupDialect::DropLine, CupDialect::BytePerDrop];

    /// The name, as the instrument profile has it.
    pub fn name(self) -> &'static str {
        match self {
            CupDialect::RunningTotal => "running-total",
            CupDialect::DropLine => "drop-line",
            CupDialect::BytePerDrop => "byte-per-drop",
        }
    }

    /// Finds a dialect by name.
    pub fn named(name: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|d| d.name() == name)
    }

    /// The bytes of the drop with this running number.
    pub fn drop_bytes(self, number: u32) -> Vec<u8> {
        match self {
            CupDialect::RunningTotal => format!("DROP {number}\r\n").into_bytes(),
            CupDialect::DropLine => b"tick\r\n".to_vec(),
            CupDialect::BytePerDrop => b"*".to_vec(),
        }
    }

    /// The bytes at the end of a run; `None` where the dialect has no such line.
    pub fn end_bytes(self, total: u32) -> Option<Vec<u8>> {
        match self {
            CupDialect::RunningTotal => Some(format!("STOP {total}\r\n").into_bytes()),
            CupDialect::DropLine => None,
            CupDialect::BytePerDrop => Some(format!("={total}\r\n").into_bytes()),
        }
    }
}

/// One closure of the groove.
#[derive(Clone, Debug, PartialEq)]
pub struct CupRun {
    /// Drops that truly fall.
    pub drops: u32,
    /// Drops per second, from the first to the last drop.
    pub rate_per_s: f64,
    /// Each drop but the first and the last may come this much early or late, µs: the rate of the whole run stays exact.
    pub jitter_us: u32,
    /// Drops (by number, from 1) of which nothing is sent.
    pub missed: Vec<u32>,
    /// Drops that are sent twice.
    pub doubled: Vec<u32>,
    /// Whether the end line is sent, where the dialect has one.
    pub end: bool,
}

impl CupRun {
    /// A faultless run.
    pub fn clean(drops: u32, rate_per_s: f64) -> Self {
        Self { drops, rate_per_s, jitter_us: 0, missed: Vec::new(), doubled: Vec::new(), end: true }
    }

    /// Refuses what no cup does.
    pub fn check(&self) -> Result<(), CupError> {
        // Written so that a rate that is not a number is refused too.
        if !INTERVAL_US.contains(&(1e6 / self.rate_per_s)) {
            return Err(CupError::Rate(self.rate_per_s));
        }
        if self.drops == 0 || self.drops > DROPS_MAX {
            return Err(CupError::Drops(self.drops));
        }
        Ok(())
    }

    /// From the first drop to the end line, or to the last drop where none is sent, µs.
    pub fn lasts_us(&self) -> u64 {
        (f64::from(self.drops.saturating_sub(1)) * 1e6 / self.rate_per_s).round() as u64 + STOP_US
    }

    /// The bytes with the delay of each after the one before; the first drop falls at once.
    pub fn bytes(&self, dialect: CupDialect, rng: &mut Rng) -> Result<Vec<Timed>, CupError> {
        self.check()?;
        let interval = 1e6 / self.rate_per_s;
        let jitter = i64::from(self.jitter_us).min((interval * 0.2) as i64);
        let mut at: Vec<(u64, Vec<u8>)> = Vec::new();
        for number in 1..=self.drops {
            let exact = (f64::from(number - 1) * interval).round() as u64;
            let inner = number > 1 && number < self.drops;
            let falls = if inner { exact.saturating_add_signed(rng.between(-jitter, jitter)) } else { exact };
            if self.missed.contains(&number) {
                continue;
            }
            at.push((falls, dialect.drop_bytes(number)));
            if self.doubled.contains(&number) {
                at.push((falls + BOUNCE_US.min(interval as u64 / 4), dialect.drop_bytes(number)));
            }
        }
        if let (true, Some(bytes)) = (self.end, dialect.end_bytes(self.drops)) {
            at.push((self.lasts_us(), bytes));
        }
        Ok(delays(at))
    }
}

/// Times from the start become delays after the one before.
fn delays(at: Vec<(u64, Vec<u8>)>) -> Vec<Timed> {
    let mut before = 0;
    at.into_iter()
        .map(|(time, bytes)| {
            let delay = time.saturating_sub(before);
            before = before.max(time);
            (delay, bytes)
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn text(run: &CupRun, dialect: CupDialect) -> String {
        let timed = run.bytes(dialect, &mut Rng::new(1)).unwrap();
        timed.iter().map(|(_, b)| String::from_utf8_lossy(b).into_owned()).collect()
    }

    #[test]
    fn missed_and_doubled_drops_show_where_they_were() {
        let run = CupRun { missed: vec![2], doubled: vec![3], ..CupRun::clean(4, 2.0) };
        assert_eq!(text(&run, CupDialect::RunningTotal), "DROP 1\r\nDROP 3\r\nDROP 3\r\nDROP 4\r\nSTOP 4\r\n");
        assert_eq!(text(&run, CupDialect::DropLine), "tick\r\n".repeat(4));
        assert_eq!(text(&run, CupDialect::BytePerDrop), "****=4\r\n");
        assert_eq!(text(&CupRun { end: false, ..CupRun::clean(2, 2.0) }, CupDialect::BytePerDrop), "**");
    }

    #[test]
    fn the_rate_is_exact_from_first_to_last_drop_despite_jitter() {
        let run = CupRun { jitter_us: 30_000, ..CupRun::clean(31, 2.0) };
        let timed = run.bytes(CupDialect::RunningTotal, &mut Rng::new(9)).unwrap();
        let to_last: u64 = timed[..31].iter().map(|(d, _)| d).sum();
        assert_eq!(to_last, 15_000_000);
        assert!(timed[1..31].iter().any(|(d, _)| *d != 500_000), "no jitter at all");
        assert!(timed[1..31].iter().all(|(d, _)| (440_000..=560_000).contains(d)));
        assert_eq!(timed.iter().map(|(d, _)| d).sum::<u64>(), run.lasts_us());
    }

    #[test]
    fn impossible_runs_are_refused() {
        for rate in [0.0, -1.0, f64::NAN, f64::INFINITY, 1e9] {
            assert!(matches!(CupRun::clean(5, rate).check(), Err(CupError::Rate(_))), "{rate}");
        }
        assert_eq!(CupRun::clean(0, 2.0).check(), Err(CupError::Drops(0)));
        assert_eq!(CupRun::clean(2_001, 2.0).check(), Err(CupError::Drops(2_001)));
        assert_eq!(CupRun::clean(2_000, 2.0).check(), Ok(()));
    }
}
