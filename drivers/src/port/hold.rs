//! What a port keeps while its receiver has no room: a bounded amount, then a count.

use crate::heard::{Batch, Deliver, Frame, InstrumentId};
use std::collections::VecDeque;
use tarecup_core::stamp::Stamp;

/// The most a port keeps, in bytes of memory.
pub(super) const HOLD_BYTES: usize = 256 * 1024;

/// Batches that wait for room.
#[derive(Debug)]
pub(super) struct Hold {
    instrument: InstrumentId,
    waiting: VecDeque<Batch>,
    bytes: usize,
    dropped: u64,
}

fn cost(batch: &Batch) -> usize {
    size_of::<Batch>() + batch.bytes.len() + batch.frames.len() * size_of::<Frame>()
}

impl Hold {
    pub(super) fn new(instrument: InstrumentId) -> Self {
        Self { instrument, waiting: VecDeque::new(), bytes: 0, dropped: 0 }
    }

    /// Nothing waits and nothing was dropped.
    pub(super) fn is_empty(&self) -> bool {
        self.waiting.is_empty() && self.dropped == 0
    }

    /// Delivers the batch, or keeps it, or counts its lines.
    pub(super) fn deliver(&mut self, batch: Batch, out: &dyn Deliver) {
        if self.is_empty() {
            if let Err(batch) = out.heard(batch) {
                self.keep(batch);
            }
        } else {
            self.keep(batch);
        }
    }

    fn keep(&mut self, batch: Batch) {
        let cost = cost(&batch);
        // Once lines were dropped, the later ones are too until there is room:
        // the gap is in one place, where its overrun is told.
        if self.dropped > 0 || self.bytes + cost > HOLD_BYTES {
            self.dropped += batch.frames.len() as u64;
        } else {
            self.bytes += cost;
            self.waiting.push_back(batch);
        }
    }

    /// Tries again to deliver what waits.
    pub(super) fn retry(&mut self, out: &dyn Deliver, now: Stamp) {
        while let Some(batch) = self.waiting.pop_front() {
            let cost = cost(&batch);
            if let Err(batch) = out.heard(batch) {
                self.waiting.push_front(batch);
                return;
            }
            self.bytes -= cost;
        }
        self.tell(out, now);
    }

    /// The port ends: what still waits is dropped and told.
    pub(super) fn give_up(&mut self, out: &dyn Deliver, now: Stamp) {
        self.dropped += self.waiting.drain(..).map(|b| b.frames.len() as u64).sum::<u64>();
        self.bytes = 0;
        self.tell(out, now);
    }

    fn tell(&mut self, out: &dyn Deliver, now: Stamp) {
        if self.dropped > 0 {
            out.overrun(self.instrument, self.dropped, now);
            self.dropped = 0;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heard::{PortState, What};
    use std::sync::Mutex;
    use std::sync::atomic::{AtomicBool, Ordering};

    #[derive(Default)]
    struct Sink {
        full: AtomicBool,
        got: Mutex<Vec<u8>>,
        lost: Mutex<Vec<u64>>,
    }

    impl Deliver for Sink {
        fn heard(&self, batch: Batch) -> Result<(), Batch> {
            if self.full.load(Ordering::Relaxed) {
                return Err(batch);
            }
            self.got.lock().expect("sink").extend(batch.bytes);
            Ok(())
        }
        fn overrun(&self, _: InstrumentId, lines: u64, _: Stamp) {
            self.lost.lock().expect("sink").push(lines);
        }
        fn state(&self, _: InstrumentId, _: PortState, _: Stamp) {}
    }

    fn batch(bytes: &[u8]) -> Batch {
        let frames = vec![Frame { end: bytes.len() as u32, at: Stamp::default(), what: What::Nothing }];
        Batch { instrument: 3, bytes: bytes.to_vec(), frames, read_at: None }
    }

    #[test]
    fn order_is_kept_and_the_gap_is_told_once() {
        let sink = Sink::default();
        let mut hold = Hold::new(3);
        hold.deliver(batch(b"a"), &sink);
        sink.full.store(true, Ordering::Relaxed);
        hold.deliver(batch(b"b"), &sink);
        sink.full.store(false, Ordering::Relaxed);
        hold.deliver(batch(b"c"), &sink);
        assert_eq!(*sink.got.lock().expect("sink"), b"a");
        hold.retry(&sink, Stamp::default());
        assert_eq!(*sink.got.lock().expect("sink"), b"abc");
        assert!(hold.is_empty() && sink.lost.lock().expect("sink").is_empty());
    }

    #[test]
    fn memory_is_bounded_and_drops_are_counted() {
        let sink = Sink { full: true.into(), ..Sink::default() };
        let mut hold = Hold::new(3);
        let line = [b'x'; 1_000];
        for _ in 0..10_000 {
            hold.deliver(batch(&line), &sink);
            assert!(hold.bytes <= HOLD_BYTES);
        }
        let kept = hold.waiting.len() as u64;
        assert!(kept > 100);
        sink.full.store(false, Ordering::Relaxed);
        hold.retry(&sink, Stamp::default());
        assert_eq!(*sink.lost.lock().expect("sink"), [10_000 - kept]);
        assert_eq!(sink.got.lock().expect("sink").len() as u64, kept * 1_000);
    }

    #[test]
    fn what_waits_at_the_end_is_told() {
        let sink = Sink { full: true.into(), ..Sink::default() };
        let mut hold = Hold::new(3);
        hold.deliver(batch(b"a"), &sink);
        hold.deliver(batch(b"b"), &sink);
        hold.give_up(&sink, Stamp::default());
        assert_eq!(*sink.lost.lock().expect("sink"), [2]);
    }
}
