//! Cards that stand for asks: each that is printed is understood, and does what its words say.

mod lab_bench;

use lab_bench::*;
use tarecup_core::fact::{Fact, Limit};
use tarecup_core::lab::CARDS;
use tarecup_core::lab::entities::Standing;

#[test]
fn every_card_is_understood() {
    for (card, words) in CARDS {
        let mut play = Play::open();
        wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
        play.count(25);
        play.scan("scan-n", "C1");
        let text = if card.ends_with('-') { format!("{card}KL") } else { card.to_string() };
        let facts = play.scan("scan-n", &text);
        assert!(!kinds(&facts).contains(&"refused"), "{text}: {facts:?}");
        assert!(words.chars().next().is_some_and(char::is_lowercase) && words.len() < 60, "{words}");
    }
    // The control: one that is not among them is refused, and those that are, are named.
    let mut play = Play::open();
    let Some(Fact::Refused { says, .. }) = play.scan("scan-n", "+moon").into_iter().next() else { panic!("not refused") };
    assert!(CARDS.iter().all(|(card, _)| says.contains(card)), "{says}");
}

#[test]
fn the_container_just_read_goes_into_the_oven_and_comes_out() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.scan("scan-n", "C1");
    let facts = play.scan("scan-n", "+oven-in");
    assert_eq!(kinds(&facts), ["into_oven", "hand_emptied"]);
    assert_eq!(play.container("C1").standing, Standing::InOven);
    assert!(play.bench("north").hand.is_none(), "the next mass is not that of what is in the oven");
    play.wait(16 * HOUR);
    play.scan("scan-n", "C1");
    assert_eq!(kinds(&play.scan("scan-n", "+oven-out")), ["out_of_oven", "hand_emptied"]);
    play.wait(HOUR).weigh("C1", "33.39");
    let dry = &play.trial("S-1", 0).dries[0];
    assert!(dry.oven_recorded && (15.9..16.1).contains(&dry.oven_hours), "{dry:?}");
}

#[test]
fn a_card_of_the_oven_without_a_container_is_refused() {
    let mut play = Play::open();
    assert_eq!(kinds(&play.scan("scan-n", "+oven-in")), ["refused"]);
    assert!(play.next_step("north").contains("read its code first"));
    // One that holds nothing is refused too, and stays in hand.
    play.scan("scan-n", "C9");
    assert_eq!(kinds(&play.scan("scan-n", "+oven-out")), ["refused"]);
    assert!(play.bench("north").hand.is_some());
}

#[test]
fn with_its_mass_on_the_pan_it_leaves_the_hand_when_it_is_taken_off() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "liquid");
    play.count(28);
    play.scan("scan-n", "C1");
    play.settle("pan-n", "38.22");
    assert_eq!(kinds(&play.scan("scan-n", "+oven-in")), ["into_oven"]);
    play.lift("pan-n");
    assert!(play.bench("north").hand.is_none());
    assert_eq!(play.container("C1").standing, Standing::InOven);
}

#[test]
fn a_limit_that_is_not_obtainable_is_said_by_whoever_is_signed_in() {
    let mut play = Play::open();
    play.scan("scan-n", "+no-plastic-limit");
    assert!(play.next_step("north").contains("read the specimen's code first"));
    play.scan("scan-n", "S-1");
    play.scan("scan-n", "+sign-out");
    assert_eq!(kinds(&play.scan("scan-n", "+no-plastic-limit")), ["refused"], "the result rests on who says it");
    play.scan("scan-n", "+by-AB");
    let facts = play.scan("scan-n", "+no-plastic-limit");
    assert!(facts.iter().any(|f| matches!(f, Fact::NotObtainable { limit: Limit::Plastic, .. })), "{facts:?}");
}
