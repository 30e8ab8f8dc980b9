//! Flow lines and Student's t against numpy, scipy and statsmodels.

mod soil_common;

use serde::Deserialize;
use std::path::Path;
use std::process::Command;
use tarecup_core::evaluate::evaluate;
use tarecup_core::soil::flow::FlowLine;
use tarecup_core::soil::student;

/// Relative agreement asked for of lines …
const WITHIN: f64 = 1e-9;
/// … and of quantiles.
const WITHIN_T: f64 = 1e-10;

#[derive(Deserialize)]
struct Opinion {
    lines: Vec<Line>,
    both: Vec<Both>,
    student: Vec<Student>,
}

/// A line with errors in drops and water contents: by orthogonal distance regression, and drawn anew.
#[derive(Deserialize)]
struct Both {
    drops: Vec<u32>,
    masses: Vec<[String; 3]>,
    limit: f64,
    u: f64,
    u_drawn: f64,
}

#[derive(Clone, Deserialize)]
struct Line {
    points: Vec<(f64, f64)>,
    limit: f64,
    slope: f64,
    residual_sd: f64,
    u: f64,
    low: f64,
    high: f64,
}

#[derive(Deserialize)]
struct Student {
    confidence: f64,
    freedom: u64,
    t: f64,
}

fn opinion() -> Opinion {
    let tests = Path::new(env!("CARGO_MANIFEST_DIR")).join("../tests");
    let python = tests.join(".venv/bin/python");
    assert!(python.exists(), "the second opinion needs Python with numpy, scipy and statsmodels: run tests/setup-python first");
    let run = Command::new(&python)
        .arg(tests.join("second_opinion.py"))
        .output()
        .expect("Python starts; else run tests/setup-python again");
    assert!(
        run.status.success(),
        "second_opinion.py failed; run tests/setup-python again. It said:\n{}",
        String::from_utf8_lossy(&run.stderr)
    );
    serde_json::from_slice(&run.stdout).expect("second_opinion.py prints JSON")
}

/// What differs by more than [`WITHIN`], by name.
fn differences(ours: &Line, theirs: &Line) -> Vec<String> {
    let pairs = [
        ("limit", ours.limit, theirs.limit),
        ("slope", ours.slope, theirs.slope),
        ("residual sd", ours.residual_sd, theirs.residual_sd),
        ("u", ours.u, theirs.u),
        ("low", ours.low, theirs.low),
        ("high", ours.high, theirs.high),
    ];
    // Not a number is a difference too.
    let near = |a: f64, b: f64| (a - b).abs() <= WITHIN * b.abs();
    pairs.iter().filter(|(_, a, b)| !near(*a, *b)).map(|(name, a, b)| format!("{name}: {a} against {b}")).collect()
}

fn ours(theirs: &Line) -> Line {
    let line = FlowLine::fit(&theirs.points).expect("a line");
    let [low, high] = line.interval(25.0, 0.95).expect("an interval");
    Line {
        points: theirs.points.clone(),
        limit: line.at(25.0),
        slope: line.slope(),
        residual_sd: line.residual_sd().expect("three points or more"),
        u: line.u_at(25.0).expect("three points or more"),
        low,
        high,
    }
}

#[test]
fn two_hundred_flow_lines_agree() {
    let opinion = opinion();
    assert_eq!(opinion.lines.len(), 200);
    for (no, theirs) in opinion.lines.iter().enumerate() {
        let found = differences(&ours(theirs), theirs);
        assert!(found.is_empty(), "line {no} {:?}: {found:?}", theirs.points);
    }
    // Control: each number moved by one part in ten million is noticed.
    let theirs = &opinion.lines[0];
    for nudge in [
        |l: &mut Line| l.limit *= 1.0 + 1e-7,
        |l: &mut Line| l.slope *= 1.0 + 1e-7,
        |l: &mut Line| l.residual_sd *= 1.0 + 1e-7,
        |l: &mut Line| l.u *= 1.0 + 1e-7,
        |l: &mut Line| l.low *= 1.0 + 1e-7,
        |l: &mut Line| l.high = f64::NAN,
    ] {
        let mut nudged = ours(theirs);
        nudge(&mut nudged);
        assert_eq!(differences(&nudged, theirs).len(), 1);
    }
}

#[test]
fn students_t_agrees() {
    let quantiles = opinion().student;
    assert!(quantiles.len() > 200);
    for q in quantiles {
        let t = student::two_sided(q.confidence, q.freedom).expect("a quantile");
        assert!((t - q.t).abs() <= WITHIN_T * q.t, "{} {}: {t} against {}", q.confidence, q.freedom, q.t);
    }
}

/// Errors in both variables. Orthogonal distance regression weighs trials where
/// the program's least squares does not, so it may be a little surer of the
/// limit; readings drawn anew and fitted by least squares must agree closely.
#[test]
fn errors_in_drops_and_masses_agree() {
    let opinion = opinion();
    assert_eq!(opinion.both.len(), 25);
    let mut m = soil_common::method("d4318-multipoint");
    let stated = m.uncertainty.as_mut().expect("stated");
    (stated.residual_sd, stated.residual_df) = (1e-3, 1_000);
    (stated.balance_repeatability_g, stated.balance_linearity_g) = (0.006, 0.0);
    for both in &opinion.both {
        let one = |(no, (drops, masses)): (u32, (&u32, &[String; 3]))| {
            let [t, w, d] = masses;
            soil_common::with_masses(soil_common::liquid(no, *drops), [t, w, d])
        };
        let sheet = soil_common::sheet((1..).zip(both.drops.iter().zip(&both.masses)).map(one).collect());
        let ll = evaluate(&sheet, &m).liquid_limit.expect("a limit");
        let u = ll.u.expect("an uncertainty");
        assert!((ll.value - both.limit).abs() < 1e-3, "{} {}", ll.value, both.limit);
        assert!((u / both.u_drawn - 1.0).abs() < 0.03, "{:?}: {u} drawn {}", both.drops, both.u_drawn);
        assert!((0.98..1.25).contains(&(u / both.u)), "{:?}: {u} by odr {}", both.drops, both.u);
        // Control: masses alone, or drops alone, are not the whole of it.
        m.liquid.balance_reads_g = 1e-9;
        m.uncertainty.as_mut().expect("stated").balance_repeatability_g = 0.0;
        let without = evaluate(&sheet, &m).liquid_limit.expect("a limit").u.expect("an uncertainty");
        assert!(without < 0.97 * u, "{without} {u}");
        m.liquid.balance_reads_g = 0.01;
        m.uncertainty.as_mut().expect("stated").balance_repeatability_g = 0.006;
    }
}
