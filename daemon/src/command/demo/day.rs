//! From a scenario file to the simulators' description of the day, and the
//! config of the station that the day is played at.

use std::net::SocketAddr;
use std::path::Path;
use tarecup_config::scenario::{LiquidRow, Scenario, ScenarioSpecimen, Water, Weighed};
use tarecup_core::names::MethodName;
use tarecup_simulators::balance::Settings;
use tarecup_simulators::counter::CupDialect;
use tarecup_simulators::day::{Balance, Bench, Cup, Day, Limit, Liquid, NotObtainable, Specimen, Weighed as SimWeighed};
use tarecup_simulators::dialect::BalanceDialect;
use tarecup_simulators::operator::Instruments;

/// 2026-03-02T07:30:00Z, a Monday.
const START_UTC_US: i64 = 1_772_436_600_000_000;
/// What the demo's balances can weigh: as much as a scenario file may say.
const CAPACITY_UG: i64 = 60_000 * 1_000_000;
/// Benches where the scenario names none.
const BENCHES: [&str; 2] = ["north", "south"];
/// Who works at them.
const OPERATORS: [&str; 4] = ["AB", "KL", "MO", "RT"];

/// The day of a scenario.
pub fn plan(scenario: &Scenario) -> Day {
    let default = MethodName::new(tarecup_config::defaults::METHOD);
    let method = |s: &ScenarioSpecimen| match &default {
        Ok(default) => scenario.method_of(s, default).as_str().to_string(),
        Err(_) => String::new(),
    };
    let specimens: Vec<Specimen> = scenario.specimens.iter().map(|s| specimen(s, method(s))).collect();
    let decimals = Day::decimals_needed(&specimens).clamp(2, 6);
    let mut names: Vec<String> = BENCHES.iter().map(|b| (*b).to_string()).collect();
    for named in specimens.iter().filter_map(|s| s.bench.as_ref()) {
        if !names.contains(named) {
            names.push(named.clone());
        }
    }
    let benches = names.iter().enumerate().map(|(n, name)| bench(n, name, decimals)).collect();
    Day { start_utc_us: START_UTC_US, benches, specimens }
}

/// Columns of the mass on the display of the demo's balances.
const COLUMNS: usize = 10;

/// Whether every mass of the day fits the display with all its decimals.
pub fn fits_display(day: &Day) -> Result<(), String> {
    let decimals = usize::from(Day::decimals_needed(&day.specimens).clamp(2, 6));
    let masses = day
        .specimens
        .iter()
        .flat_map(Specimen::weighed)
        .flat_map(|(_, _, w)| [w.tare_ug, w.wet_ug].into_iter().chain(w.dry_ug.clone()));
    let largest = masses.max().unwrap_or(0) / 1_000_000;
    match largest.to_string().len() + 1 + decimals > COLUMNS {
        true => Err(format!(
            "a mass of {largest} g with {decimals} decimals (the finest mass of the file decides) does not fit the {COLUMNS} columns of the demo's balance; round the masses, or compute the file with `tarecup work`"
        )),
        false => Ok(()),
    }
}

fn bench(n: usize, name: &str, decimals: u8) -> Bench {
    let settings = Settings { capacity_ug: CAPACITY_UG, ..Settings::new(BalanceDialect::SignedSteady, decimals) };
    Bench {
        name: name.to_string(),
        operator: OPERATORS[n % OPERATORS.len()].to_string(),
        balance: Balance { name: format!("pan-{}", n + 1), settings },
        cup: Cup { name: format!("cup-{}", n + 1), dialect: CupDialect::RunningTotal },
        scanner: format!("scan-{}", n + 1),
    }
}

fn specimen(s: &ScenarioSpecimen, method: String) -> Specimen {
    let stated = |limit, because: &Option<String>| because.clone().map(|because| NotObtainable { limit, because });
    Specimen {
        id: s.id.as_str().to_string(),
        method,
        description: s.description.clone(),
        preparation: s.preparation.clone(),
        passing_75um_percent: s.passing_75um_percent,
        clay_percent: s.clay_percent,
        bench: s.bench.as_ref().map(|b| b.as_str().to_string()),
        liquid: s.liquid.iter().map(liquid).collect(),
        plastic: s.plastic.iter().map(weighed).collect(),
        natural: s.natural.iter().map(weighed).collect(),
        not_obtainable: stated(Limit::Liquid, &s.liquid_not_obtainable)
            .into_iter()
            .chain(stated(Limit::Plastic, &s.plastic_not_obtainable))
            .collect(),
    }
}

fn liquid(row: &LiquidRow) -> Liquid {
    Liquid {
        drops: row.drops.iter().map(|d| d.value).collect(),
        rate_per_s: row.rate_per_s.unwrap_or(tarecup_config::defaults::RATE_PER_S),
        slice: weighed(&row.weighed),
    }
}

fn weighed(w: &Weighed) -> SimWeighed {
    let container = w.container.as_ref().map(|c| c.as_str().to_string()).unwrap_or_default();
    let set_aside = w.set_aside.clone();
    match &w.water {
        Water::Masses(m) => SimWeighed {
            container,
            tare_ug: m.tare.value.ug(),
            wet_ug: m.wet.value.ug(),
            dry_ug: m.dry.iter().map(|d| d.value.ug()).collect(),
            set_aside,
        },
        // The mode of the demo requires masses: this cannot come.
        Water::Percent(_) => SimWeighed { container, set_aside, ..SimWeighed::default() },
    }
}

/// The config of one instrument.
pub fn config_of(name: &str, kind: &str, bench: &str, port: &Path, profile: &str) -> String {
    let port = port.display().to_string();
    format!(
        "[[instrument]]\nname = \"{name}\"\nkind = \"{kind}\"\nbench = \"{bench}\"\nport = {port:?}\nprofile = \"{profile}\"\n"
    )
}

/// The config of the station, as a person would write it.
pub fn config(day: &Day, instruments: &Instruments, mqtt: Option<SocketAddr>, listen: Option<SocketAddr>) -> String {
    let mut text = String::from("[lab]\nname = \"Mosswick materials laboratory\"\nstation = \"wet-room\"\n");
    if let Some(address) = mqtt {
        text += &format!("[broker]\nlisten = \"{address}\"\n");
    }
    if let Some(address) = listen {
        text += &format!("[screen]\nlisten = \"{address}\"\n");
    }
    for bench in &day.benches {
        text += &format!("[[bench]]\nname = \"{}\"\n", bench.name);
    }
    for bench in &day.benches {
        let each = [
            (&bench.balance.name, "balance", "signed-steady"),
            (&bench.cup.name, "counter", "running-total"),
            (&bench.scanner, "scanner", "plain-code"),
        ];
        for (name, kind, profile) in each {
            let port = instruments.links().find(|(n, _)| n == name).map(|(_, p)| p.display().to_string()).unwrap_or_default();
            text += &config_of(name, kind, &bench.name, Path::new(&port), profile);
        }
    }
    text
}
