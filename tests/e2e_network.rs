//! Balances behind a device server, which is played by socat: killed, stopped,
//! started again, and gone without a word.

mod e2e_support;

use e2e_support::*;
use serde_json::Value;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

struct Lab {
    dir: tempfile::TempDir,
    state: PathBuf,
    port: u16,
}

impl Lab {
    /// The configuration of a streaming balance at `tcp://localhost:port`, and a script that speaks as it does.
    fn new(port: u16) -> Self {
        let dir = tempfile::tempdir().expect("a folder");
        let config = format!(
            "[lab]\nname = \"test\"\nstation = \"wet-room\"\n[screen]\nenabled = false\n[broker]\nlisten = \"127.0.0.1:{}\"\n[[instrument]]\nname = \"pan-1\"\nkind = \"balance\"\nport = \"tcp://127.0.0.1:{port}\"\nprofile = \"signed-steady\"\n",
            free_port()
        );
        std::fs::write(dir.path().join("config.toml"), config).expect("written");
        // Zero for a second, then a load: a mass for each connection.
        let script = "n=0\nwhile :; do\n  [ $n -lt 10 ] && m=' 0.00' || m=23.45\n  printf '+     %s g  S\\r\\n' \"$m\" || exit 1\n  n=$((n+1)); sleep 0.1\ndone\n";
        std::fs::write(dir.path().join("balance"), script).expect("written");
        let state = dir.path().join("state");
        Self { dir, state, port }
    }

    /// One that outlives its connections, as a line of a shell; it ends by itself when a test was killed.
    fn server(&self) -> String {
        let script = self.dir.path().join("balance");
        format!("timeout 120 socat TCP-LISTEN:{},bind=127.0.0.1,reuseaddr,fork SYSTEM:'exec sh {}'", self.port, script.display())
    }

    /// The device server: socat itself is the child, so that signals reach it.
    fn serve(&self) -> Running {
        let mut command = Command::new("socat");
        command.arg(format!("TCP-LISTEN:{},bind=127.0.0.1,reuseaddr", self.port));
        command.arg(format!("SYSTEM:exec sh {}", self.dir.path().join("balance").display()));
        Running::start(command.stderr(Stdio::null()))
    }

    fn service(&self) -> String {
        let (config, state) = (self.dir.path().join("config.toml"), &self.state);
        format!("'{TARECUP}' run --config {} --state {}", config.display(), state.display())
    }

    fn pan(&self) -> Value {
        pan(&self.state)
    }

    fn masses(&self) -> usize {
        facts_after(&self.state, 0).unwrap_or_default().iter().filter(|f| f["kind"] == "weighed").count()
    }
}

fn pan(state: &Path) -> Value {
    status(state).map(|s| s["instruments"][0].clone()).unwrap_or_default()
}

fn shell(line: &str) -> Running {
    Running::start(Command::new("sh").args(["-c", &format!("exec {line}")]).stdin(Stdio::null()).stderr(Stdio::null()))
}

#[test]
fn a_device_server_that_is_killed_stopped_and_started_is_followed() {
    let lab = Lab::new(free_port());
    let _service = shell(&lab.service());
    let refused = |d: &Value| d["detail"].as_str().is_some_and(|d| d.contains("refused") && d.contains("data port"));
    until("refused in words", PATIENCE, || refused(&lab.pan()));
    assert_eq!((&lab.pan()["state"], &lab.pan()["port_open"]), (&Value::from("waiting"), &Value::from(false)));
    let mut server = lab.serve();
    let began = Instant::now();
    until("connected", PATIENCE, || lab.pan()["port_open"] == true);
    let first = began.elapsed();
    until("a mass over the network", PATIENCE, || lab.masses() == 1);
    // Killed: the kernel ends the connection at once.
    server.kill9();
    until("lost", Duration::from_secs(5), || lab.pan()["state"] == "port_lost");
    until("still lost, and why", PATIENCE, || lab.pan()["state"] == "port_lost" && refused(&lab.pan()));
    let server = lab.serve();
    let began = Instant::now();
    until("connected again", PATIENCE, || lab.pan()["port_open"] == true);
    let second = began.elapsed();
    println!("a device server that is there is connected after {} and {} ms", first.as_millis(), second.as_millis());
    assert!(first.max(second) <= Duration::from_secs(2), "{first:?} {second:?}");
    until("a mass again", PATIENCE, || lab.masses() == 2);
    // Stopped: its machine still acknowledges for it. All that can be seen is the silence.
    server.signal(rustix::process::Signal::STOP);
    let began = Instant::now();
    until("silence is told", PATIENCE, || lab.pan()["state"] == "silent");
    assert!(began.elapsed() <= Duration::from_secs(7), "{:?}", began.elapsed());
    std::thread::sleep(Duration::from_secs(8));
    assert_eq!((&lab.pan()["state"], &lab.pan()["port_open"]), (&Value::from("silent"), &Value::from(true)));
    server.signal(rustix::process::Signal::CONT);
    until("it speaks on", PATIENCE, || lab.pan()["state"] == "speaking");
}

#[test]
fn a_peer_that_vanishes_without_a_word_is_lost_and_found_again() {
    // In a network of its own, whose only way can be cut.
    let lab = Lab::new(4001);
    let script = lab.dir.path().join("network");
    std::fs::write(&script, format!("ip link set lo up\n{} &\nexec {}\n", lab.server(), lab.service())).expect("written");
    let service = shell(&format!("unshare -rn sh {}", script.display()));
    until("connected", PATIENCE, || lab.pan()["state"] == "speaking");
    let cut = |how: &str| {
        let pid = service.pid().to_string();
        let done = Command::new("nsenter")
            .args(["-t", &pid, "-U", "-n", "--preserve-credentials", "ip", "link", "set", "lo", how])
            .status();
        assert!(done.is_ok_and(|s| s.success()), "lo {how}");
    };
    // Control: a connection that is only quiet for a while stays.
    let began = Instant::now();
    cut("down");
    until("silence is told", PATIENCE, || lab.pan()["state"] == "silent");
    let silent = began.elapsed();
    assert_eq!(lab.pan()["port_open"], true, "silence alone is no loss");
    until("the loss is told", PATIENCE, || lab.pan()["state"] == "port_lost");
    let lost = began.elapsed();
    println!("a peer that vanished: silent after {} ms, lost after {} ms", silent.as_millis(), lost.as_millis());
    assert!(silent <= Duration::from_secs(7) && lost <= Duration::from_secs(15), "{silent:?} {lost:?}");
    std::thread::sleep(Duration::from_secs(1));
    let began = Instant::now();
    cut("up");
    until("found again", PATIENCE, || lab.pan()["port_open"] == true);
    println!("found again after {} ms", began.elapsed().as_millis());
    assert!(began.elapsed() <= Duration::from_secs(2), "{:?}", began.elapsed());
    until("and speaking", PATIENCE, || lab.pan()["state"] == "speaking");
}
