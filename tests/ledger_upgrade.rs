//! A ledger of each released layout, opened by this program: what it proves is
//! the same before and after, the work in it goes on, and a kill in the middle of
//! the upgrade leaves the old layout or the new one, never a part of either.

mod e2e_support;

use e2e_support::*;
use rusqlite::Connection;
use serde_json::{Value, json};
use std::path::Path;
use std::process::{Command, Stdio};
use std::time::Duration;
use tarecup::ledger::{Ledger, LedgerError, OpenOptions, SCHEMA_VERSION, verify};
use tarecup::proof::prove;

/// Killed while the first of five containers was weighed dry; written by the program of that time.
const LAYOUT_1: &str = include_str!("stored/layout-1.sql");

fn released(folder: &Path) {
    let db = Connection::open(folder.join("ledger.sqlite")).expect("a file");
    db.execute_batch(LAYOUT_1).expect("the stored ledger");
    let mode: String = db.pragma_update_and_check(None, "journal_mode", "wal", |r| r.get(0)).expect("set");
    assert_eq!((mode.as_str(), version(folder)), ("wal", 1));
}

fn version(folder: &Path) -> i32 {
    let db = Connection::open(folder.join("ledger.sqlite")).expect("the file");
    db.pragma_query_value(None, "user_version", |r| r.get(0)).expect("a number")
}

/// Every row of the tables that layout 1 had, as text, and what tables there are.
fn rows(folder: &Path) -> (Vec<String>, Vec<String>) {
    let db = Connection::open(folder.join("ledger.sqlite")).expect("the file");
    let mut all = Vec::new();
    for (table, columns) in [
        ("ledger", "quote(id) || quote(epoch) || quote(created_utc_us)"),
        ("boot", "quote(ordinal) || quote(boot_id)"),
        (
            "input",
            "quote(no) || quote(at_utc_us) || quote(mono_us) || quote(boot) || quote(kind) || quote(bytes) || quote(reason)",
        ),
        ("fact", "quote(seq) || quote(body) || quote(hash) || quote(inputs_digest)"),
        ("document", "quote(kind) || quote(id) || quote(seq) || quote(body)"),
        ("answer", "quote(client) || quote(ask_id) || quote(answer)"),
    ] {
        let mut statement = db.prepare(&format!("SELECT {columns} FROM {table} ORDER BY 1")).expect("a table");
        let found = statement.query_map([], |r| r.get::<_, String>(0)).expect("rows");
        all.extend(found.map(|r| format!("{table} {}", r.expect("a row"))));
    }
    let mut names = db.prepare("SELECT name FROM sqlite_schema WHERE name NOT LIKE 'sqlite_%' ORDER BY name").expect("names");
    let names = names.query_map([], |r| r.get(0)).expect("names").collect::<Result<_, _>>().expect("names");
    (all, names)
}

fn options() -> OpenOptions {
    OpenOptions::new("another-boot", 1_790_000_000_000_000)
}

fn limits(folder: &Path) -> Value {
    let db = Connection::open(folder.join("ledger.sqlite")).expect("the file");
    let sql = "SELECT body FROM document WHERE kind = 'specimen' AND id = 'U-1'";
    let body: Vec<u8> = db.query_row(sql, [], |r| r.get(0)).expect("the specimen");
    serde_json::from_slice::<Value>(&body).expect("JSON")["limits"].clone()
}

#[test]
fn a_ledger_of_layout_1_is_the_same_after_the_upgrade() {
    let folder = tempfile::tempdir().expect("a folder");
    released(folder.path());
    let (before, old_names) = rows(folder.path());
    let chain = |l: &Ledger| (l.tail().id, l.tail().last_seq, l.tail().last_hash);
    let opened = Ledger::open(folder.path(), options()).expect("it opens");
    let tail = chain(&opened);
    drop(opened);
    let (after, new_names) = rows(folder.path());
    let added: Vec<&String> = after.iter().filter(|r| !before.contains(r)).collect();
    assert_eq!(added.len(), 1, "this start of the machine and nothing else: {added:?}");
    assert!(before.iter().all(|r| after.contains(r)) && new_names.len() > old_names.len());
    assert_eq!(version(folder.path()), SCHEMA_VERSION);
    // The chain holds as it was. What today's program notes besides, and that one did not, is shown and put in nobody's place.
    let report = verify(folder.path(), None, &mut |_| ()).expect("a report");
    assert!(report.ok(), "{:?}", report.first_bad);
    assert_eq!(tail, chain(&Ledger::open(folder.path(), options()).expect("it opens again")));
    let proof = prove(folder.path(), &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!(proof.chain.first_bad, None);
    let documents = proof.documents.expect("compared");
    let changed: Vec<_> = documents.iter().filter(|d| !d.why.contains("stored as null")).collect();
    assert!(changed.is_empty(), "nothing says otherwise than it did: {changed:#?}");
    let shown = proof.redecided.expect("decided again").len();
    println!("{} documents and {shown} facts say more today", documents.len());
    // Control: a byte of a stored result changed in the same file is noticed.
    let db = Connection::open(folder.path().join("ledger.sqlite")).expect("the file");
    db.execute_batch("DROP TRIGGER fact_no_update; UPDATE fact SET body = CAST(replace(CAST(body AS TEXT), 'percent', 'permill') AS BLOB) WHERE kind = 'limits_computed'")
        .expect("tampered");
    drop(db);
    assert!(!verify(folder.path(), None, &mut |_| ()).expect("a report").ok());
}

/// Goes on where the old program was killed: the determinations that lacked their dry masses are finished by hand.
#[test]
fn work_begun_before_the_upgrade_is_finished_after_it() {
    let folder = tempfile::tempdir().expect("a folder");
    let state = folder.path().join("state");
    std::fs::create_dir(&state).expect("made");
    released(&state);
    let trials = |l: &Value| l["trials"].as_array().cloned().unwrap_or_default();
    let before = limits(&state);
    let config = folder.path().join("c.toml");
    let text = format!("[broker]\nlisten = \"127.0.0.1:{}\"\n[[bench]]\nname = \"north\"\n", free_port());
    std::fs::write(&config, text).expect("written");
    let mut service = Command::new(TARECUP);
    service.env("XDG_CONFIG_HOME", folder.path()).args(["run", "--config"]).arg(&config).arg("--state").arg(&state);
    let mut service = Running::start(service.stdin(Stdio::null()).stdout(Stdio::null()).stderr(Stdio::null()));
    until("the service answers", PATIENCE, || status(&state).is_some());
    assert_eq!(limits(&state), before, "a result that was reported stays");
    let done = |bench: &str, container: &str, grams: &str| {
        let wanted =
            json!({"ask": "type_mass", "bench": bench, "container": container, "mass_g": grams, "role": "dry", "who": "AB"});
        let answer = ask(&state, &wanted).expect("an answer");
        assert_eq!(answer["ok"], true, "{wanted}: {answer}");
    };
    let bench = status(&state).expect("a status")["benches"][0]["bench"].as_str().expect("a bench").to_owned();
    let dry = [("A1", "62.99"), ("A2", "63.53"), ("A3", "62.94"), ("A4", "65.04"), ("A5", "63.26")];
    let weighed: Vec<Value> = trials(&before).iter().filter(|t| t["dry_g"].is_number()).map(|t| t["container"].clone()).collect();
    for (container, grams) in dry.into_iter().filter(|(c, _)| !weighed.contains(&json!(c))) {
        done(&bench, container, grams);
    }
    let after = limits(&state);
    let sheet = sheet(
        "U-1",
        "d4318-multipoint",
        vec![
            liquid(&[28], "A1", "50.94", "66.74", &["62.99"]),
            liquid(&[21], "A2", "51.55", "67.56", &["63.53"]),
            liquid(&[15], "A3", "51.78", "66.90", &["62.94"]),
        ],
        vec![slice("A4", "51.80", "67.50", &["65.04"]), slice("A5", "50.90", "65.50", &["63.26"])],
    );
    let found = differences(&after, &judged(&[sheet])[0]);
    assert!(found.is_empty(), "{found:#?}");
    service.signal(rustix::process::Signal::TERM);
    assert_eq!(service.wait(PATIENCE).code(), Some(0));
    assert!(verify(&state, None, &mut |_| ()).expect("a report").ok());
}

/// Killed at the n-th call of a kind while the layout is brought up to date; the layout it leaves, or `None` when it ended first.
fn killed_at(call: &str, n: u32) -> Option<i32> {
    let folder = tempfile::tempdir().expect("a folder");
    released(folder.path());
    let before = rows(folder.path());
    let config = folder.path().join("c.toml");
    std::fs::write(&config, format!("[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port())).expect("written");
    let mut command = Command::new("strace");
    command.args(["-f", "-qq", "-o", "/dev/null", "-e", &format!("trace={call}"), "-e"]);
    command.arg(format!("inject={call}:signal=KILL:when={n}")).arg(TARECUP).args(["run", "--config"]).arg(&config);
    command.arg("--state").arg(folder.path()).env("XDG_CONFIG_HOME", folder.path());
    let mut service = Running::start(command.stdin(Stdio::null()).stdout(Stdio::null()).stderr(Stdio::null()));
    let mut over = false;
    until("it is up or killed", PATIENCE, || {
        over = service.0.try_wait().expect("waited").is_some();
        over || status(folder.path()).is_some()
    });
    if !over {
        // Killing strace alone would leave the service running: it is asked to stop first.
        let pid = std::fs::read_to_string(folder.path().join("ledger.sqlite.lock")).expect("who holds it");
        let pid = rustix::process::Pid::from_raw(pid.trim().parse().expect("a number")).expect("a process");
        rustix::process::kill_process(pid, rustix::process::Signal::TERM).expect("our own");
        service.wait(PATIENCE);
        return None;
    }
    let found = version(folder.path());
    let (rows_now, names) = rows(folder.path());
    assert!(found == 1 || found == SCHEMA_VERSION, "killed at {call} {n}: layout {found}");
    if found == 1 {
        assert_eq!(names, before.1, "killed at {call} {n}: the old layout, whole");
    }
    assert!(before.0.iter().all(|r| rows_now.contains(r) || r.starts_with("document")), "killed at {call} {n}: nothing is lost");
    let check: String = Connection::open(folder.path().join("ledger.sqlite"))
        .and_then(|db| db.query_row("PRAGMA integrity_check", [], |r| r.get(0)))
        .expect("a check");
    assert_eq!(check, "ok", "killed at {call} {n}");
    Ledger::open(folder.path(), options()).expect("and it opens");
    assert!(verify(folder.path(), None, &mut |_| ()).expect("a report").ok(), "killed at {call} {n}");
    Some(found)
}

#[test]
fn a_kill_in_the_middle_of_the_upgrade_leaves_the_old_or_the_new() {
    let every = std::env::var_os("TARECUP_INJECTIONS").is_some();
    let mut left: Vec<i32> = Vec::new();
    for (call, apart) in [("pwrite64", 5), ("fsync", 1)] {
        for n in (1..400).step_by(if every { 1 } else { apart }) {
            match killed_at(call, n) {
                Some(found) => left.push(found),
                None => break,
            }
        }
    }
    let old = left.iter().filter(|v| **v == 1).count();
    println!(
        "killed {} times while it was brought up to date: {old} times the old layout, {} times the new one",
        left.len(),
        left.len() - old
    );
    // Control: the kills fell on both sides of the one moment at which it changes.
    assert!(old > 0 && old < left.len(), "{left:?}");
}

#[test]
fn an_older_program_leaves_a_newer_file_alone() {
    let folder = tempfile::tempdir().expect("a folder");
    released(folder.path());
    let db = Connection::open(folder.path().join("ledger.sqlite")).expect("the file");
    db.execute_batch(&format!("PRAGMA user_version = {}; PRAGMA wal_checkpoint(TRUNCATE)", SCHEMA_VERSION + 1)).expect("newer");
    drop(db);
    let bytes = || std::fs::read(folder.path().join("ledger.sqlite")).expect("bytes");
    let before = bytes();
    let refused = Ledger::open(folder.path(), options()).expect_err("refused");
    assert!(matches!(refused, LedgerError::Newer { .. }) && refused.to_string().contains("nothing was changed"), "{refused}");
    let ended = tarecup(&["run", "--state", &folder.path().display().to_string()]);
    assert_ne!(ended.code, 0);
    assert!(ended.err.contains("newer version of this program"), "{}", ended.err);
    assert!(ended.took < Duration::from_secs(10) && bytes() == before, "not a byte was touched");
}
