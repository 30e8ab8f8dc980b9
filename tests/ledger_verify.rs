//! The chain as the file keeps it: pinned hashes, and every way of tampering
//! that `verify` has to notice.

#[path = "ledger_help.rs"]
mod help;

use help::{ID, input, options, sample};
use rusqlite::Connection;
use std::path::{Path, PathBuf};
use tarecup::ledger::{Digest, FILE_NAME, Fault, Group, InputKind, KnownHead, Ledger, LedgerId, Reader, verify};
use tempfile::TempDir;

/// Inputs digest and hash of each fact of the small ledger, computed from the
/// encoding described in `chain.rs` by another program (Python's hashlib and
/// struct). SHA-256: FIPS 180-4.
///
/// **If this test fails, do not change the constants**: ledgers written by
/// released versions would no longer verify. Add the next version of the
/// encoding beside this one, with its own tag and its own constants.
const PINNED: [(&str, &str); 3] = [
    (
        "8f0179c20e94b93a0c554ad07657cc96c07f0b1181b3311c8719b7bc7b362270",
        "d6cbe3d1b04138f12cd9cf508fec1050d7d53ea814d1108c157a6fe55a96354d",
    ),
    (
        "90854b8a870da149cbe76a245d5c707e24672861a3f21ba9e91b647d50144a1f",
        "e02207be0fb27488f26e75a62efefa7eea6e8a525aa9a44e046ac4a0ddb058be",
    ),
    (
        "e524244916d742f5ca2826dcdf081a4f5ee4d9d0943253e6dbdc6618c8bf951d",
        "873bdd3deda11301a98e2d35e33cbd11dbe63f7df0a624dd31e90ea215178f0a",
    ),
];

fn known_head() -> KnownHead {
    KnownHead { id: Some(ID), seq: 3, hash: Digest::from_hex(PINNED[2].1).expect("a digest") }
}

/// The small ledger, open for tampering: its triggers are gone.
struct Forgery {
    folder: TempDir,
    conn: Connection,
}

impl Forgery {
    fn new() -> Self {
        let folder = TempDir::new().expect("a folder");
        sample(folder.path());
        let conn = Connection::open(folder.path().join(FILE_NAME)).expect("the ledger");
        conn.execute_batch("PRAGMA synchronous = OFF; PRAGMA foreign_keys = OFF;").expect("pragmas");
        let names: Vec<String> = conn
            .prepare("SELECT name FROM sqlite_schema WHERE type = 'trigger'")
            .and_then(|mut s| s.query_map([], |r| r.get(0))?.collect())
            .expect("triggers");
        assert!(names.len() >= 6, "the triggers are there to begin with");
        for name in names {
            conn.execute_batch(&format!("DROP TRIGGER {name}")).expect("drop");
        }
        Self { folder, conn }
    }

    fn path(&self) -> &Path {
        self.folder.path()
    }

    fn sql(&self, sql: &str) {
        self.conn.execute_batch(sql).unwrap_or_else(|e| panic!("{sql}: {e}"));
    }

    fn first_bad(&self, head: Option<&KnownHead>) -> Option<Fault> {
        verify(self.path(), head, &mut |_| {}).expect("verify runs").first_bad
    }

    fn bytes(&self, cell: &Cell) -> Vec<u8> {
        let sql = format!("SELECT CAST({} AS BLOB) FROM {} WHERE {} = ?1", cell.column, cell.table, cell.key);
        self.conn.query_row(&sql, [cell.row], |r| r.get::<_, Option<Vec<u8>>>(0)).expect("cell").unwrap_or_default()
    }

    fn put_bytes(&self, cell: &Cell, bytes: &[u8]) {
        let value = if cell.text { "CAST(?1 AS TEXT)" } else { "?1" };
        let sql = format!("UPDATE {} SET {} = {value} WHERE {} = ?2", cell.table, cell.column, cell.key);
        assert_eq!(self.conn.execute(&sql, (bytes, cell.row)).expect("forged"), 1);
    }

    fn number(&self, cell: &Cell) -> Option<i64> {
        let sql = format!("SELECT {} FROM {} WHERE {} = ?1", cell.column, cell.table, cell.key);
        self.conn.query_row(&sql, [cell.row], |r| r.get(0)).expect("cell")
    }

    fn put_number(&self, cell: &Cell, row: i64, number: i64) {
        let sql = format!("UPDATE {} SET {} = ?1 WHERE {} = ?2", cell.table, cell.column, cell.key);
        assert_eq!(self.conn.execute(&sql, (number, row)).expect("forged"), 1);
    }
}

#[derive(Debug)]
struct Cell {
    table: &'static str,
    key: &'static str,
    row: i64,
    column: &'static str,
    text: bool,
    /// The fact that must be named.
    bad: u64,
}

/// The fact that covers an input of the small ledger.
fn covered_by(no: i64) -> u64 {
    match no {
        1 => 1,
        2 => 2,
        _ => 3,
    }
}

fn cells_of_bytes() -> Vec<Cell> {
    let mut cells = vec![
        Cell { table: "ledger", key: "one", row: 1, column: "id", text: true, bad: 1 },
        Cell { table: "instrument", key: "id", row: 1, column: "name", text: true, bad: 2 },
        Cell { table: "instrument", key: "id", row: 2, column: "name", text: true, bad: 3 },
    ];
    for no in 1..=5 {
        for (column, text) in [("kind", true), ("reason", true), ("bytes", false)] {
            cells.push(Cell { table: "input", key: "no", row: no, column, text, bad: covered_by(no) });
        }
    }
    for seq in 1..=3 {
        for (column, text) in [("kind", true), ("who", true), ("body", false), ("inputs_digest", false), ("hash", false)] {
            cells.push(Cell { table: "fact", key: "seq", row: seq, column, text, bad: seq as u64 });
        }
    }
    cells
}

fn cells_of_numbers() -> Vec<Cell> {
    let mut cells = Vec::new();
    for no in 1..=5 {
        for column in ["no", "at_utc_us", "mono_us", "boot", "instrument"] {
            cells.push(Cell { table: "input", key: "no", row: no, column, text: false, bad: covered_by(no) });
        }
    }
    for seq in 1..=3 {
        for column in ["seq", "at_utc_us", "mono_us", "boot", "through", "inputs_to"] {
            cells.push(Cell { table: "fact", key: "seq", row: seq, column, text: false, bad: seq as u64 });
        }
    }
    cells
}

fn path_of(folder: &TempDir) -> PathBuf {
    folder.path().join(FILE_NAME)
}

#[test]
fn hashes_are_the_pinned_ones() {
    let folder = TempDir::new().expect("a folder");
    sample(folder.path());
    let facts = Reader::open(folder.path()).and_then(|r| r.facts_after(0, 10)).expect("facts");
    let found: Vec<_> = facts.iter().map(|f| (f.inputs_digest.to_string(), f.hash.to_string())).collect();
    let pinned: Vec<_> = PINNED.iter().map(|(d, h)| (d.to_string(), h.to_string())).collect();
    assert_eq!(found, pinned);
    assert_eq!(facts.iter().map(|f| f.body.as_slice()).collect::<Vec<_>>(), help::BODIES);
}

#[test]
fn an_untouched_ledger_passes() {
    let folder = TempDir::new().expect("a folder");
    sample(folder.path());
    let mut seen = None;
    let report = verify(&path_of(&folder), Some(&known_head()), &mut |p| seen = Some(p)).expect("verify runs");
    assert_eq!((report.first_bad.clone(), report.ok()), (None, true));
    assert_eq!((report.facts, report.inputs, report.inputs_unchained), (3, 5, 0));
    assert_eq!((report.id, report.last_hash), (Some(ID), Some(known_head().hash)));
    let end = seen.expect("progress is told");
    assert_eq!((end.facts, end.of_facts, end.inputs, end.of_inputs), (3, 3, 5, 5));
}

/// Every byte of every text and blob that is hashed, flipped one at a time.
#[test]
fn any_byte_flipped_is_found_at_its_fact() {
    let forgery = Forgery::new();
    assert_eq!(forgery.first_bad(None), None, "without its triggers alone it still passes");
    let mut flips = 0;
    for cell in cells_of_bytes() {
        let original = forgery.bytes(&cell);
        for at in 0..original.len() {
            let mut forged = original.clone();
            forged[at] ^= if at % 2 == 0 { 0x01 } else { 0x80 };
            forgery.put_bytes(&cell, &forged);
            let bad = forgery.first_bad(None).map(|f| f.seq);
            assert_eq!(bad, Some(cell.bad), "byte {at} of {cell:?}");
            flips += 1;
        }
        if !original.is_empty() {
            forgery.put_bytes(&cell, &original);
        }
    }
    assert!(flips > 500, "only {flips} flips were tried");
    assert_eq!(forgery.first_bad(None), None, "put back as it was it passes");
}

/// Every byte of every number that is hashed.
#[test]
fn any_number_changed_is_found_at_its_fact() {
    let forgery = Forgery::new();
    let mut flips = 0;
    for cell in cells_of_numbers() {
        let Some(original) = forgery.number(&cell) else { continue };
        let is_key = cell.column == cell.key;
        // The lowest byte of a key would collide with its neighbours.
        for byte in u32::from(is_key)..8 {
            let forged = original ^ (1_i64 << (8 * byte));
            forgery.put_number(&cell, cell.row, forged);
            let bad = forgery.first_bad(None).map(|f| f.seq);
            assert_eq!(bad, Some(cell.bad), "byte {byte} of {cell:?}");
            forgery.put_number(&cell, if is_key { forged } else { cell.row }, original);
            flips += 1;
        }
    }
    assert!(flips > 200, "only {flips} flips were tried");
    assert_eq!(forgery.first_bad(None), None, "put back as it was it passes");
}

#[test]
fn rows_added_removed_or_exchanged_are_found() {
    for (sql, bad) in [
        ("UPDATE input SET reason = '' WHERE no = 2", 2),
        ("UPDATE input SET instrument = 2 WHERE no = 3", 3),
        ("UPDATE input SET instrument = NULL WHERE no = 4", 3),
        ("UPDATE fact SET who = '' WHERE seq = 1", 1),
        ("UPDATE fact SET who = NULL WHERE seq = 2", 2),
        ("DELETE FROM input WHERE no = 4", 3),
        ("DELETE FROM input WHERE no = 1", 1),
        ("DELETE FROM fact WHERE seq = 1", 1),
        ("DELETE FROM fact WHERE seq = 2", 2),
        ("INSERT INTO input VALUES (0, 1, 1, 1, 'line', NULL, x'41', NULL)", 1),
        (
            "INSERT INTO fact SELECT 0, at_utc_us, mono_us, boot, kind, who, 0, 0, body, inputs_digest, hash FROM fact WHERE seq = 1",
            1,
        ),
        (
            "INSERT INTO fact SELECT 4, at_utc_us, mono_us, boot, kind, who, 5, 5, body, inputs_digest, hash FROM fact WHERE seq = 3",
            4,
        ),
        ("UPDATE input SET no = 99 WHERE no = 3; UPDATE input SET no = 3 WHERE no = 4; UPDATE input SET no = 4 WHERE no = 99", 3),
        (
            "UPDATE fact SET seq = 99 WHERE seq = 2; UPDATE fact SET seq = 2 WHERE seq = 3; UPDATE fact SET seq = 3 WHERE seq = 99",
            2,
        ),
        ("INSERT INTO input VALUES (7, 1, 1, 1, 'line', NULL, x'41', NULL)", 4),
    ] {
        let forgery = Forgery::new();
        forgery.sql(sql);
        assert_eq!(forgery.first_bad(None).map(|f| f.seq), Some(bad), "{sql}");
    }
}

/// What `verify` would call bad is never stored in the first place.
#[test]
fn json_that_differs_from_its_columns_is_refused_before_it_is_stored() {
    let folder = TempDir::new().expect("a folder");
    sample(folder.path());
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let body = br#"{"seq":4,"at":"2026-03-02T08:14:05.005000Z","kind":"note_added","who":"XY"}"#;
    let fact = tarecup::ledger::FactRow { seq: 4, at: help::at(5), kind: "note_added", who: Some("AB"), through: 5, body };
    let error = ledger.commit(&Group { facts: &[fact], ..Group::default() }).expect_err("refused").to_string();
    assert!(error.contains("fact 4") && error.contains("`who`"), "{error}");
}

#[test]
fn facts_cut_off_are_found_against_a_head() {
    let forgery = Forgery::new();
    forgery.sql("DELETE FROM fact WHERE seq = 3; DELETE FROM input WHERE no > 2;");
    assert_eq!(forgery.first_bad(None), None, "what was cut off leaves no trace in the file itself");
    let fault = forgery.first_bad(Some(&known_head())).expect("found against the head");
    assert_eq!(fault.seq, 3);
    assert!(fault.why.contains("cut off"), "{}", fault.why);
}

#[test]
fn a_chain_rewritten_whole_is_found_against_a_head() {
    let folder = TempDir::new().expect("a folder");
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    help::fill(&mut ledger);
    drop(ledger);
    let other = KnownHead { hash: Digest([7; 32]), ..known_head() };
    let report = verify(folder.path(), Some(&other), &mut |_| {}).expect("verify runs");
    assert_eq!(report.first_bad.map(|f| f.seq), Some(3));
    let foreign = KnownHead { id: Some(LedgerId([9; 16])), ..known_head() };
    let fault = verify(folder.path(), Some(&foreign), &mut |_| {}).expect("verify runs").first_bad.expect("found");
    assert!(fault.why.contains("belongs to ledger"), "{}", fault.why);
    let good = verify(folder.path(), Some(&known_head()), &mut |_| {}).expect("verify runs");
    assert!(good.ok(), "{:?}", good.first_bad);
}

/// Inputs that no fact covers yet are counted, so that nobody takes them for proven.
#[test]
fn inputs_after_the_last_fact_are_told_apart() {
    let folder = TempDir::new().expect("a folder");
    sample(folder.path());
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let lines = [input(6, InputKind::Line, Some("pan-1"), b"1"), input(7, InputKind::Line, Some("pan-1"), b"2")];
    ledger.commit(&Group { inputs: &lines, ..Group::default() }).expect("commits");
    let report = verify(folder.path(), Some(&known_head()), &mut |_| {}).expect("verify runs");
    assert_eq!((report.ok(), report.inputs, report.inputs_unchained), (true, 7, 2));
}

/// The end of the chain is looked at when the service starts.
#[test]
fn a_forged_end_is_refused_at_opening() {
    let forgery = Forgery::new();
    let cell = Cell { table: "fact", key: "seq", row: 3, column: "body", text: false, bad: 3 };
    let original = forgery.bytes(&cell);
    forgery.put_bytes(&cell, br#"{"seq":3,"at":"2026-03-02T08:14:05.005000Z","kind":"note_added","who":"XY"}"#);
    let error = Ledger::open(forgery.path(), options()).expect_err("refused").to_string();
    assert!(error.contains("fact 3") && error.contains("tarecup verify"), "{error}");
    forgery.put_bytes(&cell, &original);
    assert_eq!(Ledger::open(forgery.path(), options()).expect("opens").tail().last_seq, 3);
}

#[test]
fn damaged_pages_are_a_fault_and_not_a_panic() {
    let folder = TempDir::new().expect("a folder");
    sample(folder.path());
    let file = path_of(&folder);
    let whole = std::fs::read(&file).expect("bytes");
    let mut found = 0;
    for page in 1..whole.len() / 4096 {
        let mut torn = whole.clone();
        torn[page * 4096..page * 4096 + 512].fill(0xA5);
        std::fs::write(&file, &torn).expect("written");
        match verify(&file, Some(&known_head()), &mut |_| {}) {
            Ok(report) => found += u32::from(!report.ok()),
            Err(_) => found += 1,
        }
    }
    // Pages of indices, documents and answers are not the chain's.
    assert!(found >= 4, "ledger, instrument, input and fact each have a page; {found} were noticed");
}
