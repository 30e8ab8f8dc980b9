//! A port that may be another instrument than the one meant: an adapter
//! without a serial number that came back at another socket, or one with
//! another number under the same name. It is listened
//! to, and nothing it says is passed on, until a person has said that it is
//! the one and it was seen to answer to that person's hand.

use crate::heard::{Batch, What};
use std::time::Duration;
use tarecup_core::quantity::Mass;
use tarecup_core::signal::Signal;
use tokio::time::Instant;

/// So long after a person's word the instrument must show itself.
pub(super) const WINDOW: Duration = Duration::from_secs(60);
/// A balance that speaks all the time shows itself by a change of this.
const CHANGE: Mass = Mass::from_ug(500_000);

/// What is in doubt.
#[derive(Debug)]
pub(super) struct Doubt {
    /// What it is known by now.
    pub known_by: String,
    /// The balance sends without being touched: a line alone proves nothing.
    streams: bool,
    window: Option<Window>,
}

#[derive(Debug)]
struct Window {
    until: Instant,
    first: Option<Mass>,
}

impl Doubt {
    pub(super) fn new(known_by: &str, streams: bool) -> Self {
        Self { known_by: known_by.into(), streams, window: None }
    }

    /// A person says that this is the one, and touches it next.
    pub(super) fn asked(&mut self, now: Instant) {
        self.window = Some(Window { until: now + WINDOW, first: None });
    }

    /// Whether a person is waited for.
    pub(super) fn is_asked(&self, now: Instant) -> bool {
        self.window.as_ref().is_some_and(|w| now < w.until)
    }

    /// Whether what was heard settles it.
    pub(super) fn settled_by(&mut self, batch: &Batch, now: Instant) -> bool {
        let Some(window) = self.window.as_mut().filter(|w| now < w.until) else { return false };
        let mut signals = batch.frames.iter().filter_map(|f| if let What::Signal(s) = &f.what { Some(s) } else { None });
        if !self.streams {
            return signals.next().is_some();
        }
        signals.any(|signal| match signal {
            Signal::Mass(reading) => {
                let first = *window.first.get_or_insert(reading.mass);
                (reading.mass - first).abs() >= CHANGE
            }
            _ => false,
        })
    }
}

/// What is said of such a port; the way to confirm it is added by whoever knows the instrument's name.
pub(super) fn words(before: &str, now: &str) -> String {
    format!(
        "its adapter was known by {before}, and there is now one known by {now}: it may be another instrument. \
         Nothing is taken from it until it is confirmed, or plugged in where it was"
    )
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heard::{Frame, Reject};
    use tarecup_core::signal::{Basis, Mark, Reading};
    use tarecup_core::stamp::Stamp;

    fn batch(what: What) -> Batch {
        Batch { instrument: 0, bytes: b"x".to_vec(), frames: vec![Frame { end: 1, at: Stamp::default(), what }], read_at: None }
    }

    fn grams(g: i64) -> Batch {
        let step = Mass::from_ug(1_000);
        batch(What::Signal(Signal::Mass(Reading {
            mass: Mass::from_ug(g * 1_000_000),
            step,
            mark: Mark::Unmarked,
            basis: Basis::Unmarked,
        })))
    }

    #[test]
    fn a_line_counts_only_after_a_persons_word_and_a_stream_only_when_it_changes() {
        let now = Instant::now();
        let mut key = Doubt::new("2", false);
        assert!(!key.settled_by(&grams(5), now), "nobody has asked");
        key.asked(now);
        assert!(!key.settled_by(&batch(What::Reject(Reject::NoPattern)), now), "noise is no answer");
        assert!(!key.settled_by(&grams(5), now + WINDOW), "too late");
        assert!(key.is_asked(now) && key.settled_by(&grams(5), now));
        let mut stream = Doubt::new("2", true);
        stream.asked(now);
        assert!(!stream.settled_by(&grams(5), now) && !stream.settled_by(&grams(5), now));
        assert!(stream.settled_by(&grams(6), now));
    }
}
