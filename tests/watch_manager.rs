//! What a service manager is told, and how much of the machine the shipped unit leaves open.

mod e2e_support;

use e2e_support::operator::Station;
use e2e_support::{free_port, tests_dir};
use std::os::unix::net::UnixDatagram;
use std::process::Command;
use std::time::{Duration, Instant};

/// What arrives at the service manager's socket within a time.
fn told(socket: &UnixDatagram, within: Duration) -> Vec<String> {
    let (until, mut all, mut buffer) = (Instant::now() + within, Vec::new(), [0; 4096]);
    while let Some(left) = until.checked_duration_since(Instant::now()).filter(|d| !d.is_zero()) {
        socket.set_read_timeout(Some(left)).expect("a time");
        if let Ok(length) = socket.recv(&mut buffer) {
            all.push(String::from_utf8_lossy(&buffer[..length]).into_owned());
        }
    }
    all
}

fn has(all: &[String], line: &str) -> bool {
    all.iter().any(|m| m.lines().any(|l| l == line))
}

#[test]
fn the_service_manager_hears_of_readiness_life_and_the_end() {
    let station = Station::new(&format!("[broker]\nlisten = \"127.0.0.1:{}\"", free_port()));
    let path = station.dir.path().join("notify");
    let socket = UnixDatagram::bind(&path).expect("a socket");
    station.start_in(&[("NOTIFY_SOCKET", path.as_os_str())]);
    let first = told(&socket, Duration::from_secs(6));
    assert!(has(&first, "READY=1") && has(&first, "WATCHDOG=1") && has(&first, "STATUS=recording"), "{first:?}");

    // Control: a service that hangs says nothing, so the manager's watchdog would act.
    station.signal(rustix::process::Signal::STOP);
    told(&socket, Duration::from_millis(300));
    assert_eq!(told(&socket, Duration::from_secs(5)), Vec::<String>::new());
    station.signal(rustix::process::Signal::CONT);
    assert!(has(&told(&socket, Duration::from_secs(5)), "WATCHDOG=1"));
    assert_eq!(station.term(), Some(0));
    assert!(has(&told(&socket, Duration::from_secs(1)), "STOPPING=1"));
}

/// How exposed a unit is, as the service manager's own tool rates it.
fn exposure(unit: &str) -> f64 {
    let folder = tempfile::tempdir().expect("a folder");
    let file = folder.path().join("tarecup.service");
    std::fs::write(&file, unit).expect("written");
    let mut command = Command::new("systemd-analyze");
    let ended = command.args(["security", "--offline=true", "--no-pager"]).arg(&file).output().expect("systemd-analyze runs");
    let said = String::from_utf8_lossy(&ended.stdout).into_owned();
    let rated = said.split("tarecup.service: ").nth(1).and_then(|t| t.split_whitespace().next()).and_then(|n| n.parse().ok());
    rated.unwrap_or_else(|| panic!("{said}{}", String::from_utf8_lossy(&ended.stderr)))
}

#[test]
fn the_shipped_unit_is_closed() {
    let unit = std::fs::read_to_string(tests_dir().join("../daemon/systemd/tarecup.service")).expect("it is there");
    let without = |start: &str| unit.lines().filter(|l| !l.starts_with(start)).collect::<Vec<_>>().join("\n");
    assert!(exposure(&unit) <= 1.1, "{}", exposure(&unit));
    assert!(exposure(&without("IPAddress")) <= 1.3);
    assert!(exposure(&without("Protect")) > 1.3, "control: an open unit is rated as such");
}
