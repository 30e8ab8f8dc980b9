//! The settings as the ledger keeps them, and what the desk is set up as by them.
//!
//! One way leads from them to the desk, for a start and for whoever decides
//! again later what a ledger holds.

use crate::desk::{DeskSetup, InstrumentSetup, Kind};
use crate::keys::Key;
use serde::{Deserialize, Serialize};
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::sync::Arc;
use tarecup_config::station::{InstrumentKind, Station};
use tarecup_core::lab::{Linking, Setup};
use tarecup_core::limits::Severity;
use tarecup_core::method::Method;
use tarecup_core::names::{BenchName, InstrumentName, MethodName};
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{CountLimits, SettleLimits, Talks};
use tarecup_core::soil::uncertainty::{Balance, BalanceRule};
use tarecup_core::stamp::{HOUR_US, SECOND_US};
use tarecup_drivers::port::PortSettings;
use tarecup_drivers::port::pulse::PulseSettings;
use tarecup_drivers::profile::{Profile, ProfileText};

/// Compiled profiles by name.
pub type Profiles = BTreeMap<String, Arc<Profile>>;

/// The settings in full. Secrets live in files of their own and are named only.
#[derive(Serialize, Deserialize)]
pub(super) struct Kept {
    program: String,
    laboratory: String,
    station: String,
    benches: Vec<BenchName>,
    instruments: Vec<InstrumentKept>,
    profiles: BTreeMap<String, ProfileText>,
    methods: BTreeMap<MethodName, Method>,
    default_method: MethodName,
    linking: LinkingKept,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    balance_check: Option<BalanceCheckKept>,
    mqtt: Value,
    /// The public half of the key that heads are signed with.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    signing_key: Option<String>,
    /// False in a virtual day, in which silence means nothing.
    #[serde(default = "yes")]
    time_passes: bool,
}

#[derive(Serialize, Deserialize)]
struct InstrumentKept {
    name: InstrumentName,
    kind: String,
    benches: Vec<BenchName>,
    port: PortSettings,
    #[serde(default)]
    pulse: Option<PulseSettings>,
    profile: String,
    settle: SettleLimits,
    count: CountLimits,
    #[serde(default)]
    weighs: Balance,
}

#[derive(Serialize, Deserialize)]
struct BalanceCheckKept {
    every_hours: u32,
    tolerance_ug: Option<Mass>,
    overdue: Severity,
}

#[derive(Serialize, Deserialize)]
struct LinkingKept {
    near_ug: Mass,
    slice_minutes: u32,
    code_after_s: u32,
    repeat_print_s: u32,
    intention_hours: u32,
    slice_aloud_minutes: u32,
}

fn yes() -> bool {
    true
}

impl Kept {
    pub(super) fn of(station: &Station, key: Option<&Key>, time_passes: bool) -> Self {
        let instruments = station.instruments.iter().map(|i| InstrumentKept {
            name: i.name.clone(),
            kind: i.kind.word().into(),
            benches: i.benches.clone(),
            port: i.port.clone(),
            pulse: i.pulse,
            profile: i.profile.as_str().into(),
            settle: i.settle,
            count: i.count,
            weighs: i.weighs,
        });
        let used = station.instruments.iter().filter_map(|i| station.profiles.get(&i.profile));
        let linking = &station.linking;
        Self {
            program: env!("CARGO_PKG_VERSION").into(),
            laboratory: station.lab.name.clone(),
            station: station.lab.station.as_str().into(),
            benches: station.benches.iter().map(|b| b.name.clone()).collect(),
            instruments: instruments.collect(),
            profiles: used.map(|p| (p.name.as_str().into(), p.text.clone())).collect(),
            methods: station.methods.clone(),
            default_method: station.default_method.clone(),
            linking: LinkingKept {
                near_ug: linking.near,
                slice_minutes: linking.slice_minutes,
                code_after_s: linking.code_after_s,
                repeat_print_s: linking.repeat_print_s,
                intention_hours: linking.intention_hours,
                slice_aloud_minutes: linking.slice_aloud_minutes,
            },
            balance_check: station.balance_check.map(|c| BalanceCheckKept {
                every_hours: c.every_hours,
                tolerance_ug: c.tolerance,
                overdue: c.overdue,
            }),
            mqtt: json!({"root": station.mqtt.root, "retain_days": station.mqtt.retain_days}),
            signing_key: key.map(|k| k.public().to_string()),
            time_passes,
        }
    }

    pub(super) fn text(&self) -> String {
        serde_json::to_string(self).unwrap_or_default()
    }

    pub(super) fn setup(&self, profiles: &Profiles, text: String, state_dir: String) -> DeskSetup {
        let seconds = |s: u32| i64::from(s) * SECOND_US;
        let linking = &self.linking;
        let lab = Setup {
            benches: self.benches.clone(),
            instruments: self.instruments.iter().map(|i| (i.name.clone(), i.benches.clone())).collect(),
            methods: self.methods.clone(),
            default_method: self.default_method.clone(),
            balances: self.instruments.iter().map(|i| (i.name.clone(), i.weighs)).collect(),
            balance_rule: self.balance_check.as_ref().map(|c| BalanceRule {
                every_us: i64::from(c.every_hours) * HOUR_US,
                tolerance: c.tolerance_ug,
                overdue: c.overdue,
            }),
            linking: Linking {
                near: linking.near_ug,
                slice_us: seconds(linking.slice_minutes) * 60,
                code_after_us: seconds(linking.code_after_s),
                repeat_print_us: seconds(linking.repeat_print_s),
                intention_us: seconds(linking.intention_hours) * 3_600,
                slice_aloud_us: seconds(linking.slice_aloud_minutes) * 60,
            },
        };
        let one = |i: &InstrumentKept| Some(i.setup(profiles.get(i.profile.as_str())?, self.time_passes));
        let retain_days = self.mqtt["retain_days"].as_u64().and_then(|d| u32::try_from(d).ok()).unwrap_or(1);
        let instruments = self.instruments.iter().filter_map(one).collect();
        DeskSetup { station: self.station.clone(), state_dir, lab, instruments, settings: text, retain_days, key: None }
    }
}

impl InstrumentKept {
    /// In a virtual day hours pass in no time: silence then means nothing.
    fn setup(&self, profile: &Arc<Profile>, time_passes: bool) -> InstrumentSetup {
        let mut decoder = profile.decoder();
        let balance = self.kind == InstrumentKind::Balance.word();
        InstrumentSetup {
            name: self.name.clone(),
            kind: match self.kind.as_str() {
                "balance" => Kind::Balance,
                "counter" => Kind::Counter,
                _ => Kind::Scanner,
            },
            benches: self.benches.clone(),
            profile: self.profile.clone(),
            port: self.port.path.clone(),
            settle: self.settle,
            count: self.count,
            streams: time_passes && (profile.modbus().is_some() || (balance && self.settle.talks == Talks::Continuous)),
            decode: Box::new(move |bytes| decoder.decode(bytes)),
        }
    }
}

/// Settings read back from where they were kept.
pub struct Restored {
    /// The desk's setup.
    pub setup: DeskSetup,
    /// Names of the instruments, in the order of their numbers.
    pub names: Vec<InstrumentName>,
    /// Their profiles.
    pub profiles: Vec<Arc<Profile>>,
    /// How their ports were set.
    pub ports: Vec<PortSettings>,
}

/// Reads kept settings back.
///
/// # Errors
/// What in them this program does not understand.
pub fn settings_of(text: &str) -> Result<Restored, String> {
    let kept: Kept = serde_json::from_str(text).map_err(|e| format!("the settings cannot be read: {e}"))?;
    let mut compiled = Profiles::new();
    for (name, profile) in &kept.profiles {
        let mut profile = profile.clone();
        profile.name.get_or_insert_with(|| name.clone());
        let profile = Profile::compile(profile).map_err(|e| format!("settings: profile '{name}': {e}"))?;
        compiled.insert(name.clone(), Arc::new(profile));
    }
    let of = |i: &InstrumentKept| {
        let found = compiled.get(i.profile.as_str()).cloned();
        found.ok_or_else(|| format!("settings: there is no profile '{}'", i.profile))
    };
    let profiles = kept.instruments.iter().map(of).collect::<Result<Vec<_>, _>>()?;
    let setup = kept.setup(&compiled, text.into(), String::new());
    let names = kept.instruments.iter().map(|i| i.name.clone()).collect();
    Ok(Restored { setup, names, profiles, ports: kept.instruments.into_iter().map(|i| i.port).collect() })
}

/// The desk's setup that kept settings stand for.
///
/// # Errors
/// What in them this program does not understand.
pub fn setup_of(text: &str) -> Result<DeskSetup, String> {
    settings_of(text).map(|restored| restored.setup)
}
