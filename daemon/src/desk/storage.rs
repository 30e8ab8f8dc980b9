//! Storage in trouble: noticed before something has to be stored, said, and
//! bridged by the reserve for as long as a weighing in progress takes.

use super::Desk;
use super::group::Effects;
use crate::ledger::{LedgerError, Room};
use std::time::{Duration, Instant};
use tarecup_core::stamp::Stamp;

/// How often it is looked whether something could be stored. With the ledger's
/// patience for other programs, trouble is said within two seconds.
const LOOK: Duration = Duration::from_millis(750);
/// How long a weighing in progress may take to be stored from the reserve.
const TO_FINISH: Duration = Duration::from_millis(1_500);

/// What is known of the ledger's disk.
#[derive(Debug, Default)]
pub(super) struct Watched {
    looked: Option<Instant>,
    /// Less than a tenth is free.
    low: Option<Room>,
    /// The last failure was for want of room.
    full: bool,
    /// What is stored goes onto the reserve, until then.
    on_reserve: Option<Instant>,
}

impl Watched {
    /// Until when what is in progress is stored from the reserve.
    pub fn reserve_until(&self) -> Option<Instant> {
        self.on_reserve
    }

    /// Keeps in mind why something could not be stored.
    pub fn failed(&mut self, error: &LedgerError) {
        self.full = matches!(error, LedgerError::Full { .. });
        self.on_reserve = None;
    }

    /// What people should know of the room on the disk.
    pub fn says(&self) -> Option<String> {
        if self.on_reserve.is_some() {
            return Some(
                "the disk is full; what is in progress is stored from a reserve, and then nothing more: free space".into(),
            );
        }
        let mb = |bytes: u64| bytes as f64 / 1e6;
        self.low.map(|r| {
            format!(
                "less than a tenth of the disk is free ({:.1} of {:.1} MB): free space before nothing can be stored",
                mb(r.free_bytes),
                mb(r.total_bytes)
            )
        })
    }
}

impl Desk {
    /// When it has to be looked again whether something could be stored.
    pub(super) fn look_due(&self) -> Instant {
        self.watched.looked.map_or_else(Instant::now, |looked| looked + LOOK)
    }

    /// After each step: whether the disk is full, whether the reserve is to be closed, and now and then whether
    /// something could be stored at all.
    pub(super) fn look_after_storage(&mut self, now: &Stamp, effects: &mut Effects) {
        if self.not_recording.is_some() {
            if self.watched.full {
                // At once, from the reserve; the seat tries again at intervals.
                self.recover(now, effects);
            }
            return;
        }
        if self.watched.on_reserve.is_some_and(|until| Instant::now() >= until) {
            self.close_reserve(effects);
        }
        if self.not_recording.is_none() && self.watched.looked.is_none_or(|looked| looked.elapsed() >= LOOK) {
            self.watched.looked = Some(Instant::now());
            match self.ledger.look() {
                Ok(room) => self.note_room(room, effects),
                Err(e) => self.note_not_recording(&e, effects),
            }
        }
    }

    /// The time for what was in progress is over: recording goes on only if there is room again.
    fn close_reserve(&mut self, effects: &mut Effects) {
        match self.ledger.remake_reserve() {
            Ok(()) => {
                tracing::warn!("there is room on the disk again");
                self.watched.on_reserve = None;
                effects.presence = true;
            }
            Err(e) => self.note_not_recording(&e, effects),
        }
    }

    fn note_room(&mut self, room: Option<Room>, effects: &mut Effects) {
        let low = room.filter(Room::low);
        if low.is_some() != self.watched.low.is_some() {
            match &low {
                Some(room) => {
                    tracing::warn!(
                        free_bytes = room.free_bytes,
                        total_bytes = room.total_bytes,
                        "less than a tenth of the ledger's disk is free: free space"
                    );
                }
                None => tracing::info!("more than a tenth of the ledger's disk is free again"),
            }
            effects.presence = true;
        }
        // The figure itself is told when it is asked for.
        self.watched.low = low;
    }

    /// After a failure for want of room, the first try is made with the reserve given up. True when that opened the ledger.
    pub(super) fn reopened_on_reserve(&mut self) -> Result<bool, LedgerError> {
        if !std::mem::take(&mut self.watched.full) {
            return Ok(false);
        }
        match self.ledger.reopen_on_reserve() {
            None => Ok(false),
            Some(Err(e)) => Err(e),
            Some(Ok(_)) => {
                tracing::error!("the disk is full: what is in progress is stored from the reserve");
                self.watched.on_reserve = Some(Instant::now() + TO_FINISH);
                Ok(true)
            }
        }
    }
}
