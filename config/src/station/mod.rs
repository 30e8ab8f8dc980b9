//! The configuration file of a station.

mod address;
mod instrument;
mod tables;

use crate::fault::{Faults, quote, remedy_for_name};
use crate::methods::{self, Methods};
use crate::profiles::{self, Profiles};
use crate::reader::{Entry, Table, read};
use crate::{defaults, keys, text};
use std::collections::BTreeSet;
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use tarecup_core::limits::Severity;
use tarecup_core::names::{BenchName, InstrumentName, MethodName, ProfileName, StationName};
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{CountLimits, SettleLimits};
use tarecup_core::soil::uncertainty::Balance;
use tarecup_drivers::port::PortSettings;
use tarecup_drivers::port::pulse::PulseSettings;

pub use address::{BrokerUrl, Scheme};

/// Everything a station is told. An empty file gives the defaults.
///
/// [`load`] makes every relative path one of the configuration file's folder;
/// [`parse`] and [`parse_with`] know no folder and leave paths as written.
#[derive(Clone, Debug, PartialEq)]
pub struct Station {
    /// The laboratory.
    pub lab: Lab,
    /// The connection to a broker, or what the built-in one publishes.
    pub mqtt: Mqtt,
    /// The built-in broker; it serves when `mqtt.url` is not given.
    pub broker: Broker,
    /// File of the key that heads are signed with; without it, the usual place.
    pub signing_key_file: Option<PathBuf>,
    /// Backups made while the service runs; `None`: only those a person asks for.
    pub backup: Option<Backup>,
    /// The bench screen and the HTTP interface.
    pub screen: Screen,
    /// Where the ledger lies; without it, where the service manager says.
    pub state_dir: Option<PathBuf>,
    /// The benches; at least one.
    pub benches: Vec<Bench>,
    /// Balances, cup counters, scanners; may be none.
    pub instruments: Vec<Instrument>,
    /// How weighings find their container.
    pub linking: Linking,
    /// How often balances are checked with a reference mass, when that is asked for.
    pub balance_check: Option<BalanceCheck>,
    /// What the program says about itself.
    pub log: Log,
    /// Shipped methods and the laboratory's own, by name.
    pub methods: Methods,
    /// Shipped profiles and the laboratory's own, by name.
    pub profiles: Profiles,
    /// The method where nobody names one.
    pub default_method: MethodName,
}

/// The laboratory.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Lab {
    /// Its name, for people.
    pub name: String,
    /// Name of this station.
    pub station: StationName,
}

/// MQTT.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Mqtt {
    /// The broker; `None`: the built-in one.
    pub url: Option<BrokerUrl>,
    /// User name at the broker.
    pub user: Option<String>,
    /// File whose first line is the password.
    pub password_file: Option<PathBuf>,
    /// File with the certificates that are trusted; never absent with `mqtts://`.
    pub ca_file: Option<PathBuf>,
    /// Topic root, without slash at either end.
    pub root: String,
    /// Days that a finished specimen stays among the retained topics.
    pub retain_days: u32,
}

/// The built-in broker.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Broker {
    /// Where it listens.
    pub listen: SocketAddr,
    /// File with users and passwords; beyond loopback it is required.
    pub password_file: Option<PathBuf>,
}

/// Backups made while the service runs.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Backup {
    /// Where they go.
    pub folder: PathBuf,
    /// Hours from one to the next.
    pub every_hours: u32,
    /// How many are kept.
    pub keep: u32,
}

/// The bench screen and the HTTP interface.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Screen {
    /// Whether there is one.
    pub enabled: bool,
    /// Where it listens.
    pub listen: SocketAddr,
    /// Names and addresses under which browsers reach it, beside its own address.
    pub hosts: Vec<String>,
    /// File whose first line a browser has to present once; beyond loopback it is required.
    pub secret_file: Option<PathBuf>,
    /// File with its certificate chain (PEM); with it, the screen speaks TLS.
    pub certificate_file: Option<PathBuf>,
    /// File with the key of the certificate (PEM).
    pub key_file: Option<PathBuf>,
}

impl Default for Screen {
    fn default() -> Self {
        Self {
            enabled: true,
            listen: defaults::SCREEN_LISTEN,
            hosts: Vec::new(),
            secret_file: None,
            certificate_file: None,
            key_file: None,
        }
    }
}

/// One place with a balance and a cup counter.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Bench {
    /// Its name.
    pub name: BenchName,
}

/// What an instrument is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum InstrumentKind {
    /// A balance.
    Balance,
    /// A motorised cup's counter.
    Counter,
    /// A scanner of container and specimen codes.
    Scanner,
}

impl InstrumentKind {
    /// All kinds with their words.
    pub(crate) const WORDS: [(&str, Self); 3] =
        [("balance", Self::Balance), ("counter", Self::Counter), ("scanner", Self::Scanner)];

    /// The word of the configuration file.
    pub const fn word(self) -> &'static str {
        match self {
            Self::Balance => "balance",
            Self::Counter => "counter",
            Self::Scanner => "scanner",
        }
    }
}

/// A balance, cup counter or scanner.
#[derive(Clone, Debug, PartialEq)]
pub struct Instrument {
    /// Its name.
    pub name: InstrumentName,
    /// What it is.
    pub kind: InstrumentKind,
    /// The benches it serves: one, or for a balance several.
    pub benches: Vec<BenchName>,
    /// Its port; what the file leaves out is as the profile says.
    pub port: PortSettings,
    /// The line that a switch closes at each drop (cup counters).
    pub pulse: Option<PulseSettings>,
    /// What it speaks.
    pub profile: ProfileName,
    /// When a mass is taken (balances).
    pub settle: SettleLimits,
    /// When a run is over (cup counters).
    pub count: CountLimits,
    /// What is known of a balance beside its lines.
    pub weighs: Balance,
}

/// How often balances are checked with a reference mass.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct BalanceCheck {
    /// At least so often.
    pub every_hours: u32,
    /// What a balance may be off by; by the class of the reference mass when left out.
    pub tolerance: Option<Mass>,
    /// What a weighing on a balance that was not checked is worth.
    pub overdue: Severity,
}

/// How weighings and counts find their container.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Linking {
    /// Masses within this are near each other.
    pub near: Mass,
    /// A slice is owed at most this long after the count, minutes.
    pub slice_minutes: u32,
    /// A code read this long after a loose mass still belongs to it, seconds.
    pub code_after_s: u32,
    /// The same printed value within this is one weighing, seconds.
    pub repeat_print_s: u32,
    /// An intention ends after this, hours.
    pub intention_hours: u32,
    /// A slice owed this long is said aloud, minutes.
    pub slice_aloud_minutes: u32,
}

impl Default for Linking {
    fn default() -> Self {
        Self {
            near: Mass::from_ug(50_000),
            slice_minutes: 15,
            code_after_s: 20,
            repeat_print_s: 10,
            intention_hours: 6,
            slice_aloud_minutes: 5,
        }
    }
}

/// What the program says about itself.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Log {
    /// From which level on.
    pub level: LogLevel,
    /// As lines for people or as JSON.
    pub format: LogFormat,
}

/// Levels of the log.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum LogLevel {
    /// Only what needs somebody.
    Error,
    /// And what may.
    Warn,
    /// And what goes on.
    #[default]
    Info,
    /// And how.
    Debug,
    /// Everything.
    Trace,
}

impl LogLevel {
    /// The word of the configuration file.
    pub const fn word(self) -> &'static str {
        match self {
            Self::Error => "error",
            Self::Warn => "warn",
            Self::Info => "info",
            Self::Debug => "debug",
            Self::Trace => "trace",
        }
    }
}

/// Forms of the log.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum LogFormat {
    /// Lines for people.
    #[default]
    Text,
    /// One JSON object a line.
    Json,
}

/// Reads a configuration file from disk, with the method files that it names.
///
/// A relative `state_dir`, `secret_file`, `certificate_file`, `key_file`, `signing_key_file`, backup `folder`, `password_file`, `ca_file` or member of
/// `method_files` lies in the folder of the configuration file (of the path it
/// is named by, where that is a link), not in the one the program was started
/// from: a service manager starts it from anywhere.
///
/// # Errors
/// What is wrong, in that file or in a method file, with its place.
pub fn load(path: &Path) -> Result<Station, Faults> {
    let config = text::read_file(path)?;
    let beside = path.parent().unwrap_or(Path::new(""));
    let mut station = parse_with(&path.display().to_string(), &config, &|name| {
        let path = beside.join(name);
        text::read_file(&path).map(|text| (path.display().to_string(), text))
    })?;
    let mqtt = &mut station.mqtt;
    let screen = &mut station.screen;
    let paths = [
        &mut station.state_dir,
        &mut station.signing_key_file,
        &mut mqtt.password_file,
        &mut mqtt.ca_file,
        &mut station.broker.password_file,
        &mut screen.secret_file,
        &mut screen.certificate_file,
        &mut screen.key_file,
    ];
    if let Some(backup) = &mut station.backup {
        backup.folder = beside.join(&backup.folder);
    }
    for path in paths.into_iter().flatten() {
        *path = beside.join(&*path);
    }
    Ok(station)
}

/// Reads a configuration file that names no method files.
///
/// # Errors
/// What is wrong, with its place.
pub fn parse(file: &str, text: &str) -> Result<Station, Faults> {
    parse_with(file, text, &|name| {
        Err(Faults::from(crate::Fault {
            file: name.into(),
            line: 1,
            column: 1,
            path: String::new(),
            says: "cannot be read: the configuration does not come from a folder".into(),
            expected: "methods inside the configuration".into(),
            try_this: "a [method.NAME] table".into(),
        }))
    })
}

/// Gives the shown name and the text of a method file named in the configuration.
pub type MethodFiles<'f> = &'f dyn Fn(&str) -> Result<(String, String), Faults>;

/// Reads a configuration file; `files` gives the method files that it names.
///
/// # Errors
/// What is wrong, with its place.
pub fn parse_with(file: &str, text: &str, files: MethodFiles<'_>) -> Result<Station, Faults> {
    let shipped = (methods::shipped()?, profiles::shipped()?);
    read(file, text, |root| station(root, shipped, files))
}

fn station(root: &Table<'_>, shipped: (Methods, Profiles), files: MethodFiles<'_>) -> Option<Station> {
    root.only(keys::STATION);
    let (mut methods, mut profiles) = shipped;
    method_files(root, &mut methods, files);
    let broken = own_methods(root, &mut methods);
    let broken_profiles = profiles::own(root, &mut profiles);
    let benches = tables::benches(root);
    let instruments = instrument::all(root, &benches, &profiles, &broken_profiles);
    let default_method = default_method(root, &methods, &broken);
    // Everything is read before anything is missed, so that all faults are told.
    let (lab, mqtt, broker) = (tables::lab(root), tables::mqtt(root), tables::broker(root));
    let (linking, balance_check, log) = (tables::linking(root), tables::balance_check(root), tables::log(root));
    let screen = tables::screen(root);
    let state_dir = root.get("state_dir").and_then(|e| tables::path(&e));
    let (signing_key_file, backup) = (tables::signing_key_file(root), tables::backup(root));
    let (lab, default_method) = (lab?, default_method?);
    Some(Station {
        lab,
        mqtt,
        broker,
        screen,
        signing_key_file,
        backup,
        state_dir,
        benches,
        instruments,
        linking,
        balance_check,
        log,
        methods,
        profiles,
        default_method,
    })
}

/// Names of tables that have a fault of their own: using them is no second one.
type Broken<N> = BTreeSet<N>;

fn default_method(root: &Table<'_>, methods: &Methods, broken: &Broken<MethodName>) -> Option<MethodName> {
    let Some(entry) = root.get("default_method") else { return MethodName::new(defaults::METHOD).ok() };
    if entry.quiet_text().and_then(|t| MethodName::new(t).ok()).is_some_and(|n| broken.contains(&n)) {
        return None;
    }
    known_method(&entry, methods)
}

/// A method's name that must be among `methods`.
pub(crate) fn known_method(entry: &Entry<'_>, methods: &Methods) -> Option<MethodName> {
    let name: MethodName = entry.name()?;
    if !methods.contains_key(&name) {
        let known: Vec<&str> = methods.keys().map(MethodName::as_str).collect();
        let expected = format!("the name of a method: {}", known.join(", "));
        let says = format!("is {}, and there is no such method", quote(name.as_str()));
        entry.fault(&says, &expected, &remedy_for_name(name.as_str(), &known));
        return None;
    }
    Some(name)
}

/// `[method.NAME]` tables; gives the names of the broken ones.
fn own_methods(root: &Table<'_>, methods: &mut Methods) -> Broken<MethodName> {
    let mut broken = Broken::new();
    let Some(table) = root.get("method").and_then(|e| e.any_table("method")) else { return broken };
    for entry in table.entries() {
        let Some(name) = entry.key_name::<MethodName>() else { continue };
        match entry.any_table(name.as_str()).and_then(|t| methods::method(&t, Some(&name))) {
            Some(method) => drop(methods.insert(name, method)),
            None => drop(broken.insert(name)),
        }
    }
    broken
}

/// `method_files`.
fn method_files(root: &Table<'_>, methods: &mut Methods, files: MethodFiles<'_>) {
    let Some(list) = root.get("method_files") else { return };
    for entry in list.one_or_list() {
        let Some(name) = tables::path(&entry) else { continue };
        match files(&name.to_string_lossy()).and_then(|(file, text)| methods::parse(&file, &text)) {
            Ok(method) => drop(methods.insert(method.name.clone(), method)),
            Err(faults) => entry.foreign(faults),
        }
    }
}
