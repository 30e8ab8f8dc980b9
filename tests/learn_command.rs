//! `tarecup learn` as it is used: at a pseudo-terminal, where nothing may be
//! written, and from captures; and what it adds to a config file.

use rustix::fs::{FlockOperation, Mode, OFlags};
use rustix::io::Errno;
use rustix::pty::OpenptFlags;
use rustix::termios::OptionalActions;
use serde_json::Value;
use std::os::fd::OwnedFd;
use std::path::{Path, PathBuf};
use std::process::{Command, Output};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

const TARECUP: &str = env!("CARGO_BIN_EXE_tarecup");

/// An instrument's end of a pseudo-terminal; its other end is held open and raw, as a cable is.
struct Pty {
    master: OwnedFd,
    slave: OwnedFd,
    path: PathBuf,
}

impl Pty {
    fn new() -> Self {
        let master = rustix::pty::openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY).expect("a pty");
        rustix::pty::grantpt(&master).expect("granted");
        rustix::pty::unlockpt(&master).expect("unlocked");
        let name = rustix::pty::ptsname(&master, Vec::new()).expect("a name");
        let path = PathBuf::from(name.into_string().expect("a path"));
        let flags = OFlags::RDWR | OFlags::NOCTTY | OFlags::CLOEXEC;
        let slave = rustix::fs::open(&path, flags, Mode::empty()).expect("opened");
        let mut line = rustix::termios::tcgetattr(&slave).expect("a line");
        line.make_raw();
        rustix::termios::tcsetattr(&slave, OptionalActions::Now, &line).expect("raw");
        let flags = rustix::fs::fcntl_getfl(&master).expect("flags");
        rustix::fs::fcntl_setfl(&master, flags | OFlags::NONBLOCK).expect("flags");
        Self { master, slave, path }
    }

    /// Every byte that was written towards the instrument so far.
    fn written(&self) -> Vec<u8> {
        let mut all = Vec::new();
        let mut room = [0; 256];
        loop {
            match rustix::io::read(&self.master, &mut room) {
                Ok(0) | Err(Errno::AGAIN) => return all,
                Ok(n) => all.extend_from_slice(&room[..n]),
                Err(e) => panic!("read: {e}"),
            }
        }
    }
}

/// What the pan does: hundredths of a gram and whether it moves, over and over.
fn load(i: usize) -> (i64, bool) {
    match i % 40 {
        0..10 => (0, false),
        10 => (812, true),
        11 => (2011, true),
        12..24 => (2346, false),
        24 => (3900, true),
        25..36 => (5120, false),
        36 => (2400, true),
        _ => (300 - (i as i64 % 40 - 36) * 75, true),
    }
}

fn line(i: usize) -> String {
    let (h, moves) = load(i);
    format!("{:>6}.{:02} g {}\r\n", h / 100, h % 100, if moves { "?" } else { "=" })
}

/// Speaks at a pseudo-terminal until `done`.
fn speak(pty: &Arc<Pty>, done: &Arc<AtomicBool>) -> std::thread::JoinHandle<()> {
    let (pty, done) = (Arc::clone(pty), Arc::clone(done));
    std::thread::spawn(move || {
        for i in 0.. {
            if done.load(Ordering::Relaxed) {
                return;
            }
            let _ = rustix::io::write(&pty.master, line(i).as_bytes());
            std::thread::sleep(Duration::from_millis(50));
        }
    })
}

fn run(args: &[&str]) -> Output {
    Command::new(TARECUP).args(args).stdin(std::process::Stdio::null()).output().expect("started")
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8_lossy(bytes).into_owned()
}

#[test]
fn a_port_is_understood_and_not_one_byte_is_written() {
    let (pty, done) = (Arc::new(Pty::new()), Arc::new(AtomicBool::new(false)));
    let speaker = speak(&pty, &done);
    let folder = tempfile::tempdir().expect("a folder");
    let config = folder.path().join("config.toml");
    std::fs::write(&config, "# ours\n[[bench]]\nname = \"north\"\n").expect("written");
    let port = pty.path.display().to_string();
    let out = run(&[
        "learn",
        &port,
        "--json",
        "--seconds",
        "40",
        "--write",
        "--name",
        "pan-7",
        "--bench",
        "north",
        "--config",
        config.to_str().expect("utf-8"),
    ]);
    done.store(true, Ordering::Relaxed);
    speaker.join().expect("spoken");
    assert_eq!(out.status.code(), Some(0), "{} {}", text(&out.stdout), text(&out.stderr));
    let answer: Value = serde_json::from_slice(&out.stdout).expect("one JSON object");
    assert_eq!(
        (answer["kind"].as_str(), answer["line"]["baud"].as_u64(), answer["line"]["frame"].as_str()),
        (Some("balance"), Some(9600), Some("8N1"))
    );
    let marks: Vec<Option<bool>> =
        answer["readings"].as_array().expect("readings").iter().map(|r| r["steady"].as_bool()).collect();
    assert!(marks.contains(&Some(true)) && marks.contains(&Some(false)) && !marks.contains(&None), "{answer}");
    assert_eq!(pty.written(), b"", "the instrument heard nothing");
    // Control: a program that does write is seen by the same look.
    rustix::io::write(&pty.slave, b"x").expect("written");
    assert_eq!(pty.written(), b"x");
    let written = std::fs::read_to_string(&config).expect("read");
    assert!(written.starts_with("# ours\n[[bench]]\nname = \"north\"\n") && written.contains(&port), "{written}");
    let check = run(&["check", "--config", config.to_str().expect("utf-8")]);
    assert_eq!(check.status.code(), Some(0), "{} {}", written, text(&check.stderr));
    assert!(text(&check.stdout).contains("learned-pan-7"));
}

#[test]
fn a_port_that_another_program_holds_is_named_with_it() {
    let pty = Pty::new();
    rustix::fs::flock(&pty.slave, FlockOperation::NonBlockingLockExclusive).expect("locked");
    let out = run(&["learn", &pty.path.display().to_string(), "--json"]);
    assert_eq!(out.status.code(), Some(2));
    let pid = std::process::id().to_string();
    assert!(text(&out.stderr).contains(&format!("(process {pid}) uses it")), "{}", text(&out.stderr));
    assert_eq!(pty.written(), b"");
}

#[test]
fn a_silent_port_is_given_up_in_words() {
    let pty = Pty::new();
    let out = run(&["learn", &pty.path.display().to_string(), "--json", "--seconds", "1"]);
    let answer: Value = serde_json::from_slice(&out.stdout).expect("one JSON object");
    assert_eq!((out.status.code(), answer["kind"].as_str()), (Some(1), Some("unknown")));
    assert!(answer["missing"][0].as_str().is_some_and(|m| m.contains("print key")), "{answer}");
    assert_eq!(pty.written(), b"");
}

fn capture(folder: &Path, name: &str, bytes: &[u8]) -> String {
    let path = folder.join(name);
    std::fs::write(&path, bytes).expect("written");
    path.display().to_string()
}

#[test]
fn captures_in_pieces_give_one_answer() {
    let folder = tempfile::tempdir().expect("a folder");
    let whole: String = (0..40).map(line).collect();
    let one = capture(folder.path(), "one", whole.as_bytes());
    let (a, b) = whole.as_bytes().split_at(whole.len() / 3 + 2);
    let (a, b) = (capture(folder.path(), "a", a), capture(folder.path(), "b", b));
    let (first, second) = (run(&["learn", &one, "--json"]), run(&["learn", &a, &b, "--json"]));
    assert_eq!(first.stdout, second.stdout);
    let answer: Value = serde_json::from_slice(&first.stdout).expect("one JSON object");
    let want: Vec<f64> = (0..40).map(|i| load(i).0 as f64 / 100.0).collect();
    let got: Vec<f64> = answer["readings"].as_array().expect("readings").iter().filter_map(|r| r["mass_g"].as_f64()).collect();
    assert_eq!(got, want);
    assert!(answer["line"]["baud"].is_null() && answer["profile"]["kind"] == "balance");
    let members: Vec<&str> = answer.as_object().expect("an object").keys().map(String::as_str).collect();
    for member in ["kind", "profile", "line", "readings", "confidence", "missing"] {
        assert!(members.contains(&member), "{member}");
    }
}

#[test]
fn what_is_missing_is_said_and_wrong_input_is_told() {
    let folder = tempfile::tempdir().expect("a folder");
    let bare = capture(folder.path(), "bare", b"0.00\r\n0.00\r\n12.34\r\n12.34\r\n");
    let out = run(&["learn", &bare]);
    assert_eq!(out.status.code(), Some(1));
    assert!(text(&out.stdout).contains("Missing: the lines name no unit"), "{}", text(&out.stdout));
    let out = run(&["learn", &bare, "--unit", "g", "--json"]);
    assert_eq!(out.status.code(), Some(0), "{}", text(&out.stdout));
    for args in [&["learn", "/nowhere/file"][..], &["learn", &bare, "--mass", "5 lb"], &["learn", "/dev/null"]] {
        assert_eq!(run(args).status.code(), Some(2), "{args:?}");
    }
}

#[test]
fn names_that_are_taken_are_refused_and_nothing_is_written() {
    let folder = tempfile::tempdir().expect("a folder");
    let one = capture(folder.path(), "one", (0..40).map(line).collect::<String>().as_bytes());
    let config = capture(folder.path(), "config.toml", b"[[bench]]\nname = \"north\"");
    let add = |name: &str, port: &str| run(&["learn", &one, "--write", "--config", &config, "--name", name, "--port", port]);
    let first = add("pan-1", "/dev/ttyS8");
    assert_eq!(first.status.code(), Some(0), "{}", text(&first.stderr));
    let kept = std::fs::read_to_string(&config).expect("read");
    assert!(kept.starts_with("[[bench]]\nname = \"north\"\n\n# Learned by `tarecup learn` from "), "{kept}");
    for (name, port, word) in [
        ("pan-1", "/dev/ttyS9", "already an instrument"),
        ("pan-2", "/dev/ttyS8", "already has the port"),
        ("pan 2", "/dev/ttyS9", "name"),
    ] {
        let out = add(name, port);
        assert_eq!(out.status.code(), Some(2), "{name}");
        assert!(text(&out.stderr).contains(word), "{}", text(&out.stderr));
        assert_eq!(std::fs::read_to_string(&config).expect("read"), kept);
    }
    assert_eq!(add("pan-2", "/dev/ttyS9").status.code(), Some(0));
    assert_eq!(run(&["check", "--config", &config]).status.code(), Some(0));
    let broken = capture(folder.path(), "broken.toml", b"nonsense = 1\n");
    let out = run(&["learn", &one, "--write", "--config", &broken]);
    assert_eq!(out.status.code(), Some(2));
    assert!(text(&out.stderr).contains("Nothing was written"), "{}", text(&out.stderr));
    assert_eq!(std::fs::read_dir(folder.path()).expect("listed").count(), 3, "nothing is left beside");
}
