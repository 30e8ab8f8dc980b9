//! Adapters without serial numbers: one that comes back at another socket is
//! listened to and believed nothing until a person has confirmed it.

#[path = "drivers_sink.rs"]
mod sink;

use sink::*;
use std::os::unix::fs::symlink;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex};
use std::time::Duration;
use tarecup_drivers::heard::PortState;
use tarecup_drivers::port::list::list_on;
use tarecup_drivers::port::place::Machine;
use tarecup_drivers::port::serial::{Extras, PortTask, QUIET};
use tarecup_drivers::profile::Profile;
use tarecup_simulators::pty::Pty;

/// A made-up machine with two adapters of one kind, real pseudo-terminals behind them.
struct Bench {
    root: tempfile::TempDir,
    ptys: Vec<(&'static str, Pty)>,
}

impl Bench {
    fn new() -> Self {
        let root = tempfile::tempdir().expect("a folder");
        for folder in ["dev/serial/by-id", "dev/serial/by-path", "sys/class/tty", "sys/devices"] {
            std::fs::create_dir_all(root.path().join(folder)).expect("a folder");
        }
        Self { root, ptys: Vec::new() }
    }

    fn at(&self, path: &str) -> PathBuf {
        self.root.path().join(path)
    }

    /// An adapter is plugged into a socket: it gets a name by the socket and one of the kernel's.
    fn plug(&mut self, socket: &'static str, number: &str) {
        let pty = Pty::open(&self.at(&format!("dev/serial/by-path/{socket}"))).expect("a pseudo-terminal");
        let name = pty.device().and_then(Path::file_name).expect("a device").to_owned();
        let usb = self.at("sys/devices").join(socket);
        std::fs::create_dir_all(&usb).expect("a folder");
        for (file, text) in [("idVendor", "1111"), ("idProduct", "2222"), ("serial", number)] {
            std::fs::write(usb.join(file), text).expect("a file");
        }
        let class = self.at("sys/class/tty").join(name);
        std::fs::create_dir_all(&class).expect("a folder");
        let _ = std::fs::remove_file(class.join("device"));
        symlink(&usb, class.join("device")).expect("a link");
        self.ptys.push((socket, pty));
    }

    fn unplug(&mut self, socket: &str) {
        let (_, pty) = self.ptys.iter_mut().find(|(s, _)| *s == socket).expect("plugged");
        let class = self.root.path().join("sys/class/tty").join(pty.device().and_then(Path::file_name).expect("a device"));
        pty.unplug();
        std::fs::remove_dir_all(class).expect("removed");
        self.ptys.retain(|(s, _)| *s != socket);
    }

    /// The name that both adapters of a kind claim leads to the one at this socket.
    fn claim(&self, socket: &str) {
        let (fresh, link) = (self.at("dev/serial/by-id/.new"), self.at("dev/serial/by-id/adapter"));
        let pty = &self.ptys.iter().find(|(s, _)| *s == socket).expect("plugged").1;
        symlink(pty.device().expect("a device"), &fresh).expect("a link");
        std::fs::rename(fresh, link).expect("renamed");
    }

    fn say(&mut self, socket: &str, line: &[u8]) {
        self.ptys.iter_mut().find(|(s, _)| *s == socket).expect("plugged").1.write(line).expect("written");
    }

    /// A port by the claimed name.
    fn open(&self, service: &Service, profile: &Arc<Profile>, unguarded: bool, known: Option<&str>) -> (PortTask, Arc<Mutex<Vec<String>>>) {
        let learned: Arc<Mutex<Vec<String>>> = Arc::default();
        let sink = Arc::clone(&learned);
        let extras = Extras {
            machine: Machine::below(self.root.path()),
            socket: known.map(String::from),
            learned: Some(Arc::new(move |_, socket| sink.lock().expect("sockets").push(socket.into()))),
            unguarded,
            ..Extras::default()
        };
        let path = self.at("dev/serial/by-id/adapter").display().to_string();
        (service.port_with(1, &path, profile, extras), learned)
    }
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
    let (port, learned) = bench.open(&service, &print_line(), false, None);
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
    let (port, _) = bench.open(&service, &print_line(), true, None);
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
    let (port, learned) = bench.open(&service, &signed_steady(), false, Some("left"));
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
    let (port, learned) = bench.open(&service, &print_line(), false, None);
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
    service.sink.until("moved", |_| learned.lock().expect("sockets").last().is_some_and(|s| s == "third"));
    service.sink.until_state(1, &PortState::Opened);
    service.stop(vec![port]);
}
