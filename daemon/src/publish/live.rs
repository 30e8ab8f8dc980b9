//! Messages for the moment: the newest mass of a topic, and every drop.

use std::collections::VecDeque;

use bytes::Bytes;

use super::Live;

/// Topics whose newest message may wait; a laboratory has far fewer instruments.
const NEWEST_MAX: usize = 256;

/// What waits to be seen.
pub(super) struct LiveQueue {
    each: VecDeque<(String, Bytes)>,
    newest: VecDeque<(String, Bytes)>,
    max_each: usize,
    dropped: u64,
}

impl LiveQueue {
    pub(super) fn new(max_each: usize) -> Self {
        Self { each: VecDeque::new(), newest: VecDeque::new(), max_each, dropped: 0 }
    }

    pub(super) fn push(&mut self, live: Live) {
        match live {
            Live::Each { topic, payload } => {
                if self.each.len() >= self.max_each {
                    self.each.pop_front();
                    self.dropped += 1;
                }
                self.each.push_back((topic, payload));
            }
            Live::Newest { topic, payload } => {
                if let Some(slot) = self.newest.iter_mut().find(|(t, _)| *t == topic) {
                    slot.1 = payload;
                } else if self.newest.len() < NEWEST_MAX {
                    self.newest.push_back((topic, payload));
                } else {
                    self.dropped += 1;
                }
            }
        }
    }

    /// Drops before masses.
    pub(super) fn pop(&mut self) -> Option<(String, Bytes)> {
        self.each.pop_front().or_else(|| self.newest.pop_front())
    }

    /// What waited is no longer of the moment.
    pub(super) fn clear(&mut self) {
        self.dropped += (self.each.len() + self.newest.len()) as u64;
        self.each.clear();
        self.newest.clear();
    }

    /// Messages nobody will see.
    pub(super) fn dropped(&self) -> u64 {
        self.dropped
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn masses_coalesce_drops_do_not_and_both_are_bounded() {
        let mut q = LiveQueue::new(3);
        for n in 0..5u8 {
            q.push(Live::Newest { topic: "pan".into(), payload: Bytes::from(vec![n]) });
            q.push(Live::Each { topic: "cup".into(), payload: Bytes::from(vec![n]) });
        }
        let out: Vec<(String, u8)> = std::iter::from_fn(|| q.pop()).map(|(t, p)| (t, p[0])).collect();
        assert_eq!(out, [("cup".into(), 2), ("cup".into(), 3), ("cup".into(), 4), ("pan".into(), 4)]);
        assert_eq!(q.dropped(), 2);
    }
}
