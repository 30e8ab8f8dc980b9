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
//! With a print key each printed line of a load is a mass, except one marked
//! moving; a printed line below the smallest load is the zero of the next mass
//! alone, since nobody sees the pan between prints.

use super::time::{ms, within_boot};
use super::{Happening, InputNo, MassTaken, SettleLimits, Talks, Zero};
use crate::quantity::Mass;
use crate::signal::{Basis, Mark, Reading};
use crate::stamp::Stamp;

/// Smallest span in force when none is set: 2 mg.
const LEAST_SPAN_UG: i64 = 2_000;

/// The sense of one balance. It holds a few numbers, whatever the stream.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Settle {
    limits: SettleLimits,
    run: Option<Run>,
    /// The latest mass taken of the placement that still lies on the pan.
    taken: Option<Mass>,
    zero: Option<Zero>,
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
        Self { first_input: input, first_at: at, readings: 1, low: mass, high: mass, mark, basis, step, pan }
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
        Self { limits, run: None, taken: None, zero: None }
    }

    /// The state right after `taken` was taken. The lines after `taken.input`,
    /// fed again, give what they gave the first time.
    pub fn resume(limits: SettleLimits, taken: Option<MassTaken>) -> Self {
        match taken {
            None => Self::new(limits),
            Some(t) if t.printed => Self::new(limits),
            Some(t) => Self { limits, run: None, taken: Some(t.mass), zero: t.zero },
        }
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
    }

    fn streamed(&mut self, reading: &Reading, input: InputNo, at: Stamp) -> Option<Happening> {
        let pan = self.pan(reading);
        let unloaded = pan != Pan::Loaded && self.taken.take().is_some();
        let unloaded = unloaded.then_some(Happening::Unloaded { input, at });
        if reading.mark == Mark::Moving {
            self.run = None;
            return unloaded;
        }
        let span = self.span(reading.step);
        let run = self.run.and_then(|run| run.with(reading, pan, &at, span));
        let run = run.unwrap_or_else(|| Run::start(reading, pan, input, at));
        self.run = Some(run);
        match pan {
            Pan::Negative => self.zero = None,
            Pan::Empty if reading.mark == Mark::Steady || self.is_settled(&run, &at) => {
                self.zero = Some(Zero { mass: reading.mass, input });
            }
            Pan::Loaded if self.is_settled(&run, &at) && self.is_other_load(reading, span) => {
                return Some(self.take(reading, &run, input, at));
            }
            Pan::Empty | Pan::Loaded => {}
        }
        unloaded
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
        Happening::MassTaken(MassTaken {
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
        })
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
