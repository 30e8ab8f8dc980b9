//! A port as a task: open, read, lose, reopen. The same for a serial line of
//! this machine and for one behind a device server on the network.
//!
//! An idle port costs no wake-ups, a lost one one attempt a second. A port
//! that is full, gone, blocked in its driver or flooded with noise delays no
//! other: opening and closing happen on threads of their own, writes never
//! wait, and reading gives way to others.

use super::PortSettings;
use super::ask::{Asker, Asking};
use super::doubt::{self, Doubt};
use super::hold::Hold;
use super::link::Link;
use super::open::{self, OpenFault};
use super::place::{Machine, Place};
use super::tcp::Dialer;
use super::teller::Teller;
use crate::heard::{Batch, Clock, Deliver, InstrumentId, PortState};
use crate::intake::Intake;
use crate::profile::{Profile, Talks};
use std::io;
use std::path::Path;
use std::sync::Arc;
use std::time::Duration;
use tarecup_core::stamp::Stamp;
use tokio::runtime::Handle;
use tokio::sync::watch;
use tokio::task::{JoinHandle, spawn_blocking};
use tokio::time::{Instant, sleep, sleep_until};

/// Silence after opening that makes the first byte a true beginning. Even at
/// 300 baud a character takes 33 ms, and adapters hold bytes back for 16 ms.
pub const QUIET: Duration = Duration::from_millis(200);
/// First and longest pause before another attempt to open.
const BACK_OFF: [Duration; 2] = [Duration::from_millis(50), Duration::from_secs(1)];
/// Pause before a full receiver is tried again, first and longest.
const RETRY: [Duration; 2] = [Duration::from_millis(4), Duration::from_millis(32)];
/// How long the end of a task waits for a full receiver or a slow close.
const FAREWELL: Duration = Duration::from_millis(500);
/// A terminal never gives more than 4095 bytes at once.
const READ_BYTES: usize = 4096;
/// Bytes without a line end are given up after this time, or after that of the longest line if it is more.
pub const UNENDED: Duration = Duration::from_secs(4);
/// Requests over the network that may go unanswered at the usual pace; a peer
/// that stands still would answer all of them at once later.
const UNANSWERED: u32 = 3;
/// The pace after that.
const SELDOM: Duration = Duration::from_secs(5);

/// A running port. Dropping it stops the port.
#[derive(Debug)]
pub struct PortTask {
    stop: watch::Sender<bool>,
    confirm: watch::Sender<u64>,
    task: JoinHandle<()>,
}

/// Hears what ports say, as it was read and before anything is made of it. Never blocks.
pub trait Overhear: Send + Sync {
    /// Bytes of one read. `quiet` comes with the first after an opening:
    /// whether the port had been quiet for so long that they begin a line.
    fn said(&self, instrument: InstrumentId, bytes: &[u8], quiet: Option<bool>, at: Stamp);
}

/// Remembers what an instrument's adapter was known by when it was accepted.
pub type Learned = Arc<dyn Fn(InstrumentId, &str) + Send + Sync>;

/// What a port may be given beside the usual.
#[derive(Clone, Default)]
pub struct Extras {
    /// Hears what is read.
    pub overhear: Option<Arc<dyn Overhear>>,
    /// Where devices and their descriptions lie.
    pub machine: Machine,
    /// What the adapter was known by when it was last accepted: [`super::place::Place::known_by`].
    pub known_by: Option<String>,
    /// Is told when that changes.
    pub learned: Option<Learned>,
    /// Twins are taken for one another without a word: for a test's control only.
    pub unguarded: bool,
}

impl PortTask {
    /// A task that ends when `stop` says so.
    pub(super) fn new(stop: watch::Sender<bool>, task: JoinHandle<()>) -> Self {
        Self { stop, task, confirm: watch::channel(0).0 }
    }
    /// A person says that this is the instrument meant, and touches it next.
    pub fn confirm(&self) {
        self.confirm.send_modify(|n| *n += 1);
    }
    /// What [`PortTask::confirm`] does, for whoever does not own the task.
    pub fn confirmer(&self) -> impl Fn() + Send + Sync + 'static {
        let confirm = self.confirm.clone();
        move || confirm.send_modify(|n| *n += 1)
    }
    /// Asks the port to close. What was read is still delivered.
    pub fn stop(&self) {
        self.stop.send_replace(true);
    }
    /// Stops the port and waits until it is closed.
    pub async fn join(self) {
        self.stop();
        // A panic is already reported by the runtime's hook.
        let _ = self.task.await;
    }
    /// Whether the task has ended.
    pub fn is_finished(&self) -> bool {
        self.task.is_finished()
    }
}

/// Starts the port of an instrument on the runtime `rt` (with I/O and time).
///
/// Batches, states and overruns go to `out`; stamps come from `clock`. The
/// only bytes ever written are the profile's request.
pub fn spawn(
    rt: &Handle,
    id: InstrumentId,
    settings: PortSettings,
    profile: Arc<Profile>,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
) -> PortTask {
    spawn_with(rt, id, settings, profile, clock, out, Extras::default())
}

/// [`spawn`], with extras.
pub fn spawn_with(
    rt: &Handle,
    id: InstrumentId,
    settings: PortSettings,
    profile: Arc<Profile>,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
    extras: Extras,
) -> PortTask {
    let (stop, stopped) = watch::channel(false);
    let (confirm, confirmed) = watch::channel(0);
    let teller = Teller::new(id, &settings.path, Arc::clone(&clock), Arc::clone(&out));
    let port = Port {
        id,
        dialer: Dialer::of(&settings.path),
        unended: unended(&settings, &profile),
        settings: Arc::new(settings),
        intake: Intake::new(id, &profile),
        hold: Hold::new(id),
        teller,
        retry: RETRY[0],
        retry_at: Instant::now(),
        profile,
        clock,
        out,
        stopped,
        confirmed,
        doubt: None,
        begun: None,
        extras,
    };
    PortTask { stop, confirm, task: rt.spawn(port.run()) }
}

/// How long a line without its end is waited for: the longest of the dialect, half as long again, in the time of its speed.
pub fn unended(settings: &PortSettings, profile: &Profile) -> Duration {
    let bits = 15 * profile.framing().longest() as u64;
    UNENDED.max(Duration::from_millis(bits * 1_000 / u64::from(settings.baud.max(1))))
}

struct Port {
    id: InstrumentId,
    /// Of a port on the network.
    dialer: Option<Dialer>,
    settings: Arc<PortSettings>,
    profile: Arc<Profile>,
    intake: Intake,
    hold: Hold,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
    stopped: watch::Receiver<bool>,
    confirmed: watch::Receiver<u64>,
    /// While it may be another instrument than the one meant.
    doubt: Option<Doubt>,
    /// When the frame began whose end has not come, and for how long that is borne.
    begun: Option<Instant>,
    unended: Duration,
    extras: Extras,
    teller: Teller,
    /// Pause before what is held is offered again, and when that is.
    retry: Duration,
    retry_at: Instant,
}

/// Why listening ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Ended {
    Stopped,
    Lost {
        /// The port had proved to be alive.
        lived: bool,
    },
}

impl Port {
    async fn run(mut self) {
        let mut pause = BACK_OFF[0];
        loop {
            let Some(opened) = self.open().await else { break };
            match opened {
                Ok((port, place)) => {
                    self.recognise(place);
                    match self.listen(port).await {
                        Ended::Stopped => break,
                        Ended::Lost { lived: true } => pause = BACK_OFF[0],
                        // A port that opens and is gone at once is not asked more and more often.
                        Ended::Lost { lived: false } => {}
                    }
                    self.teller.say(PortState::Lost);
                }
                Err(fault) => self.say_fault(fault).await,
            }
            if self.wait(pause).await {
                break;
            }
            pause = (pause * 2).min(BACK_OFF[1]);
        }
        self.farewell().await;
    }

    async fn say_fault(&mut self, fault: OpenFault) {
        if self.teller.fault(fault) {
            let settings = Arc::clone(&self.settings);
            let says = spawn_blocking(move || open::busy(&settings.path)).await.unwrap_or_default();
            self.teller.busy(says);
        }
    }

    /// Tries to open; `None` when stopped meanwhile.
    async fn open(&mut self) -> Option<Result<(Link, Place), OpenFault>> {
        if let Some(dialer) = &mut self.dialer {
            return tokio::select! {
                dialled = dialer.dial() => Some(dialled.map(|s| (Link::Network(s), Place::default()))),
                () = stopped(&mut self.stopped) => None,
            };
        }
        let (settings, machine) = (Arc::clone(&self.settings), self.extras.machine.clone());
        let opening = spawn_blocking(move || {
            let port = open::open(&settings)?;
            Ok((Link::Serial(port), machine.place_of(Path::new(&settings.path))))
        });
        tokio::select! {
            opened = opening => {
                let broke = |e| Err(OpenFault::Refused(format!("{}: opening it failed ({e}); unplug it and plug it in again", self.settings.path)));
                Some(opened.unwrap_or_else(broke))
            }
            () = stopped(&mut self.stopped) => None,
        }
    }

    /// Whether the adapter that was opened is the one known from before.
    fn recognise(&mut self, place: Place) {
        self.doubt = None;
        self.confirmed.mark_unchanged();
        let before = self.extras.known_by.as_deref().filter(|_| !self.extras.unguarded);
        match (place.other_than(before), before) {
            (Some(now), Some(before)) => {
                let words = doubt::words(before, &now);
                self.doubt = Some(Doubt::new(&now, self.profile.talks() != Talks::PrintOnKey && is_balance(&self.profile)));
                self.teller.say(PortState::Unconfirmed(words));
            }
            _ => {
                self.learn(place.known_by());
                self.teller.say(PortState::Opened);
            }
        }
    }

    fn learn(&mut self, known_by: Option<String>) {
        if known_by.is_some() && known_by != self.extras.known_by {
            self.extras.known_by = known_by;
            if let (Some(learned), Some(known_by)) = (&self.extras.learned, &self.extras.known_by) {
                learned(self.id, known_by);
            }
        }
    }

    /// Waits before the next attempt; true when stopped.
    async fn wait(&mut self, pause: Duration) -> bool {
        let until = Instant::now() + pause;
        loop {
            tokio::select! {
                () = stopped(&mut self.stopped) => return true,
                () = sleep_until(until) => return false,
                () = sleep_until(self.retry_at), if !self.hold.is_empty() => self.try_again(),
            }
        }
    }

    fn try_again(&mut self) {
        self.hold.retry(&*self.out, self.clock.now());
        self.retry = (self.retry * 2).min(RETRY[1]);
        self.retry_at = Instant::now() + self.retry;
    }

    fn deliver(&mut self, batch: Batch) {
        let waited = !self.hold.is_empty();
        self.hold.deliver(batch, &*self.out);
        if !waited && !self.hold.is_empty() {
            self.retry = RETRY[0];
            self.retry_at = Instant::now() + self.retry;
        }
    }

    /// Reads until the port is lost or the task is stopped, then closes it.
    async fn listen(&mut self, mut port: Link) -> Ended {
        let opened = Instant::now();
        self.intake.opened(false);
        self.begun = None;
        let mut asker = self.profile.ask().map(|ask| Asker::new(ask, opened + QUIET + QUIET / 4));
        let (mut heard, mut unanswered) = (false, 0u32);
        let mut buffer = vec![0u8; READ_BYTES];
        let stopped_by_person = loop {
            // A port in doubt is asked nothing before a person has said that it is the one.
            let may_ask = self.doubt.as_ref().is_none_or(|d| d.is_asked(Instant::now()));
            let stalled = self.begun.map(|begun| begun + self.unended);
            tokio::select! {
                () = stopped(&mut self.stopped) => break true,
                read = port.read(&mut buffer) => match read {
                    // The end of a terminal is a hang-up: the adapter was pulled.
                    Ok(0) => break false,
                    Ok(n) => {
                        let quiet = (!heard).then(|| opened.elapsed() >= QUIET);
                        (heard, unanswered) = (true, 0);
                        self.take(&buffer[..n], quiet);
                    }
                    Err(e) if e.kind() == io::ErrorKind::Interrupted => {}
                    Err(_) => break false,
                },
                () = sleep_until(self.retry_at), if !self.hold.is_empty() => self.try_again(),
                () = sleep_until(stalled.unwrap_or(opened)), if stalled.is_some() => self.give_up_line(),
                _ = self.confirmed.changed(), if self.doubt.is_some() => self.asked(),
                () = due(asker.as_ref()), if may_ask && asker.is_some() => {
                    let Some(asker) = &mut asker else { continue };
                    match asker.act(&mut port, Instant::now()) {
                        Asking::Gone => break false,
                        Asking::Sent => unanswered = unanswered.saturating_add(1),
                        Asking::Blocked | Asking::GivenUp => {}
                    }
                    if self.dialer.is_some() && unanswered > UNANSWERED {
                        asker.not_before(Instant::now() + SELDOM);
                    }
                }
            }
        };
        port.close().await;
        let at = self.clock.now();
        if let Some(half) = self.intake.lost(at) {
            self.pass_on(half);
        }
        if stopped_by_person { Ended::Stopped } else { Ended::Lost { lived: heard || opened.elapsed() >= BACK_OFF[1] } }
    }

    fn take(&mut self, chunk: &[u8], quiet: Option<bool>) {
        let at = self.clock.now();
        if let Some(quiet) = quiet {
            self.intake.opened(quiet);
        }
        if let Some(tap) = self.extras.overhear.as_ref().filter(|_| self.doubt.is_none()) {
            tap.said(self.id, chunk, quiet, at);
        }
        let batch = self.intake.read(chunk, at, Some(std::time::Instant::now()));
        // A frame that began in an earlier read began then, unless one has ended since.
        self.begun = match (self.intake.in_frame(), batch.is_some()) {
            (false, _) => None,
            (true, true) => Some(Instant::now()),
            (true, false) => self.begun.or_else(|| Some(Instant::now())),
        };
        if let Some(batch) = batch {
            self.pass_on(batch);
        }
    }

    /// Passes on what was heard; of a port in doubt nothing.
    fn pass_on(&mut self, batch: Batch) {
        let Some(doubt) = &mut self.doubt else { return self.deliver(batch) };
        if doubt.settled_by(&batch, Instant::now()) {
            let known_by = std::mem::take(&mut doubt.known_by);
            self.doubt = None;
            self.learn(Some(known_by));
            self.teller.say(PortState::Opened);
        }
    }

    fn give_up_line(&mut self) {
        self.begun = None;
        if let Some(half) = self.intake.stalled(self.clock.now()) {
            self.pass_on(half);
        }
    }

    fn asked(&mut self) {
        self.confirmed.mark_unchanged();
        if let Some(doubt) = &mut self.doubt {
            doubt.asked(Instant::now());
        }
    }

    async fn farewell(&mut self) {
        let until = Instant::now() + FAREWELL;
        while !self.hold.is_empty() && Instant::now() < until {
            self.try_again();
            sleep(RETRY[0]).await;
        }
        self.hold.give_up(&*self.out, self.clock.now());
    }
}

/// Returns when the task is to stop, also because nobody can stop it any more.
pub(super) async fn stopped(stop: &mut watch::Receiver<bool>) {
    let _ = stop.wait_for(|stop| *stop).await;
}

async fn due(asker: Option<&Asker>) {
    match asker {
        Some(asker) => sleep_until(asker.next()).await,
        None => std::future::pending().await,
    }
}

fn is_balance(profile: &Profile) -> bool {
    profile.kind() == crate::profile::Kind::Balance
}
