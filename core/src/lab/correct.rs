//! Corrections: new facts that name the fact they correct, who, and why.

use super::ask::{Ask, needs_words, typed_mass};
use super::entities::{LooseWhat, Weighing};
use super::{Lab, New, Refusal};
use crate::fact::{Fact, TrialRef};
use crate::sheet::Seq;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

impl Lab {
    pub(super) fn ask_correction(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::SetAside { what, who, why } => {
                needs_words(&why)?;
                self.known(what)?;
                Ok(vec![New::by(Some(who), Fact::SetAside { what, why })])
            }
            Ask::SetAsideTrial { specimen, kind, no, who, why } => {
                needs_words(&why)?;
                self.trial_there(&specimen, TrialRef { kind, no })?;
                Ok(vec![New::by(Some(who), Fact::TrialSetAside { specimen, trial: kind, no, why })])
            }
            Ask::AmendMass { weighing, mass_g, who, why } => {
                needs_words(&why)?;
                let mass = typed_mass(&mass_g)?;
                let was = self.weighing(weighing).map(|w| w.mass);
                let was =
                    was.ok_or_else(|| Refusal(format!("no weighing has the number {weighing}, or its specimen is not at hand")))?;
                Ok(vec![New::by(Some(who), Fact::MassAmended { weighing, was, mass, why })])
            }
            Ask::AmendDrops { count, drops, who, why } => {
                needs_words(&why)?;
                if !(1..=500).contains(&drops) {
                    return Err(Refusal(String::from("a count lies between 1 and 500 drops")));
                }
                let was = self
                    .drops_of(count)
                    .ok_or_else(|| Refusal(format!("no count has the number {count}, or its specimen is not at hand")))?;
                Ok(vec![New::by(Some(who), Fact::DropsAmended { count, was, drops, why })])
            }
            Ask::NewPaste { bench, who, why } => {
                let state = self.bench_there(&bench)?;
                let why = why.unwrap_or_else(|| String::from("a new paste was made"));
                let who = who.or_else(|| state.signed_in.clone());
                let owed = state
                    .owed
                    .as_ref()
                    .ok_or_else(|| Refusal(String::from("no slice is owed here, so there is no paste to give up")))?;
                let gone = |&count: &Seq| New::by(who.clone(), Fact::CountSuperseded { count, why: why.clone() });
                Ok(owed.counts.iter().map(gone).collect())
            }
            Ask::Undo { bench, who, why } => {
                let state = self.bench_there(&bench)?;
                let who = who.or_else(|| state.signed_in.clone());
                let weighing = state.latest.as_ref().map(|l| l.seq);
                let count = state.owed.as_ref().and_then(|o| o.counts.last().copied());
                let what = weighing.max(count).filter(|&seq| self.known(seq).is_ok());
                let what = what.ok_or_else(|| Refusal(format!("nothing at bench {bench} can be taken back any more")))?;
                let why = why.unwrap_or_else(|| String::from("taken back at the bench"));
                Ok(vec![New::by(who, Fact::SetAside { what, why })])
            }
            _ => Ok(vec![]),
        }
    }

    fn known(&self, what: Seq) -> Result<(), Refusal> {
        if self.weighing(what).is_some() || self.drops_of(what).is_some() {
            return Ok(());
        }
        Err(Refusal(format!("no weighing or count in force has the number {what}, or its specimen is not at hand")))
    }

    /// A weighing that is in force or loose.
    fn weighing(&self, seq: Seq) -> Option<&Weighing> {
        let of_trials = self
            .specimens
            .values()
            .flat_map(|s| &s.trials)
            .flat_map(|t| t.tare.iter().chain(&t.wets).chain(t.dries.iter().map(|d| &d.weighing)));
        let of_containers = self.containers.values().flat_map(|c| &c.tares);
        let loose = self.loose.get(&seq).and_then(|l| match &l.what {
            LooseWhat::Weighing { weighing, .. } => Some(weighing),
            LooseWhat::Count(_) => None,
        });
        of_trials.chain(of_containers).find(|w| w.seq == seq).or(loose)
    }

    /// Drops of a count that is in force or loose.
    fn drops_of(&self, seq: Seq) -> Option<u32> {
        let of_specimens = self.specimens.values().find_map(|s| s.count(seq)).filter(|c| c.set_aside.is_none());
        let loose = self.loose.get(&seq).and_then(|l| match &l.what {
            LooseWhat::Count(count) => Some(count),
            LooseWhat::Weighing { .. } => None,
        });
        of_specimens.or(loose).map(|c| c.drops)
    }
}
