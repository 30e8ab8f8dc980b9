//! The service killed, or told that the disk is full or failing, at the n-th
//! system call of a kind in a short trial. Whatever the n: the trial comes out
//! whole, and by the oracle nothing is lost or doubled.
//!
//! `TARECUP_INJECTIONS` says how many calls of each kind are tried; `tests/hard`
//! goes on until a whole trial passes without coming to that call.

mod e2e_support;

use e2e_support::operator::{Cup, Operator, PORTS, Station, limits_of};
use e2e_support::oracle::{Hearing, Kept, judge};
use e2e_support::*;
use serde_json::Value;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};
use tarecup::ledger::verify;

/// What the service does to its disk and its network.
const CALLS: [&str; 7] = ["pwrite64", "fsync", "write", "sendto", "writev", "ftruncate", "fallocate"];

fn trial() -> Sheet {
    sheet("I-1", "d4318-multipoint", vec![liquid(&[6], "A1", "50.94", "66.74", &["62.99"])], vec![])
}

fn most() -> u32 {
    std::env::var("TARECUP_INJECTIONS").ok().and_then(|n| n.parse().ok()).unwrap_or(2)
}

/// How one trial went.
struct Went {
    kills: u64,
    /// It came to the call.
    hit: bool,
}

/// Plays the trial while `inject` holds for the first start of the service; a service that is gone is started again.
fn play(call: &str, inject: &str) -> Went {
    let station = Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port()));
    let traced = station.dir.path().join("traced");
    station.start_traced(&["-e", &format!("trace={call}"), "-e", &format!("inject={call}:{inject}")], &traced);
    let over = AtomicBool::new(false);
    let facts = std::thread::scope(|scope| {
        scope.spawn(|| {
            while !over.load(Ordering::SeqCst) {
                if station.has_died() {
                    station.kill9();
                    station.start();
                }
                std::thread::sleep(Duration::from_millis(5));
            }
        });
        let up = || std::panic::catch_unwind(std::panic::AssertUnwindSafe(|| wait_up(&station.state, PORTS)));
        if up().is_err() {
            over.store(true, Ordering::SeqCst);
            panic!("{call} {inject}: it does not come up: {:?}\n{}", status(&station.state), station.log());
        }
        let mut operator = Operator::at(&station, Cup::Numbered, true);
        operator.play(&trial());
        over.store(true, Ordering::SeqCst);
        operator.facts
    });
    let kills = station.kills.load(Ordering::SeqCst);
    let what = format!("{call} {inject}");
    whole(&limits_of(&facts, "I-1"), &what);
    assert_eq!(station.term(), Some(0), "{what}: {}", station.log());
    let hearing = if kills == 0 { Hearing::Every } else { Hearing::InOrder };
    let done = station.done.lock().expect("done").clone();
    // A port's first line after opening may be cut: under a tracer the operator may be there first.
    let wrong = judge(&done, &Kept::read(&station.state), None, hearing);
    assert!(wrong.is_empty(), "{what}: {wrong:#?}\n{}", station.log());
    let report = verify(&station.state, None, &mut |_| ()).expect("a report");
    assert!(report.ok(), "{what}: {:?}", report.first_bad);
    let hit = std::fs::read_to_string(&traced).is_ok_and(|t| t.contains("INJECTED")) || kills > 0;
    Went { kills, hit }
}

/// One determination, with every mass and the count that were played.
fn whole(limits: &Value, what: &str) {
    let trials = limits["trials"].as_array().cloned().unwrap_or_default();
    assert_eq!(trials.len(), 1, "{what}: {limits}");
    let t = &trials[0];
    let got = ["drops", "tare_g", "wet_g", "dry_g"].map(|m| t[m].as_f64().unwrap_or(f64::NAN));
    assert_eq!(got, [6.0, 50.94, 66.74, 62.99], "{what}: {t}");
}

/// Goes through the calls; how many trials were hit, and how many kills that made.
fn through(calls: &[&str], inject: impl Fn(u32) -> String) -> (u32, u64) {
    let began = Instant::now();
    let (mut hits, mut kills) = (0, 0);
    for call in calls {
        let mut here = 0;
        // The first calls come before there is anything to lose: with few tries, they are spread.
        let stride = match *call {
            _ if most() > 10 => 1,
            "pwrite64" => 40,
            _ => 4,
        };
        for n in 0..most() {
            let went = play(call, &inject(1 + n * stride));
            kills += went.kills;
            if !went.hit {
                break;
            }
            here += 1;
        }
        hits += here;
        println!("{call}: {here} trials hit");
    }
    println!("{hits} trials hit, {kills} kills, nothing lost, {:.0} s", began.elapsed().as_secs_f64());
    (hits, kills)
}

#[test]
fn killed_at_any_call_a_trial_comes_out_whole() {
    let (hits, kills) = through(&CALLS, |n| format!("signal=KILL:when={n}"));
    // Control: the kills did happen.
    assert!(hits >= 4 && kills >= 4, "{hits} hits, {kills} kills");
}

#[test]
fn a_disk_that_is_full_at_any_call_leaves_a_trial_whole() {
    let (hits, _) = through(&["pwrite64", "ftruncate", "fallocate"], |n| format!("error=ENOSPC:when={n}"));
    assert!(hits >= 2, "an error was injected: the control");
}

#[test]
fn a_disk_that_fails_at_any_call_leaves_a_trial_whole() {
    let (hits, _) = through(&["pwrite64", "fsync"], |n| format!("error=EIO:when={n}"));
    assert!(hits >= 2, "an error was injected: the control");
}
