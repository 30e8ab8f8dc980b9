//! The drill: what it counts, and that its counting can fail.

use serde_json::Value;
use tarecup::drill::{Tally, drill, understood};
use tarecup_simulators::drill::{Balance, Mistake, Play};

fn seed() -> u64 {
    let random = std::time::SystemTime::now().duration_since(std::time::UNIX_EPOCH).expect("a time").as_nanos() as u64;
    let seed = std::env::var("DRILL_SEED").ok().and_then(|s| s.parse().ok()).unwrap_or(random);
    println!("DRILL_SEED={seed}");
    seed
}

fn share(of: &Value) -> f64 {
    of.as_f64().expect("a share")
}

/// Few specimens, so that the test is quick: the figures that count come from `tarecup drill` with thousands.
#[test]
fn mistakes_nobody_has_seen_are_noticed_and_clean_work_is_let_be() {
    let tally = drill(seed(), 92, &mut |_, _| ()).expect("it plays");
    println!("{}", tally.table());
    let json = tally.json();
    let rows = json["mistakes"].as_array().expect("rows");
    assert_eq!(rows.len(), Mistake::ALL.len());
    assert!(rows.iter().all(|r| r["planted"].as_u64() == Some(4)), "{rows:?}");
    let moved = json["overall"]["moved_result"].as_u64().expect("a count");
    assert!(moved > 25, "a drill whose mistakes move nothing proves nothing: {moved}");
    assert!(share(&json["overall"]["flagged_of_moved"]) >= 0.85, "{json}");
    assert!(share(&json["clean"]["false_holds"]) <= 0.05, "{json}");
    assert!(share(&json["clean"]["false_notes"]) <= 0.15, "{json}");
    assert_eq!(json["clean"]["incomplete"], 0, "clean work leads to results: {json}");
}

/// Control: the same count on sessions whose mistakes were left out notices nothing.
#[test]
fn where_nothing_was_planted_nothing_is_counted_as_noticed() {
    let mut player = tarecup::drill::Player::new().expect("a desk");
    let mut tally = Tally::new(1, 4);
    for session in 1..=4 {
        let play = Play {
            laboratory: 9,
            session,
            balance: Balance::Streaming,
            typed: false,
            mistake: None,
            begin_us: 1_772_434_800_000_000,
        };
        let (without, _) = player.play(&play, None).expect("it plays");
        let (with, _) = player.play(&play, None).expect("it plays");
        tally.planted(play.balance, Mistake::Warm, &without, &with);
    }
    let json = tally.json();
    assert_eq!((&json["overall"]["flagged"], &json["overall"]["moved_result"]), (&Value::from(0), &Value::from(0)), "{json}");
}

#[test]
fn the_same_seed_drills_the_same_and_every_line_is_understood() {
    assert_eq!(drill(11, 6, &mut |_, _| ()).expect("it plays"), drill(11, 6, &mut |_, _| ()).expect("it plays"));
    for balance in Balance::ALL {
        let play = Play { laboratory: 3, session: 2, balance, typed: false, mistake: None, begin_us: 1_772_434_800_000_000 };
        assert!(understood(&play), "{balance:?}");
    }
}
