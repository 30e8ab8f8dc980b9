//! What a port says of how it is doing: each state once, and of a busy port who holds it.

use super::open::OpenFault;
use crate::heard::{Clock, Deliver, InstrumentId, PortState};
use std::sync::Arc;
use std::time::{Duration, Instant};

/// Time between two searches for the program that holds a port: each reads all of /proc.
const HOLDER_EVERY: Duration = Duration::from_secs(10);

/// Tells the states of one port.
pub(super) struct Teller {
    id: InstrumentId,
    path: String,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
    said: Option<PortState>,
    /// When the holder of a busy port was last searched for, and what to say.
    searched: Option<(Instant, String)>,
}

impl Teller {
    pub fn new(id: InstrumentId, path: &str, clock: Arc<dyn Clock>, out: Arc<dyn Deliver>) -> Self {
        Self { id, path: path.into(), clock, out, said: None, searched: None }
    }

    /// Says a state, unless it was the last one said.
    pub fn say(&mut self, state: PortState) {
        if self.said.as_ref() != Some(&state) {
            tracing::debug!(port = %self.path, ?state, "port");
            self.said = Some(state.clone());
            self.out.state(self.id, state, self.clock.now());
        }
    }

    /// Says why an attempt to open failed. True when it is busy and the holder is to be searched for: then
    /// [`Self::busy`] says it.
    pub fn fault(&mut self, fault: OpenFault) -> bool {
        match fault {
            // A port that was lost stays lost until it is back.
            OpenFault::Missing if self.said == Some(PortState::Lost) => {}
            OpenFault::Missing if self.said == Some(PortState::Opened) => self.say(PortState::Lost),
            OpenFault::Missing => self.say(PortState::Waiting),
            OpenFault::Refused(says) => self.say(PortState::Refused(says)),
            OpenFault::Busy => match &self.searched {
                Some((at, says)) if at.elapsed() < HOLDER_EVERY => {
                    let says = says.clone();
                    self.say(PortState::Refused(says));
                }
                _ => return true,
            },
        }
        false
    }

    /// Says who holds the port.
    pub fn busy(&mut self, says: String) {
        self.searched = Some((Instant::now(), says.clone()));
        self.say(PortState::Refused(says));
    }
}
