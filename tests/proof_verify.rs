//! What a ledger proves, and to whom: the program's own verifier and the
//! auditor's script find the same, tampered with or not; backups are proven
//! and lead back.

mod e2e_support;

use e2e_support::operator::{Dice, PORTS, Station};
use e2e_support::{Running, facts_after, free_port, tarecup, tests_dir, until, wait_up};
use rusqlite::types::Value as Cell;
use rusqlite::{Connection, params};
use serde_json::Value;
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::sync::OnceLock;
use std::time::Duration;
use tarecup::proof::{Proof, prove};

/// A ledger with a whole day in it, made once.
fn day() -> &'static Path {
    static DAY: OnceLock<tempfile::TempDir> = OnceLock::new();
    let folder = DAY.get_or_init(|| {
        let folder = tempfile::tempdir().expect("a folder");
        let state = folder.path().display().to_string();
        let ended = tarecup(&["demo", "--once", "--state", &state]);
        assert_eq!(ended.code, 0, "{}", ended.err);
        folder
    });
    folder.path()
}

struct Copy(tempfile::TempDir);

impl Copy {
    fn of_the_day() -> Self {
        let folder = tempfile::tempdir().expect("a folder");
        let ended = Connection::open(day().join("ledger.sqlite")).expect("it opens");
        ended.execute("VACUUM INTO ?1", [folder.path().join("ledger.sqlite").display().to_string()]).expect("copied");
        Self(folder)
    }
    fn file(&self) -> PathBuf {
        self.0.path().join("ledger.sqlite")
    }
    fn open(&self) -> Connection {
        let conn = Connection::open(self.file()).expect("it opens");
        let triggers: Vec<String> = {
            let mut names = conn.prepare("SELECT name FROM sqlite_schema WHERE type = 'trigger'").expect("sql");
            names.query_map([], |r| r.get(0)).expect("names").collect::<Result<_, _>>().expect("names")
        };
        for trigger in triggers {
            conn.execute(&format!("DROP TRIGGER {trigger}"), []).expect("dropped");
        }
        conn
    }
    fn forged(how: &str) -> Self {
        let copy = Self::of_the_day();
        let script = tests_dir().join("forge.py");
        let ended = Command::new("python3").arg(script).arg(copy.file()).arg(how).output().expect("python3 runs");
        assert!(ended.status.success(), "{}", String::from_utf8_lossy(&ended.stderr));
        copy
    }
    fn proof(&self) -> Proof {
        prove(&self.file(), &[], true, &mut |_| ()).expect("it can be read")
    }
}

/// What the auditor's script says: nothing, or the first bad fact and why.
fn audited(file: &Path, heads: &[String]) -> Result<(), (u64, String)> {
    let ended = Command::new("python3").arg(tests_dir().join("audit.py")).arg(file).args(heads).output().expect("python3 runs");
    let said = String::from_utf8_lossy(&ended.stdout).into_owned();
    if ended.status.success() {
        return Ok(());
    }
    let seq = said.split("fact ").nth(1).and_then(|t| t.split(':').next()).and_then(|n| n.parse().ok());
    Err((seq.unwrap_or(0), format!("{said}{}", String::from_utf8_lossy(&ended.stderr))))
}

#[test]
fn a_day_is_proven_by_both_verifiers() {
    let copy = Copy::of_the_day();
    let proof = copy.proof();
    assert_eq!(proof.first_bad(), None);
    assert_eq!(proof.redecided, Some(vec![]), "decided again, the same facts come out");
    let heads = proof.heads.expect("heads");
    assert!(heads.signed >= 6 && heads.keys.len() == 1, "{heads:?}");
    assert_eq!(audited(&copy.file(), &[]), Ok(()));
    let ended = tarecup(&["verify", &copy.file().display().to_string(), "--redecide", "--json"]);
    let said: Value = serde_json::from_str(&ended.out).expect("one JSON object");
    assert_eq!((ended.code, &said["ok"]), (0, &Value::Bool(true)), "{said}");
}

/// One byte of any cell that is hashed, in both tables, drawn by chance.
#[test]
fn a_flipped_byte_is_found_at_the_same_fact_by_both() {
    let copy = Copy::of_the_day();
    let conn = copy.open();
    assert_eq!((copy.proof().first_bad(), audited(&copy.file(), &[])), (None, Ok(())), "control: unflipped it passes");
    let mut dice = Dice::thrown("flipped bytes");
    let input = ["at_utc_us", "mono_us", "boot", "kind", "bytes", "reason"];
    let fact = ["at_utc_us", "mono_us", "boot", "kind", "who", "through", "body", "inputs_digest", "hash"];
    let mut flips = 0;
    while flips < 40 {
        let of_input = dice.below(2) == 0;
        let (table, key, column) = match of_input {
            true => ("input", "no", input[dice.below(input.len() as u64) as usize]),
            false => ("fact", "seq", fact[dice.below(fact.len() as u64) as usize]),
        };
        let last: i64 = conn.query_row(&format!("SELECT max({key}) FROM {table}"), [], |r| r.get(0)).expect("a number");
        let row = 1 + dice.below(last.unsigned_abs()).cast_signed();
        let read = |r: &rusqlite::Row<'_>| r.get::<_, Cell>(0);
        let whole: Cell = conn.query_row(&format!("SELECT {column} FROM {table} WHERE {key} = ?1"), [row], read).expect("a cell");
        let Some(flipped) = flip(&whole, &mut dice) else { continue };
        let put = |cell: &Cell| {
            let cast = if matches!(whole, Cell::Text(_)) { "CAST(?1 AS TEXT)" } else { "?1" };
            conn.execute(&format!("UPDATE {table} SET {column} = {cast} WHERE {key} = ?2"), params![cell, row]).expect("put");
        };
        put(&flipped);
        let ours = copy.proof().first_bad();
        let theirs = audited(&copy.file(), &[]);
        let what = format!("{table} {row} {column}");
        let (seq, why) = ours.unwrap_or_else(|| panic!("{what}: our verifier found nothing"));
        assert_eq!(theirs.as_ref().map_err(|(s, _)| *s), Err(seq), "{what}: {why}; the script: {theirs:?}");
        put(&whole);
        flips += 1;
    }
    assert_eq!((copy.proof().first_bad(), audited(&copy.file(), &[])), (None, Ok(())), "put back it passes");
}

/// A cell with one bit changed; `None` where there is nothing to change.
fn flip(cell: &Cell, dice: &mut Dice) -> Option<Cell> {
    let mut bytes = match cell {
        Cell::Integer(n) => return Some(Cell::Integer(n ^ (1 << dice.below(63)))),
        Cell::Text(text) => text.clone().into_bytes(),
        Cell::Blob(bytes) => bytes.clone(),
        _ => return None,
    };
    let at = dice.below(bytes.len().max(1) as u64) as usize;
    *bytes.get_mut(at)? ^= 1 << dice.below(7);
    Some(Cell::Blob(bytes))
}

#[test]
fn a_chain_made_anew_by_who_owns_the_machine_shows_at_its_signatures() {
    let honest = Copy::of_the_day();
    let head = honest.proof().chain.last_hash.expect("a hash");
    let last = honest.proof().chain.facts;
    let forged = Copy::forged("mass");
    let proof = forged.proof();
    assert!(proof.chain.ok(), "control: the chain alone does not show it: {:?}", proof.chain.first_bad);
    let (_, why) = audited(&forged.file(), &[]).expect_err("a result no longer follows from its masses");
    assert!(!why.contains("hash"), "and the chain alone does not show it to the script either: {why}");
    let (_, why) = proof.first_bad().expect("the signatures show it");
    assert!(why.contains("another hash"), "{why}");
    let published = vec![format!("{last}:{head}")];
    assert!(audited(&forged.file(), &published).is_err(), "a head that left the machine shows it to the script");
    assert_eq!(audited(&honest.file(), &published), Ok(()), "control: the honest one leads through it");
}

#[test]
fn documents_and_facts_that_follow_from_nothing_are_found() {
    let copy = Copy::of_the_day();
    let conn = copy.open();
    let sql =
        "UPDATE document SET body = CAST(replace(CAST(body AS TEXT), '\"state\":\"complete\"', '\"state\":\"reviewed\"') AS BLOB)
               WHERE kind = 'specimen' AND id = (SELECT min(id) FROM document WHERE kind = 'specimen')";
    assert_eq!(conn.execute(sql, []).expect("put"), 1);
    let (seq, why) = copy.proof().first_bad().expect("found");
    assert!(seq > 0 && why.contains("does not follow from the facts") && why.contains("state"), "{why}");

    let forged = Copy::forged("fact");
    let proof = forged.proof();
    assert!(proof.chain.ok(), "control: the chain holds");
    let differences = proof.redecided.expect("asked for");
    assert!(differences.iter().any(|d| d.why.contains("nothing that was heard or asked leads to")), "{differences:?}");
}

#[test]
fn heads_cut_off_are_found_against_a_published_one() {
    let copy = Copy::of_the_day();
    let report = copy.proof().chain;
    let head = format!("{}:{}", report.facts, report.last_hash.expect("a hash"));
    let conn = copy.open();
    conn.execute("DELETE FROM signed_head WHERE seq > ?1", [report.facts.cast_signed() - 3]).expect("cut");
    conn.execute("DELETE FROM fact WHERE seq > ?1", [report.facts.cast_signed() - 3]).expect("cut");
    let file = copy.file().display().to_string();
    assert_eq!(audited(&copy.file(), &[]), Ok(()), "control: alone it does not show");
    assert!(audited(&copy.file(), std::slice::from_ref(&head)).is_err());
    let ended = tarecup(&["verify", &file, "--head", &head]);
    assert!(ended.code == 1 && ended.out.contains("cut off"), "{}", ended.out);
    let ended = tarecup(&["verify", &file, "--head", "12"]);
    assert!(ended.code == 2 && ended.err.contains("SEQ:HASH"), "{}", ended.err);
}

fn files_in(folder: &Path) -> Vec<PathBuf> {
    std::fs::read_dir(folder).expect("a folder").map(|e| e.expect("an entry").path()).collect()
}

fn numbers_of(facts: &[Value]) -> Vec<u64> {
    facts.iter().filter_map(|f| f["seq"].as_u64()).collect()
}

/// A backup of a running station is proven, restored elsewhere, and work goes
/// on there under a new epoch without a number used twice.
#[test]
fn a_backup_made_at_work_leads_back() {
    let station = Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{}\"", free_port()));
    station.start();
    wait_up(&station.state, PORTS);
    station.load("pan-1", "20.00");
    until("a weighing", Duration::from_secs(10), || {
        facts_after(&station.state, 0).is_ok_and(|f| f.iter().any(|f| f["kind"] == "weighed"))
    });
    let folder = tempfile::tempdir().expect("a folder");
    let (state, to) = (station.state.display().to_string(), folder.path().display().to_string());
    let made = tarecup(&["backup", &to, "--state", &state, "--keep", "2"]);
    assert_eq!(made.code, 0, "{}", made.err);
    assert!(made.out.contains("proven copy"), "{}", made.out);
    let first = files_in(folder.path()).remove(0);
    let aside = station.dir.path().join("first.sqlite");
    std::fs::copy(&first, &aside).expect("copied");
    let status = e2e_support::status(&station.state).expect("a status");
    assert!(status["backup"]["proven_at"].is_string() && status["backup"]["trouble"].is_null(), "{status}");
    station.unload("pan-1");
    station.load("pan-1", "31.00");
    until("another weighing", Duration::from_secs(10), || {
        facts_after(&station.state, 0).is_ok_and(|f| f.iter().filter(|f| f["kind"] == "weighed").count() == 2)
    });
    let before = numbers_of(&facts_after(&station.state, 0).expect("facts"));
    for _ in 0..2 {
        assert_eq!(tarecup(&["backup", &to, "--state", &state, "--keep", "2"]).code, 0);
    }
    assert_eq!(files_in(folder.path()).len(), 2, "the oldest was taken away");
    assert!(!first.exists(), "the oldest was taken away");
    let backup = aside.display().to_string();

    let refused = tarecup(&["restore", &backup, "--state", &state]);
    assert!(refused.code == 1 && refused.err.contains("in use"), "not while the service runs: {}", refused.err);
    assert_eq!(station.term(), Some(0));
    let restored = tarecup(&["restore", &backup, "--state", &state]);
    assert!(restored.code == 0 && restored.out.contains("epoch 2"), "{}{}", restored.out, restored.err);
    let proof = prove(&station.state, &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!(proof.first_bad(), None);
    let kept = proof.chain.facts;
    station.start();
    until("up again", Duration::from_secs(10), || e2e_support::status(&station.state).is_some_and(|s| s["epoch"] == 2));
    let after = numbers_of(&facts_after(&station.state, 0).expect("facts"));
    assert!(after.len() as u64 > kept && before.len() as u64 > kept);
    let numbers: BTreeSet<u64> = after.iter().copied().collect();
    assert_eq!(numbers.len(), after.len());
    assert_eq!(station.term(), Some(0));
    let proof = prove(&station.state, &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!((proof.first_bad(), proof.redecided), (None, Some(vec![])), "across the restore");
    let aside = station.state.join("ledger.sqlite.before-epoch-2");
    assert_eq!(prove(&aside, &[], false, &mut |_| ()).expect("what was there is kept").first_bad(), None);
}

/// A copy that is not good gets no name, and a backup of something else is not put in a ledger's place.
#[test]
fn what_is_no_good_is_no_backup() {
    let folder = tempfile::tempdir().expect("a folder");
    let to = folder.path().display().to_string();
    let damaged = Copy::of_the_day();
    damaged.open().execute("UPDATE fact SET who = 'XY' WHERE seq = 5", []).expect("put");
    let ended = tarecup(&["backup", &to, "--state", &damaged.0.path().display().to_string()]);
    assert!(ended.code == 1 && ended.err.contains("no backup was made"), "{}", ended.err);
    assert_eq!(std::fs::read_dir(folder.path()).expect("a folder").count(), 0, "nothing is left behind");

    let good = tarecup(&["backup", &to, "--state", &Copy::of_the_day().0.path().display().to_string()]);
    assert_eq!(good.code, 0, "{}", good.err);
    let backup = std::fs::read_dir(folder.path()).expect("a folder").next().expect("one").expect("one").path();
    let other = tempfile::tempdir().expect("a folder");
    let elsewhere = other.path().display().to_string();
    let mut demo = Command::new(env!("CARGO_BIN_EXE_tarecup"));
    let mut running = Running::start(demo.args(["demo", "--once", "--state", &elsewhere]));
    running.wait(Duration::from_secs(60));
    let ended = tarecup(&["restore", &backup.display().to_string(), "--state", &elsewhere]);
    assert!(ended.code == 1 && ended.err.contains("name another place"), "{}", ended.err);
    let nothing = tarecup(&["restore", &to, "--state", &elsewhere]);
    assert_eq!(nothing.code, 1, "{}", nothing.err);
}
