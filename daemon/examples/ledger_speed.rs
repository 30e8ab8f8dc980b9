//! Measures the ledger on the disk that a folder is on:
//! `cargo run --release -p tarecup --example ledger_speed -- [FOLDER]`.
//!
//! Prints rows a second in groups, how long a commit of one fact takes, and
//! how fast a start and `verify` go over what was written.

use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};
use tarecup::ledger::{DocumentRow, FactRow, Group, InputKind, InputRow, Ledger, LedgerError, OpenOptions, verify};
use tarecup_core::stamp::{Boot, Stamp};

fn at(no: u64) -> Stamp {
    Stamp { utc_us: 1_772_439_245_000_000 + no as i64, mono_us: no as i64, boot: Boot(1) }
}

fn row(no: u64) -> InputRow<'static> {
    InputRow { no, at: at(no), kind: InputKind::Line, instrument: Some("pan-1"), bytes: b"ST,+  21.43 g\r\n", reason: None }
}

fn fact(ledger: &Ledger) -> Vec<u8> {
    let (seq, at) = (ledger.next_seq(), at(ledger.next_input()).rfc3339());
    format!(r#"{{"v":1,"seq":{seq},"at":"{at}","kind":"mass_taken","who":"AB","fact":{{"mass_ug":21430000}}}}"#).into_bytes()
}

fn in_groups(ledger: &mut Ledger, size: u64, total: u64) -> Result<(), LedgerError> {
    let began = Instant::now();
    for _ in 0..total / size {
        let first = ledger.next_input();
        let inputs: Vec<_> = (first..first + size).map(row).collect();
        ledger.commit(&Group { inputs: &inputs, ..Group::default() })?;
        ledger.tidy()?;
    }
    println!("groups of {size:>4}: {:>9.0} rows/s", total as f64 / began.elapsed().as_secs_f64());
    Ok(())
}

fn one_by_one(ledger: &mut Ledger, count: usize) -> Result<(), LedgerError> {
    let mut took = Vec::with_capacity(count);
    for _ in 0..count {
        let (body, no, seq) = (fact(ledger), ledger.next_input(), ledger.next_seq());
        let inputs = [row(no)];
        let facts = [FactRow { seq, at: at(no), kind: "mass_taken", who: Some("AB"), through: no, body: &body }];
        let documents = [DocumentRow { kind: "container", id: "C11", seq, open: true, body: &body }];
        let began = Instant::now();
        ledger.commit(&Group { inputs: &inputs, facts: &facts, documents: &documents, ..Group::default() })?;
        took.push(began.elapsed());
    }
    took.sort();
    let ms = |share: usize| took[(count * share / 1000).min(count - 1)].as_secs_f64() * 1e3;
    println!("one fact with its line and document: p50 {:.2} ms, p99 {:.2} ms, most {:.2} ms", ms(500), ms(990), ms(1000));
    Ok(())
}

fn seconds(time: Duration) -> f64 {
    time.as_secs_f64()
}

fn measure(folder: &Path) -> Result<(), LedgerError> {
    let options = OpenOptions::new("speed", 0);
    let mut ledger = Ledger::open(folder, options.clone())?;
    one_by_one(&mut ledger, 3_000)?;
    for (size, total) in [(1, 3_000), (10, 30_000), (100, 300_000), (1_000, 2_000_000)] {
        in_groups(&mut ledger, size, total)?;
    }
    drop(ledger);
    let began = Instant::now();
    let mut ledger = Ledger::open(folder, options.clone())?;
    println!("start over {} inputs without a fact: {:.2} s", ledger.tail().last_input, seconds(began.elapsed()));
    one_by_one(&mut ledger, 100)?;
    drop(ledger);
    let began = Instant::now();
    drop(Ledger::open(folder, options)?);
    println!("start after a fact: {:.1} ms", seconds(began.elapsed()) * 1e3);
    let began = Instant::now();
    let report = verify(folder, None, &mut |_| {})?;
    let took = seconds(began.elapsed());
    println!("verify: {} facts, {} inputs in {took:.2} s, {:?}", report.facts, report.inputs, report.first_bad);
    Ok(())
}

fn main() -> Result<(), anyhow::Error> {
    let at = std::env::args_os().nth(1).map_or_else(std::env::temp_dir, PathBuf::from);
    let folder = tempfile::tempdir_in(at)?;
    Ok(measure(folder.path())?)
}
