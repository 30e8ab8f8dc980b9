//! From a laboratory that was really worked in to what the pages of the bench screen show.

mod lab_bench;

use lab_bench::*;
use std::collections::BTreeMap;
use tarecup::screen::fill::{self, Around, Heard};
use tarecup::screen::pages;
use tarecup::screen::view::{self, Due, Freshness, Place, Step, What};
use tarecup::screen::words::ENGLISH;
use tarecup_core::fact::{Connection, TrialRef};
use tarecup_core::lab::Input;
use tarecup_core::lab::ask::Ask;
use tarecup_core::sheet::Kind;

fn around() -> Around {
    let heard = |kind| Heard { kind, ..Default::default() };
    let instruments = [("pan-n", "balance"), ("cup-n", "counter"), ("scan-n", "scanner"), ("pan-s", "balance")];
    Around {
        instruments: instruments.map(|(name, kind)| (instrument(name), heard(kind))).into(),
        then: String::from("/bench/north"),
        ..Default::default()
    }
}

fn north(play: &Play) -> view::Bench {
    fill::bench(&play.lab, &bench_name("north"), &play.now, &around()).unwrap()
}

/// A college's data sheet of 2004 prints class CL; least squares give LL 33.60, PL 18.88, PI 14.72.
#[test]
fn a_whole_specimen_is_shown_as_its_data_sheet_has_it() {
    let mut play = Play::open();
    whole_specimen(&mut play, "S-1", "C");
    let history = fill::history(&play.facts, &specimen_id("S-1"), &ENGLISH);
    let around = Around { history, ..around() };
    let page = fill::specimen(&play.lab, &specimen_id("S-1"), &play.now, &around).unwrap();
    let (ll, pl) = (page.results.liquid.as_ref().unwrap(), page.results.plastic.as_ref().unwrap());
    assert_eq!((ll.rounded.as_str(), pl.rounded.as_str(), page.results.group.as_deref()), ("34", "19", Some("CL")));
    assert!((ll.value - 33.60).abs() < 0.005 && (pl.value - 18.88).abs() < 0.005, "{ll:?} {pl:?}");
    let line = page.flow.fit.as_ref().unwrap();
    assert!((line.at_one + line.slope * 25f64.log10() - ll.value).abs() < 1e-9, "the drawn line is the computed one");
    assert!(line.band.iter().all(|(d, low, high)| (17.0..=34.1).contains(d) && low < high));
    assert_eq!(page.chart.this, Some((34.0, 15.0)));
    assert_eq!(page.trials.len(), 6);
    assert_eq!(page.trials[0].wet.as_ref().unwrap().mass_g, "48.61");
    assert!(page.history.first().unwrap().what.contains("opened") && page.history.len() > 20);
    assert!(page.history.iter().any(|c| c.what.contains("into the oven")));
    let html = pages::specimen(&page, &ENGLISH).into_string();
    assert!(html.contains("48.61") && html.contains(">CL<"));
}

#[test]
fn the_bench_shows_each_step_and_what_was_recorded() {
    let mut play = Play::open();
    assert_eq!((north(&play).next.step, north(&play).work), (Step::Scan, None));
    play.weigh("C1", "21.43");
    play.intend("north", "S-1", "liquid");
    assert_eq!(north(&play).next.step, Step::Cup);
    let count = play.count(32);
    let b = north(&play);
    assert_eq!((b.next.step, b.owed.as_ref().unwrap().drops), (Step::Slice, 32));
    assert_eq!(b.recorded[0].seq, count);
    // The page says what the laboratory advises, and nothing of its own.
    let lab = play.lab.advice(&bench_name("north"), &Default::default()).unwrap();
    assert_eq!((b.advice.says.len(), b.advice.threads_needed, b.advice.loud), (lab.says.len(), 2, false));
    assert!(
        b.advice.says.iter().zip(&lab.says).all(|(shown, said)| shown[1..].trim_end_matches('.') == &said[1..]),
        "{:?}",
        b.advice
    );
    assert!(b.advice.says[0].starts_with("32 drops are of use"), "{:?}", b.advice);
    play.scan("scan-n", "C1");
    let b = north(&play);
    assert_eq!((b.next.step, b.hand.as_deref()), (Step::Weigh, Some("C1")));
    let wet = play.settle("pan-n", "38.22");
    let b = north(&play);
    assert_eq!(b.next.step, Step::TakeOff);
    let latest = &b.recorded[0];
    assert_eq!((latest.seq, latest.container.as_deref(), latest.role.as_deref()), (wet, Some("C1"), Some("wet")));
    assert_eq!(
        (latest.mass_g.as_deref(), latest.by.as_deref(), latest.specimen.as_deref()),
        (Some("38.22"), Some("AB"), Some("S-1"))
    );
    let seqs: Vec<u64> = b.recorded.iter().map(|r| r.seq).collect();
    assert!(seqs.is_sorted_by(|a, b| a > b), "{seqs:?}");
    assert_eq!(b.work.as_ref().unwrap().flow.waiting, [32.0]);
    play.lift("pan-n");
    play.settle("pan-n", "23.00");
    let b = north(&play);
    assert!(b.recorded[0].loose.is_some() && b.loose == 1 && b.frame.loose == 1, "{:?}", b.recorded[0]);
}

#[test]
fn a_value_is_live_stale_or_never_seen() {
    let mut play = Play::open();
    let state = |play: &Play| north(play).balances[0].freshness.clone();
    assert_eq!(state(&play), Freshness::Never);
    play.take(Input::Instrument { instrument: instrument("pan-n"), state: Connection::Speaking, detail: None });
    assert_eq!(state(&play), Freshness::Live);
    play.wait(HOUR);
    play.take(Input::Instrument { instrument: instrument("pan-n"), state: Connection::PortLost, detail: Some("gone".into()) });
    assert_eq!(state(&play), Freshness::Stale { since: Some(play.now.rfc3339()) });
    assert_eq!(north(&play).balances.len(), 1, "the balance of the other bench is not shown here");
    assert_eq!(north(&play).cups.len(), 1);
}

#[test]
fn the_shelf_follows_the_methods_rule() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00")]);
    let shelf = |play: &Play| fill::shelf(&play.lab, &play.now, &around()).rows;
    let at = |play: &Play, id: &str| shelf(play).into_iter().find(|r| r.container == id);
    assert_eq!(at(&play, "C1").map(|r| (r.place, r.due)), Some((Place::Wet, Due::NotYet)));
    play.oven("into_oven", &["C1"]);
    let ready = tarecup_core::stamp::rfc3339(play.now.utc_us + 12 * HOUR);
    assert_eq!(at(&play, "C1").unwrap().ready_at, Some(ready.clone()), "12 h by the method");
    play.wait(12 * HOUR - SECOND);
    let row = at(&play, "C1").unwrap();
    assert_eq!((row.due, row.hours, row.ready_at), (Due::NotYet, 11, Some(ready)));
    play.wait(SECOND);
    assert_eq!(at(&play, "C1").unwrap().due, Due::Ready);
    let c2 = at(&play, "C2").unwrap();
    assert_eq!(
        (c2.due, c2.recorded),
        (Due::Ready, false),
        "nobody recorded the oven: counted from the wet weighing, and said so"
    );
    play.wait(24 * HOUR);
    assert_eq!(at(&play, "C1").unwrap().due, Due::Overdue);
    assert_eq!(fill::laboratory(&play.lab, &play.now, &around()).frame.ready, 2);
    play.oven("out_of_oven", &["C1"]);
    assert_eq!(at(&play, "C1").unwrap().place, Place::Out);
    play.weigh("C1", "33.39");
    assert_eq!(at(&play, "C1"), None, "dried by the method: off the shelf");
}

#[test]
fn an_outage_moves_the_time_at_which_a_container_is_ready() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    play.oven("into_oven", &["C1"]);
    let into = play.now.utc_us;
    play.wait(5 * HOUR);
    let time = |us: i64| tarecup_core::stamp::rfc3339(into + us);
    play.ask(&format!(r#"{{"ask":"oven_off","from":"{}","to":"{}","who":"AB","why":"no power"}}"#, time(HOUR), time(3 * HOUR)));
    let row = fill::shelf(&play.lab, &play.now, &around()).rows.remove(0);
    assert_eq!((row.hours, row.ready_at), (3, Some(time(14 * HOUR))));
}

#[test]
fn everything_that_was_recorded_can_be_corrected() {
    let mut play = Play::open();
    whole_specimen(&mut play, "S-1", "C");
    play.settle("pan-n", "23.00");
    let b = north(&play);
    let seqs = play.facts.iter().filter(|f| ["weighed", "counted"].contains(&f.fact.kind())).map(|f| f.seq);
    for seq in seqs {
        let page = fill::correction(&play.lab, seq, &play.now, &around()).unwrap_or_else(|| panic!("{seq}"));
        assert_eq!((page.subject.seq, page.then.as_str()), (seq, "/bench/north"));
    }
    assert!(b.recorded.iter().all(|r| fill::correction(&play.lab, r.seq, &play.now, &around()).is_some()));
    assert_eq!(fill::correction(&play.lab, 999_999, &play.now, &around()), None);
    let which = TrialRef { kind: Kind::Liquid, no: 2 };
    let trial = fill::trial_correction(&play.lab, &specimen_id("S-1"), which, &play.now, &around()).unwrap();
    assert_eq!((trial.subject.what, trial.subject.trial), (What::Trial, Some((view::Kind::Liquid, 2))));
    let things = fill::loose(&play.lab, &play.now, &around()).things;
    assert_eq!(things.len(), 1);
    assert_eq!(things[0].subject.what, What::Weighing { mass_g: "23.00".into() });
}

#[test]
fn corrections_show_what_was_before_and_other_specimens_stay_out() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22")]);
    let wet = play.last_weighing();
    play.ask(&format!(r#"{{"ask":"amend_mass","weighing":{wet},"mass_g":"38.12","who":"KL","why":"it was misread"}}"#));
    play.ask(r#"{"ask":"open_specimen","specimen":"S-2"}"#);
    wet_trials(&mut play, "S-2", &[(24, "C2", "20.00", "36.00")]);
    let changes = fill::history(&play.facts, &specimen_id("S-1"), &ENGLISH);
    let amended = changes.iter().find(|c| c.was.is_some()).unwrap();
    assert_eq!((amended.was.as_deref(), amended.is.as_deref()), (Some("38.22 g"), Some("38.12 g")));
    assert_eq!((amended.who.as_deref(), amended.why.as_deref(), amended.correction), (Some("KL"), Some("it was misread"), true));
    assert!(changes.iter().all(|c| !c.what.contains("C2")), "{changes:?}");
}

/// Regions differ only when something happened: a second later none does.
#[test]
fn regions_are_the_same_as_long_as_nothing_happens() {
    let mut play = Play::open();
    wet_trials(&mut play, "S-1", &[(28, "C1", "21.43", "38.22"), (22, "C2", "20.00", "36.00")]);
    play.oven("into_oven", &["C1"]);
    let text = |play: &Play| -> BTreeMap<&'static str, String> {
        let shelf = fill::shelf(&play.lab, &play.now, &around());
        let all = pages::regions::bench(&north(play), &ENGLISH).into_iter().chain(pages::regions::shelf(&shelf, &ENGLISH));
        all.map(|(name, m)| (name, m.into_string())).collect()
    };
    let before = text(&play);
    play.wait(3 * SECOND);
    assert_eq!(text(&play), before);
    play.scan("scan-n", "C2");
    assert_ne!(text(&play)["next"], before["next"]);
}

#[test]
fn a_register_is_judged_line_by_line() {
    let mut play = Play::open();
    play.weigh("C1", "21.43");
    let read = |play: &Play, text: &str| fill::import(&play.lab, "containers", text, &play.now, &around());
    let bad = "container,lid_g\nC30,4.12\n\nC 31,4.10\nC1,\nC30,\nS-1,\nC32,-1\nC34\n";
    let (view, asks) = read(&play, bad);
    let refused: Vec<usize> = view.lines.iter().filter(|l| l.refused.is_some()).map(|l| l.no).collect();
    assert_eq!((view.refused, refused, asks.len()), (None, vec![4, 6, 8, 9], 0), "whole or not at all");
    // What only the laboratory can know is told by line, too.
    let (view, asks) = read(&play, "container\nC30\nS-1\n");
    assert!(view.lines[0].refused.is_none() && view.lines[1].refused.is_some() && asks.is_empty(), "{view:?}");
    let (view, asks) = read(&play, "container,tare_g,lid_g\nC30,21.40,4.12\nC1,,4.20\n\"C33\",,\"4.00\"\n");
    assert!(view.lines[1].note.is_some(), "C1 is known already");
    assert_eq!((view.lines[0].fields.as_slice(), asks.len()), (["C30", "21.40", "4.12"].map(String::from).as_slice(), 3));
    for ask in asks {
        // Who takes the list is put in when it is taken.
        let Ask::RegisterContainer { container, lid_g, tare_g, .. } = ask else { panic!("{ask:?}") };
        let who = tarecup_core::names::Operator::new("AB").ok();
        play.take(Input::Ask(Ask::RegisterContainer { container, lid_g, tare_g, who }));
    }
    assert_eq!(play.container("C30").lid, Some(g("4.12")));
    assert_eq!(play.container("C33").lid, Some(g("4.00")));
}

#[test]
fn the_days_specimens_are_judged_and_odd_files_refused_whole() {
    let play = Play::open();
    let read = |what: &str, text: &str| fill::import(&play.lab, what, text, &play.now, &around());
    let text = "specimen,description,method\nS-9,\"brown, lean \"\"clay\"\"\",\nS-1,,\nS-10,,no-such\n";
    let (view, asks) = read("specimens", text);
    assert_eq!(view.lines[0].fields[1], "brown, lean \"clay\"");
    assert_eq!((asks.len(), view.lines[1].refused.is_some(), view.lines[2].refused.is_some()), (0, true, true));
    let long = format!("container\n{}", "C1\n".repeat(5_001));
    let big = "x".repeat(1_100_000);
    for (what, text) in [
        ("containers", ""),
        ("containers", "lid_g\n1\n"),
        ("containers", "container,colour\nC1,red\n"),
        ("oven", "a\nb\n"),
        ("containers", "container\n"),
        ("containers", "container,container\nC1,C2\n"),
        ("containers", long.as_str()),
        ("containers", big.as_str()),
    ] {
        let (view, asks) = read(what, text);
        assert!(view.refused.is_some() && asks.is_empty() && view.lines.is_empty(), "{what}: {}", &text[..text.len().min(40)]);
    }
}
