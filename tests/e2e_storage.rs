//! Storage in trouble under the whole running service, while a specimen is in
//! work: it is said within two seconds, nothing is accepted meanwhile, recording
//! goes on by itself when the cause is gone, and by an independent model nothing
//! is lost or doubled.

mod e2e_support;

use e2e_support::operator::{Cup, Operator, PORTS, Station, limits_of};
use e2e_support::oracle::{Hearing, Kept, blind_to, judge};
use e2e_support::subscriber::{Got, MosquittoSub, last};
use e2e_support::*;
use rusqlite::Connection;
use serde_json::{Value, json};
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::time::{Duration, Instant};
use tarecup::ledger::{Reader, verify};
use tarecup::proof::prove;

/// What may pass until trouble is said.
const SAID: Duration = Duration::from_secs(2);
/// How long each trouble lasts after it was said.
const LASTS: Duration = Duration::from_millis(2_500);

fn specimen() -> Sheet {
    sheet(
        "T-1",
        "d4318-multipoint",
        vec![
            liquid(&[28], "A1", "50.94", "66.74", &["62.99"]),
            liquid(&[21], "A2", "51.55", "67.56", &["63.53"]),
            liquid(&[15], "A3", "51.78", "66.90", &["62.94"]),
        ],
        vec![slice("A4", "51.80", "67.50", &["65.04"]), slice("A5", "50.90", "65.50", &["63.26"])],
    )
}

struct Bench {
    station: Station,
    heard: MosquittoSub,
}

fn bench() -> Bench {
    let port = free_port();
    let station = Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{port}\"\n"));
    Bench { station, heard: MosquittoSub::on(port, "tarecup/v1/#") }
}

impl Drop for Bench {
    fn drop(&mut self) {
        if std::thread::panicking() {
            println!("{}\n{}", self.station.log(), presence(&self.heard.got));
        }
    }
}

impl Bench {
    fn up(&self) {
        self.station.start();
        wait_up(&self.station.state, PORTS);
        until("the subscriber hears", PATIENCE, || !presence(&self.heard.got).is_null());
        // The first line after the opening of a port may be half a line, and is not used.
        std::thread::sleep(Duration::from_millis(300));
    }

    fn ledger(&self) -> PathBuf {
        self.station.state.join("ledger.sqlite")
    }

    fn facts_heard(&self) -> Vec<Value> {
        let got = self.heard.got.lock().expect("messages");
        got.iter().filter(|(t, _)| t.ends_with("/fact")).map(|(_, p)| serde_json::from_str(p).expect("JSON")).collect()
    }
}

fn presence(got: &Got) -> Value {
    last(got).get("tarecup/v1/wet-room/presence").and_then(|p| serde_json::from_str(p).ok()).unwrap_or_default()
}

/// How long this machine kept a sleeper waiting at worst: others are at work on it, and their time is not the service's.
#[derive(Default)]
struct Stalls {
    worst_ms: AtomicU64,
    over: AtomicBool,
}

impl Stalls {
    fn watch(&self) {
        while !self.over.load(Ordering::SeqCst) {
            let began = Instant::now();
            std::thread::sleep(Duration::from_millis(10));
            self.worst_ms.fetch_max(began.elapsed().as_millis() as u64 - 10, Ordering::SeqCst);
        }
    }
    fn allowed(&self) -> Duration {
        SAID + Duration::from_millis(4 * self.worst_ms.load(Ordering::SeqCst))
    }
}

/// While it lasts: presence, exit code, log and refusals all say so, and no fact is stored.
fn is_said(bench: &Bench, words: &str, began: Instant, stalls: &Stalls) {
    let why = || presence(&bench.heard.got)["not_recording"].as_str().unwrap_or_default().to_owned();
    until(&format!("{words:?} is said; the log: {}", bench.station.log()), PATIENCE, || !why().is_empty());
    let took = began.elapsed();
    println!("{words:?} was said after {} ms (allowed {:?})", took.as_millis(), stalls.allowed());
    assert!(took <= stalls.allowed(), "{words:?} was said after {took:?} only");
    assert!(why().contains(words), "{}", why());
    let state = bench.station.state.display().to_string();
    let status = tarecup(&["status", "--state", &state]);
    assert_eq!(status.code, 4, "{}{}", status.out, status.err);
    assert!(status.out.contains("NOT RECORDING") && status.out.contains(words), "{}", status.out);
    assert!(bench.station.log().contains("NOT RECORDING"), "{}", bench.station.log());
    let refused = ask(&bench.station.state, &json!({"ask": "sign_in", "bench": "south", "operator": "XY"})).expect("an answer");
    assert!(refused["error"]["says"].as_str().is_some_and(|s| s.contains("nothing is being recorded")), "{refused}");
    let before = bench.facts_heard().len();
    std::thread::sleep(LASTS);
    assert_eq!(bench.facts_heard().len(), before, "nothing leaves that is not stored");
    assert!(!why().is_empty(), "and it goes on being said");
}

/// The record after all is over: as if nothing had happened.
fn nothing_is_lost_or_doubled(bench: &Bench, facts: &[Value]) {
    let found = differences(&limits_of(facts, "T-1"), &judged(&[specimen()])[0]);
    assert!(found.is_empty(), "{found:#?}");
    let seq = || status(&bench.station.state).and_then(|s| s["seq"].as_u64()).unwrap_or(u64::MAX);
    until("everything is published", PATIENCE, || bench.facts_heard().iter().any(|f| f["seq"] == seq()));
    assert_eq!(bench.station.term(), Some(0), "{}", bench.station.log());
    std::thread::sleep(Duration::from_millis(200));
    let (kept, published) = (Kept::read(&bench.station.state), bench.facts_heard());
    // The last fact, that it stopped in order, may reach the subscriber or not before the built-in broker is gone.
    let mut stored = kept.clone();
    if published.last().is_some_and(|p| p["seq"] != stored.facts.len()) {
        stored.facts.pop();
    }
    let done = bench.station.done.lock().expect("done").clone();
    let wrong = judge(&done, &stored, Some(&published), Hearing::Every);
    assert!(wrong.is_empty(), "{wrong:#?}\n{}", bench.station.log());
    let unnoticed = blind_to(&done, &stored, &published, Hearing::Every);
    assert!(unnoticed.is_empty(), "the oracle must see: {unnoticed:?}");
    let report = verify(&bench.station.state, None, &mut |_| ()).expect("a report");
    assert!(report.ok(), "{:?}", report.first_bad);
    let proof = prove(&bench.station.state, &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!((proof.first_bad(), proof.redecided), (None, Some(vec![])));
}

/// A specimen in work; trouble begins, is said, ends; everything is as without it.
fn trouble<T>(bench: &Bench, words: &str, begin: impl FnOnce() -> T, end: impl FnOnce(T)) {
    let (stalls, over) = (Stalls::default(), AtomicBool::new(false));
    let facts = std::thread::scope(|scope| {
        scope.spawn(|| stalls.watch());
        let work = scope.spawn(|| {
            let mut operator = Operator::at(&bench.station, Cup::Numbered, true);
            operator.play(&specimen());
            operator.facts
        });
        // The other balance shows an empty pan all the time: there is always something to store.
        scope.spawn(|| {
            while !over.load(Ordering::SeqCst) {
                bench.station.say("pan-2", "+      0.00 g  S\r\n");
                std::thread::sleep(Duration::from_millis(50));
            }
        });
        std::thread::sleep(Duration::from_millis(2_500));
        let outcome = std::panic::catch_unwind(std::panic::AssertUnwindSafe(|| {
            let cause = begin();
            is_said(bench, words, Instant::now(), &stalls);
            end(cause);
            let back = Instant::now();
            until("recording again, and said so", PATIENCE, || presence(&bench.heard.got)["not_recording"].is_null());
            println!("{words:?}: recording again after {} ms", back.elapsed().as_millis());
        }));
        stalls.over.store(true, Ordering::SeqCst);
        let facts = work.join().expect("the operator");
        over.store(true, Ordering::SeqCst);
        outcome.unwrap_or_else(|e| std::panic::resume_unwind(e));
        facts
    });
    let state = bench.station.state.display().to_string();
    assert_eq!(tarecup(&["status", "--state", &state]).code, 0, "and the exit code says so");
    nothing_is_lost_or_doubled(bench, &facts);
}

/// `strace` makes the system calls of the running service fail.
fn failing(bench: &Bench, calls: &str, error: &str) -> Running {
    let pid = bench.station.pid();
    let mut command = Command::new("strace");
    command.args(["-f", "-qq", "-o", "/dev/null", "-p", &pid.to_string(), "-e"]).arg(format!("trace={calls}"));
    command.arg("-e").arg(format!("inject={calls}:error={error}")).stdout(Stdio::null()).stderr(Stdio::null());
    let running = Running::start(&mut command);
    let traced = || std::fs::read_to_string(format!("/proc/{pid}/status")).is_ok_and(|s| !s.contains("TracerPid:\t0"));
    until("strace holds the service (it needs the right to trace: run as root)", PATIENCE, traced);
    running
}

/// Killed, it would leave the service stopped: it is asked to let go.
fn let_go(mut strace: Running) {
    strace.signal(rustix::process::Signal::INT);
    strace.wait(PATIENCE);
}

#[test]
fn a_failing_flush_is_said_and_nothing_is_lost() {
    let bench = bench();
    bench.up();
    trouble(&bench, "the disk reported an error", || failing(&bench, "fsync,fdatasync", "EIO"), let_go);
}

#[test]
fn a_failing_write_is_said_and_nothing_is_lost() {
    let bench = bench();
    bench.up();
    trouble(&bench, "the disk reported an error", || failing(&bench, "pwrite64", "EIO"), let_go);
}

#[test]
fn a_disk_that_becomes_read_only_is_said_and_nothing_is_lost() {
    let bench = bench();
    bench.up();
    trouble(&bench, "the ledger", || failing(&bench, "pwrite64,fallocate,ftruncate,openat", "EROFS"), let_go);
}

#[test]
fn a_database_locked_by_a_holder_is_said_and_nothing_is_lost() {
    let bench = bench();
    bench.up();
    let hold = || {
        let other = Connection::open(bench.ledger()).expect("the file");
        other.busy_timeout(Duration::from_secs(5)).expect("set");
        other.execute_batch("BEGIN EXCLUSIVE").expect("the lock");
        other
    };
    trouble(&bench, "keeps the ledger", hold, drop);
}

/// Its three files, moved from one folder to another.
fn move_ledger(from: &Path, to: &Path) {
    for ending in ["", "-wal", "-shm"] {
        let name = format!("ledger.sqlite{ending}");
        if from.join(&name).exists() {
            std::fs::rename(from.join(&name), to.join(&name)).expect("moved");
        }
    }
}

#[test]
fn a_ledger_moved_away_is_said_and_goes_on_when_it_is_back() {
    let bench = bench();
    bench.up();
    let aside = bench.station.dir.path().join("aside");
    std::fs::create_dir(&aside).expect("made");
    let state = bench.station.state.clone();
    trouble(&bench, "was moved, removed or replaced", || move_ledger(&state, &aside), |()| move_ledger(&aside, &state));
}

#[test]
fn a_ledger_removed_is_said_and_no_new_one_is_begun_in_its_place() {
    let bench = bench();
    bench.up();
    let state = bench.station.state.clone();
    let name = |ending: &str| state.join(format!("ledger.sqlite{ending}"));
    let kept = |ending: &str| bench.station.dir.path().join(format!("kept{ending}"));
    let remove = || {
        for ending in ["", "-wal"] {
            std::fs::hard_link(name(ending), kept(ending)).expect("linked");
        }
        ["", "-wal", "-shm"].iter().for_each(|e| std::fs::remove_file(name(e)).expect("removed"));
    };
    let put_back = |()| {
        assert!(!name("").exists(), "a second, empty ledger would hide what happened");
        ["-wal", ""].iter().for_each(|e| std::fs::rename(kept(e), name(e)).expect("put back"));
    };
    trouble(&bench, "was moved, removed or replaced", remove, put_back);
}

#[test]
fn a_ledger_replaced_by_another_is_said_and_the_other_is_not_written() {
    let other = bench();
    other.up();
    assert_eq!(other.station.term(), Some(0));
    let bench = bench();
    bench.up();
    let aside = bench.station.dir.path().join("aside");
    std::fs::create_dir(&aside).expect("made");
    let replace = || {
        move_ledger(&bench.station.state, &aside);
        for ending in ["-wal", ""] {
            let name = format!("ledger.sqlite{ending}");
            let _ = std::fs::copy(other.station.state.join(&name), bench.station.state.join(&name));
        }
    };
    let back = |()| {
        let seq = |at: &Path| Reader::open(at).expect("opens").head().expect("a head").seq;
        assert_eq!(seq(&bench.ledger()), seq(&other.ledger()), "nothing was written to the other one");
        ["", "-wal", "-shm"].iter().for_each(|e| {
            let _ = std::fs::remove_file(bench.station.state.join(format!("ledger.sqlite{e}")));
        });
        move_ledger(&aside, &bench.station.state);
    };
    trouble(&bench, "was moved, removed or replaced", replace, back);
}

/// A small disk of its own.
struct SmallDisk(PathBuf);

impl SmallDisk {
    fn at(path: &Path, megabytes: u32) -> Self {
        std::fs::create_dir_all(path).expect("made");
        let size = format!("size={megabytes}m,mode=0700");
        let mounted = Command::new("mount").args(["-t", "tmpfs", "-o", &size, "tmpfs"]).arg(path).status().expect("mount");
        assert!(mounted.success(), "a small disk is needed: run this as root");
        Self(path.to_path_buf())
    }
    /// Fills it to the last byte but so many.
    fn fill_but(&self, spare: u64) {
        use std::io::Write;
        let mut file = std::fs::File::create(self.0.join("filler")).expect("made");
        let block = [1u8; 4096];
        while file.write_all(&block).is_ok() {}
        let length = file.metadata().expect("length").len();
        file.set_len(length.saturating_sub(spare)).expect("cut");
    }
    fn free(&self) {
        std::fs::remove_file(self.0.join("filler")).expect("removed");
    }
}

impl Drop for SmallDisk {
    fn drop(&mut self) {
        let _ = Command::new("umount").arg("-l").arg(&self.0).status();
    }
}

#[test]
fn a_full_disk_is_said_before_and_while_and_nothing_is_lost() {
    let bench = bench();
    let disk = SmallDisk::at(&bench.station.state, 12);
    bench.up();
    let room = |b: &Bench| presence(&b.heard.got)["room"].as_str().unwrap_or_default().to_owned();
    assert_eq!(room(&bench), "", "there is room: the control");
    let fill = || {
        disk.fill_but(900 << 10);
        until("the warning", PATIENCE, || room(&bench).contains("less than a tenth"));
        disk.fill_but(0);
    };
    trouble(&bench, "no room to write", fill, |()| disk.free());
    assert!(bench.station.log().contains("is stored from the reserve"), "{}", bench.station.log());
    assert!(bench.station.state.join("ledger.sqlite.reserve").exists(), "the reserve is there again");
}

/// A weighing in progress when the disk fills is finished from the reserve, and nothing after it.
#[test]
fn the_reserve_finishes_the_weighing_in_progress() {
    let finished = |with_reserve: bool| {
        let bench = bench();
        let disk = SmallDisk::at(&bench.station.state, 12);
        bench.up();
        if !with_reserve {
            std::fs::remove_file(bench.station.state.join("ledger.sqlite.reserve")).expect("removed");
        }
        let before = status(&bench.station.state).and_then(|s| s["seq"].as_u64()).expect("a number");
        disk.fill_but(0);
        // Enough lines first that what the log has room for already is used up.
        let why = || presence(&bench.heard.got)["not_recording"].is_string();
        let room = || presence(&bench.heard.got)["room"].as_str().is_some_and(|r| r.contains("the disk is full"));
        until("the disk is full for the ledger too", PATIENCE, || {
            bench.station.say("pan-2", "+      0.00 g  S\r\n");
            std::thread::sleep(Duration::from_millis(20));
            room() || why()
        });
        bench.station.load("pan-1", "21.43");
        until("then nothing more is recorded", PATIENCE, why);
        let kept = Kept::read(&bench.station.state);
        let stored = kept.facts.iter().skip(before as usize).any(|f| f["kind"] == "weighed");
        disk.free();
        until("recording again", PATIENCE, || presence(&bench.heard.got)["not_recording"].is_null());
        let all = || Kept::read(&bench.station.state).facts.iter().filter(|f| f["kind"] == "weighed").count();
        until("the weighing is stored once", PATIENCE, || all() == 1);
        assert_eq!(bench.station.term(), Some(0), "{}", bench.station.log());
        assert_eq!(all(), 1);
        stored
    };
    assert!(finished(true), "stored before recording ceased");
    // Control: without a reserve it has to wait for room.
    assert!(!finished(false), "the disk was full indeed");
}

/// Control: a service that nothing disturbs says nothing, and by the same oracle is as faultless.
#[test]
fn without_trouble_nothing_is_said() {
    let bench = bench();
    bench.up();
    let mut operator = Operator::at(&bench.station, Cup::Numbered, true);
    operator.play(&specimen());
    let said: Vec<String> = bench.heard.got.lock().expect("messages").iter().map(|(_, p)| p.clone()).collect();
    assert!(!said.iter().any(|p| p.contains("\"not_recording\":\"")), "nothing was the matter");
    assert!(!bench.station.log().contains("NOT RECORDING"));
    nothing_is_lost_or_doubled(&bench, &operator.facts);
}
