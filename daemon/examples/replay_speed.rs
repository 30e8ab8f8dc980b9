//! Replays a database of raw lines through the real decoders, senses and soil
//! computation, and says how long it took.
//!
//! `replay_speed CORPUS [OUT]`: CORPUS is an SQLite file with a table
//! `heard(no, at_ns, port, line)` or `raw(id, t_ns, port, line)`; balance lines
//! are of the profile `signed-steady`, counter lines of `running-total`. OUT
//! gets one line `port<TAB>micrograms` for each mass taken. As the bench has no
//! containers, every three masses of a balance count as tare, wet and dry with
//! the latest number of drops, and every three such trials give a liquid limit.

use std::collections::HashMap;
use std::fmt::Write;
use std::sync::Arc;
use std::time::Instant;
use tarecup_core::quantity::Mass;
use tarecup_core::sense::settle::Settle;
use tarecup_core::sense::{Happening, SettleLimits};
use tarecup_core::signal::Signal;
use tarecup_core::soil::flow::FlowLine;
use tarecup_core::soil::water::water_percent;
use tarecup_core::stamp::{Boot, Stamp};
use tarecup_drivers::heard::What;
use tarecup_drivers::profile::{Decoder, Profile};

struct Balance {
    settle: Settle,
    masses: Vec<Mass>,
    trials: Vec<(f64, f64)>,
    drops: u32,
}

#[derive(Default)]
struct Found {
    masses: u64,
    limits: u64,
    out: String,
}

fn decoder(name: &str, toml: &str) -> Result<Decoder, Box<dyn std::error::Error>> {
    let mut text: tarecup_drivers::profile::ProfileText = toml::from_str(toml)?;
    text.name = Some(name.into());
    Ok(Arc::new(Profile::compile(text)?).decoder())
}

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let mut args = std::env::args().skip(1);
    let corpus = args.next().ok_or("say which database to replay")?;
    let out = args.next();
    let began = Instant::now();
    let mut pan = decoder("signed-steady", include_str!("../../config/profiles/signed-steady.toml"))?;
    let mut cup = decoder("running-total", include_str!("../../config/profiles/running-total.toml"))?;
    let db = rusqlite::Connection::open_with_flags(&corpus, rusqlite::OpenFlags::SQLITE_OPEN_READ_ONLY)?;
    let ours: bool = db.query_row("SELECT count(*) FROM sqlite_master WHERE name = 'heard'", [], |r| r.get(0))?;
    let sql =
        if ours { "SELECT at_ns, port, line FROM heard ORDER BY no" } else { "SELECT t_ns, port, line FROM raw ORDER BY id" };
    let mut statement = db.prepare(sql)?;
    let mut rows = statement.query([])?;
    let limits = SettleLimits { change_from: Mass::from_ug(50_000), ..SettleLimits::default() };
    let mut balances: HashMap<String, Balance> = HashMap::new();
    let (mut lines, mut drops, mut found) = (0u64, 0u32, Found { ..Found::default() });
    let mut frame: Vec<u8> = Vec::with_capacity(64);
    while let Some(row) = rows.next()? {
        lines += 1;
        let (at_ns, port, line) = (row.get_ref(0)?.as_i64()?, row.get_ref(1)?.as_str()?, row.get_ref(2)?.as_bytes()?);
        frame.clear();
        frame.extend_from_slice(line);
        frame.extend_from_slice(b"\r\n");
        let at = Stamp { utc_us: at_ns / 1_000, mono_us: at_ns / 1_000, boot: Boot(1) };
        let is_cup = port.starts_with("drop") || port.starts_with("cup");
        match if is_cup { cup.decode(&frame) } else { pan.decode(&frame) } {
            What::Signal(Signal::Total(n)) => drops = n,
            What::Signal(Signal::Mass(reading)) => {
                if !balances.contains_key(port) {
                    let new = Balance { settle: Settle::new(limits), masses: Vec::new(), trials: Vec::new(), drops: 0 };
                    balances.insert(port.to_string(), new);
                }
                let Some(balance) = balances.get_mut(port) else { continue };
                if let Some(Happening::MassTaken(taken)) = balance.settle.hear(&reading, lines, at) {
                    taken_from(balance, port, taken.mass, drops, out.is_some(), &mut found)?;
                }
            }
            _ => (),
        }
    }
    let seconds = began.elapsed().as_secs_f64();
    if let Some(out) = out {
        std::fs::write(out, &found.out)?;
    }
    println!("{{\"lines\":{lines},\"captures\":{},\"limits\":{},\"seconds\":{seconds:.3}}}", found.masses, found.limits);
    Ok(())
}

fn taken_from(
    b: &mut Balance,
    port: &str,
    mass: Mass,
    drops: u32,
    listed: bool,
    found: &mut Found,
) -> Result<(), std::fmt::Error> {
    found.masses += 1;
    if listed {
        writeln!(found.out, "{port}\t{}", mass.ug())?;
    }
    if b.masses.is_empty() {
        b.drops = drops;
    }
    b.masses.push(mass);
    let [tare, wet, dry] = b.masses[..] else { return Ok(()) };
    b.masses.clear();
    if let Ok(w) = water_percent(tare, wet, dry) {
        b.trials.push((f64::from(b.drops), w));
    }
    if b.trials.len() == 3 {
        found.limits += u64::from(FlowLine::fit(&b.trials).is_ok_and(|line| line.at(25.0).is_finite()));
        b.trials.clear();
    }
    Ok(())
}
