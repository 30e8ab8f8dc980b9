//! `tarecup demo`: a day in a laboratory with simulated instruments on real
//! pseudo-terminals, played in virtual time through the whole program.

mod day;
mod visitor;
mod world;

use super::{FAILED, LogForm, NOT_COMPLETE, WRONG_INPUT, start_log, tell};
use crate::clock::VirtualClock;
use crate::keys::Key;
use crate::screen::hand::Hand;
use crate::service::{Plan, Service, Tap, Told};
use crate::signals;
use std::io::Write;
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::{Duration, Instant};
use tarecup_config::scenario::{self, Mode, Scenario};
use tarecup_config::{methods, station, text};
use tarecup_core::fact::Fact;
use tarecup_core::limits::{Limits, State};
use tarecup_simulators::operator::{Instruments, Play, play};
use visitor::Visitor;

/// The day that is played when no scenario is named.
const OWN_DAY: &str = include_str!("../../../../config/scenarios/day.toml");
/// Virtual seconds per second, when nothing else is said.
const SPEED: f64 = 240.0;
/// How long the end waits for the broker to acknowledge everything.
const DELIVERY: Duration = Duration::from_secs(10);
/// How long the broker stays up after a day that is played once.
const LINGER: Duration = Duration::from_secs(1);

/// Arguments of `demo`.
#[derive(clap::Args)]
pub struct DemoArgs {
    /// Scenario file. Default: a day at the Mosswick materials laboratory.
    #[arg(long, value_name = "FILE")]
    scenario: Option<PathBuf>,
    /// Virtual seconds per second. The oven is leapt over at any speed.
    #[arg(long, value_name = "N")]
    speed: Option<f64>,
    /// State directory to keep. Default: one that is removed at the end.
    #[arg(long, value_name = "DIR")]
    state: Option<PathBuf>,
    /// Do not pace, and end when the day is over.
    #[arg(long)]
    once: bool,
    /// Print each published message as one line of JSON.
    #[arg(long)]
    json: bool,
    /// Address of the bench screen. Default: 127.0.0.1:8470, or a free one when that is taken.
    #[arg(long, value_name = "ADDR")]
    listen: Option<SocketAddr>,
    /// Address of the built-in broker. Default: 127.0.0.1:18883, or a free one when that is taken.
    #[arg(long, value_name = "ADDR")]
    mqtt: Option<SocketAddr>,
}

/// Runs `demo`.
pub fn run(args: DemoArgs, log: Option<LogForm>) -> u8 {
    start_log(log, "warn");
    match prepared(&args) {
        Ok(prepared) => at_work(&args, prepared).unwrap_or_else(|says| {
            eprintln!("{says}");
            FAILED
        }),
        Err(says) => {
            eprintln!("{says}");
            WRONG_INPUT
        }
    }
}

struct Prepared {
    scenario: Scenario,
    day: tarecup_simulators::day::Day,
}

/// Everything that can be wrong with the input is found before anything starts.
fn prepared(args: &DemoArgs) -> Result<Prepared, String> {
    if args.speed.is_some_and(|s| !(s.is_finite() && s > 0.0)) {
        return Err(String::from("--speed: a number above 0 is expected, such as 240"));
    }
    let (name, text) = match &args.scenario {
        Some(path) => (path.display().to_string(), text::read_file(path).map_err(|f| f.to_string())?),
        None => (String::from("day.toml"), String::from(OWN_DAY)),
    };
    let methods = methods::shipped().map_err(|f| f.to_string())?;
    let scenario = scenario::parse(&name, &text, Mode::Demo, &methods).map_err(|f| f.to_string())?;
    let day = day::plan(&scenario);
    day.check().map_err(|e| format!("{name}: {e}"))?;
    day::fits_display(&day).map_err(|says| format!("{name}: {says}"))?;
    Ok(Prepared { scenario, day })
}

/// A folder that is removed when the demo ends, unless a person named it.
struct Folder {
    path: PathBuf,
    kept: bool,
}

impl Folder {
    fn take(named: Option<&Path>) -> Result<Self, String> {
        let trouble =
            |path: &Path, e: &dyn std::fmt::Display| format!("{}: {e}; name another folder with --state DIR", path.display());
        let path = match named {
            Some(path) => path.to_path_buf(),
            None => own_folder().map_err(|e| trouble(&std::env::temp_dir(), &e))?,
        };
        let path = std::path::absolute(&path).unwrap_or(path);
        std::fs::create_dir_all(path.join("ports")).map_err(|e| trouble(&path, &e))?;
        Ok(Self { path, kept: named.is_some() })
    }
}

/// A new folder under a name that nobody could have prepared, its owner's alone.
fn own_folder() -> std::io::Result<PathBuf> {
    use std::os::unix::fs::DirBuilderExt;
    let mut random = [0u8; 8];
    getrandom::fill(&mut random).map_err(|e| std::io::Error::other(e.to_string()))?;
    let path = std::env::temp_dir().join(format!("tarecup-demo-{:016x}", u64::from_ne_bytes(random)));
    std::fs::DirBuilder::new().mode(0o700).create(&path)?;
    Ok(path)
}

impl Drop for Folder {
    fn drop(&mut self) {
        if !self.kept {
            let _ = std::fs::remove_dir_all(&self.path);
        }
    }
}

type Results = Arc<Mutex<Vec<Limits>>>;

fn at_work(args: &DemoArgs, prepared: Prepared) -> Result<u8, String> {
    let Prepared { scenario, day } = prepared;
    let folder = Folder::take(args.state.as_deref())?;
    let (stop, stopped) = signals::listen().map_err(|e| format!("the system gives no signals: {e}"))?;
    let mut instruments = Instruments::open(&folder.path.join("ports"), &day).map_err(|e| e.to_string())?;
    let clock = Arc::new(VirtualClock::new(day.start_utc_us));
    let results: Results = Arc::default();
    let ports = folder.path.join("ports");
    let visitor = if args.once { None } else { Some(Visitor::open(&ports, &day, clock.clone()).map_err(|e| e.to_string())?) };
    let mut config = day::config(&day, &instruments, args.mqtt, args.listen);
    config += &visitor.as_ref().map(|v| v.config(&ports)).unwrap_or_default();
    let pin = visitor.as_ref().and_then(|_| operators(&folder.path, &day));
    let plan = Plan {
        station: station::parse("(demo)", &config).map_err(|f| f.to_string())?,
        state_dir: folder.path.clone(),
        clock: clock.clone(),
        time_passes: false,
        any_broker_port: args.mqtt.is_none(),
        key: Some(Key::of_demonstrations()),
        any_screen_port: args.listen.is_none(),
        hand: visitor.clone().map(|v| v as Arc<dyn Hand>),
        tap: args.json.then(json_tap),
        told: Some(teller(args.json, Arc::clone(&results))),
        beside: Default::default(),
    };
    let service = Service::start(plan).map_err(|e| e.to_string())?;
    greet(args, &scenario, &service, pin.as_deref());
    let settings = Play { speed: if args.once { None } else { Some(args.speed.unwrap_or(SPEED)) }, ..Play::default() };
    let theirs = visitor.as_ref().map_or(0, |_| Visitor::PORTS);
    world::wait_for_ports(&service, instruments.links().count() + theirs)?;
    if let Some(visitor) = &visitor {
        visitor.begin(service.inbox());
    }
    let began = Instant::now();
    let mut world = world::DemoWorld::new(&service, &day, clock.clone(), stop.clone());
    let played = play(&day, &mut instruments, &settings, &mut world);
    let took = began.elapsed();
    let delivered = played.is_ok() && service.wait_delivered(DELIVERY);
    let code = match &played {
        Err(e) if !stop.asked() => {
            eprintln!("the day could not be played to its end: {e}");
            FAILED
        }
        Err(_) => 0,
        Ok(_) => ending(args, &scenario, &results, took, delivered, &service),
    };
    if args.once && played.is_ok() && !stop.asked() {
        // A subscriber that came late still finds the retained results.
        std::thread::sleep(LINGER);
    }
    if !args.once && played.is_ok() && !stop.asked() {
        clock.run();
        service.let_time_pass();
        if let Some(visitor) = &visitor {
            visitor.day_over();
        }
        if !args.json {
            let screen = service.screen_url().map(|url| format!("{url}/bench/")).unwrap_or_default();
            let at = visitor.as_ref().map_or("", |v| v.bench());
            say!("\nScreen and broker stay up; look around, or work yourself at {screen}{at}. Ctrl-C ends the demo.");
        }
        let _ = stopped.recv();
    }
    if let Some(visitor) = &visitor {
        visitor.close();
    }
    service.stop();
    Ok(code)
}

/// Each published message as one line.
fn json_tap() -> Tap {
    Arc::new(|topic, payload, retain, qos| {
        let payload = payload.map_or("null", |p| std::str::from_utf8(p).unwrap_or("null"));
        let topic = serde_json::Value::from(topic);
        let line = format!("{{\"topic\":{topic},\"payload\":{payload},\"retain\":{retain},\"qos\":{qos}}}\n");
        // A reader that went away ends nothing: the day is still recorded.
        let _ = std::io::stdout().lock().write_all(line.as_bytes());
    })
}

fn teller(json: bool, results: Results) -> Told {
    Arc::new(move |recorded| {
        if let Fact::LimitsComputed { limits, .. } = &recorded.fact {
            let mut results = results.lock().unwrap_or_else(PoisonError::into_inner);
            match results.iter_mut().find(|l| l.specimen == limits.specimen) {
                Some(old) => *old = (**limits).clone(),
                None => results.push((**limits).clone()),
            }
        }
        if !json && let Some(line) = tell::line(recorded) {
            let _ = writeln!(std::io::stdout().lock(), "{line}");
        }
    })
}

/// Gives whoever works at the benches one PIN, drawn anew, unless somebody has one here already.
fn operators(state_dir: &Path, day: &tarecup_simulators::day::Day) -> Option<String> {
    use crate::screen::operators;
    if !operators::load(state_dir).ok()?.operators.is_empty() {
        return None;
    }
    let mut random = [0u8; 4];
    getrandom::fill(&mut random).ok()?;
    let pin = format!("{:04}", 1_000 + u32::from_le_bytes(random) % 9_000);
    let mut names: Vec<&str> = day.benches.iter().map(|b| b.operator.as_str()).chain(["VR"]).collect();
    names.sort_unstable();
    names.dedup();
    for name in names {
        let name = tarecup_core::names::Operator::new(name).ok()?;
        // The few PINs that are refused for being guessed first are drawn once in a thousand starts.
        operators::add(state_dir, &name, &pin).ok()?;
    }
    Some(pin)
}

fn greet(args: &DemoArgs, scenario: &Scenario, service: &Service, pin: Option<&str>) {
    if args.json {
        return;
    }
    say!("{}", scenario.title);
    say!(
        "{} specimens; simulated balances, cup counters and scanners under {}",
        scenario.specimens.len(),
        service.state_dir().join("ports").display()
    );
    if let Some(url) = service.screen_url() {
        say!("bench screen: {url}");
    }
    if let Some(pin) = pin {
        say!("corrections and reviews on the screen ask for a PIN: that of everybody here is {pin}; a visitor is VR");
    }
    if let Some(at) = service.broker_address() {
        say!("MQTT on {at}: for example  mosquitto_sub -h {} -p {} -v -t 'tarecup/v1/#'", at.ip(), at.port());
    }
    say!("");
}

fn ending(args: &DemoArgs, scenario: &Scenario, results: &Results, took: Duration, delivered: bool, service: &Service) -> u8 {
    let mut results = results.lock().unwrap_or_else(PoisonError::into_inner).clone();
    let place = |l: &Limits| scenario.specimens.iter().position(|s| s.id == l.specimen);
    results.sort_by_key(place);
    let complete = |s: &scenario::ScenarioSpecimen| results.iter().any(|l| l.specimen == s.id && l.state != State::Provisional);
    let all = scenario.specimens.iter().all(complete);
    if !args.json {
        say!("{}", (tell::table(&results)).trim_end());
        say!(
            "\nplayed in {:.1} s; {}",
            took.as_secs_f64(),
            if delivered { "everything published is acknowledged" } else { "NOT everything published was acknowledged" }
        );
        if let Some(at) = service.broker_address() {
            say!("retained results: mosquitto_sub -h {} -p {} -v -t 'tarecup/v1/+/specimen/+/limits'", at.ip(), at.port());
        }
        say!(
            "Index values for a demonstration. Containers from a 110 °C oven burn: tongs, lid on, cool first. Dust from dry soil can carry silica or asbestos. Keep fingers and sleeves from a motorised cam."
        );
    }
    if all { 0 } else { NOT_COMPLETE }
}
