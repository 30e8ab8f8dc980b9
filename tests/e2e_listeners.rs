//! Subscribers that share nothing with the program: `mosquitto_sub`, and a Rust client.

use super::{Running, free_port, until};
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::Packet;
use rumqttc::v5::{Client, Event, MqttOptions};
use serde_json::Value;
use std::collections::BTreeMap;
use std::io::{BufRead, BufReader};
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex};
use std::time::Duration;

/// Messages in the order of arrival: topic and payload.
pub type Got = Arc<Mutex<Vec<(String, String)>>>;

/// The last payload at each topic.
pub fn last(got: &Got) -> BTreeMap<String, String> {
    got.lock().expect("messages").iter().cloned().collect()
}

/// Numbers of facts in the order of arrival.
pub fn seqs(got: &Got) -> Vec<u64> {
    let number = |p: &str| serde_json::from_str::<Value>(p).ok().and_then(|v| v["seq"].as_u64()).expect("a fact has a number");
    got.lock().expect("messages").iter().filter(|(t, _)| t.ends_with("/fact")).map(|(_, p)| number(p)).collect()
}

/// What is wrong with the order of facts for one who ignores numbers up to the last: jumps and missing ones.
pub fn gaps(seqs: &[u64], from: u64, through: u64) -> Vec<String> {
    let mut wrong = Vec::new();
    let mut at = from - 1;
    for &seq in seqs.iter().filter(|s| **s >= from) {
        if seq > at + 1 {
            wrong.push(format!("jump from {at} to {seq}"));
        }
        at = at.max(seq);
    }
    if at < through {
        wrong.push(format!("ends at {at}, not at {through}"));
    }
    wrong
}

/// `mosquitto_sub -v`, started again until the broker is there.
pub struct MosquittoSub {
    pub got: Got,
    child: Arc<Mutex<Option<Running>>>,
    over: Arc<AtomicBool>,
}

impl MosquittoSub {
    pub fn on(port: u16, filter: &str) -> Self {
        let got = Got::default();
        let child: Arc<Mutex<Option<Running>>> = Arc::default();
        let over = Arc::new(AtomicBool::new(false));
        let (sink, slot, done, filter) = (got.clone(), child.clone(), over.clone(), filter.to_owned());
        std::thread::spawn(move || {
            while !done.load(Ordering::SeqCst) {
                let mut command = Command::new("mosquitto_sub");
                command.args(["-h", "127.0.0.1", "-p", &port.to_string(), "-q", "1", "-V", "5", "-v", "-t", &filter]);
                let mut running = Running::start(command.stdout(Stdio::piped()).stderr(Stdio::null()));
                let out = running.0.stdout.take().expect("piped");
                *slot.lock().expect("slot") = Some(running);
                for line in BufReader::new(out).lines().map_while(Result::ok) {
                    if let Some((topic, payload)) = line.split_once(' ') {
                        sink.lock().expect("messages").push((topic.to_owned(), payload.to_owned()));
                    }
                }
                *slot.lock().expect("slot") = None;
                std::thread::sleep(Duration::from_millis(20));
            }
        });
        Self { got, child, over }
    }
}

impl Drop for MosquittoSub {
    fn drop(&mut self) {
        self.over.store(true, Ordering::SeqCst);
        *self.child.lock().expect("slot") = None;
    }
}

/// A Rust client that subscribes again after every reconnect.
pub struct RustSub {
    pub got: Got,
    pub client: Client,
    over: Arc<AtomicBool>,
}

impl RustSub {
    pub fn on(port: u16, filter: &str) -> Self {
        let mut options = MqttOptions::new(format!("reader-{}", free_port()), "127.0.0.1", port);
        options.set_max_packet_size(Some(2 << 20));
        options.set_connection_timeout(2);
        let (client, mut connection) = Client::new(options, 64);
        let (got, over) = (Got::default(), Arc::new(AtomicBool::new(false)));
        let (sink, done, asker, filter) = (got.clone(), over.clone(), client.clone(), filter.to_owned());
        std::thread::spawn(move || {
            for event in connection.iter() {
                if done.load(Ordering::SeqCst) {
                    return;
                }
                match event {
                    Ok(Event::Incoming(Packet::ConnAck(_))) => drop(asker.try_subscribe(&filter, QoS::AtMostOnce)),
                    Ok(Event::Incoming(Packet::Publish(p))) => {
                        let text = |b: &[u8]| String::from_utf8_lossy(b).into_owned();
                        sink.lock().expect("messages").push((text(&p.topic), text(&p.payload)));
                    }
                    Ok(_) => (),
                    Err(_) => std::thread::sleep(Duration::from_millis(20)),
                }
            }
        });
        Self { got, client, over }
    }
}

impl Drop for RustSub {
    fn drop(&mut self) {
        self.over.store(true, Ordering::SeqCst);
        let _ = self.client.try_disconnect();
    }
}

/// Debian's broker. What it retains lives in memory only: killed with -9 it forgets.
pub struct Mosquitto {
    pub port: u16,
    dir: tempfile::TempDir,
    child: Option<Running>,
}

impl Mosquitto {
    pub fn start() -> Self {
        let dir = tempfile::tempdir().expect("a folder");
        let port = free_port();
        // Started by root, it would change to a user who cannot read the folder.
        let text = format!("user root\nlistener {port} 127.0.0.1\nallow_anonymous true\nmax_queued_messages 100000\n");
        std::fs::write(dir.path().join("mosquitto.conf"), text).expect("written");
        let mut broker = Self { port, dir, child: None };
        broker.again();
        broker
    }

    fn conf(&self) -> PathBuf {
        Path::new(self.dir.path()).join("mosquitto.conf")
    }

    pub fn again(&mut self) {
        let program = ["/usr/sbin/mosquitto", "/usr/local/sbin/mosquitto"].into_iter().find(|p| Path::new(p).exists());
        let program = program.expect("mosquitto is installed (apt-get install mosquitto mosquitto-clients)");
        let mut command = Command::new(program);
        command.arg("-c").arg(self.conf()).stdout(Stdio::null()).stderr(Stdio::null());
        self.child = Some(Running::start(&mut command));
        let port = self.port;
        until("mosquitto listens", Duration::from_secs(15), || std::net::TcpStream::connect(("127.0.0.1", port)).is_ok());
    }

    pub fn kill9(&mut self) {
        self.child = None;
    }
}
