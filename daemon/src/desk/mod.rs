//! The desk: the one loop through which everything goes.
//!
//! It owns the laboratory's state and the ledger's writer. [`Desk::step`]
//! takes what waits, decides, stores it in one transaction, and only then
//! says what may leave ([`Effects`]). It knows no socket, no broker and no
//! clock: time comes in with what it is given.
//!
//! What was taken and is not yet stored is *held*. When a commit fails, state
//! and ledger are opened anew, exactly as at start-up, and what is held is
//! taken again: nothing is lost and nothing is decided twice.

pub(crate) mod again;
mod ear;
mod flood;
mod group;
pub mod inbox;
mod load;
mod seat;
mod storage;
mod time;
pub(crate) mod views;

pub use group::{Changed, Effects, LiveOut, Publish};
pub use load::{DeskSetup, InstrumentSetup, Kind};
pub use seat::{Seat, SeatSettings};
pub(crate) use views::{CLOCK, STATISTICS};
pub use views::{limits as limits_payload, loose as loose_payload, shelf as shelf_payload};

use crate::asks;
use crate::ledger::{Ledger, LedgerError, Reader};
use ear::Ear;
use group::{Group, Held};
use inbox::{Incoming, Reply};
use serde_json::json;
use std::collections::BTreeMap;
use std::time::{Duration, Instant};
use storage::Watched;
use tarecup_core::fact::Connection;
use tarecup_core::lab::{Input, Lab, Outcome};
use tarecup_core::sense::Happening;
use tarecup_core::stamp::{HOUR_US, Stamp};
use tarecup_drivers::heard::{Batch, PortState, What};
use time::ClockWatch;

/// Lines that led to nothing are stored after this time at the latest.
const HOLD: Duration = Duration::from_millis(200);
/// A fact that nobody waits for is stored with the next one, after this time at the latest.
const COMPANY: Duration = Duration::from_millis(20);
/// After so many lines without a fact, a fact says that they are kept.
const LINES_BETWEEN_FACTS: u64 = 200_000;
/// Lines that led to nothing are stored when so many are held.
const HOLD_LINES: usize = 4_000;

/// Ports that are there and not in use, among what other parts have to say.
pub const OFFERS: &str = "offers";

/// The desk.
pub struct Desk {
    setup: DeskSetup,
    ledger: Ledger,
    reader: Reader,
    lab: Lab,
    ears: Vec<Ear>,
    held: Vec<Held>,
    held_since: Option<Instant>,
    group: Group,
    next_input: u64,
    next_seq: u64,
    /// Where the lines begin that no fact has followed.
    last_fact_input: u64,
    delivered: u64,
    delivered_stored: u64,
    broker: Option<String>,
    not_recording: Option<String>,
    stopped: bool,
    /// What other parts of the service have to say: ports that are offered, how a recording does.
    beside: BTreeMap<&'static str, serde_json::Value>,
    /// When results were last looked through for those to be taken down.
    cleaned: Stamp,
    /// The latest head that was signed.
    signed: Option<crate::ledger::SignedHead>,
    /// What is touched is told with the effects.
    mirrored: bool,
    clock_watch: ClockWatch,
    watched: Watched,
}

impl Desk {
    /// Why nothing is being recorded, if so.
    pub fn not_recording(&self) -> Option<&str> {
        self.not_recording.as_deref()
    }

    /// Whether an orderly stop has been stored.
    pub fn stopped(&self) -> bool {
        self.stopped
    }

    /// The laboratory as it stands, and from now on what is touched is told with the effects.
    pub fn mirror(&mut self) -> Lab {
        self.mirrored = true;
        self.lab.clone()
    }

    /// The ledger's last fact.
    pub fn last_seq(&self) -> u64 {
        self.ledger.tail().last_seq
    }

    /// How each instrument is doing, as it is published.
    pub fn instrument_views(&self) -> Vec<serde_json::Value> {
        (0..self.ears.len()).map(|i| self.instrument_view(i)).collect()
    }

    /// Takes what waits and stores it. What may leave is added to `effects`
    /// only after it is stored.
    pub fn step(&mut self, incoming: &mut Vec<Incoming>, now: &Stamp, effects: &mut Effects) {
        if self.not_recording.is_none()
            && let Some(seen) = self.clock_watch.look(now, self.lab.clock())
        {
            self.absorb(Held::Clock { seen, at: *now });
        }
        for item in incoming.drain(..) {
            self.take(item, now, effects);
        }
        if self.ears.iter().any(|e| e.flood.owes()) {
            self.floods_over(now);
        }
        self.many_lines(now);
        if self.not_recording.is_none() && self.something_due(now) {
            self.absorb(Held::Timer { at: *now });
        }
        if self.should_commit() {
            self.commit(effects);
        }
        self.look_after_storage(now, effects);
        if now.since(&self.cleaned).us >= 24 * HOUR_US {
            self.cleaned = *now;
            self.sign_head(now);
            effects
                .retained
                .push(group::Publish { topic: String::from("head"), payload: Some(group::payload(&self.head_view(now))) });
            match self.take_down(now) {
                Ok(topics) => effects.retained.extend(topics),
                Err(e) => tracing::warn!(error = %e, "old results stay published for another day"),
            }
        }
    }

    fn take(&mut self, item: Incoming, now: &Stamp, effects: &mut Effects) {
        match item {
            Incoming::Batch(batch) => {
                effects.heard.push((batch.instrument, batch.bytes.len() as u64));
                self.take_batch(batch);
            }
            Incoming::Overrun { instrument, lines, at } => self.absorb(Held::Overrun { instrument, lines, at }),
            Incoming::Port { instrument, state, at } => self.absorb(Held::Port { instrument, state, at }),
            Incoming::Ask { client, body, reply } => self.take_ask(client, &body, reply, now, effects),
            Incoming::Delivered(through) => self.delivered = self.delivered.max(through),
            Incoming::Broker(trouble) => self.broker = trouble,
            Incoming::Note { what, says } => self.note(what, says, now, effects),
            Incoming::Tick(reply) => effects.replies.push((reply, String::new())),
            Incoming::Stop => {
                self.absorb(Held::Stop { at: *now });
                self.group.urgent = true;
            }
        }
    }

    /// Another part of the service has something to say. What ports are offered stands at a topic too.
    fn note(&mut self, what: &'static str, says: serde_json::Value, now: &Stamp, effects: &mut Effects) {
        self.beside.insert(what, says);
        if what == OFFERS {
            effects.retained.push(self.offer_topic(now));
        }
    }

    fn take_batch(&mut self, batch: Batch) {
        let index = usize::from(batch.instrument);
        let mut changes = Vec::new();
        let (batch, over) = self.ears[index].sift(batch, &mut changes);
        if let Some(swallowed) = over {
            self.absorb(Held::Flood { instrument: index as u16, swallowed });
        }
        for (change, at) in changes {
            let detail = self.ears[index].words(change);
            self.connection(index, change, detail, at);
        }
        if !batch.frames.is_empty() {
            self.absorb(Held::Batch { batch });
        }
    }

    /// A start reads what came since the last fact: that must not grow for days.
    fn many_lines(&mut self, now: &Stamp) {
        if self.group.has_facts() {
            self.last_fact_input = self.next_input;
        } else if self.next_input - self.last_fact_input >= LINES_BETWEEN_FACTS {
            self.absorb(Held::Timer { at: *now });
        }
    }

    /// Floods whose second is over.
    fn floods_over(&mut self, now: &Stamp) {
        for index in 0..self.ears.len() {
            if let Some(swallowed) = self.ears[index].flood.over(now) {
                self.absorb(Held::Flood { instrument: index as u16, swallowed });
            }
        }
    }

    fn take_ask(&mut self, client: String, text: &str, reply: Reply, now: &Stamp, effects: &mut Effects) {
        if let Some(why) = &self.not_recording {
            let says = format!("nothing is being recorded: {why}");
            return effects.replies.push((reply, asks::refusal(&says)));
        }
        match asks::parse(text) {
            Ok(asked) if asked.proven && !client.starts_with(asks::SCREEN) => {
                let says = format!("\"{}\" is said by the screen alone", asks::PROVEN);
                effects.replies.push((reply, asks::refusal(&says)));
            }
            Err(says) => effects.replies.push((reply, asks::refusal(&says))),
            Ok(asked) => match asked.wanted {
                asks::Wanted::Read(read) => {
                    // What is read must be stored: a client may act on it.
                    if self.group.has_facts() {
                        self.commit(effects);
                    }
                    if let asks::Read::Would(asks) = &read {
                        let bodies: Vec<String> = asks.iter().filter_map(|a| serde_json::to_string(a).ok()).collect();
                        bodies.iter().for_each(|body| self.fetch_named(body));
                    }
                    let answer = self.read(&read, now);
                    effects.replies.push((reply, answer));
                }
                asks::Wanted::Confirm(name) if !self.in_doubt(&name) => {
                    let says = format!("the port of '{name}' is not in doubt; there is nothing to confirm");
                    effects.replies.push((reply, asks::refusal(&says)));
                }
                asks::Wanted::Write(_) | asks::Wanted::Confirm(_) => {
                    let (id, body, proven) = (asked.id, asked.body.to_string(), asked.proven);
                    self.absorb(Held::Ask { client, id, body, proven, reply: Some(reply), at: *now });
                }
            },
        }
    }

    /// Whether a person has to say that the instrument is the one meant.
    fn in_doubt(&self, name: &str) -> bool {
        self.place_of(name).is_some_and(|index| self.ears[index].unconfirmed)
    }

    fn place_of(&self, name: &str) -> Option<usize> {
        self.setup.instruments.iter().position(|i| i.name.as_str() == name)
    }

    /// Takes one thing: decides what it means and holds it until it is stored.
    fn absorb(&mut self, mut held: Held) {
        let kept = match &mut held {
            Held::Batch { batch } => {
                self.absorb_batch(batch);
                true
            }
            Held::Flood { .. } => {
                self.next_input += 1;
                true
            }
            Held::Overrun { instrument, lines, at } => {
                let name = self.setup.instruments[usize::from(*instrument)].name.clone();
                self.next_input += 1;
                self.decide(Input::Overrun { instrument: name, lines: *lines }, *at);
                true
            }
            Held::Port { instrument, state, at } => {
                self.next_input += 1;
                self.absorb_port(usize::from(*instrument), state, *at);
                true
            }
            Held::Ask { client, id, body, reply, at, .. } => self.absorb_ask(client, id.as_deref(), body, reply, *at),
            Held::Timer { at } => self.absorb_timer(*at),
            Held::Clock { seen, at } => {
                self.next_input += 1;
                self.decide(Input::Clock(seen.clone()), *at);
                true
            }
            Held::Settings { text, at } => {
                let input = self.next_input;
                self.next_input += 1;
                let digest = crate::ledger::Digest::of(text.as_bytes()).to_string();
                self.decide(Input::Settings { input, digest }, *at);
                true
            }
            Held::Start { after_orderly_stop, at } => {
                self.next_input += 1;
                let program = String::from(env!("CARGO_PKG_VERSION"));
                self.decide(Input::Started { program, after_orderly_stop: *after_orderly_stop }, *at);
                true
            }
            Held::Stop { at } => {
                self.next_input += 1;
                self.decide(Input::Stopping, *at);
                true
            }
        };
        if kept {
            self.held.push(held);
            self.held_since.get_or_insert_with(Instant::now);
        }
    }

    fn absorb_batch(&mut self, batch: &Batch) {
        let index = usize::from(batch.instrument);
        let mut begin = 0usize;
        for frame in &batch.frames {
            let input = self.next_input;
            self.next_input += 1;
            let bytes = begin..frame.end as usize;
            begin = frame.end as usize;
            self.group.lines += 1;
            if let What::Reject(reason) = frame.what {
                self.ears[index].reject(reason, &batch.bytes[bytes.clone()]);
            }
            if let Some(change) = self.ears[index].heard(&frame.what, &batch.bytes[bytes], &frame.at) {
                let detail = self.ears[index].words(change);
                self.connection(index, change, detail, frame.at);
            }
            match &frame.what {
                What::Signal(signal) => self.signal(index, signal, input, frame.at),
                What::Nothing => (),
                What::Reject(_) => {
                    if self.setup.instruments[index].kind == Kind::Scanner {
                        let scanner = self.setup.instruments[index].name.clone();
                        self.decide(Input::CodeUnread { scanner, input }, frame.at);
                    }
                }
            }
        }
    }

    fn signal(&mut self, index: usize, signal: &tarecup_core::signal::Signal, input: u64, at: Stamp) {
        let (happenings, code) = self.ears[index].sense(signal, input, at);
        for happening in happenings.into_iter().flatten() {
            self.happened(index, happening);
        }
        if let Some(text) = code {
            self.fetch_code(&text);
            let scanner = self.setup.instruments[index].name.clone();
            self.decide(Input::Code { scanner, text, input }, at);
        }
    }

    fn happened(&mut self, index: usize, happening: Happening) {
        let name = self.setup.instruments[index].name.clone();
        match happening {
            Happening::MassTaken(taken) => {
                self.ears[index].remember_taken(taken);
                self.group.senses.insert(index);
                self.decide(Input::Mass { balance: name, taken }, taken.at);
            }
            Happening::Unloaded { input, at, stayed } => {
                let before = self.group.facts.len();
                if let Some(stayed) = stayed {
                    self.decide(Input::PanWatched { balance: name.clone(), stayed, input }, at);
                }
                self.decide(Input::Unloaded { balance: name.clone(), input }, at);
                if self.group.facts.len() > before {
                    self.ears[index].remember_unloaded(input);
                    self.group.senses.insert(index);
                }
            }
            Happening::LeftOnPan(left) => {
                let before = self.group.facts.len();
                self.decide(Input::LeftOnPan { balance: name, left }, left.at);
                if self.group.facts.len() > before {
                    self.ears[index].remember_unloaded(left.zero.input);
                    self.group.senses.insert(index);
                }
            }
            Happening::Drops { drops, rate_per_s, at } => {
                self.group.urgent = true;
                self.group.live.push(LiveOut::Drop { instrument: name, drops, rate_per_s, at });
            }
            Happening::CountEnded(run) => {
                self.ears[index].remember_run(&run);
                self.group.senses.insert(index);
                let at = run.at;
                self.decide(Input::Count { cup: name, run }, at);
            }
        }
    }

    fn absorb_port(&mut self, index: usize, state: &PortState, at: Stamp) {
        if let Some(happening) = self.ears[index].tick(&at) {
            self.happened(index, happening);
        }
        let was_lost = self.ears[index].connection == Connection::PortLost;
        self.ears[index].port(state, at);
        self.ears[index].counters_changed = true;
        let (connection, detail) = match state {
            PortState::Waiting => (Connection::Waiting, Some(String::from("its port is not there"))),
            PortState::Opened => (Connection::Waiting, None),
            PortState::Lost => (Connection::PortLost, None),
            // A port that was lost stays lost until it is back; why it is not says what to try.
            PortState::Refused(why) if was_lost => (Connection::PortLost, Some(why.clone())),
            PortState::Refused(why) => (Connection::Waiting, Some(why.clone())),
            PortState::Unconfirmed(why) => (Connection::Waiting, Some(self.to_confirm(index, why))),
        };
        self.connection(index, connection, detail, at);
    }

    fn to_confirm(&self, index: usize, why: &str) -> String {
        let name = &self.setup.instruments[index].name;
        format!(
            "{why}: tarecup ask confirm_port instrument={name} who=INITIALS, and then, within a minute, press PRINT on the one you \
             mean or put something on its pan"
        )
    }

    fn connection(&mut self, index: usize, state: Connection, detail: Option<String>, at: Stamp) {
        let ear = &mut self.ears[index];
        ear.connected(state);
        ear.nothing_said |= state == Connection::Waiting && detail.is_some();
        let instrument = self.setup.instruments[index].name.clone();
        if ear.stale() && std::mem::take(&mut ear.on_show) {
            self.group.live.push(LiveOut::Stale { instrument: instrument.clone(), state, last_heard: ear.last_heard, at });
        }
        self.decide(Input::Instrument { instrument, state, detail }, at);
    }

    fn absorb_ask(&mut self, client: &str, id: Option<&str>, body: &str, reply: &mut Option<Reply>, at: Stamp) -> bool {
        if let Some(id) = id {
            match self.known_ask(client, id, body) {
                Ok(None) => (),
                Ok(Some(answer)) => {
                    self.group.answers.push(group::Answered { held: false, keep: None, answer, reply: reply.take() });
                    return false;
                }
                Err(says) => {
                    self.group.answers.push(group::Answered {
                        held: false,
                        keep: None,
                        answer: asks::refusal(&says),
                        reply: reply.take(),
                    });
                    return false;
                }
            }
        }
        self.fetch_named(body);
        self.next_input += 1;
        let before = self.group.facts.len();
        let confirmed = asks::confirmed(body).and_then(|name| Some((self.place_of(&name)?, name)));
        let answer = match serde_json::from_str(body) {
            _ if let Some((index, name)) = confirmed => {
                self.group.confirmed.push(index as u16);
                let next = format!("press PRINT on {name}, or put something on its pan, within a minute");
                json!({"ok": true, "facts": [], "next": next}).to_string()
            }
            Err(e) => asks::refusal(&format!("the ask cannot be done: {e}")),
            Ok(ask) => match self.try_decide(Input::Ask(ask), at) {
                Err(refusal) => asks::refusal(&refusal.0),
                Ok(()) => {
                    let facts: Vec<u64> = self.group.facts[before..].iter().map(|f| f.recorded.seq).collect();
                    json!({"ok": true, "facts": facts}).to_string()
                }
            },
        };
        let keep = id.map(|id| (client.to_string(), id.to_string(), crate::ledger::Digest::of(body.as_bytes())));
        self.group.answers.push(group::Answered { held: true, keep, answer, reply: reply.take() });
        true
    }

    /// Lets time pass for senses, connections and the laboratory.
    fn absorb_timer(&mut self, at: Stamp) -> bool {
        let before = self.group.facts.len();
        let number = self.next_input;
        self.next_input += 1;
        for index in 0..self.ears.len() {
            if let Some(happening) = self.ears[index].tick(&at) {
                self.happened(index, happening);
            }
            if let Some((change, detail)) = self.ears[index].changed_by_time(&at) {
                self.connection(index, change, detail, at);
            }
        }
        self.decide(Input::Due, at);
        let lines = number - self.last_fact_input;
        if lines >= LINES_BETWEEN_FACTS {
            self.decide(Input::LinesKept { lines }, at);
            self.last_fact_input = number;
        }
        let led_to_something = self.group.facts.len() > before;
        if !led_to_something {
            self.next_input = number;
        }
        led_to_something
    }

    fn decide(&mut self, input: Input, at: Stamp) {
        if let Err(refusal) = self.try_decide(input, at) {
            // Only asks are refused; an instrument's word never is.
            tracing::error!(refusal = %refusal, "an input was refused that cannot be");
        }
    }

    fn try_decide(&mut self, input: Input, at: Stamp) -> Result<(), tarecup_core::lab::Refusal> {
        for id in self.lab.wants(&input) {
            self.fetch_specimen(&id);
        }
        if matches!(input, Input::Ask(_) | Input::Code { .. }) {
            let runs = self.ears.iter().zip(&self.setup.instruments);
            let runs = runs.filter_map(|(ear, i)| ear.running().map(|since| (i.name.clone(), since)));
            self.lab.counting(runs.collect::<Vec<_>>());
        }
        let Outcome { facts, touched } = self.lab.take(input, at, self.next_seq)?;
        self.next_seq += facts.len() as u64;
        self.group.add(facts, touched);
        Ok(())
    }

    fn something_due(&self, now: &Stamp) -> bool {
        self.due_in_us(now) == Some(0)
    }

    /// Microseconds until time alone leads to something.
    pub fn due_in_us(&self, now: &Stamp) -> Option<i64> {
        let ears = self.ears.iter().filter_map(|e| e.due_in_us(now)).min();
        let lab = self.lab.due_in_us(now);
        ears.into_iter().chain(lab).min().map(|us| us.max(0))
    }

    /// When held lines must be stored at the latest.
    pub fn hold_until(&self) -> Option<Instant> {
        let lines = self.held_since.map(|since| since + HOLD);
        let facts = self.group.first_fact.map(|since| since + COMPANY);
        lines.into_iter().chain(facts).chain(self.watched.reserve_until()).min()
    }

    fn should_commit(&self) -> bool {
        let company = self.group.first_fact.is_some_and(|since| since.elapsed() >= COMPANY);
        let waiting = self.group.urgent || company || !self.group.answers.is_empty();
        let old = self.held_since.is_some_and(|since| since.elapsed() >= HOLD);
        self.not_recording.is_none() && (waiting || old || self.group.lines >= HOLD_LINES)
    }

    /// Nothing came for a while: time for the ledger's housekeeping.
    pub fn idle(&mut self) {
        if self.not_recording.is_none()
            && let Err(e) = self.ledger.tidy()
        {
            tracing::warn!(error = %e, "housekeeping of the ledger has to wait");
        }
    }

    /// Opens the ledger anew and takes again what is held. Called at intervals while nothing is recorded.
    pub fn recover(&mut self, now: &Stamp, effects: &mut Effects) {
        let Some(why) = self.not_recording.clone() else { return };
        match self.reload_and_retake(*now) {
            Ok(()) => {
                tracing::warn!(reason = %why, "recording again");
                self.not_recording = None;
                self.commit(effects);
                effects.presence = true;
                if self.mirrored {
                    effects.changed.insert(0, Changed::Whole(Box::new(self.lab.clone())));
                }
                // What was stored in the moment of trouble was never announced.
                match self.standing_topics(now) {
                    Ok(topics) => effects.retained.splice(0..0, topics).for_each(drop),
                    Err(e) => tracing::warn!(error = %e, "retained topics could not be read; they follow with the next change"),
                }
            }
            Err(e) => self.note_not_recording(&e, effects),
        }
    }

    pub(super) fn note_not_recording(&mut self, error: &LedgerError, effects: &mut Effects) {
        self.watched.failed(error);
        let why = error.to_string();
        if self.not_recording.as_deref() != Some(why.as_str()) {
            tracing::error!(reason = %why, "NOT RECORDING");
            self.not_recording = Some(why);
            effects.presence = true;
        }
    }
}
