//! The count sense: lines of a cup counter become count runs.

use proptest::prelude::*;
use tarecup_core::sense::count::Count;
use tarecup_core::sense::{CountLimits, CountRun, EndedBy, Happening, InputNo};
use tarecup_core::signal::Signal::{self, Drop, End, NotReady, Total};
use tarecup_core::stamp::{Boot, Stamp};

fn ms(at: i64) -> Stamp {
    Stamp { utc_us: 1_772_000_000_000_000 + at * 1_000, mono_us: at * 1_000, boot: Boot(1) }
}

/// What comes to the sense.
#[derive(Clone, Debug, PartialEq)]
enum Event {
    Line(Signal),
    Lost(&'static str),
    Open,
}
use Event::{Line, Lost, Open};

/// An event and its time, milliseconds.
type Timed = (i64, Event);

fn step(sense: &mut Count, no: InputNo, at: Stamp, event: &Event) -> Vec<Happening> {
    match event {
        Line(signal) => sense.hear(signal, no, at).into_iter().flatten().collect(),
        Lost(why) => {
            let over = sense.tick(at);
            sense.interrupted(why);
            over.into_iter().collect()
        }
        Open => {
            sense.listening(at);
            vec![]
        }
    }
}

/// Feeds events as inputs numbered from 1, then lets a minute pass.
fn feed(events: &[Timed]) -> Vec<Happening> {
    let mut sense = Count::new(CountLimits::default());
    let mut happened: Vec<_> = (1..).zip(events).flat_map(|(no, (at, e))| step(&mut sense, no, ms(*at), e)).collect();
    let last = events.last().map_or(0, |(at, _)| *at);
    happened.extend(sense.tick(ms(last + 60_000)));
    happened
}

fn runs(happened: &[Happening]) -> Vec<CountRun> {
    happened.iter().filter_map(|h| if let Happening::CountEnded(run) = h { Some(run.clone()) } else { None }).collect()
}

fn shown(happened: &[Happening]) -> Vec<u32> {
    happened.iter().filter_map(|h| if let Happening::Drops { drops, .. } = h { Some(*drops) } else { None }).collect()
}

/// A run, short: drops, heard, gaps, doubles, how it ended, interrupted or not.
fn short(run: &CountRun) -> String {
    let how = match run.ended_by {
        EndedBy::EndLine => "end",
        EndedBy::Pause => "pause",
        EndedBy::Restart => "restart",
    };
    let cut = if run.interrupted.is_some() { " cut" } else { "" };
    format!("{} h{} g{} d{} {how}{cut}", run.drops, run.heard, run.gaps, run.doubles)
}

/// `n` signals, one every half second from `from` on.
fn drops(n: i64, from: i64) -> Vec<Timed> {
    (0..n).map(|i| (from + i * 500, Line(Drop))).collect()
}
fn totals(numbers: impl IntoIterator<Item = u32>, from: i64) -> Vec<Timed> {
    numbers.into_iter().enumerate().map(|(i, n)| (from + i as i64 * 500, Line(Total(n)))).collect()
}
fn at(ms: i64, signal: Signal) -> Vec<Timed> {
    vec![(ms, Line(signal))]
}

/// What a row is about, its events, the runs it must give.
type Row = (&'static str, Vec<Vec<Timed>>, Vec<&'static str>);

fn check(table: Vec<Row>) {
    for (name, parts, want) in table {
        let got: Vec<_> = runs(&feed(&parts.concat())).iter().map(short).collect();
        assert_eq!(got, want, "{name}");
    }
}

#[test]
fn unnumbered_drops() {
    check(vec![
        ("control: ended by its line", vec![drops(25, 0), at(12_300, End(None))], vec!["25 h25 g0 d0 end"]),
        ("ended by the pause", vec![drops(25, 0)], vec!["25 h25 g0 d0 pause"]),
        ("a drop just before the pause goes on", vec![drops(5, 0), drops(5, 6_999)], vec!["10 h10 g1 d0 pause"]),
        (
            "a drop at the pause is the next run's",
            vec![drops(5, 0), drops(4, 7_000)],
            vec!["5 h5 g0 d0 pause", "4 h4 g0 d0 pause"],
        ),
        ("a bounce is a double", vec![drops(5, 0), at(2_149, Drop), drops(5, 2_500)], vec!["10 h10 g0 d1 pause"]),
        ("at the debounce it is a drop", vec![drops(5, 0), at(2_150, Drop), drops(5, 2_500)], vec!["11 h11 g0 d0 pause"]),
        (
            "a bounce after the end line is no run",
            vec![drops(5, 0), at(2_050, End(None)), at(2_140, Drop)],
            vec!["5 h5 g0 d0 end"],
        ),
        ("a missed drop is a gap", vec![drops(10, 0), drops(10, 5_500)], vec!["20 h20 g1 d0 pause"]),
        ("the final count agrees", vec![drops(10, 0), at(4_700, End(Some(10)))], vec!["10 h10 g0 d0 end"]),
        ("the final count is higher", vec![drops(10, 0), at(4_700, End(Some(12)))], vec!["12 h10 g2 d0 end"]),
        (
            "one missed drop is not noted twice",
            vec![drops(5, 0), drops(5, 3_000), at(5_200, End(Some(11)))],
            vec!["11 h10 g1 d0 end"],
        ),
        ("the final count is lower", vec![drops(10, 0), at(4_700, End(Some(9)))], vec!["9 h10 g0 d1 end"]),
        ("set back before it spoke", vec![drops(10, 0), at(4_700, End(Some(0)))], vec!["10 h10 g0 d0 end"]),
        ("another signal is nothing", vec![drops(3, 0), at(1_100, NotReady), drops(3, 1_500)], vec!["6 h6 g0 d0 pause"]),
        ("nothing at all", vec![], vec![]),
    ]);
}

#[test]
fn running_totals() {
    check(vec![
        ("control", vec![totals(1..=25, 0)], vec!["25 h25 g0 d0 pause"]),
        ("a repeat is a double", vec![totals([1, 2, 2, 3], 0)], vec!["3 h3 g0 d1 pause"]),
        ("skipped numbers are gaps", vec![totals([1, 2, 5, 6], 0)], vec!["6 h4 g2 d0 pause"]),
        ("missed beginning", vec![totals([4, 5, 6], 0)], vec!["6 h3 g3 d0 pause"]),
        ("long intervals are no gaps", vec![totals(1..=5, 0), totals(6..=9, 4_500)], vec!["9 h9 g0 d0 pause"]),
        ("one again: restart", vec![totals(1..=7, 0), totals(1..=3, 3_500)], vec!["7 h7 g0 d0 restart", "3 h3 g0 d0 pause"]),
        ("lower: restart", vec![totals(1..=7, 0), totals([3, 4], 3_500)], vec!["7 h7 g0 d0 restart", "4 h2 g2 d0 pause"]),
        ("zero ends the run", vec![totals(1..=7, 0), totals([0, 1, 2], 3_500)], vec!["7 h7 g0 d0 restart", "2 h2 g0 d0 pause"]),
        ("zero without a run is nothing", vec![totals([0, 0, 0], 0)], vec![]),
        ("final count agrees", vec![totals(1..=7, 0), at(3_200, End(Some(7)))], vec!["7 h7 g0 d0 end"]),
        ("the last number was lost", vec![totals(1..=7, 0), at(3_200, End(Some(8)))], vec!["8 h7 g1 d0 end"]),
        ("the largest number", vec![totals([u32::MAX - 1, u32::MAX, u32::MAX], 0)], vec!["4294967295 h2 g4294967293 d1 pause"]),
        ("beyond the largest", vec![totals([u32::MAX], 0), at(500, Drop)], vec!["4294967295 h2 g4294967294 d0 pause"]),
        (
            "each drop told both ways",
            vec![(0..6).flat_map(|i| [(i * 500, Line(Drop)), (i * 500 + 5, Line(Total(i as u32 + 1)))]).collect()],
            vec!["6 h6 g0 d0 pause"],
        ),
    ]);
}

#[test]
fn ends_without_and_after_a_run() {
    check(vec![
        ("only the final count", vec![at(0, End(Some(25)))], vec!["25 h0 g0 d0 end"]),
        ("an end of nothing", vec![at(0, End(None)), at(10, End(Some(0)))], vec![]),
        ("said again at once", vec![at(0, End(Some(25))), at(300, End(Some(25)))], vec!["25 h0 g0 d0 end"]),
        (
            "the same count a minute later is another run",
            vec![at(0, End(Some(25))), at(60_000, End(Some(25)))],
            vec!["25 h0 g0 d0 end"; 2],
        ),
        ("late end line, same count", vec![drops(10, 0), at(12_000, End(Some(10)))], vec!["10 h10 g0 d0 pause"]),
        ("late end line without count", vec![drops(10, 0), at(12_000, End(None))], vec!["10 h10 g0 d0 pause"]),
        (
            "late end line, one more",
            vec![drops(10, 0), at(12_000, End(Some(11)))],
            vec!["10 h10 g0 d0 pause", "11 h10 g1 d0 end"],
        ),
        ("late end line, one fewer", vec![drops(10, 0), at(12_000, End(Some(9)))], vec!["10 h10 g0 d0 pause", "9 h10 g0 d1 end"]),
        (
            "much later it is another run",
            vec![drops(10, 0), at(60_000, End(Some(10)))],
            vec!["10 h10 g0 d0 pause", "10 h0 g0 d0 end"],
        ),
        (
            "numbers skipped and then a late end line",
            vec![totals([1, 2, 5], 0), at(7_000, End(Some(6)))],
            vec!["5 h3 g2 d0 pause", "6 h3 g3 d0 end"],
        ),
        (
            "an end line belongs to the run under way",
            vec![drops(10, 0), drops(4, 10_000), at(11_700, End(Some(4)))],
            vec!["10 h10 g0 d0 pause", "4 h4 g0 d0 end"],
        ),
    ]);
}

#[test]
fn totals_after_a_run() {
    check(vec![
        ("a polled counter stands still", vec![totals(1..=7, 0), totals([7; 90], 3_500)], vec!["7 h7 g0 d9 pause"]),
        (
            "and is told off its end line",
            vec![totals(1..=7, 0), at(3_200, End(Some(7))), totals([7; 90], 3_500)],
            vec!["7 h7 g0 d0 end"],
        ),
        (
            "the motor stopped and went on",
            vec![totals(1..=7, 0), totals(8..=10, 20_000)],
            vec!["7 h7 g0 d0 pause", "10 h3 g1 d0 pause"],
        ),
        ("the next run", vec![totals(1..=7, 0), totals(1..=3, 20_000)], vec!["7 h7 g0 d0 pause", "3 h3 g0 d0 pause"]),
        ("the same length again", vec![totals(1..=3, 0), totals(1..=3, 20_000)], vec!["3 h3 g0 d0 pause"; 2]),
        (
            "one drop to try the cup, then a run",
            vec![totals([1], 0), totals(1..=3, 20_000)],
            vec!["1 h1 g0 d0 pause", "3 h3 g0 d0 pause"],
        ),
        ("one drop, polled", vec![totals([1; 90], 0)], vec!["1 h1 g0 d9 pause"]),
        (
            "set to zero, the same number is a new run",
            vec![totals(1..=7, 0), totals([0, 7], 20_000)],
            vec!["7 h7 g0 d0 pause", "7 h1 g6 d0 pause"],
        ),
    ]);
}

#[test]
fn a_run_is_never_silently_short() {
    let lost = |ms| vec![(ms, Lost("port lost"))];
    let open = |ms| vec![(ms, Open)];
    check(vec![
        ("control: not interrupted", vec![drops(5, 0), drops(5, 2_500)], vec!["10 h10 g0 d0 pause"]),
        ("drops", vec![drops(5, 0), lost(2_100), drops(5, 4_500)], vec!["10 h10 g0 d0 pause cut"]),
        (
            "drops, then an end line",
            vec![drops(5, 0), lost(2_100), drops(5, 4_500), at(6_600, End(None))],
            vec!["10 h10 g0 d0 end cut"],
        ),
        (
            "a final count covers",
            vec![drops(5, 0), lost(2_100), drops(5, 4_500), at(6_600, End(Some(14)))],
            vec!["14 h10 g0 d0 end"],
        ),
        ("a lower final count does not", vec![drops(5, 0), lost(2_100), at(4_000, End(Some(3)))], vec!["3 h5 g0 d0 end cut"]),
        ("a running total covers", vec![totals(1..=5, 0), lost(2_100), totals(9..=12, 4_000)], vec!["12 h9 g0 d0 pause"]),
        ("the same total covers", vec![totals(1..=5, 0), lost(2_100), totals([5], 4_000)], vec!["5 h5 g0 d0 pause"]),
        ("control: without the loss they are gaps", vec![totals(1..=5, 0), totals(9..=12, 4_000)], vec!["12 h9 g3 d0 pause"]),
        (
            "a lower total does not",
            vec![totals(1..=5, 0), lost(2_100), totals(1..=2, 4_000)],
            vec!["5 h5 g0 d0 restart cut", "2 h2 g0 d0 pause"],
        ),
        ("lost and never back", vec![totals(1..=5, 0), lost(2_100)], vec!["5 h5 g0 d0 pause cut"]),
        ("lost between runs", vec![drops(5, 0), lost(20_000), drops(5, 30_000)], vec!["5 h5 g0 d0 pause"; 2]),
        (
            "away longer than the pause, then a higher total",
            vec![totals(1..=5, 0), lost(2_100), totals(20..=22, 60_000)],
            vec!["5 h5 g0 d0 pause cut", "22 h3 g0 d0 pause"],
        ),
        (
            "away longer than the pause, then a final count",
            vec![drops(5, 0), lost(2_100), at(9_000, End(Some(5)))],
            vec!["5 h5 g0 d0 pause cut", "5 h5 g0 d0 end"],
        ),
        (
            "open again: the pause begins anew",
            vec![totals(1..=5, 0), lost(2_100), open(6_000), totals(20..=22, 10_000)],
            vec!["22 h8 g0 d0 pause"],
        ),
        ("drops right after opening may have begun unheard", vec![open(0), drops(5, 4_999)], vec!["5 h5 g0 d0 pause cut"]),
        ("later they have not", vec![open(0), drops(5, 5_000)], vec!["5 h5 g0 d0 pause"]),
        (
            "held back for two seconds and read at once",
            vec![drops(5, 0), at(4_100, Drop), at(4_100, Drop), at(4_100, Drop), at(4_100, Drop)],
            vec!["6 h6 g1 d3 pause cut"],
        ),
        ("control: a bounce in its own moment", vec![drops(5, 0), at(2_000, Drop)], vec!["5 h5 g0 d1 pause"]),
        (
            "held back, but the final count covers",
            vec![drops(5, 0), at(4_100, Drop), at(4_100, Drop), at(4_600, End(Some(9)))],
            vec!["9 h6 g1 d1 end"],
        ),
        ("a total right after opening is whole", vec![open(0), totals(20..=22, 400)], vec!["22 h3 g0 d0 pause"]),
        ("the final count makes them whole", vec![open(0), drops(5, 400), at(2_600, End(Some(9)))], vec!["9 h5 g0 d0 end"]),
    ]);
    let events = [drops(2, 0), lost(600), vec![(700, Lost("service stopped"))]].concat();
    assert_eq!(runs(&feed(&events))[0].interrupted.as_deref(), Some("port lost"), "the first reason stays");
}

#[test]
fn the_rate_is_that_of_the_intervals() {
    let rate = |events: Vec<Vec<Timed>>| runs(&feed(&events.concat())).pop().and_then(|run| run.rate_per_s);
    let lost = || vec![(2_100, Lost("port lost"))];
    for (name, events, want) in [
        ("two a second", vec![drops(25, 0)], Some(2.0)),
        ("the wait for the end line is no part of it", vec![drops(25, 0), at(16_000, End(None))], Some(2.0)),
        ("a double is no drop", vec![drops(5, 0), at(2_100, Drop), drops(5, 2_500)], Some(2.0)),
        ("numbers missed are drops", vec![totals([1, 2], 0), totals([5, 6], 2_000)], Some(2.0)),
        ("a missed beginning has no time", vec![totals(4..=8, 0)], Some(2.0)),
        ("one drop", vec![drops(1, 0)], None),
        ("no time between", vec![totals([1], 0), totals([2], 0)], None),
        ("only the final count", vec![at(0, End(Some(25)))], None),
        ("interrupted", vec![drops(5, 0), lost(), drops(5, 4_500)], None),
        (
            "interrupted, final count known: drops missing inside",
            vec![drops(5, 0), lost(), drops(5, 4_500), at(6_600, End(Some(14)))],
            None,
        ),
        ("interrupted, numbers known on both sides", vec![totals(1..=5, 0), lost(), totals(9..=12, 4_000)], Some(2.0)),
    ] {
        assert_eq!(rate(events), want, "{name}");
    }
    // ASTM D4318 asks for 1.9 to 2.1 drops per second (figures from memory of
    // its public summaries): cranks just inside and outside are told apart.
    for (every_ms, inside) in [(477, true), (526, true), (475, false), (527, false)] {
        let events = (0..25).map(|i| (i * every_ms, Line(Drop))).collect();
        let got = rate(vec![events]).unwrap();
        assert_eq!((1.9..=2.1).contains(&got), inside, "{every_ms} ms: {got}");
    }
}

#[test]
fn a_run_says_what_it_rests_on() {
    let events = [totals([0], 0), drops(3, 1_000), at(2_900, End(None))].concat();
    let want = CountRun {
        drops: 3,
        rate_per_s: Some(2.0),
        duration_us: 1_000_000,
        gaps: 0,
        doubles: 0,
        heard: 3,
        ended_by: EndedBy::EndLine,
        interrupted: None,
        first_input: 2,
        last_input: 5,
        began: ms(1_000),
        at: ms(2_900),
    };
    let happened = feed(&events);
    assert_eq!(runs(&happened), [want]);
    assert_eq!(shown(&happened), [1, 2, 3]);
    let Happening::Drops { rate_per_s, at, .. } = &happened[2] else { panic!("{happened:?}") };
    assert_eq!((*rate_per_s, *at), (Some(2.0), ms(2_000)));
    // A run over by its pause was over at its last drop.
    assert_eq!(runs(&feed(&drops(3, 1_000)))[0].at, ms(2_000));
}

#[test]
fn the_deadline_is_the_end_of_the_pause() {
    let mut sense = Count::new(CountLimits::default());
    assert_eq!((sense.deadline(), sense.tick(ms(99_000))), (None, None));
    sense.hear(&Drop, 1, ms(1_000));
    sense.hear(&Drop, 2, ms(1_100)); // a double does not prolong the run
    assert_eq!(sense.deadline(), Some(ms(6_000)));
    assert_eq!(sense.tick(ms(5_999)), None);
    assert!(matches!(sense.tick(ms(6_000)), Some(Happening::CountEnded(run)) if run.drops == 1));
    assert_eq!((sense.deadline(), sense.tick(ms(6_001))), (None, None));
}

#[test]
fn across_a_start_of_the_machine_wall_time_counts() {
    let other = |at: i64| Stamp { mono_us: 7, boot: Boot(2), ..ms(at) };
    let mut sense = Count::new(CountLimits::default());
    sense.hear(&Total(1), 1, ms(0));
    sense.interrupted("the machine was started anew");
    assert_eq!(sense.tick(other(4_999)), None);
    sense.hear(&Total(5), 2, other(4_000));
    let Some(Happening::CountEnded(run)) = sense.tick(other(9_000).plus_us(60_000_000)) else { panic!("no run") };
    assert_eq!((run.drops, run.rate_per_s, run.duration_us, run.interrupted), (5, None, 4_000_000, None));
}

#[test]
fn a_polled_total_said_again_is_neither_a_double_nor_a_run() {
    let day = |polled: bool| {
        let mut sense = Count::new(CountLimits { polled, ..CountLimits::default() });
        // A run of one drop, then one of three: each number asked for five times a drop.
        let totals = [1; 60].into_iter().chain([0; 5]).chain([1, 2, 3].into_iter().flat_map(|n| [n; 5])).chain([3; 60]);
        let mut happened = Vec::new();
        for (no, n) in totals.enumerate() {
            happened.extend(sense.hear(&Total(n), no as u64, ms(no as i64 * 100)).into_iter().flatten());
        }
        runs(&happened).iter().map(|r| (r.drops, r.gaps, r.doubles)).collect::<Vec<_>>()
    };
    assert_eq!(day(true), [(1, 0, 0), (3, 0, 0)]);
    // The control: without the word that it is polled, the same lines are doubles.
    assert!(day(false).iter().all(|(_, _, doubles)| *doubles > 0));
}

fn any_event() -> impl Strategy<Value = Event> {
    prop_oneof![
        8 => Just(Line(Drop)),
        8 => (0u32..9).prop_map(|n| Line(Total(n))),
        1 => prop_oneof![Just(u32::MAX), Just(u32::MAX - 1)].prop_map(|n| Line(Total(n))),
        2 => prop::option::of(prop_oneof![0u32..9, Just(u32::MAX)]).prop_map(|n| Line(End(n))),
        1 => Just(Line(NotReady)),
        1 => Just(Lost("port lost")),
        1 => Just(Open),
    ]
}

/// Events in order of time, some close, some a pause apart.
fn any_day() -> impl Strategy<Value = Vec<Timed>> {
    let wait = prop_oneof![6 => 400i64..600, 2 => 0i64..200, 1 => 4_000i64..30_000];
    prop::collection::vec((wait, any_event()), 0..80).prop_map(|day| {
        let mut now = 0;
        day.into_iter()
            .map(|(wait, event)| {
                now += wait;
                (now, event)
            })
            .collect()
    })
}

proptest! {
    /// After a restart, the last run told and the lines after it make the same sense.
    #[test]
    fn the_run_under_way_is_made_again_from_its_lines(day in any_day()) {
        let limits = CountLimits::default();
        let mut sense = Count::new(limits);
        let mut last: Option<CountRun> = None;
        for (i, (at, event)) in day.iter().enumerate() {
            let happened = step(&mut sense, i as u64 + 1, ms(*at), event);
            last = runs(&happened).pop().or(last);
            let from = last.as_ref().map_or(0, |run| run.last_input as usize);
            let mut again = Count::resume(limits, last.as_ref());
            for (j, (at, event)) in day.iter().enumerate().take(i + 1).skip(from) {
                step(&mut again, j as u64 + 1, ms(*at), event);
            }
            prop_assert_eq!(&again, &sense);
        }
    }

    /// Whether the timer was punctual makes no difference.
    #[test]
    fn a_late_timer_changes_nothing(day in any_day()) {
        let limits = CountLimits::default();
        let (mut late, mut punctual) = (Count::new(limits), Count::new(limits));
        let (mut a, mut b) = (vec![], vec![]);
        for (i, (at, event)) in day.iter().enumerate() {
            // Opening a port gives an interrupted run time, so whoever opens it ticks first.
            if *event == Open {
                a.extend(late.tick(ms(*at)));
            }
            if let Some(due) = punctual.deadline().filter(|due| due.mono_us <= at * 1_000) {
                b.extend(punctual.tick(due));
            }
            a.extend(step(&mut late, i as u64 + 1, ms(*at), event));
            b.extend(step(&mut punctual, i as u64 + 1, ms(*at), event));
        }
        prop_assert_eq!(a, b);
        prop_assert_eq!(late, punctual);
    }

    /// Model: runs of one dialect, each line perhaps heard twice, each perhaps
    /// with a final count. Every run comes out once with its count.
    #[test]
    fn every_run_comes_out_once(
        day in prop::collection::vec((2u32..60, any::<bool>(), prop::collection::vec(any::<bool>(), 60)), 1..8), numbered: bool,
    ) {
        let (mut events, mut want, mut now) = (vec![], vec![], 0i64);
        for (n, ends, twice) in &day {
            for i in 1..=*n {
                let line = Line(if numbered { Total(i) } else { Drop });
                events.push((now, line.clone()));
                if twice[i as usize - 1] {
                    events.push((now + 20, line));
                }
                now += 490;
            }
            if *ends {
                events.push((now, Line(End(Some(*n)))));
            }
            let doubles = twice.iter().take(*n as usize).filter(|t| **t).count() as u32;
            want.push((*n, *n, 0, doubles));
            now += 30_000;
        }
        let got: Vec<_> = runs(&feed(&events)).iter().map(|r| (r.drops, r.heard, r.gaps, r.doubles)).collect();
        prop_assert_eq!(got, want);
    }

    /// Any events, stamps and limits are answered, and counts stay sensible.
    #[test]
    fn any_stream_is_answered(
        day in prop::collection::vec((any_event(), prop_oneof![0i64..20_000_000, any::<i64>(), Just(i64::MIN), Just(i64::MAX)], 0u32..3), 0..100),
        limits in (prop_oneof![Just(0), Just(150), any::<u32>()], prop_oneof![Just(0), Just(5_000), any::<u32>()], any::<u32>()),
    ) {
        let limits = CountLimits { debounce_ms: limits.0, pause_ms: limits.1, gap_percent: limits.2, polled: day.len() % 2 == 0 };
        let mut sense = Count::new(limits);
        for (no, (event, us, boot)) in day.iter().enumerate() {
            let at = Stamp { utc_us: *us, mono_us: us.rotate_left(7), boot: Boot(*boot) };
            for run in runs(&step(&mut sense, no as u64, at, event)) {
                prop_assert!(run.drops > 0 && run.duration_us >= 0 && run.first_input <= run.last_input);
                prop_assert!(run.rate_per_s.is_none_or(|r| r.is_finite() && r > 0.0));
            }
            let _ = sense.deadline();
            let _ = sense.tick(Stamp { mono_us: i64::MIN, ..at });
        }
    }
}
