//! Groups and indices as they come out of `evaluate`.

mod soil_common;

use soil_common::{liquid, method, sheet, trial, with_water};
use tarecup_core::evaluate::evaluate;
use tarecup_core::limits::Limits;
use tarecup_core::sheet::{Kind, Sheet};

/// A soil with these limits, entered as water contents at 25 drops.
fn soil(ll: f64, pl: f64, change: impl FnOnce(&mut Sheet)) -> Limits {
    let mut s = sheet(vec![
        with_water(liquid(1, 25), ll),
        with_water(liquid(2, 25), ll),
        with_water(trial(Kind::Thread, 1), pl),
        with_water(trial(Kind::Thread, 2), pl),
    ]);
    change(&mut s);
    evaluate(&s, &method("d4318-one-point"))
}

fn m145(ll: f64, pl: f64, passing: f64) -> (Option<String>, Option<u32>) {
    let limits = soil(ll, pl, |s| s.passing_75um_percent = Some(passing));
    (limits.group_m145, limits.group_index)
}

/// AASHTO M 145, groups from memory, not checked against the text; group index: published check values.
#[test]
fn groups_of_m145_with_their_index() {
    let is = |found: (Option<String>, Option<u32>), group: &str, index: u32| {
        assert_eq!((found.0.as_deref(), found.1), (Some(group), Some(index)));
    };
    is(m145(52.0, 31.0, 72.0), "A-7-5", 16); // 15.89
    is(m145(38.0, 26.0, 58.0), "A-6", 5); // 5.23
    is(m145(41.0, 27.0, 64.0), "A-7-6", 8); // 7.905
    is(m145(45.0, 24.0, 48.0), "A-7-6", 7); // 6.555
    // Second term only: 0.01 · (30 − 15)(24 − 10) = 2.1; the whole formula would give less.
    is(m145(39.0, 15.0, 30.0), "A-2-6", 2);
    is(m145(30.0, 24.0, 34.0), "A-2-4", 0);
    is(m145(30.0, 25.0, 60.0), "A-4", 2); // 25 · 0.15 + 0.45 · (−5) = 1.5, half up
    assert_eq!(m145(30.0, 25.0, 20.0), (None, None), "the coarser sieves decide");
    assert_eq!(soil(52.0, 31.0, |_| ()).group_m145, None, "no grading, no group");
    assert_eq!(m145(52.0, 31.0, 120.0), (None, None));
}

#[test]
fn non_plastic_soil_has_groups_too() {
    let limits = soil(24.0, 25.0, |s| s.passing_75um_percent = Some(80.0));
    assert!(limits.plasticity_index.non_plastic);
    assert_eq!((limits.group.as_deref(), limits.group_m145.as_deref(), limits.group_index), (Some("ML"), Some("A-4"), Some(0)));
    assert_eq!(limits.group_en_iso_14688_2.as_deref(), Some("non-plastic"));
    let stated = soil(24.0, 25.0, |s| {
        s.trials.clear();
        s.plastic_not_obtainable = Some("crumbles".into());
        s.passing_75um_percent = Some(30.0);
    });
    assert_eq!((stated.group.as_deref(), stated.group_m145.as_deref(), stated.group_index), (Some("ML"), Some("A-2-4"), Some(0)));
}

/// EN ISO 14688-2: low below 35, intermediate to 50, high above; decided on the reported limit.
#[test]
fn plasticity_of_en_iso_14688() {
    for (ll, class) in [(34.4, "low"), (34.6, "intermediate"), (50.4, "intermediate"), (50.6, "high")] {
        assert_eq!(soil(ll, 20.0, |_| ()).group_en_iso_14688_2.as_deref(), Some(class), "{ll}");
    }
}

/// ASTM D2487, from memory, not checked against the text: organic below a ratio of 0.75.
#[test]
fn organic_by_the_oven_dried_limit() {
    let dried = |ll: f64, dried: f64| soil(ll, 25.0, |s| s.liquid_limit_oven_dried = Some(dried)).group;
    assert_eq!(dried(48.0, 35.0).as_deref(), Some("OL"));
    assert_eq!(dried(60.0, 40.0).as_deref(), Some("OH"));
    assert_eq!(dried(48.0, 37.0).as_deref(), Some("CL"));
    assert_eq!(dried(48.0, f64::NAN).as_deref(), Some("CL"));
}
