//! Uncertainties: against Monte Carlo (JCGM 101:2008) and against what they promise.

mod soil_common;

use soil_common::{dry, good, method, sheet, trial, with_water};
use tarecup_core::evaluate::{evaluate, evaluate_with};
use tarecup_core::limits::Limits;
use tarecup_core::method::Method;
use tarecup_core::names::InstrumentName;
use tarecup_core::quantity::Mass;
use tarecup_core::sheet::{Kind, Reading, Sheet, Trial};
use tarecup_core::soil::uncertainty::{Balance, Laboratory, Pooled};

/// Random numbers that are the same at every run (a 64-bit congruential generator, top bits).
struct Dice(u64);

impl Dice {
    fn unit(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        ((self.0 >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }
    fn between(&mut self, half: f64) -> f64 {
        (2.0 * self.unit() - 1.0) * half
    }
    fn normal(&mut self, sd: f64) -> f64 {
        sd * (-2.0 * self.unit().ln()).sqrt() * (std::f64::consts::TAU * self.unit()).cos()
    }
}

const STEP: f64 = 0.01;
const REPEATS: f64 = 0.008;
const LINEARITY: f64 = 0.03;

/// Masses in grams: tare, wet, dry; wet soil exactly on the line 42 − 12 log10(N/25), threads of 20 %.
fn masses() -> Vec<(Option<u32>, [f64; 3])> {
    let slice = |n: u32, tare: f64, soil: f64| {
        let w = 42.0 - 12.0 * (f64::from(n) / 25.0).log10();
        (Some(n), [tare, tare + soil * (1.0 + w / 100.0), tare + soil])
    };
    let thread = |tare: f64, soil: f64| (None, [tare, tare + soil * 1.2, tare + soil]);
    vec![slice(31, 20.0, 10.0), slice(24, 22.0, 12.0), slice(17, 19.0, 7.0), thread(21.0, 9.0), thread(20.5, 6.0)]
}

/// The same as a sheet, the three masses of each container read on these balances.
fn weighed(balances: [&str; 3]) -> Sheet {
    let mut counts = [0, 0];
    let one = |(drops, grams): (Option<u32>, [f64; 3])| {
        let which = usize::from(drops.is_none());
        counts[which] += 1;
        let mass = |g: f64| Mass::from_ug((g * 1e6).round() as i64);
        let kind = if drops.is_some() { Kind::Liquid } else { Kind::Thread };
        let reading = |b: &str| Reading { balance: InstrumentName::new(b).ok(), step: Some(mass(STEP)), ..Reading::default() };
        Trial {
            closures: drops.map(soil_common::closure).into_iter().collect(),
            tare: Some(mass(grams[0])),
            wet: Some(mass(grams[1])),
            dry: vec![dry(mass(grams[2]))],
            readings: balances.map(reading),
            ..trial(kind, counts[which])
        }
    };
    sheet(masses().into_iter().map(one).collect())
}

/// A laboratory of which only the balances are known: trials that scatter by nothing themselves.
fn only_balances() -> (Method, Laboratory) {
    let mut m = method("d4318-multipoint");
    let u = m.uncertainty.as_mut().unwrap();
    (u.residual_sd, u.residual_df, u.thread_sd, u.thread_df) = (1e-4, 1_000, 1e-4, 1_000);
    let known = Balance { repeatability_g: Some(REPEATS), linearity_g: Some(LINEARITY) };
    let balances = ["pan-1", "pan-2"].map(|b| (InstrumentName::new(b).unwrap(), known)).into();
    (m, Laboratory { balances, ..Laboratory::default() })
}

/// Least squares on log10 N, written out here a second time.
fn at_25(points: &[(f64, f64)]) -> f64 {
    let n = points.len() as f64;
    let x: Vec<f64> = points.iter().map(|p| (p.0 / 25.0).log10()).collect();
    let (sx, sy) = (x.iter().sum::<f64>(), points.iter().map(|p| p.1).sum::<f64>());
    let (sxx, sxy) = (x.iter().map(|x| x * x).sum::<f64>(), x.iter().zip(points).map(|(x, p)| x * p.1).sum::<f64>());
    (sxx * sy - sx * sxy) / (n * sxx - sx * sx)
}

/// Standard deviations of LL, PL and PI when every reading is drawn anew.
fn drawn(balances: [usize; 3]) -> [f64; 3] {
    let mut dice = Dice(17892);
    let draws = 60_000;
    let (mut sums, mut squares) = ([0.0; 3], [0.0; 3]);
    let masses = masses();
    for _ in 0..draws {
        let linearity = [dice.between(LINEARITY), dice.between(LINEARITY)];
        let (mut points, mut threads) = (Vec::new(), Vec::new());
        for (drops, grams) in &masses {
            let [t, w, d] =
                [0, 1, 2].map(|i| grams[i] + dice.between(STEP / 2.0) + dice.normal(REPEATS) + linearity[balances[i]]);
            let water = 100.0 * (w - d) / (d - t);
            match drops {
                Some(n) => points.push((f64::from(*n) + dice.between(0.5), water)),
                None => threads.push(water),
            }
        }
        let (ll, pl) = (at_25(&points), threads.iter().sum::<f64>() / 2.0);
        for (i, v) in [ll - 42.0, pl - 20.0, ll - pl - 22.0].into_iter().enumerate() {
            sums[i] += v;
            squares[i] += v * v;
        }
    }
    let n = f64::from(draws);
    [0, 1, 2].map(|i| ((squares[i] - sums[i] * sums[i] / n) / (n - 1.0)).sqrt())
}

fn told(limits: &Limits) -> [f64; 3] {
    let u = |u: Option<f64>| u.expect("an uncertainty");
    [u(limits.liquid_limit.as_ref().unwrap().u), u(limits.plastic_limit.as_ref().unwrap().u), u(limits.plasticity_index.u)]
}

/// JCGM 101:2008: readings drawn anew and the whole computation repeated.
#[test]
fn monte_carlo_agrees_with_one_balance_and_with_two() {
    let (m, lab) = only_balances();
    let mut of_pi = Vec::new();
    for (names, numbers) in [(["pan-1", "pan-1", "pan-1"], [0, 0, 0]), (["pan-1", "pan-1", "pan-2"], [0, 0, 1])] {
        let ours = told(&evaluate_with(&weighed(names), &m, &lab));
        for (ours, theirs) in ours.iter().zip(drawn(numbers)) {
            assert!((ours / theirs - 1.0).abs() < 0.02, "{names:?}: {ours} against {theirs}");
        }
        of_pi.push(ours);
    }
    // Control: a balance of its own for the dry masses brings its departure from the straight line in …
    assert!(of_pi[1][0] > 1.2 * of_pi[0][0], "{of_pi:?}");
    // … which both limits share, so that their difference is less uncertain than two independent ones.
    assert!(of_pi[1][2] < 0.95 * of_pi[1][0].hypot(of_pi[1][1]), "{of_pi:?}");
}

/// Three trials about a line, drawn with a scatter that is known.
fn three(dice: &mut Dice, sd: f64) -> Sheet {
    let one = |(no, n): (u32, u32), dice: &mut Dice| {
        with_water(soil_common::liquid(no, n), 42.0 - 12.0 * (f64::from(n) / 25.0).log10() + dice.normal(sd))
    };
    let mut trials: Vec<Trial> = (1..).zip([31, 24, 17]).map(|t| one(t, dice)).collect();
    trials.extend([1, 2].map(|no| with_water(trial(Kind::Thread, no), 20.0 + dice.normal(0.28))));
    sheet(trials)
}

#[test]
fn nineteen_of_twenty_intervals_hold_the_limit_and_are_of_use() {
    let mut dice = Dice(4318);
    let m = method("d4318-multipoint");
    let sd = 0.25;
    let (mut held, mut held_pl, mut held_pi, mut widths, mut classical) = (0, 0, 0, 0.0, 0.0);
    let rounds = 4_000;
    for _ in 0..rounds {
        let pooled = |dice: &mut Dice, sd: f64| Pooled { sum_sq: (0..40).map(|_| dice.normal(sd).powi(2)).sum(), df: 40 };
        let lab = Laboratory { lines: pooled(&mut dice, sd), threads: pooled(&mut dice, 0.28), ..Laboratory::default() };
        let limits = evaluate_with(&three(&mut dice, sd), &m, &lab);
        let (ll, pl) = (limits.liquid_limit.unwrap(), limits.plastic_limit.unwrap());
        let holds = |i: Option<[f64; 2]>, v: f64| i32::from(i.is_some_and(|[low, high]| low <= v && v <= high));
        held += holds(ll.interval_95, 42.0);
        held_pl += holds(pl.interval_95, 20.0);
        held_pi += holds(limits.plasticity_index.interval_95, 22.0);
        let width = |i: Option<[f64; 2]>| i.map_or(0.0, |[low, high]| high - low);
        widths += width(ll.interval_95);
        classical += width(ll.interval_95_classical);
    }
    for (what, held) in [("LL", held), ("PL", held_pl), ("PI", held_pi)] {
        let share = f64::from(held) / f64::from(rounds);
        assert!((0.935..0.965).contains(&share), "{what}: {share}");
    }
    assert!(widths < classical / 4.0, "{widths} {classical}");
}

#[test]
fn a_laboratory_without_a_record_rests_on_what_the_method_states() {
    let m = method("d4318-multipoint");
    let mut dice = Dice(90);
    let rounds = 2_000;
    let mut held = 0;
    for _ in 0..rounds {
        let ll = evaluate(&three(&mut dice, 0.17), &m).liquid_limit.unwrap();
        let [low, high] = ll.interval_95.unwrap();
        held += i32::from(low <= 42.0 && 42.0 <= high);
    }
    let share = f64::from(held) / f64::from(rounds);
    assert!((0.94..0.99).contains(&share), "{share}");
    let ll = evaluate(&good(), &m).liquid_limit.unwrap();
    assert_eq!(ll.u_from.as_deref(), Some("stated prior"));
    let mut bare = m;
    bare.uncertainty = None;
    let alone = evaluate(&good(), &bare).liquid_limit.unwrap();
    assert_eq!(alone.u_from.as_deref(), Some("these trials alone"));
    assert_eq!((alone.interval_95, alone.interval_95), (alone.interval_95_classical, ll.interval_95_classical));
}

#[test]
fn a_record_changes_nothing_but_uncertainties() {
    let m = method("d4318-multipoint");
    let lab =
        Laboratory { lines: Pooled { sum_sq: 4.0, df: 40 }, threads: Pooled { sum_sq: 9.0, df: 30 }, ..Laboratory::default() };
    let (without, mut with) = (evaluate(&good(), &m), evaluate_with(&good(), &m, &lab));
    assert_eq!(with.liquid_limit.as_ref().unwrap().u_from.as_deref(), Some("laboratory, 41 degrees of freedom"));
    assert_eq!(with.plastic_limit.as_ref().unwrap().u_from.as_deref(), Some("laboratory, 31 degrees of freedom"));
    let (ll, pl) = (with.liquid_limit.as_mut().unwrap(), with.plastic_limit.as_mut().unwrap());
    let (l, p) = (without.liquid_limit.as_ref().unwrap(), without.plastic_limit.as_ref().unwrap());
    (ll.u, ll.interval_95, ll.u_from) = (l.u, l.interval_95, l.u_from.clone());
    (pl.u, pl.interval_95, pl.u_from) = (p.u, p.interval_95, p.u_from.clone());
    (with.plasticity_index.u, with.plasticity_index.interval_95) =
        (without.plasticity_index.u, without.plasticity_index.interval_95);
    assert_eq!(with, without);
}

/// A balance of 0.01 g alone, u(w) at 5 g and 20 g of dry soil and 30 % water: 0.096 and 0.024, computed by hand.
#[test]
fn a_water_content_knows_its_balance() {
    let mut m = method("d4318-multipoint");
    let u = m.uncertainty.as_mut().unwrap();
    (u.balance_repeatability_g, u.balance_linearity_g) = (0.0, 0.0);
    for (soil, expected) in [("25.00", 0.0963), ("40.00", 0.0241)] {
        let wet = if soil == "25.00" { "26.50" } else { "46.00" };
        let t = soil_common::with_masses(trial(Kind::Natural, 1), ["20.00", wet, soil]);
        let row = &evaluate(&sheet(vec![t]), &m).trials[0];
        assert!((row.water_u.unwrap() - expected).abs() < 5e-5, "{row:?}");
    }
}
