//! The plain tables of the configuration file.

use super::{
    Backup, BalanceCheck, Bench, Broker, BrokerUrl, Lab, Linking, Log, LogFormat, LogLevel, Mqtt, Scheme, Screen, address,
};
use crate::reader::{Entry, Table};
use crate::{defaults, keys};
use std::path::PathBuf;
use tarecup_core::limits::Severity;
use tarecup_core::names::{BenchName, StationName};
use tarecup_core::quantity::Mass;

/// More benches than any laboratory has rooms for.
const MOST_BENCHES: usize = 100;

fn open<'a>(root: &Table<'a>, name: &str, known: &[&str]) -> Option<Table<'a>> {
    root.get(name).and_then(|e| e.table(name, known))
}

/// A path: text without line breaks or NUL.
pub(super) fn path(entry: &Entry<'_>) -> Option<PathBuf> {
    let text = entry.text()?;
    if text.chars().any(char::is_control) || text.len() > 4_000 {
        entry.fault(
            "is not a path",
            "a path without control characters",
            "writing the path in single quotes, which take it as it is",
        );
        return None;
    }
    Some(PathBuf::from(text))
}

pub(super) fn lab(root: &Table<'_>) -> Option<Lab> {
    let table = open(root, "lab", keys::LAB);
    let get = |key: &str| table.as_ref().and_then(|t| t.get(key));
    let name = get("name").and_then(|e| e.words()).unwrap_or_else(|| defaults::LAB.into());
    let station = match get("station") {
        Some(entry) => entry.name::<StationName>(),
        None => StationName::new(defaults::STATION).ok(),
    };
    Some(Lab { name, station: station? })
}

pub(super) fn mqtt(root: &Table<'_>) -> Mqtt {
    let mut mqtt = Mqtt {
        url: None,
        user: None,
        password_file: None,
        ca_file: None,
        root: defaults::ROOT.into(),
        retain_days: defaults::RETAIN_DAYS,
    };
    let Some(table) = open(root, "mqtt", keys::MQTT) else { return mqtt };
    let url = table.get("url");
    mqtt.url = url.as_ref().and_then(address::broker_url);
    mqtt.user = table.get("user").and_then(|e| e.words());
    mqtt.password_file = table.get("password_file").and_then(|e| path(&e));
    mqtt.ca_file = table.get("ca_file").and_then(|e| path(&e));
    if let Some(root) = table.get("root").and_then(|e| address::topic_root(&e)) {
        mqtt.root = root;
    }
    if let Some(days) = table.get("retain_days").and_then(|e| e.whole(1..=3_650, "days")) {
        mqtt.retain_days = days;
    }
    match &url {
        Some(url) => {
            of_the_connection(&table, url, mqtt.url.as_ref());
            if root.get("broker").is_some() {
                let says = "names a broker, and [broker] asks for the built-in one";
                url.fault_of_key(says, "one of the two", "taking out url or the [broker] table");
            }
        }
        None => without_url(&table),
    }
    mqtt
}

/// Keys that say how to reach a broker, where none is named.
fn without_url(table: &Table<'_>) {
    for entry in ["user", "password_file", "ca_file"].iter().filter_map(|k| table.get(k)) {
        entry.fault_of_key(
            "says how to reach a broker, but there is no url",
            "url beside it",
            "url = \"mqtts://host:8883\" in [mqtt], or taking this line out",
        );
    }
}

/// What the keys beside `url` must say for the broker to be reached.
fn of_the_connection(table: &Table<'_>, url: &Entry<'_>, read: Option<&BrokerUrl>) {
    if let (Some(entry), None) = (table.get("password_file"), table.get("user")) {
        entry.fault_of_key(
            "has no user beside it",
            "user and password_file together",
            "user = \"a name at the broker\" in [mqtt]",
        );
    }
    match (read.map(|u| u.scheme), table.get("ca_file")) {
        (Some(Scheme::Mqtt), Some(entry)) => entry.fault_of_key(
            "needs TLS, and url begins with mqtt://",
            "a url that begins with mqtts://",
            "mqtts:// in url, or taking this line out",
        ),
        (Some(Scheme::Mqtts), None) => url.fault(
            "asks for TLS, and no ca_file says which certificates to trust",
            "ca_file beside a url that begins with mqtts://",
            "ca_file = \"ca.crt\" in [mqtt], a PEM file with the certificate of whoever signed the broker's, or mqtt:// for no TLS",
        ),
        _ => {}
    }
}

pub(super) fn broker(root: &Table<'_>) -> Broker {
    let mut broker = Broker { listen: defaults::BROKER_LISTEN, password_file: None };
    let Some(table) = open(root, "broker", keys::BROKER) else { return broker };
    broker.password_file = table.get("password_file").and_then(|e| path(&e));
    let Some(entry) = table.get("listen") else { return broker };
    let Some(listen) = address::listen(&entry) else { return broker };
    if !listen.ip().is_loopback() && broker.password_file.is_none() {
        entry.fault(
            "is an address that other machines can reach, and without passwords any of them could listen in",
            "127.0.0.1 or ::1, or a password file",
            "password_file = \"a file of users and passwords\" in [broker], or listen = \"127.0.0.1:18883\"",
        );
    }
    broker.listen = listen;
    broker
}

pub(super) fn signing_key_file(root: &Table<'_>) -> Option<PathBuf> {
    open(root, "record", keys::RECORD)?.get("signing_key_file").and_then(|e| path(&e))
}

pub(super) fn backup(root: &Table<'_>) -> Option<Backup> {
    let table = open(root, "backup", keys::BACKUP)?;
    let folder = table.need("folder", "a folder for backups", "folder = \"/mnt/other-disk/tarecup\" below [backup]");
    let mut backup = Backup { folder: path(&folder?)?, every_hours: defaults::BACKUP_EVERY_HOURS, keep: defaults::BACKUPS_KEPT };
    if let Some(hours) = table.get("every_hours").and_then(|e| e.whole(1..=744, "hours")) {
        backup.every_hours = hours;
    }
    if let Some(keep) = table.get("keep").and_then(|e| e.whole(1..=1_000, "backups")) {
        backup.keep = keep;
    }
    Some(backup)
}

/// Names under which a browser may reach the screen.
const MOST_HOSTS: usize = 20;

pub(super) fn screen(root: &Table<'_>) -> Screen {
    let mut screen = Screen::default();
    let Some(table) = open(root, "screen", keys::SCREEN) else { return screen };
    if let Some(enabled) = table.get("enabled").and_then(|e| e.truth()) {
        screen.enabled = enabled;
    }
    screen.secret_file = table.get("secret_file").and_then(|e| path(&e));
    screen.certificate_file = table.get("certificate_file").and_then(|e| path(&e));
    screen.key_file = table.get("key_file").and_then(|e| path(&e));
    for (one, other) in [("certificate_file", "key_file"), ("key_file", "certificate_file")] {
        if let (Some(entry), None) = (table.get(one), table.get(other)) {
            let says = format!("has no {other} beside it");
            entry.fault_of_key(&says, "certificate_file and key_file together", &format!("{other} = \"a PEM file\" in [screen]"));
        }
    }
    if let Some(list) = table.get("hosts").filter(|e| e.at_most(MOST_HOSTS)) {
        screen.hosts = list.one_or_list().iter().filter_map(address::host).collect();
    }
    let Some(entry) = table.get("listen") else { return screen };
    let Some(listen) = address::listen(&entry) else { return screen };
    if screen.enabled && !listen.ip().is_loopback() && table.get("secret_file").is_none() {
        entry.fault(
            "is an address that other machines can reach, and without a secret any of them could use the bench",
            "127.0.0.1 or ::1, or a secret that browsers have to present",
            "`tarecup secret new FILE`, and secret_file = \"FILE\" in [screen]; or listen = \"127.0.0.1:8470\"",
        );
    }
    screen.listen = listen;
    screen
}

pub(super) fn benches(root: &Table<'_>) -> Vec<Bench> {
    let tables =
        root.get("bench").filter(|e| e.at_most(MOST_BENCHES)).map(|e| e.tables("bench", keys::BENCH)).unwrap_or_default();
    let mut benches: Vec<Bench> = Vec::new();
    for table in tables {
        let entry = table.need("name", "a name for the bench", "name = \"north\" below [[bench]]");
        let Some(entry) = entry else { continue };
        let Some(name) = entry.name::<BenchName>() else { continue };
        if benches.iter().any(|b| b.name == name) {
            entry.fault(
                &format!("is \"{name}\", as a bench above"),
                "a name of its own for each bench",
                "another name, or taking one of the two out",
            );
            continue;
        }
        benches.push(Bench { name });
    }
    if benches.is_empty() {
        benches.extend(BenchName::new(defaults::BENCH).ok().map(|name| Bench { name }));
    }
    benches
}

pub(super) fn linking(root: &Table<'_>) -> Linking {
    let mut l = Linking::default();
    let Some(table) = open(root, "linking", keys::LINKING) else { return l };
    if let Some(near) = table.get("near_g").and_then(|e| e.grams(Mass::from_ug(10_000_000))) {
        l.near = near.value;
    }
    let whole = |key: &str, to: u32, what: &str, place: &mut u32| {
        if let Some(value) = table.get(key).and_then(|e| e.whole(1..=to, what)) {
            *place = value;
        }
    };
    whole("slice_minutes", 240, "minutes", &mut l.slice_minutes);
    whole("code_after_s", 3_600, "seconds", &mut l.code_after_s);
    whole("repeat_print_s", 3_600, "seconds", &mut l.repeat_print_s);
    whole("intention_hours", 72, "hours", &mut l.intention_hours);
    whole("slice_aloud_minutes", 240, "minutes", &mut l.slice_aloud_minutes);
    if let (true, Some(entry)) =
        (l.slice_aloud_minutes > l.slice_minutes, table.get("slice_aloud_minutes").or(table.get("slice_minutes")))
    {
        let says = format!(
            "would have a slice said aloud after {} minutes, when it is no longer owed after {}",
            l.slice_aloud_minutes, l.slice_minutes
        );
        entry.fault(&says, "slice_aloud_minutes up to slice_minutes", "a smaller slice_aloud_minutes");
    }
    l
}

pub(super) fn balance_check(root: &Table<'_>) -> Option<BalanceCheck> {
    let table = open(root, "balance_check", keys::BALANCE_CHECK)?;
    let every_hours = table.get("every_hours").and_then(|e| e.whole(1..=8_760, "hours")).unwrap_or(24);
    let tolerance = table.get("tolerance_g").and_then(|e| e.grams(Mass::from_ug(10_000_000))).map(|t| t.value);
    let words = [("note", Severity::Note), ("hold", Severity::Hold)];
    let overdue = table.get("overdue").and_then(|e| e.one_of(&words)).unwrap_or(Severity::Note);
    Some(BalanceCheck { every_hours, tolerance, overdue })
}

pub(super) fn log(root: &Table<'_>) -> Log {
    let Some(table) = open(root, "log", keys::LOG) else { return Log::default() };
    let levels = [LogLevel::Error, LogLevel::Warn, LogLevel::Info, LogLevel::Debug, LogLevel::Trace].map(|l| (l.word(), l));
    let level = table.get("level").and_then(|e| e.one_of(&levels)).unwrap_or_default();
    let forms = [("text", LogFormat::Text), ("json", LogFormat::Json)];
    let format = table.get("format").and_then(|e| e.one_of(&forms)).unwrap_or_default();
    Log { level, format }
}
