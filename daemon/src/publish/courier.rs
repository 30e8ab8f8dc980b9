//! The task that owns client and connection and carries the outbox to the broker.

mod fill;
mod session;

use std::pin::{Pin, pin};
use std::sync::Arc;
use std::time::{Duration, Instant};

use bytes::Bytes;
use tokio::runtime::Handle;
use tokio::sync::oneshot;
use tokio::task::JoinHandle;
use tokio::time::Sleep;

use self::session::{Item, Parting, Session};
use super::facts::Paged;
use super::outbox::{Shared, StopAsked};
use super::settings::{CourierSettings, SettingsFault};
use super::transport::{Happening, Inlet, Lost, Outlet, Rumqttc, Transport};
use super::{CourierEvent, Outgoing, Past, What};

/// A connection that lasted this long earns a prompt first attempt after its end.
const LASTED: Duration = Duration::from_secs(3);
const RETRY_FIRST: Duration = Duration::from_millis(100);
const RETRY_MOST: Duration = Duration::from_secs(5);
const PAUSE_FIRST: Duration = Duration::from_secs(5);
const PAUSE_MOST: Duration = Duration::from_secs(300);
/// Refusals of retained payloads and answers told in one connection.
const REFUSALS_TOLD: usize = 8;

type OnEvent = Arc<dyn Fn(CourierEvent) + Send + Sync>;
type Page = Result<Vec<(u64, Bytes)>, String>;

/// How the courier parted from its broker.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Farewell {
    /// Facts are delivered up to and including this `seq`.
    pub delivered_through: u64,
    /// Every fact and every retained payload was delivered.
    pub complete: bool,
    /// The last presence was acknowledged, so the last will stays unsaid.
    pub presence_told: bool,
}

/// Handle to the courier's task. Dropping it without [`Courier::stop`] breaks the connection off: the broker
/// then publishes the last will.
pub struct Courier {
    shared: Shared,
    on_event: OnEvent,
    task: JoinHandle<()>,
}

impl Courier {
    /// Hands over what a commit made known. Never waits.
    pub fn send(&self, outgoing: Outgoing) {
        let trouble = self.shared.lock().take(outgoing);
        self.shared.wake();
        for event in trouble {
            (self.on_event)(event);
        }
    }

    /// Facts are delivered up to and including this `seq`.
    #[must_use]
    pub fn delivered_through(&self) -> u64 {
        self.shared.lock().facts.delivered()
    }

    /// Live messages that nobody will see, since the start.
    #[must_use]
    pub fn live_dropped(&self) -> u64 {
        self.shared.lock().live.dropped()
    }

    /// Whether the broker has accepted the connection.
    #[must_use]
    pub fn is_connected(&self) -> bool {
        self.shared.lock().connected
    }

    /// False when the task has ended, which it does of its own only by a panic of the callback.
    #[must_use]
    pub fn is_running(&self) -> bool {
        !self.task.is_finished()
    }

    /// Sends what waits, then the last presence, then parts properly; without a connection it parts at once.
    pub async fn stop(self, presence: Option<Bytes>, timeout: Duration) -> Farewell {
        self.ask_to_stop(presence, timeout).await.unwrap_or_default()
    }

    /// [`Courier::stop`] for a caller outside of any asynchronous task.
    #[must_use]
    pub fn stop_blocking(self, presence: Option<Bytes>, timeout: Duration) -> Farewell {
        self.ask_to_stop(presence, timeout).blocking_recv().unwrap_or_default()
    }

    fn ask_to_stop(&self, presence: Option<Bytes>, timeout: Duration) -> oneshot::Receiver<Farewell> {
        let (reply, receiver) = oneshot::channel();
        let now = Instant::now();
        self.shared.lock().stop =
            Some(StopAsked { presence, drain_until: now + timeout.mul_f32(0.7), until: now + timeout, reply });
        self.shared.wake();
        receiver
    }
}

impl Drop for Courier {
    fn drop(&mut self) {
        self.shared.lock().abandoned = true;
        self.shared.wake();
    }
}

/// Starts the courier's task on the given runtime. Facts after `delivered_through` are sent.
///
/// # Errors
/// Settings that cannot work, including an unreadable certificate file.
pub fn spawn(
    handle: &Handle,
    settings: CourierSettings,
    past: Arc<dyn Past>,
    delivered_through: u64,
    on_event: OnEvent,
) -> Result<Courier, SettingsFault> {
    settings.check()?;
    let transport = Rumqttc::new(&settings)?;
    Ok(spawn_on(handle, transport, settings, past, delivered_through, on_event))
}

fn spawn_on<T: Transport>(
    handle: &Handle,
    transport: T,
    settings: CourierSettings,
    past: Arc<dyn Past>,
    delivered_through: u64,
    on_event: OnEvent,
) -> Courier {
    let shared = Shared::new(&settings, delivered_through);
    let task = Task {
        shared: shared.clone(),
        on_event: Arc::clone(&on_event),
        past,
        fact_topic: settings.topic("fact"),
        settings,
        learned_max: usize::MAX,
        load_retry: None,
        load_backoff: Duration::from_secs(1),
        last_why: String::new(),
    };
    let task = handle.spawn(task.run(transport));
    Courier { shared, on_event, task }
}

/// How a session ended.
enum End {
    Lost(Lost),
    Stop,
}

struct Task {
    shared: Shared,
    on_event: OnEvent,
    past: Arc<dyn Past>,
    settings: CourierSettings,
    fact_topic: String,
    /// Learned from a broker that closes the connection over a size it never announced.
    learned_max: usize,
    load_retry: Option<Instant>,
    load_backoff: Duration,
    last_why: String,
}

impl Task {
    async fn run<T: Transport>(mut self, transport: T) {
        let mut retry = RETRY_FIRST;
        loop {
            let (outlet, inlet) = transport.open();
            let mut session = Session::new(Instant::now());
            let end = self.session(&mut session, outlet, inlet).await;
            if let Some((_, load)) = session.load.take() {
                load.abort();
            }
            let lasted = session.up.is_some_and(|at| at.elapsed() > LASTED);
            if lasted {
                retry = RETRY_FIRST;
            }
            match end {
                End::Stop => return,
                End::Lost(lost) => self.tell_lost(&session, lost),
            }
            if self.sleep_or_stop(jittered(retry)).await {
                return;
            }
            retry = (retry * 2).min(RETRY_MOST);
        }
    }

    fn tell_lost(&mut self, session: &Session, lost: Lost) {
        if lost.too_large
            && let Some(longest) = session.longest()
        {
            self.learned_max = self.learned_max.min(longest.saturating_sub(1));
        }
        self.shared.lock().disconnected();
        if session.up.is_some() || lost.why != self.last_why {
            self.last_why.clone_from(&lost.why);
            (self.on_event)(CourierEvent::Disconnected { why: lost.why });
        }
    }

    /// Waits before the next attempt. True when the courier should end.
    async fn sleep_or_stop(&mut self, pause: Duration) -> bool {
        let mut sleep = pin!(tokio::time::sleep(pause));
        loop {
            {
                let mut outbox = self.shared.lock();
                if let Some(stop) = outbox.stop.take() {
                    let delivered_through = outbox.facts.delivered();
                    let complete = outbox.settled();
                    let _ = stop.reply.send(Farewell { delivered_through, complete, presence_told: false });
                    return true;
                }
                if outbox.abandoned {
                    return true;
                }
            }
            tokio::select! {
                () = &mut sleep => return false,
                () = self.shared.woken() => {}
            }
        }
    }

    /// One connection, from the attempt to its end.
    async fn session<O: Outlet, I: Inlet>(&mut self, session: &mut Session, outlet: O, mut inlet: I) -> End {
        let far = Duration::from_secs(86_400 * 30);
        let mut timer = pin!(tokio::time::sleep(far));
        let mut armed = None;
        loop {
            // The future is polled to its end: dropped half-way, it could lose a packet it had read.
            let happening = {
                let mut next = pin!(inlet.next());
                loop {
                    self.arm(session, timer.as_mut(), &mut armed);
                    tokio::select! {
                        biased;
                        happening = &mut next => break happening,
                        (after, page) = loaded(&mut session.load) => self.take_page(session, after, page),
                        () = self.shared.woken() => {}
                        () = &mut timer, if armed.is_some() => armed = None,
                    }
                    if let Err(end) = self.turn(session, &outlet) {
                        return end;
                    }
                }
            };
            let end = match happening {
                Ok(happening) => self.handle(session, &outlet, happening),
                Err(lost) => {
                    for late in inlet.leftovers() {
                        if let Happening::Answered(id, verdict) = late {
                            self.answered(session, id, verdict);
                        }
                    }
                    if session.parting == Parting::Gone {
                        self.farewell(!session.last_word_refused);
                        return End::Stop;
                    }
                    Err(End::Lost(lost))
                }
            };
            if let Err(end) = end.and_then(|()| self.turn(session, &outlet)) {
                return end;
            }
        }
    }

    /// Sets the timer to the next moment that matters, if any: there is none while nothing is in flight.
    fn arm(&self, session: &Session, timer: Pin<&mut Sleep>, armed: &mut Option<Instant>) {
        let stop = {
            let outbox = self.shared.lock();
            let drains = session.parting == Parting::Draining && session.up.is_some();
            outbox.stop.as_ref().map(|s| if drains { s.drain_until } else { s.until })
        };
        let due = [session.look, session.pause_until, self.load_retry, stop].into_iter().flatten().min();
        if due != *armed {
            *armed = due;
            if let Some(at) = due {
                timer.reset(at.into());
            }
        }
    }

    /// Everything that may be due after something happened.
    fn turn<O: Outlet>(&mut self, session: &mut Session, outlet: &O) -> Result<(), End> {
        let now = Instant::now();
        self.timers(session, now)?;
        self.parting(session, outlet, now)?;
        if session.up.is_some() && session.parting != Parting::Gone {
            self.fill(session, outlet)?;
        }
        if session.look.is_none() && session.in_flight() > 0 {
            session.progress = now;
            session.look = Some(now + self.patience());
        }
        Ok(())
    }

    /// How long a broker may leave everything unanswered.
    fn patience(&self) -> Duration {
        self.settings.keep_alive + Duration::from_secs(5)
    }

    fn timers(&mut self, session: &mut Session, now: Instant) -> Result<(), End> {
        if session.look.is_some_and(|at| at <= now) {
            session.look = None;
            if session.in_flight() > 0 {
                let until = session.progress + self.patience();
                if until <= now {
                    let why = "the broker has stopped answering".to_owned();
                    return Err(End::Lost(Lost { why, too_large: false }));
                }
                session.look = Some(until);
            }
        }
        if session.pause_until.is_some_and(|at| at <= now) {
            session.pause_until = None;
            self.shared.lock().facts.rewind();
        }
        if self.load_retry.is_some_and(|at| at <= now) {
            self.load_retry = None;
        }
        Ok(())
    }

    /// Moves the goodbye along: drain, last word, gone.
    fn parting<O: Outlet>(&mut self, session: &mut Session, outlet: &O, now: Instant) -> Result<(), End> {
        let mut outbox = self.shared.lock();
        let Some(stop) = &outbox.stop else {
            return if outbox.abandoned { Err(End::Stop) } else { Ok(()) };
        };
        let (drain_until, until) = (stop.drain_until, stop.until);
        if session.parting == Parting::No {
            session.parting = Parting::Draining;
        }
        if session.parting == Parting::Draining && session.up.is_some() && (outbox.settled() || now >= drain_until) {
            session.parting = Parting::LastWord;
            let presence = outbox.stop.as_mut().and_then(|s| s.presence.take());
            if let Some(presence) = presence {
                let topic = self.settings.topic("presence");
                outbox.retained.set(&topic, Some(presence));
            }
        }
        // Only presence is waited for: other topics may be many, and without a proper goodbye the will speaks.
        let said = session.parting == Parting::LastWord && outbox.retained.is_settled(&self.settings.topic("presence"));
        drop(outbox);
        if said {
            session.parting = Parting::Gone;
            if outlet.part().is_err() {
                return Err(End::Stop);
            }
        }
        if now >= until {
            self.farewell(session.parting == Parting::Gone && !session.last_word_refused);
            return Err(End::Stop);
        }
        Ok(())
    }

    fn farewell(&self, presence_told: bool) {
        let mut outbox = self.shared.lock();
        if let Some(stop) = outbox.stop.take() {
            let (delivered_through, complete) = (outbox.facts.delivered(), outbox.settled());
            let _ = stop.reply.send(Farewell { delivered_through, complete, presence_told });
        }
    }

    fn handle<O: Outlet>(&mut self, session: &mut Session, outlet: &O, happening: Happening) -> Result<(), End> {
        match happening {
            Happening::Up { max_packet, receive_max } => return self.up(session, outlet, max_packet, receive_max),
            Happening::Written(id) => {
                if let Some((item, size)) = session.submitted.pop_front() {
                    match item {
                        Item::Live => session.pending_live -= 1,
                        item => drop(session.written.insert(id, (item, size))),
                    }
                }
            }
            Happening::Answered(id, verdict) => self.answered(session, id, verdict),
            Happening::Heard { payload, retained, response_topic, correlation } => {
                self.heard(session, payload, retained, response_topic, correlation);
            }
            Happening::NotSubscribed(reason) => (self.on_event)(CourierEvent::Refused { what: What::Asks, reason }),
            Happening::Parted => {
                self.farewell(!session.last_word_refused);
                return Err(End::Stop);
            }
            Happening::Other => {}
        }
        Ok(())
    }

    fn up<O: Outlet>(&mut self, session: &mut Session, outlet: &O, max_packet: usize, receive_max: usize) -> Result<(), End> {
        session.up = Some(Instant::now());
        session.max_packet = max_packet.min(self.learned_max);
        session.window = self.settings.limits.window.min(receive_max);
        self.last_why.clear();
        {
            let mut outbox = self.shared.lock();
            outbox.connected = true;
            outbox.facts.rewind();
            outbox.retained.start_over();
        }
        if self.settings.asks && outlet.subscribe(&self.settings.topic("ask")).is_err() {
            return Err(End::Lost(client_gone()));
        }
        (self.on_event)(CourierEvent::Connected);
        Ok(())
    }

    fn answered(&mut self, session: &mut Session, id: u16, verdict: Result<(), String>) {
        let Some((item, _)) = session.written.remove(&id) else { return };
        session.progress = Instant::now();
        let mut told = None;
        {
            let mut outbox = self.shared.lock();
            match (&item, &verdict) {
                (Item::Fact(seq), Ok(())) => {
                    session.pause = PAUSE_FIRST;
                    if outbox.facts.acked(*seq) {
                        told = Some(CourierEvent::Delivered { through: outbox.facts.delivered() });
                    }
                }
                (Item::Retained(topic, version), _) => outbox.retained.settle(topic, *version),
                _ => {}
            }
        }
        if let Err(reason) = verdict {
            told = Self::refused(session, item, reason);
        }
        if let Some(event) = told {
            (self.on_event)(event);
        }
    }

    /// A refused fact stops facts for a while, since order matters; the rest goes on.
    fn refused(session: &mut Session, item: Item, reason: String) -> Option<CourierEvent> {
        let what = match item {
            Item::Fact(seq) => {
                if session.pause_until.is_some() {
                    return None;
                }
                session.pause_until = Some(Instant::now() + session.pause);
                session.pause = (session.pause * 2).min(PAUSE_MOST);
                return Some(CourierEvent::Refused { what: What::Fact(seq), reason });
            }
            Item::Retained(topic, _) => {
                session.last_word_refused |= session.parting == Parting::LastWord && topic.ends_with("/presence");
                What::Retained(topic.to_string())
            }
            Item::Answer(client) => What::Answer(client),
            Item::Live => return None,
        };
        session.refusals += 1;
        (session.refusals <= REFUSALS_TOLD).then_some(CourierEvent::Refused { what, reason })
    }

    fn heard(
        &mut self,
        session: &mut Session,
        payload: Bytes,
        retained: bool,
        response_topic: Option<String>,
        correlation: Option<Bytes>,
    ) {
        let prefix = self.settings.topic("answer/");
        let client = response_topic.as_deref().and_then(|t| t.strip_prefix(&prefix)).filter(|c| client_name(c));
        let why = match client {
            _ if retained => "a retained ask: publish asks without retain".to_owned(),
            Some(client) => {
                let client = client.to_owned();
                (self.on_event)(CourierEvent::Asked { client, payload, correlation });
                return;
            }
            None => format!("no response topic under {prefix}: set it to {prefix}NAME with a name of letters, digits, dot, dash"),
        };
        if !session.ignored_told {
            session.ignored_told = true;
            (self.on_event)(CourierEvent::AskIgnored { why });
        }
    }

    fn take_page(&mut self, session: &mut Session, after: u64, page: Page) {
        session.load = None;
        let outcome = match page {
            Ok(facts) => {
                let paged = self.shared.lock().facts.take_page(after, facts);
                match paged {
                    Paged::Fine => None,
                    Paged::Gap(after, found) => {
                        (self.on_event)(CourierEvent::Missing { after, found });
                        None
                    }
                    Paged::Short { after, head } => {
                        Some(format!("the ledger gives no fact after {after}, though {head} is known"))
                    }
                }
            }
            Err(why) => Some(why),
        };
        if let Some(why) = outcome {
            self.load_retry = Some(Instant::now() + self.load_backoff);
            self.load_backoff = (self.load_backoff * 2).min(Duration::from_secs(60));
            (self.on_event)(CourierEvent::PastUnreadable { why });
        } else {
            self.load_backoff = Duration::from_secs(1);
        }
    }
}

fn client_gone() -> Lost {
    Lost { why: "the client took no more messages".to_owned(), too_large: false }
}

/// A client that can be answered: one plain topic level.
pub(super) fn client_name(name: &str) -> bool {
    (1..=64).contains(&name.len()) && name.bytes().all(|b| b.is_ascii_alphanumeric() || b"._-".contains(&b))
}

/// Resolves when the ledger has answered; never while nothing was asked of it.
async fn loaded(load: &mut Option<(u64, JoinHandle<Page>)>) -> (u64, Page) {
    match load {
        Some((after, job)) => {
            let page = job.await.unwrap_or_else(|e| Err(format!("reading the ledger failed: {e}")));
            (*after, page)
        }
        None => std::future::pending().await,
    }
}

/// Between half and the whole of the pause, so that several stations do not knock in step.
fn jittered(pause: Duration) -> Duration {
    let mut byte = [0_u8; 1];
    let part = getrandom::fill(&mut byte).map_or(0.5, |()| f32::from(byte[0]) / 255.0);
    pause.mul_f32(0.5 + part / 2.0)
}

#[cfg(test)]
mod tests;
