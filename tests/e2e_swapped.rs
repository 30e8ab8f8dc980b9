//! Cables swapped under the running service: nothing of one sort of instrument
//! is ever taken for the other, and it is said what is the matter.

mod e2e_support;

use e2e_support::operator::{Cup, DROP, PORTS, Station};
use e2e_support::*;
use std::time::{Duration, Instant};

#[test]
fn swapped_cables_are_told_within_five_seconds_and_make_no_mass_and_no_count() {
    let station = Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port()));
    station.start();
    wait_up(&station.state, PORTS);
    let made = || {
        let facts = facts_after(&station.state, 0).expect("facts");
        let of = |kind: &str| facts.iter().filter(|f| f["kind"] == kind).count();
        (of("weighed"), of("counted"))
    };
    // Right at first: the control, by which each would have been taken.
    std::thread::sleep(Duration::from_millis(300));
    station.load("pan-1", "21.43");
    station.unload("pan-1");
    station.drops("cup-1", Cup::Numbered, 6, DROP);
    until("a mass and a count", PATIENCE, || made() == (1, 1));
    // Then the plugs change places, in mid-work.
    let began = Instant::now();
    let wrong = |name: &str| station.instrument(name)["state"] == "wrong_language";
    let mut n = 0;
    until("both are told", PATIENCE, || {
        n += 1;
        station.say("pan-1", &format!("DROP {n}\r\n"));
        station.say("cup-1", "+     50.94 g  S\r\n");
        std::thread::sleep(Duration::from_millis(50));
        wrong("pan-1") && wrong("cup-1")
    });
    let took = began.elapsed();
    println!("swapped cables were told after {} ms", took.as_millis());
    assert!(took <= Duration::from_secs(5), "{took:?}");
    station.say("pan-1", &format!("STOP {n}\r\n"));
    std::thread::sleep(Duration::from_millis(1_500));
    assert_eq!(made(), (1, 1), "no mass became a count, no count a mass");
    // And back again.
    station.load("pan-1", "33.39");
    station.unload("pan-1");
    until("the balance speaks again", PATIENCE, || station.instrument("pan-1")["state"] == "speaking" && made().0 == 2);
    assert_eq!(station.term(), Some(0), "{}", station.log());
}
