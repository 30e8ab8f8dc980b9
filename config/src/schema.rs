//! A JSON schema of the configuration file, for editors.
//!
//! The shapes here describe the file; the readers decide. A test keeps both
//! to the same keys.

use schemars::JsonSchema;
use std::collections::BTreeMap;

/// The schema (JSON Schema 2020-12) of the configuration file.
pub fn config_schema() -> serde_json::Value {
    schemars::schema_for!(Config).to_value()
}

type Name = String;

/// One value or a list of values.
#[derive(JsonSchema)]
#[schemars(untagged)]
#[expect(dead_code, reason = "only its shape is used")]
enum OneOrList<T> {
    One(T),
    List(Vec<T>),
}

/// Configuration of a tarecup station.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Config {
    /// Folder of the ledger, relative to this file; without it, where the service manager says.
    state_dir: Option<String>,
    /// Method where nobody names one; default "d4318-multipoint".
    default_method: Option<Name>,
    /// Method files of the laboratory, relative to this file.
    method_files: Option<OneOrList<String>>,
    /// The laboratory.
    lab: Option<Lab>,
    /// MQTT; leave out url for the built-in broker on loopback.
    mqtt: Option<Mqtt>,
    /// The built-in broker.
    broker: Option<Broker>,
    /// How the record is signed.
    record: Option<Record>,
    /// Backups made while the service runs.
    backup: Option<Backup>,
    /// The bench screen and the HTTP interface.
    screen: Option<Screen>,
    /// Benches: places with a balance and a cup counter.
    bench: Option<Vec<Bench>>,
    /// Balances, cup counters, scanners.
    instrument: Option<Vec<Instrument>>,
    /// How weighings find their container.
    linking: Option<Linking>,
    /// How often balances are checked with a reference mass; left out: nobody is reminded.
    balance_check: Option<BalanceCheck>,
    /// What the program says about itself.
    log: Option<Log>,
    /// Methods of the laboratory, by name.
    method: Option<BTreeMap<Name, BTreeMap<String, serde_json::Value>>>,
    /// Instrument profiles of the laboratory, by name.
    profile: Option<BTreeMap<Name, BTreeMap<String, serde_json::Value>>>,
}

/// The laboratory.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Lab {
    /// Its name, for people.
    #[schemars(length(min = 1, max = 200))]
    name: Option<String>,
    /// Name of this station; a level of every topic.
    #[schemars(regex(pattern = r"^[A-Za-z0-9._-]{1,32}$"))]
    station: Option<Name>,
}

/// MQTT.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Mqtt {
    /// The broker, such as mqtts://broker.example:8883.
    #[schemars(regex(pattern = r"^mqtts?://[^@]+$"))]
    url: Option<String>,
    /// User name at the broker.
    user: Option<String>,
    /// File whose first line is the password, relative to this file.
    password_file: Option<String>,
    /// File with the certificates to trust, relative to this file; required with mqtts://.
    ca_file: Option<String>,
    /// Topic root; default "tarecup/v1".
    #[schemars(regex(pattern = r"^[A-Za-z0-9._-]+(/[A-Za-z0-9._-]+)*$"))]
    root: Option<String>,
    /// Days that a finished specimen stays among the retained topics; default 30.
    #[schemars(range(min = 1, max = 3650))]
    retain_days: Option<u32>,
}

/// The built-in broker.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Broker {
    /// Where it listens; default "127.0.0.1:18883".
    listen: Option<String>,
    /// File of users and passwords, relative to this file; required beyond loopback.
    password_file: Option<String>,
}

/// How the record is signed.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Record {
    /// File of the key that heads are signed with, relative to this file; made when there is none.
    signing_key_file: Option<String>,
}

/// Backups made while the service runs.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Backup {
    /// Folder for backups, relative to this file; best on another disk.
    folder: String,
    /// Hours from one backup to the next; default 24.
    #[schemars(range(min = 1, max = 744))]
    every_hours: Option<u32>,
    /// Backups that are kept; default 14.
    #[schemars(range(min = 1, max = 1000))]
    keep: Option<u32>,
}

/// The bench screen and the HTTP interface.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Screen {
    /// Whether there is one; default true.
    enabled: Option<bool>,
    /// Where it listens; default "127.0.0.1:8470".
    listen: Option<String>,
    /// Names and addresses under which browsers reach it, beside its own address.
    #[schemars(inner(length(min = 1, max = 253)))]
    hosts: Option<OneOrList<String>>,
    /// File whose first line a browser presents once, relative to this file; required beyond loopback.
    secret_file: Option<String>,
    /// File with the certificate chain (PEM), relative to this file; with it the screen speaks TLS.
    certificate_file: Option<String>,
    /// File with the key of the certificate (PEM), relative to this file.
    key_file: Option<String>,
}

/// A bench.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Bench {
    /// Its name.
    #[schemars(regex(pattern = r"^[A-Za-z0-9._-]{1,32}$"))]
    name: Name,
}

/// What an instrument is.
#[derive(JsonSchema)]
#[schemars(rename_all = "kebab-case")]
#[expect(dead_code, reason = "only its shape is used")]
enum Kind {
    Balance,
    Counter,
    Scanner,
}

/// Flow control of a serial line.
#[derive(JsonSchema)]
#[schemars(rename_all = "kebab-case")]
#[expect(dead_code, reason = "only its shape is used")]
enum Flow {
    None,
    Hardware,
    Software,
}

/// How a balance tells a weighing.
#[derive(JsonSchema)]
#[schemars(rename_all = "kebab-case")]
#[expect(dead_code, reason = "only its shape is used")]
enum Talks {
    Continuous,
    PrintOnKey,
}

/// Modem-control lines.
#[derive(JsonSchema)]
#[schemars(rename_all = "kebab-case")]
#[expect(dead_code, reason = "only its shape is used")]
enum Pulse {
    Cts,
    Dsr,
    Dcd,
    Ri,
}

/// A balance, cup counter or scanner.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Instrument {
    /// Its name.
    #[schemars(regex(pattern = r"^[A-Za-z0-9._-]{1,32}$"))]
    name: Name,
    /// What it is.
    kind: Kind,
    /// The bench it serves; a balance may serve several.
    bench: Option<OneOrList<Name>>,
    /// Absolute path of a serial port, such as "/dev/serial/by-id/…"; for Modbus also tcp://HOST:PORT.
    #[schemars(regex(pattern = r"^(/|tcp://)"))]
    port: String,
    /// Speed in baud; default 9600.
    #[schemars(range(min = 50, max = 4_000_000))]
    baud: Option<u32>,
    /// Data bits, parity, stop bits; default "8N1".
    #[schemars(regex(pattern = r"^[5-8][NEOneo][12]$"))]
    frame: Option<String>,
    /// Flow control; default "none".
    flow: Option<Flow>,
    /// What it speaks: a shipped profile or one of [profile.NAME]; not with pulse.
    profile: Option<Name>,
    /// How a balance tells a weighing.
    talks: Option<Talks>,
    /// Readings in a row that must agree.
    #[schemars(range(min = 2, max = 200))]
    steady_readings: Option<u32>,
    /// Largest difference among them, grams.
    steady_span_g: Option<f64>,
    /// Smallest mass that counts as something on the pan, grams.
    load_from_g: Option<f64>,
    /// Change of load that makes the pan ready for the next mass, grams.
    change_from_g: Option<f64>,
    /// Without a steady mark, readings must agree for this long, milliseconds.
    #[schemars(range(min = 1, max = 60_000))]
    steady_ms: Option<u32>,
    /// Standard deviation of a balance's repeated readings, grams, from its papers or the laboratory's own test.
    #[schemars(range(min = 0, max = 10))]
    repeatability_g: Option<f64>,
    /// Largest departure of a balance from a straight line, grams.
    #[schemars(range(min = 0, max = 10))]
    linearity_g: Option<f64>,
    /// Two drops closer than this are one, milliseconds.
    #[schemars(range(min = 1, max = 400))]
    debounce_ms: Option<u32>,
    /// A run without end line is over after this pause, milliseconds.
    #[schemars(range(min = 1_000, max = 120_000))]
    pause_ms: Option<u32>,
    /// An interval of this many percent of the usual one is a gap.
    #[schemars(range(min = 110, max = 1_000))]
    gap_percent: Option<u32>,
    /// The modem-control line that a switch at the cam closes at each drop.
    pulse: Option<Pulse>,
    /// The switch is at rest after so long without a change, milliseconds; default 20.
    #[schemars(range(min = 1, max = 100))]
    bounce_ms: Option<u32>,
}

/// How weighings find their container.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Linking {
    /// Masses within this are near each other, grams; default 0.05.
    near_g: Option<f64>,
    /// A slice is owed at most this long after the count, minutes; default 15.
    #[schemars(range(min = 1, max = 240))]
    slice_minutes: Option<u32>,
    /// A code read this long after a loose mass belongs to it, seconds; default 20.
    #[schemars(range(min = 1, max = 3_600))]
    code_after_s: Option<u32>,
    /// The same printed value within this is one weighing, seconds; default 10.
    #[schemars(range(min = 1, max = 3_600))]
    repeat_print_s: Option<u32>,
    /// An intention ends after this, hours; default 6.
    #[schemars(range(min = 1, max = 72))]
    intention_hours: Option<u32>,
    /// A slice owed this long is said aloud, minutes; default 5.
    #[schemars(range(min = 1, max = 240))]
    slice_aloud_minutes: Option<u32>,
}

/// How often balances are checked with a reference mass.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct BalanceCheck {
    /// At least so often, hours; default 24.
    #[schemars(range(min = 1, max = 8_760))]
    every_hours: Option<u32>,
    /// What a balance may be off by, grams; default: by the class of the reference mass.
    tolerance_g: Option<f64>,
    /// What a weighing on a balance that was not checked is worth: note or hold; default "note".
    #[schemars(regex(pattern = r"^(note|hold)$"))]
    overdue: Option<String>,
}

/// Levels of the log.
#[derive(JsonSchema)]
#[schemars(rename_all = "kebab-case")]
#[expect(dead_code, reason = "only its shape is used")]
enum LogLevel {
    Error,
    Warn,
    Info,
    Debug,
    Trace,
}

/// Forms of the log.
#[derive(JsonSchema)]
#[schemars(rename_all = "kebab-case")]
#[expect(dead_code, reason = "only its shape is used")]
enum LogFormat {
    Text,
    Json,
}

/// What the program says about itself.
#[derive(JsonSchema)]
#[schemars(deny_unknown_fields)]
#[expect(dead_code, reason = "only its shape is used")]
struct Log {
    /// From which level on; default "info".
    level: Option<LogLevel>,
    /// Lines for people or JSON; default "text".
    format: Option<LogFormat>,
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::keys;

    fn keys_of(shape: &serde_json::Value) -> Vec<&str> {
        let mut keys: Vec<&str> = shape["properties"].as_object().expect("an object").keys().map(String::as_str).collect();
        keys.sort_unstable();
        keys
    }

    #[test]
    fn the_schema_and_the_reader_know_the_same_keys() {
        let schema = config_schema();
        let of = |name: &str| if name.is_empty() { schema.clone() } else { schema["$defs"][name].clone() };
        let tables = [
            ("", keys::STATION),
            ("Lab", keys::LAB),
            ("Mqtt", keys::MQTT),
            ("Broker", keys::BROKER),
            ("Record", keys::RECORD),
            ("Backup", keys::BACKUP),
            ("Screen", keys::SCREEN),
            ("Bench", keys::BENCH),
            ("Instrument", keys::INSTRUMENT),
            ("Linking", keys::LINKING),
            ("Log", keys::LOG),
        ];
        for (name, known) in tables {
            let mut known = known.to_vec();
            known.sort_unstable();
            let shape = of(name);
            assert_eq!(keys_of(&shape), known, "{name}");
            assert_eq!(shape["additionalProperties"], false, "{name}");
        }
    }
}
