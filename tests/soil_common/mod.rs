//! What the tests of the computing part share: shipped methods and small sheets.
#![allow(dead_code)] // each test uses its share of it

use tarecup_core::limits::{CheckRow, Limits};
use tarecup_core::method::Method;
use tarecup_core::names::SpecimenId;
use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::sheet::{Answer, Closure, DryWeighing, Kind, Sheet, Trial};

/// Shipped method files by name.
pub const METHODS: &[(&str, &str)] = &[
    ("d4318-multipoint", include_str!("../../config/methods/d4318-multipoint.toml")),
    ("d4318-one-point", include_str!("../../config/methods/d4318-one-point.toml")),
    ("t89-t90", include_str!("../../config/methods/t89-t90.toml")),
    ("iso17892-cup", include_str!("../../config/methods/iso17892-cup.toml")),
    ("is2720-cup", include_str!("../../config/methods/is2720-cup.toml")),
    ("bs1377-cone", include_str!("../../config/methods/bs1377-cone.toml")),
    ("iso17892-cone-80", include_str!("../../config/methods/iso17892-cone-80.toml")),
    ("iso17892-cone-60", include_str!("../../config/methods/iso17892-cone-60.toml")),
];

pub fn method(name: &str) -> Method {
    let (_, text) = METHODS.iter().find(|(n, _)| *n == name).expect("a shipped method");
    toml::from_str(text).unwrap_or_else(|e| panic!("{name}: {e}"))
}

pub fn g(text: &str) -> Mass {
    Mass::parse(text, MassUnit::Gram).expect("a mass")
}

pub fn sheet(trials: Vec<Trial>) -> Sheet {
    Sheet {
        specimen: SpecimenId::new("S-1").unwrap(),
        trials,
        liquid_not_obtainable: None,
        plastic_not_obtainable: None,
        passing_75um_percent: None,
        clay_percent: None,
        liquid_limit_oven_dried: None,
        answers: Vec::new(),
        reviewed: false,
        wanted: Vec::new(),
    }
}

pub fn trial(kind: Kind, no: u32) -> Trial {
    Trial {
        kind,
        no,
        closures: Vec::new(),
        penetrations: Vec::new(),
        container: None,
        tare: None,
        wet: None,
        dry: Vec::new(),
        water_percent: None,
        set_aside: None,
        typed: false,
        by: None,
        balance: None,
        readings: Default::default(),
        cup: None,
        at_utc_us: None,
        facts: Vec::new(),
    }
}

pub fn closure(drops: u32) -> Closure {
    Closure { drops, rate_per_s: Some(2.0), gaps: 0, doubles: 0, interrupted: None, typed: false, fact: None }
}

pub fn dry(mass: Mass) -> DryWeighing {
    DryWeighing { mass, oven_hours: None, since_previous_hours: None, oven_recorded: true, basis: None, fact: None }
}

pub fn with_masses(mut t: Trial, [tare, wet, dried]: [&str; 3]) -> Trial {
    (t.tare, t.wet, t.dry) = (Some(g(tare)), Some(g(wet)), vec![dry(g(dried))]);
    t
}

pub fn with_water(mut t: Trial, water: f64) -> Trial {
    t.water_percent = Some(water);
    t
}

pub fn liquid(no: u32, drops: u32) -> Trial {
    Trial { closures: vec![closure(drops)], ..trial(Kind::Liquid, no) }
}

/// Three liquid trials and two of threads that leave nothing to say: a line
/// that falls from 42 % by 12 % a decade about 25 drops, threads of 20 %.
pub fn good() -> Sheet {
    sheet(vec![
        with_masses(liquid(1, 31), ["20.00", "34.088", "30.00"]),
        with_masses(liquid(2, 24), ["20.00", "34.221", "30.00"]),
        with_masses(liquid(3, 17), ["20.00", "34.401", "30.00"]),
        with_masses(trial(Kind::Thread, 1), ["20.00", "32.00", "30.00"]),
        with_masses(trial(Kind::Thread, 2), ["21.00", "33.01", "31.00"]),
    ])
}

pub fn answer(check: &str, about: &str) -> Answer {
    Answer { check: check.into(), about: about.into(), says: "seen at the bench".into(), by: None }
}

/// The row of a check, by name and what it is about.
pub fn row<'a>(limits: &'a Limits, check: &str, about: &str) -> Option<&'a CheckRow> {
    limits.checks.iter().find(|c| c.check == check && c.about == about)
}
