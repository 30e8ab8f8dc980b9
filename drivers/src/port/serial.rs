//! A serial port as a task: open, read, lose, reopen.
//!
//! An idle port costs no wake-ups, a lost one one attempt a second. A port
//! that is full, gone, blocked in its driver or flooded with noise delays no
//! other: opening and closing happen on threads of their own, writes never
//! wait, and reading gives way to others.

use super::PortSettings;
use super::ask::{Asker, Asking};
use super::hold::Hold;
use super::open::{self, OpenFault};
use crate::heard::{Batch, Clock, Deliver, InstrumentId, PortState};
use crate::intake::Intake;
use crate::profile::Profile;
use std::io;
use std::sync::Arc;
use std::time::Duration;
use tokio::io::AsyncReadExt;
use tokio::runtime::Handle;
use tokio::sync::watch;
use tokio::task::{JoinHandle, spawn_blocking};
use tokio::time::{Instant, sleep, sleep_until, timeout};
use tokio_serial::{ClearBuffer, SerialPort, SerialStream};

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
/// Time between two searches for the program that holds a port.
const HOLDER_EVERY: Duration = Duration::from_secs(10);

/// A running port. Dropping it stops the port.
#[derive(Debug)]
pub struct PortTask {
    stop: watch::Sender<bool>,
    task: JoinHandle<()>,
}

impl PortTask {
    /// A task that ends when `stop` says so.
    pub(super) fn new(stop: watch::Sender<bool>, task: JoinHandle<()>) -> Self {
        Self { stop, task }
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
    let (stop, stopped) = watch::channel(false);
    let port = Port {
        id,
        settings: Arc::new(settings),
        intake: Intake::new(id, &profile),
        hold: Hold::new(id),
        said: None,
        searched: None,
        retry: RETRY[0],
        retry_at: Instant::now(),
        profile,
        clock,
        out,
        stopped,
    };
    PortTask { stop, task: rt.spawn(port.run()) }
}

struct Port {
    id: InstrumentId,
    settings: Arc<PortSettings>,
    profile: Arc<Profile>,
    intake: Intake,
    hold: Hold,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
    stopped: watch::Receiver<bool>,
    said: Option<PortState>,
    /// When the holder of a busy port was last searched for, and what to say.
    searched: Option<(Instant, String)>,
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
                Ok(port) => {
                    self.say(PortState::Opened);
                    match self.listen(port).await {
                        Ended::Stopped => break,
                        Ended::Lost { lived: true } => pause = BACK_OFF[0],
                        // A port that opens and is gone at once is not asked more and more often.
                        Ended::Lost { lived: false } => {}
                    }
                    self.say(PortState::Lost);
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

    fn say(&mut self, state: PortState) {
        if self.said.as_ref() != Some(&state) {
            tracing::debug!(port = %self.settings.path, ?state, "port");
            self.said = Some(state.clone());
            self.out.state(self.id, state, self.clock.now());
        }
    }

    async fn say_fault(&mut self, fault: OpenFault) {
        let says = match fault {
            // A port that was lost stays lost until it is back.
            OpenFault::Missing if self.said == Some(PortState::Lost) => return,
            OpenFault::Missing => return self.say(PortState::Waiting),
            OpenFault::Refused(says) => says,
            OpenFault::Busy => self.search_holder().await,
        };
        self.say(PortState::Refused(says));
    }

    /// The search reads all of /proc: not at every attempt.
    async fn search_holder(&mut self) -> String {
        if let Some((at, says)) = &self.searched
            && at.elapsed() < HOLDER_EVERY
        {
            return says.clone();
        }
        let settings = Arc::clone(&self.settings);
        let says = spawn_blocking(move || open::busy(&settings.path)).await.unwrap_or_default();
        self.searched = Some((Instant::now(), says.clone()));
        says
    }

    /// Tries to open; `None` when stopped meanwhile.
    async fn open(&mut self) -> Option<Result<SerialStream, OpenFault>> {
        let settings = Arc::clone(&self.settings);
        let opening = spawn_blocking(move || open::open(&settings));
        tokio::select! {
            opened = opening => {
                let broke = |e| Err(OpenFault::Refused(format!("{}: opening it failed ({e}); unplug it and plug it in again", self.settings.path)));
                Some(opened.unwrap_or_else(broke))
            }
            () = stopped(&mut self.stopped) => None,
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
    async fn listen(&mut self, mut port: SerialStream) -> Ended {
        let opened = Instant::now();
        self.intake.opened(false);
        let mut asker = self.profile.ask().map(|ask| Asker::new(ask, opened + QUIET + QUIET / 4));
        let mut heard = false;
        let mut buffer = vec![0u8; READ_BYTES];
        let stopped_by_person = loop {
            tokio::select! {
                () = stopped(&mut self.stopped) => break true,
                read = port.read(&mut buffer) => match read {
                    // The end of a terminal is a hang-up: the adapter was pulled.
                    Ok(0) => break false,
                    Ok(n) => {
                        if !heard {
                            heard = true;
                            self.intake.opened(opened.elapsed() >= QUIET);
                        }
                        self.take(&buffer[..n]);
                    }
                    Err(e) if e.kind() == io::ErrorKind::Interrupted => {}
                    Err(_) => break false,
                },
                () = sleep_until(self.retry_at), if !self.hold.is_empty() => self.try_again(),
                () = due(asker.as_ref()), if asker.is_some() => {
                    if let Some(asker) = &mut asker && asker.act(&mut port, Instant::now()) == Asking::Gone {
                        break false;
                    }
                }
            }
        };
        close(port).await;
        let at = self.clock.now();
        if let Some(half) = self.intake.lost(at) {
            self.deliver(half);
        }
        if stopped_by_person { Ended::Stopped } else { Ended::Lost { lived: heard || opened.elapsed() >= BACK_OFF[1] } }
    }

    fn take(&mut self, chunk: &[u8]) {
        let at = self.clock.now();
        if let Some(batch) = self.intake.read(chunk, at, Some(std::time::Instant::now())) {
            self.deliver(batch);
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

/// Closes the port on a thread of its own: a driver may take seconds to give
/// up bytes that nobody takes, so these are thrown away first.
async fn close(port: SerialStream) {
    let closing = spawn_blocking(move || {
        let _ = port.clear(ClearBuffer::Output);
        drop(port);
    });
    let _ = timeout(FAREWELL, closing).await;
}
