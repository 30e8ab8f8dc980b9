//! Being asked to stop.

use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Receiver, channel};

/// Told once, when the program is asked to stop.
#[derive(Clone)]
pub struct StopFlag(Arc<AtomicBool>);

impl StopFlag {
    /// Whether the program was asked to stop.
    pub fn asked(&self) -> bool {
        self.0.load(Ordering::Relaxed)
    }
}

/// Listens for SIGTERM and SIGINT in a thread of its own. A second one ends the program at once.
pub fn listen() -> std::io::Result<(StopFlag, Receiver<()>)> {
    let flag = StopFlag(Arc::new(AtomicBool::new(false)));
    let raised = flag.clone();
    let (tx, rx) = channel();
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build()?;
    let (ready_tx, ready_rx) = channel();
    std::thread::Builder::new().name("signals".into()).spawn(move || {
        runtime.block_on(async move {
            use tokio::signal::unix::{SignalKind, signal};
            let (term, int) = (signal(SignalKind::terminate()), signal(SignalKind::interrupt()));
            let (Ok(mut term), Ok(mut int)) = (term, int) else { return };
            let _ = ready_tx.send(());
            for second in [false, true] {
                tokio::select! {
                    _ = term.recv() => (),
                    _ = int.recv() => (),
                }
                if second {
                    std::process::exit(130);
                }
                raised.0.store(true, Ordering::Relaxed);
                let _ = tx.send(());
            }
        });
    })?;
    let _ = ready_rx.recv();
    Ok((flag, rx))
}
