//! Time in the oven, and when a container counts as dry.

use super::Lab;
use super::entities::{Container, DryRecord, Holding, OvenClock, Standing, TrialRecord, Weighing};
use crate::method::Drying;
use crate::quantity::Mass;
use crate::sheet::DryWeighing;
use crate::stamp::{Basis, HOUR_US, Stamp};
use alloc::vec::Vec;

impl OvenClock {
    /// Starts with the wet weighing; a record of the oven makes it true.
    pub(super) fn new(wet_at: Stamp) -> Self {
        Self { since: None, before_us: 0, off_us: 0, recorded: false, wet_at, at_previous_dry: None, basis: Basis::Monotonic }
    }

    /// Time in the oven up to now, µs, and the clock it rests on.
    pub(super) fn total(&self, now: &Stamp) -> (i64, Basis) {
        let running = match (self.recorded, &self.since) {
            (true, Some(since)) => Some(now.since(since)),
            (true, None) => None,
            (false, _) => Some(now.since(&self.wet_at)),
        };
        let us = self.before_us + running.map_or(0, |r| r.us.max(0)) - self.off_us;
        let wall = self.basis == Basis::Wall || running.is_some_and(|r| r.basis == Basis::Wall);
        (us.max(0), if wall { Basis::Wall } else { Basis::Monotonic })
    }

    pub(super) fn put_in(&mut self, now: Stamp) {
        if self.since.is_none() {
            self.since = Some(now);
        }
        self.recorded = true;
    }

    pub(super) fn take_out(&mut self, now: &Stamp) {
        if let Some(since) = self.since.take() {
            let stay = now.since(&since);
            self.before_us += stay.us.max(0);
            if stay.basis == Basis::Wall {
                self.basis = Basis::Wall;
            }
        }
    }

    /// Takes away the time in which the oven did not heat.
    pub(super) fn off(&mut self, from_utc_us: i64, to_utc_us: i64, now: &Stamp) {
        let start = match (self.recorded, &self.since) {
            (true, Some(since)) => since.utc_us,
            (true, None) => return,
            (false, _) => self.wet_at.utc_us,
        };
        self.off_us += (to_utc_us.min(now.utc_us) - from_utc_us.max(start)).max(0);
    }

    /// A dry weighing: it is out of the oven now, whether or not that was recorded.
    pub(super) fn weighed(&mut self, weighing: Weighing) -> DryRecord {
        let now = weighing.at;
        let (total, basis) = self.total(&now);
        let since_previous_hours = self.at_previous_dry.map(|(before, _)| hours(total - before));
        let record = DryRecord { weighing, oven_hours: hours(total), since_previous_hours, oven_recorded: self.recorded, basis };
        self.take_out(&now);
        self.at_previous_dry = Some((total, now));
        record
    }
}

fn hours(us: i64) -> f64 {
    us.max(0) as f64 / HOUR_US as f64
}

/// Whether dry weighings prove dryness by the method: enough hours in the
/// oven, or a mass that no longer changes after the method's interval back in it.
pub fn dried(rule: &Drying, tare: Option<Mass>, dries: &[DryWeighing]) -> bool {
    if dries.iter().any(|d| d.oven_hours.is_none_or(|h| h >= rule.hours)) {
        return !dries.is_empty();
    }
    dries.windows(2).any(|pair| {
        let soil = pair[1].mass - tare.unwrap_or(Mass::ZERO);
        let change = (pair[0].mass - pair[1].mass).abs().ug() as f64;
        let back_long_enough = pair[1].since_previous_hours.is_some_and(|h| h >= rule.constant_hours);
        back_long_enough && soil > Mass::ZERO && change < rule.constant_percent / 100.0 * soil.ug() as f64
    })
}

pub(super) fn dried_record(rule: &Drying, trial: &TrialRecord) -> bool {
    let dries: Vec<DryWeighing> = trial.dries.iter().map(dry_weighing).collect();
    dried(rule, trial.tare.as_ref().map(|t| t.mass), &dries)
}

/// A dry weighing as the sheet has it.
pub(super) fn dry_weighing(record: &DryRecord) -> DryWeighing {
    DryWeighing {
        mass: record.weighing.mass,
        oven_hours: Some(record.oven_hours),
        since_previous_hours: record.since_previous_hours,
        oven_recorded: record.oven_recorded,
        basis: Some(record.basis),
        fact: Some(record.weighing.seq),
    }
}

impl Lab {
    /// Where a container stands.
    pub(super) fn standing(&self, container: &Container) -> Standing {
        let Some(holding) = &container.holding else {
            return if container.tares.is_empty() { Standing::Unknown } else { Standing::Free };
        };
        let Some(trial) = self.held_trial(holding) else { return container.standing };
        self.standing_held(holding, trial)
    }

    fn standing_held(&self, holding: &Holding, trial: &TrialRecord) -> Standing {
        if holding.oven.since.is_some() {
            return Standing::InOven;
        }
        if trial.set_aside.is_some() {
            return Standing::Free;
        }
        match trial.dries.is_empty() {
            true => Standing::Wet,
            false if self.finished(holding, trial) => Standing::Dry,
            false => Standing::Drying,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::stamp::Boot;

    fn at(hours: i64) -> Stamp {
        Stamp { utc_us: hours * HOUR_US, mono_us: hours * HOUR_US, boot: Boot(1) }
    }

    fn weighing(mass: i64, hours: i64) -> Weighing {
        Weighing { seq: 1, mass: Mass::from_ug(mass), balance: None, at: at(hours), by: None, typed: false }
    }

    #[test]
    fn without_a_record_the_wet_weighing_starts_the_clock() {
        let mut clock = OvenClock::new(at(0));
        let dry = clock.weighed(weighing(1, 16));
        assert_eq!((dry.oven_hours, dry.oven_recorded), (16.0, false));
    }

    #[test]
    fn with_a_record_only_time_in_the_oven_counts() {
        let mut clock = OvenClock::new(at(0));
        clock.put_in(at(4));
        clock.take_out(&at(10));
        assert_eq!(clock.weighed(weighing(1, 16)).oven_hours, 6.0);
        clock.put_in(at(17));
        let again = clock.weighed(weighing(1, 19));
        assert_eq!((again.oven_hours, again.since_previous_hours), (8.0, Some(2.0)));
        // Not put back: it proves nothing.
        assert_eq!(clock.weighed(weighing(1, 30)).since_previous_hours, Some(0.0));
    }

    #[test]
    fn an_oven_that_was_off_overnight_does_not_dry() {
        let mut clock = OvenClock::new(at(0));
        clock.put_in(at(1));
        clock.off(3 * HOUR_US, 13 * HOUR_US, &at(16));
        assert_eq!(clock.weighed(weighing(1, 17)).oven_hours, 6.0);
        let mut none = OvenClock::new(at(5));
        none.off(0, 4 * HOUR_US, &at(16));
        assert_eq!(none.total(&at(16)).0, 11 * HOUR_US);
    }

    #[test]
    fn a_clock_set_back_never_gives_negative_hours() {
        let mut clock = OvenClock::new(at(10));
        let later = Stamp { utc_us: 0, mono_us: 0, boot: Boot(2) };
        clock.put_in(at(11));
        assert_eq!(clock.total(&later), (0, Basis::Wall));
    }

    #[test]
    fn dry_by_hours_or_by_constant_mass() {
        let rule = Drying { hours: 15.0, constant_percent: 0.1, constant_hours: 1.0, oven_celsius: [105.0, 115.0] };
        let d = |mass: i64, hours: f64, back: Option<f64>| DryWeighing {
            mass: Mass::from_ug(mass),
            oven_hours: Some(hours),
            since_previous_hours: back,
            oven_recorded: true,
            basis: None,
            fact: None,
        };
        let tare = Some(Mass::from_ug(20_000_000));
        assert!(!dried(&rule, tare, &[]));
        assert!(dried(&rule, tare, &[d(30_000_000, 15.0, None)]));
        assert!(!dried(&rule, tare, &[d(30_000_000, 4.0, None)]));
        assert!(dried(&rule, tare, &[d(30_005_000, 4.0, None), d(30_000_000, 5.5, Some(1.5))]));
        assert!(!dried(&rule, tare, &[d(30_005_000, 4.0, None), d(30_000_000, 4.5, Some(0.5))]));
        assert!(!dried(&rule, tare, &[d(30_020_000, 4.0, None), d(30_000_000, 5.5, Some(1.5))]));
    }
}
