//! Facts are stored for good: one stored example of each kind must read and be written again byte for byte.
//!
//! If this fails, do not change the example: a ledger somewhere holds it. Add the next version beside it.

use std::collections::BTreeSet;
use tarecup_core::fact::Fact;

const STORED: &str = include_str!("frozen/facts.jsonl");

/// Every kind there is. The match makes a new kind fail to compile here, until it stands in the list and the file.
fn kinds() -> BTreeSet<&'static str> {
    fn known(fact: &Fact) {
        match fact {
            Fact::ServiceStarted { .. }
            | Fact::ServiceStopped {}
            | Fact::SettingsTaken { .. }
            | Fact::InstrumentChanged { .. } => (),
            Fact::LinesOverrun { .. } | Fact::LinesKept { .. } => (),
            Fact::ClockStepped { .. } | Fact::ClockUntrusted { .. } | Fact::ClockTrusted { .. } => (),
            Fact::SpecimenOpened(_) | Fact::SignedIn { .. } | Fact::SignedOut { .. } => (),
            Fact::IntentionSet { .. } | Fact::IntentionEnded { .. } | Fact::TakenInHand { .. } | Fact::HandEmptied { .. } => (),
            Fact::Refused { .. } | Fact::Weighed(_) | Fact::SlipRepeated { .. } | Fact::PanCleared { .. } => (),
            Fact::WeighingTied { .. } | Fact::Counted(_) | Fact::CountTied { .. } | Fact::CountSuperseded { .. } => (),
            Fact::SliceOverdue { .. } | Fact::SetAside { .. } | Fact::TrialSetAside { .. } | Fact::MassAmended { .. } => (),
            Fact::PenetrationEntered { .. } | Fact::PenetrationAmended { .. } => (),
            Fact::DropsAmended { .. } | Fact::ContainerRegistered { .. } | Fact::ContainerFreed { .. } => (),
            Fact::IntoOven { .. } | Fact::OutOfOven { .. } | Fact::OvenOff { .. } | Fact::NotObtainable { .. } => (),
            Fact::ClosureFailed { .. } | Fact::Explained { .. } | Fact::TrialMoved { .. } => (),
            Fact::BalanceCheckBegun { .. } | Fact::BalanceChecked(_) | Fact::CupChecked(_) => (),
            Fact::PanWatched { .. } | Fact::LeftOnPan { .. } => (),
            Fact::LimitsComputed { .. } | Fact::CheckAnswered { .. } | Fact::Reviewed { .. } => (),
        }
    }
    let _: fn(&Fact) = known;
    let all = "service_started service_stopped settings_taken instrument_changed lines_overrun lines_kept specimen_opened signed_in \
        signed_out intention_set intention_ended taken_in_hand hand_emptied refused weighed slip_repeated pan_cleared \
        weighing_tied counted count_tied count_superseded slice_overdue set_aside trial_set_aside mass_amended drops_amended \
        container_registered container_freed into_oven out_of_oven oven_off not_obtainable limits_computed check_answered reviewed \
        penetration_entered penetration_amended closure_failed explained trial_moved pan_watched left_on_pan \
        clock_stepped clock_untrusted clock_trusted balance_check_begun balance_checked cup_checked";
    all.split_whitespace().collect()
}

#[test]
fn stored_facts_read_and_are_written_byte_for_byte() {
    for line in STORED.lines() {
        let fact: Fact = serde_json::from_str(line).unwrap_or_else(|e| panic!("{e}: {line}"));
        assert_eq!(serde_json::to_string(&fact).unwrap(), line);
        assert!(line.starts_with(&format!("{{\"kind\":\"{}\"", fact.kind())), "{} is called so in storage too", fact.kind());
    }
}

#[test]
fn there_is_an_example_of_each_kind() {
    let stored: Vec<Fact> = STORED.lines().map(|l| serde_json::from_str(l).unwrap()).collect();
    assert_eq!(stored.iter().map(Fact::kind).collect::<BTreeSet<_>>(), kinds());
    assert_eq!(kinds().len(), 48);
}

#[test]
fn a_fact_of_an_unknown_kind_is_refused() {
    assert!(serde_json::from_str::<Fact>(r#"{"kind":"moon","fact":{}}"#).is_err());
    assert!(serde_json::from_str::<Fact>(r#"{"kind":"signed_out","fact":{"bench":"a b"}}"#).is_err());
}
