//! The binary, run as a person runs it, and the work it plays.

use std::io::Read;
use std::path::Path;
use std::process::{Command, Output, Stdio};
use std::sync::atomic::AtomicBool;
use std::time::{Duration, Instant};
use tarecup_simulators::balance::{Noise, Settings};
use tarecup_simulators::counter::{CupDialect, CupRun};
use tarecup_simulators::dialect::BalanceDialect;
use tarecup_simulators::play::{Job, PlayedBench, Scene, Which, Work};
use tarecup_simulators::trouble::Trouble;

fn command(args: &[&str]) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_tarecup-simulators"));
    command.args(args).stdout(Stdio::piped()).stderr(Stdio::piped());
    command
}

fn run(args: &[&str]) -> Output {
    command(args).output().unwrap()
}

fn scene(dialect: BalanceDialect) -> Scene {
    Scene {
        balance: Settings::new(dialect, 2),
        noise: Noise::NONE,
        cup: CupDialect::RunningTotal,
        rate_per_s: 2.0,
        pause_us: 0,
        speed: 200.0,
        trouble: Trouble::default(),
    }
}

fn weigh(mass_ug: i64) -> Job {
    Job::Weigh { container: "C11".into(), mass_ug, says: "wet".into() }
}

#[test]
fn wrong_commands_say_what_to_try() {
    for (args, wants) in [
        (&["play"][..], &["--dir"][..]),
        (&["play", "--dir", "/tmp/x", "--dialect", "martian"], &["choose one of: signed-steady"]),
        (&["play", "--dir", "/tmp/x", "--cup", "martian"], &["choose one of: running-total"]),
        (&["play", "--dir", "/tmp/x", "--trouble", "gremlins"], &["choose from: noise, split"]),
        (&["play", "--dir", "/tmp/x", "--decimals", "9"], &["1..=4"]),
        (&["play", "--dir", "/tmp/x", "--rate", "0"], &["give a rate from 0.05 to 50"]),
        (&["play", "--dir", "/tmp/x", "--speed", "0"], &["give 0.01 to 1000"]),
        (&["play", "--dir", "/tmp/x", "--trouble-share", "7"], &["give 0 to 1"]),
        (&["play", "--dir", "/proc/none"], &["choose a folder that you may write to"]),
    ] {
        let output = run(args);
        assert!(!output.status.success(), "{args:?}");
        let text = String::from_utf8_lossy(&output.stderr).into_owned();
        assert!(wants.iter().all(|w| text.contains(w)), "{args:?}: {text}");
        assert!(!text.contains("panicked"), "{text}");
    }
    let help = String::from_utf8(run(&["play", "--help"]).stdout).unwrap();
    for option in ["--dir", "--seed", "--rate", "--dialect", "--trouble", "Example:"] {
        assert!(help.contains(option), "{option} is not in the help");
    }
}

#[test]
fn the_dialects_are_listed_with_what_they_say() {
    let text = String::from_utf8(run(&["dialects"]).stdout).unwrap();
    for want in [
        r"signed-steady   +   23.4571 g  S\r\n",
        r"framed-xor      \x02+0023.4571g S\x0317",
        r"print-line      G    23.4571 g\r\n",
        r"byte-per-drop   *  *  =2\r\n",
        r"plain-code      C11\r\n",
    ] {
        assert!(text.contains(want), "{want} is not in:\n{text}");
    }
}

#[test]
fn a_few_jobs_are_played_and_the_links_go_away() {
    let dir = tempfile::tempdir().unwrap();
    let path = dir.path().join("bench");
    let args = ["play", "--dir", path.to_str().unwrap(), "--speed", "500", "--jobs", "8", "--pause", "0", "--benches", "2"];
    let output = run(&args);
    let text = String::from_utf8(output.stdout).unwrap();
    assert!(output.status.success(), "{text} {}", String::from_utf8_lossy(&output.stderr));
    assert!(text.contains("pan-1  signed-steady, says +     23.45 g  S"), "{text}");
    assert_eq!(text.lines().filter(|l| l.starts_with("bench 2: ")).count(), 8, "{text}");
    assert!(text.contains(" drops"), "{text}");
    assert_eq!(std::fs::read_dir(&path).unwrap().count(), 0);
}

#[test]
fn a_reader_hears_the_stream_and_a_signal_takes_the_links_away() {
    let dir = tempfile::tempdir().unwrap();
    let mut child = command(&["play", "--dir", dir.path().to_str().unwrap(), "--quiet", "--exact"]).spawn().unwrap();
    let pan = dir.path().join("pan-1");
    let until = Instant::now() + Duration::from_secs(5);
    while !pan.exists() && Instant::now() < until {
        std::thread::sleep(Duration::from_millis(10));
    }
    let mut bytes = vec![0; 36];
    std::fs::File::open(&pan).unwrap().read_exact(&mut bytes).unwrap();
    assert_eq!(bytes, b"+      0.00 g  S\r\n".repeat(2));
    let id = nix::unistd::Pid::from_raw(child.id() as i32);
    nix::sys::signal::kill(id, nix::sys::signal::Signal::SIGTERM).unwrap();
    let status = child.wait().unwrap();
    assert!(status.success(), "{status}");
    assert_eq!(std::fs::read_dir(dir.path()).unwrap().count(), 0, "links were left");
}

#[test]
fn the_work_is_believable_and_repeats() {
    let jobs: Vec<Job> = Work::new(5, 10_000, 2.0).take(120).collect();
    assert_eq!(jobs, Work::new(5, 10_000, 2.0).take(120).collect::<Vec<_>>());
    assert_ne!(jobs, Work::new(6, 10_000, 2.0).take(120).collect::<Vec<_>>());
    let mass = |c: &str, what: &str, from: usize| {
        jobs[from..].iter().find_map(|j| match j {
            Job::Weigh { container, mass_ug, says } if container == c && says == what => Some(*mass_ug),
            _ => None,
        })
    };
    for (n, job) in jobs.iter().enumerate().take(100) {
        let Job::Weigh { container, mass_ug: tare, says } = job else { continue };
        assert_eq!(tare % 10_000, 0);
        if says == "empty" {
            let (wet, dry) = (mass(container, "wet", n).unwrap(), mass(container, "dry", n).unwrap());
            let water = (wet - dry) as f64 * 100.0 / (dry - tare) as f64;
            assert!((20.0..80.0).contains(&water), "{container}: {water} %");
        }
    }
}

#[test]
fn a_weighing_and_a_count_lie_in_order_on_the_timeline() {
    let dir = tempfile::tempdir().unwrap();
    let mut bench = PlayedBench::open(dir.path(), 1, scene(BalanceDialect::SignedSteady), 1).unwrap();
    let timeline = bench.timeline(&weigh(33_390_000)).unwrap();
    assert!(timeline.is_sorted_by_key(|(at, _, _)| *at));
    assert_eq!(timeline[0], (0, Which::Scanner, b"C11\r\n".to_vec()));
    let on_pan: Vec<u64> = timeline.iter().filter(|(_, _, b)| b == b"+     33.39 g  S\r\n").map(|t| t.0).collect();
    assert!(on_pan.len() >= 12 && on_pan.windows(2).all(|w| w[1] - w[0] == 100_000), "{on_pan:?}");
    let timeline = bench.timeline(&Job::Count(CupRun::clean(4, 2.0))).unwrap();
    let cup: Vec<&[u8]> = timeline.iter().filter(|t| t.1 == Which::Cup).map(|t| t.2.as_slice()).collect();
    assert_eq!(cup, [&b"DROP 1\r\n"[..], b"DROP 2\r\n", b"DROP 3\r\n", b"DROP 4\r\n", b"STOP 4\r\n"]);
    assert!(timeline.iter().any(|t| t.1 == Which::Balance), "the balance falls silent during a count");

    let mut keyed = PlayedBench::open(dir.path(), 2, scene(BalanceDialect::PrintLine), 1).unwrap();
    let pan: Vec<Vec<u8>> =
        keyed.timeline(&weigh(33_390_000)).unwrap().into_iter().filter(|t| t.1 == Which::Balance).map(|t| t.2).collect();
    assert_eq!(pan, [b"G      33.39 g\r\n".to_vec()]);
}

#[test]
fn an_asked_balance_answers_and_otherwise_keeps_silent() {
    use std::io::Write;
    let dir = tempfile::tempdir().unwrap();
    let mut bench = PlayedBench::open(dir.path(), 1, scene(BalanceDialect::AskedLong), 1).unwrap();
    let mut port = open(&bench.links()[1]);
    let stop = AtomicBool::new(false);
    bench.play(&weigh(33_390_000), &stop).unwrap();
    let mut buffer = [0u8; 256];
    assert!(port.read(&mut buffer).is_err(), "it spoke unasked");
    let mut reader = port.try_clone().unwrap();
    port.write_all(BalanceDialect::AskedLong.question().unwrap()).unwrap();
    bench.play(&weigh(33_390_000), &stop).unwrap();
    let n = reader.read(&mut buffer).unwrap();
    assert!(buffer[..n].starts_with(b"THE PAN HOLDS +      0.00 g AT REST\r\n"), "{}", buffer[..n].escape_ascii());
    assert_eq!(buffer[..n].iter().filter(|&&b| b == b'\n').count(), 1, "one answer to one question");
}

#[test]
fn a_bench_survives_all_its_troubles() {
    let dir = tempfile::tempdir().unwrap();
    let trouble = Trouble { noise: 0.1, split: 0.1, merge: 0.1, half: 0.1, silence: 0.01, unplug: 0.05 };
    let mut bench =
        PlayedBench::open(dir.path(), 1, Scene { trouble, speed: 1000.0, ..scene(BalanceDialect::FramedXor) }, 3).unwrap();
    let stop = AtomicBool::new(false);
    for job in Work::new(1, 10_000, 2.0).take(4) {
        bench.play(&job, &stop).unwrap();
    }
    let began = Instant::now();
    stop.store(true, std::sync::atomic::Ordering::Relaxed);
    bench.play(&weigh(33_390_000), &stop).unwrap();
    assert!(began.elapsed() < Duration::from_millis(500), "it did not stop");
}

/// Opens a link for reading without waiting, and for writing.
fn open(link: &Path) -> std::fs::File {
    use std::os::unix::fs::OpenOptionsExt;
    let flags = (nix::fcntl::OFlag::O_NOCTTY | nix::fcntl::OFlag::O_NONBLOCK).bits();
    std::fs::OpenOptions::new().read(true).write(true).custom_flags(flags).open(link).unwrap()
}
