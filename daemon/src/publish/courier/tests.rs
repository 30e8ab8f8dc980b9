//! The courier against a played connection: answers that no real broker can be made to give on command.

use std::sync::Mutex;

use tokio::sync::mpsc::{UnboundedReceiver, UnboundedSender, unbounded_channel};

use super::*;
use crate::publish::transport::Message;

/// What the courier did on the connection with this number.
#[derive(Debug)]
enum Did {
    Published(Message),
    Subscribed(String),
    Parted,
}

type Script = UnboundedSender<Result<Happening, Lost>>;

/// Hands each new connection to the test: its script goes in, what the courier does comes out.
struct Played {
    opened: UnboundedSender<(Script, UnboundedReceiver<Did>)>,
}

struct PlayedOutlet(UnboundedSender<Did>);
struct PlayedInlet(UnboundedReceiver<Result<Happening, Lost>>);

impl Transport for Played {
    type Outlet = PlayedOutlet;
    type Inlet = PlayedInlet;
    fn open(&self) -> (PlayedOutlet, PlayedInlet) {
        let (script, happenings) = unbounded_channel();
        let (did, done) = unbounded_channel();
        let _ = self.opened.send((script, done));
        (PlayedOutlet(did), PlayedInlet(happenings))
    }
}

impl Outlet for PlayedOutlet {
    fn publish(&self, message: Message) -> Result<(), ()> {
        self.0.send(Did::Published(message)).map_err(|_| ())
    }
    fn subscribe(&self, topic: &str) -> Result<(), ()> {
        self.0.send(Did::Subscribed(topic.to_owned())).map_err(|_| ())
    }
    fn part(&self) -> Result<(), ()> {
        self.0.send(Did::Parted).map_err(|_| ())
    }
}

impl Inlet for PlayedInlet {
    async fn next(&mut self) -> Result<Happening, Lost> {
        self.0.recv().await.unwrap_or_else(|| Err(lost(false)))
    }
    fn leftovers(&mut self) -> Vec<Happening> {
        std::iter::from_fn(|| self.0.try_recv().ok()).filter_map(Result::ok).collect()
    }
}

fn lost(too_large: bool) -> Lost {
    Lost { why: "played".into(), too_large }
}

struct Empty;
impl Past for Empty {
    fn facts_after(&self, _: u64, _: usize) -> Result<Vec<(u64, Bytes)>, String> {
        Ok(Vec::new())
    }
}

struct Unreadable;
impl Past for Unreadable {
    fn facts_after(&self, _: u64, _: usize) -> Result<Vec<(u64, Bytes)>, String> {
        Err("the file is locked".into())
    }
}

struct Stage {
    courier: Courier,
    opened: UnboundedReceiver<(Script, UnboundedReceiver<Did>)>,
    told: Arc<Mutex<Vec<CourierEvent>>>,
}

fn stage(past: Arc<dyn Past>, asks: bool) -> Stage {
    let (opened, receiver) = unbounded_channel();
    let told: Arc<Mutex<Vec<CourierEvent>>> = Arc::default();
    let sink = Arc::clone(&told);
    let mut settings = CourierSettings::new("played", 1, "r", "s");
    settings.asks = asks;
    let tell: OnEvent = Arc::new(move |event| sink.lock().expect("events").push(event));
    let courier = spawn_on(&Handle::current(), Played { opened }, settings, past, 0, tell);
    Stage { courier, opened: receiver, told }
}

impl Stage {
    /// The next connection, accepted with this window and packet size.
    async fn accepted(&mut self, receive_max: usize) -> (Script, UnboundedReceiver<Did>) {
        let (script, done) = self.opened.recv().await.expect("a connection");
        script.send(Ok(Happening::Up { max_packet: 100_000, receive_max })).expect("played");
        (script, done)
    }

    fn facts(&self, sizes: &[(u64, usize)]) {
        let facts = sizes.iter().map(|(seq, size)| (*seq, Bytes::from(vec![b'x'; *size]))).collect();
        self.courier.send(Outgoing { facts, ..Outgoing::default() });
    }

    fn told(&self) -> Vec<CourierEvent> {
        self.told.lock().expect("events").clone()
    }
}

async fn published(done: &mut UnboundedReceiver<Did>) -> Message {
    let did = tokio::time::timeout(Duration::from_secs(10), done.recv()).await.expect("in time").expect("open");
    match did {
        Did::Published(message) => message,
        other => panic!("expected a publication, got {other:?}"),
    }
}

async fn settle() {
    tokio::time::sleep(Duration::from_millis(60)).await;
}

#[tokio::test]
async fn answers_out_of_order_and_left_behind_move_the_cursor_only_as_far_as_it_is_true() {
    let mut stage = stage(Arc::new(Empty), false);
    let (script, mut done) = stage.accepted(3).await;
    stage.facts(&[(1, 1), (2, 1), (3, 1), (4, 1)]);
    for id in 1..=3 {
        published(&mut done).await;
        script.send(Ok(Happening::Written(id))).expect("played");
    }
    settle().await;
    assert!(done.try_recv().is_err(), "the broker takes three at a time");
    script.send(Ok(Happening::Answered(3, Ok(())))).expect("played");
    script.send(Ok(Happening::Answered(99, Ok(())))).expect("played");
    settle().await;
    assert!(done.try_recv().is_err(), "a resend never steps back by more than the window");
    assert_eq!(stage.courier.delivered_through(), 0);
    // The first answer is still in the line when the connection breaks.
    script.send(Err(lost(false))).expect("played");
    script.send(Ok(Happening::Answered(1, Ok(())))).expect("played");
    let (_script, mut done) = stage.accepted(16).await;
    assert_eq!(stage.courier.delivered_through(), 1);
    for _ in 2..=4 {
        published(&mut done).await;
    }
}

#[tokio::test]
async fn a_size_that_the_broker_only_resents_is_learned_and_not_sent_again() {
    let mut stage = stage(Arc::new(Empty), false);
    let (script, mut done) = stage.accepted(16).await;
    stage.facts(&[(1, 10), (2, 50_000), (3, 10)]);
    for id in 1..=3 {
        published(&mut done).await;
        script.send(Ok(Happening::Written(id))).expect("played");
    }
    script.send(Err(lost(true))).expect("played");
    let (_script, mut done) = stage.accepted(16).await;
    assert_eq!(published(&mut done).await.payload.len(), 10);
    assert_eq!(published(&mut done).await.payload.len(), 10);
    settle().await;
    assert!(done.try_recv().is_err());
    assert!(stage.told().iter().any(|e| matches!(e, CourierEvent::TooLarge { what: What::Fact(2), .. })));
}

#[tokio::test]
async fn an_unreadable_ledger_is_told_with_pauses_and_holds_nothing_else_up() {
    let mut stage = stage(Arc::new(Unreadable), true);
    let (_script, mut done) = stage.accepted(16).await;
    assert!(matches!(done.recv().await, Some(Did::Subscribed(topic)) if topic == "r/s/ask"));
    stage.courier.send(Outgoing { retained: vec![("r/s/head".into(), Some(Bytes::from_static(b"h")))], ..Outgoing::default() });
    assert_eq!(published(&mut done).await.topic, "r/s/head");
    stage.facts(&[(1, 1)]);
    assert_eq!(published(&mut done).await.topic, "r/s/fact");
    tokio::time::sleep(Duration::from_millis(500)).await;
    let complaints = stage.told().iter().filter(|e| matches!(e, CourierEvent::PastUnreadable { .. })).count();
    assert_eq!(complaints, 1, "{:?}", stage.told());
}

#[tokio::test]
async fn a_broker_that_answers_nothing_is_left_when_the_time_to_stop_is_over() {
    let mut stage = stage(Arc::new(Empty), false);
    let (_script, mut done) = stage.accepted(16).await;
    stage.facts(&[(1, 1)]);
    published(&mut done).await;
    let start = Instant::now();
    let farewell = stage.courier.stop(Some(Bytes::from_static(b"stopped")), Duration::from_millis(500)).await;
    assert!((400..3_000).contains(&start.elapsed().as_millis()), "{:?}", start.elapsed());
    assert_eq!(farewell, Farewell { delivered_through: 0, complete: false, presence_told: false });
    let mut rest = Vec::new();
    while let Ok(did) = done.try_recv() {
        rest.push(did);
    }
    assert!(matches!(&rest[..], [Did::Published(m)] if m.topic == "r/s/presence"), "the last word was tried: {rest:?}");
}

#[tokio::test]
async fn the_goodbye_waits_for_presence_alone_and_says_when_it_was_refused() {
    for (verdict, told) in [(Ok(()), true), (Err("not authorized".to_owned()), false)] {
        let mut stage = stage(Arc::new(Empty), false);
        let (script, mut done) = stage.accepted(16).await;
        let many = (0..9).map(|n| (format!("r/s/specimen/{n}"), Some(Bytes::from_static(b"open")))).collect();
        stage.courier.send(Outgoing { retained: many, ..Outgoing::default() });
        for id in 1..=3 {
            published(&mut done).await;
            script.send(Ok(Happening::Written(id))).expect("played");
        }
        let played = async {
            let mut id = 3;
            while let Some(did) = done.recv().await {
                id += 1;
                match did {
                    Did::Published(message) => {
                        script.send(Ok(Happening::Written(id))).expect("played");
                        if message.topic == "r/s/presence" {
                            script.send(Ok(Happening::Answered(id, verdict.clone()))).expect("played");
                        } else if id == 4 {
                            script.send(Ok(Happening::Answered(1, Ok(())))).expect("played");
                        }
                    }
                    Did::Parted => script.send(Ok(Happening::Parted)).expect("played"),
                    Did::Subscribed(topic) => panic!("{topic}"),
                }
            }
        };
        let stop = stage.courier.stop(Some(Bytes::from_static(b"stopped")), Duration::from_secs(2));
        let (farewell, ()) = tokio::join!(stop, played);
        assert_eq!((farewell.complete, farewell.presence_told), (false, told));
    }
}

#[tokio::test]
async fn attempts_come_quickly_first_and_then_seldom() {
    let mut stage = stage(Arc::new(Empty), false);
    let start = Instant::now();
    let mut at = Vec::new();
    for _ in 0..5 {
        let (script, _done) = stage.opened.recv().await.expect("an attempt");
        at.push(start.elapsed());
        script.send(Err(lost(false))).expect("played");
    }
    assert!(at[1] < Duration::from_millis(1_500), "{at:?}");
    assert!(at[4] > Duration::from_millis(700) && at[4] < Duration::from_secs(10), "{at:?}");
    assert_eq!(stage.told().len(), 1, "the same reason is told once");
}
