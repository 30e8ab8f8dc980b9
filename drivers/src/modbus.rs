//! Instruments that are read over Modbus: registers to signals. Pure.
//!
//! A poll asks for the profile's registers, one request for each run of
//! neighbours, and gives **one frame**: the answers exactly as they were
//! received, one after the other in the order of the requests, check bytes
//! included. Over a serial line or a gateway an answer is
//! `unit function length data… crc crc`, over Modbus TCP it is
//! `transaction(2) 0 0 length(2) unit function length data…`, where the data
//! are registers, each with its high byte first. So the ledger's bytes and the
//! profile give the mass again, by [`Plan::decode`].
//!
//! An instrument that answers with an exception is understood: it is busy or
//! fails (4, 5, 6, and a gateway's 10 and 11: *not ready*), or it does not know
//! the question, and then the profile is not its own (1, 2, 3 and all others).
//!
//! Source: Modbus Application Protocol Specification V1.1b3 and Modbus over
//! Serial Line V1.02 (modbus.org): functions 3 and 4, exceptions, the frames
//! and their check.

pub mod text;

use crate::heard::{Reject, What};
use crate::profile::COUNT_MAX;
use serde::{Deserialize, Serialize};
use std::time::Duration;
use tarecup_core::quantity::Mass;
use tarecup_core::signal::{Basis, Mark, Reading, Signal};

/// How requests and answers are wrapped.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Framing {
    /// As on a serial line; also through a gateway that hands bytes on.
    #[default]
    Rtu,
    /// Modbus TCP.
    Tcp,
}

/// Which registers.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Table {
    /// Holding registers, read by function 3.
    #[default]
    Holding,
    /// Input registers, read by function 4.
    Input,
}

impl Table {
    /// Function that reads this table.
    pub fn function(self) -> u8 {
        match self {
            Self::Holding => 3,
            Self::Input => 4,
        }
    }
}

/// One request: neighbouring registers of one table.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Block {
    /// Which registers.
    pub table: Table,
    /// The first, counted from 0.
    pub start: u16,
    /// How many.
    pub count: u16,
}

/// One value among the registers.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
struct Value {
    table: Table,
    start: u16,
    words: u16,
    low_first: bool,
    field: Field,
}

impl Value {
    /// The register behind its last.
    fn end(&self) -> u32 {
        u32::from(self.start) + u32::from(self.words)
    }
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Field {
    Mass {
        /// One count of the register.
        count: Mass,
        signed: bool,
    },
    Total,
    Status {
        steady: Option<u32>,
        moving: Option<u32>,
        overload: Option<u32>,
        underload: Option<u32>,
        net: Option<u32>,
        error: Option<u32>,
    },
}

/// What to ask and how to understand the answers.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Plan {
    unit: u8,
    framing: Framing,
    every: Duration,
    timeout: Duration,
    blocks: Vec<Block>,
    values: Vec<Value>,
}

/// What a poll's values add up to.
#[derive(Default)]
struct Read {
    mass: Option<(Mass, Mass)>,
    total: Option<u32>,
    mark: Mark,
    basis: Basis,
    instead: Option<Signal>,
}

/// One answer, taken off the front of a frame.
enum Answer<'f> {
    Registers(&'f [u8]),
    Exception(u8),
}

impl Plan {
    fn new(
        unit: u8,
        framing: Framing,
        every: Duration,
        timeout: Duration,
        blocks: Vec<Block>,
        values: Vec<Value>,
    ) -> Option<Self> {
        (!blocks.is_empty()).then_some(Self { unit, framing, every, timeout, blocks, values })
    }

    /// Number of the instrument on its line.
    pub fn unit(&self) -> u8 {
        self.unit
    }
    /// How requests and answers are wrapped.
    pub fn framing(&self) -> Framing {
        self.framing
    }
    /// Time between polls.
    pub fn every(&self) -> Duration {
        self.every
    }
    /// How long an answer is waited for.
    pub fn timeout(&self) -> Duration {
        self.timeout
    }
    /// The requests of a poll: all that is ever asked.
    pub fn blocks(&self) -> &[Block] {
        &self.blocks
    }

    /// Decodes the answers of one poll; masses beyond `largest` are not believed.
    pub fn decode(&self, frame: &[u8], largest: Mass) -> What {
        self.signal(frame, largest).map_or_else(What::Reject, What::Signal)
    }

    /// Bytes of the answer that `frame` begins with, when it is whole and is one to this request.
    pub fn answer_len(&self, frame: &[u8], block: &Block) -> Option<usize> {
        let mut rest = frame;
        self.take(&mut rest, block).ok()?;
        Some(frame.len() - rest.len())
    }

    fn signal(&self, frame: &[u8], largest: Mass) -> Result<Signal, Reject> {
        let mut rest = frame;
        let mut read = Read::default();
        for block in &self.blocks {
            match self.take(&mut rest, block)? {
                Answer::Registers(data) => self.read(block, data, &mut read)?,
                // Nothing is asked after an exception, so nothing may follow it.
                Answer::Exception(code) if rest.is_empty() => return exception(code),
                Answer::Exception(_) => return Err(Reject::NoPattern),
            }
        }
        if !rest.is_empty() {
            return Err(Reject::NoPattern);
        }
        if let Some(instead) = read.instead {
            return Ok(instead);
        }
        match (read.mass, read.total) {
            (Some((mass, step)), _) if mass.abs() <= largest => {
                Ok(Signal::Mass(Reading { mass, step, mark: read.mark, basis: read.basis }))
            }
            (Some(_), _) => Err(Reject::Mass),
            (None, Some(n)) if n <= COUNT_MAX => Ok(Signal::Total(n)),
            (None, _) => Err(Reject::Number),
        }
    }

    fn take<'f>(&self, rest: &mut &'f [u8], block: &Block) -> Result<Answer<'f>, Reject> {
        let pdu = match self.framing {
            Framing::Rtu => take_rtu(rest, self.unit)?,
            Framing::Tcp => take_tcp(rest, self.unit)?,
        };
        let function = block.table.function();
        match pdu {
            [f, code] if *f == function | 0x80 => Ok(Answer::Exception(*code)),
            [f, n, data @ ..]
                if *f == function && usize::from(*n) == data.len() && data.len() == 2 * usize::from(block.count) =>
            {
                Ok(Answer::Registers(data))
            }
            _ => Err(Reject::NoPattern),
        }
    }

    fn read(&self, block: &Block, data: &[u8], read: &mut Read) -> Result<(), Reject> {
        let end = u32::from(block.start) + u32::from(block.count);
        let inside = |v: &&Value| v.table == block.table && v.start >= block.start && v.end() <= end;
        for value in self.values.iter().filter(inside) {
            let from = 2 * usize::from(value.start - block.start);
            let bytes = data.get(from..from + 2 * usize::from(value.words)).ok_or(Reject::NoPattern)?;
            read.take(value, bytes)?;
        }
        Ok(())
    }
}

impl Read {
    fn take(&mut self, value: &Value, bytes: &[u8]) -> Result<(), Reject> {
        let raw = match *bytes {
            [a, b] => u32::from(u16::from_be_bytes([a, b])),
            [a, b, c, d] if value.low_first => u32::from_be_bytes([c, d, a, b]),
            [a, b, c, d] => u32::from_be_bytes([a, b, c, d]),
            _ => return Err(Reject::NoPattern),
        };
        match value.field {
            Field::Mass { count, signed } => {
                let counts = match (signed, value.words) {
                    (false, _) => i64::from(raw),
                    (true, 1) => i64::from(raw as u16 as i16),
                    (true, _) => i64::from(raw as i32),
                };
                let ug = counts.checked_mul(count.ug()).ok_or(Reject::Mass)?;
                self.mass = Some((Mass::from_ug(ug), count));
            }
            Field::Total => self.total = Some(raw),
            Field::Status { steady, moving, overload, underload, net, error } => {
                let set = |mask: Option<u32>| mask.map(|m| raw & m != 0);
                self.mark = match set(steady).or(set(moving).map(|m| !m)) {
                    Some(true) => Mark::Steady,
                    Some(false) => Mark::Moving,
                    None => Mark::Unmarked,
                };
                self.basis = set(net).map_or(Basis::Unmarked, |net| if net { Basis::Net } else { Basis::Gross });
                let says = [(error, Signal::NotReady), (overload, Signal::Overload), (underload, Signal::Underload)];
                self.instead = says.into_iter().find(|(mask, _)| set(*mask) == Some(true)).map(|(_, signal)| signal);
            }
        }
        Ok(())
    }
}

/// What an exception means for whoever waits for a mass or a count.
fn exception(code: u8) -> Result<Signal, Reject> {
    match code {
        // Failure, acknowledged, busy; of a gateway: no path, no answer.
        4 | 5 | 6 | 10 | 11 => Ok(Signal::NotReady),
        _ => Err(Reject::NoPattern),
    }
}

/// Takes an answer of a serial line: unit, function, data, check. Gives function and data.
fn take_rtu<'f>(rest: &mut &'f [u8], unit: u8) -> Result<&'f [u8], Reject> {
    let frame = *rest;
    let [from, function, third, ..] = *frame else { return Err(Reject::CutOff) };
    let body = if function & 0x80 != 0 { 3 } else { 3 + usize::from(third) };
    let (Some(body), Some(check)) = (frame.get(..body), frame.get(body..body + 2)) else { return Err(Reject::CutOff) };
    if crc(body).to_le_bytes() != *check {
        return Err(Reject::Checksum);
    }
    if from != unit {
        return Err(Reject::NoPattern);
    }
    *rest = &frame[body.len() + 2..];
    Ok(&body[1..])
}

/// Takes an answer of Modbus TCP. Gives function and data.
fn take_tcp<'f>(rest: &mut &'f [u8], unit: u8) -> Result<&'f [u8], Reject> {
    let frame = *rest;
    let [_, _, 0, 0, high, low, from, ..] = *frame else {
        return Err(if frame.len() < 7 { Reject::CutOff } else { Reject::NoPattern });
    };
    let end = 6 + usize::from(u16::from_be_bytes([high, low]));
    let body = frame.get(7..end).ok_or(if end < 7 { Reject::NoPattern } else { Reject::CutOff })?;
    if from != unit {
        return Err(Reject::NoPattern);
    }
    *rest = &frame[end..];
    Ok(body)
}

/// The check of a serial frame: CRC-16 with the polynomial 0xA001 (reflected 0x8005) from 0xFFFF.
pub fn crc(bytes: &[u8]) -> u16 {
    const TABLE: [u16; 256] = table();
    bytes.iter().fold(0xFFFF, |crc, b| (crc >> 8) ^ TABLE[usize::from((crc as u8) ^ b)])
}

const fn table() -> [u16; 256] {
    let mut table = [0; 256];
    let mut byte = 0;
    while byte < 256 {
        let mut crc = byte as u16;
        let mut bit = 0;
        while bit < 8 {
            crc = if crc & 1 == 1 { (crc >> 1) ^ 0xA001 } else { crc >> 1 };
            bit += 1;
        }
        table[byte] = crc;
        byte += 1;
    }
    table
}

#[cfg(test)]
mod tests;
