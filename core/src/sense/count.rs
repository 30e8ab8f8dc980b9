//! From a cup counter's lines to count runs, one for each closure of the groove.
//!
//! **Unnumbered drops** are counted one by one. One that follows the previous
//! counted drop within the debounce is a double. An interval longer than the set
//! percentage of the run's median interval is a gap.
//!
//! **Running totals** are believed: a total is the count. The next number counts,
//! the same number is a double, a jump is so many skipped numbers, a lower number
//! ends the run by restart and begins the next with that same line, and zero ends
//! the run. Gaps are told by number alone. Of a counter that is polled, the same
//! number is no double: it was asked more often than the cup dropped.
//!
//! **An end line** ends the run; its final count is believed over what was heard,
//! and the difference is noted as gaps or doubles. A final count of zero after
//! drops is a counter that was set back before it spoke: what was heard counts. A
//! final count without a run is a run of which only the count is known.
//!
//! **After the end.** A run is over at its pause whether [`Count::tick`] was
//! called in time or the next line shows it. What a slow or chatty counter still
//! says about the run that is over is told apart from a new run:
//! * the same final count, within the pause and ten seconds more: ignored;
//! * another final count in that time, after a pause: the run is told again with
//!   that count. It supersedes the first, of which no slice can have been taken
//!   yet. Set `pause_ms` above the counter's delay and this never happens;
//! * the same total again (a counter that is polled): ignored; but `1` after an
//!   unrepeated run of one drop is a new run;
//! * a higher total after a pause: the motor was stopped and went on. A run with
//!   that total as its count begins, the pause noted as a gap, and supersedes the
//!   first when it ends. Both say the same first line;
//! * an unnumbered drop within the debounce of the end: ignored as a double.
//!
//! **Interruptions.** When the port or the service was away during a run, the run
//! says so unless a later running or final total covers what was missed. A counter
//! that was set back and passed the old number while nobody listened cannot be
//! told from one that went on; its total is right in both cases.
//!
//! **Start-up.** The state is a function of the limits, the last run told and the
//! lines after that run's `last_input`: [`Count::resume`] with it, then feed
//! those lines (and port losses) again. The line that restarts a counter is not
//! part of the run it ends, so it is among them.

use super::intervals::Intervals;
use super::time::{later, ms, passed, within_boot};
use super::{CountLimits, CountRun, EndedBy, Happening, InputNo};
use crate::signal::Signal;
use crate::stamp::{SECOND_US, Stamp};
use alloc::string::String;

/// How long after the pause an end line can still belong to the run that is over.
const LATE_US: i64 = 10 * SECOND_US;
/// Why a run of unnumbered drops that was already going on may be short.
const BEGAN_UNHEARD: &str = "the run may have begun before the counter was listened to";

/// Why a run of unnumbered drops whose lines were held back may be short.
const READ_LATE: &str = "drops of the run were held back and came all at once, so that they could not be counted one by one";

/// What one line can show: a run that is over, then what this line itself means.
pub type Shown = [Option<Happening>; 2];

/// The sense of one cup counter. Its memory is bounded whatever the stream.
#[derive(Clone, Debug, PartialEq)]
pub struct Count {
    limits: CountLimits,
    run: Option<Run>,
    /// The last run told, while no other has begun.
    ended: Option<CountRun>,
    /// When the port was opened, if no line of a run came since.
    listening: Option<Stamp>,
}

/// The run under way.
#[derive(Clone, Debug, PartialEq)]
struct Run {
    first_input: InputNo,
    last_input: InputNo,
    began: Stamp,
    /// The latest drop.
    last: Stamp,
    /// What the pause counts from.
    alive: Stamp,
    /// Number of the first drop whose time is known.
    first_number: u32,
    number: u32,
    /// The final count, once told.
    told: Option<u32>,
    heard: u32,
    gaps: u32,
    doubles: u32,
    intervals: Intervals,
    /// The latest drop came with its number.
    numbered: bool,
    interrupted: Option<String>,
    /// An unknown number of drops fell between the first and the latest: no rate.
    holed: bool,
    /// Nothing was heard for a while before the next line.
    deaf: bool,
}

impl Run {
    fn start(number: u32, numbered: bool, input: InputNo, at: Stamp) -> Self {
        Self {
            first_input: input,
            last_input: input,
            began: at,
            last: at,
            alive: at,
            first_number: number,
            number,
            told: None,
            heard: 1,
            gaps: number.saturating_sub(1),
            doubles: 0,
            intervals: Intervals::default(),
            numbered,
            interrupted: None,
            holed: false,
            deaf: false,
        }
    }

    fn fell(&mut self, number: u32, numbered: bool, at: Stamp) -> Happening {
        self.number = number;
        self.numbered = numbered;
        self.heard = self.heard.saturating_add(1);
        self.last = at;
        self.alive = at;
        self.deaf = false;
        self.shown()
    }

    fn shown(&self) -> Happening {
        Happening::Drops { drops: self.number, rate_per_s: self.rate_per_s(), at: self.last }
    }

    fn drop_heard(&mut self, limits: &CountLimits, input: InputNo, at: Stamp) -> Option<Happening> {
        self.last_input = input;
        if bounced(limits, &self.last, &at) {
            self.doubles = self.doubles.saturating_add(1);
            // A bounce follows its own drop. Drops that all come in one moment after a
            // long silence were held back on the way: they are drops, and how many fell
            // can no longer be told.
            if at == self.last && self.intervals.latest_is_long(limits.gap_percent) {
                self.interrupted.get_or_insert_with(|| READ_LATE.into());
            }
            return None;
        }
        self.holed |= self.deaf;
        let interval = within_boot(&self.last, &at).filter(|us| *us >= 0 && !self.deaf && !self.numbered);
        if let Some(us) = interval {
            self.intervals.push(us, limits.gap_percent);
        }
        Some(self.fell(self.number.saturating_add(1), false, at))
    }

    /// A running total that is not below the number so far.
    fn total_heard(&mut self, limits: &CountLimits, n: u32, input: InputNo, at: Stamp) -> Option<Happening> {
        self.last_input = input;
        let covers = self.interrupted.take().is_some();
        // Numbers on both sides of the hole give the drops in between, and so
        // the rate; after unnumbered drops the first number is not sure.
        self.holed |= covers && !self.numbered;
        if n == self.number {
            // After an unnumbered drop its number is news, not a double.
            let again = self.numbered && !covers && !limits.polled;
            self.doubles = self.doubles.saturating_add(u32::from(again));
            self.numbered = true;
            return None;
        }
        if !covers {
            self.gaps = self.gaps.saturating_add((n - self.number) - 1);
        }
        Some(self.fell(n, true, at))
    }

    /// The counter's final count, above zero.
    fn final_heard(&mut self, n: u32) {
        self.told = Some(n);
        if self.interrupted.is_some() {
            if n >= self.number {
                self.interrupted = None;
            }
            return;
        }
        self.gaps = self.gaps.saturating_add(n.saturating_sub(self.number));
        self.doubles = self.doubles.saturating_add(self.number.saturating_sub(n));
    }

    fn rate_per_s(&self) -> Option<f64> {
        if self.holed || self.interrupted.is_some() {
            return None;
        }
        let us = within_boot(&self.began, &self.last).filter(|us| *us > 0)?;
        let intervals = self.number.saturating_sub(self.first_number);
        (intervals > 0).then(|| f64::from(intervals) * SECOND_US as f64 / us as f64)
    }

    fn over(self, limits: &CountLimits, ended_by: EndedBy, at: Stamp) -> CountRun {
        CountRun {
            drops: self.told.unwrap_or(self.number),
            rate_per_s: self.rate_per_s(),
            duration_us: passed(&self.began, &self.last).max(0),
            // A missed drop may show both in time and in the final count.
            gaps: self.gaps.max(self.intervals.gaps(limits.gap_percent)),
            doubles: self.doubles,
            heard: self.heard,
            ended_by,
            interrupted: self.interrupted,
            first_input: self.first_input,
            last_input: self.last_input,
            began: self.began,
            at,
        }
    }
}

/// Whether a drop at `at` is the one at `last` heard again. A stamp that goes
/// back proves nothing, so that drop counts.
fn bounced(limits: &CountLimits, last: &Stamp, at: &Stamp) -> bool {
    within_boot(last, at).is_some_and(|us| (0..ms(limits.debounce_ms)).contains(&us))
}

/// A run of which only the final count is known.
fn only_final(n: u32, input: InputNo, at: Stamp) -> CountRun {
    CountRun {
        drops: n,
        rate_per_s: None,
        duration_us: 0,
        gaps: 0,
        doubles: 0,
        heard: 0,
        ended_by: EndedBy::EndLine,
        interrupted: None,
        first_input: input,
        last_input: input,
        began: at,
        at,
    }
}

/// The run that ended by pause, with the final count that came too late for it.
fn corrected(run: &CountRun, n: u32, input: InputNo, at: Stamp) -> CountRun {
    let (more, fewer) = (n.saturating_sub(run.drops), run.drops.saturating_sub(n));
    let mut new = CountRun { drops: n, ended_by: EndedBy::EndLine, last_input: input, at, ..run.clone() };
    if run.interrupted.is_some() {
        new.interrupted = run.interrupted.clone().filter(|_| fewer > 0);
        return new;
    }
    // Where every drop was heard one by one, a long interval and the final count
    // speak of the same missed drop; skipped numbers come before the missing end.
    new.gaps = if run.heard == run.drops { run.gaps.max(more) } else { run.gaps.saturating_add(more) };
    new.doubles = run.doubles.saturating_add(fewer);
    new
}

impl Count {
    /// A counter of which nothing has been heard.
    pub fn new(limits: CountLimits) -> Self {
        Self { limits, run: None, ended: None, listening: None }
    }

    /// The state right after `ended` was told.
    pub fn resume(limits: CountLimits, ended: Option<&CountRun>) -> Self {
        Self { ended: ended.cloned(), ..Self::new(limits) }
    }

    /// Hears one line. Signals that are not a counter's only let time pass.
    pub fn hear(&mut self, signal: &Signal, input: InputNo, at: Stamp) -> Shown {
        let over = self.tick(at);
        match signal {
            Signal::Drop => [over, self.drop_heard(input, at)],
            Signal::Total(n) => {
                let restarts = self.run.as_ref().is_some_and(|run| *n < run.number);
                let over = if restarts { self.finish(EndedBy::Restart, None) } else { over };
                [over, self.total_heard(*n, input, at)]
            }
            Signal::End(told) => [over, self.end_heard(*told, input, at)],
            _ => [over, None],
        }
    }

    /// When the run under way began.
    pub fn began(&self) -> Option<Stamp> {
        self.run.as_ref().map(|run| run.began)
    }

    /// When the run under way will be over if no drop comes.
    pub fn deadline(&self) -> Option<Stamp> {
        self.run.as_ref().map(|run| later(&run.alive, ms(self.limits.pause_ms)))
    }

    /// Lets time pass; tells the run when its pause is over.
    pub fn tick(&mut self, now: Stamp) -> Option<Happening> {
        let run = self.run.as_ref()?;
        if passed(&run.alive, &now) < ms(self.limits.pause_ms) {
            return None;
        }
        self.finish(EndedBy::Pause, None)
    }

    /// The port was lost or the service was away. The first reason stays.
    /// [`Count::tick`] with the time of the loss first: a run whose pause was over
    /// before the loss is not interrupted by it.
    pub fn interrupted(&mut self, why: &str) {
        if let Some(run) = &mut self.run {
            run.deaf = true;
            run.interrupted.get_or_insert_with(|| why.into());
        }
    }

    /// The port is open, for the first time or again. An interrupted run gets its
    /// whole pause once more, so that the counter can say what was missed. Without
    /// a run, unnumbered drops that come before a pause has gone by may have begun
    /// unheard, and their run says so.
    pub fn listening(&mut self, at: Stamp) {
        self.listening = Some(at);
        if let Some(run) = self.run.as_mut().filter(|run| run.interrupted.is_some()) {
            run.alive = at;
        }
    }

    fn drop_heard(&mut self, input: InputNo, at: Stamp) -> Option<Happening> {
        if let Some(run) = &mut self.run {
            self.listening = None;
            return run.drop_heard(&self.limits, input, at);
        }
        if self.ended.as_ref().is_some_and(|ended| bounced(&self.limits, &ended.at, &at)) {
            return None;
        }
        let mut run = Run::start(1, false, input, at);
        run.interrupted = self.just_listening(&at).then(|| BEGAN_UNHEARD.into());
        Some(self.begin(run))
    }

    fn total_heard(&mut self, n: u32, input: InputNo, at: Stamp) -> Option<Happening> {
        if n == 0 {
            self.ended = None;
            return None;
        }
        if let Some(run) = &mut self.run {
            self.listening = None;
            return run.total_heard(&self.limits, n, input, at);
        }
        if self.ended.as_ref().is_some_and(|ended| self.is_repeat(ended, n, &at)) {
            return None;
        }
        let mut run = Run::start(n, true, input, at);
        match &self.ended {
            // The counter goes on where the pause ended the run: what it skipped,
            // and the pause itself, unless nobody was listening then.
            Some(ended) if n >= ended.drops && ended.ended_by == EndedBy::Pause => {
                run.gaps = if ended.interrupted.is_some() { 0 } else { n - ended.drops };
                run.first_input = ended.first_input;
            }
            _ if self.just_listening(&at) => run.gaps = 0,
            _ => {}
        }
        Some(self.begin(run))
    }

    fn end_heard(&mut self, told: Option<u32>, input: InputNo, at: Stamp) -> Option<Happening> {
        let told = told.filter(|n| *n > 0);
        if let Some(run) = &mut self.run {
            self.listening = None;
            run.last_input = input;
            if let Some(n) = told {
                run.final_heard(n);
            }
            return self.finish(EndedBy::EndLine, Some(at));
        }
        let n = told?;
        let late = 0..=ms(self.limits.pause_ms).saturating_add(LATE_US);
        let recent = self.ended.as_ref().filter(|ended| late.contains(&passed(&ended.at, &at)));
        let run = match recent {
            Some(ended) if ended.drops == n && ended.interrupted.is_none() => return None,
            Some(ended) if ended.ended_by == EndedBy::Pause => corrected(ended, n, input, at),
            _ => only_final(n, input, at),
        };
        self.listening = None;
        Some(self.tell(run))
    }

    /// Whether a total says again what the run that is over was told with. A
    /// polled counter repeats itself within the pause; one that speaks only at a
    /// drop says `1` after a pause because it dropped once more.
    fn is_repeat(&self, ended: &CountRun, n: u32, at: &Stamp) -> bool {
        let anew = n == 1 && ended.doubles == 0 && !self.limits.polled && passed(&ended.at, at) >= ms(self.limits.pause_ms);
        n == ended.drops && ended.interrupted.is_none() && !anew
    }

    /// Whether a run that shows itself at `at` may have begun before the port was open.
    fn just_listening(&self, at: &Stamp) -> bool {
        self.listening.is_some_and(|since| passed(&since, at) < ms(self.limits.pause_ms))
    }

    fn begin(&mut self, run: Run) -> Happening {
        let shown = run.shown();
        self.run = Some(run);
        self.ended = None;
        self.listening = None;
        shown
    }

    /// Ends the run under way, at its end line or else at its last drop.
    fn finish(&mut self, ended_by: EndedBy, at: Option<Stamp>) -> Option<Happening> {
        let run = self.run.take()?;
        let at = at.unwrap_or(run.last);
        let run = run.over(&self.limits, ended_by, at);
        Some(self.tell(run))
    }

    fn tell(&mut self, run: CountRun) -> Happening {
        self.ended = Some(run.clone());
        Happening::CountEnded(run)
    }
}
