//! The shipped configuration for Mosquitto starts, and keeps out whom it should, with encryption.

mod publish_support;

use std::path::Path;
use std::time::Duration;

use publish_support::{Bench, Ledger, Mosquitto, ROOT, STATION, free_port, run, topic, until};
use tarecup::publish::{CourierEvent, CourierSettings, Login, TlsSettings};

const SECOND: Duration = Duration::from_secs(1);

/// An authority and a certificate for localhost, made by OpenSSL's command.
fn certificates(dir: &Path) {
    let at = |name: &str| dir.join(name).display().to_string();
    let key = ["-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes", "-days", "2"];
    let ca = ["req", "-x509", "-subj", "/CN=Mosswick test authority", "-keyout", &at("ca.key"), "-out", &at("ca.crt")];
    run("openssl", &[&ca[..], &key[..]].concat());
    let request = ["req", "-subj", "/CN=localhost", "-keyout", &at("server.key"), "-out", &at("server.csr")];
    run("openssl", &[&request[..], &key[..5]].concat());
    std::fs::write(dir.join("names"), "subjectAltName=DNS:localhost\n").expect("written");
    let (csr, ca, ca_key) = (at("server.csr"), at("ca.crt"), at("ca.key"));
    let sign = ["x509", "-req", "-in", &csr, "-CA", &ca, "-CAkey", &ca_key, "-CAcreateserial", "-days", "2"];
    run("openssl", &[&sign[..], &["-extfile", &at("names"), "-out", &at("server.crt")]].concat());
    assert!(dir.join("server.crt").exists(), "a certificate was made");
}

/// The shipped file with its paths and ports moved into a temporary directory; returns the encrypted port too.
async fn shipped() -> (Mosquitto, u16) {
    let here = Path::new(env!("CARGO_MANIFEST_DIR"));
    let text = std::fs::read_to_string(here.join("mosquitto.conf")).expect("shipped");
    let dir = tempfile::TempDir::new().expect("a directory");
    certificates(dir.path());
    std::fs::copy(here.join("mosquitto-access.acl"), dir.path().join("access.acl")).expect("shipped");
    let passwords = dir.path().join("passwords").display().to_string();
    run("mosquitto_passwd", &["-c", "-b", &passwords, "tarecup", "clay and silt"]);
    run("mosquitto_passwd", &["-b", &passwords, "reader", "sieve"]);
    let (plain, encrypted) = (free_port(), free_port());
    let base = format!("{}/", dir.path().display());
    let moved = text
        .replace("/etc/mosquitto/tarecup/", &base)
        .replace("/var/lib/mosquitto/tarecup/", &base)
        .replace("\nlistener 1883 ", &format!("\nlistener {plain} "))
        .replace("\nlistener 8883\n", &format!("\nlistener {encrypted} 127.0.0.1\n"));
    assert!(moved.contains(&plain.to_string()) && moved.contains(&encrypted.to_string()), "both listeners are stated");
    let mut broker = Mosquitto::with(dir, plain, &moved);
    broker.start().await;
    (broker, encrypted)
}

fn encrypted(broker: &Mosquitto, port: u16, ca: &str, password: &str) -> CourierSettings {
    let mut settings = CourierSettings::new("localhost", port, ROOT, STATION);
    settings.tls = Some(TlsSettings { ca_file: broker.path(ca) });
    settings.login = Some(Login { user: "tarecup".into(), password: password.into() });
    settings
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_shipped_configuration_serves_encrypted_and_keeps_readers_from_writing() {
    let (broker, port) = shipped().await;
    let ledger = Ledger::new(5, 0);
    let bench = Bench::new(encrypted(&broker, port, "ca.crt", "clay and silt"), &ledger, 0);
    bench.retain("specimen/S-101", "open");
    bench.delivered(5, 5 * SECOND).await;

    let (plain, station) = (broker.port.to_string(), topic("specimen/S-101"));
    let reader = ["-h", "127.0.0.1", "-p", &plain, "-u", "reader", "-P", "sieve", "-V", "5"];
    let look = || run("mosquitto_sub", &[&reader[..], &["-t", &station, "-C", "1", "-W", "3"]].concat());
    assert_eq!(look().trim(), "open");
    let write = |topic: &str| run("mosquitto_pub", &[&reader[..], &["-q", "1", "-r", "-t", topic, "-m", "forged"]].concat());
    assert!(write(&station).contains("Not authorized"));
    assert_eq!(look().trim(), "open", "a reader changed nothing");
    assert!(!write(&topic("ask")).contains("Not authorized"), "a reader may ask");
    let nobody = run("mosquitto_sub", &["-h", "127.0.0.1", "-p", &plain, "-V", "5", "-t", "#", "-C", "1", "-W", "3"]);
    assert!(nobody.to_lowercase().contains("not authori"), "{nobody}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_wrong_password_and_a_wrong_authority_are_told_in_words() {
    let (broker, port) = shipped().await;
    let ledger = Ledger::new(1, 0);
    let told =
        |bench: &Bench, text: &str| bench.count(|e| matches!(e, CourierEvent::Disconnected { why } if why.contains(text))) == 1;

    let bench = Bench::new(encrypted(&broker, port, "ca.crt", "wrong"), &ledger, 0);
    until("told of the password", 5 * SECOND, || told(&bench, "refuses user or password")).await;
    drop(bench);

    let other = tempfile::TempDir::new().expect("a directory");
    certificates(other.path());
    std::fs::copy(other.path().join("ca.crt"), broker.path("other.crt")).expect("copied");
    let bench = Bench::new(encrypted(&broker, port, "other.crt", "clay and silt"), &ledger, 0);
    until("told of the authority", 5 * SECOND, || told(&bench, "encryption failed")).await;
    assert_eq!(bench.courier.delivered_through(), 0);

    for (file, contents) in [
        ("absent.crt", None),
        ("empty.crt", Some("")),
        ("broken.crt", Some("-----BEGIN CERTIFICATE-----\n!\n-----END CERTIFICATE-----\n")),
    ] {
        if let Some(contents) = contents {
            std::fs::write(broker.path(file), contents).expect("written");
        }
        let past: std::sync::Arc<dyn tarecup::publish::Past> = ledger.clone();
        let settings = encrypted(&broker, port, file, "x");
        let refused = tarecup::publish::spawn(&tokio::runtime::Handle::current(), settings, past, 0, std::sync::Arc::new(|_| {}));
        let fault = refused.err().expect("refused");
        assert!(fault.to_string().contains(file) && fault.setting == "ca_file", "{fault}");
    }
}
