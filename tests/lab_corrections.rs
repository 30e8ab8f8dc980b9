//! What happens in a laboratory after the bench: things tied later, corrected,
//! typed, reviewed, and states that last for days.

mod lab_bench;

use lab_bench::*;
use tarecup_core::fact::Fact;
use tarecup_core::lab::entities::Standing;
use tarecup_core::lab::role::Role;
use tarecup_core::lab::{Input, Lab};
use tarecup_core::limits::State;
use tarecup_core::signal::Basis;

fn limits<'a>(play: &'a Play, id: &str) -> &'a tarecup_core::limits::Limits {
    play.specimen(id).limits.as_ref().unwrap()
}

#[test]
fn a_count_with_no_specimen_is_tied_later() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    let count = play.count(28);
    assert!(play.next_step("north").contains("say which specimen"));
    let ask = format!(r#"{{"ask":"tie_count","count":{count},"bench":"north","specimen":"S-1","who":"AB","why":"forgot"}}"#);
    play.ask(&ask);
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [count]);
    assert!(play.lab.loose(count).is_none());
    let seq = play.weigh("C1", "38.22");
    assert_eq!(play.role_of(seq), Some(Role::Wet));
    assert!(play.refused(&ask).contains("take that weighing back first"));
}

#[test]
fn a_count_of_the_wrong_specimen_is_tied_to_the_right_one() {
    let mut play = Play::open();
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    play.intend("north", "S-1", "liquid");
    let count = play.count(28);
    play.ask(&format!(r#"{{"ask":"tie_count","count":{count},"bench":"north","specimen":"S-2","who":"AB","why":"wrong"}}"#));
    assert!(play.specimen("S-1").counts.is_empty());
    assert_eq!(play.bench("north").owed.as_ref().unwrap().specimen, specimen_id("S-2"));
    let other = play.count(20);
    let says = play
        .refused(&format!(r#"{{"ask":"tie_count","count":{count},"bench":"north","specimen":"S-2","who":"AB","why":"again"}}"#));
    assert!(says.contains("another slice is owed") && play.bench("north").owed.as_ref().unwrap().counts == [other], "{says}");
}

#[test]
fn a_loose_weighing_is_tied_later_and_again_to_the_right_container() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00")]);
    play.oven("into_oven", &["C1", "C2"]);
    let before = documents(&play.lab);
    play.wait(16 * HOUR);
    let loose = play.settle("pan-n", "33.39");
    play.lift("pan-n");
    play.tie(loose, "C2", "dry");
    assert_eq!(play.shown("S-1")[1], "Liquid 2 C2 20.00 36.00 33.39");
    assert_eq!(play.container("C2").standing, Standing::Dry);
    play.tie(loose, "C1", "dry");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22 33.39", "Liquid 2 C2 20.00 36.00"]);
    assert_eq!(
        documents(&play.lab)["container C2"],
        before["container C2"],
        "the wrong one is as if nothing had been: in the oven"
    );
    assert_eq!(play.container("C1").standing, Standing::Dry);
    assert_eq!(play.trial("S-1", 0).dries[0].weighing.by.as_ref().unwrap().as_str(), "AB");
    play.wait(HOUR).weigh("C2", "31.00");
    assert!((16.9..17.1).contains(&play.trial("S-1", 1).dries[0].oven_hours), "{:?}", play.trial("S-1", 1).dries);
}

#[test]
fn a_slice_was_weighed_in_a_container_with_a_finished_trial_of_its_own() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.wait(16 * HOUR).weigh("C1", "33.39");
    play.weigh("C2", "20.00");
    let before = documents(&play.lab);
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    play.intend("north", "S-2", "liquid");
    play.count(22);
    let wrong = play.weigh("C1", "39.00");
    assert_eq!(play.shown("S-2"), ["Liquid 1 C1 21.43 39.00"]);
    play.tie(wrong, "C2", "wet");
    assert_eq!(play.shown("S-2"), ["Liquid 1 C2 20.00 39.00"], "the same determination in the right container");
    assert_eq!(play.trial("S-2", 0).counts.len(), 1);
    assert!(play.bench("north").owed.is_none());
    let without_uses = |text: &str| text.split(",\"tare_uses\"").next().unwrap().to_owned();
    let (now, then) = (&documents(&play.lab)["container C1"], &before["container C1"]);
    assert_eq!(without_uses(now), without_uses(then), "C1 holds its finished trial again");
    assert_eq!((play.container("C1").standing, play.container("C2").standing), (Standing::Dry, Standing::Wet));
}

#[test]
fn a_mass_is_amended() {
    let mut play = Play::open();
    whole_specimen(&mut play, "S-1", "C");
    let before = limits(&play, "S-1").liquid_limit.as_ref().unwrap().value;
    let wet = play.trial("S-1", 0).wets[0].seq;
    let ask = format!(r#"{{"ask":"amend_mass","weighing":{wet},"mass_g":"48.16","who":"CD","why":"digits exchanged"}}"#);
    let facts = play.ask(&ask);
    let Some(Fact::LimitsComputed { changed, .. }) = facts.last() else { panic!("{facts:?}") };
    assert!(changed.iter().any(|c| c.contains("liquid limit")) && changed.iter().any(|c| c.contains("digits exchanged (CD)")));
    assert!(limits(&play, "S-1").trials[0].typed);
    assert_ne!(limits(&play, "S-1").liquid_limit.as_ref().unwrap().value, before);
    let tare = play.trial("S-1", 1).tare.as_ref().unwrap().seq;
    play.ask(&format!(r#"{{"ask":"amend_mass","weighing":{tare},"mass_g":"17.51","who":"CD","why":"slip"}}"#));
    assert_eq!(play.shown("S-1")[1], "Liquid 2 C2 17.51 55.53 46.05");
    assert_eq!(play.container("C2").tare().unwrap().mass, g("17.51"));
    for (mass, word) in
        [("0", "more than nothing"), ("-3", "more than nothing"), ("abc", "is not a mass"), ("1e9", "is not a mass")]
    {
        let says = play.refused(&format!(r#"{{"ask":"amend_mass","weighing":{wet},"mass_g":"{mass}","who":"CD","why":"x"}}"#));
        assert!(says.contains(word), "{says}");
    }
    assert!(play.refused(r#"{"ask":"amend_mass","weighing":1,"mass_g":"3","who":"CD","why":"x"}"#).contains("no weighing"));
}

#[test]
fn a_number_of_drops_is_amended() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    let count = play.trial("S-1", 0).counts[0];
    play.ask(&format!(r#"{{"ask":"amend_drops","count":{count},"drops":26,"who":"CD","why":"counted aloud"}}"#));
    assert_eq!((limits(&play, "S-1").trials[0].drops, limits(&play, "S-1").trials[0].typed), (Some(26.0), true));
    for drops in [0, 501] {
        let ask = format!(r#"{{"ask":"amend_drops","count":{count},"drops":{drops},"who":"CD","why":"x"}}"#);
        assert!(play.refused(&ask).contains("between 1 and 500"));
    }
}

#[test]
fn a_tare_or_a_tare_check_is_set_aside() {
    let mut play = Play::open();
    let first = play.weigh("C1", "21.43");
    let check = play.weigh("C1", "21.47");
    wet_trials(&mut play, "S-1", &[(28, "C2", "20.00", "36.00")]);
    play.wait(4 * MINUTE).count(22);
    play.weigh("C1", "38.22");
    assert_eq!(play.shown("S-1")[1], "Liquid 2 C1 21.47 38.22");
    play.set_aside(check);
    assert_eq!(play.shown("S-1")[1], "Liquid 2 C1 21.43 38.22", "the earlier tare comes back");
    play.set_aside(first);
    assert_eq!(play.shown("S-1")[1], "Liquid 2 C1 owed 38.22");
    assert!(play.refused(&set_aside(first)).contains("no weighing or count in force"));
}

#[test]
fn a_wet_weighing_is_set_aside_and_its_slice_is_owed_again() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    let (wet, counts) = (play.trial("S-1", 0).wets[0].seq, play.trial("S-1", 0).counts.clone());
    play.intend("north", "S-1", "plastic");
    play.set_aside(wet);
    assert!(play.specimen("S-1").trials.is_empty());
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, counts, "where its count ended, whatever is in work there");
    assert_eq!(play.container("C1").standing, Standing::Free);
    play.weigh("C1", "38.25");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.25"]);
}

#[test]
fn a_dry_weighing_is_set_aside_and_a_wet_one_that_others_rest_on_is_not() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.oven("into_oven", &["C1"]);
    let dry = {
        play.wait(16 * HOUR);
        play.weigh("C1", "33.39")
    };
    let wet = play.trial("S-1", 0).wets[0].seq;
    assert!(play.refused(&set_aside(wet)).contains("set the whole trial aside"));
    play.set_aside(dry);
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22"]);
    assert_eq!(play.container("C1").standing, Standing::InOven, "as before that weighing");
}

#[test]
fn an_emptied_container_is_taken_back() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.wait(16 * HOUR).weigh("C1", "33.39");
    let before = documents(&play.lab);
    let emptied = play.weigh("C1", "21.44");
    assert_eq!(play.role_of(emptied), Some(Role::Emptied));
    play.scan("scan-n", "+undo");
    assert_eq!(documents(&play.lab)["container C1"], before["container C1"], "it was another container's empty mass");
    assert_eq!(play.container("C1").standing, Standing::Dry);
}

#[test]
fn undo_takes_back_the_latest_weighing_or_count() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    let undo = r#"{"ask":"undo","bench":"north"}"#;
    play.ask(undo);
    assert!(play.specimen("S-1").trials.is_empty() && play.bench("north").owed.is_some());
    play.ask(undo);
    assert!(play.bench("north").owed.is_none());
    assert!(play.specimen("S-1").counts[0].set_aside.is_some());
    assert!(play.refused(undo).contains("nothing at bench north"));
    let first = play.count(30);
    play.count(31);
    play.ask(undo);
    let owed = play.bench("north").owed.as_ref().unwrap();
    assert_eq!((owed.counts.as_slice(), owed.drops), ([first].as_slice(), 30), "the closure before is owed again");
}

#[test]
fn a_limit_that_cannot_be_obtained() {
    let mut play = Play::open();
    let ask =
        r#"{"ask":"not_obtainable","specimen":"S-1","limit":"plastic","because":"crumbles at every water content","who":"AB"}"#;
    play.ask(ask);
    assert!(limits(&play, "S-1").plasticity_index.non_plastic);
    assert!(play.specimen("S-1").plastic_not_obtainable.is_some());
    let nobody = ask.replace(r#","who":"AB""#, "");
    assert!(play.refused(&nobody).contains("say who"));
    play.ask(r#"{"ask":"not_obtainable","specimen":"S-1","limit":"liquid","because":"slides in the cup","who":"AB"}"#);
    assert!(play.specimen("S-1").liquid_not_obtainable.is_some());
    assert!(play.refused(r#"{"ask":"not_obtainable","specimen":"S-1","limit":"liquid","because":" "}"#).contains("say why"));
    assert!(play.refused(&ask.replace("S-1", "S-9")).contains("open it first"));
}

#[test]
fn several_specimens_on_several_benches_at_once() {
    let mut play = Play::open();
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    for (which, container, tare) in [("n", "C1", "21.43"), ("s", "D1", "20.00"), ("n", "C2", "20.50"), ("s", "D2", "20.10")] {
        play.weigh_at(which, container, tare);
    }
    play.intend("north", "S-1", "liquid");
    play.intend("south", "S-2", "liquid");
    play.count_at("cup-n", 30);
    play.count_at("cup-s", 20);
    play.scan("scan-n", "C1");
    play.scan("scan-s", "D1");
    play.settle("pan-s", "36.00");
    play.settle("pan-n", "38.22");
    play.lift("pan-n");
    play.lift("pan-s");
    play.intend("south", "S-1", "plastic");
    play.weigh_at("s", "D2", "29.00");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22", "Thread 1 D2 20.10 29.00"]);
    assert_eq!(play.shown("S-2"), ["Liquid 1 D1 20.00 36.00"]);
}

#[test]
fn containers_dry_for_days_across_a_restart() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00")]);
    play.oven("into_oven", &["C1", "C2"]);
    play.wait(16 * HOUR).restart();
    play.take(Input::Started { program: "0".into(), after_orderly_stop: false });
    play.wait(56 * HOUR).weigh("C1", "33.39");
    play.restart();
    play.weigh("C2", "31.20");
    for trial in &play.specimen("S-1").trials {
        assert!((71.9..72.2).contains(&trial.dries[0].oven_hours) && trial.dries[0].oven_recorded, "{trial:?}");
        assert_eq!(trial.dries[0].basis, tarecup_core::stamp::Basis::Wall, "across boots only wall time is left");
    }
}

#[test]
fn a_restart_in_the_middle_of_a_weighing_changes_nothing() {
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    play.restart();
    play.settle("pan-n", "21.43");
    play.restart();
    play.lift("pan-n");
    assert_eq!(play.container("C1").tares.len(), 1);
    assert!(play.bench("north").hand.is_none());
    let loose = play.settle("pan-n", "20.00");
    play.restart();
    play.scan("scan-n", "C2");
    assert_eq!(play.container("C2").tare().unwrap().seq, loose, "it still lay on the pan");
}

#[test]
fn an_intention_ends_after_the_set_time_and_at_an_orderly_stop() {
    let mut play = Play::open();
    play.intend("north", "S-1", "plastic");
    play.scan("scan-n", "C1");
    assert_eq!(play.lab.due_in_us(&play.now), Some(6 * HOUR));
    play.wait(6 * HOUR - 1);
    assert!(play.take(Input::Due).is_empty());
    assert_eq!(play.lab.due_in_us(&play.now), Some(1));
    play.wait(1);
    assert_eq!(kinds(&play.take(Input::Due)), ["intention_ended", "hand_emptied"]);
    assert!(play.take(Input::Due).is_empty() && play.lab.due_in_us(&play.now).is_none());
    play.intend("north", "S-1", "liquid");
    assert_eq!(kinds(&play.take(Input::Stopping)), ["intention_ended", "service_stopped"]);
    assert!(play.bench("north").intention.is_none());
}

#[test]
fn a_weighing_of_long_ago_does_not_end_what_the_bench_works_on() {
    let mut play = Play::open();
    let old = play.settle("pan-n", "21.43");
    play.lift("pan-n");
    play.wait(7 * HOUR).intend("north", "S-1", "plastic");
    play.tie(old, "C1", "tare");
    assert!(play.take(Input::Due).is_empty());
    assert!(play.bench("north").intention.is_some());
}

#[test]
fn a_slice_owed_for_five_minutes_is_said_aloud_once() {
    let mut play = Play::open();
    play.intend("north", "S-1", "liquid");
    let count = play.count(28);
    assert_eq!(play.lab.due_in_us(&play.now), Some(5 * MINUTE));
    play.wait(5 * MINUTE);
    let facts = play.take(Input::Due);
    assert!(matches!(&facts[..], [Fact::SliceOverdue { count: c, .. }] if *c == count), "{facts:?}");
    assert!(play.lab.guide(&bench_name("north")).unwrap().urgent);
    assert!(play.wait(MINUTE).take(Input::Due).is_empty());
    play.wait(6 * HOUR);
    assert_eq!(kinds(&play.take(Input::Due)), ["intention_ended", "count_superseded"], "the paste is long dry");
    assert!(play.bench("north").owed.is_none());
}

#[test]
fn a_net_balance() {
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    play.mass("pan-n", "21.43", false, Basis::Net);
    assert!(play.loose_why(play.last_weighing()).contains("without the tare key"));
    play.lift("pan-n");
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "liquid");
    play.count(28);
    play.scan("scan-n", "C1");
    play.mass("pan-n", "16.79", false, Basis::Net);
    play.lift("pan-n");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22"], "the tare is added");
    play.scan("scan-n", "C1");
    play.mass("pan-n", "38.22", false, Basis::Gross);
    assert_eq!(play.role_of(play.last_weighing()), Some(Role::Repeat));
}

#[test]
fn typed_mass_and_drops_are_marked() {
    let mut play = Play::open();
    play.intend("north", "S-1", "liquid");
    play.ask(r#"{"ask":"type_mass","bench":"north","container":"C1","mass_g":"21.43","who":"AB"}"#);
    play.ask(r#"{"ask":"type_drops","bench":"north","drops":28,"who":"AB"}"#);
    play.ask(r#"{"ask":"type_mass","bench":"north","container":"C1","mass_g":"38,22","who":"AB"}"#);
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22"]);
    let trial = play.trial("S-1", 0);
    assert!(trial.tare.as_ref().unwrap().typed && trial.wets[0].typed && trial.wets[0].balance.is_none());
    assert!(play.specimen("S-1").counts[0].typed && limits(&play, "S-1").trials[0].typed);
    let says = play.refused(r#"{"ask":"type_mass","bench":"north","container":"C1","mass_g":"60","who":"AB"}"#);
    assert!(says.contains("take another container"), "a typed mass that fits nothing is refused: {says}");
    assert!(play.refused(r#"{"ask":"type_drops","bench":"south","drops":28,"who":"AB"}"#).contains("say which specimen"));
}

#[test]
fn a_second_person_reviews_and_a_later_change_takes_it_back() {
    let mut play = Play::open();
    whole_specimen(&mut play, "S-1", "C");
    let review = |who: &str| format!(r#"{{"ask":"review","specimen":"S-1","who":"{who}"}}"#);
    for check in limits(&play, "S-1").checks.clone() {
        let (check, about) = (check.check, check.about);
        play.ask(&format!(
            r#"{{"ask":"answer_check","specimen":"S-1","check":"{check}","about":"{about}","says":"seen","who":"AB"}}"#
        ));
    }
    assert_eq!(limits(&play, "S-1").state, State::Complete, "{:?}", limits(&play, "S-1").checks);
    // Published data, answers computed for this project from the sheet: least squares 33.60, mean of two 18.88.
    let ll = limits(&play, "S-1").liquid_limit.as_ref().unwrap().value;
    let pl = limits(&play, "S-1").plastic_limit.as_ref().unwrap().value;
    assert!((ll - 33.60).abs() < 0.005 && (pl - 18.88).abs() < 0.005, "{ll} {pl}");
    assert!(play.refused(&review("AB")).contains("a second person reviews"));
    play.ask(&review("CD"));
    assert_eq!(limits(&play, "S-1").state, State::Reviewed);
    assert!(play.refused(&review("EF")).contains("reviewed already"));
    let revision = play.specimen("S-1").revision;
    let dry = play.trial("S-1", 0).dries[0].weighing.seq;
    play.ask(&format!(r#"{{"ask":"amend_mass","weighing":{dry},"mass_g":"41.20","who":"EF","why":"slip"}}"#));
    assert_ne!(limits(&play, "S-1").state, State::Reviewed);
    assert_eq!(play.specimen("S-1").revision, revision + 1);
    assert!(play.refused(&review("EF")).contains("a second person"), "who corrected does not review");
    play.ask(&review("CD"));
    assert_eq!(limits(&play, "S-1").state, State::Reviewed);
}

#[test]
fn a_hold_is_answered() {
    let mut play = Play::open();
    whole_specimen(&mut play, "S-1", "C");
    // Drops of the driest and the wettest trial exchanged: the flow line slopes the wrong way.
    for (n, drops) in [(0, 17), (3, 34)] {
        let count = play.trial("S-1", n).counts[0];
        play.ask(&format!(r#"{{"ask":"amend_drops","count":{count},"drops":{drops},"who":"AB","why":"other sheet"}}"#));
    }
    let holds: Vec<_> = tarecup_core::evaluate::open_holds(limits(&play, "S-1")).into_iter().cloned().collect();
    assert!(!holds.is_empty(), "{:?}", limits(&play, "S-1").checks);
    assert_eq!(limits(&play, "S-1").state, State::Provisional);
    assert!(play.refused(r#"{"ask":"review","specimen":"S-1","who":"CD"}"#).contains("answer its holds"));
    for hold in holds {
        let (check, about) = (hold.check, hold.about);
        let ask = |says: &str| {
            format!(r#"{{"ask":"answer_check","specimen":"S-1","check":"{check}","about":"{about}","says":"{says}","who":"CD"}}"#)
        };
        assert!(play.refused(&ask(" ")).contains("say why"));
        play.ask(&ask("first words"));
        play.ask(&ask("checked against the sheet"));
        assert_eq!(play.specimen("S-1").answers.iter().filter(|a| a.check == check && a.about == about).count(), 1);
    }
    assert_eq!(limits(&play, "S-1").state, State::Complete);
    let says = play.refused(r#"{"ask":"answer_check","specimen":"S-1","check":"moon","about":"x","says":"y","who":"CD"}"#);
    assert!(says.contains("no check"), "{says}");
}

#[test]
fn the_counter_tells_a_run_again() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "liquid");
    let run = play.run(27, 500, 553);
    play.take(Input::Count { cup: instrument("cup-n"), run: run.clone() });
    let first = play.last_count();
    let told = tarecup_core::sense::CountRun { drops: 28, last_input: 560, ..run.clone() };
    play.wait(3 * SECOND).take(Input::Count { cup: instrument("cup-n"), run: told.clone() });
    let second = play.last_count();
    let owed = play.bench("north").owed.as_ref().unwrap();
    assert_eq!((owed.counts.as_slice(), owed.drops), ([second].as_slice(), 28), "one closure, not two");
    assert!(play.specimen("S-1").count(first).unwrap().superseded.is_some());
    play.weigh("C1", "38.22");
    // The very same run once more, now that the slice is weighed: the trial takes the new number.
    let told = tarecup_core::sense::CountRun { drops: 29, ..told };
    play.take(Input::Count { cup: instrument("cup-n"), run: told.clone() });
    assert_eq!(limits(&play, "S-1").trials[0].closures, [29]);
    assert!(play.bench("north").owed.is_none());
    // A counter that was not set back goes on from there for the next paste: another count.
    let went_on = tarecup_core::sense::CountRun { drops: 51, began: play.now, ..told };
    play.take(Input::Count { cup: instrument("cup-n"), run: went_on });
    assert_eq!(limits(&play, "S-1").trials[0].closures, [29]);
    assert_eq!(play.bench("north").owed.as_ref().unwrap().drops, 51);
}

#[test]
fn a_loose_count_told_again_is_one_loose_count() {
    let mut play = Play::open();
    let run = play.run(27, 500, 553);
    play.take(Input::Count { cup: instrument("cup-n"), run: run.clone() });
    play.take(Input::Count { cup: instrument("cup-n"), run: tarecup_core::sense::CountRun { drops: 28, ..run } });
    assert_eq!(play.lab.loose_things().map(|l| l.seq).collect::<Vec<_>>(), [play.last_count()]);
}

#[test]
fn a_finished_specimen_is_forgotten_and_a_correction_of_its_tare_asks_for_it() {
    let mut play = Play::open();
    whole_specimen(&mut play, "S-1", "C");
    for check in limits(&play, "S-1").checks.clone() {
        let (check, about) = (check.check, check.about);
        play.ask(&format!(
            r#"{{"ask":"answer_check","specimen":"S-1","check":"{check}","about":"{about}","says":"seen","who":"AB"}}"#
        ));
    }
    play.lab.forget_finished();
    assert!(play.lab.specimen(&specimen_id("S-1")).is_some(), "its containers still hold its soil");
    let tare = play.trial("S-1", 0).tare.as_ref().unwrap().seq;
    for (c, tare) in [("C1", "17.33"), ("C2", "17.41"), ("C3", "17.45"), ("C4", "17.36"), ("C5", "20.63"), ("C6", "20.66")] {
        let seq = play.weigh(c, tare);
        assert_eq!(play.role_of(seq), Some(Role::Emptied));
    }
    let whole = play.specimen("S-1").clone();
    let mut lab: Lab = play.lab.clone();
    lab.forget_finished();
    assert!(lab.specimen(&specimen_id("S-1")).is_none());
    let ask = |text: &str| Input::Ask(serde_json::from_str(text).unwrap());
    let amend = format!(r#"{{"ask":"amend_mass","weighing":{tare},"mass_g":"17.30","who":"AB","why":"x"}}"#);
    assert_eq!(lab.wants(&ask(&amend)), [specimen_id("S-1")]);
    let seq = play.facts.len() as u64 + 1;
    assert!(lab.take(ask(&amend), play.now, seq).unwrap_err().0.contains("could not be read from the ledger"));
    assert_eq!(lab.wants(&ask(r#"{"ask":"undo","bench":"north"}"#)), [specimen_id("S-1")], "C6 would hold its soil again");
    lab.load(tarecup_core::lab::Loaded::Specimen(Box::new(whole)));
    let outcome = lab.take(ask(&amend), play.now, seq).unwrap();
    assert!(outcome.facts.iter().any(|f| matches!(f.fact, Fact::LimitsComputed { .. })), "the result follows");
}

#[test]
fn one_code_means_one_thing() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    assert!(play.refused(r#"{"ask":"open_specimen","specimen":"C1"}"#).contains("is a container"));
    assert!(play.refused(r#"{"ask":"register_container","container":"S-1"}"#).contains("is a specimen"));
    assert!(play.refused(r#"{"ask":"open_specimen","specimen":"S-1"}"#).contains("open already"));
    play.scan("scan-n", "S-1");
    assert_eq!(play.bench("north").intention.as_ref().unwrap().specimen, specimen_id("S-1"));
    play.scan("scan-n", "+plastic");
    play.scan("scan-n", "+by-CD");
    assert_eq!(play.bench("north").signed_in.as_ref().unwrap().as_str(), "CD");
    for code in ["+moon", "a b", "", "\u{0}\u{1b}[2J<b>"] {
        assert_eq!(kinds(&play.scan("scan-n", code)), ["refused"], "{code:?}");
        assert!(play.next_step("north").chars().all(|c| !c.is_control()));
    }
}

#[test]
fn after_a_crash_what_benches_and_containers_name_is_asked_for() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    let whole = play.specimen("S-1").clone();
    // Documents of containers and benches are there, that of the specimen is not yet.
    let mut lab = Lab::new(play.lab.setup().clone());
    lab.load(tarecup_core::lab::Loaded::Container(play.container("C1").clone()));
    lab.load(tarecup_core::lab::Loaded::Bench(play.bench("north").clone()));
    assert_eq!(lab.missing(), [specimen_id("S-1")]);
    let run = play.run(25, 900, 950);
    let mut without = lab.clone();
    let outcome = without.take(Input::Count { cup: instrument("cup-n"), run }, play.now, 100).unwrap();
    assert!(matches!(&outcome.facts[0].fact, Fact::Counted(c) if c.loose.as_ref().unwrap().contains("could not be read")));
    assert!(without.loose(100).is_some(), "and the count is not lost");
    lab.load(tarecup_core::lab::Loaded::Specimen(Box::new(whole)));
    assert!(lab.missing().is_empty());
}

#[test]
fn the_bench_says_what_comes_next() {
    let mut play = Play::open();
    let next =
        |play: &Play, words: &str| assert!(play.next_step("north").contains(words), "{words}: {}", play.next_step("north"));
    next(&play, "Read a specimen's code");
    play.scan("scan-n", "C1");
    next(&play, "Container C1 is in hand: put it on the pan, empty");
    play.settle("pan-n", "21.43");
    next(&play, "C1 is recorded: take it off");
    play.lift("pan-n");
    play.scan("scan-n", "S-1");
    next(&play, "trial 1 of 3: cut the groove");
    play.count(28);
    next(&play, "28 drops for S-1: take a slice");
    play.scan("scan-n", "C1");
    next(&play, "with the slice");
    play.settle("pan-n", "38.22");
    play.lift("pan-n");
    next(&play, "trial 2 of 3");
    play.scan("scan-n", "+plastic");
    next(&play, "roll threads");
    play.scan("scan-n", "C5");
    next(&play, "its empty mass is not known");
    play.settle("pan-n", "25.00");
    play.lift("pan-n");
    play.scan("scan-n", "C5");
    next(&play, "with more threads, or dried");
    assert!(play.lab.guide(&bench_name("nowhere")).is_none());
}

#[test]
fn words_have_a_length_that_fits_a_record() {
    let mut play = Play::open();
    let long = "x".repeat(1_001);
    let says = play.refused(&format!(r#"{{"ask":"open_specimen","specimen":"S-2","description":"{long}"}}"#));
    assert!(says.contains("at most 1000 characters"), "{says}");
    let seq = play.weigh("C1", "21.43");
    let says = play.refused(&format!(r#"{{"ask":"set_aside","what":{seq},"who":"AB","why":"{long}"}}"#));
    assert!(says.contains("at most 1000 characters"), "{says}");
}

#[test]
fn the_motor_was_stopped_and_went_on_with_its_running_total() {
    use tarecup_core::sense::count::Count;
    use tarecup_core::sense::{CountLimits, Happening};
    use tarecup_core::signal::Signal;
    let mut play = Play::open();
    play.intend("north", "S-1", "liquid");
    let mut sense = Count::new(CountLimits::default());
    let mut runs = Vec::new();
    let mut heard = |sense: &mut Count, play: &mut Play, signal: Signal, input: u64| {
        for happening in sense.hear(&signal, input, play.now).into_iter().flatten() {
            if let Happening::CountEnded(run) = happening {
                runs.push(run.drops);
                play.take(Input::Count { cup: instrument("cup-n"), run });
            }
        }
        play.wait(SECOND / 2);
    };
    (1..=20).for_each(|n| heard(&mut sense, &mut play, Signal::Total(n), 100 + u64::from(n)));
    play.wait(20 * SECOND);
    (21..=28).for_each(|n| heard(&mut sense, &mut play, Signal::Total(n), 100 + u64::from(n)));
    heard(&mut sense, &mut play, Signal::End(Some(28)), 200);
    assert_eq!(runs, [20, 28]);
    let owed = play.bench("north").owed.as_ref().unwrap();
    assert_eq!((owed.counts.as_slice(), owed.drops), ([play.last_count()].as_slice(), 28), "one closure of 28 drops");
}
