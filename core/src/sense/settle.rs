//! From a balance's readings to masses taken.
//!
//! **A mass is taken** when enough consecutive lines agree: all loaded, of one
//! mark, one basis and one printed step, none further from another than the
//! span. Lines marked steady need only the number; lines of a dialect without a
//! mark must also agree for a set time, for a fast stream repeats itself while
//! the pan still creeps. A line marked moving breaks the run. The value is that
//! of the last of these lines, never a mean. A change of the printed step breaks
//! the run because a line torn short reads like a coarser one.
//!
//! **One placement gives one mass.** The next is taken after unloading, or when
//! the load has settled anew further than the set change (or the span, if that
//! is larger) from the mass taken: threads were added. Creeping by less than
//! that in total never takes another.
//!
//! **Unloading** is any reading below the smallest load, steady or not: when a
//! container is swapped quickly the empty pan may never be steady, and the two
//! masses must still not count as one placement. It is told once, and only after
//! a mass was taken. A pan that flickers around the smallest load by no more than
//! the span of the mass taken is not unloaded.
//!
//! **A negative reading** beyond the smallest load is a pan from which a tared
//! container was lifted. It is never a mass; it counts as unloaded, and the zero
//! seen before no longer holds.
//!
//! **The zero** is the latest steady (without a mark: agreeing) reading of the
//! empty pan. It stays with all masses of one placement; residue is reported as
//! it is and judged elsewhere.
//!
//! **What else was seen** is reported beside the mass and judged elsewhere: how the
//! load settled, how it drifted until it was lifted, and what lay on the pan
//! afterwards. It takes a few running sums, whatever the stream. Readings count
//! for the drift once the next one agrees with them, so that the hand that lifts
//! the container does not.
//!
//! With a print key each printed line of a load is a mass, except one marked
//! moving; a printed line below the smallest load is the zero of the next mass
//! alone, since nobody sees the pan between prints.

use super::time::{ms, within_boot};
use super::{Happening, InputNo, LeftOnPan, MassTaken, SettleLimits, Stayed, Talks, Trace, Zero};
use crate::quantity::Mass;
use crate::signal::{Basis, Mark, Reading};
use crate::stamp::Stamp;

/// Smallest span in force when none is set: 2 mg.
const LEAST_SPAN_UG: i64 = 2_000;
/// Readings that a drift rests on at least.
const LEAST_STAY: f64 = 4.0;

/// The sense of one balance. It holds a few numbers, whatever the stream.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Settle {
    limits: SettleLimits,
    run: Option<Run>,
    /// The latest mass taken of the placement that still lies on the pan.
    taken: Option<Mass>,
    zero: Option<Zero>,
    /// When the load was first seen.
    loaded: Option<Stamp>,
    stay: Option<Stay>,
    before: Option<Before>,
}

/// What the pan showed before the load that was lifted last.
#[derive(Clone, Copy, Debug, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
pub struct Before {
    taken_at: Stamp,
    zero: Zero,
}

/// Running sums of the readings since a mass was taken, times in ms and masses in µg from there.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Stay {
    taken: Mass,
    taken_at: Stamp,
    step: Mass,
    /// The latest reading, until the next one agrees with it.
    latest: Option<(f64, f64)>,
    n: f64,
    x: f64,
    y: f64,
    xx: f64,
    xy: f64,
    last_ms: f64,
}

impl Stay {
    fn begin(taken: &MassTaken) -> Self {
        let (x, y, xx, xy) = (0.0, 0.0, 0.0, 0.0);
        // The mass taken itself is the first point, at the origin.
        let (taken, taken_at, step) = (taken.mass, taken.at, taken.step);
        Self { taken, taken_at, step, latest: None, n: 1.0, x, y, xx, xy, last_ms: 0.0 }
    }

    fn hear(&mut self, mass: Mass, at: &Stamp, span: u64, change: u64) {
        let Some(us) = within_boot(&self.taken_at, at).filter(|us| *us > 0) else { return };
        if apart(self.taken, mass) > change {
            self.latest = None;
            return;
        }
        let (x, y) = (us as f64 / 1_000.0, (mass - self.taken).ug() as f64);
        if let Some((x, y)) = self.latest.filter(|(_, before)| (before - y).abs() <= span as f64) {
            self.n += 1.0;
            (self.x, self.y) = (self.x + x, self.y + y);
            (self.xx, self.xy) = (self.xx + x * x, self.xy + x * y);
            self.last_ms = x;
        }
        self.latest = Some((x, y));
    }

    fn over(&self) -> Option<Stayed> {
        let spread = self.n * self.xx - self.x * self.x;
        if self.n < LEAST_STAY || spread <= 0.0 {
            return None;
        }
        let per_ms = (self.n * self.xy - self.x * self.y) / spread;
        Some(Stayed {
            taken_at: self.taken_at,
            step: self.step,
            readings: self.n as u32,
            watched_ms: self.last_ms as u32,
            drift_ug_per_s: libm::round(per_ms * 1_000.0) as i64,
        })
    }
}

/// What lies on the pan.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Pan {
    Loaded,
    Empty,
    Negative,
}

/// Consecutive lines that agree.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Run {
    first_input: InputNo,
    first_at: Stamp,
    readings: u32,
    first: Mass,
    low: Mass,
    high: Mass,
    mark: Mark,
    basis: Basis,
    step: Mass,
    pan: Pan,
}

impl Run {
    fn start(reading: &Reading, pan: Pan, input: InputNo, at: Stamp) -> Self {
        let Reading { mass, step, mark, basis } = *reading;
        Self { first_input: input, first_at: at, readings: 1, first: mass, low: mass, high: mass, mark, basis, step, pan }
    }

    /// The run with one more line, or nothing if that line does not agree.
    fn with(mut self, reading: &Reading, pan: Pan, at: &Stamp, span: u64) -> Option<Self> {
        let alike = self.mark == reading.mark && self.basis == reading.basis && self.step == reading.step && self.pan == pan;
        // A stamp before the first one, or of another boot, tells no duration.
        let ordered = within_boot(&self.first_at, at).is_some_and(|us| us >= 0);
        self.low = self.low.min(reading.mass);
        self.high = self.high.max(reading.mass);
        self.readings = self.readings.saturating_add(1);
        (alike && ordered && apart(self.low, self.high) <= span).then_some(self)
    }
}

fn apart(a: Mass, b: Mass) -> u64 {
    a.ug().abs_diff(b.ug())
}

impl Settle {
    /// A balance of which nothing has been heard.
    pub fn new(limits: SettleLimits) -> Self {
        Self { limits, run: None, taken: None, zero: None, loaded: None, stay: None, before: None }
    }

    /// The state right after `taken` was taken. The lines after `taken.input`,
    /// fed again, give what they gave the first time.
    pub fn resume(limits: SettleLimits, taken: Option<MassTaken>) -> Self {
        match taken {
            None => Self::new(limits),
            Some(t) if t.printed => Self::new(limits),
            Some(t) => {
                Self { taken: Some(t.mass), zero: t.zero, loaded: Some(t.at), stay: Some(Stay::begin(&t)), ..Self::new(limits) }
            }
        }
    }

    /// The same, after the mass was lifted.
    #[must_use]
    pub fn lifted(self, before: Option<Before>) -> Self {
        Self { before, ..self }
    }

    /// What the pan showed before the load that was lifted last, until the empty pan is seen.
    pub fn before(&self) -> Option<Before> {
        self.before
    }

    /// Hears one mass.
    pub fn hear(&mut self, reading: &Reading, input: InputNo, at: Stamp) -> Option<Happening> {
        match self.limits.talks {
            Talks::Continuous => self.streamed(reading, input, at),
            Talks::PrintOnKey => self.printed(reading, input, at),
        }
    }

    /// Hears a line that is no mass: overload, underload, not ready. It breaks
    /// the run; what lies on the pan counts as still lying there, so the same
    /// load is not taken twice for having been pressed down.
    pub fn other(&mut self, _input: InputNo, _at: Stamp) {
        self.run = None;
    }

    /// The port was lost: what the empty pan shows may have changed unseen. The
    /// mass taken stays, since the same load may still lie there.
    pub fn disturbed(&mut self) {
        self.run = None;
        self.zero = None;
        (self.stay, self.before) = (None, None);
    }

    fn streamed(&mut self, reading: &Reading, input: InputNo, at: Stamp) -> Option<Happening> {
        let pan = self.pan(reading);
        let unloaded = self.follow(pan, reading, input, at);
        if reading.mark == Mark::Moving {
            self.run = None;
            return unloaded;
        }
        let span = self.span(reading.step);
        let run = self.run.and_then(|run| run.with(reading, pan, &at, span));
        let run = run.unwrap_or_else(|| Run::start(reading, pan, input, at));
        self.run = Some(run);
        match pan {
            Pan::Negative => (self.zero, self.before) = (None, None),
            Pan::Empty if reading.mark == Mark::Steady || self.is_settled(&run, &at) => {
                let zero = Zero { mass: reading.mass, input };
                self.zero = Some(zero);
                return unloaded.or_else(|| self.left_on_pan(zero, span, at));
            }
            Pan::Loaded if self.is_settled(&run, &at) && self.is_other_load(reading, span) => {
                return Some(self.take(reading, &run, input, at));
            }
            Pan::Empty | Pan::Loaded => {}
        }
        unloaded
    }

    /// Follows what lies on the pan; tells when it is lifted.
    fn follow(&mut self, pan: Pan, reading: &Reading, input: InputNo, at: Stamp) -> Option<Happening> {
        if pan == Pan::Loaded {
            self.loaded.get_or_insert(at);
            let change = u64::try_from(self.limits.change_from.ug()).unwrap_or(0);
            let span = self.span(reading.step);
            if let Some(stay) = self.stay.as_mut().filter(|_| reading.mark != Mark::Moving) {
                stay.hear(reading.mass, &at, span, change.max(span));
            }
            return None;
        }
        self.loaded = None;
        let stay = self.stay.take();
        self.taken.take()?;
        self.before = stay.and_then(|s| Some(Before { taken_at: s.taken_at, zero: self.zero? }));
        Some(Happening::Unloaded { input, at, stayed: stay.and_then(|s| s.over()) })
    }

    /// The first settled reading of the empty pan after a mass was lifted.
    fn left_on_pan(&mut self, zero: Zero, span: u64, at: Stamp) -> Option<Happening> {
        let before = self.before.take()?;
        let left = zero.mass - before.zero.mass;
        (apart(zero.mass, before.zero.mass) > span).then_some(Happening::LeftOnPan(LeftOnPan {
            taken_at: before.taken_at,
            left,
            zero,
            at,
        }))
    }

    fn printed(&mut self, reading: &Reading, input: InputNo, at: Stamp) -> Option<Happening> {
        if reading.mark == Mark::Moving {
            return None;
        }
        match self.pan(reading) {
            Pan::Negative => self.zero = None,
            Pan::Empty => self.zero = Some(Zero { mass: reading.mass, input }),
            Pan::Loaded => {
                let taken = MassTaken {
                    mass: reading.mass,
                    step: reading.step,
                    basis: reading.basis,
                    printed: true,
                    input,
                    first_input: input,
                    readings: 1,
                    span: Mass::ZERO,
                    zero: self.zero.take(),
                    at,
                    trace: None,
                };
                return Some(Happening::MassTaken(taken));
            }
        }
        None
    }

    /// Takes this line's mass. The run ends with it: the next must settle anew.
    fn take(&mut self, reading: &Reading, run: &Run, input: InputNo, at: Stamp) -> Happening {
        self.run = None;
        self.taken = Some(reading.mass);
        self.before = None;
        let watched_us = within_boot(&run.first_at, &at).unwrap_or(0).max(0);
        let settling_us = self.loaded.and_then(|since| within_boot(&since, &at)).unwrap_or(watched_us).max(watched_us);
        let change = (reading.mass - run.first).ug();
        let drift = if watched_us > 0 { (change as f64 * 1e6 / watched_us as f64) as i64 } else { 0 };
        let whole_ms = |us: i64| u32::try_from(us / 1_000).unwrap_or(u32::MAX);
        let (settling_ms, watched_ms) = (whole_ms(settling_us), whole_ms(watched_us));
        let taken = MassTaken {
            mass: reading.mass,
            step: reading.step,
            basis: reading.basis,
            printed: false,
            input,
            first_input: run.first_input,
            readings: run.readings,
            span: run.high - run.low,
            zero: self.zero,
            at,
            trace: Some(Trace { settling_ms, watched_ms, drift_ug_per_s: drift }),
        };
        // What is added to this load settles from here on.
        (self.loaded, self.stay) = (Some(at), Some(Stay::begin(&taken)));
        Happening::MassTaken(taken)
    }

    /// What lies on the pan by this reading. A set smallest load of zero or less
    /// would make an empty pan a load, so it is one microgram at least.
    fn pan(&self, reading: &Reading) -> Pan {
        let load_from = self.limits.load_from.ug().max(1);
        let mass = reading.mass.ug();
        let flickers =
            || mass > load_from / 2 && self.taken.is_some_and(|taken| apart(taken, reading.mass) <= self.span(reading.step));
        if mass >= load_from || flickers() {
            Pan::Loaded
        } else if mass > -load_from {
            Pan::Empty
        } else {
            Pan::Negative
        }
    }

    fn is_settled(&self, run: &Run, at: &Stamp) -> bool {
        let long_enough = || within_boot(&run.first_at, at).is_some_and(|us| us >= ms(self.limits.steady_ms));
        run.readings >= self.limits.steady_readings && (run.mark == Mark::Steady || long_enough())
    }

    /// True unless this is the load whose mass was taken already.
    fn is_other_load(&self, reading: &Reading, span: u64) -> bool {
        let change = u64::try_from(self.limits.change_from.ug()).unwrap_or(0).max(span);
        self.taken.is_none_or(|taken| apart(taken, reading.mass) > change)
    }

    /// Largest difference of agreeing lines, µg.
    fn span(&self, step: Mass) -> u64 {
        let set = self.limits.steady_span.map(Mass::ug);
        let ug = set.unwrap_or_else(|| step.ug().saturating_mul(2).max(LEAST_SPAN_UG));
        u64::try_from(ug).unwrap_or(0)
    }
}
