//! `tarecup work`: limits from scenario or sheet files, without instruments.

use super::{WRONG_INPUT, files, tell};
use crate::desk::limits_payload;
use std::path::PathBuf;
use tarecup_config::scenario::{self, Mode, Scenario};
use tarecup_config::station::Station;
use tarecup_config::text;
use tarecup_core::evaluate::evaluate;
use tarecup_core::limits::Limits;
use tarecup_core::soil::precision::{self, Apart};

/// Arguments of `work`.
#[derive(clap::Args)]
pub struct WorkArgs {
    /// Scenario or sheet files.
    #[arg(required = true, value_name = "FILE")]
    files: Vec<PathBuf>,
    /// One limits payload a line, one for each specimen.
    #[arg(long)]
    json: bool,
    /// Config file with the laboratory's own methods.
    #[arg(long, value_name = "FILE")]
    config: Option<PathBuf>,
    /// Two specimens of the files: do their limits lie as close together as the method's precision allows?
    #[arg(long, num_args = 2, value_names = ["SPECIMEN", "SPECIMEN"])]
    compare: Vec<String>,
    /// The two were tested by two laboratories, not by one operator.
    #[arg(long, requires = "compare")]
    two_laboratories: bool,
}

/// Runs `work`. All files are read before anything is printed.
pub fn run(args: &WorkArgs) -> u8 {
    let station = match files::station(args.config.as_deref()) {
        Ok(station) => station,
        Err(faults) => {
            eprintln!("{faults}");
            return WRONG_INPUT;
        }
    };
    let mut sheets: Vec<Scenario> = Vec::new();
    let mut wrong = false;
    for path in &args.files {
        let read =
            text::read_file(path).and_then(|t| scenario::parse(&path.display().to_string(), &t, Mode::Work, &station.methods));
        match read {
            Ok(scenario) => sheets.push(scenario),
            Err(faults) => {
                eprintln!("{faults}");
                wrong = true;
            }
        }
    }
    if wrong {
        return WRONG_INPUT;
    }
    if let [a, b] = args.compare.as_slice() {
        return compared(args, &sheets, &station, [a, b]);
    }
    for scenario in &sheets {
        let results = results(scenario, &station);
        if args.json {
            for limits in &results {
                say!("{}", limits_payload(limits, 0, 0, None, &[], serde_json::Value::Null));
            }
        } else {
            say!("{}", scenario.title);
            say!("{}", (tell::table(&results)).trim_end());
        }
    }
    0
}

/// Compares two specimens by the precision of their method.
fn compared(args: &WorkArgs, sheets: &[Scenario], station: &Station, names: [&String; 2]) -> u8 {
    let all: Vec<Limits> = sheets.iter().flat_map(|s| results(s, station)).collect();
    let two = match names.map(|n| all.iter().find(|l| l.specimen.as_str() == n).ok_or(n)) {
        [Ok(a), Ok(b)] => [a, b],
        [Err(name), _] | [_, Err(name)] => {
            eprintln!("no specimen {name} stands in the files; write its id as it stands there");
            return WRONG_INPUT;
        }
    };
    let [a, b] = two;
    if a.method != b.method {
        eprintln!(
            "{} was worked by {}, {} by {}: only results of one method compare",
            a.specimen, a.method, b.specimen, b.method
        );
        return WRONG_INPUT;
    }
    let Some(precision) = station.methods.get(&a.method).and_then(|m| m.precision.as_ref()) else {
        eprintln!("the method {} states no precision; add [precision] to a method of your own", a.method);
        return WRONG_INPUT;
    };
    let apart = if args.two_laboratories { Apart::TwoLaboratories } else { Apart::OneOperator };
    let rows = precision::compare(a, b, precision, apart);
    if rows.is_empty() {
        eprintln!("{} and {} have no limit in common", a.specimen, b.specimen);
        return WRONG_INPUT;
    }
    for row in rows {
        if args.json {
            say!("{}", serde_json::json!({"specimens": [a.specimen, b.specimen], "compared": row}));
        } else {
            say!("{}", row.says());
        }
    }
    0
}

fn results(scenario: &Scenario, station: &Station) -> Vec<Limits> {
    let one = |s: &scenario::ScenarioSpecimen| {
        let method = station.methods.get(scenario.method_of(s, &station.default_method))?;
        Some(evaluate(&scenario::to_sheet(s), method))
    };
    scenario.specimens.iter().filter_map(one).collect()
}
