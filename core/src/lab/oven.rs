//! Time in the oven, and when a container counts as dry.

use super::ask::{Ask, needs_words, no};
use super::clock::ClockRecord;
use super::entities::{Container, DryRecord, Holding, OvenClock, Standing, Stay, TrialRecord};
use super::{Lab, New, Refusal};
use crate::fact::Fact;
use crate::method::Drying;
use crate::names::ContainerId;
use crate::quantity::Mass;
use crate::sheet::{DryWeighing, Seq};
use crate::stamp::{Basis, Elapsed, HOUR_US, Stamp, parse_rfc3339};
use alloc::collections::BTreeSet;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// Stays and times off that a container keeps; asks beyond are refused.
pub(super) const STAYS_KEPT: usize = 200;

impl OvenClock {
    /// Starts with the wet weighing; a record of the oven makes it true.
    pub(super) fn new(wet_at: Stamp) -> Self {
        Self { since: None, stays: Vec::new(), off: Vec::new(), recorded: false, wet_at, celsius: None }
    }

    /// Time in the oven up to a moment, µs, and the clock it rests on.
    pub fn total(&self, now: &Stamp, clock: &ClockRecord) -> (i64, Basis) {
        if !self.recorded && self.stays.is_empty() {
            return self.heated(&self.wet_at, now, clock);
        }
        let over = self.stays.iter().map(|s| (s.from, if now.not_before(&s.to) { s.to } else { *now }));
        let running = self.since.iter().map(|since| (*since, *now));
        let mut all = (0i64, Basis::Monotonic);
        for (from, to) in over.chain(running) {
            let (us, basis) = self.heated(&from, &to, clock);
            all.0 = all.0.saturating_add(us);
            // The weakest of the clocks that the sum rests on.
            all.1 = match (all.1, basis) {
                (_, Basis::Doubtful) | (Basis::Doubtful, _) => Basis::Doubtful,
                (_, Basis::Wall) if us > 0 => Basis::Wall,
                (before, _) => before,
            };
        }
        all
    }

    /// From one moment to another, without the time in which the oven was off.
    fn heated(&self, from: &Stamp, to: &Stamp, clock: &ClockRecord) -> (i64, Basis) {
        let mut passed = to.since(from);
        if passed.basis == Basis::Wall && clock.doubtful(from, to) {
            // What is proven is that the machine has been up so long since it was started, and that was later than `from`.
            let proven = if to.boot > from.boot { to.mono_us.max(0) } else { 0 };
            passed = Elapsed { us: proven, basis: Basis::Doubtful };
        }
        let overlap = |&(a, b): &(i64, i64)| b.min(to.utc_us).saturating_sub(a.max(from.utc_us)).max(0);
        let off = self.off.iter().map(overlap).fold(0i64, i64::saturating_add);
        (passed.us.saturating_sub(off).max(0), passed.basis)
    }

    /// Into the oven. What lies before, if it was weighed dry without a record, stays as it was counted.
    pub(super) fn put_in(&mut self, now: Stamp, last_dry: Option<Stamp>) {
        if !self.recorded
            && self.stays.is_empty()
            && let Some(dry) = last_dry
        {
            self.stays.push(Stay { from: self.wet_at, to: dry, recorded: false, ended_by: None });
        }
        self.since.get_or_insert(now);
        self.recorded = true;
    }

    /// Out of the oven. Where nobody recorded that it went in, it did with the wet weighing.
    pub(super) fn take_out(&mut self, now: Stamp) {
        if let Some(from) = self.since.take() {
            self.stays.push(Stay { from, to: now, recorded: true, ended_by: None });
        } else if !self.recorded && self.stays.is_empty() {
            self.stays.push(Stay { from: self.wet_at, to: now, recorded: false, ended_by: None });
            self.recorded = true;
        }
    }

    /// The oven did not heat from–to. Reports that overlap are one time.
    pub(super) fn was_off(&mut self, from_utc_us: i64, to_utc_us: i64) {
        self.off.push((from_utc_us, to_utc_us));
        self.off.sort_unstable();
        let mut apart: Vec<(i64, i64)> = Vec::new();
        for &(from, to) in &self.off {
            match apart.last_mut().filter(|last| from <= last.1) {
                Some(last) => last.1 = last.1.max(to),
                None => apart.push((from, to)),
            }
        }
        self.off = apart;
    }

    /// Weighed dry: it is out of the oven now, whether or not that was recorded.
    pub(super) fn weighed(&mut self, at: Stamp, seq: Seq) {
        if let Some(from) = self.since.take_if(|since| at.not_before(since)) {
            self.stays.push(Stay { from, to: at, recorded: true, ended_by: Some(seq) });
        }
    }

    /// That weighing was of another container: this one stayed in.
    pub(super) fn not_weighed(&mut self, seq: Seq) {
        let last = self.stays.pop_if(|s| s.ended_by == Some(seq) && self.since.is_none());
        if let Some(stay) = last {
            self.since = Some(stay.from);
        }
    }

    /// How long before a moment somebody recorded that it came out, µs, when it did not go in again.
    fn out_before(&self, now: &Stamp) -> Option<i64> {
        let inside = self.since.is_some_and(|since| now.since(&since).us >= 0);
        let stay = self.stays.iter().rev().find(|s| now.since(&s.from).us >= 0)?;
        let ago = now.since(&stay.to).us;
        (!inside && stay.ended_by.is_none() && ago >= 0).then_some(ago)
    }

    /// Somebody recorded every stay that began before a moment.
    fn recorded_before(&self, now: &Stamp) -> bool {
        let began = |from: &Stamp| now.not_before(from);
        let mut stays = self.stays.iter().filter(|s| began(&s.from)).peekable();
        let any = stays.peek().is_some() || self.since.as_ref().is_some_and(began);
        self.recorded && any && stays.all(|s| s.recorded)
    }
}

/// When the latest stay in the oven began.
pub(super) fn last_stay(oven: &OvenClock) -> Option<Stamp> {
    oven.stays.last().map(|s| s.from)
}

pub(super) fn hours(us: i64) -> f64 {
    us.max(0) as f64 / HOUR_US as f64
}

/// Works the hours of a determination's dry weighings anew from the oven's record.
pub(super) fn work_hours(dries: &mut [DryRecord], oven: &OvenClock, clock: &ClockRecord) {
    let mut previous: Option<i64> = None;
    for dry in dries {
        let (total, basis) = oven.total(&dry.weighing.at, clock);
        dry.oven_hours = hours(total);
        dry.since_previous_hours = previous.map(|before| hours(total.saturating_sub(before)));
        dry.oven_recorded = oven.recorded_before(&dry.weighing.at);
        dry.basis = basis;
        dry.out_us = oven.out_before(&dry.weighing.at);
        previous = Some(total);
    }
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

/// Most containers in one ask.
const AT_ONCE: usize = 500;

impl Lab {
    pub(super) fn ask_oven(&self, ask: Ask, at: &Stamp) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::IntoOven { containers, celsius, who } => {
                let containers = once_each(containers);
                self.all_hold(&containers)?;
                if celsius.is_some_and(|c| !(20.0..=300.0).contains(&c)) {
                    return Err(no(String::from("an oven temperature lies between 20 and 300 °C")));
                }
                self.none_in(&containers)?;
                Ok(vec![New::by(who, Fact::IntoOven { containers, celsius })])
            }
            Ask::OutOfOven { containers, who } => {
                let containers = once_each(containers);
                self.all_hold(&containers)?;
                self.none_out(&containers)?;
                Ok(vec![New::by(who, Fact::OutOfOven { containers })])
            }
            Ask::OvenOff { from, to, who, why } => {
                let time = |t: &str| {
                    parse_rfc3339(t).ok_or_else(|| no(format!("\"{t}\" is not a time; write it like 2026-03-02T08:14:05Z")))
                };
                needs_words(&why)?;
                let from_utc_us = time(&from)?;
                let to_utc_us = to.as_deref().map(time).transpose()?.unwrap_or(at.utc_us);
                if from_utc_us >= to_utc_us || to_utc_us > at.utc_us {
                    return Err(no(String::from("the oven was off from a time to a later one, both past")));
                }
                self.room_in_oven(&self.wet_before(to_utc_us))?;
                Ok(vec![New::by(Some(who), Fact::OvenOff { from_utc_us, to_utc_us, why })])
            }
            _ => Ok(vec![]),
        }
    }

    /// A container goes in once: asked again, its clock would seem to begin anew.
    fn none_in(&self, containers: &[ContainerId]) -> Result<(), Refusal> {
        let since = |id: &&ContainerId| self.containers.get(*id).and_then(|c| c.holding.as_ref()).and_then(|h| h.oven.since);
        let inside: Vec<String> =
            containers.iter().filter_map(|id| since(&id).map(|s| format!("{id} since {}", s.rfc3339()))).collect();
        match inside.is_empty() {
            true => Ok(()),
            false => {
                Err(no(format!("in the oven already: {}; leave them out, or take them out of the oven first", inside.join(", "))))
            }
        }
    }

    /// Said twice that it came out: the second time may mean another container. One that was
    /// weighed dry since is out by that, and saying so changes nothing.
    fn none_out(&self, containers: &[ContainerId]) -> Result<(), Refusal> {
        let out = |id: &&ContainerId| {
            let oven = self.containers.get(*id).and_then(|c| c.holding.as_ref()).map(|h| &h.oven);
            oven.is_some_and(|o| o.since.is_none() && o.stays.last().is_some_and(|s| s.ended_by.is_none()))
        };
        let out: Vec<&str> = containers.iter().filter(out).map(ContainerId::as_str).collect();
        match out.is_empty() {
            true => Ok(()),
            false => Err(no(format!("out of the oven already: {}; leave them out, or read the code again", out.join(", ")))),
        }
    }

    fn all_hold(&self, containers: &[ContainerId]) -> Result<(), Refusal> {
        if containers.is_empty() {
            return Err(no(String::from("name the containers")));
        }
        if containers.len() > AT_ONCE {
            return Err(no(format!("at most {AT_ONCE} containers go in or out at once")));
        }
        self.room_in_oven(containers)?;
        match containers.iter().find(|c| self.containers.get(*c).is_none_or(|c| c.holding.is_none())) {
            Some(empty) => {
                let hint = self.container_meant(empty);
                Err(no(format!("{empty} holds nothing that was weighed wet{hint}; weigh it first, or leave it out")))
            }
            None => Ok(()),
        }
    }

    fn room_in_oven(&self, containers: &[ContainerId]) -> Result<(), Refusal> {
        let holding = |id: &&ContainerId| self.containers.get(*id).and_then(|c| c.holding.as_ref());
        let full = |id: &&ContainerId| holding(id).is_some_and(|h| h.oven.stays.len().max(h.oven.off.len()) >= STAYS_KEPT);
        match containers.iter().find(full) {
            Some(id) => {
                Err(no(format!("{id} has been in and out of the oven {STAYS_KEPT} times: weigh it dry, or leave it out")))
            }
            None => Ok(()),
        }
    }
}

fn once_each(containers: Vec<ContainerId>) -> Vec<ContainerId> {
    let mut seen = BTreeSet::new();
    containers.into_iter().filter(|c| seen.insert(c.clone())).collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::lab::entities::Weighing;
    use crate::stamp::Boot;

    fn at(hours: i64) -> Stamp {
        Stamp { utc_us: hours * HOUR_US, mono_us: hours * HOUR_US, boot: Boot(1) }
    }

    fn dry(hours: i64) -> DryRecord {
        let weighing = Weighing {
            seq: hours as u64,
            mass: Mass::from_ug(1),
            balance: None,
            at: at(hours),
            by: None,
            typed: false,
            step: None,
            corrected: None,
            seen: None,
            checked: None,
        };
        let (since_previous_hours, oven_recorded, out_us) = (None, false, None);
        DryRecord { weighing, oven_hours: 0.0, since_previous_hours, oven_recorded, basis: Basis::Monotonic, out_us }
    }

    /// Hours, hours since the previous one, and whether recorded, of dry weighings at these hours.
    fn worked(clock: &OvenClock, dries: &[i64]) -> Vec<(f64, Option<f64>, bool)> {
        let mut dries: Vec<DryRecord> = dries.iter().map(|&h| dry(h)).collect();
        work_hours(&mut dries, clock, &ClockRecord::default());
        dries.iter().map(|d| (d.oven_hours, d.since_previous_hours, d.oven_recorded)).collect()
    }

    #[test]
    fn without_a_record_the_wet_weighing_starts_the_clock() {
        let clock = OvenClock::new(at(0));
        assert_eq!(worked(&clock, &[16, 18]), [(16.0, None, false), (18.0, Some(2.0), false)]);
    }

    #[test]
    fn with_a_record_only_time_in_the_oven_counts() {
        let mut clock = OvenClock::new(at(0));
        clock.put_in(at(4), None);
        clock.take_out(at(10));
        clock.weighed(at(16), 16);
        clock.put_in(at(17), Some(at(16)));
        clock.weighed(at(19), 19);
        // The third was not put back: it proves nothing.
        let want = [(6.0, None, true), (8.0, Some(2.0), true), (8.0, Some(0.0), true)];
        assert_eq!(worked(&clock, &[16, 19, 30]), want);
    }

    #[test]
    fn a_record_that_begins_late_keeps_what_was_counted_before() {
        let mut clock = OvenClock::new(at(0));
        clock.put_in(at(6), Some(at(4)));
        clock.weighed(at(8), 8);
        assert_eq!(worked(&clock, &[4, 8]), [(4.0, None, false), (6.0, Some(2.0), false)]);
    }

    #[test]
    fn taken_out_without_having_been_put_in() {
        let mut clock = OvenClock::new(at(0));
        clock.take_out(at(9));
        assert_eq!(worked(&clock, &[12]), [(9.0, None, false)]);
    }

    #[test]
    fn an_oven_that_was_off_overnight_does_not_dry_and_is_taken_away_once() {
        let mut clock = OvenClock::new(at(0));
        clock.put_in(at(1), None);
        clock.weighed(at(17), 17);
        clock.was_off(3 * HOUR_US, 10 * HOUR_US);
        clock.was_off(8 * HOUR_US, 13 * HOUR_US);
        assert_eq!(worked(&clock, &[17]), [(6.0, None, true)]);
        let mut late = OvenClock::new(at(5));
        late.was_off(0, 4 * HOUR_US);
        assert_eq!(late.total(&at(16), &ClockRecord::default()).0, 11 * HOUR_US);
    }

    #[test]
    fn a_weighing_taken_back_puts_the_container_back_in() {
        let mut clock = OvenClock::new(at(0));
        clock.put_in(at(1), None);
        let before = clock.clone();
        clock.weighed(at(5), 5);
        clock.not_weighed(5);
        assert_eq!(clock, before);
    }

    #[test]
    fn a_clock_set_back_never_gives_negative_hours() {
        let mut clock = OvenClock::new(at(10));
        let later = Stamp { utc_us: 0, mono_us: 0, boot: Boot(2) };
        clock.put_in(at(11), None);
        assert_eq!(clock.total(&later, &ClockRecord::default()).0, 0);
        clock.weighed(later, 1);
        assert_eq!(clock.since, None, "weighed later, though the clock says earlier");
    }

    #[test]
    fn across_a_start_with_a_wrong_clock_only_what_the_machine_proves_counts() {
        let mut oven = OvenClock::new(at(10));
        oven.put_in(at(11), None);
        let up = |hours: i64, utc: i64| Stamp { utc_us: utc * HOUR_US, mono_us: hours * HOUR_US, boot: Boot(2) };
        let mut clock = ClockRecord::default();
        clock.apply(&Fact::ClockUntrusted { not_before_utc_us: 12 * HOUR_US }, up(0, 0));
        assert_eq!(oven.total(&up(3, 3), &clock), (3 * HOUR_US, Basis::Doubtful));
        // Set right, by years: the hours before it are no more known than they were.
        clock.apply(&Fact::ClockStepped { by_us: 500_000 * HOUR_US, trusted: true }, up(4, 500_004));
        assert_eq!(oven.total(&up(5, 500_005), &clock), (5 * HOUR_US, Basis::Doubtful));
        // Control: without the guard the step would be time in the oven.
        assert_eq!(oven.total(&up(5, 500_005), &ClockRecord::default()), (499_994 * HOUR_US, Basis::Wall));
    }

    #[test]
    fn within_a_start_no_step_of_the_clock_makes_an_hour() {
        let mut oven = OvenClock::new(at(10));
        oven.put_in(at(11), None);
        let mut clock = ClockRecord::default();
        let stepped = Stamp { utc_us: 900 * HOUR_US, ..at(12) };
        clock.apply(&Fact::ClockStepped { by_us: 888 * HOUR_US, trusted: true }, stepped);
        let later = Stamp { utc_us: 903 * HOUR_US, ..at(15) };
        assert_eq!(oven.total(&later, &clock), (4 * HOUR_US, Basis::Monotonic));
    }

    #[test]
    fn dry_by_hours_or_by_constant_mass() {
        let rule = Drying { hours: 15.0, constant_percent: 0.1, constant_hours: 1.0, oven_celsius: [105.0, 115.0], note: None };
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
