//! What happens in a laboratory, day by day: one test for each episode at the bench.

mod lab_bench;

use lab_bench::*;
use tarecup_core::fact::Fact;
use tarecup_core::lab::entities::Standing;
use tarecup_core::lab::role::Role;

fn limits<'a>(play: &'a Play, id: &str) -> &'a tarecup_core::limits::Limits {
    play.specimen(id).limits.as_ref().unwrap()
}

#[test]
fn the_tare_is_weighed_last() {
    let mut play = Play::open();
    play.intend("north", "S-1", "liquid");
    play.count(28);
    play.weigh("C1", "38.22");
    play.wait(16 * HOUR).weigh("C1", "33.39");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 owed 38.22 33.39"]);
    let seq = play.weigh("C1", "21.43");
    assert_eq!(play.role_of(seq), Some(Role::Tare));
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22 33.39"]);
    assert_eq!(play.container("C1").standing, Standing::Free);
    let water = limits(&play, "S-1").trials[0].water_percent.unwrap();
    assert!((water - 100.0 * 4.83 / 11.96).abs() < 1e-9, "{water}");
}

#[test]
fn weighed_with_its_lid_before_the_lid_was_registered() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    let seq = play.weigh("C1", "26.63");
    assert!(play.loose_why(seq).contains("say what the mass is"));
    play.ask(r#"{"ask":"register_container","container":"C1","lid_g":"5.20"}"#);
    play.say("north", "C1", "tare_with_lid");
    assert_eq!(play.container("C1").with_lid[0].seq, seq);
    assert_eq!(play.container("C1").tare().unwrap().mass, g("21.43"));
    assert!(play.lab.loose(seq).is_none());
}

#[test]
fn two_people_at_one_balance() {
    let mut play = Play::new(shared_balance());
    for (bench, who, specimen) in [("north", "AB", "S-1"), ("south", "CD", "S-2")] {
        play.ask(&format!(r#"{{"ask":"sign_in","bench":"{bench}","operator":"{who}"}}"#));
        play.ask(&format!(r#"{{"ask":"open_specimen","specimen":"{specimen}"}}"#));
        play.intend(bench, specimen, "liquid");
    }
    play.count_at("cup-n", 28);
    play.count_at("cup-s", 22);
    play.scan("scan-n", "C1");
    play.scan("scan-s", "C2");
    let seq = play.settle("pan-n", "36.00");
    assert!(play.loose_why(seq).contains("C1 (north), C2 (south)"), "{}", play.loose_why(seq));
    assert!(play.next_step("north").contains("read again") && play.next_step("south").contains("read again"));
    play.scan("scan-s", "C2");
    assert_eq!(play.shown("S-2"), ["Liquid 1 C2 owed 36.00"]);
    assert_eq!(play.trial("S-2", 0).wets[0].by.as_ref().unwrap().as_str(), "CD");
    play.lift("pan-n");
    assert!(play.bench("south").hand.is_none(), "it got its mass");
    assert_eq!(play.bench("north").hand.as_ref().unwrap().container, container_id("C1"), "the other one waits");
    let seq = play.settle("pan-n", "38.22");
    assert_eq!((play.role_of(seq), play.who(seq).as_deref()), (Some(Role::Wet), Some("AB")));
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 owed 38.22"]);
}

#[test]
fn two_slices_owed_at_a_shared_balance_and_scanner_the_screen_asks_whose() {
    let mut play = Play::new(shared_balance_and_scanner());
    for (bench, specimen, cup) in [("north", "S-1", "cup-n"), ("south", "S-2", "cup-s")] {
        play.ask(&format!(r#"{{"ask":"open_specimen","specimen":"{specimen}"}}"#));
        play.intend(bench, specimen, "liquid");
        play.count_at(cup, 25);
    }
    let seq = play.weigh("C1", "36.00");
    assert!(play.loose_why(seq).contains("S-1 or of S-2"), "{}", play.loose_why(seq));
    assert!(play.next_step("south").contains("S-1 or of S-2"), "both benches are asked");
    play.say("south", "C1", "wet");
    assert_eq!(play.shown("S-2"), ["Liquid 1 C1 owed 36.00"]);
    assert!(play.bench("south").owed.is_none() && play.bench("north").owed.is_some());
    assert!(play.bench("north").refusal.is_none(), "the other bench is no longer asked");
    assert!(play.bench("north").latest.is_none() && play.bench("south").latest.is_some(), "nor can it take it back");
    let seq = play.weigh("C2", "37.00");
    assert_eq!(play.role_of(seq), Some(Role::Wet), "only one slice is owed now");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C2 owed 37.00"]);
}

#[test]
fn a_scanner_shared_by_benches_with_balances_of_their_own() {
    let setup = setup(&[("pan-n", &["north"]), ("pan-s", &["south"]), ("scan-n", &["north", "south"])]);
    let mut play = Play::new(setup);
    play.scan("scan-n", "C1");
    let seq = play.settle("pan-s", "21.43");
    assert_eq!(play.role_of(seq), Some(Role::Tare));
    assert_eq!(play.bench("south").latest.as_ref().unwrap().seq, seq);
    play.lift("pan-s");
    assert!(play.bench("north").hand.is_none(), "its hand is used up, whichever balance took the mass");
}

#[test]
fn a_code_read_after_the_mass_at_a_shared_scanner_is_for_the_bench_of_the_balance() {
    let setup = setup(&[
        ("pan-n", &["north"]),
        ("pan-s", &["south"]),
        ("cup-n", &["north"]),
        ("cup-s", &["south"]),
        ("scan-n", &["north", "south"]),
    ]);
    let mut play = Play::new(setup);
    for (bench, specimen, cup) in [("north", "S-1", "cup-n"), ("south", "S-2", "cup-s")] {
        play.ask(&format!(r#"{{"ask":"sign_in","bench":"{bench}","operator":"{specimen}"}}"#));
        play.ask(&format!(r#"{{"ask":"open_specimen","specimen":"{specimen}"}}"#));
        play.intend(bench, specimen, "liquid");
        play.count_at(cup, 25);
    }
    play.settle("pan-s", "36.00");
    play.scan("scan-n", "C1");
    assert_eq!(play.shown("S-2"), ["Liquid 1 C1 owed 36.00"]);
    assert_eq!(play.trial("S-2", 0).wets[0].by.as_ref().unwrap().as_str(), "S-2");
    play.lift("pan-s");
    assert!(play.bench("north").hand.is_none());
}

#[test]
fn the_wet_weighing_was_forgotten() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "liquid");
    play.count(28);
    play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
    assert!(play.refused(r#"{"ask":"into_oven","containers":["C1"]}"#).contains("weigh it first"));
    play.wait(16 * HOUR);
    let seq = play.weigh("C1", "33.39");
    assert!(play.loose_why(seq).contains("should be empty"), "no determination is made up");
    assert!(play.specimen("S-1").trials.is_empty());
}

#[test]
fn a_second_closure_of_one_paste() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "liquid");
    let first = play.count(30);
    play.wait(2 * MINUTE);
    let second = play.count(31);
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [first, second]);
    play.wait(30 * SECOND).weigh("C1", "38.22");
    assert_eq!(play.trial("S-1", 0).counts, [first, second]);
    assert_eq!(limits(&play, "S-1").trials[0].closures, [30, 31]);
    assert_eq!(limits(&play, "S-1").trials[0].drops, Some(31.0), "the closure after which the slice was taken");
}

#[test]
fn a_paste_is_abandoned_by_card_or_by_a_late_count() {
    let mut play = Play::open();
    play.intend("north", "S-1", "liquid");
    let first = play.count(44);
    play.scan("scan-n", "+new-paste");
    assert!(play.bench("north").owed.is_none());
    assert!(play.specimen("S-1").count(first).unwrap().superseded.as_deref().unwrap().contains("new paste"));
    let second = play.count(30);
    play.wait(15 * MINUTE);
    let third = play.count(29);
    assert!(play.specimen("S-1").count(second).unwrap().superseded.is_some());
    assert_eq!(play.bench("north").owed.as_ref().unwrap().counts, [third]);
}

#[test]
fn a_count_for_another_specimen_gives_up_the_slice_owed_before_aloud() {
    let mut play = Play::open();
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    play.intend("north", "S-1", "liquid");
    let first = play.count(30);
    play.intend("north", "S-2", "liquid");
    play.count(20);
    assert!(play.specimen("S-1").count(first).unwrap().superseded.as_deref().unwrap().contains("S-2"));
    assert_eq!(play.bench("north").owed.as_ref().unwrap().specimen, specimen_id("S-2"));
}

#[test]
fn weighed_again_within_minutes() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    let seq = {
        play.wait(3 * MINUTE);
        play.weigh("C1", "38.19")
    };
    assert_eq!(play.role_of(seq), Some(Role::Repeat));
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22"]);
}

#[test]
fn dried_soil_on_another_balance_and_signed_by_another_person() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.ask(r#"{"ask":"sign_in","bench":"south","operator":"CD"}"#);
    play.wait(16 * HOUR).weigh_at("s", "C1", "33.39");
    let dry = &play.trial("S-1", 0).dries[0].weighing;
    assert_eq!((dry.balance.as_ref().unwrap().as_str(), dry.by.as_ref().unwrap().as_str()), ("pan-s", "CD"));
}

#[test]
fn threads_are_gathered_over_an_hour_into_one_container() {
    let mut play = Play::open();
    play.weigh("C1", "20.88");
    play.intend("north", "S-1", "plastic");
    for mass in ["23.10", "25.90", "27.44", "29.31"] {
        play.wait(20 * MINUTE).weigh("C1", mass);
    }
    play.oven("into_oven", &["C1"]);
    play.wait(16 * HOUR).weigh("C1", "27.80");
    assert_eq!(play.shown("S-1"), ["Thread 1 C1 20.88 29.31 27.80"]);
}

#[test]
fn the_oven_was_off_overnight_said_before_or_after_the_dry_weighing() {
    for said_first in [true, false] {
        let mut play = Play::open();
        wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
        play.oven("into_oven", &["C1"]);
        let from = play.now;
        play.wait(16 * HOUR);
        let off = format!(
            r#"{{"ask":"oven_off","from":"{}","to":"{}","who":"AB","why":"fuse"}}"#,
            from.plus_us(2 * HOUR).rfc3339(),
            from.plus_us(12 * HOUR).rfc3339()
        );
        if said_first {
            play.ask(&off);
        }
        play.weigh("C1", "33.90");
        if !said_first {
            assert_eq!(play.container("C1").standing, Standing::Dry);
            play.ask(&off);
        }
        let dry = &play.trial("S-1", 0).dries[0];
        assert!((5.9..6.1).contains(&dry.oven_hours), "{dry:?}");
        assert_eq!(play.container("C1").standing, Standing::Drying, "not dry by the method");
        play.ask(&off);
        assert!((5.9..6.1).contains(&play.trial("S-1", 0).dries[0].oven_hours), "the same night is taken away once");
    }
}

#[test]
fn a_container_was_dropped() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00")]);
    let aside = r#"{"ask":"set_aside_trial","specimen":"S-1","kind":"liquid","no":1,"who":"AB","why":"dropped"}"#;
    play.ask(aside);
    assert_eq!(play.container("C1").standing, Standing::Free);
    assert!(play.refused(aside).contains("set aside already"));
    assert!(limits(&play, "S-1").trials[0].set_aside.is_some());
    play.wait(4 * MINUTE).count(27);
    let seq = play.weigh("C1", "37.00");
    assert_eq!(play.role_of(seq), Some(Role::Wet), "used again at once, though lighter than the slice that was dropped");
    assert_eq!(play.shown("S-1")[2], "Liquid 3 C1 21.43 37.00");
}

#[test]
fn a_container_whose_trial_was_set_aside_may_still_be_weighed_dry_and_empty() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.ask(r#"{"ask":"set_aside_trial","specimen":"S-1","kind":"liquid","no":1,"who":"AB","why":"groove torn"}"#);
    play.oven("into_oven", &["C1"]);
    let seq = {
        play.wait(16 * HOUR);
        play.weigh("C1", "33.39")
    };
    assert_eq!(play.role_of(seq), Some(Role::Dry));
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22 33.39 aside"]);
    let seq = play.weigh("C1", "21.43");
    assert_eq!(play.role_of(seq), Some(Role::Emptied));
}

#[test]
fn a_slip_is_printed_twice() {
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    play.print("pan-n", "21.43");
    let first = play.last_weighing();
    assert_eq!(kinds(&play.wait(9 * SECOND).print("pan-n", "21.43")), ["slip_repeated"], "within ten seconds");
    let repeated = play.facts.last().unwrap();
    assert!(
        matches!(repeated.fact, Fact::SlipRepeated { weighing, input } if weighing == first && repeated.through == Some(input))
    );
    play.wait(SECOND).print("pan-n", "21.43");
    assert!(play.loose_why(play.last_weighing()).contains("no container is in hand"), "after ten seconds it is another one");
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    play.print("pan-n", "21.43");
    play.wait(3 * SECOND).scan("scan-n", "C2");
    play.wait(3 * SECOND).print("pan-n", "21.43");
    assert_eq!(play.container("C2").tare().unwrap().mass, g("21.43"), "a new code in between: two weighings");
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    play.print("pan-n", "21.43");
    assert_eq!(kinds(&play.wait(SECOND).print("pan-n", "21.44"))[0], "weighed", "another value");
}

#[test]
fn a_slip_printed_twice_around_the_code_that_was_read_for_it() {
    let mut play = Play::open();
    play.print("pan-n", "21.43");
    play.wait(3 * SECOND).scan("scan-n", "C1");
    assert_eq!(play.container("C1").tare().unwrap().mass, g("21.43"));
    assert_eq!(kinds(&play.wait(3 * SECOND).print("pan-n", "21.43")), ["slip_repeated"]);
    let loose: Vec<_> = play.lab.loose_things().collect();
    assert!(loose.is_empty(), "{loose:?}");
}

#[test]
fn the_code_is_read_after_the_mass() {
    let mut play = Play::open();
    let seq = play.settle("pan-n", "21.43");
    assert!(play.loose_why(seq).contains("read the code"));
    play.wait(5 * MINUTE).scan("scan-n", "C1");
    assert_eq!(play.container("C1").tare().unwrap().seq, seq, "a stream: as long as it is on the pan");
    play.lift("pan-n");
    assert!(play.bench("north").hand.is_none());
    let seq = play.settle("pan-n", "20.00");
    play.lift("pan-n");
    play.scan("scan-n", "C2");
    assert!(play.lab.loose(seq).is_some(), "and not after");
    for (wait, tied) in [(20 * SECOND, true), (20 * SECOND + 1, false)] {
        let mut play = Play::open();
        play.print("pan-n", "21.43");
        play.wait(wait).scan("scan-n", "C1");
        assert_eq!(play.lab.container(&container_id("C1")).is_some(), tied, "with a print key: {wait} µs after");
        assert_eq!(play.bench("north").hand.is_none(), tied);
    }
}

#[test]
fn a_code_that_does_not_fit_the_mass_on_the_pan_is_refused_and_used_up_with_it() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    let seq = play.settle("pan-n", "19.00");
    assert_eq!(kinds(&play.scan("scan-n", "C1")), ["taken_in_hand", "refused"]);
    assert!(play.next_step("north").contains("lighter"));
    assert_eq!(kinds(&play.lift("pan-n")), ["hand_emptied", "pan_cleared"]);
    assert!(play.lab.loose(seq).is_some());
    let next = play.settle("pan-n", "30.00");
    assert!(play.loose_why(next).contains("no container is in hand"), "the next container is not taken for C1");
}

#[test]
fn the_same_code_twice() {
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    assert!(play.scan("scan-n", "C1").is_empty());
    play.settle("pan-n", "21.43");
    assert!(play.scan("scan-n", "C1").is_empty(), "also after its mass");
    play.lift("pan-n");
    assert_eq!(play.container("C1").tares.len(), 1);
}

#[test]
fn another_code_before_any_mass_replaces_aloud() {
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    let facts = play.scan("scan-n", "C2");
    let Fact::TakenInHand { container, instead_of, .. } = &facts[0] else { panic!("{facts:?}") };
    assert_eq!((container.as_str(), instead_of.as_ref().unwrap().as_str()), ("C2", "C1"));
    assert!(play.next_step("north").contains("instead of C1"), "{}", play.next_step("north"));
    play.settle("pan-n", "20.00");
    assert!(play.lab.container(&container_id("C1")).is_none());
    let facts = play.scan("scan-n", "C3");
    assert!(matches!(&facts[0], Fact::TakenInHand { instead_of: None, .. }), "C2 got its mass: {facts:?}");
}

#[test]
fn a_code_that_was_not_understood_empties_the_hand_aloud() {
    let mut play = Play::open();
    play.scan("scan-n", "C1");
    let facts = play.take(tarecup_core::lab::Input::CodeUnread { scanner: instrument("scan-n"), input: 900 });
    assert_eq!(kinds(&facts), ["hand_emptied", "refused"]);
    assert!(play.next_step("north").contains("read it again"), "{}", play.next_step("north"));
    let seq = play.settle("pan-n", "25.00");
    assert_eq!(play.role_of(seq), None, "whose it is, nobody can know");
    // The control: a code that is understood is in hand as ever.
    play.lift("pan-n");
    play.scan("scan-n", "C1");
    let seq = play.settle("pan-n", "21.43");
    assert_eq!(play.container("C1").tares.last().map(|t| t.seq), Some(seq));
}

#[test]
fn the_code_of_a_container_in_use_when_a_slice_is_owed() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.weigh("C2", "20.00");
    play.wait(4 * MINUTE).count(22);
    let seq = play.weigh("C1", "39.50");
    assert!(play.loose_why(seq).contains("take another container"), "{}", play.loose_why(seq));
    assert!(play.bench("north").owed.is_some(), "the slice is still owed");
    assert!(play.refused(&tie(seq, "C1", "wet")).contains("set that trial aside"));
    play.tie(seq, "C2", "wet");
    assert_eq!(play.shown("S-1"), ["Liquid 1 C1 21.43 38.22", "Liquid 2 C2 20.00 39.50"]);
}
