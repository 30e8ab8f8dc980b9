//! Looks after what lies beside the ports: which ports are there that nobody
//! uses, and what each instrument's adapter was known by when it was accepted.

use crate::desk::OFFERS;
use crate::desk::inbox::Inbox;
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::mpsc::{Receiver, RecvTimeoutError, Sender, channel};
use std::time::{Duration, Instant};
use tarecup_drivers::heard::InstrumentId;
use tarecup_drivers::port::list::{self, Found};
use tarecup_drivers::port::place::Machine;
use tarecup_drivers::port::serial::Learned;

/// How often it is looked whether ports have come or gone.
const LOOK: Duration = Duration::from_secs(1);
/// Names of a new port are made one after the other, and are all there after this time.
const NAMED: Duration = Duration::from_millis(700);
/// A list in which nothing changed is made anew after this time: a program may have taken or left a port.
const AGAIN: Duration = Duration::from_secs(30);
/// More ports than that are not told one by one.
const MOST: usize = 64;

/// The file of what adapters are known by, in the state directory.
pub(super) struct Adapters {
    path: PathBuf,
    names: Vec<String>,
    known: BTreeMap<String, String>,
}

impl Adapters {
    /// What was known when the service last ran. Without the file, each adapter is taken as it is found.
    pub(super) fn load(state_dir: &Path, names: Vec<String>) -> Self {
        let path = state_dir.join("adapters.json");
        let known = match std::fs::read(&path) {
            Ok(text) => serde_json::from_slice(&text).unwrap_or_else(|e| {
                tracing::warn!(path = %path.display(), error = %e, "what adapters were known by is forgotten; each is taken as it is found");
                BTreeMap::new()
            }),
            Err(_) => BTreeMap::new(),
        };
        Self { path, names, known }
    }

    pub(super) fn of(&self, name: &str) -> Option<String> {
        self.known.get(name).cloned()
    }

    fn learn(&mut self, id: InstrumentId, known_by: String) {
        if let Some(name) = self.names.get(usize::from(id)) {
            self.known.insert(name.clone(), known_by);
            if let Err(e) = self.store() {
                tracing::warn!(path = %self.path.display(), error = %e, "what an adapter is known by could not be kept");
            }
        }
    }

    fn store(&self) -> std::io::Result<()> {
        let fresh = self.path.with_extension("new");
        std::fs::write(&fresh, serde_json::to_vec_pretty(&self.known)?)?;
        std::fs::rename(fresh, &self.path)
    }
}

/// The thread that looks after them; it ends when nobody can tell it anything any more.
pub(super) fn start(machine: Machine, ports: Vec<String>, adapters: Adapters, inbox: &Arc<Inbox>) -> std::io::Result<Learned> {
    let (tell, told) = channel();
    let inbox = Arc::clone(inbox);
    let watch = Watch { machine, ports, adapters, inbox };
    std::thread::Builder::new().name("offers".into()).spawn(move || watch.work(&told))?;
    Ok(learned(tell))
}

/// How ports tell of an adapter, from whichever thread they run on.
fn learned(tell: Sender<(InstrumentId, String)>) -> Learned {
    Arc::new(move |id, known_by| drop(tell.send((id, known_by.to_owned()))))
}

struct Watch {
    machine: Machine,
    ports: Vec<String>,
    adapters: Adapters,
    inbox: Arc<Inbox>,
}

impl Watch {
    fn work(mut self, told: &Receiver<(InstrumentId, String)>) {
        let mut offered = None;
        let (mut mark, mut at) = (Default::default(), None::<Instant>);
        loop {
            let now = list::mark(&self.machine);
            let old = at.is_none_or(|at| at.elapsed() >= AGAIN);
            if now != mark || old {
                if !old {
                    std::thread::sleep(NAMED);
                }
                (mark, at) = (list::mark(&self.machine), Some(Instant::now()));
                self.offer(&mut offered);
            }
            match told.recv_timeout(LOOK) {
                Ok((id, known_by)) => self.adapters.learn(id, known_by),
                Err(RecvTimeoutError::Timeout) => (),
                Err(RecvTimeoutError::Disconnected) => return,
            }
        }
    }

    fn offer(&self, offered: &mut Option<Value>) {
        let used: Vec<PathBuf> = self.ports.iter().filter_map(|p| std::fs::canonicalize(p).ok()).collect();
        let free = list::list_on(&self.machine).into_iter().filter(|f| !used.iter().any(|u| *u == Path::new(&f.device)));
        let ports: Vec<Value> = free.take(MOST).map(|f| told_of(&f)).collect();
        let ports = Value::from(ports);
        if offered.as_ref() != Some(&ports) {
            for port in ports.as_array().into_iter().flatten().filter(|p| !was_there(offered.as_ref(), p)) {
                let at = port["port"].as_str().unwrap_or_default();
                tracing::info!(port = %at, "a port that no instrument uses; name it in the settings to use it");
            }
            self.inbox.note(OFFERS, ports.clone());
            *offered = Some(ports);
        }
    }
}

fn was_there(offered: Option<&Value>, port: &Value) -> bool {
    offered.and_then(Value::as_array).is_some_and(|all| all.iter().any(|o| o["port"] == port["port"]))
}

/// A port, as it is offered and listed.
pub fn told_of(found: &Found) -> Value {
    json!({
        "port": found.stable, "device": found.device, "about": found.about, "socket": found.socket, "twin": found.twin,
        "held_by": found.holder(),
    })
}
