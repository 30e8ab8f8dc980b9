//! Which balance weighed: one for all three masses, as fine as the method asks,
//! and checked with a reference mass.

use super::{Worked, container_text, facts, hold, note};
use crate::limits::{CheckRow, Severity};
use crate::soil::determined::Determined;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active() {
        different(t, rows);
        coarse(worked, t, rows);
        checked(worked, t, rows);
    }
}

fn different(t: &Determined, rows: &mut Vec<CheckRow>) {
    let mut names = t.trial.readings.iter().filter_map(|r| r.balance.as_ref());
    let Some(first) = names.next() else { return };
    if let Some(other) = names.find(|n| *n != first) {
        let says = format!(
            "{} was weighed on {first} and on {other}: what either is off by does not cancel. Weigh a container on one balance throughout; the uncertainty allows for it.",
            container_text(t.trial)
        );
        rows.push(note("balances", &t.about, says, facts(t.trial)));
    }
}

fn coarse(worked: &Worked, t: &Determined, rows: &mut Vec<CheckRow>) {
    let reads = worked.method.liquid.balance_reads_g;
    let coarsest = t.trial.readings.iter().filter_map(|r| r.step).max();
    // A thousandth of the step is the arithmetic of doubles.
    if let Some(step) = coarsest.filter(|s| s.grams() > reads * 1.001) {
        let says = format!(
            "the balance showed steps of {step} g, the method asks for {reads} g; use a finer one, or set its display to more decimals."
        );
        rows.push(note("coarse_balance", &t.about, says, facts(t.trial)));
    }
}

fn checked(worked: &Worked, t: &Determined, rows: &mut Vec<CheckRow>) {
    let read = || t.trial.readings.iter().filter_map(|r| Some((r.balance.as_ref()?, r.checked)));
    if let Some((balance, _)) = read().find(|(_, c)| c.is_some_and(|c| !c.passed)) {
        let says = format!(
            "balance {balance} had failed its latest check with a reference mass when it weighed {}. Have it adjusted, check it again, and weigh what can still be weighed.",
            container_text(t.trial)
        );
        rows.push(hold("balance_failed", &t.about, says, facts(t.trial)));
    }
    let Some(rule) = worked.laboratory.balance_rule else { return };
    let late = |c: Option<crate::lab::entities::Checked>| c.is_none_or(|c| c.ago_us > rule.every_us);
    if let Some((balance, _)) = read().find(|(_, c)| late(*c)) {
        let hours = rule.every_us / crate::stamp::HOUR_US;
        let says = format!(
            "balance {balance} had not been checked with a reference mass in the {hours} h before it weighed {}. Check it now: when it holds, answer this.",
            container_text(t.trial)
        );
        let row = if rule.overdue == Severity::Hold { hold } else { note };
        rows.push(row("balance_overdue", &t.about, says, facts(t.trial)));
    }
}
