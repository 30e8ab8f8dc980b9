//! What the tests of publishing share: a real broker, a gate in front of it, an independent reader.

// Each test program uses a part of this.
#![allow(dead_code)]

use std::net::TcpListener as StdListener;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::sync::atomic::{AtomicBool, AtomicU64, AtomicUsize, Ordering};
use std::sync::{Arc, Mutex};
use std::time::{Duration, Instant};

use bytes::Bytes;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::Packet;
use rumqttc::v5::{AsyncClient, Event, MqttOptions};
use rustix::process::{Pid, Signal, kill_process};
use tarecup::publish::{Courier, CourierEvent, CourierSettings, Outgoing, Past, spawn};
use tempfile::TempDir;
use tokio::io::{AsyncBufReadExt, AsyncReadExt, AsyncWriteExt};
use tokio::net::{TcpListener, TcpStream};

pub const ROOT: &str = "tarecup/v1";
pub const STATION: &str = "wet-room";

pub fn topic(tail: &str) -> String {
    format!("{ROOT}/{STATION}/{tail}")
}

pub fn free_port() -> u16 {
    StdListener::bind("127.0.0.1:0").expect("a free port").local_addr().expect("an address").port()
}

/// Waits for a condition; the message says what was waited for.
pub async fn until(what: &str, limit: Duration, mut done: impl FnMut() -> bool) {
    let start = Instant::now();
    while !done() {
        assert!(start.elapsed() < limit, "waited {limit:?} in vain: {what}");
        tokio::time::sleep(Duration::from_millis(5)).await;
    }
}

/// Debian's broker as a child process.
pub struct Mosquitto {
    pub dir: TempDir,
    pub port: u16,
    pub conf: PathBuf,
    child: Option<Child>,
}

impl Mosquitto {
    /// A broker for everybody on a free loopback port, with further lines of configuration.
    pub async fn open(more: &str) -> Self {
        let mut broker = Self::absent(free_port(), more);
        broker.start().await;
        broker
    }

    pub fn absent(port: u16, more: &str) -> Self {
        let dir = TempDir::new().expect("a directory");
        let text = format!(
            "listener {port} 127.0.0.1\nallow_anonymous true\nmax_queued_messages 100000\nmax_inflight_messages 200\nset_tcp_nodelay true\n{more}\n"
        );
        Self::with(dir, port, &text)
    }

    pub fn with(dir: TempDir, port: u16, text: &str) -> Self {
        let conf = dir.path().join("mosquitto.conf");
        // Started by root, the broker would change to a user who cannot read the temporary directory.
        std::fs::write(&conf, format!("user root\n{text}")).expect("written");
        Self { dir, port, conf, child: None }
    }

    pub fn path(&self, name: &str) -> PathBuf {
        self.dir.path().join(name)
    }

    pub async fn start(&mut self) {
        let log = std::fs::File::create(self.path("log")).expect("a log");
        let child = Command::new("/usr/sbin/mosquitto")
            .arg("-c")
            .arg(&self.conf)
            .stdout(Stdio::null())
            .stderr(log)
            .spawn()
            .expect("mosquitto is installed");
        self.child = Some(child);
        let start = Instant::now();
        while TcpStream::connect(("127.0.0.1", self.port)).await.is_err() {
            let log = std::fs::read_to_string(self.path("log")).unwrap_or_default();
            assert!(start.elapsed() < Duration::from_secs(10), "mosquitto does not listen: {log}");
            tokio::time::sleep(Duration::from_millis(10)).await;
        }
    }

    pub fn signal(&self, signal: Signal) {
        let child = self.child.as_ref().expect("running");
        kill_process(Pid::from_child(child), signal).expect("a signal to our own child");
    }

    pub fn kill(&mut self) {
        if let Some(mut child) = self.child.take() {
            child.kill().expect("killed");
            child.wait().expect("reaped");
        }
    }
}

impl Drop for Mosquitto {
    fn drop(&mut self) {
        if let Some(child) = &self.child {
            let _ = kill_process(Pid::from_child(child), Signal::CONT);
        }
        self.kill();
    }
}

/// A door between courier and broker that can be held shut for new connections and counts bytes.
pub struct Gate {
    pub port: u16,
    pub open: Arc<AtomicBool>,
    pub upstream_bytes: Arc<AtomicU64>,
    pub connections: Arc<AtomicUsize>,
}

impl Gate {
    pub async fn before(broker: u16) -> Self {
        let listener = TcpListener::bind("127.0.0.1:0").await.expect("a port");
        let gate = Self {
            port: listener.local_addr().expect("an address").port(),
            open: Arc::new(AtomicBool::new(true)),
            upstream_bytes: Arc::default(),
            connections: Arc::default(),
        };
        let (open, bytes, connections) = (gate.open.clone(), gate.upstream_bytes.clone(), gate.connections.clone());
        tokio::spawn(async move {
            while let Ok((client, _)) = listener.accept().await {
                connections.fetch_add(1, Ordering::SeqCst);
                let (open, bytes) = (open.clone(), bytes.clone());
                tokio::spawn(async move {
                    while !open.load(Ordering::SeqCst) {
                        tokio::time::sleep(Duration::from_millis(5)).await;
                    }
                    if let Ok(server) = TcpStream::connect(("127.0.0.1", broker)).await {
                        pass(client, server, bytes).await;
                    }
                });
            }
        });
        gate
    }
}

/// Copies both ways until either side ends, then closes both.
async fn pass(client: TcpStream, server: TcpStream, counter: Arc<AtomicU64>) {
    client.set_nodelay(true).expect("nodelay");
    server.set_nodelay(true).expect("nodelay");
    let (mut from_client, mut to_client) = client.into_split();
    let (mut from_server, mut to_server) = server.into_split();
    let up = async move {
        let mut buffer = vec![0; 65_536];
        while let Ok(n @ 1..) = from_client.read(&mut buffer).await {
            counter.fetch_add(n as u64, Ordering::SeqCst);
            if to_server.write_all(&buffer[..n]).await.is_err() {
                break;
            }
        }
    };
    let down = async move { tokio::io::copy(&mut from_server, &mut to_client).await };
    tokio::select! { () = up => {}, _ = down => {} }
}

/// One message as the reader got it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Got {
    pub topic: String,
    pub retained: bool,
    pub payload: String,
    pub correlation: Option<Vec<u8>>,
}

/// A subscriber of its own. It reads at quality of service 0: the broker writes to it before it acknowledges the
/// publisher, and no acknowledgement of the reader's can fail and take unread messages with it.
pub struct Reader {
    pub got: Arc<Mutex<Vec<Got>>>,
    pub subscribed: Arc<AtomicUsize>,
    task: tokio::task::JoinHandle<()>,
}

impl Reader {
    pub async fn on(port: u16, filter: &str) -> Self {
        let mut options = MqttOptions::new(format!("reader-{port}-{}", free_port()), "127.0.0.1", port);
        options.set_max_packet_size(Some(2 * 1024 * 1024));
        options.set_connection_timeout(2);
        let (client, mut events) = AsyncClient::new(options, 10);
        let (got, subscribed) = (Arc::new(Mutex::new(Vec::new())), Arc::new(AtomicUsize::new(0)));
        let (sink, count, filter) = (got.clone(), subscribed.clone(), filter.to_owned());
        let task = tokio::spawn(async move {
            loop {
                match events.poll().await {
                    Ok(Event::Incoming(Packet::ConnAck(_))) => client.try_subscribe(&filter, QoS::AtMostOnce).expect("asked"),
                    Ok(Event::Incoming(Packet::SubAck(_))) => drop(count.fetch_add(1, Ordering::SeqCst)),
                    Ok(Event::Incoming(Packet::Publish(p))) => sink.lock().expect("reader").push(Got {
                        topic: String::from_utf8_lossy(&p.topic).into_owned(),
                        retained: p.retain,
                        payload: String::from_utf8_lossy(&p.payload).into_owned(),
                        correlation: p.properties.and_then(|p| p.correlation_data).map(|c| c.to_vec()),
                    }),
                    Ok(_) => {}
                    Err(_) => tokio::time::sleep(Duration::from_millis(20)).await,
                }
            }
        });
        let reader = Self { got, subscribed, task };
        until("the reader subscribes", Duration::from_secs(10), || reader.subscriptions() > 0).await;
        reader
    }

    pub fn subscriptions(&self) -> usize {
        self.subscribed.load(Ordering::SeqCst)
    }

    pub fn all(&self) -> Vec<Got> {
        self.got.lock().expect("reader").clone()
    }

    /// The facts' numbers, in the order of arrival.
    pub fn seqs(&self) -> Vec<u64> {
        let wanted = topic("fact");
        let number = |p: &str| p.trim_start_matches("{\"seq\":").split(['}', ',']).next().and_then(|n| n.parse().ok());
        self.all().iter().filter(|g| g.topic == wanted).map(|g| number(&g.payload).expect("a number")).collect()
    }

    /// The last payload on a topic.
    pub fn last(&self, tail: &str) -> Option<String> {
        self.all().iter().rev().find(|g| g.topic == topic(tail)).map(|g| g.payload.clone())
    }
}

impl Drop for Reader {
    fn drop(&mut self) {
        self.task.abort();
    }
}

/// What is wrong with the order in which facts arrived: missing ones, jumps forward, steps back beyond the window.
pub fn faults(seqs: &[u64], from: u64, through: u64, window: u64) -> Vec<String> {
    let mut faults = Vec::new();
    let mut max = from - 1;
    for &seq in seqs {
        if seq > max + 1 {
            faults.push(format!("jump from {max} to {seq}"));
        }
        if seq + window <= max {
            faults.push(format!("step back from {max} to {seq}"));
        }
        max = max.max(seq);
    }
    let seen: std::collections::BTreeSet<u64> = seqs.iter().copied().collect();
    let missing: Vec<u64> = (from..=through).filter(|s| !seen.contains(s)).collect();
    if !missing.is_empty() {
        faults.push(format!("{} missing, first {}", missing.len(), missing[0]));
    }
    faults
}

/// A ledger whose facts can be computed, so that it takes no memory.
pub struct Ledger {
    pub head: AtomicU64,
    pub reads: AtomicUsize,
    pub pad: usize,
}

impl Ledger {
    pub fn new(head: u64, pad: usize) -> Arc<Self> {
        Arc::new(Self { head: AtomicU64::new(head), reads: AtomicUsize::new(0), pad })
    }

    pub fn fact(&self, seq: u64) -> Bytes {
        Bytes::from(format!("{{\"seq\":{seq},\"pad\":\"{}\"}}", "x".repeat(self.pad)))
    }

    /// Commits the next fact and hands it to the courier.
    pub fn add(&self, courier: &Courier) -> u64 {
        let seq = self.head.fetch_add(1, Ordering::SeqCst) + 1;
        courier.send(Outgoing { facts: vec![(seq, self.fact(seq))], ..Outgoing::default() });
        seq
    }
}

impl Past for Ledger {
    fn facts_after(&self, seq: u64, limit: usize) -> Result<Vec<(u64, Bytes)>, String> {
        self.reads.fetch_add(1, Ordering::SeqCst);
        let head = self.head.load(Ordering::SeqCst);
        Ok((seq + 1..=head).take(limit).map(|s| (s, self.fact(s))).collect())
    }
}

/// A courier and what it told.
pub struct Bench {
    pub courier: Courier,
    pub events: Arc<Mutex<Vec<CourierEvent>>>,
}

impl Bench {
    pub fn new(settings: CourierSettings, ledger: &Arc<Ledger>, delivered: u64) -> Self {
        let events: Arc<Mutex<Vec<CourierEvent>>> = Arc::default();
        let sink = events.clone();
        let past: Arc<dyn Past> = ledger.clone();
        let tell = Arc::new(move |event| sink.lock().expect("events").push(event));
        let courier = spawn(&tokio::runtime::Handle::current(), settings, past, delivered, tell).expect("settings that work");
        Self { courier, events }
    }

    pub fn at(port: u16, ledger: &Arc<Ledger>) -> Self {
        Self::new(CourierSettings::new("127.0.0.1", port, ROOT, STATION), ledger, 0)
    }

    pub fn told(&self) -> Vec<CourierEvent> {
        self.events.lock().expect("events").clone()
    }

    pub fn count(&self, which: impl Fn(&CourierEvent) -> bool) -> usize {
        self.told().iter().filter(|e| which(e)).count()
    }

    pub fn connects(&self) -> usize {
        self.count(|e| *e == CourierEvent::Connected)
    }

    pub fn retain(&self, tail: &str, payload: &str) {
        let payload = (!payload.is_empty()).then(|| Bytes::from(payload.to_owned()));
        self.courier.send(Outgoing { retained: vec![(topic(tail), payload)], ..Outgoing::default() });
    }

    pub async fn delivered(&self, through: u64, limit: Duration) {
        until(&format!("fact {through} delivered"), limit, || self.courier.delivered_through() >= through).await;
    }
}

/// Runs a program to its end and returns what it printed on both outputs.
pub fn run(program: &str, arguments: &[&str]) -> String {
    let out = Command::new(program).args(arguments).stdin(Stdio::null()).output().expect("the program is installed");
    format!("{}{}", String::from_utf8_lossy(&out.stdout), String::from_utf8_lossy(&out.stderr))
}

/// Memory of this process in the working set, bytes.
pub fn resident() -> u64 {
    let text = std::fs::read_to_string("/proc/self/statm").expect("procfs");
    text.split_whitespace().nth(1).and_then(|n| n.parse::<u64>().ok()).expect("pages") * 4096
}

pub fn read(path: &Path) -> String {
    std::fs::read_to_string(path).unwrap_or_default()
}

/// Times from handing over a fact to its line on the output of `mosquitto_sub`, for 1,000 facts, sorted.
pub async fn latency(port: u16, bench: &Bench, ledger: &Ledger) -> Vec<Duration> {
    let limit = Duration::from_secs(5);
    let mut child = tokio::process::Command::new("mosquitto_sub")
        .args(["-p", &port.to_string(), "-q", "1", "-V", "5", "-t", &topic("fact"), "-t", &topic("presence"), "-F", "%p"])
        .stdout(Stdio::piped())
        .kill_on_drop(true)
        .spawn()
        .expect("mosquitto_sub is installed");
    let output = child.stdout.take().expect("piped");
    let mut lines = tokio::io::BufReader::new(output).lines();
    bench.retain("presence", "up");
    let first = tokio::time::timeout(limit, lines.next_line()).await.expect("in time").expect("read");
    assert_eq!(first.as_deref(), Some("up"), "subscribed");
    let mut took = Vec::new();
    for _ in 0..1_000 {
        let began = Instant::now();
        ledger.add(&bench.courier);
        tokio::time::timeout(limit, lines.next_line()).await.expect("in time").expect("read").expect("a line");
        took.push(began.elapsed());
        tokio::time::sleep(Duration::from_millis(1)).await;
    }
    took.sort();
    took
}
