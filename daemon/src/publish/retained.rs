//! Retained topics: what each should show, and which one goes next.

use std::collections::{HashMap, VecDeque};
use std::sync::Arc;

use bytes::Bytes;

/// Cleared topics that are cleared again after a connect: a broker that comes back with an older store
/// would otherwise show them for ever.
const CLEARED_KEPT: usize = 1_024;
/// Presence, instruments, head, the rest.
const CLASSES: usize = 4;

struct Entry {
    /// Payload that should stand there; empty clears.
    wanted: Bytes,
    version: u64,
    delivered: u64,
    /// Version on its way, 0 for none.
    flying: u64,
    queued: bool,
    class: usize,
    order: u64,
}

/// One publication that is due.
#[derive(Debug, PartialEq, Eq)]
pub(super) struct Due {
    pub(super) topic: Arc<str>,
    pub(super) payload: Bytes,
    pub(super) version: u64,
}

/// The board of retained topics.
pub(super) struct RetainedBoard {
    prefix: String,
    entries: HashMap<Arc<str>, Entry>,
    ready: [VecDeque<Arc<str>>; CLASSES],
    cleared: VecDeque<Arc<str>>,
    order: u64,
    flying: usize,
    max: usize,
}

impl RetainedBoard {
    pub(super) fn new(prefix: String, max: usize) -> Self {
        Self { prefix, entries: HashMap::new(), ready: Default::default(), cleared: VecDeque::new(), order: 0, flying: 0, max }
    }

    fn class_of(&self, topic: &str) -> usize {
        match topic.strip_prefix(&self.prefix) {
            Some("presence") => 0,
            Some(tail) if tail.starts_with("instrument/") => 1,
            Some("head") => 2,
            _ => 3,
        }
    }

    pub(super) fn flying(&self) -> usize {
        self.flying
    }

    /// Nothing waits and nothing is on its way.
    pub(super) fn settled(&self) -> bool {
        self.flying == 0 && self.ready.iter().all(VecDeque::is_empty)
    }

    /// The broker has answered for what this topic should show.
    pub(super) fn is_settled(&self, topic: &str) -> bool {
        self.entries.get(topic).is_none_or(|e| e.flying == 0 && e.delivered == e.version)
    }

    pub(super) fn waiting(&self) -> bool {
        self.ready.iter().any(|q| !q.is_empty())
    }

    /// Sets what a topic should show; `None` or nothing clears it. False when the board is full.
    pub(super) fn set(&mut self, topic: &str, wanted: Option<Bytes>) -> bool {
        let wanted = wanted.unwrap_or_default();
        let clears = wanted.is_empty();
        let mut was_cleared = false;
        let key = if let Some((key, entry)) = self.entries.get_key_value(topic) {
            if entry.wanted == wanted {
                return true; // nothing new to say
            }
            was_cleared = entry.wanted.is_empty();
            Arc::clone(key)
        } else {
            if self.entries.len() >= self.max {
                return false;
            }
            let key: Arc<str> = Arc::from(topic);
            self.order += 1;
            let (class, order) = (self.class_of(topic), self.order);
            let entry = Entry { wanted: Bytes::new(), version: 0, delivered: 0, flying: 0, queued: false, class, order };
            self.entries.insert(Arc::clone(&key), entry);
            key
        };
        if let Some(entry) = self.entries.get_mut(&key) {
            entry.version += 1;
            entry.wanted = wanted;
        }
        if was_cleared {
            self.cleared.retain(|t| *t != key);
        }
        if clears {
            self.cleared.push_back(Arc::clone(&key));
            self.forget_old_cleared();
        }
        self.enqueue(&key);
        true
    }

    /// Cleared topics are forgotten beyond a number, oldest first, but never before the broker knows.
    fn forget_old_cleared(&mut self) {
        let mut spare = self.cleared.len().saturating_sub(CLEARED_KEPT);
        let entries = &mut self.entries;
        self.cleared.retain(|topic| {
            let done = entries.get(topic).is_none_or(|e| e.delivered == e.version && e.flying == 0);
            if spare > 0 && done {
                spare -= 1;
                entries.remove(topic);
                return false;
            }
            true
        });
    }

    fn enqueue(&mut self, topic: &Arc<str>) {
        if let Some(entry) = self.entries.get_mut(topic)
            && !entry.queued
            && entry.flying == 0
            && entry.delivered != entry.version
        {
            entry.queued = true;
            self.ready[entry.class].push_back(Arc::clone(topic));
        }
    }

    /// The next one due, of presence only or of all.
    pub(super) fn next(&mut self, only_presence: bool) -> Option<Due> {
        let classes = if only_presence { 1 } else { CLASSES };
        for class in 0..classes {
            while let Some(topic) = self.ready[class].pop_front() {
                let Some(entry) = self.entries.get_mut(&topic) else { continue };
                entry.queued = false;
                if entry.delivered == entry.version || entry.flying != 0 {
                    continue;
                }
                entry.flying = entry.version;
                self.flying += 1;
                return Some(Due { payload: entry.wanted.clone(), version: entry.version, topic });
            }
        }
        None
    }

    /// The broker answered, or the payload will never be sent: `version` is settled, a newer one goes next.
    pub(super) fn settle(&mut self, topic: &Arc<str>, version: u64) {
        if let Some(entry) = self.entries.get_mut(topic)
            && entry.flying == version
        {
            entry.flying = 0;
            entry.delivered = version;
            self.flying -= 1;
        }
        self.enqueue(topic);
        if self.cleared.len() > CLEARED_KEPT {
            self.forget_old_cleared();
        }
    }

    /// Everything is published again, in the order of the classes and then as first given.
    pub(super) fn start_over(&mut self) {
        self.flying = 0;
        self.ready.iter_mut().for_each(VecDeque::clear);
        let mut all: Vec<(u64, Arc<str>)> = Vec::with_capacity(self.entries.len());
        for (topic, entry) in &mut self.entries {
            entry.flying = 0;
            entry.delivered = 0;
            entry.queued = false;
            all.push((entry.order, Arc::clone(topic)));
        }
        all.sort_unstable_by_key(|(order, _)| *order);
        for (_, topic) in all {
            self.enqueue(&topic);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn board(max: usize) -> RetainedBoard {
        RetainedBoard::new("r/s/".into(), max)
    }

    fn body(text: &'static str) -> Option<Bytes> {
        Some(Bytes::from_static(text.as_bytes()))
    }

    fn drain(b: &mut RetainedBoard) -> Vec<(String, Bytes)> {
        let mut out = Vec::new();
        while let Some(due) = b.next(false) {
            out.push((due.topic.to_string(), due.payload.clone()));
            b.settle(&due.topic, due.version);
        }
        out
    }

    #[test]
    fn a_connect_tells_presence_instruments_head_then_the_rest_as_given() {
        let mut b = board(99);
        for topic in ["r/s/specimen/S-2", "r/s/specimen/S-1", "r/s/head", "r/s/instrument/pan-1", "r/s/presence"] {
            assert!(b.set(topic, body("x")));
        }
        for _ in 0..2 {
            let order: Vec<String> = drain(&mut b).into_iter().map(|(t, _)| t).collect();
            let expected = ["r/s/presence", "r/s/instrument/pan-1", "r/s/head", "r/s/specimen/S-2", "r/s/specimen/S-1"];
            assert_eq!(order, expected);
            assert!(b.settled());
            b.start_over();
        }
    }

    #[test]
    fn only_the_newest_wanted_payload_goes_and_one_at_a_time() {
        let mut b = board(9);
        b.set("t", body("1"));
        let first = b.next(false).expect("due");
        b.set("t", body("2"));
        b.set("t", body("3"));
        assert_eq!(b.next(false), None, "one is on its way");
        b.settle(&first.topic, first.version);
        assert_eq!(drain(&mut b), vec![("t".to_owned(), Bytes::from_static(b"3"))]);
        b.set("t", body("3"));
        assert_eq!(b.next(false), None, "the same again says nothing");
    }

    #[test]
    fn a_lost_answer_does_not_bring_back_the_older_payload() {
        let mut b = board(9);
        b.set("t", body("old"));
        let old = b.next(false).expect("due");
        b.start_over();
        b.set("t", body("new"));
        let new = b.next(false).expect("due");
        b.settle(&old.topic, old.version);
        assert_eq!(b.flying(), 1, "the stale answer settles nothing");
        b.settle(&new.topic, new.version);
        assert!(b.settled());
    }

    #[test]
    fn a_cleared_topic_is_cleared_again_after_a_connect_and_forgotten_beyond_a_bound() {
        let mut b = board(usize::MAX);
        b.set("t", body("x"));
        drain(&mut b);
        b.set("t", None);
        assert_eq!(drain(&mut b), vec![("t".to_owned(), Bytes::new())]);
        b.start_over();
        assert_eq!(drain(&mut b), vec![("t".to_owned(), Bytes::new())]);
        for n in 0..3 * CLEARED_KEPT {
            let topic = format!("c/{n}");
            b.set(&topic, body("x"));
            b.set(&topic, None);
            drain(&mut b);
        }
        assert!(b.entries.len() <= CLEARED_KEPT + 1, "{}", b.entries.len());
    }

    #[test]
    fn a_full_board_refuses_new_topics_and_still_updates_old_ones() {
        let mut b = board(2);
        assert!(b.set("a", body("1")) && b.set("b", body("1")));
        assert!(!b.set("c", body("1")));
        assert!(b.set("a", body("2")));
    }
}
