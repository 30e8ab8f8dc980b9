//! Noise without end does not fill the disk: when one instrument sends more
//! lines in a second than anybody could mean, all of them not understood for
//! the same reason, the rest of that second becomes one row: how many, the
//! digest of their bytes, and the first of them.

use sha2::{Digest, Sha256};
use tarecup_core::stamp::{SECOND_US, Stamp};
use tarecup_drivers::heard::{Batch, Frame, Reject, What};

/// Lines not understood that are kept one by one in each second.
const KEPT_A_SECOND: u32 = 50;
/// Bytes of the sample.
const SAMPLE: usize = 200;

/// What was left out of one second.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) struct Swallowed {
    /// Why none of them was understood.
    pub reason: Reject,
    /// How many.
    pub lines: u64,
    /// How many bytes.
    pub bytes: u64,
    /// SHA-256 of the bytes, one after the other.
    pub sha256: String,
    /// The first of them, escaped.
    pub sample: String,
    /// When the last of them came.
    pub at: Stamp,
}

struct Window {
    began: Stamp,
    reason: Reject,
    seen: u32,
    lines: u64,
    bytes: u64,
    sha: Sha256,
    sample: String,
    last: Stamp,
}

/// Watches one instrument for floods.
#[derive(Default)]
pub(super) struct Flood {
    window: Option<Window>,
}

impl Flood {
    /// Takes out of a batch what belongs to a flood. `told` hears each frame that was taken out.
    pub fn sift(&mut self, batch: Batch, mut told: impl FnMut(&Frame, &[u8])) -> (Batch, Option<Swallowed>) {
        let over = batch.frames.last().and_then(|f| self.over(&f.at));
        let rejects = batch.frames.iter().filter(|f| matches!(f.what, What::Reject(_))).count() as u32;
        let seen = self.window.as_ref().map_or(0, |w| w.seen);
        if rejects == 0 || seen + rejects <= KEPT_A_SECOND && self.window.is_none() {
            self.note(&batch);
            return (batch, over);
        }
        let (mut bytes, mut frames, mut begin) = (Vec::new(), Vec::new(), 0usize);
        for frame in &batch.frames {
            let own = &batch.bytes[begin..frame.end as usize];
            begin = frame.end as usize;
            if self.swallows(frame, own) {
                told(frame, own);
            } else {
                bytes.extend_from_slice(own);
                frames.push(Frame { end: bytes.len() as u32, ..frame.clone() });
            }
        }
        (Batch { bytes, frames, ..batch }, over)
    }

    /// The first few rejects of a second only open the window.
    fn note(&mut self, batch: &Batch) {
        for frame in &batch.frames {
            if let What::Reject(reason) = frame.what {
                self.count(reason, &frame.at);
            }
        }
    }

    fn count(&mut self, reason: Reject, at: &Stamp) -> &mut Window {
        let new =
            || Window { began: *at, reason, seen: 0, lines: 0, bytes: 0, sha: Sha256::new(), sample: String::new(), last: *at };
        // Another reason begins another window once nothing was swallowed for the old one.
        if self.window.as_ref().is_some_and(|w| w.reason != reason && w.lines == 0) {
            self.window = None;
        }
        let window = self.window.get_or_insert_with(new);
        window.seen += u32::from(window.reason == reason);
        window
    }

    fn swallows(&mut self, frame: &Frame, bytes: &[u8]) -> bool {
        let What::Reject(reason) = frame.what else { return false };
        let window = self.count(reason, &frame.at);
        if window.reason != reason || window.seen <= KEPT_A_SECOND {
            return false;
        }
        if window.lines == 0 {
            window.sample = bytes.iter().take(SAMPLE).flat_map(|b| std::ascii::escape_default(*b)).map(char::from).collect();
        }
        window.lines += 1;
        window.bytes += bytes.len() as u64;
        window.sha.update(bytes);
        window.last = frame.at;
        true
    }

    /// What was swallowed in a second that is over.
    pub fn over(&mut self, now: &Stamp) -> Option<Swallowed> {
        if self.due_in_us(now)? > 0 {
            return None;
        }
        let window = self.window.take()?;
        (window.lines > 0).then(|| Swallowed {
            reason: window.reason,
            lines: window.lines,
            bytes: window.bytes,
            sha256: crate::ledger::Digest(window.sha.finalize().into()).to_string(),
            sample: window.sample,
            at: window.last,
        })
    }

    /// Microseconds until the second is over; `None` when nothing has been swallowed.
    pub fn due_in_us(&self, now: &Stamp) -> Option<i64> {
        self.window.as_ref().map(|w| SECOND_US - now.since(&w.began).us)
    }

    /// Whether a row is owed for what was swallowed.
    pub fn owes(&self) -> bool {
        self.window.as_ref().is_some_and(|w| w.lines > 0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use tarecup_core::stamp::Boot;

    fn at(ms: i64) -> Stamp {
        Stamp { utc_us: ms * 1_000, mono_us: ms * 1_000, boot: Boot(1) }
    }

    fn noise(lines: usize, ms: i64, reason: Reject) -> Batch {
        let frames = (1..=lines).map(|n| Frame { end: 2 * n as u32, at: at(ms), what: What::Reject(reason) }).collect();
        Batch { instrument: 0, bytes: b"x\n".repeat(lines), frames, read_at: None }
    }

    #[test]
    fn a_few_bad_lines_are_all_kept() {
        let mut flood = Flood::default();
        for ms in 0..20 {
            let (kept, over) = flood.sift(noise(1, ms * 500, Reject::NoPattern), |_, _| panic!("nothing is swallowed"));
            assert_eq!((kept.frames.len(), over), (1, None));
        }
    }

    #[test]
    fn a_flood_is_counted_to_the_line_and_the_byte() {
        let mut flood = Flood::default();
        let (mut kept, mut told, mut rows) = (0, 0, Vec::new());
        for ms in 0..3_000 {
            let (batch, over) = flood.sift(noise(10, ms, Reject::NoPattern), |_, bytes| {
                assert_eq!(bytes, b"x\n");
                told += 1;
            });
            assert_eq!(batch.bytes.len(), 2 * batch.frames.len());
            kept += batch.frames.len() as u64;
            rows.extend(over);
        }
        rows.extend(flood.over(&at(10_000)));
        let swallowed: u64 = rows.iter().map(|r| r.lines).sum();
        assert_eq!((kept + swallowed, swallowed, rows.len()), (30_000, told, 3));
        assert!(kept <= 160, "{kept}");
        assert_eq!(rows.iter().map(|r| r.bytes).sum::<u64>(), 2 * swallowed);
        assert_eq!(rows[0].sha256, crate::ledger::Digest::of(&b"x\n".repeat(rows[0].lines as usize)).to_string());
        assert_eq!(rows[0].sample, "x\\n");
    }

    #[test]
    fn good_lines_and_other_reasons_pass_through_a_flood() {
        let mut flood = Flood::default();
        let _ = flood.sift(noise(200, 0, Reject::NoPattern), |_, _| ());
        let mut mixed = noise(3, 10, Reject::NoPattern);
        mixed.frames[1].what = What::Nothing;
        mixed.frames[2].what = What::Reject(Reject::Checksum);
        let (kept, _) = flood.sift(mixed, |_, _| ());
        assert_eq!(
            kept.frames.iter().map(|f| f.what.clone()).collect::<Vec<_>>(),
            [What::Nothing, What::Reject(Reject::Checksum)]
        );
    }
}
