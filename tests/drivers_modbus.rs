//! Instruments read over Modbus, against an independent server (pymodbus, by
//! tests/modbus_server.py): over a pair of pseudo-terminals, over TCP as
//! through a gateway, and over Modbus TCP.

#[path = "drivers_modbus_support.rs"]
mod support;

use std::time::{Duration, Instant};
use support::{Cable, MASS, Server, Service, TOTAL, alone, mass, profile, with};
use tarecup_core::signal::{Basis, Mark, Signal};
use tarecup_drivers::heard::{PortState, Reject, What};

/// −12.34 g at rest, net: two registers, high word first, then the status.
const AT_REST: &str = "holding 0 65535 64302 5";

#[test]
fn a_mass_comes_with_its_bytes_and_its_marks() {
    let _alone = alone();
    let cable = Cable::new();
    let server = Server::serial(&cable);
    server.told(AT_REST);
    let service = Service::start(&cable.here(), MASS);
    let (bytes, what) = service.next(|w| matches!(w, What::Signal(_)));
    // Unit, function, six bytes, the three registers, and the check that belongs to them.
    assert_eq!(bytes[..9], [1, 3, 6, 0xFF, 0xFF, 0xFB, 0x2E, 0, 5]);
    assert_eq!(tarecup_drivers::modbus::crc(&bytes[..9]).to_le_bytes(), bytes[9..]);
    let What::Signal(Signal::Mass(reading)) = &what else { panic!("{what:?}") };
    assert_eq!((reading.mass.ug(), reading.step.ug()), (-12_340_000, 10_000));
    assert_eq!((reading.mark, reading.basis), (Mark::Steady, Basis::Net));
    // What is stored says the same again.
    assert_eq!(profile(MASS).decode(&bytes), what);
    // It moves, then there is too much on the pan, then it cannot measure.
    server.told("holding 0 0 4607 0");
    service.next(|w| mass(w) == Some(46_070_000));
    server.told("holding 2 2");
    service.next(|w| *w == What::Signal(Signal::Overload));
    server.told("holding 2 10");
    service.next(|w| *w == What::Signal(Signal::NotReady));
    assert_eq!(server.told("asked"), "3", "only reading, and only the table of the profile");
}

#[test]
fn the_wrong_word_order_reads_another_mass() {
    let _alone = alone();
    let cable = Cable::new();
    let server = Server::serial(&cable);
    server.told("holding 0 1 4464 1");
    let service = Service::start(&cable.here(), MASS);
    service.next(|w| mass(w) == Some(700_000_000));
    service.stop();
    // The same registers under the other order: that this differs shows that the order matters.
    let service = Service::start(&cable.here(), &with(MASS, "high-first", "low-first"));
    let (_, what) = service.next(|w| matches!(w, What::Signal(Signal::Mass(_)) | What::Reject(_)));
    assert_eq!(what, What::Reject(Reject::Mass), "292,552,705 counts are more than a balance weighs");
    server.told("holding 0 7 0 1");
    service.next(|w| mass(w) == Some(70_000));
}

#[test]
fn a_total_is_polled_from_input_registers() {
    let _alone = alone();
    let cable = Cable::new();
    let server = Server::serial(&cable);
    let service = Service::start(&cable.here(), TOTAL);
    service.next(|w| *w == What::Signal(Signal::Total(0)));
    for n in [1, 2, 27] {
        server.told(&format!("input 7 {n}"));
        service.next(|w| *w == What::Signal(Signal::Total(n)));
    }
    assert_eq!(server.told("asked"), "4");
}

#[test]
fn exceptions_are_told_apart() {
    let _alone = alone();
    let cable = Cable::new();
    let server = Server::serial(&cable);
    let service = Service::start(&cable.here(), MASS);
    for (code, wanted) in [(2, What::Reject(Reject::NoPattern)), (6, What::Signal(Signal::NotReady))] {
        server.told(&format!("exception {code}"));
        let (bytes, _) = service.next(|w| *w == wanted);
        assert_eq!(bytes[..3], [1, 0x83, code], "the exception as it came");
    }
    server.told("exception 0");
    service.next(|w| mass(w) == Some(0));
    // The server itself refuses registers that it does not have.
    service.stop();
    let service = Service::start(&cable.here(), &with(MASS, "register = 40001", "register = 40900"));
    let (bytes, _) = service.next(|w| *w == What::Reject(Reject::NoPattern));
    // The status was answered before, and stands in front.
    assert_eq!((&bytes[..3], &bytes[7..10]), (&[1, 3, 2][..], &[1, 0x83, 2][..]));
}

#[test]
fn silence_and_late_answers_make_no_reading_of_their_own() {
    let _alone = alone();
    let cable = Cable::new();
    let server = Server::serial(&cable);
    server.told(AT_REST);
    let service = Service::start(&cable.here(), MASS);
    service.next(|w| mass(w).is_some());
    server.told("mute on");
    let before = service.frames();
    std::thread::sleep(Duration::from_millis(700));
    assert!(service.frames() <= before + 1, "silence is no line");
    server.told("mute off");
    service.next(|w| mass(w).is_some());
    // Answers after the timeout come as what they are, one by one, and nothing is taken for another.
    server.told("delay 0.25");
    let before = service.frames();
    std::thread::sleep(Duration::from_millis(1_500));
    assert!(service.all()[before..].iter().all(|(_, what)| mass(what) == Some(-12_340_000)));
    server.told("delay 0");
    service.next(|w| mass(w) == Some(-12_340_000));
    assert_eq!(service.states(), [PortState::Opened]);
}

#[test]
fn another_unit_and_noise_are_no_masses() {
    let _alone = alone();
    let cable = Cable::new();
    let server = Server::serial(&cable);
    server.told(AT_REST);
    // Nobody with this number is on the line: silence.
    let service = Service::start(&cable.here(), &with(MASS, "unit = 1\n", "unit = 9\n"));
    std::thread::sleep(Duration::from_millis(600));
    assert_eq!(service.frames(), 0);
    service.stop();
    // Somebody else answers.
    server.told("as 7");
    let service = Service::start(&cable.here(), MASS);
    let (bytes, _) = service.next(|w| *w == What::Reject(Reject::NoPattern));
    assert_eq!(bytes[0], 7);
    server.told("as 0");
    service.next(|w| mass(w).is_some());
    // A wrong check.
    server.told("flip on");
    service.next(|w| *w == What::Reject(Reject::Checksum));
    server.told("flip off");
    service.next(|w| mass(w).is_some());
    // Noise before the answer is kept as a line of its own, and the answer is the answer.
    server.told("noise 00");
    service.next(|w| mass(w).is_some());
    let (noise, what) = service.last_but_one();
    assert!(noise == [0] && matches!(what, What::Reject(_)), "{noise:?} {what:?}");
}

#[test]
fn a_server_killed_and_started_again_is_heard_within_two_seconds() {
    let _alone = alone();
    let cable = Cable::new();
    let server = Server::serial(&cable);
    server.told(AT_REST);
    let service = Service::start(&cable.here(), MASS);
    service.next(|w| mass(w).is_some());
    drop(server);
    let server = Server::serial(&cable);
    server.told("holding 0 0 100 1");
    let began = Instant::now();
    service.next(|w| mass(w) == Some(1_000_000));
    assert!(began.elapsed() < Duration::from_secs(2), "{:?}", began.elapsed());
    assert_eq!(service.states(), [PortState::Opened], "the cable was never pulled");
}

#[test]
fn a_cable_pulled_and_plugged_in_again_is_back_within_two_seconds() {
    let _alone = alone();
    let folder = tempfile::tempdir().expect("a folder");
    let link = folder.path().join("pan");
    let cable = Cable::new();
    let server = Server::serial(&cable);
    server.told(AT_REST);
    cable.link(&link);
    let service = Service::start(&link, MASS);
    service.next(|w| mass(w).is_some());
    drop((cable, server));
    service.until(&PortState::Lost);
    let cable = Cable::new();
    let server = Server::serial(&cable);
    server.told("holding 0 0 100 1");
    cable.link(&link);
    let began = Instant::now();
    service.next(|w| mass(w) == Some(1_000_000));
    assert!(began.elapsed() < Duration::from_secs(2), "{:?}", began.elapsed());
    assert_eq!(service.states(), [PortState::Opened, PortState::Lost, PortState::Opened]);
}

#[test]
fn a_port_of_another_program_is_refused_by_name() {
    let _alone = alone();
    let cable = Cable::new();
    let mut holder = std::process::Command::new("flock")
        .arg(cable.here())
        .args(["-c", "echo held; exec sleep 30"])
        .stdout(std::process::Stdio::piped())
        .spawn()
        .expect("flock of util-linux");
    let mut line = String::new();
    std::io::BufRead::read_line(&mut std::io::BufReader::new(holder.stdout.take().expect("its output")), &mut line)
        .expect("a line");
    let service = Service::start(&cable.here(), MASS);
    let says = service.refused();
    assert!(says.contains("uses it") && says.contains(&cable.here().display().to_string()), "{says}");
    holder.kill().expect("ended");
    holder.wait().expect("ended");
}

#[test]
fn over_tcp_as_through_a_gateway_and_as_modbus_tcp() {
    let _alone = alone();
    for (how, text) in [("rtu-tcp", MASS.to_string()), ("tcp", with(MASS, "framing = \"rtu\"", "framing = \"tcp\""))] {
        let (server, path) = Server::tcp(how, None);
        server.told(AT_REST);
        let service = Service::start(std::path::Path::new(&path), &text);
        let (bytes, what) = service.next(|w| mass(w).is_some());
        assert_eq!(mass(&what), Some(-12_340_000), "{how}");
        assert_eq!(bytes.len(), if how == "tcp" { 15 } else { 11 }, "{how}: the answer as it came");
        assert_eq!(profile(&text).decode(&bytes), what, "{how}");
        // The other wrapping is not understood: the framing matters.
        let other = if how == "tcp" { MASS.to_string() } else { with(MASS, "framing = \"rtu\"", "framing = \"tcp\"") };
        assert!(matches!(profile(&other).decode(&bytes), What::Reject(_)), "{how}");
        server.told("exception 2");
        service.next(|w| *w == What::Reject(Reject::NoPattern));
        drop(server);
        service.until(&PortState::Lost);
        let port = path.rsplit(':').next().and_then(|p| p.parse().ok());
        let (server, _) = Server::tcp(how, port);
        server.told("holding 0 0 100 1");
        let began = Instant::now();
        service.next(|w| mass(w) == Some(1_000_000));
        assert!(began.elapsed() < Duration::from_secs(2), "{how}: {:?}", began.elapsed());
        service.stop();
    }
}

#[test]
fn a_gateway_that_went_without_a_word_is_called_again() {
    let _alone = alone();
    let listener = std::net::TcpListener::bind("127.0.0.1:0").expect("a port");
    let path = format!("tcp://{}", listener.local_addr().expect("an address"));
    let service = Service::start(std::path::Path::new(&path), MASS);
    let (first, _) = listener.accept().expect("a call");
    let began = Instant::now();
    let (_second, _) = listener.accept().expect("another call");
    assert!(began.elapsed() > Duration::from_secs(5), "silence alone is no reason to hang up at once");
    assert_eq!((service.frames(), service.states()), (0, vec![PortState::Opened]));
    drop(first);
    service.stop();
}

#[test]
fn a_line_that_never_stops_talking_is_bounded_and_no_mass() {
    let _alone = alone();
    let listener = std::net::TcpListener::bind("127.0.0.1:0").expect("a port");
    let path = format!("tcp://{}", listener.local_addr().expect("an address"));
    let service = Service::start(std::path::Path::new(&path), MASS);
    let (mut line, _) = listener.accept().expect("a call");
    let noise: Vec<u8> = (0..=255).cycle().take(64 * 1024).collect();
    std::io::Write::write_all(&mut line, &noise).expect("said");
    let kept = || service.all().iter().map(|(bytes, _)| bytes.len()).sum::<usize>();
    let began = Instant::now();
    while kept() < noise.len() && began.elapsed() < Duration::from_secs(10) {
        std::thread::sleep(Duration::from_millis(20));
    }
    assert_eq!(kept(), noise.len(), "every byte is kept once");
    assert!(service.all().iter().all(|(bytes, what)| bytes.len() <= 1_024 && matches!(what, What::Reject(_))));
    service.stop();
}
