//! What is read from one port becomes batches of decoded frames. Pure: the
//! same for a serial port, a capture file and a test.

use crate::frame::{Framer, Piece};
use crate::heard::{Batch, Frame, InstrumentId};
use crate::profile::{Decoder, Profile};
use std::sync::Arc;
use std::time::Instant;
use tarecup_core::stamp::Stamp;

/// Framer and decoder of one port.
#[derive(Debug)]
pub struct Intake {
    instrument: InstrumentId,
    framer: Framer,
    decoder: Decoder,
}

impl Intake {
    /// For the port of `instrument`, speaking as `profile` says.
    pub fn new(instrument: InstrumentId, profile: &Arc<Profile>) -> Self {
        Self { instrument, framer: Framer::new(profile.framing().clone()), decoder: profile.decoder() }
    }

    /// The port was opened, and `quiet` for long enough that its first byte begins a frame.
    pub fn opened(&mut self, quiet: bool) {
        self.framer.opened(quiet);
    }

    /// Takes one read; the frames it completed, if any.
    pub fn read(&mut self, chunk: &[u8], at: Stamp, read_at: Option<Instant>) -> Option<Batch> {
        // One allocation each is enough for nearly every read.
        let room = self.framer.pending() + chunk.len();
        let mut bytes = Vec::new();
        let mut frames = Vec::new();
        let decoder = &mut self.decoder;
        self.framer.push(chunk, |piece| {
            if frames.is_empty() {
                bytes.reserve_exact(room);
                frames.reserve_exact(1 + room / (2 * piece.bytes.len().max(8)));
            }
            keep(decoder, piece, at, &mut bytes, &mut frames);
        });
        (!frames.is_empty()).then_some(Batch { instrument: self.instrument, bytes, frames, read_at })
    }

    /// The port was lost; the half frame, if there was one.
    pub fn lost(&mut self, at: Stamp) -> Option<Batch> {
        let (mut bytes, mut frames) = (Vec::new(), Vec::new());
        let decoder = &mut self.decoder;
        self.framer.lost(|piece| keep(decoder, piece, at, &mut bytes, &mut frames));
        (!frames.is_empty()).then_some(Batch { instrument: self.instrument, bytes, frames, read_at: None })
    }

    /// A frame has begun whose end has not come.
    pub fn in_frame(&self) -> bool {
        self.framer.in_frame()
    }

    /// No end has come for too long: the begun frame, as one that is not understood.
    pub fn stalled(&mut self, at: Stamp) -> Option<Batch> {
        let (mut bytes, mut frames) = (Vec::new(), Vec::new());
        let decoder = &mut self.decoder;
        self.framer.stalled(|piece| keep(decoder, piece, at, &mut bytes, &mut frames));
        (!frames.is_empty()).then_some(Batch { instrument: self.instrument, bytes, frames, read_at: None })
    }

    /// Bytes skipped so far because their frame was too long.
    pub fn skipped(&self) -> u64 {
        self.framer.skipped()
    }
}

fn keep(decoder: &mut Decoder, piece: Piece<'_>, at: Stamp, bytes: &mut Vec<u8>, frames: &mut Vec<Frame>) {
    let what = decoder.decode_piece(piece);
    bytes.extend_from_slice(piece.bytes);
    // A read and the longest frame are a few thousand bytes each.
    let end = u32::try_from(bytes.len()).unwrap_or(u32::MAX);
    frames.push(Frame { end, at, what });
}
