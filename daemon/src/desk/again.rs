//! The desk fed with what a ledger holds: the same inputs through today's
//! code, to see whether they lead to the same facts. Nothing is stored.

use super::ear::Ear;
use super::group::{Group, stored};
use super::{Desk, DeskSetup};
use crate::asks;
use crate::ledger::{InputKind, InputStored, Ledger, LedgerError, OpenOptions, Reader};
use bytes::Bytes;
use std::path::Path;
use tarecup_core::fact::Recorded;
use tarecup_core::lab::{Input, Lab, Setup};
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, Frame, PortState, Reject, What};

/// A desk that decides again.
pub(crate) struct Again {
    desk: Desk,
}

impl Again {
    /// A desk before its first settings. `folder` holds an empty ledger that
    /// nothing is written to.
    pub fn new(folder: &Path, nothing: Setup) -> Result<Self, LedgerError> {
        let ledger = Ledger::open(folder, OpenOptions::new("again", 0))?;
        let reader = ledger.reader()?;
        let setup = DeskSetup {
            station: String::new(),
            state_dir: String::new(),
            lab: nothing,
            instruments: Vec::new(),
            settings: String::new(),
            retain_days: 1,
            key: None,
        };
        Ok(Self { desk: Desk::blank(ledger, reader, setup, Stamp::default())? })
    }

    /// Begins under these settings with the state of a laboratory, as if the service had just come up.
    pub fn begin(&mut self, setup: DeskSetup, lab: Option<Lab>, at: Stamp) {
        self.desk.ears = setup.instruments.iter().map(|i| Ear::new(i, Default::default())).collect();
        self.desk.lab = lab.unwrap_or_else(|| Lab::new(setup.lab.clone()));
        self.desk.setup = setup;
        (self.desk.next_input, self.desk.last_fact_input) = (1, 1);
        self.desk.group = Group::default();
        self.desk.decide(Input::Started { program: String::new(), after_orderly_stop: true }, at);
        self.desk.group = Group::default();
    }

    /// The state of the laboratory.
    pub fn lab(&self) -> &Lab {
        &self.desk.lab
    }

    /// Microseconds until time alone leads to something.
    pub fn due_in_us(&self, now: &Stamp) -> Option<i64> {
        self.desk.due_in_us(now)
    }

    /// What an input leads to: facts with the bytes they would be stored as.
    ///
    /// # Errors
    /// In words, when the input is not one this program can take.
    pub fn take(
        &mut self,
        input: &InputStored,
        source: &Reader,
        settings: Option<DeskSetup>,
    ) -> Result<Vec<(Recorded, Bytes)>, String> {
        self.desk.next_input = input.no;
        match input.kind {
            InputKind::Line | InputKind::Reject => self.line(input)?,
            InputKind::Ask => {
                // What the screen said of a PIN stands before the ask.
                let text = String::from_utf8_lossy(&input.bytes).into_owned();
                let body = asks::parse(&text).map_or(text, |asked| asked.body.to_string());
                self.desk.absorb_ask("", None, &body, &mut None, input.at);
            }
            InputKind::Port => self.port(input)?,
            InputKind::Timer => drop(self.desk.absorb_timer(input.at)),
            InputKind::Settings => {
                let digest = crate::ledger::Digest::of(&input.bytes).to_string();
                self.desk.decide(Input::Settings { input: input.no, digest }, input.at);
            }
            InputKind::Start => self.start(input, source, settings)?,
            InputKind::Clock => {
                let seen = serde_json::from_slice(&input.bytes);
                let seen = seen.map_err(|e| format!("input {} about the clock cannot be read: {e}", input.no))?;
                self.desk.decide(Input::Clock(seen), input.at);
            }
            // The lines of a flood are not kept: what they said of the connection is not decided again.
            InputKind::Flood => (),
        }
        let facts = std::mem::take(&mut self.desk.group).facts;
        if !facts.is_empty() {
            self.desk.last_fact_input = input.no + 1;
        }
        Ok(facts.into_iter().map(|d| (d.recorded.clone(), stored(&d.recorded))).collect())
    }

    fn index(&self, input: &InputStored) -> Result<usize, String> {
        let name = input.instrument.as_deref().unwrap_or_default();
        let found = self.desk.setup.instruments.iter().position(|i| i.name.as_str() == name);
        found.ok_or_else(|| {
            format!("input {} is of the instrument \"{name}\", which the settings of its time do not have", input.no)
        })
    }

    fn line(&mut self, input: &InputStored) -> Result<(), String> {
        let index = self.index(input)?;
        let what = match (input.kind, &input.reason) {
            (InputKind::Reject, Some(reason)) => What::Reject(
                Reject::from_word(reason).ok_or_else(|| format!("input {} has the unknown reason \"{reason}\"", input.no))?,
            ),
            _ => (self.desk.setup.instruments[index].decode)(&input.bytes),
        };
        let frames = vec![Frame { end: input.bytes.len() as u32, at: input.at, what }];
        self.desk.absorb_batch(&Batch { instrument: index as u16, bytes: input.bytes.clone(), frames, read_at: None });
        Ok(())
    }

    fn port(&mut self, input: &InputStored) -> Result<(), String> {
        let index = self.index(input)?;
        let text = String::from_utf8_lossy(&input.bytes);
        let instrument = self.desk.setup.instruments[index].name.clone();
        if let Ok(overrun) = serde_json::from_str::<serde_json::Value>(&text) {
            let lines = overrun["overrun_lines"].as_u64().unwrap_or(0);
            self.desk.decide(Input::Overrun { instrument, lines }, input.at);
            return Ok(());
        }
        let state = text.strip_prefix(instrument.as_str()).map(str::trim).and_then(port_state);
        let state = state.ok_or_else(|| format!("input {} is of a port's state that this program does not know", input.no))?;
        self.desk.absorb_port(index, &state, input.at);
        Ok(())
    }

    fn start(&mut self, input: &InputStored, source: &Reader, settings: Option<DeskSetup>) -> Result<(), String> {
        let text = String::from_utf8_lossy(&input.bytes).into_owned();
        if text == "stop" {
            self.desk.decide(Input::Stopping, input.at);
            return Ok(());
        }
        let states: Vec<_> =
            self.desk.setup.instruments.iter().zip(&self.desk.ears).map(|(i, e)| (i.name.clone(), e.state.clone())).collect();
        if let Some(setup) = settings {
            self.desk.setup = setup;
        }
        let fresh = Lab::new(self.desk.setup.lab.clone());
        self.desk.lab = std::mem::replace(&mut self.desk.lab, fresh).set_up_anew(self.desk.setup.lab.clone());
        let state = |name| states.iter().find(|(n, _)| n == name).map(|(_, s)| s.clone()).unwrap_or_default();
        self.desk.ears = self.desk.setup.instruments.iter().map(|i| Ear::new(i, state(&i.name))).collect();
        self.desk.feed_senses(source, input.no, input.at).map_err(|e| e.to_string())?;
        self.desk.last_fact_input = input.no;
        let after_orderly_stop = text.ends_with("true");
        let program = String::from(env!("CARGO_PKG_VERSION"));
        self.desk.decide(Input::Started { program, after_orderly_stop }, input.at);
        Ok(())
    }
}

/// A port's state as it stands in the ledger.
fn port_state(text: &str) -> Option<PortState> {
    Some(match text {
        "Waiting" => PortState::Waiting,
        "Opened" => PortState::Opened,
        "Lost" => PortState::Lost,
        refused => {
            let quoted = refused.strip_prefix("Refused(")?.strip_suffix(')')?;
            PortState::Refused(serde_json::from_str(quoted).unwrap_or_else(|_| quoted.trim_matches('"').into()))
        }
    })
}
