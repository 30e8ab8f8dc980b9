//! What the desk keeps of one instrument: its sense, its counters, and how it
//! is connected.

use super::flood::{Flood, Swallowed};
use super::load::{InstrumentSetup, Kind};
use serde::{Deserialize, Serialize};
use std::collections::BTreeMap;
use tarecup_core::fact::Connection;
use tarecup_core::sense::count::Count;
use tarecup_core::sense::settle::{Before, Settle};
use tarecup_core::sense::{CountRun, Happening, MassTaken};
use tarecup_core::signal::{Reading, Signal};
use tarecup_core::stamp::{SECOND_US, Stamp};
use tarecup_drivers::heard::{Batch, PortState, Reject, What};

/// A streaming balance that says nothing for this long is silent.
const SILENT_US: i64 = 5 * SECOND_US;
/// Counters of an instrument that speaks are published again after this time.
const SHOWN_AGAIN_US: i64 = 15 * SECOND_US;
/// So many lines in a row that nobody understands are another language.
const STRANGE_LINES: u32 = 4;
/// Fewer are one, too, when nothing is understood for this long after the first of them: …
const STRANGE_US: i64 = 3 * SECOND_US;
/// … so few where a line was understood since the port was opened, and a single one where none was.
const STRANGE_FEW: u32 = 2;
/// Bytes without a line end that are more than the crackle of a plug.
const CRACKLE: usize = 2;

/// Said of a balance that should speak all the time.
const NOTHING_CAME: &str =
    "its port is open and nothing has come; is it switched on, is the cable whole, and does it send without being asked?";

/// Where a sense stood after its last fact; stored with that fact.
#[derive(Clone, Debug, Default, Serialize, Deserialize)]
pub struct SenseState {
    /// Last input consumed.
    pub through: u64,
    /// The mass that still lies on the pan.
    pub taken: Option<MassTaken>,
    /// The last count run.
    pub run: Option<CountRun>,
    /// What the pan showed before the load that was lifted last.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub before: Option<Before>,
}

enum Sense {
    Balance(Box<Settle>),
    Counter(Box<Count>),
    Scanner,
}

/// One instrument as the desk hears it.
pub struct Ear {
    sense: Sense,
    streams: bool,
    /// How it is connected.
    pub connection: Connection,
    /// Its port is open.
    pub port_open: bool,
    /// Where its sense stood after its last fact.
    pub state: SenseState,
    /// When something was last heard from it.
    pub last_heard: Option<Stamp>,
    /// Lines understood.
    pub understood: u64,
    /// Lines not understood, by reason.
    pub rejects: BTreeMap<&'static str, u64>,
    /// The latest line not understood.
    pub last_reject: Option<String>,
    /// Lines in a row that were not understood, and when the first of them came.
    strange: u32,
    strange_since: Option<Stamp>,
    /// When its port was opened, and whether a line was understood since.
    opened: Option<Stamp>,
    proved: bool,
    /// It has been said that nothing comes.
    pub nothing_said: bool,
    /// It may be another instrument than the one meant; a person has to say.
    pub unconfirmed: bool,
    /// The latest reading and whether it was shown.
    pub reading: Option<(Reading, Stamp)>,
    /// What was last shown live, and when.
    pub shown: Option<(Reading, Stamp)>,
    /// A reading was shown live, and not yet taken back as stale.
    pub on_show: bool,
    /// Counters have changed since they were published.
    pub counters_changed: bool,
    /// Lines understood, and when the last was heard, as they were last published.
    published: (u64, Option<Stamp>),
    /// Noise beyond what is kept line by line.
    pub(super) flood: Flood,
}

impl Ear {
    /// The ear of an instrument whose sense stood at `state`.
    pub fn new(setup: &InstrumentSetup, state: SenseState) -> Self {
        let sense = match setup.kind {
            Kind::Balance => Sense::Balance(Box::new(Settle::resume(setup.settle, state.taken).lifted(state.before))),
            Kind::Counter => Sense::Counter(Box::new(Count::resume(setup.count, state.run.as_ref()))),
            Kind::Scanner => Sense::Scanner,
        };
        Self {
            sense,
            streams: setup.streams,
            connection: Connection::Waiting,
            port_open: false,
            state,
            last_heard: None,
            understood: 0,
            rejects: BTreeMap::new(),
            last_reject: None,
            strange: 0,
            strange_since: None,
            opened: None,
            proved: false,
            nothing_said: false,
            unconfirmed: false,
            reading: None,
            shown: None,
            on_show: false,
            counters_changed: false,
            published: (0, None),
            flood: Flood::default(),
        }
    }

    /// Notes that a frame came; says when the connection is seen differently for it.
    pub fn heard(&mut self, what: &What, bytes: &[u8], at: &Stamp) -> Option<Connection> {
        self.last_heard = Some(*at);
        let now = match what {
            What::Signal(_) => {
                (self.strange, self.strange_since, self.proved) = (0, None, true);
                self.understood += 1;
                Connection::Speaking
            }
            What::Nothing => {
                self.understood += 1;
                // A blank line is one in every language.
                if self.strange > 0 || self.connection != Connection::Silent {
                    return None;
                }
                Connection::Speaking
            }
            What::Reject(Reject::FirstPartial | Reject::CutOff) => return None,
            What::Reject(reason) => {
                self.strange = self.strange.saturating_add(1);
                self.strange_since.get_or_insert(*at);
                let tells = match reason {
                    Reject::WrongKind | Reject::TooLong => true,
                    Reject::Unended => bytes.len() > CRACKLE,
                    _ => false,
                };
                if !tells && self.strange < STRANGE_LINES {
                    return None;
                }
                Connection::WrongLanguage
            }
        };
        (now != self.connection).then_some(now)
    }

    /// What is said of a connection that has changed.
    pub fn words(&self, state: Connection) -> Option<String> {
        if state != Connection::WrongLanguage {
            return None;
        }
        let line = self.last_reject.as_deref().unwrap_or_default();
        Some(format!(
            "what comes is not understood, at last \"{line}\"; are two cables exchanged, or is the speed another than the instrument's?"
        ))
    }

    /// The connection is seen so from now on. What lies on the pan, and a run
    /// that is under way, cannot be trusted across another language.
    pub fn connected(&mut self, state: Connection) {
        if state == Connection::WrongLanguage && self.connection != state {
            match &mut self.sense {
                Sense::Balance(settle) => settle.disturbed(),
                Sense::Counter(count) => count.interrupted("what came during the run was not understood"),
                Sense::Scanner => (),
            }
        }
        self.connection = state;
    }

    /// Whether what was last read is not what the instrument shows now.
    pub fn stale(&self) -> bool {
        self.connection != Connection::Speaking
    }

    /// Counts a frame that was not understood.
    pub fn reject(&mut self, reason: Reject, bytes: &[u8]) {
        *self.rejects.entry(reason.word()).or_default() += 1;
        self.last_reject = Some(bytes.iter().take(60).flat_map(|b| std::ascii::escape_default(*b)).map(char::from).collect());
        self.counters_changed = true;
    }

    /// Takes a flood out of a batch; its lines are counted all the same.
    pub(super) fn sift(&mut self, batch: Batch, changes: &mut Vec<(Connection, Stamp)>) -> (Batch, Option<Swallowed>) {
        let mut flood = std::mem::take(&mut self.flood);
        let sifted = flood.sift(batch, |frame, bytes| {
            if let What::Reject(reason) = frame.what {
                self.reject(reason, bytes);
            }
            if let Some(change) = self.heard(&frame.what, bytes, &frame.at) {
                changes.push((change, frame.at));
                self.connected(change);
            }
        });
        self.flood = flood;
        sifted
    }

    /// What a signal leads to: happenings, or a code.
    pub fn sense(&mut self, signal: &Signal, input: u64, at: Stamp) -> ([Option<Happening>; 2], Option<String>) {
        match (&mut self.sense, signal) {
            (Sense::Balance(settle), Signal::Mass(reading)) => {
                self.reading = Some((*reading, at));
                ([settle.hear(reading, input, at), None], None)
            }
            (Sense::Balance(settle), Signal::Overload | Signal::Underload | Signal::NotReady) => {
                settle.other(input, at);
                ([None, None], None)
            }
            (Sense::Counter(count), Signal::Drop | Signal::Total(_) | Signal::End(_)) => (count.hear(signal, input, at), None),
            (Sense::Scanner, Signal::Code(text)) => ([None, None], Some(text.clone())),
            // A profile only yields signals of its own kind.
            _ => ([None, None], None),
        }
    }

    /// The port came or went.
    pub fn port(&mut self, state: &PortState, at: Stamp) {
        (self.strange, self.strange_since, self.proved) = (0, None, false);
        self.port_open = *state == PortState::Opened;
        self.nothing_said = false;
        self.opened = self.port_open.then_some(at);
        self.unconfirmed = matches!(state, PortState::Unconfirmed(_));
        match (&mut self.sense, state) {
            (Sense::Balance(settle), PortState::Lost) => settle.disturbed(),
            // A run that was over by its pause already is not marked: `hear` and `tick` come first.
            (Sense::Counter(count), PortState::Lost) => count.interrupted("the counter's port was lost during the run"),
            (Sense::Counter(count), PortState::Opened) => count.listening(at),
            _ => (),
        }
    }

    /// The port came or went, read back from the ledger: what its run led to is a fact already.
    pub fn port_again(&mut self, state: &PortState, at: Stamp) {
        let _ = self.tick(&at);
        self.port(state, at);
    }

    /// The service was away.
    pub fn service_was_away(&mut self, since: &str, now: Stamp) {
        if let Sense::Counter(count) = &mut self.sense {
            count.interrupted(&format!("the service was not running during the run (since {since})"));
            count.listening(now);
        }
    }

    /// Whether its published counters are so old that they mislead.
    pub fn shown_long_ago(&self) -> bool {
        let (lines, at) = self.published;
        let age = self.last_heard.zip(at).map_or(i64::MAX, |(now, then)| now.since(&then).us);
        lines != self.understood && age >= SHOWN_AGAIN_US
    }

    /// Its counters are being published.
    pub fn counters_shown(&mut self) {
        self.published = (self.understood, self.last_heard);
    }

    /// Since when a run of its cup goes on.
    pub fn running(&self) -> Option<Stamp> {
        match &self.sense {
            Sense::Counter(count) => count.began(),
            _ => None,
        }
    }

    /// Lets time pass for the sense.
    pub fn tick(&mut self, now: &Stamp) -> Option<Happening> {
        match &mut self.sense {
            Sense::Counter(count) => count.tick(*now),
            _ => None,
        }
    }

    /// What time alone says of the connection: silence, nothing at all, or lines that nobody understands.
    pub fn changed_by_time(&self, now: &Stamp) -> Option<(Connection, Option<String>)> {
        let due = |us: Option<i64>| us.is_some_and(|us| us <= 0);
        if due(self.strange_in_us(now)) {
            Some((Connection::WrongLanguage, self.words(Connection::WrongLanguage)))
        } else if due(self.silent_in_us(now)) {
            Some((Connection::Silent, None))
        } else if due(self.nothing_in_us(now)) {
            Some((Connection::Waiting, Some(String::from(NOTHING_CAME))))
        } else {
            None
        }
    }

    fn strange_in_us(&self, now: &Stamp) -> Option<i64> {
        let few = if self.proved { STRANGE_FEW } else { 1 };
        let since = self.strange_since.filter(|_| self.strange >= few && self.connection != Connection::WrongLanguage)?;
        Some(STRANGE_US - now.since(&since).us)
    }

    fn silent_in_us(&self, now: &Stamp) -> Option<i64> {
        let talking = self.streams && self.connection == Connection::Speaking;
        let last = self.last_heard.filter(|_| talking)?;
        Some(SILENT_US - now.since(&last).us)
    }

    /// A streaming balance of which nothing has come since its port was opened.
    fn nothing_in_us(&self, now: &Stamp) -> Option<i64> {
        let waits = self.streams && self.connection == Connection::Waiting && !self.nothing_said;
        let opened = self.opened.filter(|_| waits)?;
        Some(SILENT_US - now.since(&self.last_heard.unwrap_or(opened)).us.min(now.since(&opened).us))
    }

    /// Microseconds until time alone leads to something.
    pub fn due_in_us(&self, now: &Stamp) -> Option<i64> {
        let pause = match &self.sense {
            Sense::Counter(count) => count.deadline().map(|d| -now.since(&d).us),
            _ => None,
        };
        let flood = self.flood.due_in_us(now).filter(|_| self.flood.owes());
        pause
            .into_iter()
            .chain(self.silent_in_us(now))
            .chain(self.strange_in_us(now))
            .chain(self.nothing_in_us(now))
            .chain(flood)
            .min()
    }

    /// A mass was taken: this is where the sense stands.
    pub fn remember_taken(&mut self, taken: MassTaken) {
        (self.state.through, self.state.taken, self.state.before) = (taken.input, Some(taken), None);
    }

    /// The pan is empty again, and a fact says so.
    pub fn remember_unloaded(&mut self, input: u64) {
        (self.state.through, self.state.taken) = (input, None);
        if let Sense::Balance(settle) = &self.sense {
            self.state.before = settle.before();
        }
    }

    /// A run ended: this is where the sense stands.
    pub fn remember_run(&mut self, run: &CountRun) {
        (self.state.through, self.state.run) = (run.last_input, Some(run.clone()));
    }
}
