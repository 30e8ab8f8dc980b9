//! Reads a recording: settings, and what happened in the order of time.

use super::{AskLine, FORMAT, Head, Line, VERSION, asks_path, head_path, said_path};
use crate::desk::DeskSetup;
use crate::service::{Restored, settings_of, setup_of};
use serde_json::Value;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{InstrumentId, PortState};
use tarecup_drivers::port::PortSettings;
use tarecup_drivers::profile::Profile;

/// The largest file that is read.
const LARGEST: u64 = 2 << 30;
/// More instruments than a station can have.
const MOST: usize = 200;

/// Why a recording cannot be played.
#[derive(Debug, thiserror::Error)]
#[error("{}: {says}", .path.display())]
pub struct ReadFault {
    path: PathBuf,
    says: String,
}

/// Something that happened.
#[derive(Clone, Debug, PartialEq)]
pub struct Event {
    /// Microseconds since the beginning.
    pub t: i64,
    /// What.
    pub what: What,
}

/// What happened.
#[derive(Clone, Debug, PartialEq)]
pub enum What {
    /// A port gave bytes; `quiet` as [`tarecup_drivers::port::serial::Overhear::said`] has it.
    Said(InstrumentId, Vec<u8>, Option<bool>),
    /// A port's state changed.
    Port(InstrumentId, PortState),
    /// Somebody asked: client and text.
    Ask(String, String),
}

/// A recording, read.
pub struct Recording {
    /// Wall time of its beginning.
    pub began_utc_us: i64,
    /// What happened, in order.
    pub events: Vec<Event>,
    /// Reads that could not be kept while it was made.
    pub lost: u64,
    /// Profiles of the instruments, in the order of their numbers.
    pub profiles: Vec<Arc<Profile>>,
    /// How the ports were set, in the same order.
    pub ports: Vec<PortSettings>,
    settings: Value,
}

impl Recording {
    /// Reads a folder.
    ///
    /// # Errors
    /// What is wrong, and where.
    pub fn read(folder: &Path) -> Result<Self, ReadFault> {
        let path = head_path(folder);
        let fault = |says: String| ReadFault { path: path.clone(), says };
        let head: Head = serde_json::from_str(&text(&path)?).map_err(|e| fault(format!("is no head of a recording: {e}")))?;
        if head.format != FORMAT || head.v != VERSION {
            return Err(fault(format!(
                "is '{}' version {}; this program plays '{FORMAT}' version {VERSION}",
                head.format, head.v
            )));
        }
        let restored = settings_of(&head.settings.to_string()).map_err(&fault)?;
        if restored.names.len() > MOST {
            return Err(fault(format!("settings: more than {MOST} instruments")));
        }
        let (mut events, mut lost) = (Vec::new(), 0);
        for (id, name) in restored.names.iter().enumerate() {
            said(&said_path(folder, name.as_str()), id as InstrumentId, &mut events, &mut lost)?;
        }
        asks(&asks_path(folder), &mut events)?;
        events.sort_by_key(|e| e.t);
        let Restored { profiles, ports, .. } = restored;
        Ok(Self { began_utc_us: head.began_utc_us, events, lost, profiles, ports, settings: head.settings })
    }

    /// What the desk has to know to play it.
    ///
    /// # Errors
    /// What in the settings this program does not understand.
    pub fn desk_setup(&self, state_dir: &Path) -> Result<DeskSetup, String> {
        // What was finished long ago is not taken down while it is played.
        let setup = setup_of(&self.settings.to_string())?;
        Ok(DeskSetup { state_dir: state_dir.display().to_string(), retain_days: u32::MAX, ..setup })
    }

    /// The moment so long after the beginning.
    pub fn stamp(&self, t: i64, boot: tarecup_core::stamp::Boot) -> Stamp {
        let utc_us = self.began_utc_us.saturating_add(t);
        Stamp { utc_us, mono_us: utc_us, boot }
    }
}

fn text(path: &Path) -> Result<String, ReadFault> {
    let fault = |says: String| ReadFault { path: path.to_path_buf(), says };
    let size = std::fs::metadata(path).map_err(|e| fault(format!("cannot be read ({e}); name the folder of a recording")))?.len();
    if size > LARGEST {
        return Err(fault(format!("has {size} bytes; more than {LARGEST} are no recording")));
    }
    std::fs::read_to_string(path).map_err(|e| fault(format!("cannot be read: {e}")))
}

/// Each whole line of a file; one without its end was being written when the program died.
fn lines(path: &Path, mut take: impl FnMut(&str) -> Result<(), String>) -> Result<(), ReadFault> {
    if !path.exists() {
        return Ok(());
    }
    for (n, line) in text(path)?.split_inclusive('\n').enumerate() {
        if let Some(line) = line.strip_suffix('\n') {
            take(line).map_err(|e| ReadFault { path: path.to_path_buf(), says: format!("line {}: {e}", n + 1) })?;
        }
    }
    Ok(())
}

fn said(path: &Path, id: InstrumentId, events: &mut Vec<Event>, lost: &mut u64) -> Result<(), ReadFault> {
    lines(path, |line| {
        let line: Line = serde_json::from_str(line).map_err(|e| e.to_string())?;
        *lost += line.lost.unwrap_or(0);
        if let Some(state) = line.state() {
            events.push(Event { t: line.t, what: What::Port(id, state?) });
        }
        if let Some(bytes) = line.bytes() {
            events.push(Event { t: line.t, what: What::Said(id, bytes?, line.quiet) });
        }
        Ok(())
    })
}

fn asks(path: &Path, events: &mut Vec<Event>) -> Result<(), ReadFault> {
    lines(path, |line| {
        let line: AskLine = serde_json::from_str(line).map_err(|e| e.to_string())?;
        events.push(Event { t: line.t, what: What::Ask(line.client, line.ask.to_string()) });
        Ok(())
    })
}
