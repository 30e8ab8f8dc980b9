//! Ports: open, read, lose, reopen.

mod ask;
mod doubt;
mod hold;
mod link;
pub mod list;
pub mod listen;
pub mod modbus;
mod open;
pub mod place;
pub mod pulse;
pub mod serial;
mod tape;
pub mod tcp;
mod teller;

use serde::{Deserialize, Serialize};

/// Character frame of a serial line, such as `8N1` or `7E1`.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(try_from = "String", into = "String")]
pub struct CharFrame {
    /// 5 to 8.
    pub data_bits: u8,
    /// `N`, `E` or `O`.
    pub parity: char,
    /// 1 or 2.
    pub stop_bits: u8,
}

impl Default for CharFrame {
    fn default() -> Self {
        Self { data_bits: 8, parity: 'N', stop_bits: 1 }
    }
}

impl std::str::FromStr for CharFrame {
    type Err = String;
    fn from_str(text: &str) -> Result<Self, String> {
        let wrong = || format!("'{text}' is not a character frame; write data bits, parity and stop bits, such as 8N1 or 7E1");
        let mut chars = text.chars();
        let (Some(d), Some(p), Some(s), None) = (chars.next(), chars.next(), chars.next(), chars.next()) else {
            return Err(wrong());
        };
        let parity = p.to_ascii_uppercase();
        match (d, parity, s) {
            ('5'..='8', 'N' | 'E' | 'O', '1' | '2') => Ok(Self { data_bits: d as u8 - b'0', parity, stop_bits: s as u8 - b'0' }),
            _ => Err(wrong()),
        }
    }
}

impl TryFrom<String> for CharFrame {
    type Error = String;
    fn try_from(text: String) -> Result<Self, String> {
        text.parse()
    }
}

impl From<CharFrame> for String {
    fn from(frame: CharFrame) -> String {
        format!("{}{}{}", frame.data_bits, frame.parity, frame.stop_bits)
    }
}

/// Flow control of a serial line.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Flow {
    /// None.
    #[default]
    None,
    /// By the RTS and CTS lines.
    Hardware,
    /// By XON and XOFF characters.
    Software,
}

/// Where an instrument is connected and how its line is set.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct PortSettings {
    /// Path of the port, or `tcp://host:port`.
    pub path: String,
    /// Speed in baud.
    pub baud: u32,
    /// Character frame.
    pub frame: CharFrame,
    /// Flow control.
    pub flow: Flow,
}
