//! Killed at any instant, nothing acknowledged is lost or doubled.
//!
//! The test starts itself again as a writer, reads what that acknowledges, and
//! kills it (SIGKILL) at a random moment, twenty times on the same ledger.

use std::io::{BufRead, BufReader, Write};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::mpsc;
use std::time::{Duration, Instant};
use tarecup::ledger::{
    Digest, FILE_NAME, FactRow, Group, InputKind, InputRow, KnownHead, Ledger, LedgerError, OpenOptions, Reader, verify,
};
use tarecup_core::stamp::{Boot, Stamp};
use tempfile::TempDir;

const ROLE: &str = "TARECUP_TEST_LEDGER_WRITER";
const ROUNDS: u32 = 20;

fn at(no: u64) -> Stamp {
    Stamp { utc_us: no as i64 * 1_000, mono_us: no as i64, boot: Boot(1) }
}

/// What input `no` is, known to the writer and to the model.
fn line(no: u64) -> Vec<u8> {
    format!("{no:>9}.{:02} g\r\n", no % 100).into_bytes()
}

/// What fact `seq` is, resting on input `through`.
fn fact(seq: u64, through: u64) -> Vec<u8> {
    format!(r#"{{"seq":{seq},"at":"{}","kind":"mass_taken","who":null,"line":{through}}}"#, at(through).rfc3339()).into_bytes()
}

fn random() -> u64 {
    let mut bytes = [0; 8];
    getrandom::fill(&mut bytes).expect("random bytes");
    u64::from_le_bytes(bytes)
}

/// Writes until killed, saying after each commit what is stored.
fn write_for_ever(path: &Path) -> ! {
    let mut ledger = Ledger::open(path, OpenOptions::new("boot-a", 0)).expect("the writer opens");
    let mut out = std::io::stdout();
    loop {
        let first = ledger.next_input();
        let count = 1 + random() % 60;
        let lines: Vec<_> = (first..first + count).map(line).collect();
        let inputs: Vec<_> = (first..)
            .zip(&lines)
            .map(|(no, bytes)| InputRow { no, at: at(no), kind: InputKind::Line, instrument: Some("pan-1"), bytes, reason: None })
            .collect();
        let (seq, through) = (ledger.next_seq(), first + random() % count);
        let body = fact(seq, through);
        let facts = [FactRow { seq, at: at(through), kind: "mass_taken", who: None, through, body: &body }];
        let done = match ledger.commit(&Group { inputs: &inputs, facts: &facts, ..Group::default() }) {
            Ok(done) => done,
            Err(error) => {
                // As the service does it: begin again from what is stored.
                eprintln!("{error}");
                while let Err(error) = ledger.reopen() {
                    eprintln!("{error}");
                    std::thread::sleep(Duration::from_millis(20));
                }
                continue;
            }
        };
        writeln!(out, "stored {} {} {}", done.last_input, done.last_seq, done.last_hash).expect("the test listens");
        out.flush().expect("the test listens");
        if random().is_multiple_of(8) {
            ledger.tidy().expect("tidies");
        }
    }
}

#[derive(Clone, Copy, Debug)]
struct Acknowledged {
    input: u64,
    seq: u64,
    hash: Digest,
}

fn parse(text: &str) -> Option<Acknowledged> {
    let mut words = text.split("stored ").nth(1)?.split(' ');
    let (input, seq) = (words.next()?.parse().ok()?, words.next()?.parse().ok()?);
    Some(Acknowledged { input, seq, hash: Digest::from_hex(words.next()?)? })
}

/// The model: the ledger holds what was acknowledged, each input and fact
/// exactly once and as it was written.
fn agrees(path: &Path, acknowledged: Option<Acknowledged>) -> Result<(), String> {
    let head = acknowledged.map(|a| KnownHead { id: None, seq: a.seq, hash: a.hash });
    let report = verify(path, head.as_ref(), &mut |_| {}).map_err(|e| e.to_string())?;
    if let Some(fault) = report.first_bad {
        return Err(format!("fact {}: {}", fault.seq, fault.why));
    }
    if report.inputs < acknowledged.map_or(0, |a| a.input) {
        return Err(format!("{} inputs of {acknowledged:?}", report.inputs));
    }
    let reader = Reader::open(path).map_err(|e| e.to_string())?;
    let mut next = 1;
    loop {
        let page = reader.inputs_from(next, 5_000, None).map_err(|e| e.to_string())?;
        for stored in &page {
            if stored.no != next || stored.bytes != line(next) || stored.at != at(next) {
                return Err(format!("input {next} is {stored:?}"));
            }
            next += 1;
        }
        if page.is_empty() {
            break;
        }
    }
    for (stored, seq) in reader.facts_after(0, 10_000).map_err(|e| e.to_string())?.iter().zip(1..) {
        if stored.seq != seq || stored.body != fact(seq, stored.through) {
            return Err(format!("fact {seq} is {stored:?}"));
        }
    }
    Ok(())
}

/// Ends the writer even when the test fails.
struct Writer(Child);

impl Drop for Writer {
    fn drop(&mut self) {
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}

fn start_writer(path: &Path, test: &str) -> (Writer, mpsc::Receiver<Acknowledged>) {
    let program = std::env::current_exe().expect("this test's program");
    let mut child = Command::new(program)
        .args(["--exact", test, "--nocapture"])
        .env(ROLE, path)
        .stdout(Stdio::piped())
        .spawn()
        .expect("a writer");
    let out = BufReader::new(child.stdout.take().expect("its output"));
    let (send, receive) = mpsc::channel();
    std::thread::spawn(move || {
        out.lines().map_while(Result::ok).filter_map(|l| parse(&l)).for_each(|a| {
            let _ = send.send(a);
        });
    });
    (Writer(child), receive)
}

/// What the file would be if the last commits had not been kept: the file
/// without its write-ahead log.
fn without_log(folder: &Path, acknowledged: Option<Acknowledged>) -> Result<(), String> {
    let copy = TempDir::new().expect("a folder");
    std::fs::copy(folder.join(FILE_NAME), copy.path().join(FILE_NAME)).map_err(|e| e.to_string())?;
    agrees(copy.path(), acknowledged)
}

#[test]
fn nothing_acknowledged_is_lost_when_killed() {
    if let Some(path) = std::env::var_os(ROLE) {
        write_for_ever(Path::new(&path));
    }
    let folder = TempDir::new().expect("a folder");
    let (mut last, mut found_by_control) = (None::<Acknowledged>, 0);
    for round in 0..ROUNDS {
        let (mut writer, heard) = start_writer(folder.path(), "nothing_acknowledged_is_lost_when_killed");
        // Every fourth is killed at a random moment of its start, the others in the midst of storing.
        if round % 4 != 3 {
            last = Some(heard.recv_timeout(Duration::from_secs(20)).expect("the writer stores something"));
        }
        std::thread::sleep(Duration::from_micros(random() % 40_000));
        writer.0.kill().expect("killed");
        writer.0.wait().expect("gone");
        // The channel ends when all the writer said has been read.
        last = heard.iter().last().or(last);
        if last.is_some() && without_log(folder.path(), last).is_err() {
            found_by_control += 1;
        }
        if folder.path().join(FILE_NAME).exists() && last.is_some() {
            agrees(folder.path(), last).unwrap_or_else(|why| panic!("round {round}, acknowledged {last:?}: {why}"));
        }
        let ledger = Ledger::open(folder.path(), OpenOptions::new("boot-a", 0)).expect("opens after the kill");
        assert!(ledger.tail().last_seq >= last.map_or(0, |a| a.seq));
    }
    assert!(last.is_some_and(|a| a.seq >= u64::from(ROUNDS) / 2), "{last:?}");
    assert!(found_by_control > 0, "the model would not notice a lost commit");
}

#[test]
fn a_second_process_is_refused_by_the_holders_number() {
    if let Some(path) = std::env::var_os(ROLE) {
        write_for_ever(Path::new(&path));
    }
    let folder = TempDir::new().expect("a folder");
    let (writer, heard) = start_writer(folder.path(), "a_second_process_is_refused_by_the_holders_number");
    heard.recv_timeout(Duration::from_secs(20)).expect("the writer stores something");
    let began = Instant::now();
    let error = Ledger::open(folder.path(), OpenOptions::new("boot-a", 0)).expect_err("held");
    assert!(began.elapsed() < Duration::from_secs(1));
    assert!(matches!(error, LedgerError::Held { pid: Some(pid), .. } if pid == writer.0.id()), "{error:?}");
    while heard.try_recv().is_ok() {}
    heard.recv_timeout(Duration::from_secs(20)).expect("the holder is undisturbed");
}

/// A ledger whose making was cut short is begun again, not refused.
#[test]
fn killed_while_it_is_made_it_can_still_be_opened() {
    if let Some(path) = std::env::var_os(ROLE) {
        write_for_ever(Path::new(&path));
    }
    let (mut cut_short, mut made, mut delay_us) = (0, 0, 0_u64);
    // The moment that matters is found by halving and doubling, so that a
    // slow machine finds it too.
    for round in 0..100 {
        let folder = TempDir::new().expect("a folder");
        let (mut writer, heard) = start_writer(folder.path(), "killed_while_it_is_made_it_can_still_be_opened");
        let lock = folder.path().join(format!("{FILE_NAME}.lock"));
        let began = Instant::now();
        while !lock.exists() && began.elapsed() < Duration::from_secs(20) {
            std::thread::yield_now();
        }
        std::thread::sleep(Duration::from_micros(delay_us));
        writer.0.kill().expect("killed");
        writer.0.wait().expect("gone");
        let last = heard.iter().last();
        let begun = folder.path().join(FILE_NAME).exists();
        delay_us = if begun { delay_us / 2 } else { delay_us * 2 + 50 };
        cut_short += u32::from(last.is_none());
        made += u32::from(begun);
        Ledger::open(folder.path(), OpenOptions::new("boot-a", 0)).unwrap_or_else(|e| panic!("round {round}: {e}"));
        agrees(folder.path(), last).unwrap_or_else(|why| panic!("round {round}: {why}"));
        if round >= 11 && cut_short >= 3 && made >= 3 {
            return;
        }
    }
    panic!("{cut_short} were cut short before the first commit, {made} had begun a file: this tests nothing");
}
