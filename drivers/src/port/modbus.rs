//! An instrument that is read over Modbus, as a task: open, poll, lose, reopen.
//!
//! Only the requests of the profile are written, which read (functions 3 and
//! 4). An answer goes out as one frame with the bytes as they came; so does
//! whatever else comes over the line. No answer in time is silence, which the
//! desk tells by itself.

use super::PortSettings;
use super::hold::Hold;
use super::open::{self, OpenFault};
use super::serial::{PortTask, stopped};
use super::tape::{Line, Tape};
use super::teller::Teller;
use crate::heard::{Batch, Clock, Deliver, Frame, InstrumentId, PortState};
use crate::modbus::{Block, Framing, Plan, Table};
use crate::profile::Profile;
use std::io;
use std::sync::Arc;
use std::time::Duration;
use tokio::net::TcpStream;
use tokio::runtime::Handle;
use tokio::sync::watch;
use tokio::task::spawn_blocking;
use tokio::time::{Instant, sleep, sleep_until, timeout};
use tokio_modbus::client::{Client, Context};
use tokio_modbus::{Request, Slave};

/// First and longest pause before another attempt to open.
const BACK_OFF: [Duration; 2] = [Duration::from_millis(50), Duration::from_secs(1)];
/// How long a gateway may take to accept a connection.
const CONNECT: Duration = Duration::from_secs(1);
/// A connection without an answer for so long is made anew: the other end may have gone without a word.
const DEAF: Duration = Duration::from_secs(10);
/// Pause before a full receiver is tried again.
const RETRY: Duration = Duration::from_millis(16);
/// How long the end of a task waits for a full receiver or a slow close.
const FAREWELL: Duration = Duration::from_millis(500);
/// Bytes that nobody asked for are one frame when so long nothing follows, or when they are so many.
const STRAY: (Duration, usize) = (Duration::from_millis(50), 256);

/// Longest frame: more than the answers of any profile.
const FRAME_MAX: usize = 1_024;

/// Starts the port of an instrument whose profile has a `[modbus]` table on the
/// runtime `rt` (with I/O and time). The path is that of a serial port, or
/// `tcp://HOST:PORT` of a gateway or of the instrument itself.
pub fn spawn(
    rt: &Handle,
    id: InstrumentId,
    settings: PortSettings,
    profile: Arc<Profile>,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
) -> PortTask {
    let (stop, stopped) = watch::channel(false);
    let teller = Teller::new(id, &settings.path, Arc::clone(&clock), Arc::clone(&out));
    let port = Port { id, settings: Arc::new(settings), profile, hold: Hold::new(id), clock, out, stopped, teller };
    PortTask::new(stop, rt.spawn(port.run()))
}

struct Port {
    id: InstrumentId,
    settings: Arc<PortSettings>,
    profile: Arc<Profile>,
    hold: Hold,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
    stopped: watch::Receiver<bool>,
    teller: Teller,
}

/// Why listening ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Ended {
    Stopped,
    Lost,
    /// Nothing was said for so long that the connection is tried anew.
    Deaf,
}

/// What became of a poll.
#[derive(Debug)]
enum Polled {
    /// The answers, and what else came.
    Answered(Heard),
    /// No answer that could be used; what came instead, perhaps nothing.
    Unanswered(Vec<u8>),
    /// The line is gone.
    Gone,
}

/// The answers of a poll between what does not belong to them.
#[derive(Debug, Default)]
struct Heard {
    before: Vec<u8>,
    answers: Vec<u8>,
    after: Vec<u8>,
}

impl Port {
    async fn run(mut self) {
        let mut pause = BACK_OFF[0];
        if let Some(plan) = self.profile.modbus().cloned() {
            loop {
                let opened = tokio::select! {
                    opened = open(&self.settings) => opened,
                    () = stopped(&mut self.stopped) => break,
                };
                match opened {
                    Ok(line) => {
                        self.teller.say(PortState::Opened);
                        let began = Instant::now();
                        match self.listen(line, &plan).await {
                            Ended::Stopped => break,
                            Ended::Lost => self.teller.say(PortState::Lost),
                            Ended::Deaf => {}
                        }
                        if began.elapsed() >= BACK_OFF[1] {
                            pause = BACK_OFF[0];
                        }
                    }
                    Err(fault) => self.say_fault(fault).await,
                }
                if self.wait(pause).await {
                    break;
                }
                pause = (pause * 2).min(BACK_OFF[1]);
            }
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

    /// Waits before the next attempt; true when stopped.
    async fn wait(&mut self, pause: Duration) -> bool {
        let until = Instant::now() + pause;
        loop {
            tokio::select! {
                () = stopped(&mut self.stopped) => return true,
                () = sleep_until(until) => return false,
                () = sleep(RETRY), if !self.hold.is_empty() => self.hold.retry(&*self.out, self.clock.now()),
            }
        }
    }

    /// One frame, decoded as a stored one would be. Only noise is longer than a frame may be.
    fn deliver(&mut self, bytes: Vec<u8>) {
        for bytes in bytes.chunks(FRAME_MAX) {
            let end = u32::try_from(bytes.len()).unwrap_or(u32::MAX);
            let frames = vec![Frame { end, at: self.clock.now(), what: self.profile.decode(bytes) }];
            let read_at = Some(std::time::Instant::now());
            self.hold.deliver(Batch { instrument: self.id, bytes: bytes.to_vec(), frames, read_at }, &*self.out);
        }
    }

    /// Polls until the line is lost or the task is stopped, then closes it.
    async fn listen(&mut self, line: Box<dyn Line>, plan: &Plan) -> Ended {
        let tape = Tape::new(line);
        let mut asker = Asker::new(&tape, plan, &self.settings);
        let (mut next, mut answered) = (Instant::now() + Duration::from_millis(20), Instant::now());
        let (mut stray, mut stray_at): (Vec<u8>, _) = (Vec::new(), Instant::now());
        let mut buffer = [0u8; STRAY.1];
        let ended = loop {
            tokio::select! {
                () = stopped(&mut self.stopped) => break Ended::Stopped,
                read = tape.stray(&mut buffer) => match read {
                    Ok(n) if n > 0 => {
                        stray.extend_from_slice(&buffer[..n]);
                        stray_at = Instant::now();
                        // Whoever still speaks is not asked: the answer could not be told from it.
                        next = next.max(stray_at + STRAY.0);
                        if stray.len() >= STRAY.1 {
                            self.deliver(std::mem::take(&mut stray));
                        }
                    }
                    Err(e) if e.kind() == io::ErrorKind::Interrupted => {}
                    _ => break Ended::Lost,
                },
                () = sleep_until(stray_at + STRAY.0), if !stray.is_empty() => self.deliver(std::mem::take(&mut stray)),
                () = sleep(RETRY), if !self.hold.is_empty() => self.hold.retry(&*self.out, self.clock.now()),
                () = sleep_until(next) => {
                    let polled = tokio::select! {
                        polled = asker.poll() => polled,
                        () = stopped(&mut self.stopped) => break Ended::Stopped,
                    };
                    let now = Instant::now();
                    match polled {
                        Polled::Answered(heard) => {
                            for bytes in [heard.before, heard.answers, heard.after] {
                                self.deliver(bytes);
                            }
                            answered = now;
                            next = if next + plan.every() > now { next + plan.every() } else { now + plan.every() };
                        }
                        Polled::Unanswered(bytes) => {
                            self.deliver(bytes);
                            // An answer that comes late must not be taken for that of the next request.
                            next = now + plan.every().max(plan.timeout());
                            if is_tcp(&self.settings) && answered.elapsed() >= DEAF {
                                break Ended::Deaf;
                            }
                        }
                        Polled::Gone => break Ended::Lost,
                    }
                }
            }
        };
        self.deliver(stray);
        drop(asker);
        // A driver may take its time to close.
        let _ = timeout(FAREWELL, spawn_blocking(move || drop(tape))).await;
        ended
    }

    async fn farewell(&mut self) {
        let until = Instant::now() + FAREWELL;
        while !self.hold.is_empty() && Instant::now() < until {
            self.hold.retry(&*self.out, self.clock.now());
            sleep(RETRY).await;
        }
        self.hold.give_up(&*self.out, self.clock.now());
    }
}

/// Asks for the registers of a profile.
struct Asker<'p> {
    tape: Tape,
    plan: &'p Plan,
    context: Context,
    /// Silence between an answer and the next request: three and a half characters.
    gap: Duration,
}

impl<'p> Asker<'p> {
    fn new(tape: &Tape, plan: &'p Plan, settings: &PortSettings) -> Self {
        let characters = Duration::from_micros(35 * 11 * 100_000 / u64::from(settings.baud.max(1)));
        let gap = if plan.framing() == Framing::Rtu { characters.max(Duration::from_millis(2)) } else { Duration::ZERO };
        Self { tape: tape.clone(), plan, context: context(tape, plan), gap }
    }

    /// One request after the other; the first that is not answered ends the poll.
    async fn poll(&mut self) -> Polled {
        let plan = self.plan;
        let mut heard = Heard::default();
        for (i, block) in plan.blocks().iter().enumerate() {
            if i > 0 && !self.gap.is_zero() {
                sleep(self.gap).await;
            }
            match self.ask(block).await {
                Ok((answer, exception)) => {
                    heard.add(answer);
                    if exception {
                        break;
                    }
                }
                Err(None) => return Polled::Gone,
                Err(Some(mut bytes)) => {
                    // What was answered before is of no use alone, and is kept all the same.
                    let mut all = heard.before;
                    all.append(&mut heard.answers);
                    all.append(&mut heard.after);
                    all.append(&mut bytes);
                    return Polled::Unanswered(all);
                }
            }
        }
        Polled::Answered(heard)
    }

    /// One request. Gives the answer and whether it is an exception, else the
    /// bytes that came instead; without bytes the line is gone.
    async fn ask(&mut self, block: &Block) -> Result<(Heard, bool), Option<Vec<u8>>> {
        self.tape.take();
        let request = match block.table {
            Table::Holding => Request::ReadHoldingRegisters(block.start, block.count),
            Table::Input => Request::ReadInputRegisters(block.start, block.count),
        };
        let asked = timeout(self.plan.timeout(), self.context.call(request)).await;
        let bytes = self.tape.take();
        let exception = match asked {
            Ok(Ok(answer)) => answer.is_err(),
            failed => {
                // The library's reader does not begin anew after a failure.
                self.context = context(&self.tape, self.plan);
                return match failed {
                    Ok(Err(tokio_modbus::Error::Transport(e))) if e.kind() != io::ErrorKind::InvalidData => Err(None),
                    _ => Err(Some(bytes)),
                };
            }
        };
        match Heard::cut(self.plan, block, &bytes) {
            Some(heard) => Ok((heard, exception)),
            // The library understood what the profile does not.
            None => Err(Some(bytes)),
        }
    }
}

impl Heard {
    /// Finds the answer among the bytes: noise may come with it.
    fn cut(plan: &Plan, block: &Block, bytes: &[u8]) -> Option<Self> {
        (0..bytes.len()).find_map(|from| {
            let to = from + plan.answer_len(&bytes[from..], block)?;
            Some(Self { before: bytes[..from].to_vec(), answers: bytes[from..to].to_vec(), after: bytes[to..].to_vec() })
        })
    }

    fn add(&mut self, mut other: Self) {
        self.before.append(&mut other.before);
        self.answers.append(&mut other.answers);
        self.after.append(&mut other.after);
    }
}

fn context(tape: &Tape, plan: &Plan) -> Context {
    let (line, unit) = (tape.clone(), Slave(plan.unit()));
    match plan.framing() {
        Framing::Rtu => tokio_modbus::client::rtu::attach_slave(line, unit),
        Framing::Tcp => tokio_modbus::client::tcp::attach_slave(line, unit),
    }
}

fn is_tcp(settings: &PortSettings) -> bool {
    settings.path.starts_with("tcp://")
}

async fn open(settings: &Arc<PortSettings>) -> Result<Box<dyn Line>, OpenFault> {
    if let Some(host) = settings.path.strip_prefix("tcp://") {
        return connect(&settings.path, host).await;
    }
    let wanted = Arc::clone(settings);
    let opened = spawn_blocking(move || open::open(&wanted)).await;
    let broke = |e| {
        let path = &settings.path;
        Err(OpenFault::Refused(format!("{path}: opening it failed ({e}); unplug it and plug it in again")))
    };
    Ok(Box::new(opened.unwrap_or_else(broke)?))
}

async fn connect(path: &str, host: &str) -> Result<Box<dyn Line>, OpenFault> {
    match timeout(CONNECT, TcpStream::connect(host)).await {
        Ok(Ok(stream)) => {
            // A request is eight bytes that wait for nothing.
            let _ = stream.set_nodelay(true);
            Ok(Box::new(stream))
        }
        Ok(Err(e)) if matches!(e.kind(), io::ErrorKind::InvalidInput) => {
            Err(OpenFault::Refused(format!("{path}: this address cannot be used ({e}); write tcp://HOST:PORT")))
        }
        // Switched off, not there yet, or on its way back.
        Ok(Err(_)) | Err(_) => Err(OpenFault::Missing),
    }
}
