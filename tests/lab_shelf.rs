//! The oven shelf, loose things, what was seen around a mass, and determinations that belong elsewhere.

mod lab_bench;

use lab_bench::*;
use tarecup_core::fact::Fact;
use tarecup_core::lab::entities::{Drift, Standing};
use tarecup_core::lab::guide::ActionHint;
use tarecup_core::lab::{Input, OnShelf};
use tarecup_core::limits::State;
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{LeftOnPan, Stayed, Zero};
use tarecup_core::stamp::Basis;

fn shelf(play: &Play) -> Vec<OnShelf> {
    play.lab.shelf(&play.now)
}

fn on_shelf(play: &Play, id: &str) -> OnShelf {
    shelf(play).into_iter().find(|s| s.container == container_id(id)).unwrap_or_else(|| panic!("{id} is not on the shelf"))
}

fn wet(rows: &[(u32, &str, &str, &str)]) -> Play {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", rows);
    play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
    play
}

#[test]
fn the_shelf_says_what_dries_since_when_and_what_comes_next() {
    let mut play = wet(&[(28, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00"), (18, "C3", "20.10", "37.00")]);
    assert_eq!(shelf(&play).len(), 3);
    assert!(on_shelf(&play, "C1").next.contains("put it into the oven and say so"));
    play.ask(r#"{"ask":"into_oven","containers":["C1","C2"],"celsius":110}"#);
    play.wait(5 * HOUR);
    let item = on_shelf(&play, "C1");
    assert_eq!((item.standing, item.recorded, item.celsius, item.wrong_heat), (Standing::InOven, true, Some(110.0), false));
    assert!((item.hours - 5.0).abs() < 1e-9 && (item.ready_in_hours - 7.0).abs() < 1e-9 && !item.ready, "{item:?}");
    assert_eq!((item.since.utc_us, item.wet), (play.now.utc_us - 5 * HOUR, Some(g("38.22"))));
    assert!(item.next.contains("7.0 h to go"));
    assert!(!on_shelf(&play, "C3").recorded, "nobody said where it is");
    play.wait(8 * HOUR);
    let ready: Vec<_> = shelf(&play).iter().map(|s| (s.container.as_str().to_owned(), s.ready)).collect();
    assert_eq!(ready.len(), 3);
    assert!(ready.iter().all(|(_, ready)| *ready), "by the wet weighing C3 counts as dried too: {ready:?}");
    assert!(on_shelf(&play, "C1").next.contains("cool it with the lid on and weigh it"));
    play.weigh("C1", "33.39");
    assert_eq!(shelf(&play).len(), 2, "dried and weighed: nothing is left to do");
    play.ask(r#"{"ask":"set_aside_trial","specimen":"S-1","kind":"liquid","no":2,"who":"AB","why":"spilt"}"#);
    assert!(on_shelf(&play, "C2").next.contains("set aside: take it out") && !on_shelf(&play, "C2").ready);
    play.oven("out_of_oven", &["C2"]);
    assert_eq!(shelf(&play).len(), 1);
}

#[test]
fn too_early_is_back_in_until_the_mass_stays() {
    let mut play = wet(&[(28, "C1", "21.43", "38.22")]);
    play.oven("into_oven", &["C1"]);
    play.wait(4 * HOUR).weigh("C1", "33.50");
    let item = on_shelf(&play, "C1");
    assert_eq!((item.standing, item.ready), (Standing::Drying, false));
    assert!(item.next.contains("weighed too early: put it back for 1.0 h"), "{item:?}");
    play.oven("into_oven", &["C1"]);
    assert!(!on_shelf(&play, "C1").ready);
    play.wait(HOUR + MINUTE);
    let item = on_shelf(&play, "C1");
    assert!(item.ready && item.hours_since_dry.unwrap() > 1.0, "by the interval for a constant mass: {item:?}");
    play.weigh("C1", "33.495");
    assert!(shelf(&play).is_empty(), "the mass stayed");
}

#[test]
fn time_in_which_the_oven_was_off_does_not_dry() {
    let mut play = wet(&[(28, "C1", "21.43", "38.22")]);
    play.oven("into_oven", &["C1"]);
    play.wait(13 * HOUR);
    assert!(on_shelf(&play, "C1").ready);
    let (from, to) = (play.now.plus_us(-6 * HOUR).rfc3339(), play.now.plus_us(-2 * HOUR).rfc3339());
    play.ask(&format!(r#"{{"ask":"oven_off","from":"{from}","to":"{to}","who":"AB","why":"fuse"}}"#));
    let item = on_shelf(&play, "C1");
    assert!((item.hours - 9.0).abs() < 1e-6 && !item.ready, "{item:?}");
    play.wait(3 * HOUR);
    assert!(on_shelf(&play, "C1").ready);
    // On again just now: told without its end.
    let from = play.now.plus_us(-HOUR).rfc3339();
    play.ask(&format!(r#"{{"ask":"oven_off","from":"{from}","who":"AB","why":"the door stood open"}}"#));
    assert!((on_shelf(&play, "C1").hours - 11.0).abs() < 1e-6);
    let later = play.now.plus_us(HOUR).rfc3339();
    assert!(play.refused(&format!(r#"{{"ask":"oven_off","from":"{later}","who":"AB","why":"x"}}"#)).contains("both past"));
}

#[test]
fn a_wrong_heat_days_and_a_restart_are_seen() {
    let mut play = wet(&[(28, "C1", "21.43", "38.22")]);
    play.ask(r#"{"ask":"into_oven","containers":["C1"],"celsius":60}"#);
    let item = on_shelf(&play, "C1");
    assert!(item.wrong_heat && item.next.contains("stated at 60 °C, the method asks for 105 to 115"), "{item:?}");
    assert!(!item.overdue);
    play.wait(40 * HOUR).restart();
    play.wait(40 * HOUR);
    let item = on_shelf(&play, "C1");
    assert!(item.overdue && item.next.contains("it has stood since 2026-03-0"), "{item:?}");
    assert_eq!(item.basis, Basis::Wall, "across starts only wall time is left");
}

#[test]
fn a_container_goes_into_the_oven_once() {
    let mut play = wet(&[(28, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00")]);
    play.oven("into_oven", &["C1", "C1"]);
    assert!(matches!(&play.facts.last().unwrap().fact, Fact::IntoOven { containers, .. } if containers.len() == 1));
    let since = play.container("C1").holding.as_ref().unwrap().oven.since;
    play.wait(HOUR);
    let says = play.refused(r#"{"ask":"into_oven","containers":["C1","C2"]}"#);
    assert!(says.contains("in the oven already: C1 since 2026-") && !says.contains("C2 since"), "{says}");
    assert_eq!(play.container("C1").holding.as_ref().unwrap().oven.since, since);
    play.oven("out_of_oven", &["C1"]);
    assert!(play.refused(r#"{"ask":"out_of_oven","containers":["C1"]}"#).contains("out of the oven already: C1"));
    play.oven("into_oven", &["C1", "C2"]);
    assert!(play.refused(r#"{"ask":"into_oven","containers":["C3"]}"#).contains("did you mean C"));
    play.wait(16 * HOUR).weigh("C1", "33.39");
    play.oven("out_of_oven", &["C1", "C2"]);
    assert_eq!(play.container("C2").standing, Standing::Wet, "the tray is said out although C1 was weighed already");
    assert!(on_shelf(&play, "C2").next.contains("12") || on_shelf(&play, "C2").next.contains("weigh it"));
}

#[test]
fn loose_things_say_which_lines_they_rest_on_and_may_be_explained() {
    let mut play = Play::open();
    let mass = play.settle("pan-n", "50.00");
    play.lift("pan-n");
    let count = play.count(28);
    let list: Vec<_> = play.lab.loose_list().collect();
    assert_eq!(list.iter().map(|l| l.seq).collect::<Vec<_>>(), [mass, count]);
    let Fact::Weighed(w) = &play.facts[mass as usize - 1].fact else { panic!() };
    assert_eq!(list[0].inputs, w.taken.map(|t| [t.first_input, t.input]));
    assert_eq!((list[0].mass, list[1].drops), (Some(g("50.00")), Some(28)));
    assert!(list[1].inputs.unwrap()[0] < list[1].inputs.unwrap()[1]);
    let now = play.lab.guide(&bench_name("north")).unwrap();
    assert_eq!((now.urgent, now.action), (true, Some(ActionHint::SayCount { count })));
    play.ask(&format!(r#"{{"ask":"explain","what":{count},"who":"AB","why":"the drive was tried"}}"#));
    assert!(!play.lab.guide(&bench_name("north")).unwrap().urgent, "nobody needs to look at it any more");
    assert_eq!(play.lab.loose_open().map(|l| l.seq).collect::<Vec<_>>(), [mass]);
    play.ask(&format!(r#"{{"ask":"explain","what":{mass},"who":"AB","why":"the daily check weight"}}"#));
    assert_eq!(play.lab.loose_open().count(), 0);
    assert_eq!(play.lab.loose_list().next().unwrap().explained.as_deref(), Some("the daily check weight"));
    play.restart();
    assert_eq!(play.lab.loose_open().count(), 0);
    // It may still be tied: then it was something else after all.
    play.tie(mass, "C1", "tare");
    assert!(play.lab.loose(mass).is_none());
    assert!(play.refused(&format!(r#"{{"ask":"explain","what":{mass},"who":"AB","why":"x"}}"#)).contains("nothing loose"));
    assert!(play.refused(&format!(r#"{{"ask":"explain","what":{count},"who":"AB","why":" "}}"#)).contains("say why"));
}

#[test]
fn a_trial_begun_for_the_wrong_specimen_moves_with_its_counts() {
    let mut play = wet(&[(31, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00")]);
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    play.oven("into_oven", &["C1", "C2"]);
    let counts = play.trial("S-1", 1).counts.clone();
    let wet = play.trial("S-1", 1).wets[0].seq;
    let ask = r#"{"ask":"move_trial","specimen":"S-1","kind":"liquid","no":2,"to":"S-2","who":"CD","why":"label misread"}"#;
    let facts = play.ask(ask);
    assert_eq!(kinds(&facts)[0], "trial_moved");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22"]);
    assert_eq!(play.shown("S-2"), ["Liquid 1 C2 20.00 36.00"]);
    assert!(play.specimen("S-1").count(counts[0]).is_none() && play.specimen("S-2").count(counts[0]).unwrap().drops == 22);
    let moved = play.trial("S-2", 0).moved.clone().unwrap();
    assert_eq!((moved.from, moved.no, moved.said.why.as_str()), (specimen_id("S-1"), 2, "label misread"));
    let changed = facts.iter().find_map(|f| match f {
        Fact::LimitsComputed { specimen, changed, .. } if *specimen == specimen_id("S-1") => Some(changed.join("; ")),
        _ => None,
    });
    assert!(changed.unwrap().contains("liquid 2 of S-1 moved to S-2 as liquid 1: label misread (CD)"));
    // What follows goes on where it is now.
    assert_eq!(play.container("C2").standing, Standing::InOven);
    play.wait(16 * HOUR).weigh("C2", "31.20");
    assert_eq!(play.shown("S-2"), ["Liquid 1 C2 20.00 36.00 31.20"]);
    play.ask(&format!(r#"{{"ask":"amend_mass","weighing":{wet},"mass_g":"36.05","who":"CD","why":"slip"}}"#));
    assert_eq!(play.shown("S-2"), ["Liquid 1 C2 20.00 36.05 31.20"]);
    // And back again.
    play.ask(r#"{"ask":"move_trial","specimen":"S-2","kind":"liquid","no":1,"to":"S-1","who":"CD","why":"it was right"}"#);
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22", "Liquid 2 C2 20.00 36.05 31.20"]);
    let left = play.specimen("S-2").limits.clone().unwrap();
    assert_eq!((left.trials.len(), left.state), (0, State::Provisional), "a result does not outlive its determinations");
    for (json, words) in [
        (ask.replace("\"no\":2", "\"no\":9"), "no determination liquid 9"),
        (ask.replace("\"to\":\"S-2\"", "\"to\":\"S-1\""), "belongs to S-1 already"),
        (ask.replace("\"to\":\"S-2\"", "\"to\":\"S-3\""), "did you mean S-"),
        (ask.replace("label misread", " "), "say why"),
    ] {
        let says = play.refused(&json);
        assert!(says.contains(words), "{says}");
    }
}

#[test]
fn a_moved_trial_takes_the_tare_and_what_was_released_with_it() {
    let mut play = wet(&[(31, "C1", "21.43", "38.22")]);
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    play.wait(16 * HOUR).weigh("C1", "33.39");
    play.weigh("C1", "21.44");
    assert!(play.container("C1").released.is_some());
    play.ask(r#"{"ask":"move_trial","specimen":"S-1","kind":"liquid","no":1,"to":"S-2","who":"CD","why":"label"}"#);
    let container = play.container("C1");
    assert_eq!(container.released.as_ref().unwrap().holding.specimen, specimen_id("S-2"));
    assert!(container.tare_uses.iter().all(|u| u.specimen == specimen_id("S-2")) && !container.tare_uses.is_empty());
    play.scan("scan-n", "+undo");
    assert_eq!(play.container("C1").standing, Standing::Dry, "the emptied weighing is taken back into the moved trial");
}

#[test]
fn a_tare_from_a_register_is_typed_for_ever() {
    let mut play = Play::open();
    play.ask(r#"{"ask":"register_container","container":"C1","tare_g":"21.43","lid_g":5.2,"who":"AB"}"#);
    let tare = play.container("C1").tare().unwrap().clone();
    assert_eq!((tare.mass, tare.typed, play.container("C1").lid), (g("21.43"), true, Some(g("5.20"))));
    wet_trials(&mut play, "S-1", &[]);
    play.intend("north", "S-1", "liquid");
    play.count(28);
    play.weigh("C1", "38.22");
    assert!(play.specimen("S-1").limits.as_ref().unwrap().trials[0].typed, "and so is what rests on it");
    let before = play.facts.len();
    play.ask(r#"{"ask":"register_container","container":"C1","tare_g":"21.43","lid_g":5.2,"who":"AB"}"#);
    assert_eq!(play.facts.len(), before + 1, "the same tare again is no new weighing");
    for (json, words) in [
        (r#"{"ask":"register_container","container":"C2","tare_g":"21.43"}"#, "say who"),
        (r#"{"ask":"register_container","container":"C2","tare_g":"0","who":"AB"}"#, "more than nothing"),
        (r#"{"ask":"register_container","container":"C2","tare_g":"1,2,3","who":"AB"}"#, "not a mass"),
        (r#"{"ask":"register_container","container":"C1","tare_g":"20.00","who":"AB"}"#, "holds soil"),
    ] {
        let says = play.refused(json);
        assert!(says.contains(words), "{json}: {says}");
    }
}

#[test]
fn only_somebody_who_did_not_work_on_it_reviews_and_a_change_takes_the_review_back() {
    let mut play = Play::open();
    whole_specimen(&mut play, "S-1", "C");
    let count = play.trial("S-1", 0).counts[0];
    play.ask(&format!(r#"{{"ask":"amend_drops","count":{count},"drops":33,"who":"EF","why":"counted aloud"}}"#));
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    let review = |who: &str| format!(r#"{{"ask":"review","specimen":"S-1","who":"{who}"}}"#);
    for (who, did) in [("AB", "weighed and counted"), ("ab", "is the same person"), ("EF", "corrected the drops")] {
        assert!(play.refused(&review(who)).contains("a second person reviews"), "{who} {did}");
    }
    play.ask(&review("GH"));
    assert_eq!(play.specimen("S-1").limits.as_ref().unwrap().state, State::Reviewed);
    play.ask(r#"{"ask":"move_trial","specimen":"S-1","kind":"liquid","no":4,"to":"S-2","who":"IJ","why":"label"}"#);
    assert_ne!(play.specimen("S-1").limits.as_ref().unwrap().state, State::Reviewed, "a later fact takes it back");
    play.ask(r#"{"ask":"move_trial","specimen":"S-2","kind":"liquid","no":1,"to":"S-1","who":"IJ","why":"no, it was right"}"#);
    let says = play.refused(&review("IJ"));
    assert!(says.contains("a second person reviews") || says.contains("not complete"), "who moved it worked on it: {says}");
}

fn stayed(play: &Play, seq: u64, drift: i64, ms: u32) -> Input {
    let Fact::Weighed(w) = &play.facts[seq as usize - 1].fact else { panic!() };
    let taken = w.taken.unwrap();
    let stayed = Stayed { taken_at: taken.at, step: taken.step, readings: 40, watched_ms: ms, drift_ug_per_s: drift };
    Input::PanWatched { balance: instrument("pan-n"), stayed, input: taken.input + 1 }
}

#[test]
fn what_the_balance_showed_around_a_mass_stays_with_it() {
    let mut play = wet(&[(28, "C1", "21.43", "38.22")]);
    play.wait(16 * HOUR).scan("scan-n", "C1");
    let dry = play.settle("pan-n", "33.39");
    let quiet = stayed(&play, dry, 1_000, 14_000);
    assert!(play.take(quiet).is_empty(), "14 mg are less than two steps of 10 mg");
    let short = stayed(&play, dry, 100_000, 2_000);
    assert!(play.take(short).is_empty(), "two seconds tell nothing");
    let warm = stayed(&play, dry, 2_500, 14_000);
    let facts = play.take(warm);
    assert!(matches!(&facts[0], Fact::PanWatched { weighing, drift_ug_per_s: 2_500, .. } if *weighing == dry), "{facts:?}");
    // A check judges it: the result says so.
    let said = |check: &str, f: &[Fact]| matches!(f, [_, Fact::LimitsComputed { limits, .. }] if limits.checks.iter().any(|c| c.check == check));
    assert!(said("drift", &facts), "{facts:?}");
    let taken_at = play.trial("S-1", 0).dries[0].weighing.at;
    let zero = Zero { mass: Mass::from_ug(60_000), input: 5_000 };
    let left = LeftOnPan { taken_at, left: Mass::from_ug(60_000), zero, at: play.now };
    let facts = play.take(Input::LeftOnPan { balance: instrument("pan-n"), left });
    assert!(matches!(facts[0], Fact::LeftOnPan { .. }) && said("left_on_pan", &facts), "{facts:?}");
    let seen = play.trial("S-1", 0).dries[0].weighing.seen.unwrap();
    assert_eq!(seen.stay, Some(Drift { drift_ug_per_s: 2_500, watched_ms: 14_000 }));
    assert_eq!(seen.left, Some(Mass::from_ug(60_000)));
    // Another balance, or a mass of another moment, is not meant.
    let other = LeftOnPan { taken_at: taken_at.plus_us(1), ..left };
    assert!(play.take(Input::LeftOnPan { balance: instrument("pan-n"), left: other }).is_empty());
    assert!(play.take(Input::LeftOnPan { balance: instrument("pan-s"), left }).is_empty());
}
