//! Puts the parts together: ports, desk, ledger, broker, courier, local socket.

use crate::clock::{BootClock, boot_id};
use crate::desk::inbox::Inbox;
use crate::desk::{Desk, DeskSetup, Effects, InstrumentSetup, Kind, LiveOut, Seat, SeatSettings};
use crate::heard::Heard;
use crate::ledger::{FactStored, LedgerError, OpenOptions, Reader};
use crate::publish::{self, Courier, CourierEvent, CourierSettings, Live, Login, Outgoing, Past, TlsSettings};
use crate::{asks, opening, socket};
use bytes::{BufMut, Bytes, BytesMut};
use serde_json::json;
use std::collections::BTreeMap;
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;
use tarecup_config::profiles::ProfileSource;
use tarecup_config::station::{Instrument, InstrumentKind, Scheme, Station};
use tarecup_core::fact::Recorded;
use tarecup_core::lab::{Linking, Setup};
use tarecup_core::sense::Talks;
use tarecup_core::stamp::{SECOND_US, Stamp};
use tarecup_drivers::heard::{Clock, Deliver};
use tarecup_drivers::port::serial::PortTask;
use tarecup_drivers::profile::Profile;
use tokio::runtime::{Handle, Runtime};

/// How long an orderly stop waits for the broker.
const FAREWELL: Duration = Duration::from_secs(3);

/// How long the built-in broker has to read the farewell.
#[cfg(feature = "broker")]
const BROKER_READS: Duration = Duration::from_millis(200);

/// Why the service did not start.
#[derive(Debug, thiserror::Error)]
pub enum StartError {
    /// The ledger.
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    /// A profile that cannot work.
    #[error("profile \"{name}\": {why}")]
    Profile {
        /// Which.
        name: String,
        /// Why, and what to write.
        why: String,
    },
    /// The built-in broker.
    #[error("the built-in broker: {0}")]
    Broker(String),
    /// The broker's settings.
    #[error("[mqtt] {0}")]
    Mqtt(String),
    /// The state directory.
    #[error("the state directory {} cannot be made: {error}; name another one with --state DIR", .path.display())]
    StateDir {
        /// Where.
        path: PathBuf,
        /// Why.
        error: std::io::Error,
    },
    /// The local socket.
    #[error("the local socket in {}: {error}", .state_dir.display())]
    Socket {
        /// Where.
        state_dir: PathBuf,
        /// Why.
        error: std::io::Error,
    },
    /// The system.
    #[error("the system gives no thread or timer: {0}")]
    System(std::io::Error),
}

/// Sees every message on its way to the broker: topic, payload, retained, quality of service.
pub type Tap = Arc<dyn Fn(&str, Option<&[u8]>, bool, u8) + Send + Sync>;
/// Sees every fact after it is stored.
pub type Told = Arc<dyn Fn(&Recorded) + Send + Sync>;

/// What to start.
pub struct Plan {
    /// The settings.
    pub station: Station,
    /// Where ledger and socket lie.
    pub state_dir: PathBuf,
    /// Where stamps come from.
    pub clock: Arc<dyn BootClock>,
    /// Time passes by itself.
    pub time_passes: bool,
    /// When the built-in broker's address is taken, take a free one.
    pub any_broker_port: bool,
    /// Sees messages.
    pub tap: Option<Tap>,
    /// Sees facts.
    pub told: Option<Told>,
}

/// The running service.
pub struct Service {
    seat: Seat,
    ports: Vec<PortTask>,
    ports_thread: PortsThread,
    net_runtime: Runtime,
    courier: SharedCourier,
    #[cfg(feature = "broker")]
    broker: Option<publish::broker::BuiltIn>,
    inbox: Arc<Inbox>,
    heard: Arc<Heard>,
    broker_address: Option<SocketAddr>,
    broker_name: String,
    clock: Arc<dyn BootClock>,
    state_dir: PathBuf,
}

impl Service {
    /// Starts everything. Nothing runs when it fails.
    pub fn start(plan: Plan) -> Result<Service, StartError> {
        let Plan { station, state_dir, clock, time_passes, any_broker_port, tap, told } = plan;
        let profiles = compile_profiles(&station)?;
        make_state_dir(&state_dir)?;
        let inbox = Inbox::new();
        let ports_runtime = PortsThread::start(&inbox, time_passes)?;
        let net_runtime = runtime("net")?;
        let heard = Arc::new(Heard::default());
        let setup = desk_setup(&station, &profiles, &state_dir, time_passes);
        let options = OpenOptions::new(&boot_id(), clock.now().utc_us);
        let stamp = |boot| {
            clock.set_boot(boot);
            clock.now()
        };
        let (desk, first) = Desk::open(&state_dir, options, setup, stamp)?;
        let mut settings = courier_settings(&station)?;
        settings.will = Bytes::from(desk.presence("lost", &clock.now()).to_string());
        #[cfg(feature = "broker")]
        let broker = built_in(&station, &mut settings, any_broker_port, &net_runtime)?;
        #[cfg(not(feature = "broker"))]
        let _ = any_broker_port;
        let broker_name = format!("{}:{}", settings.host, settings.port);
        let courier: SharedCourier = Arc::default();
        start_courier(settings.clone(), &desk, &state_dir, &inbox, &courier, &net_runtime)?;
        let outlet = Outlet {
            settings,
            ledger: desk.ledger_name(),
            courier: Arc::clone(&courier),
            heard: Arc::clone(&heard),
            tap,
            told,
            clock: clock.clone(),
        };
        outlet.hand_on(&desk, first);
        let listener = {
            let _inside = net_runtime.enter();
            socket::listen(&state_dir).map_err(|error| StartError::Socket { state_dir: state_dir.clone(), error })?
        };
        net_runtime.spawn(socket::serve(listener, Arc::clone(&inbox)));
        let seat_settings = SeatSettings { clock: clock.clone(), time_passes };
        let seat = Seat::take(desk, Arc::clone(&inbox), seat_settings, move |desk, effects| outlet.hand_on(desk, effects))
            .map_err(StartError::System)?;
        let ports = open_ports(&station, &profiles, &ports_runtime.handle, &clock, &inbox);
        Ok(Service {
            seat,
            ports,
            ports_thread: ports_runtime,
            net_runtime,
            courier,
            #[cfg(feature = "broker")]
            broker_address: broker.as_ref().map(publish::broker::BuiltIn::address),
            #[cfg(not(feature = "broker"))]
            broker_address: None,
            #[cfg(feature = "broker")]
            broker,
            inbox,
            heard,
            broker_name,
            clock,
            state_dir,
        })
    }

    /// The queue in front of the desk.
    pub fn inbox(&self) -> &Arc<Inbox> {
        &self.inbox
    }
    /// What has been taken of each port.
    pub fn heard(&self) -> &Arc<Heard> {
        &self.heard
    }
    /// Where the built-in broker listens.
    pub fn broker_address(&self) -> Option<SocketAddr> {
        self.broker_address
    }
    /// Host and port of the broker in use.
    pub fn broker_name(&self) -> &str {
        &self.broker_name
    }
    /// Where ledger and socket lie.
    pub fn state_dir(&self) -> &Path {
        &self.state_dir
    }
    /// How many ports are open.
    pub fn ports_open(&self) -> usize {
        let status: serde_json::Value = serde_json::from_str(&self.ask(r#"{"ask":"status"}"#)).unwrap_or_default();
        let open = |i: &&serde_json::Value| i["port_open"] == serde_json::Value::Bool(true);
        status["status"]["instruments"].as_array().map_or(0, |all| all.iter().filter(open).count())
    }
    /// Whether a part has ended that should run for as long as the service does.
    pub fn part_ended(&self) -> bool {
        let courier = self.courier.lock().unwrap_or_else(PoisonError::into_inner).as_ref().is_some_and(|c| !c.is_running());
        #[cfg(feature = "broker")]
        let broker = self.broker.as_ref().is_some_and(|b| !b.is_running());
        #[cfg(not(feature = "broker"))]
        let broker = false;
        self.seat.ended() || self.ports_thread.thread.is_finished() || courier || broker
    }
    /// Whether the broker has accepted the connection.
    pub fn broker_connected(&self) -> bool {
        self.courier.lock().unwrap_or_else(PoisonError::into_inner).as_ref().is_some_and(Courier::is_connected)
    }

    /// Waits until everything is delivered that is stored, or the time is over.
    pub fn wait_delivered(&self, timeout: Duration) -> bool {
        let until = std::time::Instant::now() + timeout;
        while std::time::Instant::now() < until {
            let delivered =
                self.courier.lock().unwrap_or_else(PoisonError::into_inner).as_ref().map_or(0, Courier::delivered_through);
            let answer = self.ask(r#"{"ask":"status"}"#);
            let status: serde_json::Value = serde_json::from_str(&answer).unwrap_or_default();
            if status["status"]["seq"].as_u64().is_some_and(|seq| delivered >= seq) {
                return true;
            }
            std::thread::sleep(Duration::from_millis(5));
        }
        false
    }

    /// Puts an ask and waits for its answer. Not for asynchronous tasks.
    pub fn ask(&self, json: &str) -> String {
        let (tx, rx) = std::sync::mpsc::channel();
        self.inbox.ask("console".into(), json.into(), Box::new(move |answer| drop(tx.send(answer))));
        rx.recv().unwrap_or_else(|_| asks::refusal("the service has stopped"))
    }

    /// Stops in order: ports close, the desk stores what it has, the broker hears of it.
    pub fn stop(self) -> bool {
        self.ports_thread.stop(self.ports);
        let desk = self.seat.stop();
        let orderly = desk.as_ref().is_some_and(Desk::stopped);
        let presence = desk.as_ref().map(|d| Bytes::from(d.presence("stopped", &self.clock.now()).to_string()));
        let courier = self.courier.lock().unwrap_or_else(PoisonError::into_inner).take();
        if let Some(courier) = courier {
            let farewell = self.net_runtime.block_on(courier.stop(presence, FAREWELL));
            tracing::info!(delivered_through = farewell.delivered_through, complete = farewell.complete, "left the broker");
        }
        #[cfg(feature = "broker")]
        if let Some(broker) = self.broker {
            // It reads the farewell in its own time; stopped before that, it would say the last will.
            std::thread::sleep(BROKER_READS);
            self.net_runtime.block_on(broker.stop());
        }
        let _ = std::fs::remove_file(socket::path(&self.state_dir));
        self.net_runtime.shutdown_timeout(Duration::from_millis(500));
        orderly
    }
}

/// The state directory is its owner's alone: ledger and socket lie in it.
fn make_state_dir(path: &Path) -> Result<(), StartError> {
    use std::os::unix::fs::DirBuilderExt;
    let made = std::fs::DirBuilder::new().recursive(true).mode(0o700).create(path);
    made.map_err(|error| StartError::StateDir { path: path.to_path_buf(), error })
}

fn runtime(name: &str) -> Result<Runtime, StartError> {
    let mut builder = tokio::runtime::Builder::new_multi_thread();
    builder.worker_threads(1).max_blocking_threads(16).thread_name(name).enable_all().build().map_err(StartError::System)
}

/// After lines came, the ports are looked at again after this time: lines of
/// many ports are then read together, which costs a fraction of the wake-ups.
/// The first line after a pause does not wait.
const PACE: Duration = Duration::from_micros(3_000);

/// The thread that drives all ports.
struct PortsThread {
    handle: Handle,
    stop: tokio::sync::oneshot::Sender<Vec<PortTask>>,
    thread: std::thread::JoinHandle<()>,
}

impl PortsThread {
    /// With `paced`, lines that come fast are gathered; a virtual day is not paced.
    fn start(inbox: &Arc<Inbox>, paced: bool) -> Result<Self, StartError> {
        let inbox = Arc::clone(inbox);
        let before_waiting = move || {
            if inbox.lines_are_in() && paced {
                std::thread::sleep(PACE);
            }
        };
        let mut builder = tokio::runtime::Builder::new_current_thread();
        let runtime =
            builder.max_blocking_threads(16).on_thread_park(before_waiting).enable_all().build().map_err(StartError::System)?;
        let handle = runtime.handle().clone();
        let (stop, stopped) = tokio::sync::oneshot::channel::<Vec<PortTask>>();
        let work = move || {
            runtime.block_on(async {
                for port in stopped.await.unwrap_or_default() {
                    port.join().await;
                }
            });
            runtime.shutdown_timeout(Duration::from_millis(500));
        };
        let thread = std::thread::Builder::new().name("ports".into()).spawn(work).map_err(StartError::System)?;
        Ok(Self { handle, stop, thread })
    }

    /// Closes all ports; what was read is delivered.
    fn stop(self, ports: Vec<PortTask>) {
        let _ = self.stop.send(ports);
        let _ = self.thread.join();
    }
}

/// Compiled profiles by name.
pub type Profiles = BTreeMap<String, Arc<Profile>>;

/// Compiles the profiles that the instruments use.
pub fn compile_profiles(station: &Station) -> Result<Profiles, StartError> {
    let mut profiles = Profiles::new();
    for instrument in &station.instruments {
        let name = instrument.profile.as_str();
        if let Some(source) = station.profiles.get(&instrument.profile)
            && !profiles.contains_key(name)
        {
            let profile = compile_profile(source).map_err(|why| StartError::Profile { name: name.into(), why })?;
            profiles.insert(name.into(), Arc::new(profile));
        }
    }
    Ok(profiles)
}

/// Compiles one profile, under the name of its file or table.
fn compile_profile(source: &ProfileSource) -> Result<Profile, String> {
    let mut text = source.text.clone();
    text.name.get_or_insert_with(|| source.name.as_str().into());
    Profile::compile(text).map_err(|e| e.to_string())
}

/// What the desk needs to know of the settings.
pub fn desk_setup(station: &Station, profiles: &Profiles, state_dir: &Path, time_passes: bool) -> DeskSetup {
    let linking = &station.linking;
    let seconds = |s: u32| i64::from(s) * SECOND_US;
    let lab = Setup {
        benches: station.benches.iter().map(|b| b.name.clone()).collect(),
        instruments: station.instruments.iter().map(|i| (i.name.clone(), i.benches.clone())).collect(),
        methods: station.methods.clone(),
        default_method: station.default_method.clone(),
        linking: Linking {
            near: linking.near,
            slice_us: seconds(linking.slice_minutes) * 60,
            code_after_us: seconds(linking.code_after_s),
            repeat_print_us: seconds(linking.repeat_print_s),
            intention_us: seconds(linking.intention_hours) * 3_600,
            slice_aloud_us: seconds(linking.slice_aloud_minutes) * 60,
        },
    };
    let instruments =
        station.instruments.iter().filter_map(|i| Some(instrument(i, profiles.get(i.profile.as_str())?, time_passes))).collect();
    DeskSetup {
        station: station.lab.station.as_str().into(),
        state_dir: state_dir.display().to_string(),
        lab,
        instruments,
        settings: settings_text(station),
        retain_days: station.mqtt.retain_days,
    }
}

/// In a virtual day hours pass in no time: silence then means nothing.
fn instrument(i: &Instrument, profile: &Arc<Profile>, time_passes: bool) -> InstrumentSetup {
    let mut decoder = profile.decoder();
    InstrumentSetup {
        name: i.name.clone(),
        kind: match i.kind {
            InstrumentKind::Balance => Kind::Balance,
            InstrumentKind::Counter => Kind::Counter,
            InstrumentKind::Scanner => Kind::Scanner,
        },
        benches: i.benches.clone(),
        profile: i.profile.as_str().into(),
        port: i.port.path.clone(),
        settle: i.settle,
        count: i.count,
        streams: time_passes
            && (profile.modbus().is_some() || (i.kind == InstrumentKind::Balance && i.settle.talks == Talks::Continuous)),
        decode: Box::new(move |bytes| decoder.decode(bytes)),
    }
}

/// The settings in full, as the ledger keeps them. Secrets live in files of their own and are named only.
fn settings_text(station: &Station) -> String {
    let instruments: Vec<_> = station
        .instruments
        .iter()
        .map(|i| {
            json!({"name": i.name, "kind": i.kind.word(), "benches": i.benches, "port": i.port, "pulse": i.pulse, "profile": i.profile,
                   "settle": i.settle, "count": i.count})
        })
        .collect();
    let profiles: BTreeMap<_, _> =
        station.instruments.iter().filter_map(|i| station.profiles.get(&i.profile)).map(|p| (p.name.as_str(), &p.text)).collect();
    let linking = &station.linking;
    json!({
        "program": env!("CARGO_PKG_VERSION"), "laboratory": station.lab.name, "station": station.lab.station,
        "benches": station.benches.iter().map(|b| &b.name).collect::<Vec<_>>(),
        "instruments": instruments, "profiles": profiles, "methods": station.methods, "default_method": station.default_method,
        "linking": {"near_ug": linking.near, "slice_minutes": linking.slice_minutes, "code_after_s": linking.code_after_s,
                    "repeat_print_s": linking.repeat_print_s, "intention_hours": linking.intention_hours,
                    "slice_aloud_minutes": linking.slice_aloud_minutes},
        "mqtt": {"root": station.mqtt.root, "retain_days": station.mqtt.retain_days},
    })
    .to_string()
}

fn courier_settings(station: &Station) -> Result<CourierSettings, StartError> {
    let root = station.mqtt.root.as_str();
    let name = station.lab.station.as_str();
    let mut settings = match &station.mqtt.url {
        Some(url) => CourierSettings::new(&url.host, url.port, root, name),
        None => CourierSettings::new(&station.broker.listen.ip().to_string(), station.broker.listen.port().max(1), root, name),
    };
    settings.asks = true;
    if let Some(url) = &station.mqtt.url {
        if url.scheme == Scheme::Mqtts {
            let ca_file = station.mqtt.ca_file.clone().ok_or_else(|| {
                StartError::Mqtt(
                    "ca_file is needed with mqtts: the file with the certificate of whoever signed the broker's".into(),
                )
            })?;
            settings.tls = Some(TlsSettings { ca_file });
        }
        settings.login = login(station)?;
    }
    Ok(settings)
}

fn login(station: &Station) -> Result<Option<Login>, StartError> {
    let Some(user) = station.mqtt.user.clone() else { return Ok(None) };
    let password = match &station.mqtt.password_file {
        None => String::new(),
        Some(path) => {
            let text =
                std::fs::read_to_string(path).map_err(|e| StartError::Mqtt(format!("password_file {}: {e}", path.display())))?;
            text.lines().next().unwrap_or_default().trim().to_string()
        }
    };
    Ok(Some(Login { user, password }))
}

#[cfg(feature = "broker")]
fn built_in(
    station: &Station,
    settings: &mut CourierSettings,
    any_port: bool,
    runtime: &Runtime,
) -> Result<Option<publish::broker::BuiltIn>, StartError> {
    use publish::broker::{BrokerFault, BrokerSettings, start};
    if station.mqtt.url.is_some() {
        return Ok(None);
    }
    let mut wanted = BrokerSettings::for_courier(station.broker.listen, settings);
    wanted.passwords = station.broker.password_file.clone();
    let started = match runtime.block_on(start(wanted.clone())) {
        Err(BrokerFault::InUse { address, holder }) if any_port => {
            tracing::warn!(%address, %holder, "the usual address of the built-in broker is taken; using a free one");
            wanted.address.set_port(0);
            runtime.block_on(start(wanted))
        }
        other => other,
    };
    let broker = started.map_err(|e| StartError::Broker(e.to_string()))?;
    broker.admit(settings);
    Ok(Some(broker))
}

type SharedCourier = Arc<Mutex<Option<Courier>>>;

fn start_courier(
    settings: CourierSettings,
    desk: &Desk,
    state_dir: &Path,
    inbox: &Arc<Inbox>,
    shared: &SharedCourier,
    runtime: &Runtime,
) -> Result<(), StartError> {
    let past = Arc::new(LedgerPast { path: state_dir.to_path_buf(), ledger: desk.ledger_name() });
    let (inbox, answers) = (Arc::clone(inbox), Arc::clone(shared));
    let on_event = Arc::new(move |event: CourierEvent| courier_event(event, &inbox, &answers));
    let courier = publish::spawn(runtime.handle(), settings, past, desk.delivered_through(), on_event);
    let courier = courier.map_err(|e| StartError::Mqtt(e.to_string()))?;
    *shared.lock().unwrap_or_else(PoisonError::into_inner) = Some(courier);
    Ok(())
}

fn courier_event(event: CourierEvent, inbox: &Arc<Inbox>, answers: &SharedCourier) {
    match event {
        CourierEvent::Connected => {
            tracing::info!("the broker accepted the connection");
            inbox.broker(None);
        }
        CourierEvent::Disconnected { why } => {
            tracing::warn!(%why, "no broker; recording goes on");
            inbox.broker(Some(why));
        }
        CourierEvent::Delivered { through } => inbox.delivered(through),
        CourierEvent::Asked { client, payload, correlation } => asked_by_mqtt(client, &payload, correlation, inbox, answers),
        other => tracing::warn!(?other, "the broker"),
    }
}

/// Asks over MQTT may read. What would write is refused: a name on a topic proves nothing.
fn asked_by_mqtt(client: String, payload: &[u8], correlation: Option<Bytes>, inbox: &Arc<Inbox>, answers: &SharedCourier) {
    let answers = Arc::clone(answers);
    let to = client.clone();
    let reply = move |answer: String| {
        let answer = publish::Answer { client: to, payload: Bytes::from(answer), correlation };
        let outgoing = Outgoing { answers: vec![answer], ..Outgoing::default() };
        if let Some(courier) = answers.lock().unwrap_or_else(PoisonError::into_inner).as_ref() {
            courier.send(outgoing);
        }
    };
    let asked = std::str::from_utf8(payload)
        .map_err(|_| String::from("the ask is not UTF-8"))
        .and_then(|text| asks::parse(text).map(|a| (text, a)));
    match asked {
        Ok((text, asked)) if matches!(asked.wanted, asks::Wanted::Read(_)) => {
            inbox.ask(format!("mqtt-{client}"), text.into(), Box::new(reply));
        }
        Ok(_) => reply(asks::refusal("asks that change the record are not taken over MQTT; use the bench or the local socket")),
        Err(says) => reply(asks::refusal(&says)),
    }
}

/// Facts that the courier no longer has in memory.
struct LedgerPast {
    path: PathBuf,
    ledger: (String, u64),
}

impl Past for LedgerPast {
    fn facts_after(&self, seq: u64, limit: usize) -> Result<Vec<(u64, Bytes)>, String> {
        let reader = Reader::open(&self.path).map_err(|e| e.to_string())?;
        let facts = reader.facts_after(seq, limit).map_err(|e| e.to_string())?;
        Ok(facts.iter().map(|f: &FactStored| (f.seq, fact_payload(&self.ledger, &f.body))).collect())
    }
}

/// A fact as it is published: its stored bytes, with the ledger's name put in front.
pub fn fact_payload(ledger: &(String, u64), stored: &[u8]) -> Bytes {
    let mut payload = BytesMut::with_capacity(stored.len() + 80);
    payload.put_slice(format!("{{\"ledger\":\"{}\",\"epoch\":{},", ledger.0, ledger.1).as_bytes());
    payload.put_slice(stored.get(1..).unwrap_or_default());
    payload.freeze()
}

/// Turns what may leave into messages.
struct Outlet {
    settings: CourierSettings,
    ledger: (String, u64),
    courier: SharedCourier,
    heard: Arc<Heard>,
    tap: Option<Tap>,
    told: Option<Told>,
    clock: Arc<dyn BootClock>,
}

impl Outlet {
    fn hand_on(&self, desk: &Desk, effects: Effects) {
        let mut outgoing = Outgoing::default();
        if effects.presence {
            let presence = desk.presence("up", &self.clock.now()).to_string();
            outgoing.retained.push((self.settings.topic("presence"), Some(Bytes::from(presence))));
        }
        outgoing.facts = effects.facts.iter().map(|(seq, body)| (*seq, fact_payload(&self.ledger, body))).collect();
        outgoing.retained.extend(effects.retained.into_iter().map(|p| (self.settings.topic(&p.topic), p.payload)));
        outgoing.live = effects.live.iter().map(|(live, seq)| self.live(live, *seq)).collect();
        if let Some(tap) = &self.tap {
            self.tapped(tap, &outgoing);
        }
        let anything = !(outgoing.facts.is_empty() && outgoing.retained.is_empty() && outgoing.live.is_empty());
        if anything && let Some(courier) = self.courier.lock().unwrap_or_else(PoisonError::into_inner).as_ref() {
            courier.send(outgoing);
        }
        if let Some(told) = &self.told {
            effects.recorded.iter().for_each(|r| told(r));
        }
        for (reply, answer) in effects.replies {
            reply(answer);
        }
        self.heard.add(&effects.heard);
    }

    fn live(&self, live: &LiveOut, seq: u64) -> Live {
        match live {
            LiveOut::Drop { instrument, drops, rate_per_s, at } => Live::Each {
                topic: self.settings.topic(&format!("live/{instrument}")),
                payload: text(&json!({"v": 1, "seq": seq, "at": at.rfc3339(), "drops": drops, "rate_per_s": rate_per_s})),
            },
            LiveOut::Mass { instrument, reading, at } => Live::Newest {
                topic: self.settings.topic(&format!("live/{instrument}")),
                payload: text(
                    &json!({"v": 1, "seq": seq, "at": at.rfc3339(), "mass_g": reading.mass.grams(), "steady": reading.mark, "basis": reading.basis}),
                ),
            },
        }
    }

    fn tapped(&self, tap: &Tap, outgoing: &Outgoing) {
        let fact_topic = self.settings.topic("fact");
        for (_, payload) in &outgoing.facts {
            tap(&fact_topic, Some(payload), false, 1);
        }
        for (topic, payload) in &outgoing.retained {
            tap(topic, payload.as_deref(), true, 1);
        }
        for live in &outgoing.live {
            let (Live::Newest { topic, payload } | Live::Each { topic, payload }) = live;
            tap(topic, Some(payload), false, 0);
        }
    }
}

fn text(value: &serde_json::Value) -> Bytes {
    Bytes::from(value.to_string())
}

fn open_ports(
    station: &Station,
    profiles: &Profiles,
    runtime: &Handle,
    clock: &Arc<dyn BootClock>,
    inbox: &Arc<Inbox>,
) -> Vec<PortTask> {
    let clock: Arc<dyn Clock> = Arc::new(Stamps(Arc::clone(clock)));
    let mut ports = Vec::new();
    for (id, instrument) in station.instruments.iter().enumerate() {
        if let Some(profile) = profiles.get(instrument.profile.as_str()) {
            let out: Arc<dyn Deliver> = inbox.clone();
            ports.push(opening::open(runtime, id as u16, instrument, profile, Arc::clone(&clock), out));
        }
    }
    ports
}

struct Stamps(Arc<dyn BootClock>);

impl Clock for Stamps {
    fn now(&self) -> Stamp {
        self.0.now()
    }
}
