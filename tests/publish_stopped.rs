//! A broker that is stopped in its tracks, in a program of its own: memory is measured for the whole process.

mod publish_support;

use std::sync::atomic::Ordering;
use std::time::{Duration, Instant};

use bytes::Bytes;
use publish_support::{Bench, Ledger, Mosquitto, Reader, faults, resident, topic, until};
use rustix::process::Signal;
use tarecup::publish::{Live, Outgoing};

const WINDOW: u64 = 16;
const SECOND: Duration = Duration::from_secs(1);

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_stopped_broker_costs_neither_memory_nor_waiting() {
    let broker = Mosquitto::open("").await;
    let reader = Reader::on(broker.port, "tarecup/#").await;
    let ledger = Ledger::new(0, 4_000);
    let bench = Bench::at(broker.port, &ledger);
    ledger.add(&bench.courier);
    bench.delivered(1, 5 * SECOND).await;
    broker.signal(Signal::STOP);
    let before = resident();
    let (mut slowest, start) = (Duration::ZERO, Instant::now());
    for n in 0..30_000 {
        let began = Instant::now();
        ledger.add(&bench.courier);
        let payload = Bytes::from(vec![b'x'; 1_000]);
        let live = if n % 2 == 0 {
            Live::Each { topic: topic("live/cup-1"), payload }
        } else {
            Live::Newest { topic: topic("live/pan-1"), payload }
        };
        bench.courier.send(Outgoing {
            live: vec![live],
            retained: vec![(topic("head"), Some(ledger.fact(n)))],
            ..Outgoing::default()
        });
        slowest = slowest.max(began.elapsed());
    }
    let (took, grown) = (start.elapsed(), resident().saturating_sub(before));
    // All of it would be 150 MB.
    assert!(grown < 48 * 1024 * 1024, "memory grew by {grown} bytes");
    assert!(took < 10 * SECOND && slowest < SECOND, "90,000 messages took {took:?}, the slowest pair {slowest:?}");
    broker.signal(Signal::CONT);
    bench.delivered(30_001, 60 * SECOND).await;
    until("the last fact", 5 * SECOND, || reader.seqs().last() == Some(&30_001)).await;
    assert_eq!(faults(&reader.seqs(), 1, 30_001, WINDOW), Vec::<String>::new());
    assert!(ledger.reads.load(Ordering::SeqCst) > 100, "what memory dropped came from the ledger");
    until("the newest head", 5 * SECOND, || reader.last("head").is_some_and(|h| h.starts_with("{\"seq\":29999,"))).await;
    let heads = reader.all().iter().filter(|g| g.topic == topic("head")).count();
    assert!(heads < 20, "{heads} of 30,000 payloads of one retained topic were sent");
    eprintln!("stopped broker: memory grew {} kB, a send took {:?} on average, {slowest:?} at most", grown / 1024, took / 60_000);
}
