//! The built-in broker: what it gives to Mosquitto's own clients, and what it keeps from them.

mod publish_support;

use std::time::Duration;

use bytes::Bytes;
use publish_support::{Bench, Ledger, ROOT, Reader, STATION, latency, run, topic, until};
use tarecup::publish::broker::{BrokerFault, BrokerSettings, BuiltIn, start};
use tarecup::publish::{ASK_MAX, Answer, CourierEvent, CourierSettings, Outgoing};

const SECOND: Duration = Duration::from_secs(1);

async fn built_in(asks: bool) -> (BuiltIn, Bench, std::sync::Arc<Ledger>) {
    let mut settings = CourierSettings::new("127.0.0.1", 1, ROOT, STATION);
    settings.asks = asks;
    let broker =
        start(BrokerSettings::for_courier("127.0.0.1:0".parse().expect("an address"), &settings)).await.expect("started");
    broker.admit(&mut settings);
    let ledger = Ledger::new(0, 0);
    let bench = Bench::new(settings, &ledger, 0);
    until("connected", 5 * SECOND, || bench.connects() == 1).await;
    (broker, bench, ledger)
}

/// Runs one of Mosquitto's clients against the broker, off the runtime's threads.
async fn client(broker: &BuiltIn, program: &'static str, arguments: &[&str]) -> String {
    let port = broker.address().port().to_string();
    let mut all = vec!["-h".to_owned(), "127.0.0.1".to_owned(), "-p".to_owned(), port];
    all.extend(arguments.iter().map(|a| (*a).to_owned()));
    tokio::task::spawn_blocking(move || run(program, &all.iter().map(String::as_str).collect::<Vec<_>>())).await.expect("ran")
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn subscribers_of_both_versions_get_retained_topics_and_facts() {
    let (broker, bench, ledger) = built_in(false).await;
    bench.retain("specimen/S-101", "open");
    bench.retain("specimen/S-102", "to be cleared");
    until("retained", 5 * SECOND, || !bench.told().is_empty()).await;
    bench.retain("specimen/S-102", "");
    for version in ["311", "5"] {
        let first = ledger.head.load(std::sync::atomic::Ordering::SeqCst) + 1;
        let all = topic("#");
        let arguments = ["-V", version, "-q", "1", "-t", &all, "-F", "%t %r %p", "-C", "4", "-W", "10"];
        let (seen, ()) = tokio::join!(client(&broker, "mosquitto_sub", &arguments), async {
            tokio::time::sleep(SECOND).await;
            for _ in 0..3 {
                ledger.add(&bench.courier);
            }
        });
        let facts = (first..first + 3).map(|n| format!("{} 0 {{\"seq\":{n},\"pad\":\"\"}}\n", topic("fact")));
        let wanted = format!("{} 1 open\n{}", topic("specimen/S-101"), facts.collect::<String>());
        assert_eq!(seen, wanted, "version {version}");
    }
    bench.delivered(6, 5 * SECOND).await;
    broker.stop().await;
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn nobody_else_publishes_under_the_station() {
    let (broker, bench, ledger) = built_in(false).await;
    let reader = Reader::on(broker.address().port(), "#").await;
    let (fact, ask, elsewhere) = (topic("fact"), topic("ask"), "other/topic".to_owned());
    for target in [&fact, &ask, &elsewhere] {
        let said = client(&broker, "mosquitto_pub", &["-V", "5", "-q", "1", "-r", "-t", target, "-m", "forged"]).await;
        assert!(said.contains("Not authorized"), "{target}: {said}");
    }
    // The service's name without its secret, and its client identifier without its name.
    for (arguments, reason) in
        [(["-u", "tarecup-service", "-P", "guess"], "password"), (["-i", "tarecup-wet-room", "-r", "-d"], "identifier")]
    {
        let said =
            client(&broker, "mosquitto_pub", &[&arguments[..], &["-V", "5", "-q", "1", "-t", &fact, "-m", "forged"]].concat())
                .await;
        assert!(said.to_lowercase().contains(reason), "{arguments:?}: {said}");
    }
    // A will is a publication too.
    let will = ["-V", "5", "--will-topic", &fact, "--will-payload", "forged", "-t", "#", "-W", "1"];
    client(&broker, "mosquitto_sub", &will).await;
    // Control: the service's own fact arrives, and nothing else did.
    ledger.add(&bench.courier);
    until("the own fact", 5 * SECOND, || !reader.all().is_empty()).await;
    assert_eq!(reader.seqs(), [1]);
    assert_eq!(reader.all().len(), 1);
    assert_eq!(bench.connects(), 1, "the service was not pushed off");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn asks_come_in_when_enabled_and_only_answerable_ones() {
    let (broker, bench, _ledger) = built_in(true).await;
    let reader = Reader::on(broker.address().port(), &topic("answer/#")).await;
    let (ask, answer) = (topic("ask"), topic("answer/screen-1"));
    let publish = |more: Vec<String>, payload: Vec<u8>| {
        let mut arguments = vec!["-V".to_owned(), "5".into(), "-q".into(), "1".into(), "-t".into(), ask.clone()];
        arguments.extend(more);
        let (port, dir) = (broker.address().port().to_string(), tempfile::TempDir::new().expect("a directory"));
        let file = dir.path().join("ask");
        std::fs::write(&file, payload).expect("written");
        arguments.extend(["-p".into(), port, "-f".into(), file.display().to_string()]);
        run("mosquitto_pub", &arguments.iter().map(String::as_str).collect::<Vec<_>>())
    };
    let respond = |to: &str| vec!["-D".to_owned(), "publish".into(), "response-topic".into(), to.into()];
    let ignored = || bench.count(|e| matches!(e, CourierEvent::AskIgnored { .. }));
    let asked = || bench.count(|e| matches!(e, CourierEvent::Asked { .. }));

    publish(Vec::new(), b"no response topic".to_vec());
    until("told once", 5 * SECOND, || ignored() == 1).await;
    publish([respond(&answer), vec!["-r".into()]].concat(), b"retained".to_vec());
    publish(respond("elsewhere/screen-1"), b"foreign".to_vec());
    publish(respond(&topic("answer/a/b")), b"two levels".to_vec());
    publish(respond(&answer), vec![b'['; ASK_MAX + 8_192]);
    tokio::time::sleep(SECOND / 2).await;
    assert_eq!((ignored(), asked()), (1, 0), "ignored ones are told once a connection");

    // Bytes that are no text are handed over as they are: judging them is the desk's business.
    let hostile = [b"\xff\xfe".to_vec(), vec![b'['; 60_000]].concat();
    publish(
        [respond(&answer), vec!["-D".into(), "publish".into(), "correlation-data".into(), "c7".into()]].concat(),
        hostile.clone(),
    );
    until("asked", 5 * SECOND, || asked() == 1).await;
    let expected = CourierEvent::Asked {
        client: "screen-1".into(),
        payload: Bytes::from(hostile),
        correlation: Some(Bytes::from_static(b"c7")),
    };
    assert!(bench.told().contains(&expected));
    assert_eq!(bench.connects(), 1, "nothing hostile broke the connection");

    let answers = ["screen-1", "a/b", "#"].map(|client| Answer {
        client: client.into(),
        payload: Bytes::from_static(b"42"),
        correlation: Some(Bytes::from_static(b"c7")),
    });
    bench.courier.send(Outgoing { answers: answers.to_vec(), ..Outgoing::default() });
    until("answered", 5 * SECOND, || !reader.all().is_empty()).await;
    let got = &reader.all()[0];
    assert_eq!((got.topic.as_str(), got.payload.as_str(), got.correlation.as_deref()), (answer.as_str(), "42", Some(&b"c7"[..])));
    assert_eq!(bench.count(|e| matches!(e, CourierEvent::Refused { .. })), 2, "impossible names are refused");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_taken_address_names_its_holder_and_an_open_one_wants_passwords() {
    let (broker, _bench, _ledger) = built_in(false).await;
    let settings = CourierSettings::new("127.0.0.1", 1, ROOT, STATION);
    let taken = start(BrokerSettings::for_courier(broker.address(), &settings)).await.err().expect("refused");
    assert!(matches!(taken, BrokerFault::InUse { .. }));
    assert!(taken.to_string().contains(&format!("process {}", std::process::id())), "{taken}");

    let mut open = BrokerSettings::for_courier("0.0.0.0:0".parse().expect("an address"), &settings);
    let fault = start(open.clone()).await.err().expect("refused");
    assert!(matches!(fault, BrokerFault::Open(_)) && fault.to_string().contains("password file"), "{fault}");

    let dir = tempfile::TempDir::new().expect("a directory");
    let file = dir.path().join("passwords");
    for bad in ["", "reader\n", "reader:plain\n", "tarecup-service:$argon2id$x\n"] {
        std::fs::write(&file, bad).expect("written");
        open.passwords = Some(file.clone());
        let fault = start(open.clone()).await.err().expect("refused");
        assert!(matches!(fault, BrokerFault::Passwords { .. }), "{bad:?}: {fault}");
    }
    let hash = mqtt5::broker::PasswordAuthProvider::hash_password("sieve").expect("hashed");
    std::fs::write(&file, format!("# readers\nreader:{hash}\n")).expect("written");
    open.address = "127.0.0.1:0".parse().expect("an address");
    let guarded = start(open).await.expect("started");
    let look = |user: &'static str, password: &'static str| {
        let (t, guarded) = (topic("#"), &guarded);
        async move { client(guarded, "mosquitto_sub", &["-V", "5", "-u", user, "-P", password, "-t", &t, "-C", "1", "-W", "1"]).await }
    };
    assert!(look("reader", "wrong").await.to_lowercase().contains("password"));
    assert!(
        client(&guarded, "mosquitto_sub", &["-V", "5", "-t", "#", "-C", "1", "-W", "1"])
            .await
            .to_lowercase()
            .contains("password")
    );
    assert!(look("reader", "sieve").await.contains("Timed out"), "let in, and nothing to read");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_courier_finds_a_restarted_built_in_broker_again() {
    let mut settings = CourierSettings::new("127.0.0.1", 1, ROOT, STATION);
    let mut wanted = BrokerSettings::for_courier("127.0.0.1:0".parse().expect("an address"), &settings);
    let broker = start(wanted.clone()).await.expect("started");
    broker.admit(&mut settings);
    wanted.address = broker.address();
    let ledger = Ledger::new(0, 0);
    let bench = Bench::new(settings, &ledger, 0);
    bench.retain("presence", "up");
    ledger.add(&bench.courier);
    bench.delivered(1, 5 * SECOND).await;
    broker.stop().await;
    until("noticed", 5 * SECOND, || !bench.courier.is_connected()).await;
    // The secret is new at each start: a courier with the old one is told so in words.
    let again = start(wanted).await.expect("started");
    until("told", 8 * SECOND, || {
        bench.count(|e| matches!(e, CourierEvent::Disconnected { why } if why.contains("user or password"))) == 1
    })
    .await;
    again.stop().await;
}

/// Figures only; the bound merely excludes a hidden polling interval.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_fact_passes_the_built_in_broker_promptly() {
    let (broker, bench, ledger) = built_in(false).await;
    let took = latency(broker.address().port(), &bench, &ledger).await;
    eprintln!("send to mosquitto_sub by the built-in broker: p50 {:?}, p99 {:?}, most {:?}", took[500], took[990], took[999]);
    assert!(took[500] < Duration::from_millis(20), "{:?}", took[500]);
}
