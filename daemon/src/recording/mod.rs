//! A recording: what ports said and what persons asked, with the settings it
//! was said under, in a folder. Enough to play it again through the program.
//!
//! `recording.json` tells when it began and the settings in full;
//! `said-NAME.ndjson` has the bytes of one instrument's port and how the port
//! did; `asks.ndjson` has the asks. Each line is one JSON object; `t` is
//! microseconds since the beginning.

mod read;
mod write;

pub use read::{Event, ReadFault, Recording, What};
pub use write::{Beside, Kept, Recorder};

use serde::{Deserialize, Serialize};
use serde_json::Value;
use std::path::{Path, PathBuf};
use tarecup_drivers::heard::PortState;

/// What the folder is called in its own words.
const FORMAT: &str = "tarecup recording";
/// Version of the format.
const VERSION: u32 = 1;

/// The head of a recording.
#[derive(Clone, Debug, Serialize, Deserialize)]
struct Head {
    format: String,
    v: u32,
    /// Version of the program that recorded.
    program: String,
    /// Wall time of the beginning, microseconds since 1970.
    began_utc_us: i64,
    /// For people.
    began: String,
    /// What is kept: everything, or only what was not understood.
    kept: Kept,
    /// The settings in full.
    settings: Value,
}

/// One line of an instrument's file.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct Line {
    t: i64,
    /// The port's state: `waiting`, `opened`, `lost`, `refused`, `unconfirmed`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    port: Option<String>,
    /// Why it was refused or is in doubt.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    why: Option<String>,
    /// With the first bytes after an opening: they begin a line.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    quiet: Option<bool>,
    /// Bytes of one read, where all are ASCII.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    said: Option<String>,
    /// Other bytes, in hexadecimal digits.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    hex: Option<String>,
    /// Why bytes were not understood; only where nothing else is kept.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    reject: Option<String>,
    /// So many reads could not be kept before this line.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    lost: Option<u64>,
}

/// One line of the asks' file.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct AskLine {
    t: i64,
    client: String,
    ask: Value,
}

impl Line {
    fn with_bytes(mut self, bytes: &[u8]) -> Self {
        match std::str::from_utf8(bytes) {
            Ok(text) if text.is_ascii() => self.said = Some(text.into()),
            _ => self.hex = Some(bytes.iter().map(|b| format!("{b:02x}")).collect()),
        }
        self
    }

    fn bytes(&self) -> Option<Result<Vec<u8>, String>> {
        match (&self.said, &self.hex) {
            (Some(said), _) => Some(Ok(said.clone().into_bytes())),
            (None, Some(hex)) => Some(unhex(hex)),
            (None, None) => None,
        }
    }

    fn with_state(mut self, state: &PortState) -> Self {
        let (word, why) = match state {
            PortState::Waiting => ("waiting", None),
            PortState::Opened => ("opened", None),
            PortState::Lost => ("lost", None),
            PortState::Refused(why) => ("refused", Some(why)),
            PortState::Unconfirmed(why) => ("unconfirmed", Some(why)),
        };
        (self.port, self.why) = (Some(word.into()), why.cloned());
        self
    }

    fn state(&self) -> Option<Result<PortState, String>> {
        let why = || self.why.clone().unwrap_or_default();
        Some(match self.port.as_deref()? {
            "waiting" => Ok(PortState::Waiting),
            "opened" => Ok(PortState::Opened),
            "lost" => Ok(PortState::Lost),
            "refused" => Ok(PortState::Refused(why())),
            "unconfirmed" => Ok(PortState::Unconfirmed(why())),
            other => Err(format!("a port is waiting, opened, lost, refused or unconfirmed, not '{other}'")),
        })
    }
}

fn unhex(text: &str) -> Result<Vec<u8>, String> {
    let wrong = || format!("'{text}' is not pairs of hexadecimal digits");
    if !text.len().is_multiple_of(2) || !text.is_ascii() {
        return Err(wrong());
    }
    (0..text.len()).step_by(2).map(|i| u8::from_str_radix(&text[i..i + 2], 16).map_err(|_| wrong())).collect()
}

fn head_path(folder: &Path) -> PathBuf {
    folder.join("recording.json")
}

fn said_path(folder: &Path, instrument: &str) -> PathBuf {
    folder.join(format!("said-{instrument}.ndjson"))
}

fn asks_path(folder: &Path) -> PathBuf {
    folder.join("asks.ndjson")
}
