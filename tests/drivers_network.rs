//! Instruments behind a device server, over real TCP connections of this
//! machine: refused, dropped, silent, flooding, asked.

#[path = "drivers_sink.rs"]
mod sink;

use sink::*;
use std::io::{Read, Write};
use std::net::{TcpListener, TcpStream};
use std::time::{Duration, Instant};
use tarecup_drivers::heard::{PortState, Reject};
use tarecup_drivers::port::serial::{QUIET, UNENDED};
use tarecup_simulators::pty::Pty;

fn listener(address: &str) -> (TcpListener, String) {
    let listener = TcpListener::bind(address).expect("a listener");
    let at = listener.local_addr().expect("an address");
    (listener, format!("tcp://{at}"))
}

/// The device server's end of the next connection, once it has been quiet for so long that a line begins with its first byte.
fn accepted(listener: &TcpListener) -> TcpStream {
    let stream = listener.accept().expect("a connection").0;
    std::thread::sleep(QUIET + Duration::from_millis(30));
    stream
}

#[test]
fn lines_come_through_over_both_families_and_by_name() {
    let service = Service::new();
    let mut ports = Vec::new();
    for (id, address, by) in [(1, "127.0.0.1:0", "127.0.0.1"), (2, "[::1]:0", "[::1]"), (3, "127.0.0.1:0", "localhost")] {
        let (listener, _) = listener(address);
        let path = format!("tcp://{by}:{}", listener.local_addr().expect("an address").port());
        ports.push(service.port(id, &path, &signed_steady()));
        let mut peer = accepted(&listener);
        // However the network cuts it.
        peer.write_all(&LINE[..7]).expect("written");
        std::thread::sleep(Duration::from_millis(30));
        peer.write_all(&[&LINE[7..], LINE].concat()).expect("written");
        service.sink.until("two masses", |t| t.masses(id) == 2);
        peer.set_nonblocking(true).expect("set");
        assert!(peer.read(&mut [0; 8]).is_err(), "nothing was written to it");
    }
    service.stop(ports);
}

#[test]
fn what_cannot_be_connected_says_what_to_try() {
    let service = Service::new();
    let (closed, refused) = listener("127.0.0.1:0");
    drop(closed);
    let mut ports = Vec::new();
    for (id, path, words) in [
        (1, refused.as_str(), ["refused", "data port"]),
        (2, "tcp://no-such-host.invalid:4001", ["cannot be resolved", "spelling"]),
    ] {
        ports.push(service.port(id, path, &signed_steady()));
        service.sink.until("a refusal in words", |t| {
            let says =
                |s: &PortState| matches!(s, PortState::Refused(w) if w.starts_with(path) && words.iter().all(|x| w.contains(x)));
            t.states.iter().any(|s| s.0 == id && says(&s.1))
        });
    }
    // Control: the same port is opened as soon as somebody listens there.
    let began = Instant::now();
    let _open = TcpListener::bind(refused.trim_start_matches("tcp://")).expect("a listener");
    service.sink.until_state(1, &PortState::Opened);
    assert!(began.elapsed() <= Duration::from_secs(2), "{:?}", began.elapsed());
    service.stop(ports);
}

#[test]
fn a_dropped_connection_is_told_and_made_anew_within_two_seconds() {
    let service = Service::new();
    let (mut at, path) = listener("127.0.0.1:0");
    let port = service.port(1, &path, &signed_steady());
    let mut worst = Duration::ZERO;
    for round in 1..=3 {
        let mut peer = accepted(&at);
        peer.write_all(LINE).expect("written");
        peer.write_all(&LINE[..9]).expect("written");
        service.sink.until("a mass", |t| t.masses(1) == round);
        let address = at.local_addr().expect("an address");
        drop((at, peer));
        service.sink.until("the loss", |t| t.states.iter().any(|s| s.1 == PortState::Lost));
        service.sink.until("half a line", |t| t.rejects(1, Reject::CutOff) == round);
        std::thread::sleep(Duration::from_millis(400 * round as u64));
        at = TcpListener::bind(address).expect("the same address");
        worst = worst.max(service.sink.until_state(1, &PortState::Opened));
    }
    println!("a device server that is back is connected again after {} ms at worst", worst.as_millis());
    assert!(worst <= Duration::from_secs(2), "{worst:?}");
    assert_eq!(service.sink.masses(1), 3, "no half line became a mass");
    service.stop(vec![port]);
}

#[test]
fn a_peer_that_says_nothing_and_one_that_floods_disturb_no_other() {
    let dir = tempfile::tempdir().expect("a folder");
    let mut pan = Pty::open(&dir.path().join("pan")).expect("a pseudo-terminal");
    let service = Service::new();
    let ((silent, silent_path), (flood, flood_path)) = (listener("127.0.0.1:0"), listener("127.0.0.1:0"));
    let mut ports = vec![service.port(1, &silent_path, &signed_steady()), service.port(2, &flood_path, &signed_steady())];
    ports.push(service.port(3, &dir.path().join("pan").display().to_string(), &signed_steady()));
    let _silent = accepted(&silent);
    let mut peer = accepted(&flood);
    let before = memory();
    // One megabyte a second: noise, NULs, and no line end in the first half.
    let noise = |n: usize| (0..10_000usize).map(|i| [0xa5, b'7', b'\r', b'\n', 0][(i + n) % 5]).collect::<Vec<u8>>();
    let began = Instant::now();
    let (mut worst, mut sent) = (Duration::ZERO, 0);
    for n in 0..200 {
        let block = if n < 100 { vec![0x80; 10_000] } else { noise(n) };
        peer.write_all(&block).expect("taken");
        if n % 10 == 0 {
            let from = Instant::now();
            pan.write(LINE).expect("written");
            sent += 1;
            service.sink.until("the other's line", |t| t.masses(3) == sent);
            worst = worst.max(from.elapsed());
        }
        std::thread::sleep((began + Duration::from_millis(10) * n as u32).saturating_duration_since(Instant::now()));
    }
    let grown = memory().saturating_sub(before);
    println!("beside a flood of 1 MB/s a line takes {} ms at worst; memory grew by {grown} kB", worst.as_millis());
    assert!(worst <= Duration::from_millis(500), "{worst:?}");
    assert!(grown < 16_000, "{grown} kB");
    assert!(service.sink.took().rejects(2, Reject::TooLong) >= 1 && service.sink.took().counted > 100_000, "counted");
    assert_eq!((service.sink.masses(1), service.sink.masses(2)), (0, 0));
    assert_eq!(service.sink.last_state(1), Some(PortState::Opened), "a silent peer stays connected");
    // Control: after the noise the next good line is understood.
    peer.write_all(&[b"\r\n", LINE, LINE].concat()).expect("taken");
    service.sink.until("masses again", |t| t.masses(2) >= 1);
    service.stop(ports);
}

/// Resident memory of this process, kB.
fn memory() -> u64 {
    let status = std::fs::read_to_string("/proc/self/status").expect("a status");
    let line = status.lines().find(|l| l.starts_with("VmRSS:")).expect("VmRSS");
    line.split_whitespace().nth(1).and_then(|n| n.parse().ok()).expect("a number")
}

#[test]
fn an_asked_balance_is_asked_and_one_that_does_not_answer_is_not_pestered() {
    let service = Service::new();
    let asked = profile(include_str!("../config/profiles/asked-long.toml"));
    let (at, path) = listener("127.0.0.1:0");
    let port = service.port(1, &path, &asked);
    let mut peer = accepted(&at);
    peer.set_read_timeout(Some(Duration::from_secs(4))).expect("set");
    let request = b"WHAT MASS IS ON THE PAN NOW PLEASE";
    let mut heard = vec![0; request.len()];
    for n in 1..=3 {
        peer.read_exact(&mut heard).expect("asked");
        let text = String::from_utf8_lossy(&heard).into_owned();
        assert!(text.contains("MASS") || n > 1, "{text}");
        peer.write_all(b"THE PAN HOLDS +   23.4571 g AT REST\r\n").expect("written");
        service.sink.until("an answer", |t| t.masses(1) == n);
    }
    // From now on it stands still. What it is asked meanwhile would all be answered at once.
    peer.set_read_timeout(Some(Duration::from_millis(200))).expect("set");
    let (began, mut bytes) = (Instant::now(), 0);
    while began.elapsed() < Duration::from_secs(6) {
        let mut some = [0; 4096];
        bytes += peer.read(&mut some).unwrap_or(0);
    }
    let each = asked.ask().expect("a request").send.len();
    let usual = Duration::from_secs(6).as_millis() / asked.ask().expect("a request").every.as_millis();
    println!("asked {} times in 6 s without an answer; {usual} would be the usual pace", bytes / each);
    assert!((3..=7).contains(&(bytes / each)) && usual >= 20, "{bytes} bytes, {usual}");
    service.stop(vec![port]);
}

#[test]
fn bytes_without_an_end_are_given_up_and_the_rest_of_their_line_is_no_mass() {
    let dir = tempfile::tempdir().expect("a folder");
    let link = dir.path().join("pan");
    let mut pan = Pty::open(&link).expect("a pseudo-terminal");
    let service = Service::new();
    let port = service.port(1, &link.display().to_string(), &profile(include_str!("../config/profiles/plain-stream.toml")));
    service.sink.until_state(1, &PortState::Opened);
    std::thread::sleep(QUIET + Duration::from_millis(50));
    pan.write(b"     1").expect("written");
    let took = service.sink.until("given up", |t| t.rejects(1, Reject::Unended) == 1);
    assert!(took >= UNENDED - Duration::from_millis(200) && took <= Duration::from_secs(5), "{took:?}");
    // The tail alone would be another mass: 2.34 g for 12.34 g.
    pan.write(b"2.34 g\r\n").expect("written");
    service.sink.until("the tail", |t| t.rejects(1, Reject::FirstPartial) == 1);
    assert_eq!(service.sink.masses(1), 0);
    // Control: the next whole line is a mass, and a half line that goes on in time is one.
    pan.write(b"     12.34 g\r\n     1").expect("written");
    std::thread::sleep(Duration::from_secs(2));
    pan.write(b"2.34 g\r\n").expect("written");
    service.sink.until("two masses", |t| t.masses(1) == 2);
    service.stop(vec![port]);
}
