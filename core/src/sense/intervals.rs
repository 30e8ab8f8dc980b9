//! Which intervals between drops were too long, in bounded memory.

use alloc::vec::Vec;

/// So many intervals are kept. A liquid-limit run has about 10 to 50 drops, so
/// the whole run is judged by its own median; only a run far beyond any test is
/// judged by the median of its first intervals.
const KEPT: usize = 256;
/// Below this many intervals no usual one can be told.
const FEWEST: usize = 3;

/// The intervals of one run.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Intervals {
    kept: Vec<i64>,
    /// Set once `kept` is full.
    usual_x2: Option<i64>,
    long_later: u32,
}

impl Intervals {
    /// Takes the next interval, microseconds.
    pub(super) fn push(&mut self, us: i64, gap_percent: u32) {
        if let Some(usual_x2) = self.usual_x2 {
            self.long_later = self.long_later.saturating_add(u32::from(is_long(us, usual_x2, gap_percent)));
            return;
        }
        self.kept.push(us);
        if self.kept.len() == KEPT {
            self.usual_x2 = median_x2(&self.kept);
        }
    }

    /// Whether the latest interval was longer than `gap_percent` of the median one.
    pub(super) fn latest_is_long(&self, gap_percent: u32) -> bool {
        if self.kept.len() < FEWEST || self.usual_x2.is_some() {
            return false;
        }
        let latest = self.kept.last().zip(median_x2(&self.kept));
        latest.is_some_and(|(us, usual_x2)| is_long(*us, usual_x2, gap_percent))
    }

    /// How many intervals were longer than `gap_percent` of the median one.
    pub(super) fn gaps(&self, gap_percent: u32) -> u32 {
        if self.kept.len() < FEWEST {
            return 0;
        }
        let Some(usual_x2) = self.usual_x2.or_else(|| median_x2(&self.kept)) else { return 0 };
        let long = self.kept.iter().filter(|us| is_long(**us, usual_x2, gap_percent)).count();
        self.long_later.saturating_add(u32::try_from(long).unwrap_or(u32::MAX))
    }
}

/// interval > percent/100 · median, in whole numbers.
fn is_long(us: i64, usual_x2: i64, gap_percent: u32) -> bool {
    i128::from(us) * 200 > i128::from(usual_x2) * i128::from(gap_percent)
}

/// Twice the median, so that an even number of intervals needs no fraction.
fn median_x2(intervals: &[i64]) -> Option<i64> {
    let mut sorted = intervals.to_vec();
    sorted.sort_unstable();
    let middle = sorted.len() / 2;
    let high = *sorted.get(middle)?;
    let low = if sorted.len().is_multiple_of(2) { *sorted.get(middle - 1)? } else { high };
    Some(low.saturating_add(high))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use statrs::statistics::{Data, OrderStatistics};

    fn gaps(intervals: &[i64], percent: u32) -> u32 {
        let mut all = Intervals::default();
        intervals.iter().for_each(|us| all.push(*us, percent));
        all.gaps(percent)
    }

    #[test]
    fn an_interval_is_long_beside_the_usual_one() {
        for (intervals, percent, want) in [
            (&[500, 500, 500, 1_000][..], 160, 1),
            (&[500, 500, 500, 800], 160, 0), // exactly at the limit is not beyond it
            (&[500, 500, 500, 801], 160, 1),
            (&[1_000, 500, 500, 500, 1_500], 160, 2),
            (&[500, 1_000], 160, 0), // two intervals do not tell which is usual
            (&[], 160, 0),
            (&[0, 0, 0], 160, 0),
            (&[400, 500, 600, 900], 160, 1), // median 550, limit 880
            (&[400, 500, 600, 880], 160, 0),
            (&[i64::MAX, i64::MAX, i64::MAX], u32::MAX, 0),
        ] {
            assert_eq!(gaps(intervals, percent), want, "{intervals:?} {percent}");
        }
    }

    #[test]
    fn a_run_without_end_stays_small_and_is_still_judged() {
        let mut all = Intervals::default();
        for i in 0..1_000_000 {
            all.push(if i % 1_000 == 999 { 1_000 } else { 500 }, 160);
        }
        assert_eq!(all.kept.len(), KEPT);
        assert_eq!(all.gaps(160), 1_000);
    }

    proptest! {
        /// Reference: the median of the statrs library.
        #[test]
        fn the_median_is_the_reference_librarys(intervals in prop::collection::vec(0i64..10_000_000, 1..KEPT)) {
            let reference = Data::new(intervals.iter().map(|us| *us as f64).collect::<std::vec::Vec<_>>()).median();
            prop_assert_eq!(median_x2(&intervals).unwrap() as f64 / 2.0, reference);
        }
    }
}
