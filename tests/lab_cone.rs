//! Penetrations of the cone at the bench: typed, sliced, corrected; and what finished results say together.

mod lab_bench;

use lab_bench::*;
use tarecup_core::fact::Fact;
use tarecup_core::lab::Setup;
use tarecup_core::lab::statistics::Statistics;
use tarecup_core::limits::{Limits, State};
use tarecup_core::sheet::Kind;

fn with_cone() -> Setup {
    let mut setup = two_benches();
    let cone = shipped_method("bs1377-cone");
    setup.methods.insert(cone.name.clone(), cone);
    setup
}

fn at_the_cone() -> Play {
    let mut play = Play::new(with_cone());
    play.ask(r#"{"ask":"sign_in","bench":"north","operator":"AB"}"#);
    play.ask(r#"{"ask":"open_specimen","specimen":"S-1","method":"bs1377-cone"}"#);
    play.intend("north", "S-1", "liquid");
    play
}

fn penetrate(play: &mut Play, mm: f64) -> u64 {
    play.ask(&format!(r#"{{"ask":"type_penetration","bench":"north","penetration_mm":{mm},"who":"AB"}}"#));
    play.wait(20 * SECOND);
    play.facts.iter().rev().find(|r| matches!(r.fact, Fact::PenetrationEntered { .. })).expect("entered").seq
}

#[test]
fn penetrations_of_a_paste_make_one_trial_with_their_slice() {
    let mut play = at_the_cone();
    assert!(play.next_step("north").contains("trial 1 of 4: let the cone fall"), "{}", play.next_step("north"));
    play.weigh("C1", "20.00");
    let first = penetrate(&mut play, 16.1);
    let second = penetrate(&mut play, 15.9);
    assert!(play.next_step("north").contains("15.9 mm of penetration for S-1: take a slice"));
    play.restart();
    play.weigh("C1", "33.60");
    let trial = play.trial("S-1", 0);
    assert_eq!((trial.kind, trial.no, trial.counts.as_slice()), (Kind::Cone, 1, [first, second].as_slice()));
    assert!(play.bench("north").owed.is_none());
    let row = &play.specimen("S-1").limits.as_ref().unwrap().trials[0];
    assert_eq!((row.penetration_mm, row.drops, row.typed), (Some(16.0), None, true));
    assert_eq!(play.specimen("S-1").counts[0].by.as_ref().map(|b| b.as_str()), Some("AB"));
}

#[test]
fn what_cannot_be_is_refused_with_a_remedy() {
    let mut play = at_the_cone();
    let ask = |mm: &str| format!(r#"{{"ask":"type_penetration","bench":"north","penetration_mm":{mm},"who":"AB"}}"#);
    for mm in ["0.0", "-3.0", "61.0", "1e300"] {
        assert!(play.refused(&ask(mm)).contains("60 mm"), "{mm}");
    }
    assert!(play.refused(&ask("20.0").replace("north", "south")).contains("say which specimen first"));
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    play.intend("north", "S-2", "liquid");
    assert!(play.refused(&ask("20.0")).contains("has no cone: enter drops with type_drops"));
}

#[test]
fn cup_and_cone_never_share_a_paste() {
    let mut play = at_the_cone();
    let depth = penetrate(&mut play, 16.0);
    // Somebody starts the cup all the same: the penetration has got no slice.
    let count = play.count(25);
    assert!(play.specimen("S-1").count(depth).unwrap().superseded.as_ref().unwrap().contains("the cup"));
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [count]);
    let says = play.refused(r#"{"ask":"type_penetration","bench":"north","penetration_mm":16.0,"who":"AB"}"#);
    assert!(says.contains("never mixed"), "{says}");
    let tie = format!(r#"{{"ask":"tie_count","count":{depth},"bench":"north","specimen":"S-1","who":"AB","why":"it counts"}}"#);
    assert!(play.refused(&tie).contains("never mixed"));
    play.ask(r#"{"ask":"new_paste","bench":"north"}"#);
    play.ask(&tie);
    assert_eq!(play.bench("north").owed.as_ref().unwrap().penetration_mm, Some(16.0));
}

#[test]
fn a_penetration_is_corrected_and_taken_back() {
    let mut play = at_the_cone();
    play.weigh("C1", "20.00");
    let depth = penetrate(&mut play, 61.0 - 42.0);
    let amend = |mm: &str| {
        format!(r#"{{"ask":"amend_penetration","what":{depth},"penetration_mm":{mm},"who":"CD","why":"dial misread"}}"#)
    };
    play.ask(&amend("18.0"));
    assert!(play.next_step("north").contains("18 mm"), "{}", play.next_step("north"));
    play.weigh("C1", "33.60");
    play.ask(&amend("17.5"));
    let limits = play.specimen("S-1").limits.clone().unwrap();
    assert_eq!(limits.trials[0].penetration_mm, Some(17.5));
    let changed = play.facts.iter().rev().find_map(|r| match &r.fact {
        Fact::LimitsComputed { changed, .. } => Some(changed.clone()),
        _ => None,
    });
    assert!(changed.unwrap().iter().any(|c| c.contains("18 → 17.5 mm: dial misread (CD)")));
    assert!(play.refused(&amend("0.0")).contains("60 mm"));
    let drops = format!(r#"{{"ask":"amend_drops","count":{depth},"drops":20,"who":"AB","why":"slip"}}"#);
    assert!(play.refused(&drops).contains("amend_penetration"));
    let nowhere = r#"{"ask":"amend_penetration","what":999,"penetration_mm":17.0,"who":"CD","why":"dial misread"}"#;
    assert!(play.refused(nowhere).contains("no penetration in force"));
    play.set_aside(depth);
    assert_eq!(play.specimen("S-1").limits.as_ref().unwrap().trials[0].penetration_mm, None);
    assert!(play.refused(&amend("17.0")).contains("no penetration in force"));
}

#[test]
fn the_oven_dried_limit_tells_organic_soil() {
    let mut play = Play::open();
    let open =
        |id: &str, limit: &str| format!(r#"{{"ask":"open_specimen","specimen":"{id}","liquid_limit_oven_dried":{limit}}}"#);
    for limit in ["0.0", "-1.0", "1000.0"] {
        assert!(play.refused(&open("S-9", limit)).contains("between 0 and 1000"), "{limit}");
    }
    play.ask(&open("S-9", "30.0"));
    assert_eq!(play.specimen("S-9").liquid_limit_oven_dried, Some(30.0));
    play.restart();
    weigh_all(&mut play, "S-9", [40.7, 42.4, 44.0]);
    assert_eq!(limits(&play, "S-9").group.as_deref(), Some("OL"));
    assert!(limits(&play, "S-9").checks.iter().any(|c| c.check == "organic" && c.says.contains("cooler")));
}

#[test]
fn undo_takes_back_the_latest_penetration() {
    let mut play = at_the_cone();
    penetrate(&mut play, 16.0);
    penetrate(&mut play, 19.0);
    play.ask(r#"{"ask":"undo","bench":"north"}"#);
    assert_eq!(play.bench("north").owed.as_ref().unwrap().penetration_mm, Some(16.0));
}

/// One specimen in the cup from tares to dry masses; its four slices hold 10 g of dry soil, its threads too.
fn finished(play: &mut Play, id: &str, waters: [f64; 3]) {
    play.ask(&format!(r#"{{"ask":"open_specimen","specimen":"{id}"}}"#));
    weigh_all(play, id, waters);
}

fn weigh_all(play: &mut Play, id: &str, waters: [f64; 3]) {
    play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
    let name = |n: usize| format!("{}{n}", id.replace("S-", "K"));
    let with = |water: f64| format!("{:.2}", 30.0 + water / 10.0);
    for n in 0..5 {
        play.weigh(&name(n), "20.00");
    }
    play.intend("north", id, "liquid");
    for (n, (drops, water)) in [32, 24, 17].into_iter().zip(waters).enumerate() {
        play.count(drops);
        play.weigh(&name(n), &with(water));
    }
    play.intend("north", id, "plastic");
    play.weigh(&name(3), &with(20.0));
    play.weigh(&name(4), &with(20.6));
    let all: Vec<String> = (0..5).map(name).collect();
    let all: Vec<&str> = all.iter().map(String::as_str).collect();
    play.oven("into_oven", &all);
    play.wait(20 * HOUR);
    play.oven("out_of_oven", &all);
    for container in all {
        play.weigh(container, "30.00");
    }
}

fn limits<'p>(play: &'p Play, id: &str) -> &'p Limits {
    play.specimen(id).limits.as_ref().expect("limits")
}

#[test]
fn finished_results_speak_together_and_corrections_take_back() {
    let mut play = Play::open();
    assert_eq!(*play.lab.statistics(), Statistics::default());
    finished(&mut play, "S-2", [40.7, 42.4, 44.0]);
    let first = *play.lab.statistics();
    assert_eq!(limits(&play, "S-2").state, State::Complete);
    assert_eq!((first.cup.df, first.cup.specimens, first.threads.df, first.slopes.n), (1, 1, 1, 1));
    let sd = limits(&play, "S-2").liquid_limit.as_ref().unwrap().residual_sd.unwrap();
    assert!((first.cup.pooled().variance() - sd * sd).abs() < 1e-9);
    assert!((first.threads.pooled().sum_sq - 0.18).abs() < 1e-9, "two containers 0.6 apart");
    assert_eq!(limits(&play, "S-2").liquid_limit.as_ref().unwrap().u_from.as_deref(), Some("stated prior"));

    finished(&mut play, "S-3", [50.7, 52.0, 54.1]);
    let ll = limits(&play, "S-3").liquid_limit.clone().unwrap();
    assert_eq!(ll.u_from.as_deref(), Some("stated prior, with 1 degree of freedom of the laboratory"));
    assert_eq!(play.lab.statistics().cup.df, 2);
    // The first result stands as it was reported: another specimen is no reason to change it.
    let revision = play.specimen("S-2").revision;
    play.weigh("K20", "20.00");
    assert_eq!(play.specimen("S-2").revision, revision);
    let before = limits(&play, "S-2").clone();
    play.ask(r#"{"ask":"review","specimen":"S-2","who":"KL"}"#);
    assert_eq!(*limits(&play, "S-2"), Limits { state: State::Reviewed, ..before }, "what was reviewed is what was seen");
    play.restart();

    let both = *play.lab.statistics();
    let dry = play.trial("S-3", 1).dries[0].weighing.seq;
    let amend = |g: &str| format!(r#"{{"ask":"amend_mass","weighing":{dry},"mass_g":"{g}","who":"AB","why":"digit altered"}}"#);
    play.ask(&amend("30.02"));
    let changed = *play.lab.statistics();
    assert!(changed != both && changed.cup.df == 2);
    play.ask(&amend("30.00"));
    assert_eq!(*play.lab.statistics(), both, "taken back exactly");
    // A determination set aside leaves the result short of trials: it says nothing any more.
    play.ask(r#"{"ask":"set_aside_trial","specimen":"S-3","kind":"liquid","no":1,"who":"AB","why":"spilt"}"#);
    assert_eq!(*play.lab.statistics(), first);
}
