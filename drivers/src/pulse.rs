//! A switch on a modem-control line of a serial port: samples to closings.
//! Pure: the samples come from a port ([`LineSource`]) or from a test.
//!
//! A cup counter without electronics is a microswitch at the cam that closes a
//! line once a turn. Each **closing** is one drop. A switch bounces: its line
//! counts as open again only after it was read open for a whole `bounce`, and
//! only then can the next closing be said. How long it stays closed does not
//! matter.
//!
//! What is said is a line of text, which the shipped profile `contact-closure`
//! understands and the ledger keeps: `CTS closed` (a drop), `CTS opened, 3
//! edges` (how often the line changed since it was last open), `CTS
//! chatters` (it has not come to rest for a second: a loose wire), `CTS
//! unwatched for 45 ms` (nobody looked: a drop may be missing, which its long
//! interval will show as a gap).
//!
//! Limits of looking instead of being woken: a closing shorter than the time
//! between two looks may be missed unseen. At two looks in a contact's shortest
//! closing nothing is missed.

use std::fmt::Write;
use std::io;

/// Time between two looks.
pub const LOOK_US: i64 = 2_000;
/// Nobody looked for so long that a drop may have been missed.
const UNWATCHED_US: i64 = 20_000;
/// A line that has not come to rest for so long chatters.
const CHATTER_US: i64 = 1_000_000;
/// How long a switch bounces, unless the settings say otherwise, milliseconds.
pub const BOUNCE_MS: u32 = 20;

/// Lines that a switch may close.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum ModemLine {
    /// Clear to send.
    Cts,
    /// Data set ready.
    Dsr,
    /// Data carrier detect.
    Dcd,
    /// Ring indicator.
    Ri,
}

impl ModemLine {
    /// All lines with the words of the settings.
    pub const WORDS: [(&str, Self); 4] = [("cts", Self::Cts), ("dsr", Self::Dsr), ("dcd", Self::Dcd), ("ri", Self::Ri)];

    /// Its name, as ports have it.
    pub fn word(self) -> &'static str {
        match self {
            Self::Cts => "CTS",
            Self::Dsr => "DSR",
            Self::Dcd => "DCD",
            Self::Ri => "RI",
        }
    }
}

/// Where samples come from.
pub trait LineSource {
    /// Whether the line is closed at this moment.
    ///
    /// # Errors
    /// The port is gone, or has no such line.
    fn closed(&mut self, line: ModemLine) -> io::Result<bool>;
}

/// What a sample shows.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Said {
    /// The switch has closed: a drop.
    Closed,
    /// It is open again; so many edges since it was last open.
    Opened(u32),
    /// It does not come to rest.
    Chatters,
    /// Nobody looked for so many milliseconds.
    Unwatched(u32),
}

impl Said {
    /// The line of text that is kept, with its end.
    pub fn line(self, line: ModemLine) -> String {
        let mut text = String::from(line.word());
        // Writing into a text does not fail.
        let _ = match self {
            Self::Closed => write!(text, " closed"),
            Self::Opened(edges) => write!(text, " opened, {edges} edges"),
            Self::Chatters => write!(text, " chatters"),
            Self::Unwatched(ms) => write!(text, " unwatched for {ms} ms"),
        };
        text.push('\n');
        text
    }
}

/// One switch.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Contact {
    bounce_us: i64,
    /// Of the last look: when, and what it showed.
    last: Option<(i64, bool)>,
    /// The line has been closed and not yet open for long enough since: when that began.
    closed_since: Option<i64>,
    /// When it last changed.
    edge_at: i64,
    edges: u32,
    chattered: bool,
    /// When a pause without a look was last told.
    unwatched_at: Option<i64>,
}

impl Contact {
    /// A switch that bounces for less than so many milliseconds.
    pub fn new(bounce_ms: u32) -> Self {
        Self {
            bounce_us: i64::from(bounce_ms.max(1)) * 1_000,
            last: None,
            closed_since: None,
            edge_at: i64::MIN,
            edges: 0,
            chattered: false,
            unwatched_at: None,
        }
    }

    /// Takes one look, at a time of a clock that does not jump, in microseconds.
    /// Says at most that nobody looked, and what the look shows.
    pub fn look(&mut self, closed: bool, at: i64) -> [Option<Said>; 2] {
        let Some((before, was)) = self.last.replace((at, closed)) else {
            // Closed before anybody looked: that drop fell unheard.
            self.closed_since = closed.then_some(at);
            self.edge_at = at;
            return [None, None];
        };
        let late = self.unwatched(before, at);
        if closed != was {
            self.edges = self.edges.saturating_add(1);
            self.edge_at = at;
        }
        [late, self.shown(closed, at)]
    }

    fn shown(&mut self, closed: bool, at: i64) -> Option<Said> {
        let quiet = at.saturating_sub(self.edge_at) >= self.bounce_us;
        match self.closed_since {
            None if closed => {
                self.closed_since = Some(at);
                Some(Said::Closed)
            }
            Some(_) if !closed && quiet => {
                self.closed_since = None;
                self.chattered = false;
                Some(Said::Opened(std::mem::take(&mut self.edges)))
            }
            // At rest while closed: it is only held.
            Some(_) if quiet => {
                self.closed_since = Some(at);
                self.chattered = false;
                None
            }
            Some(since) if at.saturating_sub(since) >= CHATTER_US && !self.chattered => {
                self.chattered = true;
                Some(Said::Chatters)
            }
            _ => None,
        }
    }

    /// At most one a second: a busy machine would fill the record with them.
    fn unwatched(&mut self, before: i64, at: i64) -> Option<Said> {
        let pause = at.saturating_sub(before);
        let told = self.unwatched_at.is_some_and(|told| at.saturating_sub(told) < CHATTER_US);
        if pause < UNWATCHED_US || told {
            return None;
        }
        self.unwatched_at = Some(at);
        Some(Said::Unwatched(u32::try_from(pause / 1_000).unwrap_or(u32::MAX)))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Looks every 2 ms for so long at a line that is closed in these spans, in ms.
    fn said(spans: &[(i64, i64)], until_ms: i64) -> Vec<(i64, Said)> {
        let mut contact = Contact::new(BOUNCE_MS);
        let mut all = Vec::new();
        for ms in (0..until_ms).step_by(2) {
            let closed = spans.iter().any(|(from, to)| (*from..*to).contains(&ms));
            all.extend(contact.look(closed, ms * 1_000).into_iter().flatten().map(|s| (ms, s)));
        }
        all
    }

    fn closings(said: &[(i64, Said)]) -> Vec<i64> {
        said.iter().filter(|(_, s)| *s == Said::Closed).map(|(ms, _)| *ms).collect()
    }

    #[test]
    fn each_closing_is_said_once_and_at_once() {
        assert_eq!(said(&[(100, 160)], 300), [(100, Said::Closed), (180, Said::Opened(2))]);
    }

    #[test]
    fn a_switch_that_bounces_at_both_ends_closes_once() {
        let bouncing = [(100, 102), (104, 108), (110, 160), (162, 164), (170, 172)];
        assert_eq!(said(&bouncing, 300), [(100, Said::Closed), (192, Said::Opened(10))]);
        // The control: the same without the rule of rest would be five.
        assert_eq!(bouncing.len(), 5);
    }

    #[test]
    fn a_crank_turned_fast_loses_none() {
        for per_s in [1, 2, 4, 10] {
            let period = 1_000 / per_s;
            let spans: Vec<(i64, i64)> = (0..25).map(|n| (100 + n * period, 100 + n * period + period / 4)).collect();
            let starts: Vec<i64> = spans.iter().map(|s| s.0).collect();
            assert_eq!(closings(&said(&spans, 100 + 26 * period)), starts, "{per_s} a second");
        }
    }

    #[test]
    fn one_held_closed_is_one() {
        let held = said(&[(100, 60_100)], 61_000);
        assert_eq!(held, [(100, Said::Closed), (60_120, Said::Opened(2))]);
    }

    #[test]
    fn closed_before_anybody_looked_is_no_drop() {
        assert_eq!(said(&[(0, 50), (200, 250)], 400), [(70, Said::Opened(1)), (200, Said::Closed), (270, Said::Opened(2))]);
    }

    #[test]
    fn a_loose_wire_is_told_once_and_again_after_rest() {
        let loose = |from: i64| (0..150).map(move |n| (from + n * 10, from + n * 10 + 4));
        let spans: Vec<(i64, i64)> = loose(100).chain(loose(5_000)).collect();
        let all = said(&spans, 8_000);
        let chatter: Vec<i64> = all.iter().filter(|(_, s)| *s == Said::Chatters).map(|(ms, _)| *ms).collect();
        assert_eq!(chatter, [1_100, 6_000]);
        assert_eq!(closings(&all), [100, 5_000], "no drops come of it");
    }

    #[test]
    fn a_pause_without_a_look_is_told_at_most_once_a_second() {
        let mut contact = Contact::new(BOUNCE_MS);
        contact.look(false, 0);
        assert_eq!(contact.look(false, 19_000), [None, None]);
        assert_eq!(contact.look(false, 64_000), [Some(Said::Unwatched(45)), None]);
        // A closing that was found late is a closing.
        assert_eq!(contact.look(true, 200_000), [None, Some(Said::Closed)]);
        assert_eq!(contact.look(true, 1_100_000), [Some(Said::Unwatched(900)), None]);
    }

    #[test]
    fn a_clock_at_its_ends_does_no_harm() {
        let mut contact = Contact::new(u32::MAX);
        for at in [i64::MIN, i64::MAX, 0, i64::MIN, 5, -5] {
            let _ = contact.look(at % 2 == 0, at);
        }
    }

    #[test]
    fn what_is_said_can_be_read() {
        let line = |said: Said| said.line(ModemLine::Cts);
        assert_eq!(line(Said::Closed), "CTS closed\n");
        assert_eq!(line(Said::Opened(3)), "CTS opened, 3 edges\n");
        assert_eq!(line(Said::Chatters), "CTS chatters\n");
        assert_eq!(Said::Unwatched(45).line(ModemLine::Ri), "RI unwatched for 45 ms\n");
    }
}
