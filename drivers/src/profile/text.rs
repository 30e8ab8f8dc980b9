//! A profile as it is written in a file. Unknown keys are refused by the reader.

use super::{Kind, Talks};
use crate::port::{CharFrame, Flow};
use serde::{Deserialize, Serialize};
use std::collections::BTreeMap;

/// A profile as written.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ProfileText {
    /// Name; may be left out where the file that holds it gives one.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub name: Option<String>,
    /// What kind of instrument speaks so.
    pub kind: Kind,
    /// One line for people.
    #[serde(default)]
    pub about: String,
    /// When a balance speaks; by default `asked` with an `[ask]` table, else `stream`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub talks: Option<Talks>,
    /// Unit of masses whose line has none: `ug`, `mg`, `g` or `kg`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub unit: Option<String>,
    /// Decimals of numbers that are printed without a decimal point.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub decimals: Option<u8>,
    /// The largest mass that is believed, in grams; by default 60 000.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub largest_g: Option<u32>,
    /// What the texts of the group `basis` mean.
    #[serde(default, skip_serializing_if = "BTreeMap::is_empty")]
    pub basis: BTreeMap<String, BasisWord>,
    /// How frames begin and end.
    pub frame: FrameText,
    /// Line patterns, tried in order.
    pub line: Vec<LineText>,
    /// Check digits.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub check: Option<CheckText>,
    /// What to send to be answered.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub ask: Option<AskText>,
    /// How the serial line is usually set.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub serial: Option<SerialText>,
}

/// How frames begin and end, as written.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct FrameText {
    /// Terminators, any of which ends a frame.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub ends: Vec<String>,
    /// Characters one of which begins every frame.
    #[serde(default, skip_serializing_if = "String::is_empty")]
    pub starts: String,
    /// Characters that are frames of their own.
    #[serde(default, skip_serializing_if = "String::is_empty")]
    pub single: String,
    /// Bytes after the terminator that belong to the frame.
    #[serde(default)]
    pub tail: usize,
    /// Bytes of a frame without terminator, found again by `columns`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub length: Option<usize>,
    /// What every frame of `length` bytes looks like: `#` is a digit, `?` anything, all else itself.
    #[serde(default, skip_serializing_if = "String::is_empty")]
    pub columns: String,
    /// Longest frame in bytes; by default 256.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub longest: Option<usize>,
}

/// A line pattern, as written.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LineText {
    /// Regular expression for the whole line, without its terminator.
    pub pattern: String,
    /// How many characters the line has, where the dialect has columns: a line that lost a digit on the way is refused.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub width: Option<usize>,
    /// What the line means, where no named group says so.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub means: Option<Means>,
    /// What the mass of this line includes, where no group `basis` says so.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub means_basis: Option<BasisWord>,
}

/// What a line without numbers means.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Means {
    /// A banner, a blank line, an echo.
    Nothing,
    /// More on the pan than can be weighed.
    Overload,
    /// Less on the pan than can be shown.
    Underload,
    /// The instrument cannot measure now.
    NotReady,
    /// One drop of the cup.
    Drop,
    /// The count has ended.
    End,
    /// A line of an instrument of another kind: this port is wired wrongly.
    OtherKind,
}

/// What a mass includes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum BasisWord {
    /// Everything on the pan.
    Gross,
    /// Without what was tared away.
    Net,
    /// Not said.
    Unmarked,
}

/// Check digits, as written.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct CheckText {
    /// How they are worked out.
    pub kind: CheckKind,
    /// Which bytes they cover.
    #[serde(default)]
    pub over: CheckOver,
    /// Where they stand.
    #[serde(default, skip_serializing_if = "is_default")]
    pub place: CheckPlace,
    /// How they are written.
    #[serde(default, skip_serializing_if = "is_default")]
    pub digits: CheckDigits,
    /// Bytes at the end of the body that are not covered, such as a `*` before the digits.
    #[serde(default, skip_serializing_if = "is_default")]
    pub skip: usize,
    /// Of two bytes the lower comes first.
    #[serde(default, skip_serializing_if = "is_default")]
    pub low_first: bool,
}

fn is_default<T: Default + PartialEq>(value: &T) -> bool {
    *value == T::default()
}

/// How check digits are worked out. The names of the CRCs are those of the catalogue of parametrised CRC algorithms.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum CheckKind {
    /// Exclusive or of the bytes.
    Xor,
    /// Sum of the bytes, its lowest eight bits.
    Sum,
    /// What must be added to the sum to give zero, lowest eight bits.
    TwosComplement,
    /// The sum with every bit turned, lowest eight bits.
    OnesComplement,
    /// Sum of the bytes, its lowest sixteen bits.
    #[serde(rename = "sum-16")]
    Sum16,
    /// CRC-16/ARC.
    #[serde(rename = "crc16-arc")]
    Crc16Arc,
    /// CRC-16/MODBUS.
    #[serde(rename = "crc16-modbus")]
    Crc16Modbus,
    /// CRC-16/USB.
    #[serde(rename = "crc16-usb")]
    Crc16Usb,
    /// CRC-16/UMTS.
    #[serde(rename = "crc16-umts")]
    Crc16Umts,
    /// CRC-16/XMODEM.
    #[serde(rename = "crc16-xmodem")]
    Crc16Xmodem,
    /// CRC-16/IBM-3740.
    #[serde(rename = "crc16-ibm-3740")]
    Crc16Ibm3740,
    /// CRC-16/KERMIT.
    #[serde(rename = "crc16-kermit")]
    Crc16Kermit,
    /// CRC-16/IBM-SDLC, also called X-25.
    #[serde(rename = "crc16-x25")]
    Crc16X25,
    /// CRC-16/GENIBUS.
    #[serde(rename = "crc16-genibus")]
    Crc16Genibus,
}

/// Which bytes check digits cover.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum CheckOver {
    /// Between start byte and terminator.
    #[default]
    Body,
    /// From after the start byte to the end of the terminator.
    BodyAndEnd,
    /// From the start byte to before the terminator.
    StartAndBody,
    /// From the start byte to the end of the terminator.
    StartToEnd,
}

/// Where check digits stand.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum CheckPlace {
    /// After the terminator; they are `frame.tail`.
    #[default]
    AfterEnd,
    /// The last of the line, before its terminator; patterns do not see them.
    BeforeEnd,
}

/// How check digits are written.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum CheckDigits {
    /// Two hexadecimal digits for each byte.
    #[default]
    Hex,
    /// The bytes themselves.
    Binary,
}

/// How an instrument is asked, as written.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct AskText {
    /// The request, to the last byte.
    pub send: String,
    /// Milliseconds between requests.
    pub every_ms: u32,
}

/// How the serial line is usually set, as written.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct SerialText {
    /// Speed in baud.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub baud: Option<u32>,
    /// Character frame, such as `8N1`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub frame: Option<CharFrame>,
    /// Flow control.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub flow: Option<Flow>,
}
