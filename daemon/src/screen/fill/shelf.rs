//! The oven shelf.

use super::super::view::{Drying, Due, Place, Shelf};
use super::{Around, frame, kind};
use tarecup_core::lab::Lab;
use tarecup_core::lab::clock::ClockRecord;
use tarecup_core::lab::entities::{Container, OvenClock, Standing};
use tarecup_core::stamp::{HOUR_US, Stamp, rfc3339};

/// Hours after which something ready is overdue (common practice, no source: a day).
const OVERDUE_HOURS: f64 = 24.0;
/// Temperature where nobody said otherwise, °C (ASTM D2216, 110 ± 5 °C, from memory).
const CELSIUS: f64 = 110.0;

/// The shelf.
pub fn shelf(lab: &Lab, now: &Stamp, around: &Around) -> Shelf {
    let wanted = lab.setup().methods.get(&lab.setup().default_method).map(|m| m.drying.oven_celsius);
    Shelf {
        frame: frame(lab, now, around),
        rows: rows(lab, now),
        celsius: around.celsius.unwrap_or(CELSIUS),
        celsius_wanted: wanted,
        off_since: around.off_since.clone(),
        holds_outage: around.holds_outage,
    }
}

/// Containers that are drying or wait to, those that need a person first.
pub fn rows(lab: &Lab, now: &Stamp) -> Vec<Drying> {
    let mut rows: Vec<Drying> = lab.containers().filter_map(|c| row(lab, c, now)).collect();
    let rank = |d: &Drying| match (d.due, d.place) {
        (Due::Overdue, _) => 0,
        (Due::Ready, _) => 1,
        (_, Place::Wet) => 2,
        (_, Place::Drying) => 3,
        (_, Place::Out) => 4,
        (_, Place::In | Place::Dry) => 5,
    };
    rows.sort_by(|a, b| (rank(a), &a.ready_at, &a.container).cmp(&(rank(b), &b.ready_at, &b.container)));
    rows
}

fn row(lab: &Lab, c: &Container, now: &Stamp) -> Option<Drying> {
    let held = c.holding.as_ref()?;
    let s = lab.specimen(&held.specimen)?;
    let trial = s.trial(held.trial)?;
    let oven = &held.oven;
    let (place, since) = match c.standing {
        Standing::InOven => (Place::In, oven.since.or(Some(oven.wet_at))),
        Standing::Wet if oven.stays.is_empty() => (Place::Wet, Some(oven.wet_at)),
        Standing::Wet => (Place::Out, oven.stays.last().map(|stay| stay.to)),
        Standing::Drying => (Place::Drying, trial.dries.last().map(|d| d.weighing.at)),
        Standing::Unknown | Standing::Free | Standing::Dry => return None,
    };
    let wanted = lab.setup().methods.get(&s.method).map_or(0.0, |m| m.drying.hours);
    let hours = oven.total(now, lab.clock()).0.max(0) as f64 / HOUR_US as f64;
    let due = match place {
        // Weighed dry and not enough: only the oven helps, and a weighing after that.
        Place::Drying | Place::Dry => Due::NotYet,
        _ if hours >= wanted + OVERDUE_HOURS => Due::Overdue,
        _ if hours >= wanted => Due::Ready,
        _ => Due::NotYet,
    };
    Some(Drying {
        container: c.id.to_string(),
        specimen: held.specimen.to_string(),
        kind: kind(trial.kind)?,
        no: trial.no,
        place,
        since: since.map(|s| s.rfc3339()),
        recorded: oven.recorded,
        hours: hours as u32,
        hours_wanted: wanted,
        ready_at: oven.since.filter(|_| place == Place::In).map(|since| ready_at(oven, &since, wanted, lab.clock())),
        due,
    })
}

/// When the hours will be full: what is missing at the beginning of this stay, and what the oven was off since.
fn ready_at(oven: &OvenClock, since: &Stamp, wanted: f64, clock: &ClockRecord) -> String {
    let before = oven.total(since, clock).0;
    let off: i64 = oven.off.iter().map(|(from, to)| (to - from.max(&since.utc_us)).max(0)).fold(0, i64::saturating_add);
    let missing = ((wanted * HOUR_US as f64) as i64).saturating_sub(before).max(0);
    rfc3339(since.utc_us.saturating_add(missing).saturating_add(off))
}
