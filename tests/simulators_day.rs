//! A day's description and its schedule: what is refused, and what holds for every schedule.

use proptest::prelude::*;
use std::collections::{BTreeMap, BTreeSet};
use tarecup_simulators::balance::Settings;
use tarecup_simulators::counter::CupDialect;
use tarecup_simulators::day::{Balance, Bench, Cup, Day, DayFault, Kind, Limit, Liquid, NotObtainable, Specimen, Weighed};
use tarecup_simulators::dialect::BalanceDialect;
use tarecup_simulators::schedule::{BACK_IN_OVEN_US, OVEN_US, PER_BENCH, Role, Step, What, rounds, schedule};

/// 2026-03-02T08:00:00Z.
const START: i64 = 1_772_438_400_000_000;

fn bench(name: &str, no: u32, balance: &str) -> Bench {
    Bench {
        name: name.into(),
        operator: format!("A{no}"),
        balance: Balance { name: balance.into(), settings: Settings::new(BalanceDialect::SignedSteady, 2) },
        cup: Cup { name: format!("cup-{no}"), dialect: CupDialect::RunningTotal },
        scanner: format!("scan-{no}"),
    }
}

fn weighed(container: &str, masses: [i64; 3]) -> Weighed {
    let [tare_ug, wet_ug, dry] = masses.map(|cg| cg * 10_000);
    Weighed { container: container.into(), tare_ug, wet_ug, dry_ug: vec![dry], set_aside: None }
}

fn liquid(drops: &[u32], container: &str, masses: [i64; 3]) -> Liquid {
    Liquid { drops: drops.to_vec(), rate_per_s: 2.0, slice: weighed(container, masses) }
}

fn specimen(id: &str, containers: [&str; 3]) -> Specimen {
    let [a, b, c] = containers;
    Specimen {
        id: id.into(),
        method: "d4318-multipoint".into(),
        liquid: vec![liquid(&[31], a, [2143, 3822, 3339]), liquid(&[24, 25], b, [2088, 3611, 3163])],
        plastic: vec![weighed(c, [2088, 2931, 2780])],
        ..Specimen::default()
    }
}

fn day(specimens: Vec<Specimen>) -> Day {
    let benches = vec![bench("north", 1, "pan-1"), bench("south", 2, "pan-2")];
    Day { start_utc_us: START, benches, specimens }
}

/// Steps as short words, for reading.
fn words(steps: &[Step]) -> Vec<String> {
    let word = |s: &Step| match &s.what {
        What::Ask(ask) => ask["ask"].as_str().unwrap().to_string(),
        What::Weigh { container, role, .. } => format!("{container} {}", role.word()),
        What::Count(run) => format!("{} drops", run.drops),
        What::Leap => s.says.clone(),
    };
    steps.iter().map(word).collect()
}

#[test]
fn one_specimen_is_played_in_the_order_of_the_bench() {
    let mut only = specimen("S-101", ["C11", "C12", "C14"]);
    only.natural = vec![weighed("C15", [2000, 4000, 3500])];
    only.plastic[0].dry_ug.push(27_790_000);
    only.natural[0].set_aside = Some("spilt".into());
    only.liquid[0].slice.dry_ug.clear();
    only.liquid[0].slice.set_aside = Some("groove slipped".into());
    only.not_obtainable = vec![NotObtainable { limit: Limit::Plastic, because: "crumbles".into() }];
    only.clay_percent = Some(31.0);
    let steps = schedule(&day(vec![only])).unwrap();
    assert_eq!(
        words(&steps),
        [
            "sign_in",
            "open_specimen",
            "C11 tare",
            "C12 tare",
            "C14 tare",
            "C15 tare",
            "intend",
            "31 drops",
            "C11 wet",
            "set_aside_trial",
            "24 drops",
            "25 drops",
            "C12 wet",
            "intend",
            "C14 wet",
            "intend",
            "C15 wet",
            "intend_nothing",
            "not_obtainable",
            "into_oven",
            "the oven is leapt over",
            "sign_in",
            "out_of_oven",
            "containers cool with the lid on",
            "C12 dry",
            "C14 dry",
            "C15 dry",
            "set_aside_trial",
            "into_oven",
            "the oven is leapt over",
            "out_of_oven",
            "containers cool with the lid on",
            "C14 dry",
            "the next lot is fetched",
        ]
    );
    let asks: Vec<String> =
        steps.iter().filter_map(|s| if let What::Ask(ask) = &s.what { Some(ask.to_string()) } else { None }).collect();
    for want in [
        r#"{"ask":"sign_in","bench":"north","operator":"A1"}"#,
        r#"{"ask":"open_specimen","clay_percent":31.0,"method":"d4318-multipoint","specimen":"S-101"}"#,
        r#"{"ask":"intend","bench":"north","intention":"liquid","specimen":"S-101"}"#,
        r#"{"ask":"intend","bench":"north","intention":"plastic","specimen":"S-101"}"#,
        r#"{"ask":"intend","bench":"north","intention":"natural","specimen":"S-101"}"#,
        r#"{"ask":"intend_nothing","bench":"north"}"#,
        r#"{"ask":"set_aside_trial","kind":"liquid","no":1,"specimen":"S-101","who":"A1","why":"groove slipped"}"#,
        r#"{"ask":"set_aside_trial","kind":"natural","no":1,"specimen":"S-101","who":"A1","why":"spilt"}"#,
        r#"{"ask":"not_obtainable","because":"crumbles","limit":"plastic","specimen":"S-101","who":"A1"}"#,
        r#"{"ask":"into_oven","containers":["C12","C14","C15"]}"#,
        r#"{"ask":"into_oven","containers":["C14"]}"#,
        r#"{"ask":"out_of_oven","containers":["C14"]}"#,
    ] {
        assert!(asks.iter().any(|a| a == want), "{want} is missing from {asks:#?}");
    }
}

#[test]
fn benches_work_side_by_side_and_a_named_bench_is_kept() {
    let mut specimens: Vec<Specimen> = (0..4)
        .map(|i| {
            let names: Vec<String> = (0..3).map(|k| format!("C{}", i * 3 + k)).collect();
            specimen(&format!("S-{i}"), [&names[0], &names[1], &names[2]])
        })
        .collect();
    specimens[0].bench = Some("south".into());
    let steps = schedule(&day(specimens)).unwrap();
    let span = |bench: usize| {
        let at: Vec<i64> = steps.iter().filter(|s| s.bench == bench && s.specimen.is_some()).map(|s| s.at_utc_us).collect();
        (*at.first().unwrap(), *at.last().unwrap())
    };
    let (north, south) = (span(0), span(1));
    assert!(north.0 < south.1 && south.0 < north.1, "one after the other: {north:?} {south:?}");
    assert!(steps.iter().filter(|s| s.specimen.as_deref() == Some("S-0")).all(|s| s.bench == 1));
}

#[test]
fn what_cannot_be_played_is_refused_with_the_place_and_a_remedy() {
    type Break = fn(&mut Day);
    let cases: [(Break, &str); 20] = [
        (|d| d.start_utc_us = i64::MAX, "give a time from 1970"),
        (|d| d.start_utc_us = -1, "give a time from 1970"),
        (|d| d.benches.clear(), "give at least one"),
        (|d| d.benches[0].name = "no rth".into(), "bench 'no rth' cannot be a name"),
        (|d| d.benches[1].name = "north".into(), "bench 'north' occurs twice"),
        (|d| d.benches[1].scanner = "scan-1".into(), "scanner 'scan-1' occurs twice"),
        (|d| d.benches[1].cup.name = "pan-1".into(), "instrument 'pan-1' occurs twice"),
        (
            |d| {
                d.benches[1].balance.name = "pan-1".into();
                d.benches[1].balance.settings.decimals = 3;
            },
            "describe it alike",
        ),
        (|d| d.benches[0].balance.settings.interval_us = u64::MAX, "give 10000 to 5000000"),
        (|d| d.benches[0].balance.settings.dialect = BalanceDialect::AskedLong, "another dialect"),
        (|d| d.specimens[0].bench = Some("attic".into()), "name one of: north, south"),
        (|d| d.specimens[1].id = "S-1".into(), "specimen 'S-1' occurs twice"),
        (|d| d.specimens[0].plastic[0].container = "C11".into(), "uses container 'C11' twice"),
        (|d| d.specimens[0].plastic[0].container = "+plastic".into(), "container '+plastic' cannot be a name"),
        (|d| d.specimens[0].plastic[0].tare_ug = 0, "more than 0 g"),
        (|d| d.specimens[0].plastic[0].wet_ug = 900_000_000, "can weigh (620 g)"),
        (|d| d.specimens[0].plastic[0].dry_ug = vec![27_801_000], "27.801 g has more decimals than balance 'pan-1' shows (2)"),
        (|d| d.specimens[0].liquid[0].drops.clear(), "give the drops of at least one"),
        (|d| d.specimens[0].liquid[0].drops = vec![0], "a run of 0 drops"),
        (|d| d.specimens[0].liquid[1].rate_per_s = f64::NAN, "liquid trial 2: a cup cannot drop NaN"),
    ];
    let good = day(vec![specimen("S-1", ["C11", "C12", "C14"]), specimen("S-2", ["C11", "C12", "C14"])]);
    assert_eq!(good.check(), Ok(()), "control");
    for (spoil, want) in cases {
        let mut bad = good.clone();
        spoil(&mut bad);
        let fault = schedule(&bad).expect_err(want);
        assert!(fault.to_string().contains(want), "{fault} does not say {want}");
    }
    let many = day(vec![specimen("S-1", ["a", "b", "c"]); 5_001]);
    assert_eq!(many.check(), Err(DayFault::TooMany(5_001)));
}

#[test]
fn decimals_follow_from_the_masses() {
    let mut one = specimen("S-1", ["C11", "C12", "C14"]);
    assert_eq!(Day::decimals_needed(&[]), 1);
    assert_eq!(Day::decimals_needed(std::slice::from_ref(&one)), 2);
    one.plastic[0].dry_ug[0] += 100;
    assert_eq!(Day::decimals_needed(std::slice::from_ref(&one)), 4);
    one.plastic[0].dry_ug[0] += 1;
    assert_eq!(Day::decimals_needed(std::slice::from_ref(&one)), 6);
}

/// Any day: a few benches that may share a balance, specimens that draw on few containers.
fn any_day() -> impl Strategy<Value = Day> {
    let trial = (any::<prop::sample::Index>(), 1usize..=3, 0u8..6, 1i64..90_000, prop::collection::vec(1u32..60, 1..=3));
    let one = (prop::collection::vec((0u8..3, trial), 1..8), 0u8..4, any::<bool>());
    (prop::collection::vec(one, 0..24), 1usize..=3, any::<bool>(), 6usize..40).prop_map(|(specimens, benches, shared, pool)| {
        let benches: Vec<Bench> =
            (0..benches).map(|b| bench(&format!("b{b}"), b as u32, if shared { "pan" } else { ["p0", "p1", "p2"][b] })).collect();
        let specimens = specimens
            .into_iter()
            .enumerate()
            .map(|(i, (trials, fixed, not))| {
                let mut s = Specimen { id: format!("S{i}"), method: "m".into(), ..Specimen::default() };
                s.bench = benches.get(usize::from(fixed)).map(|b| b.name.clone());
                s.not_obtainable.extend(not.then(|| NotObtainable { limit: Limit::Liquid, because: "too sandy".into() }));
                let mut taken = BTreeSet::new();
                for (kind, (index, dries, aside, cg, drops)) in trials {
                    let container = format!("C{}", index.index(pool));
                    if !taken.insert(container.clone()) {
                        continue;
                    }
                    let mut w = weighed(&container, [cg.min(60_000), (cg + 400).min(61_000), 0]);
                    w.dry_ug = (0..dries as i64).map(|k| (cg + 300 - k).min(60_500) * 10_000).collect();
                    w.set_aside = (aside < 2).then(|| "slipped".into());
                    if aside == 1 {
                        w.dry_ug.clear();
                    }
                    match kind {
                        0 => s.liquid.push(Liquid { drops, rate_per_s: 2.0, slice: w }),
                        1 => s.plastic.push(w),
                        _ => s.natural.push(w),
                    }
                }
                s
            })
            .collect();
        Day { start_utc_us: START, benches, specimens }
    })
}

/// What a schedule must show: each weighing of the day, once.
fn weighings_of(day: &Day) -> Vec<(String, String, Role, i64)> {
    let mut all = Vec::new();
    for s in &day.specimens {
        for (_, _, w) in s.weighed() {
            let mut add = |role, ug| all.push((s.id.clone(), w.container.clone(), role, ug));
            add(Role::Tare, w.tare_ug);
            add(Role::Wet, w.wet_ug);
            w.dry_ug.iter().for_each(|&ug| add(Role::Dry, ug));
        }
    }
    all.sort();
    all
}

/// Breaks of the rules of a laboratory in a list of steps; none in a good schedule.
fn broken_rules(day: &Day, steps: &[Step]) -> Vec<String> {
    let mut broken = Vec::new();
    let mut until = vec![i64::MIN; day.benches.len()];
    let mut pans: BTreeMap<&str, i64> = BTreeMap::new();
    let mut user: BTreeMap<String, String> = BTreeMap::new();
    let mut last_dry: BTreeSet<(String, String)> = BTreeSet::new();
    let mut now = i64::MIN;
    for step in steps {
        if step.at_utc_us < now {
            broken.push(format!("time goes back at {}", step.says));
        }
        now = step.at_utc_us;
        if step.at_utc_us < until[step.bench] {
            broken.push(format!("bench {} is still busy at {}", step.bench, step.says));
        }
        until[step.bench] = step.at_utc_us + step.takes_us;
        let (What::Weigh { container, role, .. }, Some(specimen)) = (&step.what, &step.specimen) else { continue };
        let pan = pans.entry(&day.benches[step.bench].balance.name).or_insert(i64::MIN);
        if step.at_utc_us < *pan {
            broken.push(format!("the pan is still loaded at {}", step.says));
        }
        *pan = step.at_utc_us + step.takes_us;
        match (role, user.get(container)) {
            // Weighing it empty begins a use, which must not fall into another one.
            (Role::Tare, None) => {
                user.insert(container.clone(), specimen.clone());
            }
            (Role::Tare, Some(other)) if !last_dry.contains(&(other.clone(), container.clone())) => {
                broken.push(format!("{container} is still used by {other} at {}", step.says));
            }
            (Role::Tare, Some(_)) => {
                user.insert(container.clone(), specimen.clone());
            }
            (_, Some(other)) if other == specimen => {}
            _ => broken.push(format!("{container} is not {specimen}'s at {}", step.says)),
        }
        let left = steps.iter().filter(|s| s.at_utc_us > step.at_utc_us && s.specimen.as_ref() == Some(specimen));
        let again = |s: &Step| matches!(&s.what, What::Weigh { container: c, .. } if c == container);
        if !left.clone().any(again) {
            last_dry.insert((specimen.clone(), container.clone()));
        }
    }
    broken
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(150))]

    #[test]
    fn every_schedule_keeps_the_rules_of_the_laboratory(day in any_day()) {
        let steps = schedule(&day).unwrap();
        prop_assert_eq!(broken_rules(&day, &steps), Vec::<String>::new());
        let mut shown: Vec<(String, String, Role, i64)> = steps
            .iter()
            .filter_map(|s| match &s.what {
                What::Weigh { container, role, mass_ug, .. } => Some((s.specimen.clone()?, container.clone(), *role, *mass_ug)),
                _ => None,
            })
            .collect();
        shown.sort();
        prop_assert_eq!(shown, weighings_of(&day));
        let mut drops: Vec<u32> = steps.iter().filter_map(|s| if let What::Count(r) = &s.what { Some(r.drops) } else { None }).collect();
        let mut wanted: Vec<u32> = day.specimens.iter().flat_map(|s| s.liquid.iter().flat_map(|l| l.drops.clone())).collect();
        drops.sort_unstable();
        wanted.sort_unstable();
        prop_assert_eq!(drops, wanted);
        let asides = steps.iter().filter(|s| matches!(&s.what, What::Ask(a) if a["ask"] == "set_aside_trial")).count();
        prop_assert_eq!(asides, day.specimens.iter().flat_map(|s| s.weighed()).filter(|(_, _, w)| w.set_aside.is_some()).count());
        for round in rounds(&day) {
            prop_assert!(round.iter().all(|b| b.len() <= PER_BENCH));
        }
    }

    #[test]
    fn everything_dries_long_enough_between_its_oven_records(day in any_day()) {
        let steps = schedule(&day).unwrap();
        let mut inside: BTreeMap<String, i64> = BTreeMap::new();
        let mut dried: BTreeMap<String, Vec<i64>> = BTreeMap::new();
        for step in &steps {
            match &step.what {
                What::Ask(ask) if ask["ask"] == "into_oven" || ask["ask"] == "out_of_oven" => {
                    for container in ask["containers"].as_array().unwrap() {
                        let name = container.as_str().unwrap().to_string();
                        if ask["ask"] == "into_oven" {
                            prop_assert!(inside.insert(name, step.at_utc_us).is_none());
                        } else {
                            let since = inside.remove(&name).expect("taken out without having been put in");
                            dried.entry(name).or_default().push(step.at_utc_us - since);
                        }
                    }
                }
                What::Weigh { container, role: Role::Tare, .. } => {
                    dried.remove(container);
                }
                What::Weigh { container, role: Role::Dry, .. } => {
                    let times = &dried[container];
                    prop_assert!(!inside.contains_key(container), "{} is weighed in the oven", container);
                    prop_assert!(times[0] >= OVEN_US);
                    prop_assert!(times[1..].iter().all(|t| *t >= BACK_IN_OVEN_US));
                }
                _ => {}
            }
        }
        prop_assert!(inside.is_empty(), "left in the oven: {:?}", inside);
    }
}

#[test]
fn the_rules_notice_a_bad_schedule() {
    let good = day(vec![specimen("S-1", ["C11", "C12", "C14"]), specimen("S-2", ["C11", "C22", "C24"])]);
    let steps = schedule(&good).unwrap();
    assert!(broken_rules(&good, &steps).is_empty());
    let dry = steps.iter().position(|s| s.says.contains("C11 dry")).unwrap();
    let next = steps.iter().rposition(|s| s.says.contains("C11 tare")).unwrap();
    assert!(dry < next, "the second use comes after the first");

    let mut early = steps.clone();
    early[next].at_utc_us = steps[dry].at_utc_us - 1;
    early.sort_by_key(|s| s.at_utc_us);
    assert!(broken_rules(&good, &early).iter().any(|b| b.contains("C11 is still used by S-1")));
    let mut back = steps.clone();
    back[5].at_utc_us = 0;
    assert!(broken_rules(&good, &back).iter().any(|b| b.contains("time goes back")));
    let mut loaded = steps.clone();
    let wet = steps.iter().position(|s| s.says.contains("C12 wet")).unwrap();
    loaded[wet].takes_us = i64::MAX / 4;
    assert!(broken_rules(&good, &loaded).iter().any(|b| b.contains("still loaded")));
    assert_eq!(Kind::Thread.word(), "thread");
    assert_eq!(Kind::Thread.intention(), "plastic");
}
