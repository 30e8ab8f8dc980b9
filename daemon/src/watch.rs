//! What the service manager is told: that the service is ready, that its desk
//! still answers, what it is doing. Without a service manager nothing happens.

use crate::desk::inbox::Inbox;
use sd_notify::NotifyState;
use std::sync::Arc;
use std::sync::mpsc::channel;
use std::time::Duration;

/// How long the desk may take to look up.
const ANSWERS: Duration = Duration::from_secs(5);

/// The service is up.
pub fn ready() {
    tell(&[NotifyState::Ready, NotifyState::Status("recording")]);
}

/// The service stops in order.
pub fn stopping() {
    tell(&[NotifyState::Stopping]);
}

/// Says that all is well, but only when the desk has just answered: a hanging
/// desk records nothing, however lively the rest is.
pub fn look_after(inbox: &Arc<Inbox>) {
    let (tx, rx) = channel();
    inbox.tick(Box::new(move |why| {
        let _ = tx.send(why);
    }));
    match rx.recv_timeout(ANSWERS) {
        Ok(why) => {
            let status = if why.is_empty() { String::from("recording") } else { format!("NOT RECORDING: {why}") };
            tell(&[NotifyState::Watchdog, NotifyState::Status(&status)]);
        }
        Err(_) => tracing::error!("the desk does not answer; if that goes on, the service manager starts the service again"),
    }
}

fn tell(states: &[NotifyState<'_>]) {
    if let Err(e) = sd_notify::notify(states) {
        tracing::debug!(error = %e, "the service manager could not be told");
    }
}
