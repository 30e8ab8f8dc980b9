//! From a sheet and a method to the limits: the one place where a result is made.

use crate::checks::{self, Worked};
use crate::limits::{CheckRow, Limits, Severity, State};
use crate::method::Method;
use crate::sheet::{Kind, Sheet};
use crate::soil::determined::{Determined, Water, determine};
use crate::soil::{chart, indices, limits};
use alloc::string::ToString;
use alloc::vec::Vec;

/// Computes limits, indices and checks.
///
/// Total: every sheet and method is answered, and the same ones always alike.
/// Every trial that no person set aside enters the line; windows and outliers
/// produce checks, never an exclusion.
///
/// Groups of the plasticity chart are decided on the reported limits. The
/// 95 % interval of the liquid limit is the classical Student interval from
/// these trials alone, given from one degree of freedom on; with three trials
/// its factor is 12.7, so it is wide.
pub fn evaluate(sheet: &Sheet, method: &Method) -> Limits {
    let trials = determine(sheet, method);
    let liquid = limits::liquid(sheet, &trials, method);
    let plastic = limits::plastic(sheet, &trials, method);
    let (liquid_limit, line) = match &liquid {
        Ok((limit, line)) => (Some(limit.clone()), *line),
        Err(_) => (None, None),
    };
    let index = limits::index(sheet, liquid_limit.as_ref(), plastic.as_ref(), method);
    let worked = Worked {
        sheet,
        method,
        liquid: liquid_limit.as_ref(),
        no_liquid: liquid.as_ref().err().copied(),
        line,
        plastic: plastic.as_ref(),
        index: &index,
        trials: &trials,
    };
    let checks = checks::all(&worked);
    let state = state(sheet, &trials, &checks);
    let rows = trials.iter().map(|t| t.row(used(t, liquid.is_ok()), method)).collect();

    let mut result = Limits {
        specimen: sheet.specimen.clone(),
        state,
        method: method.name.clone(),
        edition: method.edition.clone(),
        liquid_limit,
        plastic_limit: plastic,
        plasticity_index: index,
        natural_water_percent: limits::natural(&trials),
        liquidity_index: None,
        consistency_index: None,
        flow_index: None,
        toughness_index: None,
        activity: None,
        group: None,
        trials: rows,
        checks,
    };
    fill_indices(&mut result, sheet);
    result.group = group(&result);
    result
}

/// Whether a determination entered the result.
fn used(trial: &Determined, liquid_obtained: bool) -> bool {
    match trial.trial.kind {
        Kind::Liquid => liquid_obtained && trial.liquid_point().is_some(),
        Kind::Thread | Kind::Natural => trial.active && trial.water().is_some(),
        // Cup and cone are never mixed.
        Kind::Cone => false,
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
        (t.active && matches!(t.water, Water::Wrong(_) | Water::NotAWater(_))) || (t.counts_as(Kind::Liquid) && t.drops.is_none())
    };
    if checks.iter().any(open) || trials.iter().any(unusable) {
        State::Provisional
    } else if sheet.reviewed {
        State::Reviewed
    } else {
        State::Complete
    }
}

fn fill_indices(result: &mut Limits, sheet: &Sheet) {
    result.flow_index = result.liquid_limit.as_ref().and_then(|l| indices::flow(l.slope_per_decade?));
    let (Some(ll), Some(pl), Some(pi)) = (&result.liquid_limit, &result.plastic_limit, result.plasticity_index.value) else {
        return;
    };
    let water = result.natural_water_percent;
    result.liquidity_index = water.and_then(|w| indices::liquidity(w, pl.value, pi));
    result.consistency_index = water.and_then(|w| indices::consistency(w, ll.value, pi));
    result.toughness_index = result.flow_index.and_then(|f| indices::toughness(pi, f));
    result.activity = sheet.clay_percent.and_then(|clay| indices::activity(pi, clay));
}

fn group(result: &Limits) -> Option<alloc::string::String> {
    let ll = result.liquid_limit.as_ref().map(|l| l.rounded);
    let group = if result.plasticity_index.non_plastic {
        chart::group_of_non_plastic(ll)
    } else {
        chart::group(ll?, result.plasticity_index.rounded?)
    };
    Some(group.symbol().to_string())
}

/// Names of the holds that keep a result provisional, for a listing.
pub fn open_holds(result: &Limits) -> Vec<&CheckRow> {
    result.checks.iter().filter(|c| c.severity == Severity::Hold && c.answered.is_none()).collect()
}
