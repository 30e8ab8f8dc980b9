//! Published sheets with the slips that such sheets show, and as they were
//! printed correctly: the first must raise the right word, the second no hold.
//!
//! Sheets E1 to E4: `tests/published/sheets.toml`, with their sources. E5: a published data sheet of the falling cone
//! after BS 1377-2. That published sheets hold such slips (a digit altered, masses left over from an old form,
//! columns exchanged, all drops equal, kilograms for grams): seven of twenty-one collected for this project did.

mod soil_common;

use serde::Deserialize;
use soil_common::{dry, g, liquid, method, sheet, trial, with_masses, with_water};
use tarecup_core::beside::{Beside, BesideTrial};
use tarecup_core::evaluate::{evaluate, evaluate_with};
use tarecup_core::limits::{Limits, Severity, State};
use tarecup_core::names::{ContainerId, SpecimenId};
use tarecup_core::sheet::{Kind, Penetration, Sheet};
use tarecup_core::soil::uncertainty::Laboratory;

#[derive(Deserialize)]
struct Sheets {
    sheet: Vec<Published>,
}

#[derive(Deserialize)]
struct Published {
    id: String,
    #[serde(default)]
    points: Vec<(u32, f64)>,
    #[serde(default)]
    liquid: Vec<(u32, String, String, String)>,
    #[serde(default)]
    thread: Vec<(String, String, String)>,
    #[serde(default)]
    thread_percent: Vec<f64>,
}

fn published(id: &str) -> Sheet {
    let all: Sheets = toml::from_str(include_str!("published/sheets.toml")).expect("sheets.toml");
    let p = all.sheet.into_iter().find(|s| s.id == id).expect("a published sheet");
    let points = (1..).zip(&p.points).map(|(no, (n, w))| with_water(liquid(no, *n), *w));
    let liquids = (1..).zip(&p.liquid).map(|(no, (n, t, w, d))| with_masses(liquid(no, *n), [t, w, d]));
    let threads = (1..).zip(&p.thread).map(|(no, (t, w, d))| with_masses(trial(Kind::Thread, no), [t, w, d]));
    let given = (1..).zip(&p.thread_percent).map(|(no, w)| with_water(trial(Kind::Thread, no), *w));
    sheet(points.chain(liquids).chain(threads).chain(given).collect())
}

fn cone() -> Sheet {
    let rows = [
        (15.9, ["6.91", "84.06", "64.07"]),
        (18.8, ["6.63", "66.40", "50.13"]),
        (21.4, ["6.62", "77.71", "58.27"]),
        (24.1, ["6.84", "77.86", "57.91"]),
    ];
    let one = |(no, (mm, masses)): (u32, (f64, [&str; 3]))| {
        let mut t = with_masses(trial(Kind::Cone, no), masses);
        t.penetrations = vec![Penetration { mm, typed: false, fact: None }];
        t
    };
    let threads = [["21.95", "35.61", "32.88"], ["21.74", "35.55", "32.75"]];
    let threads = (1..).zip(threads).map(|(no, m)| with_masses(trial(Kind::Thread, no), m));
    sheet((1..).zip(rows).map(one).chain(threads).collect())
}

fn after(id: &str, slip: impl FnOnce(&mut Sheet)) -> Limits {
    let mut s = published(id);
    slip(&mut s);
    evaluate(&s, &method("t89-t90"))
}

fn holds(limits: &Limits) -> Vec<&str> {
    limits.checks.iter().filter(|c| c.severity == Severity::Hold).map(|c| c.check.as_str()).collect()
}

fn says(limits: &Limits, check: &str) -> bool {
    limits.checks.iter().any(|c| c.check == check)
}

#[test]
fn correct_sheets_raise_no_hold() {
    for id in ["E1", "E2", "E3", "E4"] {
        let limits = after(id, |_| ());
        assert_eq!((holds(&limits), limits.state), (vec![], State::Complete), "{id}");
    }
    let limits = evaluate(&cone(), &method("bs1377-cone"));
    assert_eq!((holds(&limits), limits.state), (vec![], State::Complete));
}

/// Any two dry masses of the four trials of E3 and of the three of E4, put the wrong way round.
#[test]
fn two_dry_masses_exchanged_are_named_wherever_the_sheet_can_tell() {
    let mut told = 0;
    for (id, n) in [("E3", 4), ("E4", 3)] {
        for a in 0..n {
            for b in a + 1..n {
                let limits = after(id, |s| {
                    let (first, second) = (s.trials[a].dry.clone(), s.trials[b].dry.clone());
                    (s.trials[a].dry, s.trials[b].dry) = (second, first);
                });
                let about = format!("liquid {} and liquid {}", a + 1, b + 1);
                let named = limits.checks.iter().find(|c| c.check == "exchanged");
                if (id, a, b) == ("E4", 0, 2) {
                    // 62.99 and 62.94 g: the exchange moves a water content by half a percent, which nothing can tell.
                    continue;
                }
                assert!(!holds(&limits).is_empty() || says(&limits, "scatter"), "{id} {about}: {:?}", limits.checks);
                let named = named.map(|c| c.about.as_str());
                assert!(named.is_none_or(|n| n == about), "{id} {about}: {named:?}");
                told += usize::from(id == "E3" && named.is_some());
            }
        }
    }
    // Four trials leave two degrees of freedom: enough to say which two, but for trials 1 and 4, whose dry masses are alike.
    assert_eq!(told, 5);
}

#[test]
fn one_digit_altered_in_a_dry_mass_is_a_word_or_a_hold() {
    // 42.98 with its third digit altered, and its first: a slip in one of four trials.
    let slip = after("E3", |s| s.trials[2].dry = vec![dry(g("43.98"))]);
    assert!(says(&slip, "scatter"), "{:?}", slip.checks);
    let above = after("E3", |s| s.trials[2].dry = vec![dry(g("52.98"))]);
    assert!(holds(&above).contains(&"dry_above_wet"), "{:?}", above.checks);
    let thread = after("E4", |s| s.trials[3].dry = vec![dry(g("64.04"))]);
    assert!(says(&thread, "threads") || says(&thread, "threads_apart"), "{:?}", thread.checks);
}

#[test]
fn drops_reversed_hold_by_the_slope_and_by_name() {
    for id in ["E3", "E4"] {
        let limits = after(id, |s| {
            let n = s.trials.iter().filter(|t| t.kind == Kind::Liquid).count();
            let drops: Vec<_> = s.trials[..n].iter().map(|t| t.closures.clone()).collect();
            s.trials[..n].iter_mut().zip(drops.into_iter().rev()).for_each(|(t, c)| t.closures = c);
        });
        assert!(holds(&limits).contains(&"slope"), "{id}: {:?}", limits.checks);
        assert_eq!(limits.state, State::Provisional);
    }
}

#[test]
fn all_drops_equal_and_kilograms_for_grams_hold() {
    let equal = after("E3", |s| {
        let first = s.trials[0].closures.clone();
        s.trials[..4].iter_mut().for_each(|t| t.closures = first.clone());
    });
    assert!(holds(&equal).contains(&"same_drops"), "{:?}", equal.checks);
    let kilograms = after("E3", |s| s.trials[1].dry = vec![dry(g("0.04605"))]);
    assert!(holds(&kilograms).contains(&"dry_below_tare"), "{:?}", kilograms.checks);
    // All masses of the sheet: every ratio is right, and hardly any soil in it.
    let all = after("E3", |s| {
        for t in &mut s.trials {
            let thousandth = |m: tarecup_core::quantity::Mass| tarecup_core::quantity::Mass::from_ug(m.ug() / 1_000);
            (t.tare, t.wet) = (t.tare.map(thousandth), t.wet.map(thousandth));
            t.dry.iter_mut().for_each(|d| d.mass = thousandth(d.mass));
        }
    });
    assert!(says(&all, "display"), "{:?}", all.checks);
}

/// The third row of E4 still on the form of E3, in a sheet that was typed.
#[test]
fn masses_left_over_from_another_sheet_are_named() {
    let old = published("E4");
    let row = |(no, t): (u32, &tarecup_core::sheet::Trial)| BesideTrial {
        about: format!("liquid {no}"),
        container: ContainerId::new(&format!("A{no}")).unwrap(),
        masses: [t.tare, t.wet, t.dry.last().map(|d| d.mass)],
    };
    let other = Beside {
        specimen: SpecimenId::new("E4").unwrap(),
        trials: (1..).zip(&old.trials[..3]).map(row).collect(),
        liquid: None,
        plastic: None,
        threads_at_utc_us: None,
    };
    let lab = Laboratory { beside: vec![other], ..Laboratory::default() };
    let named = |left: bool| {
        let mut s = published("E3");
        s.trials.iter_mut().for_each(|t| t.typed = true);
        if left {
            let from = &old.trials[2];
            (s.trials[2].tare, s.trials[2].wet, s.trials[2].dry) = (from.tare, from.wet, from.dry.clone());
        }
        let limits = evaluate_with(&s, &method("t89-t90"), &lab);
        limits.checks.iter().find(|c| c.check == "left_over").map(|c| (c.about.clone(), c.severity))
    };
    assert_eq!(named(true), Some(("liquid 3".into(), Severity::Note)));
    assert_eq!(named(false), None);
}
