//! The desk's thread: waits, steps, hands on what may leave.

use super::Desk;
use super::group::Effects;
use super::inbox::{Inbox, Incoming};
use crate::asks;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};
use tarecup_drivers::heard::Clock;

/// While nothing is recorded, the ledger is tried again at this interval.
const TRY_AGAIN: Duration = Duration::from_millis(500);
/// A stop while nothing can be stored is granted after this time.
const LAST_TRIES: Duration = Duration::from_secs(2);
/// With a virtual clock the desk need not look at time by itself.
const FAR: Duration = Duration::from_secs(3_600);

/// How the desk's thread works.
pub struct SeatSettings {
    /// Where stamps come from.
    pub clock: Arc<dyn Clock>,
    /// Time passes by itself; false in a virtual day, whose clock is set from outside. It may begin to.
    pub time_passes: Arc<AtomicBool>,
}

/// The desk at work in its thread.
pub struct Seat {
    inbox: Arc<Inbox>,
    thread: Option<JoinHandle<Desk>>,
}

impl Seat {
    /// Puts the desk to work. `hand_on` gets what may leave after each commit.
    pub fn take(
        mut desk: Desk,
        inbox: Arc<Inbox>,
        settings: SeatSettings,
        mut hand_on: impl FnMut(&Desk, Effects) + Send + 'static,
    ) -> std::io::Result<Seat> {
        let queue = Arc::clone(&inbox);
        let thread = std::thread::Builder::new().name("desk".into()).spawn(move || {
            work(&mut desk, &queue, &settings, &mut hand_on);
            desk
        })?;
        Ok(Seat { inbox, thread: Some(thread) })
    }

    /// Stops in order and gives the desk back. `None` when its thread has died.
    pub fn stop(mut self) -> Option<Desk> {
        self.inbox.stop();
        self.thread.take().and_then(|t| t.join().ok())
    }

    /// Whether the thread has ended by itself.
    pub fn ended(&self) -> bool {
        self.thread.as_ref().is_none_or(JoinHandle::is_finished)
    }
}

fn work(desk: &mut Desk, inbox: &Inbox, settings: &SeatSettings, hand_on: &mut dyn FnMut(&Desk, Effects)) {
    let mut incoming: Vec<Incoming> = Vec::new();
    while !desk.stopped() {
        let mut effects = Effects::default();
        if desk.not_recording().is_some() && !out_of_trouble(desk, inbox, settings, hand_on) {
            return;
        }
        inbox.take(&mut incoming, wait_until(desk, settings));
        if incoming.is_empty() {
            desk.idle();
        }
        desk.step(&mut incoming, &settings.clock.now(), &mut effects);
        hand_on(desk, effects);
    }
}

/// While nothing can be stored: lines wait where they are, asks are refused in
/// words, the ledger is tried again and again. False when a stop was asked for
/// and the trouble outlasted it.
fn out_of_trouble(desk: &mut Desk, inbox: &Inbox, settings: &SeatSettings, hand_on: &mut dyn FnMut(&Desk, Effects)) -> bool {
    let mut until: Option<Instant> = None;
    loop {
        let mut effects = Effects::default();
        desk.recover(&settings.clock.now(), &mut effects);
        if desk.not_recording().is_none() {
            hand_on(desk, effects);
            if until.is_some() {
                inbox.stop();
            }
            return true;
        }
        let mut urgent = Vec::new();
        inbox.take_urgent(&mut urgent);
        if urgent.iter().any(|i| matches!(i, Incoming::Stop)) {
            until.get_or_insert_with(|| Instant::now() + LAST_TRIES);
        }
        refuse(desk, urgent, &mut effects);
        hand_on(desk, effects);
        if until.is_some_and(|until| Instant::now() > until) {
            return false;
        }
        std::thread::sleep(TRY_AGAIN);
    }
}

/// When the desk has to look up although nothing comes.
fn wait_until(desk: &Desk, settings: &SeatSettings) -> Option<Instant> {
    let now = Instant::now();
    if desk.not_recording().is_some() {
        return Some(now);
    }
    let due = desk.due_in_us(&settings.clock.now()).map(|us| match settings.time_passes.load(Ordering::Relaxed) {
        // A little later than due, so that it is due indeed.
        true => now + Duration::from_micros(us.unsigned_abs()) + Duration::from_millis(1),
        false => now + if us == 0 { Duration::ZERO } else { FAR },
    });
    let look = settings.time_passes.load(Ordering::Relaxed).then(|| desk.look_due());
    due.into_iter().chain(desk.hold_until()).chain(look).min()
}

fn refuse(desk: &Desk, urgent: Vec<Incoming>, effects: &mut Effects) {
    let why = desk.not_recording().unwrap_or_default();
    for item in urgent {
        match item {
            Incoming::Ask { body, reply, .. } => {
                let status = asks::parse(&body).is_ok_and(|a| matches!(a.wanted, asks::Wanted::Read(asks::Read::Status)));
                let answer = if status {
                    serde_json::json!({"ok": true, "status": {"not_recording": why}}).to_string()
                } else {
                    asks::refusal(&format!("nothing is being recorded: {why}"))
                };
                effects.replies.push((reply, answer));
            }
            Incoming::Tick(reply) => effects.replies.push((reply, why.to_string())),
            _ => (),
        }
    }
}
