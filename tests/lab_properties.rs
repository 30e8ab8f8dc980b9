//! Whatever comes in, in whatever order: nothing panics, nothing is lost, facts alone make the state (the bench of
//! these tests compares that after every input), and documents carry it over a restart.

mod lab_bench;

use lab_bench::*;
use proptest::prelude::*;
use std::collections::{BTreeMap, BTreeSet};
use tarecup_core::fact::Fact;
use tarecup_core::lab::entities::{LooseWhat, TrialRecord};
use tarecup_core::lab::{Input, Lab, Setup, Wish};
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{CountRun, MassTaken};
use tarecup_core::signal::Basis;
use tarecup_core::stamp::{Boot, Stamp};

/// So many cases, or so many times more as the environment says for a longer search.
fn cases(n: u32) -> u32 {
    let times = std::env::var("TARECUP_SEARCH").ok().and_then(|t| t.parse::<u32>().ok());
    n.saturating_mul(times.unwrap_or(1))
}

/// What may happen, sensible or not.
#[derive(Clone, Debug)]
enum Op {
    Code(usize, usize),
    Mass { pan: usize, ug: i64, printed: bool, basis: Basis },
    Lift(usize),
    Count { cup: usize, drops: u32, told_again: bool },
    Ask(usize, u64, usize, usize),
    Wait(i64),
    Jump(Stamp),
    Due,
    Stop,
}

const CODES: [&str; 17] = [
    "C1",
    "C2",
    "C3",
    "C4",
    "S-1",
    "S-2",
    "+plastic",
    "+liquid",
    "+natural",
    "+undo",
    "+new-paste",
    "+nothing",
    "+by-AB",
    "+oven-in",
    "+oven-out",
    "+no-plastic-limit",
    "a b\u{7}",
];
const ROLES: [&str; 9] = ["tare", "tare_check", "tare_with_lid", "wet", "repeat", "grown", "dry", "further_dry", "emptied"];

fn basis() -> impl Strategy<Value = Basis> {
    prop_oneof![6 => Just(Basis::Unmarked), 1 => Just(Basis::Net), 1 => Just(Basis::Gross)]
}

fn grams() -> impl Strategy<Value = i64> {
    // Few values, so that masses are near each other: empty, dried, wet, wetter; and nonsense.
    let usual = (prop::sample::select(vec![20, 28, 30, 36, 38]), -3i64..=3).prop_map(|(g, c)| g * 1_000_000 + c * 20_000);
    prop_oneof![12 => usual, 1 => prop::sample::select(vec![0, -20_000_000, i64::MAX, i64::MIN, 1])]
}

fn op() -> impl Strategy<Value = Op> {
    let stamp = (any::<i64>(), any::<i64>(), 0u32..4).prop_map(|(utc_us, mono_us, b)| Stamp { utc_us, mono_us, boot: Boot(b) });
    prop_oneof![
        8 => (0usize..2, 0..CODES.len()).prop_map(|(s, c)| Op::Code(s, c)),
        8 => (0usize..2, grams(), prop::bool::weighted(0.3), basis())
            .prop_map(|(pan, ug, printed, basis)| Op::Mass { pan, ug, printed, basis }),
        4 => (0usize..2).prop_map(Op::Lift),
        4 => (0usize..2, 0u32..60, prop::bool::weighted(0.2)).prop_map(|(cup, drops, told_again)| Op::Count { cup, drops, told_again }),
        10 => (0usize..30, 0u64..60, 0usize..5, 0..ROLES.len()).prop_map(|(a, s, c, r)| Op::Ask(a, s, c, r)),
        3 => prop::sample::select(vec![SECOND, 12 * SECOND, 6 * MINUTE, 20 * MINUTE, 3 * HOUR, 16 * HOUR, -HOUR]).prop_map(Op::Wait),
        1 => stamp.prop_map(Op::Jump),
        1 => Just(Op::Due),
        1 => Just(Op::Stop),
    ]
}

fn ask_text(play: &Play, (kind, seq, c, r): (usize, u64, usize, usize)) -> String {
    // Mostly numbers that exist.
    let seq = if seq > 50 { seq * 1_000 } else { seq % (play.facts.len() as u64 + 1) };
    let bench = ["north", "south", "north", "south", "nowhere"][c];
    let specimen = ["S-1", "S-2", "S-1", "S-2", "S-9"][c];
    let (container, role) = (["C1", "C2", "C3", "C4", "C9"][c], ROLES[r]);
    let trial = ["liquid", "thread", "natural"][r % 3];
    let mass = ["21.43", "38.2", "33,39", "-4", "x", "0", "20", "30", "99999999"][r];
    let utc = play.now.plus_us(-HOUR).rfc3339();
    let (who, at) = (r#""who":"AB","why":"seen""#, format!(r#""bench":"{bench}""#));
    match kind {
        0..=3 => format!(r#"{{"ask":"tie","weighing":{seq},{at},"container":"{container}","role":"{role}",{who}}}"#),
        4 | 5 => format!(r#"{{"ask":"say_role",{at},"container":"{container}","role":"{role}",{who}}}"#),
        6 | 7 => format!(r#"{{"ask":"tie_count","count":{seq},{at},"specimen":"{specimen}",{who}}}"#),
        8 | 9 => format!(r#"{{"ask":"set_aside","what":{seq},{who}}}"#),
        10 => format!(r#"{{"ask":"set_aside_trial","specimen":"{specimen}","kind":"{trial}","no":{},{who}}}"#, r % 4),
        11 => format!(r#"{{"ask":"amend_mass","weighing":{seq},"mass_g":"{mass}",{who}}}"#),
        12 => format!(r#"{{"ask":"amend_drops","count":{seq},"drops":{},{who}}}"#, r * 100),
        13 => format!(r#"{{"ask":"type_mass",{at},"container":"{container}","mass_g":"{mass}","who":"AB"}}"#),
        14 => format!(r#"{{"ask":"type_drops",{at},"drops":{},"who":"AB"}}"#, r * 9),
        15 => format!(r#"{{"ask":"undo",{at}}}"#),
        16 => format!(r#"{{"ask":"into_oven","containers":["{container}","C1"]}}"#),
        17 => format!(r#"{{"ask":"out_of_oven","containers":["{container}"]}}"#),
        18 => format!(r#"{{"ask":"oven_off","from":"{utc}","to":"{}",{who}}}"#, play.now.plus_us(-MINUTE).rfc3339()),
        19 => format!(r#"{{"ask":"free_container","container":"{container}",{who}}}"#),
        20 => format!(
            r#"{{"ask":"intend",{at},"specimen":"{specimen}","intention":"{}"}}"#,
            ["liquid", "plastic", "natural"][r % 3]
        ),
        21 => format!(r#"{{"ask":"not_obtainable","specimen":"{specimen}","limit":"plastic","because":"crumbles"}}"#),
        22 => format!(r#"{{"ask":"register_container","container":"{container}","lid_g":"{mass}"}}"#),
        23 => format!(r#"{{"ask":"register_container","container":"{container}","tare_g":"{mass}","who":"AB"}}"#),
        24 | 25 => {
            let to = ["S-2", "S-1", "S-2", "S-1", "S-9"][c];
            format!(r#"{{"ask":"move_trial","specimen":"{specimen}","kind":"{trial}","no":{},"to":"{to}",{who}}}"#, r % 4)
        }
        26 => format!(r#"{{"ask":"explain","what":{seq},{who}}}"#),
        27 => format!(r#"{{"ask":"slid",{at}}}"#),
        28 => format!(r#"{{"ask":"groove_tore",{at}}}"#),
        _ => format!(r#"{{"ask":"review","specimen":"{specimen}","who":"CD"}}"#),
    }
}

fn input(play: &Play, op: &Op, line: u64) -> Option<Input> {
    let named = |kind: &str, n: usize| instrument(&format!("{kind}-{}", ["n", "s"][n]));
    Some(match op {
        Op::Code(scanner, code) => Input::Code { scanner: named("scan", *scanner), text: CODES[*code].into(), input: line },
        Op::Mass { pan, ug, printed, basis } => {
            let (mass, at) = (Mass::from_ug(*ug), play.now);
            let (step, span) = (Mass::from_ug(10_000), Mass::ZERO);
            let (first_input, readings, zero) = (line, 8, None);
            let taken = MassTaken {
                mass,
                step,
                basis: *basis,
                printed: *printed,
                input: line,
                first_input,
                readings,
                span,
                zero,
                at,
                trace: None,
            };
            Input::Mass { balance: named("pan", *pan), taken }
        }
        Op::Lift(pan) => Input::Unloaded { balance: named("pan", *pan), input: line },
        Op::Count { cup, drops, told_again } => {
            let runs = play.facts.iter().rev().filter_map(|r| match &r.fact {
                Fact::Counted(c) if c.cup.as_ref() == Some(&named("cup", *cup)) => c.run.clone(),
                _ => None,
            });
            let again = runs.clone().next().filter(|_| *told_again);
            let new = play.run(*drops, line, line);
            let run = again.map_or(new, |old| CountRun { drops: *drops, last_input: line, ..old });
            Input::Count { cup: named("cup", *cup), run }
        }
        Op::Ask(kind, seq, c, r) => Input::Ask(serde_json::from_str(&ask_text(play, (*kind, *seq, *c, *r))).unwrap()),
        Op::Due => Input::Due,
        Op::Stop => Input::Stopping,
        Op::Wait(_) | Op::Jump(_) => return None,
    })
}

fn session(setup: Setup) -> Play {
    let mut play = Play::new(setup);
    play.ask(r#"{"ask":"open_specimen","specimen":"S-1"}"#);
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    play.intend("north", "S-1", "liquid");
    play.intend("south", "S-2", "plastic");
    play
}

fn step(play: &mut Play, op: &Op, line: u64) {
    match op {
        Op::Wait(us) => {
            play.wait(*us);
        }
        Op::Jump(stamp) => play.now = *stamp,
        _ => {
            let input = input(play, op, line).unwrap();
            if let Err(refusal) = play.try_take(input) {
                assert!(refusal.0.len() > 10 && !refusal.0.chars().any(char::is_control), "{refusal:?}");
            }
        }
    }
}

/// Where every weighing is: in one place, unless a person set it aside.
fn nothing_is_lost(play: &Play) {
    let mut places: BTreeMap<u64, BTreeSet<String>> = BTreeMap::new();
    let mut put = |seq, place: String| {
        places.entry(seq).or_default().insert(place);
    };
    for c in play.lab.containers() {
        c.tares.iter().chain(&c.with_lid).for_each(|w| put(w.seq, format!("empty {}", c.id)));
    }
    for s in play.lab.specimens() {
        for t in &s.trials {
            let at = |what: &str| format!("{what} {:?} {} {}", t.kind, t.no, s.id);
            t.wets.iter().for_each(|w| put(w.seq, at("wet")));
            t.repeats.iter().for_each(|w| put(w.seq, at("repeat")));
            t.dries.iter().for_each(|d| put(d.weighing.seq, at("dry")));
            t.tare.iter().for_each(|w| put(w.seq, format!("empty {}", t.container)));
        }
        s.counts.iter().for_each(|c| put(c.seq, format!("count {}", s.id)));
    }
    play.lab.loose_things().for_each(|l| put(l.seq, "loose".into()));
    let aside = |seq: u64| play.facts.iter().any(|r| matches!(r.fact, Fact::SetAside { what, .. } if what == seq));
    let told_again = |seq: u64| play.facts.iter().any(|r| matches!(&r.fact, Fact::Counted(c) if c.replaces == Some(seq)));
    for r in &play.facts {
        let n = places.get(&r.seq).map_or(0, BTreeSet::len);
        match &r.fact {
            Fact::Weighed(_) => assert!(n == 1 || (n == 0 && aside(r.seq)), "weighing {} is in {n} places", r.seq),
            Fact::Counted(_) => assert!(n == 1 || (n == 0 && (aside(r.seq) || told_again(r.seq))), "count {}: {n}", r.seq),
            _ => assert_eq!(n, 0, "fact {} is neither", r.seq),
        }
    }
}

fn documents_agree(play: &Play) {
    let mut held = BTreeSet::new();
    for c in play.lab.containers() {
        let Some(h) = &c.holding else { continue };
        let trial = play.lab.specimen(&h.specimen).and_then(|s| s.trial(h.trial)).expect("what a container holds exists");
        assert_eq!(trial.container, c.id, "and is its own");
        assert!(held.insert((h.specimen.clone(), h.trial)), "two containers hold one determination");
    }
    for s in play.lab.specimens() {
        let numbers: BTreeSet<_> = s.trials.iter().map(TrialRecord::reference).collect();
        assert_eq!(numbers.len(), s.trials.len(), "numbers are unique");
        let slices: Vec<u64> = s.trials.iter().flat_map(|t| t.counts.clone()).collect();
        assert_eq!(slices.iter().collect::<BTreeSet<_>>().len(), slices.len(), "a count has one slice");
        assert!(slices.iter().all(|&c| s.count(c).is_some()));
        assert!(s.trials.iter().all(|t| !t.wets.is_empty()));
        for dry in s.trials.iter().flat_map(|t| &t.dries) {
            assert!(dry.oven_hours >= 0.0 && dry.since_previous_hours.is_none_or(|h| h >= 0.0), "{dry:?}");
        }
    }
    for b in play.lab.benches() {
        let Some(owed) = &b.owed else { continue };
        let s = play.lab.specimen(&owed.specimen).unwrap();
        assert!(!owed.counts.is_empty());
        for c in owed.counts.iter().map(|&c| s.count(c).expect("an owed count exists")) {
            assert!(c.superseded.is_none() && c.set_aside.is_none() && !s.trials.iter().any(|t| t.counts.contains(&c.seq)));
        }
    }
}

fn setups() -> impl Strategy<Value = Setup> {
    prop::sample::select(vec![0, 1, 2]).prop_map(|n| match n {
        0 => two_benches(),
        1 => shared_balance(),
        _ => shared_balance_and_scanner(),
    })
}

proptest! {
    #![proptest_config(ProptestConfig { cases: cases(80), failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn any_inputs_keep_the_laboratory_whole(setup in setups(), ops in prop::collection::vec(op(), 1..60)) {
        let mut play = session(setup);
        for (line, op) in (100..).zip(&ops) {
            step(&mut play, op, line);
            nothing_is_lost(&play);
            documents_agree(&play);
            play.wait(SECOND);
        }
        let now = play.now;
        let _ = play.try_take(Input::Due);
        prop_assert_ne!(play.lab.due_in_us(&now), Some(0), "what was due has been said");
        for bench in ["north", "south"] {
            prop_assert!(!play.next_step(bench).is_empty());
            let advice = play.lab.advice(&bench_name(bench), &Wish { paste: Some(Mass::from_ug(1)), ..Wish::default() });
            prop_assert!(advice.is_none_or(|a| a.says.iter().all(|s| !s.contains("NaN") && !s.contains("inf "))));
        }
        prop_assert!(play.lab.shelf(&now).iter().all(|s| s.hours >= 0.0 && !s.next.is_empty()));
    }

    #[test]
    fn documents_carry_everything_over_a_restart(ops in prop::collection::vec(op(), 1..60), cut in 0usize..60, again in 0usize..60) {
        let (mut straight, mut restarted) = (session(two_benches()), session(two_benches()));
        for (n, op) in ops.iter().enumerate() {
            if n == cut || n == again {
                let new = reloaded(&restarted.lab);
                restarted.lab = new;
            }
            step(&mut straight, op, n as u64 + 100);
            step(&mut restarted, op, n as u64 + 100);
        }
        prop_assert_eq!(&straight.facts, &restarted.facts);
        prop_assert_eq!(documents(&straight.lab), documents(&restarted.lab));
    }
}

/// One specimen's day as blocks that are done in one go; masses differ from specimen to specimen.
fn blocks(n: i64) -> Vec<Vec<Step>> {
    let c = |k: usize| format!("K{n}{k}");
    let tare = |k: i64| 20_000_000 + 110_000 * k + 70_000 * n;
    let wet = |k: i64| tare(k) + 14_000_000 + 900_000 * k;
    let dry = |k: i64| tare(k) + 10_000_000 + (90_000 + 8_000 * n) * k;
    let drops = [34, 28, 23, 17];
    let weigh = |k: usize, ug: i64| Step::Weigh(c(k), Mass::from_ug(ug).to_string());
    let mut all: Vec<Vec<Step>> = (0..6).map(|k| vec![weigh(k, tare(k as i64))]).collect();
    for (k, drops) in drops.into_iter().enumerate() {
        all.push(vec![Step::Intend("liquid"), Step::Count(drops), weigh(k, wet(k as i64))]);
    }
    for k in 4..6 {
        all.push(vec![
            Step::Intend("plastic"),
            weigh(k, wet(k as i64) - 4_000_000),
            weigh(k, wet(k as i64) - 2_000_000),
            Step::Nothing,
        ]);
    }
    all.push(vec![Step::Oven((0..6).map(c).collect())]);
    all.extend((0..6).map(|k| vec![Step::Overnight, weigh(k, dry(k as i64) - if k < 4 { 0 } else { 1_000_000 })]));
    all
}

#[derive(Clone, Debug)]
enum Step {
    Intend(&'static str),
    Nothing,
    Count(u32),
    Weigh(String, String),
    Oven(Vec<String>),
    /// Not before the oven has had its night.
    Overnight,
}

fn do_step(play: &mut Play, specimen: &str, south: bool, step: &Step, morning: &Stamp) {
    let (bench, which) = if south { ("south", "s") } else { ("north", "n") };
    match step {
        Step::Intend(what) => play.intend(bench, specimen, what),
        Step::Nothing => drop(play.ask(&format!(r#"{{"ask":"intend_nothing","bench":"{bench}"}}"#))),
        Step::Count(drops) => {
            play.count_at(&format!("cup-{which}"), *drops);
        }
        Step::Weigh(container, mass) => {
            play.weigh_at(which, container, mass);
        }
        Step::Oven(all) => play.oven("into_oven", &all.iter().map(String::as_str).collect::<Vec<_>>()),
        Step::Overnight if play.now.utc_us < morning.utc_us => play.now = *morning,
        Step::Overnight => (),
    }
    play.wait(10 * SECOND);
}

/// Limits and determinations as they do not depend on when things were done.
fn result(play: &Play, id: &str) -> serde_json::Value {
    let mut limits = serde_json::to_value(play.specimen(id).limits.as_ref().unwrap()).unwrap();
    limits["trials"].as_array_mut().unwrap().iter_mut().for_each(|t| {
        for name in ["at", "balance", "cup", "rate_per_s", "water_u"] {
            t.as_object_mut().unwrap().remove(name);
        }
    });
    // What was finished before, and which balance weighed what, is in the uncertainties on purpose.
    for limit in ["liquid_limit", "plastic_limit", "plasticity_index"] {
        for name in ["u", "interval_95", "u_from"] {
            limits[limit].as_object_mut().unwrap().remove(name);
        }
    }
    limits["checks"] = serde_json::Value::Null;
    limits
}

fn played(order: &[(usize, bool)]) -> Vec<serde_json::Value> {
    let mut play = Play::new(two_benches());
    let morning = play.now.plus_us(30 * HOUR);
    let mut queues: Vec<_> = (0..3).map(|n| blocks(n).into_iter()).collect();
    let id = |n: usize| format!("S-{n}");
    (0..3).for_each(|n| drop(play.ask(&format!(r#"{{"ask":"open_specimen","specimen":"{}"}}"#, id(n)))));
    // Two passes: nobody weighs dry before everything has been in the oven.
    let rest = (0..3).flat_map(|n| std::iter::repeat_n((n, false), 19));
    for dry in [false, true] {
        for (n, south) in order.iter().copied().chain(rest.clone()) {
            let next = queues[n].as_slice().first().cloned();
            let Some(block) = next.filter(|b| dry || !matches!(b[0], Step::Overnight)) else { continue };
            queues[n].next();
            block.iter().for_each(|s| do_step(&mut play, &id(n), south, s, &morning));
        }
    }
    (0..3).map(|n| result(&play, &id(n))).collect()
}

proptest! {
    #![proptest_config(ProptestConfig { cases: cases(10), failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn specimens_on_benches_in_any_order_give_the_results_of_one_after_the_other(
        order in prop::collection::vec((0usize..3, any::<bool>()), 0..60),
    ) {
        let alone = played(&[]);
        for one in &alone {
            prop_assert!(one["liquid_limit"]["value"].is_f64() && one["plastic_limit"]["value"].is_f64(), "{one}");
            prop_assert_eq!(one["trials"].as_array().unwrap().len(), 6);
        }
        prop_assert_eq!(played(&order), alone);
    }
}

/// What a container went through, written down beside the bench by somebody who knows what lies in it.
#[derive(Clone, Debug, Default, PartialEq)]
struct Notes {
    tares: Vec<i64>,
    /// Each use: wet masses, dry masses.
    uses: Vec<(Vec<i64>, Vec<i64>)>,
    full: bool,
    threads: bool,
    wet_at: i64,
}

/// One thing a sensible operator does with a container.
fn operate(play: &mut Play, notes: &mut Notes, name: &str, choice: u8, jitter: i64) {
    let tare = 20_000_000 + jitter;
    let weigh = |play: &mut Play, ug: i64| {
        play.weigh(name, &Mass::from_ug(ug).to_string());
    };
    let dried = notes.uses.last().is_some_and(|u| !u.1.is_empty());
    match choice {
        0 if !notes.full || dried => {
            weigh(play, tare);
            notes.tares.push(tare);
            notes.full = false;
        }
        1 | 2 if !notes.full => {
            let threads = choice == 2;
            play.intend("north", "S-1", if threads { "plastic" } else { "liquid" });
            if !threads {
                play.count(25);
            }
            weigh(play, 36_000_000 + jitter);
            notes.uses.push((vec![36_000_000 + jitter], vec![]));
            (notes.full, notes.threads, notes.wet_at) = (true, threads, play.now.utc_us);
            play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
        }
        3 if notes.full && notes.threads && !dried => {
            let wets = &mut notes.uses.last_mut().unwrap().0;
            let more = wets.last().unwrap() + 900_000;
            wets.push(more);
            weigh(play, more);
        }
        4 if notes.full => {
            play.oven("into_oven", &[name]);
            play.wait(16 * HOUR);
            let dry = 31_000_000;
            weigh(play, dry);
            notes.uses.last_mut().unwrap().1.push(dry);
        }
        // Hours later the laboratory would ask whether this is the dry mass.
        5 if notes.full && !dried && play.now.utc_us - notes.wet_at < 3 * HOUR => {
            let last = *notes.uses.last().unwrap().0.last().unwrap();
            weigh(play, last + jitter / 10);
        }
        6 if dried && notes.full => {
            let seq = play.last_weighing();
            weigh(play, tare);
            play.ask(r#"{"ask":"undo","bench":"north"}"#);
            assert!(play.last_weighing() > seq);
        }
        _ => {
            play.wait(MINUTE);
        }
    }
}

proptest! {
    #![proptest_config(ProptestConfig { cases: cases(40), failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn a_sensible_operators_notes_agree_with_the_laboratory(
        acts in prop::collection::vec((0usize..3, 0u8..7, -20_000i64..20_000), 1..40),
    ) {
        let mut play = Play::open();
        let names = ["C1", "C2", "C3"];
        let mut notes = vec![Notes::default(); 3];
        for (n, choice, jitter) in acts {
            // Rounded to what a balance prints, and first of all every container is weighed empty.
            let choice = if notes[n].tares.is_empty() { 0 } else { choice };
            operate(&mut play, &mut notes[n], names[n], choice, jitter / 100 * 100);
        }
        let loose: Vec<_> = play.lab.loose_things().map(|l| l.why.clone()).collect();
        prop_assert!(loose.is_empty(), "{:?}", loose);
        for (name, notes) in names.iter().zip(&notes) {
            let Some(c) = play.lab.container(&container_id(name)) else { continue };
            let tares: Vec<i64> = c.tares.iter().map(|w| w.mass.ug()).collect();
            let from = notes.tares.len().saturating_sub(20);
            prop_assert_eq!(&tares[..], &notes.tares[from..]);
            let uses: Vec<(Vec<i64>, Vec<i64>)> = play.specimen("S-1").trials.iter().filter(|t| t.container.as_str() == *name)
                .map(|t| (t.wets.iter().map(|w| w.mass.ug()).collect(), t.dries.iter().map(|d| d.weighing.mass.ug()).collect()))
                .collect();
            prop_assert_eq!(&uses, &notes.uses);
            prop_assert_eq!(c.holding.is_some(), notes.full);
        }
    }
}

#[test]
fn memory_stays_bounded_whatever_a_balance_or_counter_repeats() {
    let mut play = Lab::new(two_benches());
    let (now, mut seq) = (Stamp { utc_us: 0, mono_us: 0, boot: Boot(1) }, 1);
    let mut take = |lab: &mut Lab, input: Input, at: Stamp| {
        let outcome = lab.take(input, at, seq).unwrap();
        seq += outcome.facts.len() as u64;
    };
    let ask = |text: &str| Input::Ask(serde_json::from_str(text).unwrap());
    take(&mut play, ask(r#"{"ask":"open_specimen","specimen":"S-1"}"#), now);
    take(&mut play, ask(r#"{"ask":"intend","bench":"north","specimen":"S-1","intention":"liquid"}"#), now);
    let maker = Play::new(two_benches());
    for n in 0..3_000u64 {
        let at = now.plus_us(n as i64 * SECOND);
        let run = CountRun { at, began: at, ..maker.run(25, n * 2 + 1, n * 2 + 2) };
        take(&mut play, Input::Count { cup: instrument("cup-n"), run }, at);
        let (mass, step, basis, span) = (g("21.43"), Mass::from_ug(10_000), Basis::Unmarked, Mass::ZERO);
        let (printed, input, first_input, readings, zero) = (false, n, n, 8, None);
        let taken = MassTaken { mass, step, basis, printed, input, first_input, readings, span, zero, at, trace: None };
        take(&mut play, Input::Mass { balance: instrument("pan-s"), taken }, at);
        play.forget_finished();
    }
    assert!(play.loose_things().count() <= 1_000);
    let specimen = play.specimen(&specimen_id("S-1")).unwrap();
    assert!(specimen.counts.len() <= 300, "{}", specimen.counts.len());
    assert!(play.bench(&bench_name("north")).unwrap().owed.as_ref().unwrap().counts.len() <= 20);
    assert!(
        play.loose_things().any(|l| matches!(l.what, LooseWhat::Count(_)) && l.why.contains("does the counter count by itself"))
    );
}
