//! The falling cone: the same way through `evaluate` as the cup, on other axes.

mod soil_common;

use soil_common::{answer, g, liquid, method, row, sheet, trial, with_masses, with_water};
use tarecup_core::evaluate::evaluate;
use tarecup_core::limits::{Limits, Severity, State};
use tarecup_core::method::{Axes, Method};
use tarecup_core::sheet::{Kind, Penetration, Sheet, Trial};

fn cone(no: u32, depths: &[f64]) -> Trial {
    let one = |&mm: &f64| Penetration { mm, typed: false, fact: None };
    Trial { penetrations: depths.iter().map(one).collect(), ..trial(Kind::Cone, no) }
}

fn threads() -> [Trial; 2] {
    [with_water(trial(Kind::Thread, 1), 20.0), with_water(trial(Kind::Thread, 2), 20.2)]
}

/// Four pastes on w = 10 + 1.5 mm, each penetrated twice, and two containers of threads.
fn good() -> Sheet {
    let depths = [[15.9, 16.1], [18.4, 18.6], [21.6, 21.4], [24.0, 24.0]];
    let mut trials: Vec<Trial> = (1..).zip(&depths).map(|(no, d)| with_water(cone(no, d), 10.0 + 0.75 * (d[0] + d[1]))).collect();
    trials.extend(threads());
    sheet(trials)
}

fn after(change: impl FnOnce(&mut Sheet)) -> Limits {
    let mut sheet = good();
    change(&mut sheet);
    evaluate(&sheet, &method("bs1377-cone"))
}

#[test]
fn a_good_sheet_is_complete_and_has_nothing_to_say() {
    let limits = after(|_| ());
    assert_eq!((limits.checks.as_slice(), limits.state), ([].as_slice(), State::Complete));
    let ll = limits.liquid_limit.unwrap();
    assert!((ll.value - 40.0).abs() < 1e-9 && (ll.slope_per_mm.unwrap() - 1.5).abs() < 1e-9);
    assert_eq!((ll.how.as_str(), ll.points, ll.slope_per_decade, limits.flow_index), ("cone", 4, None, None));
    assert_eq!(limits.group.as_deref(), Some("CL"));
    assert_eq!(limits.trials[0].penetration_mm, Some(16.0));
    assert_eq!(limits.trials[0].penetrations_mm, [15.9, 16.1]);
}

/// BS 1377-2, a published sheet of the cone: printed 37.3, 25.2, 12.0; linear fit 37.25, computed.
#[test]
fn the_published_sheet_is_reproduced() {
    let masses = [
        (15.9, ["6.91", "84.06", "64.07"]),
        (18.8, ["6.63", "66.40", "50.13"]),
        (21.4, ["6.62", "77.71", "58.27"]),
        (24.1, ["6.84", "77.86", "57.91"]),
    ];
    let mut trials: Vec<Trial> = (1..).zip(masses).map(|(no, (mm, m))| with_masses(cone(no, &[mm]), m)).collect();
    trials.push(with_masses(trial(Kind::Thread, 1), ["21.95", "35.61", "32.88"]));
    trials.push(with_masses(trial(Kind::Thread, 2), ["21.74", "35.55", "32.75"]));
    let limits = evaluate(&sheet(trials), &method("bs1377-cone"));
    let (ll, pl) = (limits.liquid_limit.unwrap(), limits.plastic_limit.unwrap());
    assert!((ll.value - 37.25).abs() < 0.005 && (pl.value - 25.2).abs() < 0.05, "{} {}", ll.value, pl.value);
    assert!((limits.plasticity_index.value.unwrap() - 12.0).abs() < 0.1);
    assert_eq!(limits.state, State::Complete);
    assert!((ll.residual_sd.unwrap() - 0.60).abs() < 0.005, "the figure that the methods of the cone begin with");
    // One penetration of each paste is printed where the method wants two: said, not refused.
    assert!(limits.checks.iter().all(|c| c.check == "single_penetration"), "{:?}", limits.checks);
    // Control: read at 10 mm, or on logarithmic axes, the same sheet gives another limit.
    let other = |change: fn(&mut Method)| {
        let mut m = method("bs1377-cone");
        change(&mut m);
        evaluate(&good(), &m).liquid_limit.unwrap().value
    };
    assert!((other(|m| m.cone.as_mut().unwrap().at_mm = 16.0) - 34.0).abs() < 1e-9);
    assert!((other(|m| m.cone.as_mut().unwrap().axes = Axes::Log) - 40.0).abs() > 0.01);
}

/// w = 20 + 30 log10 mm, read at 10 mm of the 60 g cone: 50.
#[test]
fn logarithmic_axes_read_the_logarithm() {
    let one = |(no, mm): (u32, f64)| with_water(cone(no, &[mm, mm]), 20.0 + 30.0 * mm.log10());
    let mut trials: Vec<Trial> = (1..).zip([7.5, 9.0, 11.0, 14.0]).map(one).collect();
    trials.extend(threads());
    let limits = evaluate(&sheet(trials), &method("iso17892-cone-60"));
    let ll = limits.liquid_limit.unwrap();
    assert!((ll.value - 50.0).abs() < 1e-9 && (ll.slope_per_decade.unwrap() - 30.0).abs() < 1e-9);
    assert_eq!((limits.flow_index, ll.slope_per_mm, limits.state), (None, None, State::Complete));
}

#[test]
fn each_check_speaks_when_it_should() {
    use Severity::{Hold, Note};
    type Change = fn(&mut Sheet);
    let cases: &[(Change, &str, &str, Severity, bool)] = &[
        (|s| s.trials[0].penetrations.clear(), "missing", "cone 1", Note, false),
        (|s| drop(s.trials.remove(0)), "missing", "liquid limit", Note, false),
        (|s| s.trials[0].penetrations[0].mm = 0.0, "no_penetration", "cone 1", Hold, false),
        (|s| s.trials[0].penetrations[0].mm = f64::NAN, "no_penetration", "cone 1", Hold, false),
        (|s| s.trials[0].penetrations[0].mm = 15.5, "penetrations", "cone 1", Note, true),
        (|s| s.trials[0].penetrations.truncate(1), "single_penetration", "cone 1", Note, true),
        (|s| s.trials[0].penetrations = cone(1, &[14.0, 14.2]).penetrations, "penetration_range", "cone 1", Note, true),
        (|s| (s.trials[0].penetrations, s.trials[1].penetrations) = shallow(), "both_sides", "liquid limit", Note, true),
        (|s| s.trials[0].penetrations[0].typed = true, "typed", "cone 1", Note, true),
        (
            |s| s.trials.iter_mut().take(4).for_each(|t| t.penetrations = cone(1, &[20.0, 20.0]).penetrations),
            "same_drops",
            "liquid limit",
            Hold,
            false,
        ),
        (|s| reversed(s), "slope", "liquid limit", Hold, false),
        (|s| s.trials.push(with_water(liquid(1, 25), 40.0)), "cup", "liquid 1", Note, true),
        (|s| s.trials[1].water_percent = Some(42.0), "scatter", "liquid limit", Note, true),
        (
            |s| s.trials[0] = with_masses(cone(1, &[16.0, 16.0]), ["20.00", "30.0", "31.0"]),
            "dry_above_wet",
            "cone 1",
            Hold,
            false,
        ),
    ];
    for (change, check, about, severity, complete) in cases {
        let limits = after(change);
        let found = row(&limits, check, about).unwrap_or_else(|| panic!("no {check} about {about}: {:?}", limits.checks));
        assert_eq!(found.severity, *severity, "{check}");
        assert!(found.says.ends_with('.') && found.says.len() > 30, "{check}: {}", found.says);
        assert_eq!(limits.state == State::Complete, *complete, "{check}: {:?}", limits.checks);
    }
}

fn shallow() -> (Vec<Penetration>, Vec<Penetration>) {
    (cone(1, &[22.0, 22.0]).penetrations, cone(2, &[23.0, 23.0]).penetrations)
}

fn reversed(s: &mut Sheet) {
    let waters: Vec<_> = s.trials.iter().take(4).map(|t| t.water_percent).collect();
    s.trials.iter_mut().take(4).zip(waters.into_iter().rev()).for_each(|(t, w)| t.water_percent = w);
}

#[test]
fn cup_and_cone_are_never_mixed() {
    let mixed = |s: &mut Sheet| {
        s.trials.push(with_water(liquid(1, 20), 55.0));
        s.trials.push(with_water(liquid(2, 30), 50.0));
    };
    let by_cone = after(mixed);
    assert!((by_cone.liquid_limit.as_ref().unwrap().value - 40.0).abs() < 1e-9);
    assert!(by_cone.trials.iter().all(|t| t.used == (t.kind != Kind::Liquid)));
    let mut s = good();
    mixed(&mut s);
    let by_cup = evaluate(&s, &method("d4318-multipoint"));
    assert_eq!(by_cup.liquid_limit.as_ref().unwrap().points, 2);
    assert!(by_cup.trials.iter().all(|t| t.used == (t.kind != Kind::Cone)));
    assert_eq!(by_cup.checks.iter().filter(|c| c.check == "cone").count(), 4);
    // What is set aside needs no word about its device.
    s.trials[0].set_aside = Some("spilt".into());
    assert_eq!(evaluate(&s, &method("d4318-multipoint")).checks.iter().filter(|c| c.check == "cone").count(), 3);
}

#[test]
fn a_method_may_let_a_check_hold() {
    let mut m = method("bs1377-cone");
    m.severity.insert("threads".into(), Severity::Hold);
    assert_eq!(m.faults(), []);
    let mut s = good();
    s.trials[4].water_percent = Some(21.0);
    let held = evaluate(&s, &m);
    assert_eq!((row(&held, "threads", "plastic limit").unwrap().severity, held.state), (Severity::Hold, State::Provisional));
    s.answers.push(answer("threads", "plastic limit"));
    assert_eq!(evaluate(&s, &m).state, State::Complete);
    assert_eq!(after(|s| s.trials[4].water_percent = Some(21.0)).state, State::Complete);
    for name in ["thread", "missing", "dry_above_wet"] {
        m.severity = [(name.into(), Severity::Note)].into();
        assert_eq!(m.faults()[0].0, format!("severity.{name}"));
    }
}

#[test]
fn a_slice_may_have_a_least_mass() {
    let mut m = method("bs1377-cone");
    m.liquid.mass_from_g = Some(10.0);
    m.source.insert("liquid.mass_from_g".into(), "invented".into());
    assert_eq!(m.faults(), []);
    let mut s = good();
    s.trials[0] = with_masses(cone(1, &[16.0, 16.0]), ["20.00", "29.38", "26.70"]);
    let limits = evaluate(&s, &m);
    assert!(row(&limits, "small_mass", "cone 1").unwrap().says.contains("9.38 g of wet soil"));
    s.trials[0].wet = Some(g("30.00"));
    assert!(row(&evaluate(&s, &m), "small_mass", "cone 1").is_none());
}

/// One change to a cone method, and the key paths that must be named for it.
#[test]
fn each_contradiction_is_named_by_its_key() {
    let fault_of = |change: fn(&mut Method)| -> Vec<String> {
        let mut method = method("bs1377-cone");
        change(&mut method);
        method.faults().into_iter().map(|(key, _)| key).collect()
    };
    let cone = |change: fn(&mut tarecup_core::method::Cone)| {
        let mut method = method("bs1377-cone");
        change(method.cone.as_mut().unwrap());
        method.faults().into_iter().map(|(key, _)| key).collect::<Vec<_>>()
    };
    assert_eq!(cone(|c| c.at_mm = 26.0), ["cone.at_mm"]);
    assert_eq!(cone(|c| c.range_mm = [25.0, 15.0]), ["cone.range_mm"]);
    assert_eq!(cone(|c| c.mass_g = f64::NAN), ["cone.mass_g"]);
    assert_eq!(cone(|c| c.angle_degrees = 190.0), ["cone.angle_degrees"]);
    assert_eq!(cone(|c| c.repeats = 0), ["cone.repeats"]);
    assert_eq!(cone(|c| c.gauge_reads_mm = 0.0), ["cone.gauge_reads_mm"]);
    assert_eq!(fault_of(|m| m.liquid.trials = 1), ["liquid.trials"]);
    assert_eq!(fault_of(|m| m.liquid.drops = [15, 35]), ["liquid.drops"]);
    assert_eq!(fault_of(|m| m.liquid.windows = vec![[15, 25]]), ["liquid.windows", "liquid.windows"]);
    assert_eq!(fault_of(|m| m.liquid.exponent = Some(0.1)), ["liquid.exponent", "liquid.exponent"]);
    assert_eq!(fault_of(|m| drop(m.source.remove("cone.repeat_within_mm"))), ["cone.repeat_within_mm"]);
    assert_eq!(fault_of(|m| m.uncertainty.as_mut().unwrap().residual_sd = -1.0), ["uncertainty.residual_sd"]);
    assert_eq!(fault_of(|m| m.uncertainty.as_mut().unwrap().balance_linearity_g = -0.1), ["uncertainty.balance_linearity_g"]);
    assert!(fault_of(|m| m.cone = None).contains(&"liquid.how".to_string()));
    let mut cup = method("d4318-multipoint");
    cup.cone = method("bs1377-cone").cone;
    assert!(cup.faults().iter().any(|(key, says)| key == "cone" && says.contains("leave [cone] out")));
    cup = method("d4318-multipoint");
    cup.liquid.drops = [0, 0];
    assert!(cup.faults().iter().any(|(key, says)| key == "liquid.drops" && says.contains("add drops")));
}
