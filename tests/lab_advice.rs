//! Advice at the bench while it can still help, what comes next there, and what only a person sees.

mod lab_bench;

use lab_bench::*;
use std::collections::BTreeMap;
use tarecup_core::fact::{ClosureFault, Fact};
use tarecup_core::lab::advice::{Advice, Fit, Slope, Wish};
use tarecup_core::lab::guide::{ActionHint, Guide, Hazard};
use tarecup_core::lab::{Input, Lab, Setup};
use tarecup_core::limits::State;
use tarecup_core::sense::CountRun;

fn with_method(name: &str) -> Setup {
    let method = shipped_method(name);
    Setup { default_method: method.name.clone(), methods: BTreeMap::from([(method.name.clone(), method)]), ..two_benches() }
}

fn advice_with(play: &Play, wish: &Wish) -> Advice {
    play.lab.advice(&bench_name("north"), wish).expect("something is in work")
}

fn advice(play: &Play) -> Advice {
    advice_with(play, &Wish::default())
}

fn guide(play: &Play) -> Guide {
    play.lab.guide(&bench_name("north")).unwrap()
}

fn fit(play: &Play) -> Fit {
    advice(play).count.unwrap().fit
}

/// S-1 in work at bench north, with these trials weighed wet.
fn at_work(rows: &[(u32, &str, &str, &str)]) -> Play {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", rows);
    play.intend("north", "S-1", "liquid");
    play
}

#[test]
fn too_many_and_too_few_drops_are_said_at_once() {
    let mut play = at_work(&[]);
    play.count(45);
    assert_eq!(fit(&play), Fit::TooMany);
    let says = &advice(&play).says[0];
    assert!(says.contains("too many (the method permits 15 to 35)") && says.contains("add water"), "{says}");
    let now = guide(&play);
    assert!(now.urgent && now.next.contains("add water, mix well and count again"), "{now:?}");
    assert_eq!(now.action, Some(ActionHint::ChangeWater { specimen: specimen_id("S-1"), drops: 45, add: true }));
    play.wait(4 * MINUTE).ask(r#"{"ask":"new_paste","bench":"north"}"#);
    play.count(9);
    assert_eq!(fit(&play), Fit::TooFew);
    let now = guide(&play);
    assert!(now.urgent && now.next.contains("let the paste dry by mixing, never add dry soil"), "{now:?}");
    play.ask(r#"{"ask":"new_paste","bench":"north"}"#);
    play.count(28);
    assert_eq!(fit(&play), Fit::Wanted);
    let now = guide(&play);
    assert!(!now.urgent && now.next.contains("take a slice"), "{now:?}");
    assert_eq!(now.action, Some(ActionHint::TakeSlice { specimen: specimen_id("S-1"), drops: 28 }));
    assert!(advice(&play).water.is_none(), "nothing is to be changed before the slice");
}

#[test]
fn windows_that_want_a_trial_and_how_many_more() {
    let open =
        |play: &Play| -> Vec<[u32; 2]> { advice(play).windows.iter().filter(|w| w.open).map(|w| [w.from, w.to]).collect() };
    let play = at_work(&[]);
    assert_eq!(open(&play), [[25, 35], [20, 30], [15, 25]]);
    assert_eq!((advice(&play).trials, advice(&play).trials_wanted), (0, 3));
    let mut play = at_work(&[(31, "C1", "21.43", "38.22"), (33, "C2", "20.00", "36.00")]);
    assert_eq!(open(&play), [[20, 30], [15, 25]], "two trials in one window fill one");
    assert_eq!(advice(&play).trials, 2);
    assert!(advice(&play).says.iter().any(|s| s.contains("1 trial more, of 3; a window wants one of 15–30 drops")));
    assert!(guide(&play).next.contains("trial 3 of 3") && guide(&play).next.contains("drops still wanted: 15–30"));
    assert_eq!(advice(&play).aim, Some([20, 30]), "the nearest to what the paste does now");
    play.wait(4 * MINUTE).count(34);
    assert_eq!(fit(&play), Fit::Spare);
    assert!(guide(&play).next.contains("fills no window that still wants a trial"));
    play.ask(r#"{"ask":"undo","bench":"north"}"#);
    play.weigh("C3", "20.50");
    play.wait(4 * MINUTE).count(24);
    play.weigh("C3", "37.00");
    assert_eq!(open(&play).len(), 1);
    assert_eq!(advice(&play).wanted_drops, [[15, 30]], "24 drops lie in two windows, so the fourth may lie in either");
    assert!(guide(&play).next.contains("3 trials are in; drops still wanted: 15–30; count another"), "{:?}", guide(&play));
    assert_eq!(advice(&play).aim, Some([15, 25]), "where the line is spread most");
}

#[test]
fn a_trial_set_aside_opens_its_window_again_and_a_limit_given_up_wants_none() {
    let mut play = at_work(&[(31, "C1", "21.43", "38.22"), (24, "C2", "20.00", "36.00"), (17, "C3", "20.10", "36.00")]);
    assert!(advice(&play).windows.iter().all(|w| !w.open));
    play.ask(r#"{"ask":"set_aside_trial","specimen":"S-1","kind":"liquid","no":2,"who":"AB","why":"torn"}"#);
    assert_eq!(advice(&play).windows.iter().filter(|w| w.open).count(), 1);
    play.ask(r#"{"ask":"not_obtainable","specimen":"S-1","limit":"liquid","because":"slides","who":"AB"}"#);
    assert_eq!(advice(&play).trials_wanted, 0);
}

/// The formula worked by hand: Δw = −16.8 · log10(30/45) = 2.958 % of dry mass; with w between 20 and 80 % a gram of
/// paste holds (1/1.2 + 1/1.8)/2 = 0.69444 g of dry soil: 200 g of paste want 200 · 0.69444 · 0.02958 = 4.109 g.
#[test]
fn grams_of_water_before_anything_is_dried_rest_on_what_the_method_supposes() {
    let mut play = at_work(&[]);
    play.count(45);
    let wish = Wish { paste: Some(g("200")), ..Wish::default() };
    let step = advice_with(&play, &wish).water.unwrap();
    assert_eq!((step.from_drops, step.to_drops), (45, 30), "the nearest window, its middle");
    assert!((step.change_percent - 2.9583).abs() < 1e-3, "{step:?}");
    assert!((step.water_g.unwrap() - 4.1087).abs() < 1e-3, "{step:?}");
    // Slope: 0.69444·4.6·0.17609/100·200 = 1.1250 g; water content: (1/1.2 − 1/1.8)/√12·2.9583/100·200 = 0.4744 g.
    assert!((step.water_u_g.unwrap() - 1.1250f64.hypot(0.4744)).abs() < 1e-3, "{step:?}");
    assert!((step.water_g_per_100g * 2.0 - step.water_g.unwrap()).abs() < 1e-12);
    assert_eq!(step.paste_water_percent, [20.0, 80.0]);
    assert!(step.slope.from.contains("[calc]"), "{}", step.slope.from);
    let says = advice_with(&play, &wish).says.join("\n");
    assert!(says.contains("about 4.1 g of water to 200 g of paste (standard uncertainty 1.2 g"), "{says}");
    assert!(says.contains("none comes out again"), "{says}");
    let wet = advice_with(&play, &Wish { drops: Some(10), ..wish }).water.unwrap();
    assert!(wet.water_g.unwrap() < 0.0 && wet.to_drops == 20, "to dry off: {wet:?}");
    let says = advice_with(&play, &Wish { drops: Some(10), ..Wish::default() }).says.join("\n");
    assert!(says.contains("are to dry off from each 100 g of paste") && says.contains("never by dry soil"), "{says}");
}

#[test]
fn the_laboratory_s_slope_goes_before_the_method_s_and_nonsense_before_neither() {
    let mut play = at_work(&[]);
    play.count(45);
    let from = |per_decade: f64, sd: f64| {
        let slope = Some(Slope { per_decade, sd, from: "40 lines of this laboratory".into() });
        advice_with(&play, &Wish { slope, ..Wish::default() }).water.unwrap().slope.per_decade
    };
    assert_eq!(from(-8.0, 2.0), -8.0);
    for (per_decade, sd) in [(8.0, 2.0), (0.0, 2.0), (f64::NAN, 2.0), (f64::NEG_INFINITY, 2.0), (-8.0, -1.0), (-8.0, f64::NAN)] {
        assert_eq!(from(per_decade, sd), -16.8, "{per_decade} {sd}");
    }
}

/// Points of Das, Principles of Geotechnical Engineering, example 4.3: (15, 42.0) (28, 39.1): slope −10.70 a decade.
#[test]
fn two_dried_trials_of_this_soil_give_its_own_slope_and_water_content() {
    // 10 g of dry soil each: 4.20 g and 3.91 g of water.
    let mut play = at_work(&[(15, "C1", "20.00", "34.20"), (28, "C2", "20.00", "33.91")]);
    play.oven("into_oven", &["C1", "C2"]);
    play.wait(16 * HOUR).weigh("C1", "30.00");
    play.weigh("C2", "30.00");
    play.intend("north", "S-1", "liquid");
    play.count(40);
    let step = advice_with(&play, &Wish { paste: Some(g("100")), ..Wish::default() }).water.unwrap();
    assert!((step.slope.per_decade + 10.698).abs() < 0.01 && step.slope.from.contains("2 dried trials"), "{step:?}");
    // Aim: 20 to 25, which fills a window and spreads the line most. w at 40 drops: 39.1 − 10.698·log10(40/28) = 37.443 %;
    // Δw = −10.698·log10(22/40) = 2.7776: 100/1.37443 · 0.027776 = 2.0209 g.
    assert_eq!((step.to_drops, step.paste_water_percent[0]), (22, step.paste_water_percent[1]));
    assert!((step.paste_water_percent[0] - 37.443).abs() < 0.01, "{step:?}");
    assert!((step.water_g.unwrap() - 2.0209).abs() < 0.002, "{step:?}");
}

#[test]
fn methods_without_windows_and_one_point_methods() {
    let mut play = Play::new(with_method("iso17892-cup"));
    play.ask(r#"{"ask":"open_specimen","specimen":"S-1"}"#);
    play.intend("north", "S-1", "liquid");
    play.count(60);
    assert_eq!((fit(&play), advice(&play).aim), (Fit::TooMany, Some([10, 50])));
    play.ask(r#"{"ask":"new_paste","bench":"north"}"#);
    play.weigh("C1", "20.00");
    play.count(40);
    assert_eq!(fit(&play), Fit::Wanted);
    play.weigh("C1", "35.00");
    assert_eq!(advice(&play).aim, Some([10, 24]), "the other side of 25 drops");
    let mut play = Play::new(with_method("d4318-one-point"));
    play.ask(r#"{"ask":"open_specimen","specimen":"S-1"}"#);
    play.intend("north", "S-1", "liquid");
    play.count(24);
    assert_eq!(fit(&play), Fit::Wanted);
    play.weigh("C1", "35.00");
    assert!(advice(&play).water.is_none() && advice(&play).windows[0].open, "two trials may lie in the one window");
}

/// The slope that the methods' files suppose is that of the published flow lines of `tests/published/sheets.toml`.
#[test]
fn the_supposed_slope_is_that_of_the_published_lines() {
    let sheets: toml::Table = include_str!("published/sheets.toml").parse().unwrap();
    let number = |v: &toml::Value| -> f64 {
        v.as_float().or(v.as_integer().map(|i| i as f64)).or(v.as_str().and_then(|t| t.parse().ok())).unwrap()
    };
    let slopes: Vec<f64> = sheets["sheet"]
        .as_array()
        .unwrap()
        .iter()
        .filter_map(|sheet| {
            let rows = sheet.get("points").or(sheet.get("liquid"))?.as_array()?;
            let points: Vec<(f64, f64)> = rows
                .iter()
                .map(|row| {
                    let row: Vec<f64> = row.as_array().unwrap().iter().map(number).collect();
                    match row.as_slice() {
                        [n, w] => (n.log10(), *w),
                        [n, tare, wet, dry] => (n.log10(), 100.0 * (wet - dry) / (dry - tare)),
                        other => panic!("{other:?}"),
                    }
                })
                .collect();
            let n = points.len() as f64;
            let (mx, my) = (points.iter().map(|p| p.0).sum::<f64>() / n, points.iter().map(|p| p.1).sum::<f64>() / n);
            let sxx: f64 = points.iter().map(|p| (p.0 - mx).powi(2)).sum();
            Some(points.iter().map(|p| (p.0 - mx) * (p.1 - my)).sum::<f64>() / sxx)
        })
        .collect();
    assert_eq!(slopes.len(), 4, "{slopes:?}");
    let mean = slopes.iter().sum::<f64>() / 4.0;
    let sd = (slopes.iter().map(|s| (s - mean).powi(2)).sum::<f64>() / 3.0).sqrt();
    for name in ["d4318-multipoint", "d4318-one-point", "t89-t90", "iso17892-cup"] {
        let liquid = shipped_method(name).liquid;
        assert!((liquid.slope_per_decade.unwrap() + mean).abs() < 0.05, "{name}: {mean}");
        assert!((liquid.slope_sd.unwrap() - sd).abs() < 0.05, "{name}: {sd}");
    }
}

#[test]
fn what_is_wrong_with_the_closures_themselves_is_said_before_the_slice() {
    let mut play = at_work(&[]);
    play.count(28);
    play.wait(MINUTE).count(33);
    let says = advice(&play).says.join("\n");
    assert!(says.contains("took 28 and 33 drops; the method lets them differ by 2"), "{says}");
    let run = CountRun { rate_per_s: Some(2.61), gaps: 2, ..play.run(30, 900, 930) };
    play.take(Input::Count { cup: instrument("cup-n"), run });
    let says = advice(&play).says.join("\n");
    assert!(says.contains("2.61 times a second; the method wants 1.9 to 2.1") && says.contains("2 gaps"), "{says}");
    let run = CountRun { interrupted: Some("the port was lost".into()), ..play.run(30, 940, 970) };
    play.take(Input::Count { cup: instrument("cup-n"), run });
    assert!(advice(&play).says.join("\n").contains("may be missing (the port was lost)"));
}

#[test]
fn advice_where_there_is_nothing_to_advise() {
    let mut play = Play::open();
    assert!(play.lab.advice(&bench_name("north"), &Wish::default()).is_none());
    assert!(play.lab.advice(&bench_name("nowhere"), &Wish::default()).is_none());
    assert!(play.lab.advice_for(&specimen_id("S-9"), &Wish::default()).is_none());
    play.intend("north", "S-1", "natural");
    assert!(play.lab.advice(&bench_name("north"), &Wish::default()).is_none());
    let about = play.lab.advice_for(&specimen_id("S-1"), &Wish { drops: Some(500), ..Wish::default() }).unwrap();
    assert!(about.water.unwrap().change_percent > 0.0);
}

#[test]
fn cautions_and_actions_come_one_at_a_time() {
    let mut play = Play::open();
    assert_eq!(guide(&play).action, Some(ActionHint::ReadCode));
    play.intend("north", "S-1", "liquid");
    assert_eq!(guide(&play).caution.unwrap().about, Hazard::Cam);
    play.weigh("C1", "21.43");
    play.count(28);
    play.scan("scan-n", "C1");
    let now = guide(&play);
    assert_eq!((now.action, now.caution), (Some(ActionHint::PutOn { container: container_id("C1") }), None));
    play.settle("pan-n", "38.22");
    assert_eq!(guide(&play).action, Some(ActionHint::TakeOff { container: container_id("C1") }));
    let recorded = guide(&play).recorded.unwrap();
    assert_eq!((recorded.mass, recorded.container.as_ref().map(|c| c.as_str())), (Some(g("38.22")), Some("C1")));
    play.lift("pan-n");
    play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
    play.oven("into_oven", &["C1"]);
    play.wait(16 * HOUR).scan("scan-n", "C1");
    assert_eq!(guide(&play).caution.unwrap().about, Hazard::Burn);
    play.settle("pan-n", "33.39");
    play.lift("pan-n");
    play.scan("scan-n", "C1");
    assert_eq!(guide(&play).caution.unwrap().about, Hazard::Dust);
    assert!(guide(&play).next.contains("dried again, or emptied"));
    let loose = play.settle("pan-n", "60.00");
    let now = guide(&play);
    assert!(now.urgent && now.refused.as_ref() == Some(&now.next), "{now:?}");
    assert_eq!(now.action, Some(ActionHint::SayWeighing { weighing: loose }));
    let mut play = Play::open();
    let count = play.count(28);
    assert_eq!(guide(&play).action, Some(ActionHint::SayCount { count }));
}

#[test]
fn a_container_weighed_dry_too_early_is_caught_in_the_moment() {
    let mut play = at_work(&[(28, "C1", "21.43", "38.22")]);
    play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
    play.oven("into_oven", &["C1"]);
    play.wait(HOUR / 5).scan("scan-n", "C1");
    let early = play.settle("pan-n", "37.90");
    let now = guide(&play);
    assert!(now.urgent && now.next.contains("in the oven only 0.2 h") && now.next.contains("asks for 12 h"), "{now:?}");
    let back = |about: &str| ActionHint::BackIntoOven {
        container: container_id("C1"),
        specimen: specimen_id("S-1"),
        about: about.into(),
    };
    assert_eq!((now.action, now.caution.unwrap().about), (Some(back("liquid 1")), Hazard::Burn));
    play.lift("pan-n");
    assert!(guide(&play).urgent, "lifting it does not make it dry");
    let before = play.lab.clone();
    // Back in the oven: nothing more to say.
    play.oven("into_oven", &["C1"]);
    assert!(!guide(&play).urgent, "{:?}", guide(&play));
    // Or a person says that it is dry.
    let ask = |lab: &mut Lab, json: &str| lab.take(Input::Ask(serde_json::from_str(json).unwrap()), play.now, 1_000).unwrap();
    let mut said = before.clone();
    ask(
        &mut said,
        r#"{"ask":"answer_check","specimen":"S-1","check":"not_dry","about":"liquid 1","says":"dried in the other oven","who":"AB"}"#,
    );
    assert!(!said.guide(&bench_name("north")).unwrap().urgent);
    // Or it was another container.
    let mut undone = before.clone();
    ask(&mut undone, &set_aside(early));
    assert!(!undone.guide(&bench_name("north")).unwrap().urgent);
    play.wait(16 * HOUR).weigh("C1", "33.39");
    assert!(!guide(&play).urgent);
    // Where nobody records the oven the wet weighing starts the clock.
    let mut play = at_work(&[(28, "C1", "21.43", "38.22")]);
    play.wait(10 * MINUTE).weigh("C1", "37.90");
    assert!(guide(&play).next.contains("weighed wet only 0.2 h ago"), "{:?}", guide(&play));
}

#[test]
fn soil_that_slid_does_not_stand() {
    let mut play = at_work(&[]);
    let first = play.count(28);
    let second = play.wait(MINUTE).count(19);
    let facts = play.scan("scan-n", "+slid");
    assert!(matches!(&facts[..], [Fact::SetAside { what, fault: Some(ClosureFault::Slid), .. }] if *what == second), "{facts:?}");
    let count = play.specimen("S-1").count(second).unwrap();
    assert_eq!(
        (count.failed, count.set_aside.as_ref().unwrap().why.as_str()),
        (Some(ClosureFault::Slid), "the soil slid in the groove")
    );
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [first], "the closure before still waits for its slice");
    play.ask(r#"{"ask":"slid","bench":"north","why":"slid on a pebble","who":"CD"}"#);
    assert!(play.bench("north").owed.is_none());
    // The card was read by mistake: the count is tied again, and its slice is owed again.
    let back =
        format!(r#"{{"ask":"tie_count","count":{second},"bench":"north","specimen":"S-1","who":"AB","why":"wrong card"}}"#);
    play.ask(&back);
    let count = play.specimen("S-1").count(second).unwrap();
    assert!(count.failed.is_none() && count.set_aside.is_none());
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [second]);
    play.set_aside(second);
    assert!(play.refused(&back).contains("was set aside"), "what was set aside for another reason stays so");
    assert!(play.refused(r#"{"ask":"slid","bench":"north"}"#).contains("set that trial aside"));
    assert!(play.refused(r#"{"ask":"slid","bench":"nroth"}"#).contains("did you mean north?"));
}

#[test]
fn a_run_given_up_before_it_is_over_does_not_stand_either() {
    let mut play = at_work(&[]);
    let first = play.count(28);
    play.wait(MINUTE);
    let began = play.now;
    play.wait(8 * SECOND);
    play.lab.counting([(instrument("cup-n"), began)]);
    let facts = play.scan("scan-n", "+tore");
    assert_eq!(kinds(&facts), ["closure_failed"], "the run that goes on, not the count before it");
    play.wait(5 * SECOND);
    play.lab.counting([]);
    let run = CountRun { began, at: began.plus_us(7 * SECOND), ..play.run(15, 800, 815) };
    play.take(Input::Count { cup: instrument("cup-n"), run: run.clone() });
    let torn = play.last_count();
    assert_eq!(play.specimen("S-1").count(torn).unwrap().failed, Some(ClosureFault::Tore));
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [first]);
    // The counter tells its end late: still the same run.
    play.take(Input::Count { cup: instrument("cup-n"), run: CountRun { drops: 16, last_input: 816, ..run } });
    assert!(play.specimen("S-1").count(play.last_count()).unwrap().failed.is_some());
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [first]);
    let next = play.wait(MINUTE).count(27);
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [first, next], "the next run is another one");
}

#[test]
fn a_groove_may_tear_while_it_is_cut() {
    let mut play = at_work(&[]);
    assert_eq!(kinds(&play.ask(r#"{"ask":"groove_tore","bench":"north"}"#)), ["closure_failed"]);
    play.wait(MINUTE).count(28);
    assert!(play.bench("north").owed.is_some(), "the next groove is another one");
    play.ask(r#"{"ask":"intend_nothing","bench":"south"}"#);
    assert!(play.refused(r#"{"ask":"groove_tore","bench":"south"}"#).contains("no count of bench south"));
}

#[test]
fn a_specimen_of_which_only_the_natural_water_content_is_wanted_completes() {
    let mut play = Play::open();
    play.ask(r#"{"ask":"open_specimen","specimen":"N-1","wanted":["natural"]}"#);
    play.weigh("C1", "20.00");
    play.intend("north", "N-1", "natural");
    play.weigh("C1", "50.00");
    let limits = |play: &Play| play.specimen("N-1").limits.clone().unwrap();
    assert_eq!(limits(&play).state, State::Provisional);
    assert!(limits(&play).checks.iter().any(|c| c.check == "missing" && c.about == "natural water content"));
    play.oven("into_oven", &["C1"]);
    play.wait(16 * HOUR).weigh("C1", "45.00");
    assert_eq!(limits(&play).state, State::Complete, "{:?}", limits(&play).checks);
    assert_eq!(limits(&play).natural_water_percent, Some(20.0));
    // One limit alone, and all three.
    play.ask(r#"{"ask":"open_specimen","specimen":"P-1","wanted":["plastic","plastic"]}"#);
    assert_eq!(play.specimen("P-1").wanted.len(), 1);
    play.intend("north", "P-1", "plastic");
    for container in ["C5", "C6"] {
        play.weigh(container, "27.00");
        play.wait(MINUTE);
    }
    play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
    play.oven("into_oven", &["C5", "C6"]);
    play.wait(16 * HOUR);
    for container in ["C5", "C6"] {
        play.weigh(container, "25.80");
        play.weigh(container, "20.00");
    }
    assert_eq!(play.specimen("P-1").limits.as_ref().unwrap().state, State::Complete);
    assert!(play.refused(r#"{"ask":"open_specimen","specimen":"S-1","wanted":["liquid"]}"#).contains("open already"));
}

#[test]
fn both_limits_may_be_stated_not_obtainable() {
    let mut play = Play::open();
    for limit in ["liquid", "plastic"] {
        play.ask(&format!(r#"{{"ask":"not_obtainable","specimen":"S-1","limit":"{limit}","because":"sand","who":"AB"}}"#));
    }
    let limits = play.specimen("S-1").limits.clone().unwrap();
    assert_eq!((limits.state, limits.plasticity_index.non_plastic), (State::Complete, true), "{:?}", limits.checks);
}
