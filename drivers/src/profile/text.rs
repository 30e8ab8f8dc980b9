//! A profile as it is written in a file. Unknown keys are refused by the reader.

use super::{Kind, Talks};
use crate::modbus::text::ModbusText;
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
    /// The largest mass that is believed, in grams; by default 60 000.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub largest_g: Option<u32>,
    /// What the texts of the group `basis` mean.
    #[serde(default, skip_serializing_if = "BTreeMap::is_empty")]
    pub basis: BTreeMap<String, BasisWord>,
    /// How frames begin and end.
    #[serde(default, skip_serializing_if = "FrameText::is_default")]
    pub frame: FrameText,
    /// Line patterns, tried in order.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub line: Vec<LineText>,
    /// Registers, for an instrument that is read over Modbus instead of sending lines.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub modbus: Option<ModbusText>,
    /// Check digits after the terminator.
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
    /// Longest frame in bytes; by default 256.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub longest: Option<usize>,
}

impl FrameText {
    fn is_default(&self) -> bool {
        *self == Self::default()
    }
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
    /// How the bytes are summed up.
    pub kind: CheckKind,
    /// Which bytes are summed up.
    #[serde(default)]
    pub over: CheckOver,
}

/// How check digits are worked out; both give two hexadecimal digits.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum CheckKind {
    /// Exclusive or of the bytes.
    Xor,
    /// Sum of the bytes, its lowest eight bits.
    Sum,
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
