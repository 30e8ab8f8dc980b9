//! The settle sense: readings of a balance become masses taken.

use proptest::prelude::*;
use tarecup_core::quantity::Mass;
use tarecup_core::sense::settle::Settle;
use tarecup_core::sense::{Happening, InputNo, LeftOnPan, MassTaken, SettleLimits, Stayed, Talks, Trace, Zero};
use tarecup_core::signal::{Basis, Mark, Reading};
use tarecup_core::stamp::{Boot, Stamp};

const STEP: i64 = 1_000;

fn ms(at: i64) -> Stamp {
    Stamp { utc_us: 1_772_000_000_000_000 + at * 1_000, mono_us: at * 1_000, boot: Boot(1) }
}

fn line(mark: Mark, mg: i64) -> Reading {
    Reading { mass: Mass::from_ug(mg * 1_000), step: Mass::from_ug(STEP), mark, basis: Basis::Unmarked }
}

fn steady(mg: i64) -> Reading {
    line(Mark::Steady, mg)
}
fn moving(mg: i64) -> Reading {
    line(Mark::Moving, mg)
}
fn plain(mg: i64) -> Reading {
    line(Mark::Unmarked, mg)
}
fn times(n: usize, reading: Reading) -> Vec<Reading> {
    vec![reading; n]
}

/// Feeds lines numbered from 1, one every 100 ms.
fn feed(limits: SettleLimits, lines: &[Reading]) -> Vec<Happening> {
    let mut sense = Settle::new(limits);
    feed_from(&mut sense, lines, 1)
}

fn feed_from(sense: &mut Settle, lines: &[Reading], first: InputNo) -> Vec<Happening> {
    (first..).zip(lines).filter_map(|(no, r)| sense.hear(r, no, ms(no as i64 * 100))).collect()
}

/// What happened, short: `T mass@line` or `U@line`.
fn short(happened: &[Happening]) -> Vec<String> {
    happened
        .iter()
        .map(|h| match h {
            Happening::MassTaken(t) => format!("T {}@{}", t.mass.ug() / 1_000, t.input),
            Happening::Unloaded { input, .. } => format!("U@{input}"),
            Happening::LeftOnPan(LeftOnPan { left, zero, .. }) => format!("L {}@{}", left.ug() / 1_000, zero.input),
            other => panic!("a balance cannot tell {other:?}"),
        })
        .collect()
}

fn masses(happened: &[Happening]) -> Vec<MassTaken> {
    happened.iter().filter_map(|h| if let Happening::MassTaken(t) = h { Some(*t) } else { None }).collect()
}

#[test]
fn streams_and_what_they_tell() {
    let table: Vec<(&str, Vec<Reading>, Vec<&str>)> = vec![
        ("control: eight steady lines", times(8, steady(23_457)), vec!["T 23457@8"]),
        ("seven are too few", times(7, steady(23_457)), vec![]),
        ("a placement gives one", times(200, steady(23_457)), vec!["T 23457@8"]),
        (
            "the last line's value, not the mean",
            [times(6, steady(23_457)), vec![steady(23_458), steady(23_459)]].concat(),
            vec!["T 23459@8"],
        ),
        (
            "a line outside the span begins anew",
            [times(7, steady(23_457)), times(8, steady(23_460))].concat(),
            vec!["T 23460@15"],
        ),
        ("creeping further than the span in all is not agreeing", (0..40).map(|i| steady(23_000 + i)).collect(), vec![]),
        (
            "a moving line begins anew",
            [times(7, steady(23_457)), vec![moving(23_457)], times(8, steady(23_457))].concat(),
            vec!["T 23457@16"],
        ),
        (
            "a line without mark among steady ones begins anew",
            [times(7, steady(23_457)), vec![plain(23_457)], times(7, steady(23_457))].concat(),
            vec![],
        ),
        ("moving lines alone tell nothing", times(100, moving(23_457)), vec![]),
        ("an empty pan tells nothing", times(100, steady(120)), vec![]),
        ("just below the smallest load", times(100, steady(499)), vec![]),
        ("at the smallest load", times(8, steady(500)), vec!["T 500@8"]),
        ("a steady negative is no mass", times(100, steady(-23_457)), vec![]),
        (
            "unloading is told once and makes ready",
            [times(9, steady(23_457)), times(5, steady(0)), times(9, steady(23_457))].concat(),
            vec!["T 23457@8", "U@10", "T 23457@22"],
        ),
        (
            "a pan that was empty only while moving was empty",
            [times(8, steady(23_457)), vec![moving(9_000), moving(40), moving(15_000)], times(8, steady(23_457))].concat(),
            vec!["T 23457@8", "U@10", "T 23457@19"],
        ),
        ("a load lifted before it settled tells nothing", [times(5, steady(23_457)), times(9, steady(0))].concat(), vec![]),
        (
            "threads added: the new load is taken once it has settled anew",
            [times(10, steady(20_000)), times(3, moving(20_500)), times(20, steady(21_100))].concat(),
            vec!["T 20000@8", "T 21100@21"],
        ),
        (
            "pressed and let go: the same load is not taken again",
            [times(8, steady(20_000)), times(3, moving(90_000)), times(20, steady(20_003))].concat(),
            vec!["T 20000@8"],
        ),
        (
            "a change up to the limit is no new load",
            [times(8, steady(20_000)), times(20, steady(20_050))].concat(),
            vec!["T 20000@8"],
        ),
        (
            "a change beyond it is",
            [times(8, steady(20_000)), times(20, steady(20_051))].concat(),
            vec!["T 20000@8", "T 20051@16"],
        ),
        (
            "a lighter load is a change too",
            [times(8, steady(20_000)), times(20, steady(19_000))].concat(),
            vec!["T 20000@8", "T 19000@16"],
        ),
        (
            "evaporation by less than the change never takes another",
            [times(8, steady(20_000)), (0..49).flat_map(|i| times(40, steady(20_000 - i))).collect()].concat(),
            vec!["T 20000@8"],
        ),
        (
            "tared away, filled, lifted: the negative is unloading and no mass",
            [
                times(9, steady(23_457)),
                times(9, line(Mark::Steady, 0)),
                times(9, steady(15_000)),
                times(20, steady(-23_457)),
                times(9, steady(0)),
            ]
            .concat(),
            vec!["T 23457@8", "U@10", "T 15000@26", "U@28"],
        ),
        (
            "flicker around the smallest load is one placement",
            [times(8, steady(501)), (0..60).map(|i| steady(499 + i % 3)).collect(), times(3, steady(0))].concat(),
            vec!["T 501@8", "U@69"],
        ),
    ];
    for (name, lines, want) in table {
        assert_eq!(short(&feed(SettleLimits::default(), &lines)), want, "{name}");
    }
}

#[test]
fn a_mass_says_what_it_rests_on() {
    let lines = [vec![steady(100), steady(120), moving(9_000)], times(6, steady(23_457)), vec![steady(23_458), steady(23_456)]];
    let happened = feed(SettleLimits::default(), &lines.concat());
    let want = MassTaken {
        mass: Mass::from_ug(23_456_000),
        step: Mass::from_ug(STEP),
        basis: Basis::Unmarked,
        printed: false,
        input: 11,
        first_input: 4,
        readings: 8,
        span: Mass::from_ug(2_000),
        zero: Some(Zero { mass: Mass::from_ug(120_000), input: 2 }),
        at: ms(1_100),
        // Five steady lines after the pan was loaded; the first of the eight that agree came 700 ms before the last.
        trace: Some(Trace { settling_ms: 800, watched_ms: 700, drift_ug_per_s: -1_428 }),
    };
    assert_eq!(happened, vec![Happening::MassTaken(want)]);
}

/// How a mass drifted until it was lifted, by the unload it was told with.
fn stays(happened: &[Happening]) -> Vec<Option<Stayed>> {
    happened.iter().filter_map(|h| if let Happening::Unloaded { stayed, .. } = h { Some(*stayed) } else { None }).collect()
}

#[test]
fn a_mass_that_drifts_while_it_lies_there_says_so_when_it_is_lifted() {
    let limits = SettleLimits { change_from: Mass::from_ug(500_000), ..SettleLimits::default() };
    // One line every 100 ms: a step of 1 mg every 500 ms is 2 mg a second; the hand that lifts it comes last.
    let creeping = |sign: i64| -> Vec<Reading> {
        let on: Vec<Reading> = (0..100).map(|n| steady(23_400 + sign * (n / 5))).collect();
        [times(3, steady(0)), times(8, steady(23_400)), on, vec![steady(23_300), moving(21_000)], times(4, steady(0))].concat()
    };
    for (sign, want) in [(1, 1_900..=2_100), (-1, -2_100..=-1_900), (0, 0..=0)] {
        let stay = stays(&feed(limits, &creeping(sign)))[0].expect("watched for ten seconds");
        assert!(want.contains(&stay.drift_ug_per_s), "{sign}: {stay:?}");
        assert!((9_500..=10_100).contains(&stay.watched_ms) && stay.readings >= 95, "{stay:?}");
        assert_eq!(stay.taken_at, ms(1_100), "tells which mass it was");
    }
    let short = [times(3, steady(0)), times(9, steady(23_400)), times(2, steady(0))].concat();
    assert_eq!(stays(&feed(limits, &short)), [None], "nothing is told of what was not watched");
    let slips = SettleLimits { talks: Talks::PrintOnKey, ..limits };
    assert!(masses(&feed(slips, &creeping(1))).iter().all(|t| t.trace.is_none()), "a print key shows nothing in between");
}

#[test]
fn what_is_left_on_the_pan_is_told_once() {
    let with = |after: Vec<Reading>| {
        short(&feed(SettleLimits::default(), &[times(3, steady(4)), times(8, steady(23_457)), after].concat()))
    };
    assert_eq!(with(times(9, steady(64))), ["T 23457@11", "U@12", "L 60@13"]);
    assert_eq!(with(times(9, steady(-30))), ["T 23457@11", "U@12", "L -34@13"]);
    assert_eq!(with(times(9, steady(5))), ["T 23457@11", "U@12"], "a step of the display is nothing");
    assert_eq!(with([times(1, steady(-9_000)), times(9, steady(64))].concat()), ["T 23457@11", "U@12"], "tared in between");
    let unseen = [times(8, steady(23_457)), times(9, steady(64))].concat();
    assert_eq!(short(&feed(SettleLimits::default(), &unseen)), ["T 23457@8", "U@9"], "nobody saw the pan before");
}

#[test]
fn a_sense_that_is_resumed_sees_the_same() {
    let drifting: Vec<Reading> = (0..60).map(|n| steady(23_457 + n / 5)).collect();
    let lines = [times(3, steady(0)), times(8, steady(23_457)), drifting, times(3, steady(70))].concat();
    let limits = SettleLimits::default();
    let all = feed(limits, &lines);
    let taken = masses(&all)[0];
    let mut again = Settle::resume(limits, Some(taken));
    assert_eq!(feed_from(&mut again, &lines[11..], 12), all[1..], "after the mass");
    let mut lifted = Settle::new(limits);
    feed_from(&mut lifted, &lines[..72], 1);
    let mut again = Settle::resume(limits, None).lifted(lifted.before());
    assert_eq!(feed_from(&mut again, &lines[72..], 73), all[2..], "after it was lifted");
    assert_eq!(short(&all), ["T 23457@11", "U@72", "L 70@73"]);
}

#[test]
fn without_a_mark_time_counts_too() {
    let limits = SettleLimits { steady_ms: 700, ..SettleLimits::default() };
    for (every_us, want_line) in [(100_000, 8), (99_999, 9), (10_000, 71), (1_000_000, 8)] {
        let mut sense = Settle::new(limits);
        let first = (1..=200).find_map(|no: u64| {
            let at = Stamp { mono_us: no as i64 * every_us, ..ms(0) };
            sense.hear(&plain(23_457), no, at)
        });
        let Some(Happening::MassTaken(taken)) = first else { panic!("nothing at {every_us}") };
        assert_eq!((taken.input, u64::from(taken.readings)), (want_line, want_line), "a line every {every_us} µs");
    }
    // Control: marked steady, the same fast stream needs the number alone.
    let mut sense = Settle::new(limits);
    let first = (1..=200).find_map(|no: u64| sense.hear(&steady(23_457), no, Stamp { mono_us: no as i64 * 10_000, ..ms(0) }));
    assert!(matches!(first, Some(Happening::MassTaken(t)) if t.input == 8));
}

#[test]
fn lines_that_only_look_alike_break_the_run() {
    let net = Reading { basis: Basis::Net, ..steady(23_457) };
    let gross = Reading { basis: Basis::Gross, ..steady(23_457) };
    let torn = Reading { step: Mass::from_ug(STEP * 10), ..gross };
    for (name, odd) in [("basis", net), ("step", torn)] {
        let lines = [times(7, gross), vec![odd], times(8, gross)].concat();
        assert_eq!(short(&feed(SettleLimits::default(), &lines)), ["T 23457@16"], "{name}");
    }
    let control = [times(7, gross), vec![gross], times(8, gross)].concat();
    assert_eq!(short(&feed(SettleLimits::default(), &control)), ["T 23457@8"]);
    let lines = [times(7, gross), times(8, net)].concat();
    assert_eq!(masses(&feed(SettleLimits::default(), &lines))[0].basis, Basis::Net);
}

#[test]
fn overload_breaks_the_run_and_the_load_stays() {
    for broken in [true, false] {
        let mut sense = Settle::new(SettleLimits::default());
        let mut happened = feed_from(&mut sense, &times(7, steady(23_457)), 1);
        if broken {
            sense.other(8, ms(800));
        }
        happened.extend(feed_from(&mut sense, &times(8, steady(23_457)), 9));
        sense.other(17, ms(1_700));
        happened.extend(feed_from(&mut sense, &times(20, steady(23_457)), 18));
        let want = if broken { "T 23457@16" } else { "T 23457@9" };
        assert_eq!(short(&happened), [want], "broken {broken}");
    }
}

#[test]
fn a_lost_port_takes_the_zero_and_the_run_but_not_the_load() {
    for lost in [true, false] {
        let mut sense = Settle::new(SettleLimits::default());
        let mut happened = feed_from(&mut sense, &[vec![steady(3)], times(4, steady(23_457))].concat(), 1);
        if lost {
            sense.disturbed();
        }
        happened.extend(feed_from(&mut sense, &times(20, steady(23_457)), 6));
        sense.disturbed();
        happened.extend(feed_from(&mut sense, &times(20, steady(23_457)), 26));
        let taken = masses(&happened);
        let want = if lost { (13, None) } else { (9, Some(Zero { mass: Mass::from_ug(3_000), input: 1 })) };
        assert_eq!((taken.len(), taken[0].input, taken[0].zero), (1, want.0, want.1), "lost {lost}");
    }
}

#[test]
fn the_zero_is_the_latest_that_was_steady() {
    let load = || times(8, steady(23_457));
    for (name, lines, want) in [
        ("none seen", load(), None),
        ("steady", [vec![steady(1), steady(2)], load()].concat(), Some((2, 2))),
        ("moving is not seen", [vec![steady(1), moving(2)], load()].concat(), Some((1, 1))),
        ("residue as it is", [vec![steady(120)], load()].concat(), Some((120, 1))),
        ("a small negative is a zero", [vec![steady(-120)], load()].concat(), Some((-120, 1))),
        ("a tared container lifted: no zero holds", [vec![steady(0), steady(-9_000)], load()].concat(), None),
        ("unmarked and agreeing", [times(9, plain(4)), times(8, plain(23_457))].concat(), Some((4, 9))),
        ("unmarked and too short", [times(7, plain(4)), times(8, plain(23_457))].concat(), None),
    ] {
        let taken = masses(&feed(SettleLimits::default(), &lines));
        let want = want.map(|(mg, input)| Zero { mass: Mass::from_ug(mg * 1_000), input });
        assert_eq!(taken.len(), 1, "{name}");
        assert_eq!(taken[0].zero, want, "{name}");
    }
    // Threads added to the same placement rest on the same zero.
    let grown = [vec![steady(7)], times(8, steady(20_000)), times(8, steady(22_000))].concat();
    let taken = masses(&feed(SettleLimits::default(), &grown));
    assert_eq!((taken.len(), taken[0].zero), (2, taken[1].zero));
}

#[test]
fn a_print_key_makes_each_line_a_mass() {
    let limits = SettleLimits { talks: Talks::PrintOnKey, ..SettleLimits::default() };
    let lines =
        [steady(23_457), plain(23_457), moving(23_458), plain(30), plain(15_000), plain(15_000), plain(-23_457), plain(9_000)];
    let happened = feed(limits, &lines);
    assert_eq!(short(&happened), ["T 23457@1", "T 23457@2", "T 15000@5", "T 15000@6", "T 9000@8"]);
    let taken = masses(&happened);
    assert!(taken.iter().all(|t| t.printed && t.readings == 1 && t.first_input == t.input && t.span == Mass::ZERO));
    let zeros: Vec<_> = taken.iter().map(|t| t.zero.map(|z| z.input)).collect();
    assert_eq!(zeros, [None, None, Some(4), None, None], "a printed zero is that of the next mass alone");
    // Control: the same lines as a stream are no mass at all.
    assert_eq!(feed(SettleLimits::default(), &lines), vec![]);
}

#[test]
fn the_span_follows_the_printed_step_unless_set() {
    let at_step = |step_ug: i64, mg: i64| Reading { step: Mass::from_ug(step_ug), ..steady(mg) };
    for (name, set, step_ug, apart_mg, agrees) in [
        ("2 mg at least", None, 100, 2, true),
        ("and no more", None, 100, 3, false),
        ("two steps of 10 mg", None, 10_000, 20, true),
        ("not three", None, 10_000, 30, false),
        ("set", Some(5_000), 100, 5, true),
        ("set, beyond", Some(5_000), 100, 6, false),
        ("set to nothing: equal lines only", Some(0), 100, 1, false),
        ("set below nothing is nothing", Some(-5), 100, 0, true),
    ] {
        let limits = SettleLimits { steady_span: set.map(Mass::from_ug), ..SettleLimits::default() };
        let lines = [times(4, at_step(step_ug, 23_000)), times(4, at_step(step_ug, 23_000 + apart_mg))].concat();
        assert_eq!(feed(limits, &lines).len() == 1, agrees, "{name}");
    }
    // A span wider than the change must not take one placement twice.
    let wide = SettleLimits { steady_span: Some(Mass::from_ug(100_000)), ..SettleLimits::default() };
    let noisy: Vec<_> = (0..200).map(|i| steady(20_000 + (i * 37) % 90)).collect();
    assert_eq!(masses(&feed(wide, &noisy)).len(), 1);
}

#[test]
fn a_run_never_spans_two_starts_of_the_machine() {
    for (boot, want) in [(1, 8), (2, 11)] {
        let mut sense = Settle::new(SettleLimits::default());
        let first = (1..=20).find_map(|no: u64| {
            let at = Stamp { boot: Boot(if no > 3 { boot } else { 1 }), ..ms(no as i64 * 100) };
            sense.hear(&plain(23_457), no, at)
        });
        assert!(matches!(first, Some(Happening::MassTaken(t)) if t.input == want), "boot {boot}: {first:?}");
    }
}

/// One placement of the model: load in mg, noise, lines, what went before.
#[derive(Clone, Debug)]
struct Placement {
    residue: i64,
    load: i64,
    swing: Vec<i64>,
    noise: Vec<i64>,
    unmarked: bool,
}

fn placements() -> impl Strategy<Value = Vec<Placement>> {
    let one = (
        -400i64..400,
        600i64..200_000,
        prop::collection::vec(-5_000i64..5_000, 1..6),
        prop::collection::vec(0i64..=2, 12..40),
        any::<bool>(),
    )
        .prop_map(|(residue, load, swing, noise, unmarked)| Placement { residue, load, swing, noise, unmarked });
    prop::collection::vec(one, 1..12)
}

/// The lines of a day, and the line whose value each placement must give.
fn play(day: &[Placement]) -> (Vec<Reading>, Vec<(InputNo, Mass, Zero)>) {
    let (mut lines, mut want) = (Vec::new(), Vec::new());
    for p in day {
        let mark = if p.unmarked { Mark::Unmarked } else { Mark::Steady };
        lines.extend(times(10, line(mark, p.residue)));
        let zero = Zero { mass: Mass::from_ug(p.residue * 1_000), input: lines.len() as u64 };
        lines.extend(p.swing.iter().map(|s| moving(p.load + s)));
        let nth = lines.len() as u64 + 8;
        lines.extend(p.noise.iter().map(|n| line(mark, p.load + n)));
        want.push((nth, lines[nth as usize - 1].mass, zero));
        lines.extend(p.swing.iter().map(|s| moving(p.load / 2 + s)));
    }
    (lines, want)
}

fn any_reading() -> impl Strategy<Value = Reading> {
    let mark = prop_oneof![4 => Just(Mark::Steady), 1 => Just(Mark::Moving), 3 => Just(Mark::Unmarked)];
    let basis = prop_oneof![9 => Just(Basis::Gross), 1 => Just(Basis::Net)];
    let ug = prop_oneof![
        5 => (0i64..4).prop_map(|k| k * 20_000_000),
        4 => (0i64..3).prop_map(|k| 20_000_000 + k * 1_000),
        1 => prop_oneof![Just(i64::MIN), Just(i64::MAX), Just(-1), Just(499_999)],
    ];
    (ug, mark, basis).prop_map(|(ug, mark, basis)| Reading { mass: Mass::from_ug(ug), step: Mass::from_ug(STEP), mark, basis })
}

fn any_limits() -> impl Strategy<Value = SettleLimits> {
    let span = prop::option::of(prop_oneof![Just(i64::MIN), Just(0), Just(5_000), Just(i64::MAX)]);
    let edge = || prop_oneof![Just(i64::MIN), Just(0), Just(50_000), Just(500_000), Just(i64::MAX)];
    (any::<bool>(), 0u32..5, span, edge(), edge(), prop_oneof![Just(0), Just(300), Just(u32::MAX)]).prop_map(
        |(key, n, span, load, change, t)| SettleLimits {
            talks: if key { Talks::PrintOnKey } else { Talks::Continuous },
            steady_readings: n,
            steady_span: span.map(Mass::from_ug),
            load_from: Mass::from_ug(load),
            change_from: Mass::from_ug(change),
            steady_ms: t,
        },
    )
}

proptest! {
    /// Model: each placement gives exactly one mass, the eighth line's value.
    #[test]
    fn each_placement_gives_its_eighth_line(day in placements()) {
        let (lines, want) = play(&day);
        let got: Vec<_> = masses(&feed(SettleLimits::default(), &lines)).iter().map(|t| (t.input, t.mass, t.zero.unwrap())).collect();
        prop_assert_eq!(got, want);
    }

    /// A restart after any mass changes nothing of what follows.
    #[test]
    fn resuming_after_a_mass_gives_the_same_again(
        lines in prop::collection::vec((any_reading(), 1usize..12), 1..60), limits in any_limits(),
    ) {
        let lines: Vec<Reading> = lines.into_iter().flat_map(|(r, n)| times(n, r)).collect();
        let all = feed(limits, &lines);
        for (i, happened) in all.iter().enumerate() {
            let Happening::MassTaken(taken) = happened else { continue };
            let mut again = Settle::resume(limits, Some(*taken));
            let later = feed_from(&mut again, &lines[taken.input as usize..], taken.input + 1);
            prop_assert_eq!(&later[..], &all[i + 1..]);
        }
    }

    /// Nothing panics, and between two masses of one value the pan was seen empty.
    #[test]
    fn any_stream_is_answered(
        lines in prop::collection::vec((any_reading(), prop_oneof![0i64..2_000, Just(i64::MIN), Just(i64::MAX)], 0u32..3, 0u8..20), 0..200),
        limits in any_limits(),
    ) {
        let mut sense = Settle::new(limits);
        let mut loaded: Option<Mass> = None;
        for (no, (reading, at, boot, odd)) in lines.into_iter().enumerate() {
            let (no, at) = (no as u64, Stamp { utc_us: at, mono_us: at, boot: Boot(boot) });
            match odd {
                0 => sense.other(no, at),
                1 => sense.disturbed(),
                _ => {}
            }
            match sense.hear(&reading, no, at) {
                Some(Happening::MassTaken(t)) => {
                    prop_assert_eq!((t.mass, t.input, t.at), (reading.mass, no, at));
                    prop_assert!(reading.mark != Mark::Moving && t.mass >= limits.load_from);
                    prop_assert!(t.printed || t.readings >= limits.steady_readings);
                    if !t.printed {
                        prop_assert!(loaded != Some(t.mass));
                        loaded = Some(t.mass);
                    }
                }
                Some(Happening::Unloaded { .. }) => {
                    prop_assert!(loaded.is_some());
                    loaded = None;
                }
                Some(Happening::LeftOnPan(_)) => prop_assert!(loaded.is_none()),
                Some(other) => prop_assert!(false, "{:?}", other),
                None => {}
            }
        }
    }
}
