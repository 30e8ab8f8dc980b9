//! Reads the validation cases and works each of them as the laboratory's own sheets are worked.

use serde::Deserialize;
use std::collections::BTreeMap;
use tarecup_config::methods::Methods;
use tarecup_config::scenario::{self, Mode};
use tarecup_core::evaluate::evaluate;
use tarecup_core::limits::Limits;
use tarecup_core::method::Tie;
use tarecup_core::soil::flow::one_point;
use tarecup_core::soil::line::Line;
use tarecup_core::soil::rounding::round;
use tarecup_core::soil::{indices, student};

/// A value and the largest difference from it.
type Wanted = (f64, f64);

/// One comparison.
#[derive(Clone, Debug, serde::Serialize)]
pub(super) struct Compared {
    /// Which case.
    pub case: String,
    /// What of it.
    pub what: String,
    /// Where the expected value comes from.
    pub source: String,
    /// Published, certified or computed elsewhere.
    pub expected: Value,
    /// Largest difference.
    pub within: f64,
    /// What this program makes of it here; null when it makes nothing of it.
    pub got: Option<Value>,
    /// Whether they agree.
    pub ok: bool,
}

/// A number or a word.
#[derive(Clone, Debug, PartialEq, Deserialize, serde::Serialize)]
#[serde(untagged)]
pub(super) enum Value {
    /// A number.
    Number(f64),
    /// A word.
    Word(String),
}

#[derive(Deserialize)]
#[serde(untagged)]
enum Answer {
    Number(Wanted),
    Word(String),
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Cases {
    sheet: BTreeMap<String, BTreeMap<String, Answer>>,
    line: Vec<LineCase>,
    student: Vec<StudentCase>,
    rounding: Vec<RoundingCase>,
    group_index: Vec<GroupCase>,
    one_point: Vec<OnePointCase>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct LineCase {
    name: String,
    source: String,
    #[serde(default)]
    through_origin: bool,
    x: Vec<f64>,
    y: Vec<f64>,
    intercept: Option<Wanted>,
    u_intercept: Option<Wanted>,
    slope: Option<Wanted>,
    u_slope: Option<Wanted>,
    correlation: Option<Wanted>,
    residual_sd: Option<Wanted>,
    read_at: Option<f64>,
    at: Option<Wanted>,
    u_at: Option<Wanted>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct StudentCase {
    source: String,
    confidence: f64,
    freedom: Vec<u64>,
    t: Vec<f64>,
    within: f64,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct RoundingCase {
    source: String,
    value: Vec<f64>,
    decimals: Vec<u32>,
    half_even: Vec<f64>,
    half_up: Vec<f64>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct GroupCase {
    source: String,
    passing: Vec<f64>,
    liquid_limit: Vec<f64>,
    plasticity_index: Vec<f64>,
    index: Vec<f64>,
    within: f64,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct OnePointCase {
    source: String,
    exponent: f64,
    drops: Vec<u32>,
    factor: Vec<f64>,
    within: f64,
}

/// Works all cases.
///
/// # Errors
/// Only when the files that came with the program cannot be read, which says so.
pub(super) fn work(sheets: &str, cases: &str, methods: &Methods) -> Result<Vec<Compared>, String> {
    let cases: Cases = toml::from_str(cases).map_err(|e| format!("the validation cases cannot be read: {e}"))?;
    let mut all = Vec::new();
    worked_sheets(sheets, &cases.sheet, methods, &mut all)?;
    cases.line.iter().try_for_each(|case| worked_line(case, &mut all))?;
    for case in &cases.student {
        for (&freedom, &t) in case.freedom.iter().zip(&case.t) {
            let what = format!("t, {} two-sided, degrees of freedom {freedom}", case.confidence);
            all.push(number("Student", &what, &case.source, (t, case.within), student::two_sided(case.confidence, freedom)));
        }
    }
    for case in &cases.rounding {
        let rows = case.value.iter().zip(&case.decimals).zip(case.half_even.iter().zip(&case.half_up));
        for ((&value, &decimals), (&even, &up)) in rows {
            for (rule, tie, wanted) in [("half to even", Tie::HalfEven, even), ("half up", Tie::HalfUp, up)] {
                let what = format!("{value} to {decimals} decimals, {rule}");
                all.push(number("rounding", &what, &case.source, (wanted, 0.0), Some(round(value, decimals, tie))));
            }
        }
    }
    for case in &cases.group_index {
        for (n, &index) in case.index.iter().enumerate() {
            let part = |list: &[f64]| list.get(n).copied().unwrap_or(f64::NAN);
            let (f, ll, pi) = (part(&case.passing), part(&case.liquid_limit), part(&case.plasticity_index));
            let what = format!("F {f}, LL {ll}, PI {pi}");
            all.push(number("group index", &what, &case.source, (index, case.within), Some(indices::group_index(f, ll, pi))));
        }
    }
    for case in &cases.one_point {
        for (&drops, &factor) in case.drops.iter().zip(&case.factor) {
            let got = one_point(f64::from(drops), 1.0, case.exponent);
            all.push(number("one point", &format!("{drops} drops"), &case.source, (factor, case.within), Some(got)));
        }
    }
    Ok(all)
}

fn worked_sheets(
    sheets: &str,
    answers: &BTreeMap<String, BTreeMap<String, Answer>>,
    methods: &Methods,
    all: &mut Vec<Compared>,
) -> Result<(), String> {
    let scenario = scenario::parse("validation sheets", sheets, Mode::Work, methods).map_err(|f| f.to_string())?;
    for (id, answers) in answers {
        let specimen = scenario.specimens.iter().find(|s| s.id.as_str() == id);
        let specimen = specimen.ok_or_else(|| format!("no validation sheet is called {id}"))?;
        let method = specimen.method.as_ref().and_then(|m| methods.get(m));
        let limits = evaluate(&scenario::to_sheet(specimen), method.ok_or_else(|| format!("sheet {id} names no method"))?);
        let Some(Answer::Word(source)) = answers.get("source") else { return Err(format!("sheet {id} has no source")) };
        for (what, answer) in answers.iter().filter(|(what, _)| *what != "source") {
            let got = of_limits(&limits, what);
            all.push(match answer {
                Answer::Number(wanted) => {
                    let got = got.and_then(|g| if let Value::Number(n) = g { Some(n) } else { None });
                    number(id, what, source, *wanted, got)
                }
                Answer::Word(word) => {
                    let ok = got == Some(Value::Word(word.clone()));
                    let (expected, source) = (Value::Word(word.clone()), source.clone());
                    Compared { case: id.clone(), what: what.clone(), source, expected, within: 0.0, got, ok }
                }
            });
        }
    }
    Ok(())
}

/// A value of a result by its name; null for one it does not have.
fn of_limits(limits: &Limits, what: &str) -> Option<Value> {
    let (ll, pl, pi) = (limits.liquid_limit.as_ref(), limits.plastic_limit.as_ref(), &limits.plasticity_index);
    let number = match what {
        "liquid_limit" => ll.map(|l| l.value),
        "liquid_limit_rounded" => ll.map(|l| l.rounded),
        "plastic_limit" => pl.map(|l| l.value),
        "plastic_limit_rounded" => pl.map(|l| l.rounded),
        "plasticity_index" => pi.value,
        "plasticity_index_rounded" => pi.rounded,
        "liquidity_index" => limits.liquidity_index,
        "activity" => limits.activity,
        "group_index" => limits.group_index.map(f64::from),
        "group" => return limits.group.clone().map(Value::Word),
        "group_en_iso_14688_2" => return limits.group_en_iso_14688_2.clone().map(Value::Word),
        _ => None,
    };
    number.map(Value::Number)
}

fn worked_line(case: &LineCase, all: &mut Vec<Compared>) -> Result<(), String> {
    let mut points: Vec<(f64, f64)> = case.x.iter().copied().zip(case.y.iter().copied()).collect();
    if case.through_origin {
        // With its mirror image the centre is the origin, and the least-squares line runs through it.
        points.extend(points.clone().iter().map(|(x, y)| (-x, -y)));
    }
    let line = Line::fit(&points).map_err(|e| format!("{}: {e}", case.name))?;
    let at = case.read_at.unwrap_or(0.0);
    let values = [
        ("intercept", case.intercept, Some(line.intercept())),
        ("u of intercept", case.u_intercept, line.u_intercept()),
        ("slope", case.slope, Some(line.slope())),
        ("u of slope", case.u_slope, line.u_slope()),
        ("correlation", case.correlation, Some(line.correlation())),
        ("residual sd", case.residual_sd, line.residual_sd()),
        ("value read off", case.at, Some(line.at(at))),
        ("u of value read off", case.u_at, line.u_at(at)),
    ];
    all.extend(values.into_iter().filter_map(|(what, wanted, got)| Some(number(&case.name, what, &case.source, wanted?, got))));
    Ok(())
}

fn number(case: &str, what: &str, source: &str, (expected, within): Wanted, got: Option<f64>) -> Compared {
    let ok = got.is_some_and(|got| (got - expected).abs() <= within);
    Compared {
        case: case.to_string(),
        what: what.to_string(),
        source: source.to_string(),
        expected: Value::Number(expected),
        within,
        got: got.filter(|g| g.is_finite()).map(Value::Number),
        ok,
    }
}
