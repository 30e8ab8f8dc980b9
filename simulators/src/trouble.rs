//! Trouble on the line: what bad cables, buffers and hands do to an instrument's bytes.

use crate::Timed;
use crate::pty::{Pty, PtyError};
use crate::rng::Rng;

/// How much of which trouble. Each is a probability for every piece of bytes, 0 to 1.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Trouble {
    /// Bytes of noise come before the piece.
    pub noise: f64,
    /// The piece arrives in two parts, some milliseconds apart.
    pub split: f64,
    /// The piece waits and arrives together with the next one.
    pub merge: f64,
    /// The end of the piece is lost.
    pub half: f64,
    /// Nothing is heard for [`SILENCE_US`] before the piece.
    pub silence: f64,
    /// The cable is pulled after the piece and plugged in again after [`UNPLUGGED_US`].
    pub unplug: f64,
}

/// Length of a silence, µs.
pub const SILENCE_US: u64 = 15_000_000;
/// How long a pulled cable stays out, µs.
pub const UNPLUGGED_US: u64 = 3_000_000;
/// Time between the two parts of a split piece, µs.
pub const SPLIT_US: u64 = 5_000;
/// Most bytes of noise at once.
pub const NOISE_MAX: i64 = 12;

/// One thing done to a cable.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Act {
    /// These bytes go out.
    Write(Vec<u8>),
    /// The cable is pulled.
    Unplug,
    /// It is plugged in again.
    Replug,
}

/// Names of the kinds of trouble, as the command line takes them.
pub const KINDS: [&str; 6] = ["noise", "split", "merge", "half", "silence", "unplug"];

impl Trouble {
    /// Nothing but split and merged writes: every byte still arrives, in order.
    pub fn harmless() -> Self {
        Self { split: 0.3, merge: 0.3, ..Self::default() }
    }

    /// Sets one kind by its name; false for a name that is not in [`KINDS`].
    pub fn set(&mut self, kind: &str, probability: f64) -> bool {
        let place = match kind {
            "noise" => &mut self.noise,
            "split" => &mut self.split,
            "merge" => &mut self.merge,
            "half" => &mut self.half,
            "silence" => &mut self.silence,
            "unplug" => &mut self.unplug,
            _ => return false,
        };
        *place = probability;
        true
    }

    /// Makes trouble of timed bytes. Without `noise`, `half` and `unplug` the bytes stay the same, in the same order.
    pub fn on(&self, timed: Vec<Timed>, rng: &mut Rng) -> Vec<(u64, Act)> {
        let mut acts = Vec::with_capacity(timed.len());
        // Bytes held back to arrive with the next piece, and the time they have waited.
        let (mut held, mut waited) = (Vec::new(), 0);
        let last = timed.len().saturating_sub(1);
        for (i, (delay, bytes)) in timed.into_iter().enumerate() {
            waited += delay;
            if self.silence > 0.0 && rng.chance(self.silence) {
                waited += SILENCE_US;
            }
            if self.noise > 0.0 && rng.chance(self.noise) {
                held.extend((0..rng.between(1, NOISE_MAX)).map(|_| rng.next_u64() as u8));
            }
            held.extend_from_slice(self.halved(&bytes, rng));
            if i < last && self.merge > 0.0 && rng.chance(self.merge) {
                continue;
            }
            self.send(std::mem::take(&mut held), std::mem::take(&mut waited), rng, &mut acts);
        }
        acts
    }

    /// The bytes, or what a broken line leaves of them.
    fn halved<'a>(&self, bytes: &'a [u8], rng: &mut Rng) -> &'a [u8] {
        if self.half > 0.0 && bytes.len() > 1 && rng.chance(self.half) {
            return &bytes[..rng.between(1, bytes.len() as i64 - 1) as usize];
        }
        bytes
    }

    fn send(&self, bytes: Vec<u8>, delay: u64, rng: &mut Rng, acts: &mut Vec<(u64, Act)>) {
        if bytes.len() > 1 && self.split > 0.0 && rng.chance(self.split) {
            let cut = rng.between(1, bytes.len() as i64 - 1) as usize;
            acts.push((delay, Act::Write(bytes[..cut].to_vec())));
            acts.push((SPLIT_US, Act::Write(bytes[cut..].to_vec())));
        } else {
            acts.push((delay, Act::Write(bytes)));
        }
        if self.unplug > 0.0 && rng.chance(self.unplug) {
            acts.push((SPLIT_US, Act::Unplug));
            acts.push((UNPLUGGED_US, Act::Replug));
        }
    }
}

/// Does one thing to a cable. What is written while the cable is out is lost, as it would be.
pub fn act(pty: &mut Pty, act: &Act) -> Result<(), PtyError> {
    match act {
        Act::Write(_) if pty.device().is_none() => Ok(()),
        Act::Write(bytes) => pty.write_or_lose(bytes).map(|_lost| ()),
        Act::Unplug => {
            pty.unplug();
            Ok(())
        }
        Act::Replug => pty.replug(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn lines(n: usize) -> Vec<Timed> {
        (0..n).map(|i| (1_000, format!("line {i}\r\n").into_bytes())).collect()
    }

    fn written(acts: &[(u64, Act)]) -> Vec<u8> {
        acts.iter().flat_map(|(_, a)| if let Act::Write(b) = a { b.clone() } else { Vec::new() }).collect()
    }

    #[test]
    fn no_trouble_changes_nothing() {
        let acts = Trouble::default().on(lines(5), &mut Rng::new(1));
        let want: Vec<(u64, Act)> = lines(5).into_iter().map(|(d, b)| (d, Act::Write(b))).collect();
        assert_eq!(acts, want);
    }

    #[test]
    fn splitting_and_merging_keep_every_byte_in_order() {
        for seed in 0..50 {
            let acts = Trouble::harmless().on(lines(40), &mut Rng::new(seed));
            assert_eq!(written(&acts), lines(40).into_iter().flat_map(|(_, b)| b).collect::<Vec<_>>());
            let pieces: Vec<Vec<u8>> = acts.iter().map(|(_, a)| written(&[(0, a.clone())])).collect();
            let clean: Vec<Vec<u8>> = lines(40).into_iter().map(|(_, b)| b).collect();
            assert_ne!(pieces, clean, "seed {seed} made no trouble");
        }
        // A last piece that was to be merged goes out all the same.
        let acts = Trouble { merge: 1.0, ..Trouble::default() }.on(lines(3), &mut Rng::new(1));
        assert_eq!(acts.len(), 1);
        assert_eq!(acts[0].0, 3_000);
    }

    #[test]
    fn each_kind_does_what_it_says() {
        let clean: Vec<u8> = lines(20).into_iter().flat_map(|(_, b)| b).collect();
        for kind in KINDS {
            let mut trouble = Trouble::default();
            assert!(trouble.set(kind, 1.0));
            let acts = trouble.on(lines(20), &mut Rng::new(3));
            let bytes = written(&acts);
            let total: u64 = acts.iter().map(|(d, _)| d).sum();
            match kind {
                "noise" => assert!(bytes.len() >= clean.len() + 20),
                "half" => assert!(bytes.len() <= clean.len() - 20),
                "silence" => assert_eq!(total, 20 * (1_000 + SILENCE_US)),
                "unplug" => {
                    assert_eq!(acts.iter().filter(|(_, a)| *a == Act::Unplug).count(), 20);
                    assert_eq!(acts.iter().filter(|(_, a)| *a == Act::Replug).count(), 20);
                }
                _ => assert_eq!(bytes, clean),
            }
        }
        assert!(!Trouble::default().set("gremlins", 1.0));
    }
}
