//! Adapters without serial numbers: one that comes back at another socket is
//! listened to and believed nothing until a person has confirmed it.

#[path = "drivers_sink.rs"]
mod sink;
#[path = "wire_bench.rs"]
mod wire_bench;

use sink::*;
use std::sync::{Arc, Mutex};
use std::time::Duration;
use tarecup_drivers::heard::PortState;
use tarecup_drivers::port::list::list_on;
use tarecup_drivers::port::place::Machine;
use tarecup_drivers::port::serial::{Extras, PortTask, QUIET};
use tarecup_drivers::profile::Profile;
use wire_bench::Bench;

/// A port by the claimed name.
fn open(
    bench: &Bench,
    service: &Service,
    profile: &Arc<Profile>,
    unguarded: bool,
    known: Option<&str>,
) -> (PortTask, Arc<Mutex<Vec<String>>>) {
    let learned: Arc<Mutex<Vec<String>>> = Arc::default();
    let sink = Arc::clone(&learned);
    let extras = Extras {
        machine: Machine::below(bench.root.path()),
        known_by: known.map(String::from),
        learned: Some(Arc::new(move |_, socket| sink.lock().expect("sockets").push(socket.into()))),
        unguarded,
        ..Extras::default()
    };
    let path = bench.at("dev/serial/by-id/adapter").display().to_string();
    (service.port_with(1, &path, profile, extras), learned)
}

const PRINTED: &[u8] = b"G      23.46 g\r\n";

fn in_doubt(state: &Option<PortState>) -> bool {
    matches!(state, Some(PortState::Unconfirmed(says)) if says.contains("left") && says.contains("right"))
}

/// The adapter at the left socket is pulled; its name now leads to the twin at the right one.
fn exchanged(bench: &mut Bench, service: &Service) {
    service.sink.until_state(1, &PortState::Opened);
    std::thread::sleep(QUIET + Duration::from_millis(50));
    bench.claim("right");
    bench.unplug("left");
    service.sink.until("lost", |t| t.states.iter().any(|s| s.1 == PortState::Lost));
}

#[test]
fn nothing_is_taken_from_a_twin_until_it_is_confirmed_and_answers_to_the_hand() {
    let (mut bench, service) = (Bench::new(), Service::new());
    ["left", "right"].into_iter().for_each(|s| bench.plug(s, ""));
    bench.claim("left");
    let (port, learned) = open(&bench, &service, &print_line(), false, None);
    exchanged(&mut bench, &service);
    service.sink.until("the question", |t| in_doubt(&t.states.last().map(|s| s.1.clone())));
    std::thread::sleep(QUIET + Duration::from_millis(50));
    for _ in 0..3 {
        bench.say("right", PRINTED);
        std::thread::sleep(Duration::from_millis(60));
    }
    assert_eq!(service.sink.took().lines.len(), 0, "not even kept as lines of this instrument");
    port.confirm();
    std::thread::sleep(Duration::from_millis(100));
    assert!(in_doubt(&service.sink.last_state(1)), "a word alone does not do");
    bench.say("right", PRINTED);
    service.sink.until_state(1, &PortState::Opened);
    assert_eq!(service.sink.masses(1), 0, "the line that confirmed is no weighing");
    bench.say("right", PRINTED);
    service.sink.until("a mass", |t| t.masses(1) == 1);
    assert_eq!(*learned.lock().expect("sockets"), ["left", "right"]);
    service.stop(vec![port]);
}

#[test]
fn without_the_guard_the_twins_line_becomes_a_mass() {
    // The control of the test above: the same exchange, and the check that nothing is taken fails.
    let (mut bench, service) = (Bench::new(), Service::new());
    ["left", "right"].into_iter().for_each(|s| bench.plug(s, ""));
    bench.claim("left");
    let (port, _) = open(&bench, &service, &print_line(), true, None);
    exchanged(&mut bench, &service);
    service.sink.until_state(1, &PortState::Opened);
    std::thread::sleep(QUIET + Duration::from_millis(50));
    bench.say("right", PRINTED);
    service.sink.until("the wrong mass", |t| t.masses(1) == 1);
    service.stop(vec![port]);
}

#[test]
fn a_streaming_twin_answers_by_a_change_and_one_put_back_needs_no_word() {
    let (mut bench, service) = (Bench::new(), Service::new());
    ["left", "right"].into_iter().for_each(|s| bench.plug(s, ""));
    bench.claim("right");
    // Known from before this start of the service.
    let (port, learned) = open(&bench, &service, &signed_steady(), false, Some("left"));
    service.sink.until("the question", |t| in_doubt(&t.states.last().map(|s| s.1.clone())));
    port.confirm();
    std::thread::sleep(QUIET + Duration::from_millis(50));
    for _ in 0..5 {
        bench.say("right", LINE);
    }
    std::thread::sleep(Duration::from_millis(100));
    assert!(in_doubt(&service.sink.last_state(1)), "it speaks by itself: that is no answer");
    bench.say("right", b"+   24.9571 g  S\r\n");
    service.sink.until_state(1, &PortState::Opened);
    assert_eq!(*learned.lock().expect("sockets"), ["right"]);
    bench.claim("left");
    bench.unplug("right");
    service.sink.until("the question again", |t| in_doubt(&t.states.last().map(|s| s.1.clone())));
    bench.plug("right", "");
    bench.claim("right");
    bench.unplug("left");
    service.sink.until_state(1, &PortState::Opened);
    service.stop(vec![port]);
}

#[test]
fn an_adapter_with_a_number_of_its_own_may_move_and_twins_are_listed_by_socket() {
    let (mut bench, service) = (Bench::new(), Service::new());
    bench.plug("left", "77");
    bench.plug("right", "");
    bench.claim("left");
    let (port, learned) = open(&bench, &service, &print_line(), false, None);
    service.sink.until_state(1, &PortState::Opened);
    let machine = Machine::below(bench.root.path());
    let listed: Vec<(bool, bool)> = list_on(&machine).iter().map(|f| (f.twin, f.stable.contains("by-path"))).collect();
    assert!(listed.len() == 2 && listed.contains(&(false, false)) && listed.contains(&(true, true)), "{listed:?}");
    let holders: Vec<Option<String>> = list_on(&machine).iter().map(tarecup_drivers::port::list::Found::holder).collect();
    let own = format!("process {})", std::process::id());
    assert_eq!(holders.iter().flatten().filter(|h| h.ends_with(&own)).count(), 1, "its holder is named: {holders:?}");
    // The same adapter at a third socket, by a new kernel name.
    bench.unplug("left");
    bench.plug("third", "77");
    bench.claim("third");
    let opened = |t: &Took| t.states.iter().filter(|s| s.1 == PortState::Opened).count();
    service.sink.until("opened again without a question", |t| opened(t) == 2);
    assert_eq!(*learned.lock().expect("adapters"), ["number 77"]);
    // Control: another number under the same name is asked about.
    bench.plug("left", "88");
    bench.claim("left");
    bench.unplug("third");
    let asked = |s: &PortState| matches!(s, PortState::Unconfirmed(w) if w.contains("number 77") && w.contains("number 88"));
    service.sink.until("the question", |t| t.states.last().is_some_and(|s| asked(&s.1)));
    service.stop(vec![port]);
}
