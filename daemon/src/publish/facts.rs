//! Which fact goes next: a short memory of recent ones in front of the ledger.

use std::collections::VecDeque;

use bytes::Bytes;

use super::settings::Limits;

/// What the queue wants to happen next.
#[derive(Debug, PartialEq, Eq)]
pub(super) enum Next {
    /// Publish this.
    Send(u64, Bytes),
    /// Read the ledger behind this `seq`.
    Load(u64),
    /// Nothing is due.
    Idle,
}

/// Outcome of a page from the ledger.
#[derive(Debug, PartialEq, Eq)]
pub(super) enum Paged {
    /// Taken, or nothing was there and nothing was missed.
    Fine,
    /// The ledger skips from the first to the second.
    Gap(u64, u64),
    /// Facts are known to exist that the ledger did not give.
    Short {
        /// The last one it gave.
        after: u64,
        /// The last one known to exist.
        head: u64,
    },
}

struct Sent {
    seq: u64,
    acked: bool,
}

/// The facts between the last delivered one and the newest. Of `recent` and `page` together only a
/// bounded part is in memory; a fact falls out of both when it is delivered or when they are full.
pub(super) struct FactQueue {
    delivered: u64,
    /// Last one given to the connection.
    cursor: u64,
    /// Newest one known.
    head: u64,
    /// The newest undelivered ones without a gap, ending at `head`.
    recent: VecDeque<(u64, Bytes)>,
    recent_bytes: usize,
    /// Older ones read from the ledger, on their way.
    page: VecDeque<(u64, Bytes)>,
    in_flight: VecDeque<Sent>,
    /// The ledger may hold facts of an earlier run that nobody hands over.
    probe: bool,
    max_facts: usize,
    max_bytes: usize,
}

impl FactQueue {
    pub(super) fn new(delivered: u64, limits: &Limits) -> Self {
        Self {
            delivered,
            cursor: delivered,
            head: delivered,
            recent: VecDeque::new(),
            recent_bytes: 0,
            page: VecDeque::new(),
            in_flight: VecDeque::new(),
            probe: true,
            max_facts: limits.recent_facts,
            max_bytes: limits.recent_bytes,
        }
    }

    pub(super) fn delivered(&self) -> u64 {
        self.delivered
    }

    pub(super) fn in_flight(&self) -> usize {
        self.in_flight.len()
    }

    /// Nothing left to send or to wait for.
    pub(super) fn settled(&self) -> bool {
        self.delivered >= self.head && !self.probe
    }

    /// A new fact from the desk. One that is not newer than the newest known is ignored; after a
    /// gap the ledger has to supply what lies between.
    pub(super) fn push(&mut self, seq: u64, payload: Bytes) {
        if seq <= self.head {
            return;
        }
        if seq != self.head + 1 {
            self.recent.clear();
            self.recent_bytes = 0;
        }
        self.head = seq;
        self.recent_bytes += payload.len();
        self.recent.push_back((seq, payload));
        while self.recent.len() > self.max_facts || (self.recent_bytes > self.max_bytes && self.recent.len() > 1) {
            self.drop_oldest_recent();
        }
    }

    fn drop_oldest_recent(&mut self) {
        if let Some((_, payload)) = self.recent.pop_front() {
            self.recent_bytes -= payload.len();
        }
    }

    pub(super) fn next(&mut self) -> Next {
        while self.page.front().is_some_and(|(seq, _)| *seq <= self.cursor) {
            self.page.pop_front();
        }
        if let Some((seq, payload)) = self.page.front() {
            return Next::Send(*seq, payload.clone());
        }
        let wanted = self.cursor + 1;
        if let Some((first, _)) = self.recent.front()
            && *first <= wanted
            && let Some((seq, payload)) = usize::try_from(wanted - first).ok().and_then(|at| self.recent.get(at))
        {
            return Next::Send(*seq, payload.clone());
        }
        if self.cursor < self.head || self.probe { Next::Load(self.cursor) } else { Next::Idle }
    }

    /// Takes a page that was read behind `after`. A page that no longer fits, because the
    /// connection was lost meanwhile, is thrown away.
    pub(super) fn take_page(&mut self, after: u64, facts: Vec<(u64, Bytes)>) -> Paged {
        if after != self.cursor {
            return Paged::Fine;
        }
        let Some(first) = facts.first().map(|f| f.0) else {
            let recent_goes_on = self.recent.front().is_some_and(|(seq, _)| *seq <= self.cursor + 1);
            if self.cursor >= self.head || recent_goes_on {
                self.probe = false;
                return Paged::Fine;
            }
            return Paged::Short { after, head: self.head };
        };
        let mut last = after;
        let mut gap = (first != after + 1).then_some((after, first));
        for (seq, payload) in facts {
            if seq <= last {
                continue;
            }
            if seq != last + 1 && gap.is_none() {
                gap = Some((last, seq));
            }
            last = seq;
            self.page.push_back((seq, payload));
        }
        if last > self.head {
            // The ledger is ahead of what was handed over: what follows continues from here.
            self.recent.clear();
            self.recent_bytes = 0;
            self.head = last;
        }
        gap.map_or(Paged::Fine, |(a, b)| Paged::Gap(a, b))
    }

    /// The fact that [`Self::next`] gave was handed to the connection.
    pub(super) fn sent(&mut self, seq: u64) {
        self.cursor = seq;
        self.in_flight.push_back(Sent { seq, acked: false });
    }

    /// The fact that [`Self::next`] gave will never be sent. True when `delivered` moved.
    pub(super) fn pass_over(&mut self, seq: u64) -> bool {
        self.cursor = seq;
        self.in_flight.push_back(Sent { seq, acked: true });
        self.advance()
    }

    /// A good acknowledgement. True when `delivered` moved.
    pub(super) fn acked(&mut self, seq: u64) -> bool {
        if let Some(sent) = self.in_flight.iter_mut().find(|s| s.seq == seq) {
            sent.acked = true;
        }
        self.advance()
    }

    fn advance(&mut self) -> bool {
        let before = self.delivered;
        while let Some(sent) = self.in_flight.front().filter(|s| s.acked) {
            self.delivered = self.delivered.max(sent.seq);
            self.in_flight.pop_front();
        }
        while self.recent.front().is_some_and(|(seq, _)| *seq <= self.delivered) {
            self.drop_oldest_recent();
        }
        self.delivered != before
    }

    /// Begins again behind the last delivered fact.
    pub(super) fn rewind(&mut self) {
        self.in_flight.clear();
        self.page.clear();
        self.cursor = self.delivered;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn queue(delivered: u64, recent_facts: usize) -> FactQueue {
        FactQueue::new(delivered, &Limits { recent_facts, ..Limits::default() })
    }

    fn payload(seq: u64) -> Bytes {
        Bytes::from(seq.to_string())
    }

    fn ledger(after: u64, upto: u64, limit: usize) -> Vec<(u64, Bytes)> {
        (after + 1..=upto).take(limit).map(|s| (s, payload(s))).collect()
    }

    /// Plays queue and ledger until nothing is due; every fact is acknowledged.
    fn drain(q: &mut FactQueue, upto: u64) -> Vec<u64> {
        let mut order = Vec::new();
        loop {
            match q.next() {
                Next::Send(seq, body) => {
                    assert_eq!(body, payload(seq));
                    q.sent(seq);
                    q.acked(seq);
                    order.push(seq);
                }
                Next::Load(after) => assert_eq!(q.take_page(after, ledger(after, upto, 7)), Paged::Fine),
                Next::Idle => return order,
            }
        }
    }

    #[test]
    fn what_an_earlier_run_left_undelivered_comes_first() {
        let mut q = queue(10, 100);
        q.push(31, payload(31));
        assert_eq!(drain(&mut q, 31), (11..=31).collect::<Vec<_>>());
        assert!(q.settled());
    }

    #[test]
    fn memory_is_bounded_and_the_ledger_fills_in() {
        let mut q = queue(0, 5);
        for seq in 1..=1000 {
            q.push(seq, payload(seq));
            assert!(q.recent.len() <= 5);
        }
        assert_eq!(drain(&mut q, 1000), (1..=1000).collect::<Vec<_>>());
        assert_eq!(q.recent_bytes, 0);
    }

    #[test]
    fn bytes_bound_memory_too() {
        let mut q = FactQueue::new(0, &Limits { recent_bytes: 100, ..Limits::default() });
        for seq in 1..=50 {
            q.push(seq, Bytes::from(vec![0; 30]));
            assert!(q.recent_bytes <= 100);
        }
    }

    #[test]
    fn delivered_moves_only_over_an_unbroken_run_of_acknowledgements() {
        let mut q = queue(0, 100);
        for seq in 1..=3 {
            q.push(seq, payload(seq));
            q.sent(seq);
        }
        assert!(!q.acked(2));
        assert!(!q.acked(3));
        assert_eq!(q.delivered(), 0);
        q.rewind();
        assert_eq!(q.next(), Next::Send(1, payload(1)));
        q.sent(1);
        assert!(q.acked(1));
        assert_eq!(q.delivered(), 1);
        assert!(!q.acked(77), "an unknown acknowledgement moves nothing");
    }

    #[test]
    fn a_page_read_for_a_lost_connection_is_thrown_away() {
        let mut q = queue(0, 100);
        q.push(1, payload(1));
        q.sent(1);
        assert_eq!(q.next(), Next::Load(1));
        q.rewind();
        assert_eq!(q.take_page(1, ledger(1, 9, 9)), Paged::Fine);
        assert_eq!(q.next(), Next::Send(1, payload(1)));
    }

    #[test]
    fn a_ledger_with_a_hole_or_too_short_is_told_and_does_not_block_or_spin() {
        let mut q = queue(0, 2);
        assert_eq!(q.take_page(0, vec![(1, payload(1)), (4, payload(4)), (4, payload(4))]), Paged::Gap(1, 4));
        for seq in [1, 4] {
            assert_eq!(q.next(), Next::Send(seq, payload(seq)));
            q.sent(seq);
            q.acked(seq);
        }
        assert_eq!(q.delivered(), 4);
        for seq in 5..=9 {
            q.push(seq, payload(seq));
        }
        assert_eq!(q.take_page(4, Vec::new()), Paged::Short { after: 4, head: 9 });
    }

    #[test]
    fn passing_over_a_fact_keeps_the_order() {
        let mut q = queue(0, 9);
        for seq in 1..=3 {
            q.push(seq, payload(seq));
        }
        q.sent(1);
        assert!(!q.pass_over(2), "1 is still out");
        q.sent(3);
        assert!(q.acked(1));
        assert_eq!(q.delivered(), 2);
    }
}
