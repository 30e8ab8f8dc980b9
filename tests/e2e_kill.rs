//! Killed with -9 at random moments of a day's work: after each restart the
//! operator repeats what was not confirmed, and everything is as if nothing had
//! happened. `TARECUP_SEED` repeats a run, `TARECUP_KILLS` makes it longer.

mod e2e_support;

use e2e_support::operator::{Cup, DROP, Dice, Operator, PORTS, Station, essence, limits_of};
use e2e_support::oracle::{Hearing, Kept, judge};
use e2e_support::*;
use serde_json::{Value, json};
use std::collections::{BTreeMap, BTreeSet};
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};
use tarecup::ledger::{InputKind, Reader, verify};
use tarecup::proof::prove;

/// A small specimen: E4's first two trials and a third, in containers of its own.
fn specimen(no: usize) -> Sheet {
    let c = |n: u32| format!("C{no}-{n}");
    sheet(
        &format!("K-{no}"),
        "d4318-multipoint",
        vec![
            liquid(&[28], &c(1), "50.94", "66.74", &["62.99"]),
            liquid(&[21], &c(2), "51.55", "67.56", &["63.53"]),
            liquid(&[15], &c(3), "51.78", "66.90", &["62.94"]),
        ],
        vec![slice(&c(4), "51.80", "67.50", &["65.04"]), slice(&c(5), "50.90", "65.50", &["63.26"])],
    )
}

fn cup_of(no: usize) -> Cup {
    if no % 2 == 1 { Cup::Numbered } else { Cup::Unnumbered }
}

fn station() -> Station {
    Station::new(&format!("[screen]\nenabled = false\n[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port()))
}

/// Starts and kills the service so many times; returns the times from start to answer.
fn killer(station: &Station, dice: &mut Dice, kills: u32, longest_ms: u64, over: &AtomicBool) -> Vec<Duration> {
    let mut up = Vec::new();
    station.start();
    wait_up(&station.state, PORTS);
    for _ in 0..kills {
        std::thread::sleep(Duration::from_millis(dice.below(longest_ms)));
        if over.load(Ordering::SeqCst) {
            break;
        }
        station.kill9();
        let began = Instant::now();
        station.start();
        // Now and then it is killed while it starts.
        if dice.below(5) == 0 {
            std::thread::sleep(Duration::from_millis(dice.below(120)));
            station.kill9();
            station.start();
        } else {
            until("the service answers again", PATIENCE, || status(&station.state).is_some());
            up.push(began.elapsed());
        }
    }
    up.sort();
    up
}

/// What numpy makes of a specimen, and what an undisturbed service does.
fn undisturbed() -> Value {
    let station = station();
    station.start();
    wait_up(&station.state, PORTS);
    // The first line after the opening of a port may be half a line, and is not used.
    std::thread::sleep(Duration::from_millis(300));
    let mut both = Vec::new();
    for no in [1, 2] {
        let sheet = specimen(no);
        let mut operator = Operator::at(&station, cup_of(no), true);
        operator.play(&sheet);
        assert_eq!((operator.repeated, operator.interrupted), (0, 0), "nothing disturbs: {}", station.log());
        let limits = limits_of(&operator.facts, &sheet.id);
        let found = differences(&limits, &judged(&[sheet])[0]);
        assert!(found.is_empty(), "{found:#?}");
        both.push(essence(&limits));
    }
    assert_eq!(both[0], both[1], "both benches agree");
    both.remove(0)
}

/// The stored record by itself: chain, numbers, and each line once.
fn record_is_sound(station: &Station, told: &[Value]) -> (u64, u64) {
    // Across every kill: documents follow from facts, and facts from what was heard.
    let proof = prove(&station.state, &[], true, &mut |_| ()).expect("it can be read");
    assert_eq!((proof.first_bad(), proof.redecided), (None, Some(vec![])));
    let report = verify(&station.state, None, &mut |_| ()).expect("it can be read");
    assert!(report.ok(), "{:?}", report.first_bad);
    let reader = Reader::open(&station.state).expect("it opens");
    let mut stored: Vec<Value> = Vec::new();
    loop {
        let page = reader.facts_after(stored.len() as u64, 500).expect("facts");
        if page.is_empty() {
            break;
        }
        stored.extend(page.iter().map(|f| serde_json::from_slice::<Value>(&f.body).expect("JSON")));
    }
    for (no, fact) in (1..).zip(&stored) {
        assert_eq!(fact["seq"], json!(no), "no number is missing or used twice");
    }
    assert!(stored.len() >= told.len(), "nothing told is lost");
    for (told, stored) in told.iter().zip(&stored) {
        assert_eq!(told, stored, "what was told is what is stored");
    }
    let (mut next, mut lines) = (1, BTreeMap::<String, u64>::new());
    loop {
        let page = reader.inputs_from(next, 1_000, None).expect("inputs");
        let Some(last) = page.last() else { break };
        for input in &page {
            assert_eq!(input.no, next, "inputs are numbered without a gap");
            next += 1;
            if matches!(input.kind, InputKind::Line) {
                *lines.entry(input.instrument.clone().unwrap_or_default()).or_default() += 1;
            }
        }
        assert_eq!(last.no + 1, next);
    }
    for (instrument, written) in station.lines.lock().expect("lines").iter() {
        let heard = lines.get(instrument).copied().unwrap_or(0);
        assert!(heard <= *written, "{instrument}: {heard} lines stored, {written} written");
    }
    let wrong = judge(&station.done.lock().expect("done"), &Kept::read(&station.state), None, Hearing::InOrder);
    assert!(wrong.is_empty(), "by the independent model: {wrong:#?}");
    let inputs: Vec<u64> = stored.iter().filter_map(|f| f["fact"]["taken"]["input"].as_u64()).collect();
    assert_eq!(inputs.iter().collect::<BTreeSet<_>>().len(), inputs.len(), "each line is one weighing at most");
    let runs: Vec<(Value, Value)> = stored
        .iter()
        .filter(|f| f["kind"] == "counted")
        .map(|f| (f["fact"]["cup"].clone(), f["fact"]["run"]["first_input"].clone()))
        .collect();
    for (no, run) in runs.iter().enumerate() {
        assert!(!runs[..no].contains(run), "a run is told once: {run:?}");
    }
    (stored.len() as u64, next - 1)
}

/// What one operator did while the service was killed again and again.
#[derive(Default)]
struct Worked {
    specimens: usize,
    repeated: u64,
    interrupted: u64,
    silent: Vec<String>,
    facts: Vec<Value>,
}

/// Plays specimens at one bench until nobody kills any more; each must come out as wanted.
fn works(station: &Station, cup: Cup, first: usize, want: &Value, over: &AtomicBool) -> Worked {
    let mut worked = Worked::default();
    while worked.specimens == 0 || !over.load(Ordering::SeqCst) {
        let sheet = specimen(first + 2 * worked.specimens);
        let mut operator = Operator::at(station, cup, true);
        operator.facts = std::mem::take(&mut worked.facts);
        operator.play(&sheet);
        let limits = limits_of(&operator.facts, &sheet.id);
        assert_eq!(essence(&limits), *want, "{} after {} kills", sheet.id, station.kills.load(Ordering::SeqCst));
        worked.specimens += 1;
        worked.repeated += operator.repeated;
        worked.interrupted += operator.interrupted;
        worked.silent.append(&mut operator.silently_wrong);
        worked.facts = operator.facts;
    }
    worked
}

/// How often the service is killed.
fn kills_wanted() -> u32 {
    std::env::var("TARECUP_KILLS").ok().and_then(|n| n.parse().ok()).unwrap_or(50)
}

#[test]
fn killed_fifty_times_the_results_are_those_of_an_undisturbed_day() {
    let want = undisturbed();
    let mut dice = Dice::thrown("fifty kills");
    let station = station();
    let (never, over) = (AtomicBool::new(false), AtomicBool::new(false));
    let began = Instant::now();
    let (up, north, south) = std::thread::scope(|scope| {
        let killer = scope.spawn(|| killer(&station, &mut dice, kills_wanted(), 1_100, &never));
        until("the service is up", PATIENCE, || status(&station.state).is_some());
        let north = scope.spawn(|| works(&station, Cup::Numbered, 1, &want, &over));
        let south = scope.spawn(|| works(&station, Cup::Unnumbered, 2, &want, &over));
        let up = killer.join().expect("the killer");
        over.store(true, Ordering::SeqCst);
        (up, north.join().expect("north"), south.join().expect("south"))
    });
    let kills = station.kills.load(Ordering::SeqCst);
    assert!(kills >= u64::from(kills_wanted()), "{kills}");
    assert_eq!((north.silent.clone(), south.silent.clone()), (vec![], vec![]), "a count is never wrong without a word");
    assert_eq!(station.term(), Some(0), "{}", station.log());
    record_is_sound(&station, &north.facts);
    let (stored, inputs) = record_is_sound(&station, &south.facts);
    let (half, worst) = (up[up.len() / 2], up[up.len() - 1]);
    println!(
        "{kills} kills in {:.0} s: {} + {} specimens as undisturbed, {stored} facts and {inputs} inputs without a gap, {} steps repeated, \
         {} + {} runs marked interrupted; from start to answer {} ms (median), {} ms (worst)",
        began.elapsed().as_secs_f64(),
        north.specimens,
        south.specimens,
        north.repeated + south.repeated,
        north.interrupted,
        south.interrupted,
        half.as_millis(),
        worst.as_millis()
    );
    assert!(half < Duration::from_secs(2), "a restart takes {half:?}");
}

/// How many of a specimen's five determinations enter the result when nobody repeats what was not confirmed.
fn lazily(dice: &mut Dice) -> usize {
    let sheet = specimen(1);
    let station = station();
    let over = AtomicBool::new(false);
    let limits = std::thread::scope(|scope| {
        let killer = scope.spawn(|| killer(&station, dice, 60, 1_000, &over));
        until("the service is up", PATIENCE, || status(&station.state).is_some());
        let mut operator = Operator::at(&station, Cup::Numbered, false);
        operator.play(&sheet);
        over.store(true, Ordering::SeqCst);
        killer.join().expect("the killer");
        wait_up(&station.state, PORTS);
        until("the facts can be read", PATIENCE, || operator.look());
        limits_of(&operator.facts, &sheet.id)
    });
    let used = limits["trials"].as_array().into_iter().flatten().filter(|t| t["used"] == true).count();
    println!("{} kills, {used} of 5 determinations without repeating", station.kills.load(Ordering::SeqCst));
    used
}

/// Control: who does not repeat what was not confirmed ends with a specimen that lacks trials.
#[test]
fn an_operator_who_repeats_nothing_ends_with_missing_trials() {
    let mut dice = Dice::thrown("lazy operator");
    // Once in a long while no kill hits a weighing.
    assert!((0..3).any(|_| lazily(&mut dice) < 5), "kills must show where nobody repeats");
}

/// The counts that a run led to, waiting until nothing more can come of it.
fn counts_of_run(station: &Station, after: u64) -> Vec<Value> {
    let counted = || -> Vec<Value> {
        let facts = facts_after(&station.state, after).unwrap_or_default();
        facts.into_iter().filter(|f| f["kind"] == "counted").collect()
    };
    wait_up(&station.state, PORTS);
    let start = Instant::now();
    while counted().is_empty() && start.elapsed() < Duration::from_secs(4) {
        std::thread::sleep(Duration::from_millis(10));
    }
    std::thread::sleep(Duration::from_millis(1_300));
    counted()
}

/// One run of the cup, and a kill in the middle of it; what it was told as.
fn one_run(station: &Station, cup: Cup, name: &str, drops: u32, kill_at: Option<Duration>) -> Vec<Value> {
    wait_up(&station.state, PORTS);
    std::thread::sleep(Duration::from_millis(260));
    let after = status(&station.state).and_then(|s| s["seq"].as_u64()).expect("a number");
    std::thread::scope(|scope| {
        scope.spawn(|| station.drops(name, cup, drops, DROP));
        if let Some(kill_at) = kill_at {
            std::thread::sleep(kill_at);
            station.kill9();
            station.start();
        }
    });
    counts_of_run(station, after)
}

/// Kills in mid-run. A numbered run is complete by its totals or marked; an
/// unnumbered one that lost drops is always marked: never silently short.
#[test]
fn a_count_across_the_downtime_is_complete_or_marked() {
    let mut dice = Dice::thrown("kills in mid-run");
    let station = station();
    station.start();
    wait_up(&station.state, PORTS);
    let (drops, mut marked, mut complete, mut nothing) = (24, 0, 0, 0);
    for round in 0..13 {
        let (cup, name) = if round % 6 == 0 { (Cup::Numbered, "cup-1") } else { (Cup::Unnumbered, "cup-2") };
        let kill_at = Duration::from_millis(60 + dice.below(u64::from(drops) * DROP.as_millis() as u64 - 120));
        let counts = one_run(&station, cup, name, drops, Some(kill_at));
        for fact in &counts {
            let (told, run) = (&fact["fact"]["drops"], &fact["fact"]["run"]);
            if run["interrupted"].is_string() {
                marked += 1;
            } else {
                let noticed = run["gaps"] != 0 || run["doubles"] != 0;
                assert!(told == drops || noticed, "killed after {kill_at:?}: {drops} fell, told without a word as {told}: {run}");
                assert_eq!(
                    cup,
                    Cup::Numbered,
                    "killed after {kill_at:?} in mid-run, an unnumbered run cannot be known to be whole: {run}"
                );
                assert_eq!(told, drops, "totals cover what was missed");
                complete += 1;
            }
        }
        nothing += usize::from(counts.is_empty());
    }
    // Control: without a kill the same run is whole and carries no mark; tried again should this machine have stood still.
    let whole = |_| {
        let counts = one_run(&station, Cup::Unnumbered, "cup-2", drops, None);
        counts.len() == 1 && counts[0]["fact"]["drops"] == drops && counts[0]["fact"]["run"]["interrupted"].is_null()
    };
    assert!((0..3).any(whole), "a run that nobody disturbs is whole");
    println!(
        "13 runs killed in the middle: {marked} marked interrupted, {complete} complete by their totals, {nothing} not heard at all"
    );
    assert!(marked >= 6, "{marked} marked");
    // Runs that no bench had in work are loose, and told all the same.
    let report = verify(&station.state, None, &mut |_| ()).expect("it can be read");
    assert!(report.ok(), "{:?}", report.first_bad);
}
