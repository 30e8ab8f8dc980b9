//! The ledger keeps what it was given: append-only, all or nothing, one
//! writer, and words for everything that goes wrong.

#[path = "ledger_help.rs"]
mod help;

use help::{at, input, options, sample};
use rusqlite::Connection;
use std::fs;
use std::path::Path;
use std::time::{Duration, Instant};
use tarecup::ledger::{
    AnswerRow, Asked, Digest, DocumentRow, FILE_NAME, FactRow, Group, InputKind, Ledger, LedgerError, OpenOptions, Reader,
    SCHEMA_VERSION, Which, verify,
};
use tempfile::TempDir;

fn folder_with_sample() -> TempDir {
    let folder = TempDir::new().expect("a folder");
    sample(folder.path());
    folder
}

fn raw(folder: &Path) -> Connection {
    Connection::open(folder.join(FILE_NAME)).expect("the file")
}

fn body(seq: u64, no: i64) -> Vec<u8> {
    format!(r#"{{"seq":{seq},"at":"{}","kind":"note_added","who":null}}"#, at(no).rfc3339()).into_bytes()
}

fn note(seq: u64, through: u64, body: &[u8]) -> FactRow<'_> {
    FactRow { seq, at: at(through as i64), kind: "note_added", who: None, through, body }
}

#[test]
fn everything_comes_back_as_it_was_given() {
    let folder = folder_with_sample();
    let reader = Reader::open(folder.path()).expect("opens");
    let inputs = reader.inputs_from(1, 100, None).expect("inputs");
    assert_eq!(inputs.iter().map(|i| i.no).collect::<Vec<_>>(), [1, 2, 3, 4, 5]);
    assert_eq!((inputs[2].bytes.as_slice(), inputs[2].reason.as_deref()), (&b"\xff\x00\r\n"[..], Some("no_pattern")));
    assert_eq!((inputs[2].kind, inputs[2].instrument.as_deref(), inputs[2].at), (InputKind::Reject, Some("pan-1"), at(3)));
    let of_pan = reader.inputs_from(2, 100, Some("pan-1")).expect("inputs");
    assert_eq!(of_pan.iter().map(|i| i.no).collect::<Vec<_>>(), [2, 3]);
    assert!(reader.inputs_from(1, 100, Some("none")).expect("inputs").is_empty());
    assert!(reader.inputs_from(u64::MAX, 100, None).expect("inputs").is_empty());
    let facts = reader.facts_after(1, 1).expect("facts");
    assert_eq!((facts.len(), facts[0].seq, facts[0].through, facts[0].inputs_to), (1, 2, 2, 2));
    assert_eq!((facts[0].kind.as_str(), facts[0].who.as_deref()), ("mass_taken", Some("AB")));
    assert_eq!(reader.latest_fact("mass_taken").expect("fact"), Some(facts[0].clone()));
    assert_eq!(reader.latest_fact("none").expect("fact"), None);
    assert_eq!(reader.fact(4).expect("fact"), None);
    let open = reader.documents("container", Which::Open, "", 10).expect("documents");
    assert_eq!(open.iter().map(|d| d.id.as_str()).collect::<Vec<_>>(), ["C11"]);
    let rest = reader.documents("container", Which::All, "C11", 10).expect("documents");
    assert_eq!(rest.iter().map(|d| d.id.as_str()).collect::<Vec<_>>(), ["C14"]);
    assert_eq!(reader.cursor("delivered_through").expect("cursor"), Some(2));
    assert_eq!(reader.boot_id(at(1).boot).expect("boot").as_deref(), Some("boot-a"));
    let head = reader.head().expect("head");
    assert_eq!((head.seq, head.last_input, head.epoch, head.id), (3, 5, 1, help::ID));
}

#[test]
fn inputs_and_facts_cannot_be_changed() {
    let folder = folder_with_sample();
    let conn = raw(folder.path());
    for sql in [
        "UPDATE input SET bytes = x'00' WHERE no = 2",
        "DELETE FROM input WHERE no = 5",
        "INSERT OR REPLACE INTO input VALUES (5, 1, 1, 1, 'line', NULL, x'41', NULL)",
        "INSERT INTO input VALUES (7, 1, 1, 1, 'line', NULL, x'41', NULL)",
        "UPDATE fact SET who = 'XY' WHERE seq = 2",
        "DELETE FROM fact WHERE seq = 3",
        "REPLACE INTO fact SELECT seq, at_utc_us, mono_us, boot, 'x', who, through, inputs_to, body, inputs_digest, hash FROM fact",
        "UPDATE instrument SET name = 'pan-9'",
        "DELETE FROM instrument",
        "UPDATE boot SET boot_id = 'x'",
        "UPDATE answer SET answer = x'00'",
        "UPDATE ledger SET id = '00112233445566778899aabbccddeeff'",
        "DELETE FROM ledger",
    ] {
        let error = conn.execute(sql, []).expect_err(sql).to_string();
        assert!(error.contains("never") || error.contains("without a gap") || error.contains("keeps its name"), "{sql}: {error}");
    }
    // The control: what is derived may change, and the row the chain expects next is taken.
    for sql in [
        "UPDATE document SET body = x'7b7d'",
        "UPDATE cursor SET value = 3",
        "UPDATE ledger SET epoch = 2",
        "INSERT INTO input VALUES (6, 1, 1, 1, 'line', NULL, x'41', NULL)",
    ] {
        assert!(conn.execute(sql, []).expect(sql) > 0);
    }
    let report = verify(folder.path(), None, &mut |_| {}).expect("verify runs");
    assert!(report.ok(), "{:?}", report.first_bad);
}

#[test]
fn a_document_changes_and_never_goes_back() {
    let folder = folder_with_sample();
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let newer = DocumentRow { kind: "container", id: "C11", seq: 3, open: false, body: b"[3]" };
    ledger.commit(&Group { documents: &[newer], ..Group::default() }).expect("commits");
    let older = DocumentRow { seq: 2, body: b"[2]", ..newer };
    let error = ledger.commit(&Group { documents: &[older], ..Group::default() }).expect_err("refused").to_string();
    assert!(error.contains("back in time"), "{error}");
    let kept = ledger.reader().and_then(|r| r.document("container", "C11")).expect("reads").expect("is there");
    assert_eq!((kept.seq, kept.open, kept.body.as_slice()), (3, false, &b"[3]"[..]));
    ledger.reopen().expect("reopens");
    let ahead = DocumentRow { seq: 4, ..newer };
    let error = ledger.commit(&Group { documents: &[ahead], ..Group::default() }).expect_err("refused").to_string();
    assert!(error.contains("reflects fact 4"), "{error}");
}

#[test]
fn an_ask_gets_its_answer_again_and_its_id_is_not_used_twice() {
    let folder = folder_with_sample();
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let reader = ledger.reader().expect("reader");
    let (same, other) = (Digest::of(br#"{"ask":"note"}"#), Digest::of(br#"{"ask":"undo"}"#));
    assert_eq!(reader.answer("tablet", "a-1", &same).expect("reads"), Asked::Before(b"{\"ok\":true}".to_vec()));
    assert_eq!(reader.answer("tablet", "a-1", &other).expect("reads"), Asked::Otherwise);
    assert_eq!(reader.answer("phone", "a-1", &other).expect("reads"), Asked::New);
    let row = AnswerRow { client: "tablet", ask_id: "a-1", body_digest: other, answer: b"no" };
    ledger.commit(&Group { answers: &[row], ..Group::default() }).expect_err("a second answer is refused");
    ledger.reopen().expect("reopens");
    ledger
        .commit(&Group { answers: &[AnswerRow { client: "phone", ..row }], ..Group::default() })
        .expect("another client's is taken");
    assert_eq!(reader.answer("phone", "a-1", &other).expect("reads"), Asked::Before(b"no".to_vec()));
}

/// Stored in one group or in three, the same day has the same chain.
#[test]
fn the_grouping_has_no_part_in_the_chain() {
    let lines: Vec<_> = (1..=6).map(|no| input(no, InputKind::Line, Some("pan-1"), b"21.43 g\r\n")).collect();
    let bodies = [body(1, 2), body(2, 5)];
    let facts = [note(1, 2, &bodies[0]), note(2, 5, &bodies[1])];
    let mut heads = Vec::new();
    for cuts in [vec![(6, 2)], vec![(1, 0), (2, 1), (5, 2), (6, 2)], vec![(2, 1), (4, 1), (6, 2)]] {
        let folder = TempDir::new().expect("a folder");
        let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
        let (mut i, mut f) = (0, 0);
        for (to_i, to_f) in cuts {
            ledger.commit(&Group { inputs: &lines[i..to_i], facts: &facts[f..to_f], ..Group::default() }).expect("commits");
            (i, f) = (to_i, to_f);
            if i == 4 {
                // Inputs no fact covers yet are digested anew at a start.
                drop(ledger);
                ledger = Ledger::open(folder.path(), options()).expect("opens again");
            }
        }
        let report = verify(folder.path(), None, &mut |_| {}).expect("verify runs");
        assert_eq!((report.first_bad, report.inputs_unchained), (None, 1));
        heads.push(ledger.tail());
    }
    assert!(heads.iter().all(|h| *h == heads[0]), "{heads:?}");
}

#[test]
fn rows_that_do_not_continue_the_ledger_are_refused() {
    let folder = folder_with_sample();
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let b = body(4, 6);
    let line = |no| [input(no, InputKind::Line, None, b"x")];
    for (inputs, facts, what) in [
        (line(7), vec![], "input 7 where 6"),
        (line(5), vec![], "input 5 where 6"),
        (line(6), vec![note(5, 6, &b)], "fact 5 where 4"),
        (line(6), vec![note(4, 7, &b)], "rests on input 7"),
    ] {
        let error = ledger.commit(&Group { inputs: &inputs, facts: &facts, ..Group::default() }).expect_err(what);
        assert!(error.to_string().contains(what), "{error}");
        assert!(ledger.is_poisoned());
        ledger.reopen().expect("reopens");
    }
    let good = ledger.commit(&Group { inputs: &line(6), facts: &[note(4, 6, &b)], ..Group::default() }).expect("commits");
    assert_eq!((good.last_input, good.last_seq), (6, 4));
}

/// A group that fails in its middle: its inputs and its first fact are in, its
/// second fact is not taken.
#[test]
fn a_failed_commit_leaves_nothing_and_recording_goes_on() {
    let folder = folder_with_sample();
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let before = ledger.tail();
    raw(folder.path())
        .execute_batch(
            "CREATE TRIGGER sabotage BEFORE INSERT ON fact WHEN NEW.seq = 5 BEGIN SELECT RAISE(ABORT, 'sabotage'); END",
        )
        .expect("trigger");
    let lines = [input(6, InputKind::Line, Some("new-pan"), b"x"), input(7, InputKind::Line, None, b"y")];
    let bodies = [body(4, 6), body(5, 7)];
    let facts = [note(4, 6, &bodies[0]), note(5, 7, &bodies[1])];
    let document = DocumentRow { kind: "container", id: "C99", seq: 4, open: true, body: b"{}" };
    let group =
        Group { inputs: &lines, facts: &facts, documents: &[document], cursors: &[("delivered_through", 4)], ..Group::default() };
    let error = ledger.commit(&group).expect_err("sabotaged").to_string();
    assert!(error.contains("sabotage"), "{error}");
    assert!(matches!(ledger.commit(&group), Err(LedgerError::Poisoned { .. })), "nothing is accepted before a reopening");
    assert!(matches!(ledger.commit(&Group::default()), Err(LedgerError::Poisoned { .. })));
    let reader = Reader::open(folder.path()).expect("reader");
    let head = reader.head().expect("head");
    assert_eq!((head.last_input, head.seq, head.hash), (5, 3, before.last_hash));
    assert_eq!(reader.document("container", "C99").expect("reads"), None);
    assert_eq!(reader.cursor("delivered_through").expect("reads"), Some(2));

    raw(folder.path()).execute_batch("DROP TRIGGER sabotage").expect("dropped");
    assert_eq!(ledger.reopen().expect("reopens"), before);
    assert_eq!((ledger.contains_input(5), ledger.contains_input(6), ledger.next_input(), ledger.next_seq()), (true, false, 6, 4));
    ledger.commit(&group).expect("the same group is taken now");
    assert!(ledger.contains_input(7));
    let report = verify(folder.path(), None, &mut |_| {}).expect("verify runs");
    assert_eq!((report.first_bad, report.facts, report.inputs), (None, 5, 7));
}

/// The file may not grow: SQLite then says the same as on a full disk.
#[test]
fn no_room_is_said_in_words_and_loses_nothing() {
    let folder = TempDir::new().expect("a folder");
    let small = OpenOptions { max_pages: Some(60), ..options() };
    let mut ledger = Ledger::open(folder.path(), small).expect("opens");
    let bytes = [b'x'; 900];
    let mut error = None;
    for _ in 0..200 {
        let first = ledger.next_input();
        let lines: Vec<_> = (first..first + 10).map(|no| input(no, InputKind::Line, Some("pan-1"), &bytes)).collect();
        let b = body(ledger.next_seq(), first as i64 + 9);
        let facts = [note(ledger.next_seq(), first + 9, &b)];
        if let Err(e) = ledger.commit(&Group { inputs: &lines, facts: &facts, ..Group::default() }) {
            error = Some(e);
            break;
        }
    }
    let error = error.expect("200 groups do not fit");
    assert!(matches!(error, LedgerError::Full { .. }) && error.to_string().contains("free space"), "{error}");
    let acknowledged = ledger.tail();
    assert!(acknowledged.last_input >= 20, "some groups fitted");
    drop(ledger);
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens with room");
    assert_eq!(ledger.tail(), acknowledged);
    let no = ledger.next_input();
    ledger.commit(&Group { inputs: &[input(no, InputKind::Line, None, b"x")], ..Group::default() }).expect("there is room");
    assert!(verify(folder.path(), None, &mut |_| {}).expect("verify runs").ok());
}

#[test]
fn a_second_writer_is_refused_by_the_holders_number() {
    let folder = folder_with_sample();
    let mut first = Ledger::open(folder.path(), options()).expect("opens");
    let began = Instant::now();
    let error = Ledger::open(folder.path(), options()).expect_err("held");
    assert!(began.elapsed() < Duration::from_secs(1));
    assert!(matches!(error, LedgerError::Held { pid: Some(pid), .. } if pid == std::process::id()), "{error:?}");
    assert!(error.to_string().contains(&format!("process {}", std::process::id())), "{error}");
    first.commit(&Group { inputs: &[input(6, InputKind::Line, None, b"x")], ..Group::default() }).expect("undisturbed");
    drop(first);
    Ledger::open(folder.path(), options()).expect("free again");
}

fn contents(folder: &Path) -> Vec<(String, Vec<u8>)> {
    let mut all: Vec<_> = fs::read_dir(folder)
        .expect("folder")
        .map(|entry| entry.expect("entry"))
        .map(|e| (e.file_name().to_string_lossy().into_owned(), fs::read(e.path()).expect("bytes")))
        .filter(|(name, _)| !name.ends_with(".lock") && !name.ends_with("-shm"))
        .collect();
    all.sort();
    all
}

#[test]
fn a_newer_ledger_is_refused_and_not_touched() {
    let folder = folder_with_sample();
    raw(folder.path()).pragma_update(None, "user_version", SCHEMA_VERSION + 1).expect("made newer");
    let before = contents(folder.path());
    for error in [
        Ledger::open(folder.path(), options()).expect_err("refused"),
        Reader::open(folder.path()).map(|_| ()).expect_err("refused"),
    ] {
        assert!(matches!(error, LedgerError::Newer { known: SCHEMA_VERSION, .. }), "{error}");
        assert!(error.to_string().contains("newer version"), "{error}");
    }
    let after: Vec<_> = contents(folder.path()).into_iter().filter(|(_, bytes)| !bytes.is_empty()).collect();
    assert_eq!(after, before);
    raw(folder.path()).pragma_update(None, "user_version", SCHEMA_VERSION).expect("made ours again");
    assert_eq!(Ledger::open(folder.path(), options()).expect("opens").tail().last_seq, 3);
}

/// The newer program was killed before its upgrade was copied from the log into the file.
#[test]
fn a_newer_ledger_whose_upgrade_is_still_in_the_log_is_not_touched_either() {
    let folder = folder_with_sample();
    let copy = TempDir::new().expect("a folder");
    let conn = raw(folder.path());
    conn.pragma_update(None, "user_version", SCHEMA_VERSION + 1).expect("made newer");
    for ending in ["", "-wal"] {
        let name = format!("{FILE_NAME}{ending}");
        fs::copy(folder.path().join(&name), copy.path().join(&name)).expect("copied");
    }
    let before = contents(copy.path());
    assert!(before.iter().any(|(name, bytes)| name.ends_with("-wal") && !bytes.is_empty()), "the upgrade is in the log");
    let error = Ledger::open(copy.path(), options()).expect_err("refused");
    assert!(matches!(error, LedgerError::Newer { .. }), "{error}");
    assert_eq!(contents(copy.path()), before);
}

#[test]
fn files_that_are_no_ledger_are_refused_and_not_touched() {
    let folder = TempDir::new().expect("a folder");
    let file = folder.path().join(FILE_NAME);
    fs::write(&file, "masses of last week\n".repeat(40)).expect("written");
    let before = contents(folder.path());
    let error = Ledger::open(folder.path(), options()).expect_err("refused").to_string();
    assert!(error.contains("not a tarecup ledger") && error.contains("nothing was changed"), "{error}");
    assert_eq!(contents(folder.path()), before);

    fs::remove_file(&file).expect("removed");
    raw(folder.path()).execute_batch("CREATE TABLE recipe (x); INSERT INTO recipe VALUES (1)").expect("another database");
    let before = contents(folder.path());
    let error = Ledger::open(folder.path(), options()).expect_err("refused").to_string();
    assert!(error.contains("another program's database"), "{error}");
    assert_eq!(contents(folder.path()), before);

    fs::remove_file(&file).expect("removed");
    fs::create_dir(&file).expect("a folder of that name");
    let error = Ledger::open(folder.path(), options()).expect_err("refused").to_string();
    assert!(error.contains("it is not a file"), "{error}");

    fs::remove_dir(&file).expect("removed");
    assert!(matches!(Reader::open(folder.path()), Err(LedgerError::Missing { .. })));
    fs::write(&file, "").expect("an empty file is as good as none");
    assert_eq!(Ledger::open(folder.path(), options()).expect("opens").next_input(), 1);
}

#[test]
fn a_ledger_taken_away_while_in_use_is_noticed() {
    let folder = folder_with_sample();
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let (file, aside) = (folder.path().join(FILE_NAME), folder.path().join("aside"));
    let line = [input(6, InputKind::Line, None, b"x")];
    let group = Group { inputs: &line, ..Group::default() };
    fs::rename(&file, &aside).expect("moved");
    assert!(matches!(ledger.commit(&group), Err(LedgerError::Moved { .. })));
    assert!(matches!(ledger.reopen(), Err(LedgerError::Moved { .. })));
    assert!(!file.exists(), "no new ledger is begun in its place");
    // Another ledger in its place is not written to.
    let other = TempDir::new().expect("a folder");
    drop(Ledger::open(other.path(), OpenOptions::new("boot-z", 0)).expect("another ledger"));
    fs::copy(other.path().join(FILE_NAME), &file).expect("put in its place");
    let before = fs::read(&file).expect("bytes");
    assert!(matches!(ledger.reopen(), Err(LedgerError::Moved { .. })));
    assert_eq!(fs::read(&file).expect("bytes"), before);
    fs::rename(&aside, &file).expect("put back");
    for ending in ["-wal", "-shm"] {
        let _ = fs::remove_file(folder.path().join(format!("{FILE_NAME}{ending}")));
    }
    assert_eq!(ledger.reopen().expect("reopens").last_input, 5);
    ledger.commit(&group).expect("recording goes on");
}

#[test]
fn a_database_locked_by_another_program_is_said_within_two_seconds() {
    let folder = folder_with_sample();
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let holder = raw(folder.path());
    holder.execute_batch("BEGIN IMMEDIATE").expect("held");
    let line = [input(6, InputKind::Line, None, b"x")];
    let began = Instant::now();
    let error = ledger.commit(&Group { inputs: &line, ..Group::default() }).expect_err("locked");
    assert!(matches!(error, LedgerError::Busy { .. }) && began.elapsed() < Duration::from_secs(2), "{error}");
    holder.execute_batch("ROLLBACK").expect("released");
    ledger.reopen().expect("reopens");
    ledger.commit(&Group { inputs: &line, ..Group::default() }).expect("recording goes on");
}

/// Tries to empty the log; says whether somebody stood in the way.
fn log_is_held(folder: &Path) -> bool {
    let conn = raw(folder);
    conn.busy_timeout(Duration::ZERO).expect("no waiting");
    conn.query_row("PRAGMA wal_checkpoint(TRUNCATE)", [], |r| r.get::<_, i64>(0)).expect("a checkpoint") != 0
}

#[test]
fn readers_do_not_hold_the_log() {
    let folder = folder_with_sample();
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let reader = ledger.reader().expect("reader");
    reader.facts_after(0, 2).expect("reads");
    reader.inputs_from(1, 2, None).expect("reads");
    reader.head().expect("reads");
    ledger.commit(&Group { inputs: &[input(6, InputKind::Line, None, b"x")], ..Group::default() }).expect("commits");
    assert!(!log_is_held(folder.path()));
    let mut told = 0;
    verify(folder.path(), None, &mut |_| {
        told += 1;
        assert!(!log_is_held(folder.path()), "verify holds the log between its pages");
    })
    .expect("verify runs");
    assert!(told > 0);
    // The control: a statement left open does hold it.
    let idle = raw(folder.path());
    let mut statement = idle.prepare("SELECT no FROM input").expect("statement");
    let mut rows = statement.query([]).expect("rows");
    assert!(rows.next().expect("a row").is_some());
    ledger.commit(&Group { inputs: &[input(7, InputKind::Line, None, b"x")], ..Group::default() }).expect("commits");
    assert!(log_is_held(folder.path()));
}

#[test]
fn each_start_of_the_machine_has_its_number() {
    let folder = folder_with_sample();
    let boot_of = |id: &str| Ledger::open(folder.path(), OpenOptions::new(id, 7)).expect("opens").tail().boot.0;
    assert_eq!([boot_of("boot-a"), boot_of("boot-b"), boot_of("boot-b"), boot_of("boot-a"), boot_of("boot-c")], [1, 2, 2, 1, 3]);
}

#[test]
fn two_new_ledgers_have_two_names() {
    let id = || {
        let folder = TempDir::new().expect("a folder");
        let nested = folder.path().join("state/of/a/lab/ledger.sqlite");
        Ledger::open(&nested, OpenOptions::new("boot-a", 0)).expect("makes its folder").tail().id
    };
    assert_ne!(id(), id());
}

/// More facts than are looked at when opening, and a long idle log.
#[test]
fn a_longer_ledger_opens_tidies_and_verifies() {
    let folder = TempDir::new().expect("a folder");
    let mut ledger = Ledger::open(folder.path(), options()).expect("opens");
    let line = [b'7'; 300];
    for round in 0..150_u64 {
        let first = ledger.next_input();
        let lines: Vec<_> = (first..first + 40).map(|no| input(no, InputKind::Line, Some("pan-1"), &line)).collect();
        let b = body(round + 1, first as i64 + 20);
        ledger.commit(&Group { inputs: &lines, facts: &[note(round + 1, first + 20, &b)], ..Group::default() }).expect("commits");
        ledger.tidy().expect("tidies");
    }
    let tail = ledger.tail();
    drop(ledger);
    assert_eq!(Ledger::open(folder.path(), options()).expect("opens").tail(), tail);
    let report = verify(folder.path(), None, &mut |_| {}).expect("verify runs");
    assert_eq!((report.first_bad, report.facts, report.inputs, report.inputs_unchained), (None, 150, 6_000, 19));
}
