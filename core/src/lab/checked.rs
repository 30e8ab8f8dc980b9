//! Checks of instruments: a balance with a reference mass, a cup by hand.

use super::ask::{Ask, needs_words, no, typed_mass};
use super::entities::{BalanceCheck, CheckBegun, CupCheck, Entity, LooseWhat, MassClass, Reference, Weighing};
use super::{Lab, New, Outcome, Refusal};
use crate::fact::{BalanceChecked, CupChecked, Fact, Recorded};
use crate::names::{InstrumentName, Operator};
use crate::quantity::Mass;
use crate::sheet::Seq;
use crate::stamp::{SECOND_US, Stamp};
use alloc::collections::BTreeSet;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// Checks of one instrument kept at hand; older ones stay in the ledger.
const KEPT: usize = 30;
/// A check that was begun waits so long for its mass, and a mass so long for its check (common practice, no source).
const WAITS_US: i64 = 600 * SECOND_US;

/// Tolerances of reference masses, nominal grams and milligrams of F2 and M1: OIML R 111-1, table 1 `[pub]`.
const CLASSES: [(i64, f64, f64); 5] = [(10, 0.6, 2.0), (20, 0.8, 2.5), (50, 1.0, 3.0), (100, 1.6, 5.0), (200, 3.0, 10.0)];

fn class_tolerance(reference: &Reference) -> Option<Mass> {
    let row = CLASSES.iter().find(|(g, ..)| Mass::from_ug(g * 1_000_000) == reference.nominal)?;
    let mg = match reference.class? {
        MassClass::F2 => row.1,
        MassClass::M1 => row.2,
    };
    Some(Mass::from_ug(libm::round(mg * 1_000.0) as i64))
}

impl Lab {
    pub(super) fn ask_checked(&self, ask: Ask, at: &Stamp) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::CheckBalance { balance, nominal_g, certificate_g, class, who } => {
                self.instrument_there(&balance)?;
                let nominal = typed_mass(&nominal_g)?;
                let certificate = certificate_g.as_deref().map(typed_mass).transpose()?;
                if certificate.is_some_and(|c| (c - nominal).abs().ug() > nominal.ug() / 100) {
                    return Err(no(String::from(
                        "the certificate's mass lies more than 1 % from the nominal one: look for a slip in either",
                    )));
                }
                let reference = Reference { nominal, certificate, class };
                let rule = self.setup.balance_rule.and_then(|r| r.tolerance);
                if rule.is_none() && class_tolerance(&reference).is_none() {
                    return Err(no(String::from(
                        "no tolerance is known: name the class (F2 or M1) of a mass of 10, 20, 50, 100 or 200 g, or set tolerance_g under [balance_check]",
                    )));
                }
                let on_pan = self.instruments.get(&balance).and_then(|i| i.pan).filter(|p| p.loose);
                let fresh = on_pan.filter(|p| (0..WAITS_US).contains(&at.since(&p.at).us));
                let taken = fresh.and_then(|p| self.balance_checked(&balance, p.seq, reference));
                let begun = || Fact::BalanceCheckBegun { balance: balance.clone(), reference };
                Ok(vec![New::by(Some(who), taken.unwrap_or_else(begun))])
            }
            Ask::CheckCup { cup, drop_height_mm, wear, base, tool, who } => {
                self.instrument_there(&cup)?;
                if !(drop_height_mm > 0.0 && drop_height_mm <= 50.0) {
                    return Err(no(String::from("a height of fall lies between 0 and 50 mm; it is set to 10 mm")));
                }
                for words in [&wear, &base].into_iter().chain(&tool) {
                    needs_words(words)?;
                }
                let checked = CupChecked { cup, drop_height_mm, wear, base, tool };
                Ok(vec![New::by(Some(who), Fact::CupChecked(checked))])
            }
            _ => Ok(vec![]),
        }
    }

    fn instrument_there(&self, name: &InstrumentName) -> Result<(), Refusal> {
        if self.instruments.contains_key(name) {
            return Ok(());
        }
        let names: Vec<&str> = self.instruments.keys().map(InstrumentName::as_str).collect();
        let hint = crate::near::meant(name.as_str(), names.iter().copied());
        Err(no(format!("there is no instrument {name}{hint}; there are {}", names.join(", "))))
    }

    /// Whether the next mass of a balance is that of its check.
    pub(super) fn check_waits(&self, balance: &InstrumentName, at: &Stamp) -> bool {
        let begun = self.instruments.get(balance).and_then(|i| i.check_begun.as_ref());
        begun.is_some_and(|b| (0..WAITS_US).contains(&at.since(&b.at).us))
    }

    /// Checks that the masses just taken complete.
    pub(super) fn checks_completed(&self, outcome: &Outcome) -> Vec<New> {
        let one = |r: &Recorded| {
            let Fact::Weighed(w) = &r.fact else { return None };
            let balance = w.balance.as_ref().filter(|b| w.link.is_none() && self.check_waits(b, &r.at))?;
            let begun: &CheckBegun = self.instruments.get(balance)?.check_begun.as_ref()?;
            Some(New::by(begun.by.clone(), self.balance_checked(balance, r.seq, begun.reference)?))
        };
        outcome.facts.iter().filter_map(one).collect()
    }

    fn balance_checked(&self, balance: &InstrumentName, weighing: Seq, reference: Reference) -> Option<Fact> {
        let LooseWhat::Weighing { weighing: Weighing { mass, step, .. }, .. } = &self.loose.get(&weighing)?.what else {
            return None;
        };
        let error = *mass - reference.certificate.unwrap_or(reference.nominal);
        let set = self.setup.balance_rule.and_then(|r| r.tolerance);
        // What the reference mass may be off by, and what the display rounds away.
        let tolerance = set.or_else(|| Some(class_tolerance(&reference)? + step.unwrap_or(Mass::ZERO)))?;
        let passed = error.abs() <= tolerance;
        let checked = BalanceChecked { balance: balance.clone(), weighing, reference, mass: *mass, error, tolerance, passed };
        Some(Fact::BalanceChecked(checked))
    }

    pub(super) fn apply_checked(&mut self, r: &Recorded, touched: &mut BTreeSet<Entity>) {
        let (name, by): (_, Option<Operator>) = match &r.fact {
            Fact::BalanceCheckBegun { balance, .. } => (balance, r.who.clone()),
            Fact::BalanceChecked(c) => (&c.balance, r.who.clone()),
            Fact::CupChecked(c) => (&c.cup, r.who.clone()),
            _ => return,
        };
        let Some(state) = self.instruments.get_mut(name) else { return };
        touched.insert(Entity::Instrument(name.clone()));
        match &r.fact {
            Fact::BalanceCheckBegun { reference, .. } => {
                state.check_begun = Some(CheckBegun { reference: *reference, at: r.at, by });
            }
            Fact::BalanceChecked(c) => {
                state.check_begun = None;
                state.pan.take_if(|p| p.seq == c.weighing);
                state.checks.push(BalanceCheck { seq: r.seq, at: r.at, error: c.error, tolerance: c.tolerance, by });
                let surplus = state.checks.len().saturating_sub(KEPT);
                state.checks.drain(..surplus);
                self.no_longer_loose(c.weighing, touched);
            }
            Fact::CupChecked(c) => {
                let CupChecked { drop_height_mm, wear, base, tool, .. } = c.clone();
                state.cup_checks.push(CupCheck { seq: r.seq, at: r.at, drop_height_mm, wear, base, tool, by });
                let surplus = state.cup_checks.len().saturating_sub(KEPT);
                state.cup_checks.drain(..surplus);
            }
            _ => (),
        }
    }

    /// A mass of a check is no container's: nobody is asked for it any more.
    fn no_longer_loose(&mut self, weighing: Seq, touched: &mut BTreeSet<Entity>) {
        if self.loose.remove(&weighing).is_some() {
            touched.insert(Entity::Loose(weighing));
        }
        for bench in self.benches.values_mut() {
            let latest = bench.latest.take_if(|l| l.seq == weighing);
            if latest.as_ref().is_some_and(|l| l.loose == bench.refusal) {
                bench.refusal = None;
            }
            if latest.is_some() {
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }
}
