//! The desk's thread: waits, steps, hands on what may leave.

use super::Desk;
use super::group::Effects;
use super::inbox::{Inbox, Incoming};
use crate::asks;
use std::sync::Arc;
use std::thread::JoinHandle;
use std::time::{Duration, Instant};
use tarecup_drivers::heard::Clock;

/// While nothing is recorded, the ledger is tried again at this interval.
const TRY_AGAIN: Duration = Duration::from_millis(500);
/// With a virtual clock the desk need not look at time by itself.
const FAR: Duration = Duration::from_secs(3_600);

/// How the desk's thread works.
pub struct SeatSettings {
    /// Where stamps come from.
    pub clock: Arc<dyn Clock>,
    /// Time passes by itself; false in a virtual day, whose clock is set from outside.
    pub time_passes: bool,
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
    let mut tries_until: Option<Instant> = None;
    while !desk.stopped() {
        inbox.take(&mut incoming, wait_until(desk, settings));
        let mut effects = Effects::default();
        if desk.not_recording().is_some() {
            desk.recover(&settings.clock.now(), &mut effects);
        }
        if desk.not_recording().is_some() {
            refuse_while_not_recording(desk, &mut incoming, &mut effects, &mut tries_until);
        } else {
            tries_until = None;
            let now = settings.clock.now();
            desk.step(&mut incoming, &now, &mut effects);
        }
        hand_on(desk, effects);
        if tries_until.is_some_and(|until| Instant::now() > until) {
            return;
        }
        if desk.not_recording().is_some() {
            std::thread::sleep(TRY_AGAIN);
        }
    }
}

/// When the desk has to look up although nothing comes.
fn wait_until(desk: &Desk, settings: &SeatSettings) -> Option<Instant> {
    let now = Instant::now();
    if desk.not_recording().is_some() {
        return Some(now + TRY_AGAIN);
    }
    let due = desk.due_in_us(&settings.clock.now()).map(|us| match settings.time_passes {
        // A little later than due, so that it is due indeed.
        true => now + Duration::from_micros(us.unsigned_abs()) + Duration::from_millis(1),
        false => now + if us == 0 { Duration::ZERO } else { FAR },
    });
    due.into_iter().chain(desk.hold_until()).min()
}

/// Nothing can be stored: lines wait in order, asks are refused in words, a stop is granted after a while.
fn refuse_while_not_recording(
    desk: &Desk,
    incoming: &mut Vec<Incoming>,
    effects: &mut Effects,
    tries_until: &mut Option<Instant>,
) {
    let why = desk.not_recording().unwrap_or_default().to_string();
    let mut waiting = Vec::new();
    for item in incoming.drain(..) {
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
            Incoming::Tick(reply) => effects.replies.push((reply, String::new())),
            Incoming::Stop => *tries_until = Some(Instant::now() + Duration::from_secs(2)),
            other => waiting.push(other),
        }
    }
    *incoming = waiting;
}
