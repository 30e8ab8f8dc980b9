//! Puts the parts together: ports, desk, ledger, broker, courier, local socket.

mod broker;
mod offers;
mod outlet;
mod ports;
mod settings;

pub use broker::fact_payload;
pub use offers::told_of;
pub use ports::Beside;
pub use settings::{Profiles, Restored, settings_of, setup_of};

use crate::backup::{self, Keeper};
use crate::clock::{BootClock, boot_id};
use crate::desk::inbox::Inbox;
use crate::desk::{Desk, DeskSetup, Seat, SeatSettings};
use crate::heard::Heard;
use crate::keys::Key;
use crate::ledger::{LedgerError, OpenOptions};
#[cfg(feature = "broker")]
use crate::publish;
use crate::publish::Courier;
use crate::screen::board::{Board, Fixed};
use crate::screen::hand::Hand;
use crate::screen::{self, Screen, ScreenFault};
use crate::{asks, socket};
use broker::{SharedCourier, courier_settings, start_courier};
use bytes::Bytes;
use outlet::Outlet;
use ports::{Aids, Doors, PortsThread, open_ports};
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, PoisonError};
use std::time::Duration;
use tarecup_config::profiles::ProfileSource;
use tarecup_config::station::Station;
use tarecup_core::fact::Recorded;
use tarecup_drivers::port::serial::PortTask;
use tarecup_drivers::profile::Profile;
use tokio::runtime::Runtime;

/// How long an orderly stop waits for the broker.
const FAREWELL: Duration = Duration::from_secs(3);

/// Room kept back on the disk: many times what a weighing in progress and the facts after it take.
const RESERVE_BYTES: u64 = 1 << 20;

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
    /// A folder to record to.
    #[error("{0}")]
    Record(String),
    /// The bench screen.
    #[error(transparent)]
    Screen(#[from] ScreenFault),
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
    /// Signs heads.
    pub key: Option<Key>,
    /// When the screen's address is taken, take a free one.
    pub any_screen_port: bool,
    /// The demo's hand at a simulated bench.
    pub hand: Option<Arc<dyn Hand>>,
    /// Sees messages.
    pub tap: Option<Tap>,
    /// Sees facts.
    pub told: Option<Told>,
    /// What goes on beside the ports.
    pub beside: Beside,
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
    backups: Option<Keeper>,
    aids: Aids,
    screen: Option<Screen>,
    time_passes: Arc<AtomicBool>,
}

impl Service {
    /// Starts everything. Nothing runs when it fails.
    pub fn start(plan: Plan) -> Result<Service, StartError> {
        let Plan { station, state_dir, clock, time_passes, any_broker_port, any_screen_port, hand, key, tap, told, beside } =
            plan;
        let profiles = compile_profiles(&station)?;
        make_state_dir(&state_dir)?;
        if station.screen.enabled {
            screen::check(&station.screen)?;
        }
        let inbox = Inbox::new();
        let ports_runtime = PortsThread::start(&inbox, time_passes)?;
        let net_runtime = runtime("net")?;
        let heard = Arc::new(Heard::default());
        let setup = desk_setup(&station, &profiles, &state_dir, key, time_passes);
        let options = OpenOptions { reserve_bytes: RESERVE_BYTES, ..OpenOptions::new(&boot_id(), clock.now().utc_us) };
        let stamp = |boot| {
            clock.set_boot(boot);
            clock.now()
        };
        let settings_text = setup.settings.clone();
        let (mut desk, first) = Desk::open(&state_dir, options, setup, stamp)?;
        let screen = screen::Prepared::new(&station.screen, any_screen_port)?;
        let mut settings = courier_settings(&station)?;
        settings.will = Bytes::from(desk.presence("lost", &clock.now()).to_string());
        #[cfg(feature = "broker")]
        let broker = broker::built_in(&station, &mut settings, any_broker_port, &net_runtime)?;
        #[cfg(not(feature = "broker"))]
        let _ = any_broker_port;
        let broker_name = format!("{}:{}", settings.host, settings.port);
        let courier: SharedCourier = Arc::default();
        start_courier(settings.clone(), &desk, &state_dir, &inbox, &courier, &net_runtime)?;
        let aids = Aids::start(beside, &station, &settings_text, &state_dir, &clock, &inbox, time_passes)?;
        let doors = Doors::default();
        let board = screen.is_some().then(|| board(&station, &mut desk, &clock, &state_dir)).transpose()?;
        let outlet = Outlet {
            board: board.clone(),
            settings,
            ledger: desk.ledger_name(),
            courier: Arc::clone(&courier),
            heard: Arc::clone(&heard),
            tap,
            told,
            clock: clock.clone(),
            doors: doors.clone(),
        };
        outlet.hand_on(&desk, first);
        let listener = {
            let _inside = net_runtime.enter();
            socket::listen(&state_dir).map_err(|error| StartError::Socket { state_dir: state_dir.clone(), error })?
        };
        net_runtime.spawn(socket::serve(listener, Arc::clone(&inbox)));
        let time_passes = Arc::new(AtomicBool::new(time_passes));
        let seat_settings = SeatSettings { clock: clock.clone(), time_passes: Arc::clone(&time_passes) };
        let seat = Seat::take(desk, Arc::clone(&inbox), seat_settings, move |desk, effects| outlet.hand_on(desk, effects))
            .map_err(StartError::System)?;
        let ports = open_ports(&station, &profiles, &ports_runtime.handle, &clock, &inbox, &aids, &doors);
        let backups = keep_backups(&station, &state_dir, &clock)?;
        let screen =
            screen.zip(board).map(|(prepared, board)| Screen::start(prepared, board, Arc::clone(&inbox), &state_dir, hand));
        let screen = screen.transpose().map_err(StartError::System)?;
        Ok(Service {
            backups,
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
            aids,
            screen,
            time_passes,
        })
    }

    /// The virtual day is over: from now on time passes by itself.
    pub fn let_time_pass(&self) {
        self.time_passes.store(true, Ordering::Relaxed);
        self.inbox.tick(Box::new(|_| ()));
    }

    /// Where the bench screen is, as a person types it.
    pub fn screen_url(&self) -> Option<&str> {
        self.screen.as_ref().map(Screen::url)
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
        if let Some(backups) = self.backups {
            backups.stop();
        }
        if let Some(screen) = self.screen {
            screen.stop();
        }
        self.ports_thread.stop(self.ports);
        self.aids.stop();
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

fn keep_backups(station: &Station, state_dir: &Path, clock: &Arc<dyn BootClock>) -> Result<Option<Keeper>, StartError> {
    let Some(backup) = &station.backup else { return Ok(None) };
    let plan = backup::Plan {
        state_dir: state_dir.to_path_buf(),
        folder: backup.folder.clone(),
        every_hours: backup.every_hours,
        keep: backup.keep,
    };
    Keeper::start(plan, clock.clone()).map(Some).map_err(StartError::System)
}

/// The state directory is its owner's alone: ledger and socket lie in it.
fn make_state_dir(path: &Path) -> Result<(), StartError> {
    use std::os::unix::fs::DirBuilderExt;
    let made = std::fs::DirBuilder::new().recursive(true).mode(0o700).create(path);
    made.map_err(|error| StartError::StateDir { path: path.to_path_buf(), error })
}

/// What the screen shows, as it stands at the start.
fn board(station: &Station, desk: &mut Desk, clock: &Arc<dyn BootClock>, state_dir: &Path) -> Result<Arc<Board>, StartError> {
    let start = screen::session::random().map_err(|e| StartError::System(std::io::Error::other(e)))?;
    let fixed = Fixed {
        lab: station.lab.name.clone(),
        station: station.lab.station.to_string(),
        start: start[..12].to_string(),
        state_dir: state_dir.to_path_buf(),
    };
    let lab = desk.mirror();
    Ok(Board::new(fixed, lab, desk.instrument_views(), desk.last_seq(), Arc::clone(clock)))
}

fn runtime(name: &str) -> Result<Runtime, StartError> {
    let mut builder = tokio::runtime::Builder::new_multi_thread();
    builder.worker_threads(1).max_blocking_threads(16).thread_name(name).enable_all().build().map_err(StartError::System)
}

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
pub fn desk_setup(station: &Station, profiles: &Profiles, state_dir: &Path, key: Option<Key>, time_passes: bool) -> DeskSetup {
    let kept = settings::Kept::of(station, key.as_ref(), time_passes);
    let text = kept.text();
    DeskSetup { key, ..kept.setup(profiles, text, state_dir.display().to_string()) }
}
