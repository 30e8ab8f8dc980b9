//! `tarecup work`: limits from scenario or sheet files, without instruments.

use super::{WRONG_INPUT, files, tell};
use crate::desk::limits_payload;
use std::path::PathBuf;
use tarecup_config::scenario::{self, Mode, Scenario};
use tarecup_config::text;
use tarecup_core::evaluate::evaluate;
use tarecup_core::limits::Limits;

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

fn results(scenario: &Scenario, station: &tarecup_config::station::Station) -> Vec<Limits> {
    let one = |s: &scenario::ScenarioSpecimen| {
        let method = station.methods.get(scenario.method_of(s, &station.default_method))?;
        Some(evaluate(&scenario::to_sheet(s), method))
    };
    scenario.specimens.iter().filter_map(one).collect()
}
