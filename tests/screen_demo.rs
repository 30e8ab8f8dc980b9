//! The demo as a visitor meets it: the screen is there, and a hand at a simulated bench does real work through the
//! whole program.

#[path = "screen_support.rs"]
mod support;

use serde_json::Value;
use std::io::{BufRead, BufReader, Read, Write};
use std::net::TcpStream;
use std::process::{Child, Command, Stdio};
use std::sync::mpsc::{Receiver, channel};
use std::time::Duration;
use support::{free_port, until};

struct Demo {
    child: Child,
    address: String,
    lines: Receiver<String>,
}

impl Demo {
    fn start() -> Self {
        let (screen, mqtt) = (format!("127.0.0.1:{}", free_port()), format!("127.0.0.1:{}", free_port()));
        let mut child = Command::new(env!("CARGO_BIN_EXE_tarecup"))
            .args(["demo", "--speed", "1000000", "--listen", &screen, "--mqtt", &mqtt])
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .expect("it starts");
        let (tx, lines) = channel();
        let out = BufReader::new(child.stdout.take().expect("piped"));
        std::thread::spawn(move || out.lines().map_while(Result::ok).for_each(|l| drop(tx.send(l))));
        Self { child, address: screen, lines }
    }

    /// Waits for a line that is printed.
    fn says(&self, words: &str) -> String {
        loop {
            let line = self.lines.recv_timeout(Duration::from_secs(60)).unwrap_or_else(|_| panic!("never said: {words}"));
            if line.contains(words) {
                return line;
            }
        }
    }

    fn send(&self, request: &str) -> (u16, String) {
        let mut stream = TcpStream::connect(&self.address).expect("connected");
        stream.write_all(request.as_bytes()).expect("sent");
        let mut all = String::new();
        stream.read_to_string(&mut all).expect("read");
        let status = all.split(' ').nth(1).and_then(|s| s.parse().ok()).unwrap_or(0);
        (status, all.split_once("\r\n\r\n").map(|(_, body)| body.to_string()).unwrap_or_default())
    }

    fn get(&self, path: &str) -> String {
        self.send(&format!("GET {path} HTTP/1.1\r\nHost: {}\r\nConnection: close\r\n\r\n", self.address)).1
    }

    fn json(&self, path: &str) -> Value {
        serde_json::from_str(&self.get(path)).expect("JSON")
    }

    fn hand(&self, form: &str) -> u16 {
        let head = "Content-Type: application/x-www-form-urlencoded\r\nConnection: close";
        let (host, length) = (&self.address, form.len());
        self.send(&format!("POST /demo/hand HTTP/1.1\r\nHost: {host}\r\n{head}\r\nContent-Length: {length}\r\n\r\n{form}")).0
    }

    /// A container is put on the pan until its mass is taken, and lifted.
    fn weigh(&self, container: &str, with: &str) -> Value {
        let before = self.json("/api/bench/visitor")["latest"]["seq"].as_u64();
        assert_eq!(self.hand(&format!("do=put&container={container}&with={with}")), 303);
        until("the mass is taken", || self.json("/api/bench/visitor")["latest"]["seq"].as_u64() > before);
        let latest = self.json("/api/bench/visitor")["latest"].clone();
        assert_eq!(self.hand("do=lift"), 303);
        until("the hand is empty", || self.json("/api/bench/visitor")["in_hand"].is_null());
        latest
    }
}

impl Drop for Demo {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

#[test]
fn a_visitor_weighs_counts_and_dries() {
    let demo = Demo::start();
    let at = demo.says("bench screen: ");
    assert!(at.contains(&demo.address), "{at}");
    demo.says("Screen and broker stay up");
    let page = demo.get("/bench/visitor");
    assert!(page.contains("id=\"hand\"") && page.contains("hand-put") && !demo.get("/bench/north").contains("id=\"hand\""));

    let empty = demo.weigh("V1", "nothing");
    assert_eq!((&empty["container"], &empty["role"]), (&Value::from("V1"), &Value::from("tare")));
    assert_eq!(demo.hand("do=oven"), 422, "nothing to dry");
    assert_eq!(demo.hand("do=wetter"), 303);
    assert_eq!(demo.hand("do=cup"), 303);
    assert_eq!(demo.hand("do=cup"), 422, "it runs already");
    std::thread::sleep(Duration::from_millis(2_700));
    assert_eq!(demo.hand("do=stop"), 303);
    until("the slice is owed", || demo.json("/api/bench/visitor")["slice_owed"].is_object());
    let drops = demo.json("/api/bench/visitor")["slice_owed"]["drops"].as_u64().expect("a number");
    assert!((2..=8).contains(&drops), "{drops}");
    let wet = demo.weigh("V1", "slice");
    assert_eq!(wet["role"], "wet");
    assert_eq!(demo.hand("do=oven"), 303);
    let dry = demo.weigh("V1", "as-it-is");
    assert_eq!(dry["role"], "dry", "{dry}");
    let grams = |w: &Value| w["mass_g"].as_f64().expect("grams");
    let water = 100.0 * (grams(&wet) - grams(&dry)) / (grams(&dry) - grams(&empty));
    let limits = demo.json("/api/specimen/V-1/limits");
    let row = &limits["trials"][0];
    assert!((row["water_percent"].as_f64().expect("percent") - water).abs() < 1e-9, "{row}");
    for wrong in ["do=put&container=V99&with=nothing", "do=put&container=V1&with=gold", "do=fly", "", "do=lift"] {
        assert_eq!(demo.hand(wrong), 422, "{wrong}");
    }
}
