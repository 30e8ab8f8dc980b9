//! The `[modbus]` table of a profile: as it is written, and made ready to run.

use super::{Block, Field, Framing, Plan, Table, Value};
use crate::profile::{Kind, ProfileFault};
use serde::{Deserialize, Serialize};
use std::time::Duration;
use tarecup_core::quantity::{Mass, MassUnit};

/// Registers that one request may ask for (Modbus Application Protocol V1.1b3, 6.3).
const MOST_REGISTERS: u16 = 125;
/// Values that one instrument needs at most: a number and a status.
const MOST_READS: usize = 8;
const EVERY_MS: std::ops::RangeInclusive<u32> = 20..=3_600_000;
/// A motorised cup drops twice a second: asked more seldom, drops would be seen two at a time.
const COUNTER_EVERY_MS: u32 = 400;
const TIMEOUT_MS: std::ops::RangeInclusive<u32> = 20..=10_000;
/// How long an answer is waited for, unless the profile says otherwise.
const TIMEOUT_DEFAULT_MS: u32 = 500;

/// How an instrument is read over Modbus, as written.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ModbusText {
    /// Number of the instrument on its line (unit identifier).
    pub unit: u8,
    /// Milliseconds between polls.
    pub every_ms: u32,
    /// Milliseconds that an answer is waited for; by default 500.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub timeout_ms: Option<u32>,
    /// `rtu`, also through a gateway, or `tcp`.
    #[serde(default)]
    pub framing: Framing,
    /// What is read at each poll.
    pub read: Vec<ReadText>,
}

/// One value among the registers, as written.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ReadText {
    /// What the value is.
    pub what: Reads,
    /// Its first register as manuals number them, from 30001 or 40001.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub register: Option<u32>,
    /// Its first register as it is asked for, from 0.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub address: Option<u16>,
    /// Which registers an `address` means; by default `holding`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub table: Option<Table>,
    /// Bits: 16 or 32; by default 16.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub width: Option<u8>,
    /// Whether a mass is a two's complement number; by default true.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub signed: Option<bool>,
    /// Which half of 32 bits comes first; by default `high-first`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub word_order: Option<WordOrder>,
    /// What one count of the register is, an exact decimal such as `"0.01"`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub scale: Option<String>,
    /// Unit of a mass: `ug`, `mg`, `g` or `kg`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub unit: Option<String>,
    /// Bit that is set while the mass is at rest, counted from 0 at the right.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub steady_bit: Option<u8>,
    /// Bit that is set while it moves.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub moving_bit: Option<u8>,
    /// Bit that is set when the pan holds too much.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub overload_bit: Option<u8>,
    /// Bit that is set when the pan holds too little.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub underload_bit: Option<u8>,
    /// Bit that is set while a tare is taken away; without it the mass is unmarked.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub net_bit: Option<u8>,
    /// Bit that is set when the instrument cannot measure.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub error_bit: Option<u8>,
}

/// What a value is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Reads {
    /// The mass on a balance.
    Mass,
    /// The running count of a counter.
    Total,
    /// Bits.
    Status,
}

/// Which half of a 32-bit value is in its first register.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum WordOrder {
    /// The high one.
    #[default]
    HighFirst,
    /// The low one.
    LowFirst,
}

fn fault<T>(key: impl Into<String>, says: impl Into<String>) -> Result<T, ProfileFault> {
    Err(ProfileFault { key: key.into(), says: says.into() })
}

/// Checks the table; `unit` is that of the profile, for masses that name none.
pub(crate) fn compile(text: &ModbusText, kind: Kind, unit: Option<MassUnit>) -> Result<Plan, ProfileFault> {
    if kind == Kind::Scanner {
        return fault("modbus", "codes are not read over Modbus; only balances and counters are");
    }
    // 0 would speak to all at once; over TCP, 0 and 255 mean the gateway itself.
    if text.framing == Framing::Rtu && !(1..=247).contains(&text.unit) {
        return fault("modbus.unit", format!("{}; an instrument on a line has a number from 1 to 247", text.unit));
    }
    let every_ms = text.every_ms;
    if !EVERY_MS.contains(&every_ms) {
        return fault("modbus.every_ms", format!("{every_ms} ms; choose 20 to 3600000"));
    }
    if kind == Kind::Counter && every_ms > COUNTER_EVERY_MS {
        return fault(
            "modbus.every_ms",
            format!("{every_ms} ms; a cup drops twice a second, so choose at most {COUNTER_EVERY_MS}, such as 200"),
        );
    }
    let timeout_ms = text.timeout_ms.unwrap_or(TIMEOUT_DEFAULT_MS);
    if !TIMEOUT_MS.contains(&timeout_ms) {
        return fault("modbus.timeout_ms", format!("{timeout_ms} ms; choose 20 to 10000"));
    }
    if text.read.len() > MOST_READS {
        return fault("modbus.read", format!("{} values; at most {MOST_READS} are read", text.read.len()));
    }
    let mut values = Vec::with_capacity(text.read.len());
    for (i, read) in text.read.iter().enumerate() {
        values.push(value(read, &format!("modbus.read[{}]", i + 1), kind, unit)?);
    }
    one_of_each(&text.read, kind)?;
    let blocks = blocks(&values)?;
    let (every, timeout) = (millis(every_ms), millis(timeout_ms));
    Plan::new(text.unit, text.framing, every, timeout, blocks, values)
        .map_or_else(|| fault("modbus.read", "there is nothing to read; add a [[modbus.read]]"), Ok)
}

fn millis(ms: u32) -> Duration {
    Duration::from_millis(u64::from(ms))
}

fn one_of_each(reads: &[ReadText], kind: Kind) -> Result<(), ProfileFault> {
    let (what, word) = if kind == Kind::Balance { (Reads::Mass, "mass") } else { (Reads::Total, "total") };
    let number = |what| reads.iter().filter(|r| r.what == what).count();
    if number(what) != 1 || number(Reads::Status) > 1 {
        return fault(
            "modbus.read",
            format!("a {} has one [[modbus.read]] with what = \"{word}\", and at most one with what = \"status\"", kind.word()),
        );
    }
    Ok(())
}

fn value(read: &ReadText, key: &str, kind: Kind, unit: Option<MassUnit>) -> Result<Value, ProfileFault> {
    let (table, start) = place(read, key)?;
    let words = match read.width.unwrap_or(16) {
        16 => 1,
        32 => 2,
        other => return fault(format!("{key}.width"), format!("{other}; a value has 16 or 32 bits")),
    };
    if start.checked_add(words - 1).is_none() {
        return fault(format!("{key}.address"), "the second register would be beyond 65535");
    }
    if words == 1 && read.word_order.is_some() {
        return fault(format!("{key}.word_order"), "belongs to a value of two registers; write width = 32, or leave it out");
    }
    not_of_this_value(read, key)?;
    let low_first = read.word_order == Some(WordOrder::LowFirst);
    let field = match (read.what, kind) {
        (Reads::Mass, Kind::Balance) => Field::Mass { count: count(read, key, unit)?, signed: read.signed.unwrap_or(true) },
        (Reads::Total, Kind::Counter) => Field::Total,
        (Reads::Status, _) => status(read, key, words)?,
        (Reads::Mass, _) => return fault(format!("{key}.what"), "a counter has no mass; write what = \"total\""),
        (Reads::Total, _) => return fault(format!("{key}.what"), "a balance has no total; write what = \"mass\""),
    };
    Ok(Value { table, start, words, low_first, field })
}

/// Table and zero-based address.
fn place(read: &ReadText, key: &str) -> Result<(Table, u16), ProfileFault> {
    match (read.register, read.address, read.table) {
        (Some(number), None, None) => {
            // Manuals put the table in front of the number, with five or six digits.
            let ranges = [
                (30_001..=39_999, Table::Input),
                (40_001..=49_999, Table::Holding),
                (300_001..=365_536, Table::Input),
                (400_001..=465_536, Table::Holding),
            ];
            let found = ranges.into_iter().find(|(range, _)| range.contains(&number));
            let address = found.and_then(|(range, table)| Some((table, u16::try_from(number - range.start()).ok()?)));
            address.map_or_else(
                || {
                    let says = format!(
                        "{number} is no register; write 30001 to 39999 (input) or 40001 to 49999 (holding), six digits beyond, \
                         or address = 0 and on with table = \"input\" or \"holding\""
                    );
                    fault(format!("{key}.register"), says)
                },
                Ok,
            )
        }
        (Some(_), None, Some(_)) => {
            fault(format!("{key}.table"), "the register's first digit already says it; leave 'table' out")
        }
        (Some(_), Some(_), _) => fault(format!("{key}.address"), "'register' and 'address' say the same place; leave one out"),
        (None, Some(address), table) => Ok((table.unwrap_or_default(), address)),
        (None, None, _) => fault(key, "it has no place; write register = 40001 or address = 0"),
    }
}

/// Keys that mean nothing for this value.
fn not_of_this_value(read: &ReadText, key: &str) -> Result<(), ProfileFault> {
    let of_mass = [("scale", read.scale.is_some()), ("unit", read.unit.is_some()), ("signed", read.signed.is_some())];
    if read.what != Reads::Mass
        && let Some((name, _)) = of_mass.iter().find(|(_, given)| *given)
    {
        return fault(format!("{key}.{name}"), "belongs to a mass; leave it out here");
    }
    if read.what != Reads::Status
        && let Some((name, _)) = bits(read).iter().find(|(_, bit)| bit.is_some())
    {
        return fault(format!("{key}.{name}"), "belongs to a status; put it into a [[modbus.read]] with what = \"status\"");
    }
    Ok(())
}

fn bits(read: &ReadText) -> [(&'static str, Option<u8>); 6] {
    [
        ("steady_bit", read.steady_bit),
        ("moving_bit", read.moving_bit),
        ("overload_bit", read.overload_bit),
        ("underload_bit", read.underload_bit),
        ("net_bit", read.net_bit),
        ("error_bit", read.error_bit),
    ]
}

fn status(read: &ReadText, key: &str, words: u16) -> Result<Field, ProfileFault> {
    let wide = words * 16;
    if let Some((name, bit)) = bits(read).into_iter().find(|(_, bit)| bit.is_some_and(|b| u16::from(b) >= wide)) {
        let bit = bit.unwrap_or_default();
        return fault(format!("{key}.{name}"), format!("{bit}; bits are counted from 0 to {}", wide - 1));
    }
    if read.steady_bit.is_some() && read.moving_bit.is_some() {
        return fault(format!("{key}.moving_bit"), "one of steady_bit and moving_bit says it; leave the other out");
    }
    if bits(read).iter().all(|(_, bit)| bit.is_none()) {
        return fault(key, "a status without bits says nothing; name one, such as steady_bit = 0");
    }
    let mask = |bit: Option<u8>| bit.map(|b| 1u32 << b);
    Ok(Field::Status {
        steady: mask(read.steady_bit),
        moving: mask(read.moving_bit),
        overload: mask(read.overload_bit),
        underload: mask(read.underload_bit),
        net: mask(read.net_bit),
        error: mask(read.error_bit),
    })
}

/// The mass of one count of the register.
fn count(read: &ReadText, key: &str, unit: Option<MassUnit>) -> Result<Mass, ProfileFault> {
    let unit = match &read.unit {
        Some(word) => MassUnit::parse(word),
        None => unit,
    };
    let Some(unit) = unit else {
        return fault(format!("{key}.unit"), "a mass needs its unit; write ug, mg, g or kg");
    };
    let Some(scale) = &read.scale else {
        return fault(format!("{key}.scale"), "a mass needs what one count of its register is; write scale = \"0.01\" or \"1\"");
    };
    match Mass::parse(scale, unit) {
        Ok(count) if count > Mass::ZERO => Ok(count),
        Ok(_) => fault(format!("{key}.scale"), "one count must be more than nothing; write \"0.01\" or \"1\""),
        Err(e) => fault(format!("{key}.scale"), format!("'{scale}': {e}")),
    }
}

/// The requests that read all values: registers that follow each other are
/// asked for at once, so that a mass and its status are of one moment.
fn blocks(values: &[Value]) -> Result<Vec<Block>, ProfileFault> {
    let mut spans: Vec<(Table, u16, u32)> = values.iter().map(|v| (v.table, v.start, v.end())).collect();
    spans.sort_unstable();
    let mut blocks: Vec<(Table, u16, u32)> = Vec::new();
    for (table, start, end) in spans {
        match blocks.last_mut().filter(|(t, _, to)| *t == table && u32::from(start) <= *to) {
            Some(last) => last.2 = last.2.max(end),
            None => blocks.push((table, start, end)),
        }
    }
    let block = |(table, start, end): (Table, u16, u32)| {
        let count = u16::try_from(end - u32::from(start)).ok().filter(|n| *n <= MOST_REGISTERS);
        count
            .map_or_else(|| fault("modbus.read", "too many registers for one request"), |count| Ok(Block { table, start, count }))
    };
    blocks.into_iter().map(block).collect()
}
