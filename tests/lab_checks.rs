//! Checks of instruments, and what a container's own history says of its empty mass.

mod lab_bench;

use lab_bench::{Play, documents, g, instrument, reloaded, specimen_id, two_benches};
use tarecup_core::fact::{BalanceChecked, Fact};
use tarecup_core::limits::{CheckRow, Severity};
use tarecup_core::soil::uncertainty::BalanceRule;

fn checked(facts: &[Fact]) -> Option<&BalanceChecked> {
    facts.iter().find_map(|f| match f {
        Fact::BalanceChecked(c) => Some(c),
        _ => None,
    })
}

const ASK: &str = r#"{"ask":"check_balance","balance":"pan-n","nominal_g":"50","class":"M1","who":"AB"}"#;

/// Tolerance: class M1 at 50 g, 3.0 mg (OIML R 111-1, table 1), and a step of the balance.
#[test]
fn the_next_mass_is_the_check_and_nobody_is_asked_for_it() {
    let mut play = Play::open();
    play.ask(ASK);
    let facts = play.mass("pan-n", "50.00", false, tarecup_core::signal::Basis::Gross);
    let check = checked(&facts).expect("a check").clone();
    assert!(check.passed && check.error == g("0") && check.tolerance > g("0.003"), "{check:?}");
    assert_eq!(play.lab.loose_things().count(), 0, "it is no container's mass");
    let state = play.lab.instrument(&instrument("pan-n")).unwrap();
    assert_eq!((state.checks.len(), state.check_begun.is_some()), (1, false));
    assert_eq!(documents(&reloaded(&play.lab)), documents(&play.lab));
    play.lift("pan-n");
    // Control: the mass after it is loose as ever.
    let facts = play.mass("pan-n", "50.00", false, tarecup_core::signal::Basis::Gross);
    assert!(checked(&facts).is_none() && play.lab.loose_things().count() == 1);
    // … until a check is asked for while it still lies there.
    let facts = play.ask(ASK);
    assert!(checked(&facts).is_some() && play.lab.loose_things().count() == 0);
}

#[test]
fn what_cannot_be_judged_is_refused() {
    let mut play = Play::open();
    let says = play.refused(r#"{"ask":"check_balance","balance":"pan-n","nominal_g":"37","class":"M1","who":"AB"}"#);
    assert!(says.contains("tolerance_g"), "{says}");
    let says = play.refused(r#"{"ask":"check_balance","balance":"pan-x","nominal_g":"50","class":"M1","who":"AB"}"#);
    assert!(says.contains("pan-n"), "{says}");
    let slip = r#"{"ask":"check_balance","balance":"pan-n","nominal_g":"50","certificate_g":"5.0001","class":"F2","who":"AB"}"#;
    assert!(play.refused(slip).contains("slip"));
    let cup = r#"{"ask":"check_cup","cup":"cup-n","drop_height_mm":0,"wear":"none","base":"hard","who":"AB"}"#;
    assert!(play.refused(cup).contains("10 mm"));
    let facts = play.ask(r#"{"ask":"check_cup","cup":"cup-n","drop_height_mm":10.0,"wear":"none","base":"hard","who":"AB"}"#);
    assert!(matches!(facts[0], Fact::CupChecked(_)));
    assert_eq!(play.lab.instrument(&instrument("cup-n")).unwrap().cup_checks.len(), 1);
}

fn row(play: &Play, check: &str) -> Option<CheckRow> {
    let limits = play.lab.specimen(&specimen_id("S-1"))?.limits.as_ref()?;
    limits.checks.iter().find(|c| c.check == check).cloned()
}

fn one_trial(play: &mut Play) {
    play.weigh("C1", "20.00");
    play.intend("north", "S-1", "liquid");
    play.count(25);
    play.weigh("C1", "34.00");
}

#[test]
fn a_balance_that_failed_or_was_not_checked_shows_in_the_result() {
    let mut failed = Play::open();
    failed.ask(ASK);
    let facts = failed.mass("pan-n", "50.20", false, tarecup_core::signal::Basis::Gross);
    assert!(!checked(&facts).expect("a check").passed);
    failed.lift("pan-n");
    one_trial(&mut failed);
    assert_eq!(row(&failed, "balance_failed").map(|c| c.severity), Some(Severity::Hold));

    for overdue in [Severity::Note, Severity::Hold] {
        let mut setup = two_benches();
        setup.balance_rule = Some(BalanceRule { every_us: 86_400_000_000, tolerance: Some(g("0.05")), overdue });
        let mut play = Play::new(setup.clone());
        play.ask(r#"{"ask":"open_specimen","specimen":"S-1"}"#);
        one_trial(&mut play);
        assert_eq!(row(&play, "balance_overdue").map(|c| c.severity), Some(overdue));
        let mut good = Play::new(setup);
        good.ask(r#"{"ask":"open_specimen","specimen":"S-1"}"#);
        good.ask(ASK);
        good.mass("pan-n", "50.02", false, tarecup_core::signal::Basis::Gross);
        good.lift("pan-n");
        one_trial(&mut good);
        assert_eq!((row(&good, "balance_overdue"), row(&good, "balance_failed")), (None, None));
    }
}

/// Two containers of one size, weighed empty before and again with their codes exchanged.
#[test]
fn empty_masses_exchanged_are_named_where_the_containers_were_weighed_before() {
    let weighed = |again: [&str; 2]| {
        let mut play = Play::open();
        play.weigh("C1", "20.00");
        play.weigh("C2", "20.04");
        play.weigh("C1", again[0]);
        play.weigh("C2", again[1]);
        play.intend("north", "S-1", "liquid");
        for container in ["C1", "C2"] {
            play.count(25);
            play.weigh(container, "34.00");
        }
        row(&play, "tare_changed")
    };
    let named = weighed(["20.04", "20.00"]).expect("a word");
    assert!(named.severity == Severity::Hold && named.says.contains("exchanged"), "{named:?}");
    assert_eq!(weighed(["20.01", "20.03"]), None, "control: as it is");
}
