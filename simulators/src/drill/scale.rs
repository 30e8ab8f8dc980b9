//! A balance as somebody uses it: what it shows before, while and after
//! something lies on its pan.

use super::plan::normal;
use super::{Balance, Event};
use crate::rng::Rng;

/// One digit of the display.
const STEP_UG: i64 = 10_000;
/// What the display flickers by from one reading to the next, as a share of the repeatability: most of that lies
/// between weighings, in how a container is set down [practice].
const FLICKER: f64 = 0.2;
/// A streaming balance speaks so often.
const APART_US: i64 = 200_000;

/// Something that goes on while the container lies on the pan.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(super) struct Weighing {
    /// What truly lies there, micrograms.
    pub mass_ug: i64,
    /// What the empty pan shows before and after, micrograms: residue, or a zero that crept away.
    pub pan_ug: i64,
    /// The reading is too low by this at first, micrograms …
    pub low_ug: f64,
    /// … and rises towards the truth with this time constant, seconds (a warm container's draught).
    pub rises_s: f64,
    /// Change of the true mass while it lies there, micrograms per second.
    pub drift_ug_per_s: f64,
}

/// Shows a weighing line by line from `at_us` on; gives the time when the pan is empty again.
pub(super) fn weigh(balance: Balance, w: &Weighing, sd_ug: f64, noise: u64, at_us: i64, out: &mut Vec<Event>) -> i64 {
    let mut rng = Rng::new(noise);
    let w = &Weighing { mass_ug: w.mass_ug + normal(&mut rng, 0.0, sd_ug) as i64, ..*w };
    let sd_ug = sd_ug * FLICKER;
    match balance {
        Balance::PrintOnKey => {
            // Pressed some seconds after the container was put down, when the display has come to rest.
            let waited = 4.0 + 3.0 * rng.unit();
            let shown = shown(w, waited, sd_ug, &mut rng);
            let grams = shown as f64 / 1e6;
            out.push(Event::line(at_us + (waited * 1e6) as i64, super::BALANCE, format!("G{grams:>11.2} g\r\n")));
            at_us + ((waited + 2.0) * 1e6) as i64
        }
        Balance::Streaming => stream(w, sd_ug, &mut rng, at_us, out),
    }
}

/// What the display shows after some seconds on the pan, in whole steps.
fn shown(w: &Weighing, seconds: f64, sd_ug: f64, rng: &mut Rng) -> i64 {
    let low = if w.rises_s > 0.0 { w.low_ug * (-seconds / w.rises_s).exp() } else { w.low_ug };
    let ug = (w.mass_ug + w.pan_ug) as f64 - low + w.drift_ug_per_s * seconds + normal(rng, 0.0, sd_ug);
    (ug / STEP_UG as f64).round() as i64 * STEP_UG
}

fn stream(w: &Weighing, sd_ug: f64, rng: &mut Rng, from_us: i64, out: &mut Vec<Event>) -> i64 {
    let mut at = from_us;
    let mut say = |ug: i64, steady: bool, at: &mut i64| {
        let grams = ug.unsigned_abs() as f64 / 1e6;
        let (sign, mark) = (if ug < 0 { '-' } else { '+' }, if steady { 'S' } else { 'U' });
        *at += APART_US;
        out.push(Event::line(*at, super::BALANCE, format!("{sign}{grams:>10.2} g  {mark}\r\n")));
    };
    let empty = |rng: &mut Rng| ((w.pan_ug as f64 + normal(rng, 0.0, sd_ug)) / STEP_UG as f64).round() as i64 * STEP_UG;
    for _ in 0..6 {
        let ug = empty(rng);
        say(ug, true, &mut at);
    }
    for part in [0.35, 0.8, 1.03] {
        say(((w.mass_ug as f64 * part) / STEP_UG as f64) as i64 * STEP_UG, false, &mut at);
    }
    let stays = rng.between(16, 26);
    let mut last = [i64::MIN; 3];
    for n in 0..stays {
        let ug = shown(w, n as f64 * APART_US as f64 / 1e6, sd_ug, rng);
        // A balance marks rest when its last few readings agree within a step.
        last.rotate_left(1);
        last[2] = ug;
        let steady = n > 3 && last.iter().all(|l| (l - ug).abs() <= STEP_UG);
        say(ug, steady, &mut at);
    }
    for part in [0.6, 0.2] {
        say(((w.mass_ug as f64 * part) / STEP_UG as f64) as i64 * STEP_UG, false, &mut at);
    }
    for _ in 0..5 {
        let ug = empty(rng);
        say(ug, true, &mut at);
    }
    at
}
