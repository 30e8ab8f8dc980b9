//! From a sheet and a method to the limits: the one place where a result is made.

use crate::checks::{self, Worked};
use crate::limits::{CheckRow, Limits, PlasticityIndex, Severity, State};
use crate::method::{Device, Method};
use crate::sheet::{Kind, Sheet};
use crate::soil::determined::{Determined, Water, determine};
use crate::soil::uncertainty::{self, Laboratory};
use crate::soil::{chart, indices, limits};
use alloc::string::ToString;
use alloc::vec::Vec;

/// Computes limits, indices and checks, for a laboratory without a record of its own.
///
/// Total: every sheet and method is answered, and the same ones always alike.
/// Every trial that no person set aside enters the line; windows and outliers
/// produce checks, never an exclusion.
///
/// Groups of the plasticity chart are decided on the reported limits.
pub fn evaluate(sheet: &Sheet, method: &Method) -> Limits {
    evaluate_with(sheet, method, &Laboratory::default())
}

/// The same, with what the laboratory's own record says about scatter and
/// balances: values, groups and state do not depend on it, uncertainties do.
pub fn evaluate_with(sheet: &Sheet, method: &Method, laboratory: &Laboratory) -> Limits {
    let trials = determine(sheet, method);
    let mut obtained = limits::liquid(sheet, &trials, method);
    let mut plastic = limits::plastic(sheet, &trials, method);
    let liquid_share = obtained.as_mut().ok().map(|(limit, line)| {
        let line = *line;
        uncertainty::liquid(limit, line.as_ref(), &trials, method, laboratory)
    });
    let plastic_share = plastic.as_mut().map(|limit| uncertainty::plastic(limit, &trials, method, laboratory));
    let (liquid_limit, line) = match &obtained {
        Ok((limit, line)) => (Some(limit.clone()), *line),
        Err(_) => (None, None),
    };
    let mut index = limits::index(sheet, liquid_limit.as_ref(), plastic.as_ref(), method);
    if let (Some(ll), Some(a), Some(pl), Some(b)) = (&liquid_limit, &liquid_share, &plastic, &plastic_share) {
        uncertainty::index(&mut index, (ll, a), (pl, b), method, laboratory);
    }
    let worked = Worked {
        sheet,
        method,
        liquid: liquid_limit.as_ref(),
        no_liquid: obtained.as_ref().err().copied(),
        line,
        plastic: plastic.as_ref(),
        index: &index,
        trials: &trials,
        laboratory,
    };
    let checks = checks::all(&worked);
    let state = state(sheet, &trials, &checks);
    let row = |t: &Determined| t.row(used(t, obtained.is_ok()), uncertainty::of_water(t, method, laboratory), method);
    let rows = trials.iter().map(row).collect();
    let mut result = blank(sheet, method);
    (result.state, result.trials, result.checks) = (state, rows, checks);
    result.natural_water_percent = limits::natural(&trials);
    (result.liquid_limit, result.plastic_limit, result.plasticity_index) = (liquid_limit, plastic, index);
    fill_indices(&mut result, sheet, method);
    fill_groups(&mut result, sheet);
    result
}

fn blank(sheet: &Sheet, method: &Method) -> Limits {
    Limits {
        specimen: sheet.specimen.clone(),
        state: State::Provisional,
        method: method.name.clone(),
        edition: method.edition.clone(),
        liquid_limit: None,
        plastic_limit: None,
        plasticity_index: PlasticityIndex::default(),
        natural_water_percent: None,
        liquidity_index: None,
        consistency_index: None,
        flow_index: None,
        toughness_index: None,
        activity: None,
        group: None,
        group_en_iso_14688_2: None,
        group_m145: None,
        group_index: None,
        trials: Vec::new(),
        checks: Vec::new(),
    }
}

/// Whether a determination entered the result. Cup and cone are never mixed.
fn used(trial: &Determined, liquid_obtained: bool) -> bool {
    match trial.trial.kind {
        Kind::Liquid | Kind::Cone => liquid_obtained && trial.liquid_point().is_some(),
        Kind::Thread | Kind::Natural => trial.active && trial.water().is_some(),
    }
}

/// Complete when nothing is missing and no hold is open. What is missing is
/// what the checks call missing, so a provisional result always says why.
fn state(sheet: &Sheet, trials: &[Determined], checks: &[CheckRow]) -> State {
    let open = |row: &CheckRow| match row.severity {
        Severity::Hold => row.answered.is_none(),
        Severity::Note => checks::keeps_provisional(&row.check),
    };
    // An answer explains impossible masses or a count of nothing; it does not
    // make a water content or a number of drops of them.
    let unusable = |t: &Determined| {
        (t.active && matches!(t.water, Water::Wrong(_) | Water::NotAWater(_)))
            || (t.counts_as(t.limit_kind) && t.reading().is_none())
    };
    if checks.iter().any(open) || trials.iter().any(unusable) {
        State::Provisional
    } else if sheet.reviewed {
        State::Reviewed
    } else {
        State::Complete
    }
}

fn fill_indices(result: &mut Limits, sheet: &Sheet, method: &Method) {
    // A flow index belongs to the cup: the cone's line says nothing about drops.
    let slope = result.liquid_limit.as_ref().and_then(|l| l.slope_per_decade).filter(|_| method.device() == Device::Cup);
    result.flow_index = slope.and_then(indices::flow);
    let (Some(ll), Some(pl), Some(pi)) = (&result.liquid_limit, &result.plastic_limit, result.plasticity_index.value) else {
        return;
    };
    let water = result.natural_water_percent;
    result.liquidity_index = water.and_then(|w| indices::liquidity(w, pl.value, pi));
    result.consistency_index = water.and_then(|w| indices::consistency(w, ll.value, pi));
    result.toughness_index = result.flow_index.and_then(|f| indices::toughness(pi, f));
    result.activity = sheet.clay_percent.and_then(|clay| indices::activity(pi, clay));
}

fn fill_groups(result: &mut Limits, sheet: &Sheet) {
    let ll = result.liquid_limit.as_ref().map(|l| l.rounded);
    let non_plastic = result.plasticity_index.non_plastic;
    let pi = if non_plastic { Some(0.0) } else { result.plasticity_index.rounded };
    let Some(pi) = pi else { return };
    let organic =
        result.liquid_limit.as_ref().zip(sheet.liquid_limit_oven_dried).and_then(|(l, dried)| chart::organic(l.value, dried));
    let group = match (organic, non_plastic, ll) {
        (Some(organic), _, _) => organic,
        (None, true, _) => chart::group_of_non_plastic(ll),
        (None, false, Some(ll)) => chart::group(ll, pi),
        (None, false, None) => return,
    };
    result.group = Some(group.symbol().to_string());
    let plasticity = if non_plastic { Some("non-plastic") } else { ll.map(chart::plasticity_by_liquid_limit) };
    result.group_en_iso_14688_2 = plasticity.map(ToString::to_string);
    let Some(passing) = sheet.passing_75um_percent else { return };
    let Some(group) = chart::m145(passing, ll, pi) else { return };
    result.group_m145 = Some(group.to_string());
    // The index of non-plastic soil is 0 (M 145, from memory, not checked against the text).
    result.group_index = if non_plastic { Some(0) } else { ll.map(|ll| indices::group_index_of(group, passing, ll, pi)) };
}

/// Names of the holds that keep a result provisional, for a listing.
pub fn open_holds(result: &Limits) -> Vec<&CheckRow> {
    result.checks.iter().filter(|c| c.severity == Severity::Hold && c.answered.is_none()).collect()
}
