//! How long a thousand specimens take, with every check and uncertainty:
//! `cargo run --release -p tarecup-core --example thousand_specimens`

use std::time::Instant;
use tarecup_core::evaluate::evaluate_with;
use tarecup_core::method::Method;
use tarecup_core::names::{ContainerId, InstrumentName, SpecimenId};
use tarecup_core::quantity::Mass;
use tarecup_core::sheet::{Closure, DryWeighing, Kind, Reading, Sheet, Trial};
use tarecup_core::soil::slopes::Slopes;
use tarecup_core::soil::uncertainty::{Balance, Laboratory, Pooled};

const METHOD: &str = include_str!("../../config/methods/d4318-multipoint.toml");

fn trial(kind: Kind, no: u32, drops: Option<u32>, water: f64) -> Trial {
    let mass = |g: f64| Some(Mass::from_ug((g * 1e6).round() as i64));
    let closure = |drops| Closure {
        drops,
        rate_per_s: Some(2.0),
        gaps: 0,
        doubles: 0,
        interrupted: None,
        typed: false,
        fact: Some(u64::from(no)),
    };
    let dry = DryWeighing {
        mass: Mass::from_ug(30_000_000),
        oven_hours: Some(16.0),
        since_previous_hours: None,
        oven_recorded: true,
        basis: None,
        fact: Some(u64::from(no) + 9),
    };
    let balance = InstrumentName::new("pan-1").ok();
    let reading = || Reading { balance: balance.clone(), step: Some(Mass::from_ug(10_000)), ..Reading::default() };
    Trial {
        kind,
        no,
        closures: drops.map(closure).into_iter().collect(),
        penetrations: Vec::new(),
        container: ContainerId::new(&format!("{kind:?}{no}")).ok(),
        tare: mass(20.0),
        wet: mass(30.0 + water / 10.0),
        dry: vec![dry],
        water_percent: None,
        set_aside: None,
        typed: false,
        by: None,
        balance: balance.clone(),
        readings: [reading(), reading(), reading()],
        cup: None,
        at_utc_us: Some(1_772_434_800_000_000),
        facts: vec![u64::from(no)],
    }
}

fn sheet(n: u32) -> Sheet {
    let at = 30.0 + f64::from(n % 60);
    let liquid = (1..).zip([33, 28, 23, 18]);
    let liquid = liquid.map(|(no, d)| {
        trial(Kind::Liquid, no, Some(d), at - 12.0 * (f64::from(d) / 25.0).log10() + f64::from((n * d) % 7) / 30.0)
    });
    let threads = (1..=3).map(|no| trial(Kind::Thread, no, None, at / 2.0 + f64::from(no) / 10.0));
    Sheet {
        wanted: Vec::new(),
        specimen: SpecimenId::new(&format!("S-{n}")).expect("a name"),
        trials: liquid.chain(threads).chain([trial(Kind::Natural, 1, None, at * 0.7)]).collect(),
        liquid_not_obtainable: None,
        plastic_not_obtainable: None,
        passing_75um_percent: Some(70.0),
        clay_percent: Some(30.0),
        liquid_limit_oven_dried: None,
        answers: Vec::new(),
        reviewed: false,
    }
}

fn main() {
    let method: Method = toml::from_str(METHOD).expect("the shipped method");
    let sheets: Vec<Sheet> = (0..1_000).map(sheet).collect();
    let laboratory = Laboratory {
        lines: Pooled { sum_sq: 1.2, df: 40 },
        threads: Pooled { sum_sq: 3.0, df: 40 },
        slopes: Slopes::default(),
        pairs: Slopes { n: 40, ..Slopes::default() },
        beside: Vec::new(),
        balance_rule: None,
        balances: [(InstrumentName::new("pan-1").expect("a name"), Balance::default())].into(),
    };
    let begin = Instant::now();
    let results: Vec<_> = sheets.iter().map(|s| evaluate_with(s, &method, &laboratory)).collect();
    let took = begin.elapsed();
    let checks: usize = results.iter().map(|r| r.checks.len()).sum();
    assert!(results.iter().all(|r| r.liquid_limit.as_ref().is_some_and(|l| l.u.is_some())));
    println!("{} specimens, {checks} checks spoke: {:.1} ms", results.len(), took.as_secs_f64() * 1e3);
}
