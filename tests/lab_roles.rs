//! Each row of the role table, through the laboratory's one way in: a code, a mass, and what became of it.

mod lab_bench;

use lab_bench::*;
use tarecup_core::lab::entities::Standing;
use tarecup_core::lab::role::Role;

/// A wet slice of 28 drops in C1, tare 21.43 g, wet 38.22 g.
fn wet_slice() -> Play {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play
}

/// The same dried for 16 hours to 33.39 g.
fn dried_slice() -> Play {
    let mut play = wet_slice();
    play.oven("into_oven", &["C1"]);
    play.wait(16 * HOUR).weigh("C1", "33.39");
    assert_eq!(play.container("C1").standing, Standing::Dry);
    play
}

#[test]
fn unknown_tare_with_a_slice_owed_is_wet_and_the_tare_is_owed() {
    let mut play = Play::open();
    play.intend("north", "S-1", "liquid");
    play.count(28);
    let seq = play.weigh("C1", "38.22");
    assert_eq!(play.role_of(seq), Some(Role::Wet));
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 owed 38.22"]);
    assert!(play.bench("north").owed.is_none());
}

#[test]
fn unknown_tare_with_plastic_or_natural_in_work_is_wet() {
    for (intention, want) in [("plastic", "Thread 1 C1 owed 28.00"), ("natural", "Natural 1 C1 owed 28.00")] {
        let mut play = Play::open();
        play.intend("north", "S-1", intention);
        play.weigh("C1", "28.00");
        assert_eq!(play.shown("S-1"), [want]);
    }
}

#[test]
fn unknown_tare_otherwise_is_a_tare() {
    let mut play = Play::open();
    let seq = play.weigh("C1", "21.43");
    assert_eq!(play.role_of(seq), Some(Role::Tare));
    assert_eq!((play.container("C1").tare().unwrap().mass, play.container("C1").standing), (g("21.43"), Standing::Free));
    play.intend("north", "S-1", "liquid");
    let seq = play.weigh("C2", "20.00");
    assert_eq!(play.role_of(seq), Some(Role::Tare), "a liquid limit in work, but no slice owed");
}

#[test]
fn empty_near_the_tare_is_a_tare_check_with_or_without_the_lid() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "liquid");
    play.count(28);
    let seq = play.weigh("C1", "21.45");
    assert_eq!(play.role_of(seq), Some(Role::TareCheck), "even with a slice owed");
    assert_eq!(play.container("C1").tare().unwrap().mass, g("21.45"), "the last one is in force");
    play.ask(r#"{"ask":"register_container","container":"C1","lid_g":"5.20"}"#);
    let seq = play.weigh("C1", "26.65");
    assert_eq!(play.role_of(seq), Some(Role::TareWithLid));
    assert_eq!(play.container("C1").tare().unwrap().mass, g("21.45"), "the lid is no part of the tare");
}

#[test]
fn empty_and_heavier_with_a_recent_count_is_wet() {
    let mut play = wet_slice();
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22"]);
    assert_eq!(play.trial("S-1", 0).counts.len(), 1);
    play.weigh("C2", "20.00");
    play.count(22);
    play.wait(15 * MINUTE - 10 * SECOND);
    let seq = play.weigh("C2", "36.00");
    assert_eq!(play.role_of(seq), Some(Role::Wet), "just within a quarter of an hour");
    play.weigh("C3", "20.00");
    play.count(19);
    play.wait(15 * MINUTE);
    let seq = play.weigh("C3", "36.00");
    assert!(play.loose_why(seq).contains("no slice is owed here"), "{}", play.loose_why(seq));
}

#[test]
fn empty_and_heavier_with_plastic_or_natural_in_work_is_wet() {
    for (intention, want) in [("plastic", "Thread 1 C1 21.43 28.00"), ("natural", "Natural 1 C1 21.43 28.00")] {
        let mut play = Play::open();
        play.weigh("C1", "21.43");
        play.intend("north", "S-1", intention);
        play.weigh("C1", "28.00");
        assert_eq!(play.shown("S-1"), [want]);
    }
}

#[test]
fn wet_and_near_the_wet_mass_is_a_repeat_that_changes_nothing() {
    let mut play = wet_slice();
    let seq = play.weigh("C1", "38.24");
    assert_eq!(play.role_of(seq), Some(Role::Repeat));
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22"]);
    assert_eq!(play.trial("S-1", 0).repeats[0].seq, seq, "it is kept");
}

#[test]
fn wet_threads_and_heavier_have_grown() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "plastic");
    for mass in ["24.00", "26.50", "28.70"] {
        play.wait(20 * MINUTE).weigh("C1", mass);
    }
    assert_eq!(play.role_of(play.last_weighing()), Some(Role::Grown));
    assert_eq!(play.shown("S-1"), ["Thread 1 C1 21.43 28.70"], "the last wet mass counts");
    assert_eq!(play.trial("S-1", 0).wets.len(), 3);
}

#[test]
fn wet_and_later_between_tare_and_wet_is_dry() {
    let mut play = wet_slice();
    let seq = {
        play.wait(16 * HOUR);
        play.weigh("C1", "33.39")
    };
    assert_eq!(play.role_of(seq), Some(Role::Dry));
    let dry = &play.trial("S-1", 0).dries[0];
    assert!(!dry.oven_recorded && (15.9..16.1).contains(&dry.oven_hours), "{dry:?}");
}

#[test]
fn too_early_is_dry_too_and_the_result_says_so() {
    let mut play = wet_slice();
    play.oven("into_oven", &["C1"]);
    let seq = {
        play.wait(2 * HOUR);
        play.weigh("C1", "34.10")
    };
    assert_eq!(play.role_of(seq), Some(Role::Dry));
    assert_eq!(play.container("C1").standing, Standing::Drying);
    let checks = &play.specimen("S-1").limits.as_ref().unwrap().checks;
    assert!(checks.iter().any(|c| c.about == "liquid 1" && c.facts.contains(&seq)), "{checks:?}");
}

#[test]
fn dry_and_near_dry_is_a_further_dry_weighing_that_proves_something_only_after_the_oven() {
    let mut play = wet_slice();
    play.oven("into_oven", &["C1"]);
    play.wait(4 * HOUR).weigh("C1", "33.40");
    play.wait(2 * HOUR);
    let seq = play.weigh("C1", "33.39");
    assert_eq!(play.role_of(seq), Some(Role::FurtherDry));
    assert_eq!(play.trial("S-1", 0).dries[1].since_previous_hours, Some(0.0), "it was not put back");
    assert_eq!(play.container("C1").standing, Standing::Drying);
    play.oven("into_oven", &["C1"]);
    play.wait(2 * HOUR).weigh("C1", "33.39");
    let again = &play.trial("S-1", 0).dries[2];
    assert!((1.9..2.1).contains(&again.since_previous_hours.unwrap()), "{again:?}");
    assert_eq!(play.container("C1").standing, Standing::Dry, "constant mass after two hours back in");
}

#[test]
fn dry_complete_and_near_the_tare_is_emptied_and_free() {
    let mut play = dried_slice();
    let seq = play.weigh("C1", "21.42");
    assert_eq!(play.role_of(seq), Some(Role::Emptied));
    assert_eq!((play.container("C1").standing, play.container("C1").holding.is_none()), (Standing::Free, true));
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22 33.39"], "the tare in force at the wet weighing counts");
}

#[test]
fn any_other_state_is_loose_and_the_screen_asks() {
    let mut play = wet_slice();
    for (mass, word) in [("41.00", "already holds"), ("21.43", "has not been weighed dry"), ("19.00", "lighter")] {
        let seq = play.weigh("C1", mass);
        assert!(play.loose_why(seq).contains(word), "{mass}: {}", play.loose_why(seq));
        assert!(play.next_step("north").contains(word), "the screen asks");
    }
    let mut play = dried_slice();
    for (mass, word) in [("27.00", "was soil lost"), ("36.00", "take up moisture"), ("19.00", "lighter")] {
        let seq = play.weigh("C1", mass);
        assert!(play.loose_why(seq).contains(word), "{mass}: {}", play.loose_why(seq));
    }
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    let seq = play.weigh("C1", "30.00");
    assert!(play.loose_why(seq).contains("should be empty"), "{}", play.loose_why(seq));
}

#[test]
fn the_operator_can_always_say_the_role() {
    let mut play = dried_slice();
    play.weigh("C1", "27.00");
    play.say("north", "C1", "dry");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22 33.39 27.00"]);
    assert!(play.say("north", "C1", "further_dry").is_empty(), "said already");
    play.weigh("C1", "23.00");
    play.say("north", "C1", "tare");
    assert_eq!((play.container("C1").tare().unwrap().mass, play.container("C1").standing), (g("23.00"), Standing::Free));
    assert!(play.bench("north").refusal.is_none());
}

#[test]
fn what_no_state_allows_is_refused_in_words() {
    let mut play = wet_slice();
    let loose = play.weigh("C1", "41.00");
    for (role, word) in
        [("wet", "set that trial aside"), ("tare", "holds wet soil"), ("emptied", "holds wet soil"), ("grown", "no threads")]
    {
        let says = play.refused(&tie(loose, "C1", role));
        assert!(says.contains(word), "{role}: {says}");
    }
    for role in ["dry", "repeat", "further_dry"] {
        assert!(play.refused(&tie(loose, "C9", role)).contains("holds no determination"));
    }
    assert!(play.refused(&tie(loose, "C9", "wet")).contains("no slice is owed here"));
    assert!(play.refused(&tie(999, "C9", "tare")).contains("no weighing has the number 999"));
}

#[test]
fn a_mass_of_nothing_or_less_belongs_to_nothing() {
    let mut play = Play::open();
    for mass in ["0.00", "-21.43"] {
        let seq = play.weigh("C1", mass);
        assert!(play.loose_why(seq).contains("zero the balance"), "{}", play.loose_why(seq));
    }
}
