//! Corrections: new facts that name the fact they correct, who, and why.

use super::ask::{Ask, depth_believable, drops_believable, needs_words, typed_mass};
use super::entities::{LooseWhat, Specimen, Weighing};
use super::{Lab, New, Refusal};
use crate::fact::{ClosureFault, Fact, TrialRef};
use crate::names::{BenchName, Operator, SpecimenId};
use crate::sheet::Seq;
use crate::soil::determined::about;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

impl Lab {
    pub(super) fn ask_correction(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::SetAside { what, who, why } => {
                needs_words(&why)?;
                self.may_be_set_aside(what)?;
                Ok(vec![New::by(Some(who), Fact::SetAside { what, fault: None, why })])
            }
            Ask::SetAsideTrial { specimen, kind, no, who, why } => {
                needs_words(&why)?;
                self.trial_counts(&specimen, TrialRef { kind, no })?;
                Ok(vec![New::by(Some(who), Fact::TrialSetAside { specimen, trial: kind, no, why })])
            }
            Ask::Explain { what, who, why } => {
                needs_words(&why)?;
                match self.loose.contains_key(&what) {
                    true => Ok(vec![New::by(Some(who), Fact::Explained { what, says: why })]),
                    false => Err(Refusal(format!("nothing loose has the number {what}: it was tied or set aside, or never was"))),
                }
            }
            Ask::MoveTrial { specimen, kind, no, to, who, why } => {
                needs_words(&why)?;
                self.move_trial(specimen, TrialRef { kind, no }, to, who, why)
            }
            Ask::Slid { bench, who, why } => self.closure_failed(bench, ClosureFault::Slid, who, why),
            Ask::GrooveTore { bench, who, why } => self.closure_failed(bench, ClosureFault::Tore, who, why),
            Ask::AmendMass { weighing, mass_g, who, why } => {
                needs_words(&why)?;
                let mass = typed_mass(&mass_g)?;
                let was = self.weighing(weighing).map(|w| w.mass);
                let was =
                    was.ok_or_else(|| Refusal(format!("no weighing has the number {weighing}, or its specimen is not at hand")))?;
                self.all_at_hand(weighing)?;
                Ok(vec![New::by(Some(who), Fact::MassAmended { weighing, was, mass, why })])
            }
            Ask::AmendDrops { count, drops, who, why } => {
                needs_words(&why)?;
                drops_believable(drops)?;
                if self.specimens.values().find_map(|s| s.count(count)).is_some_and(|c| c.penetration_mm.is_some()) {
                    return Err(Refusal(format!("{count} is a penetration of the cone: correct it with amend_penetration")));
                }
                let was = self
                    .drops_of(count)
                    .ok_or_else(|| Refusal(format!("no count has the number {count}, or its specimen is not at hand")))?;
                Ok(vec![New::by(Some(who), Fact::DropsAmended { count, was, drops, why })])
            }
            Ask::AmendPenetration { what, penetration_mm, who, why } => {
                needs_words(&why)?;
                depth_believable(penetration_mm)?;
                let was_mm = self.specimens.values().find_map(|s| s.count(what)).filter(|c| c.set_aside.is_none());
                let was_mm = was_mm.and_then(|c| c.penetration_mm).ok_or_else(|| {
                    Refusal(format!("no penetration in force has the number {what}, or its specimen is not at hand"))
                })?;
                Ok(vec![New::by(Some(who), Fact::PenetrationAmended { penetration: what, was_mm, penetration_mm, why })])
            }
            Ask::NewPaste { bench, who, why } => {
                let state = self.bench_there(&bench)?;
                let why = why.unwrap_or_else(|| String::from("a new paste was made"));
                needs_words(&why)?;
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
                let what = weighing.max(count);
                let what = what.ok_or_else(|| Refusal(format!("nothing at bench {bench} can be taken back any more")))?;
                self.may_be_set_aside(what)?;
                let why = why.unwrap_or_else(|| String::from("taken back at the bench"));
                needs_words(&why)?;
                Ok(vec![New::by(who, Fact::SetAside { what, fault: None, why })])
            }
            _ => Ok(vec![]),
        }
    }

    /// The run that goes on at a bench, or its latest count whose slice is owed, does not stand.
    fn closure_failed(
        &self,
        bench: BenchName,
        fault: ClosureFault,
        who: Option<Operator>,
        why: Option<String>,
    ) -> Result<Vec<New>, Refusal> {
        let state = self.bench_there(&bench)?;
        let who = who.or_else(|| state.signed_in.clone());
        let (usual, word) = match fault {
            ClosureFault::Slid => ("the soil slid in the groove", "slide"),
            ClosureFault::Tore => ("the groove tore", "tear"),
        };
        let why = why.unwrap_or_else(|| String::from(usual));
        needs_words(&why)?;
        let specimen = self.liquid_at(&bench).cloned();
        let mut cups = self.running.keys().filter(|cup| self.benches_of(cup).contains(&bench));
        if let Some(specimen) = specimen.clone().filter(|_| cups.next().is_some()) {
            return Ok(vec![New::by(who, Fact::ClosureFailed { bench, specimen, fault, running: true, why })]);
        }
        let owed = state.owed.as_ref().and_then(|o| o.counts.last().copied());
        match (owed, specimen) {
            (Some(what), _) => Ok(vec![New::by(who, Fact::SetAside { what, fault: Some(fault), why })]),
            // A groove may tear while it is cut, before there is a count.
            (None, Some(specimen)) if fault == ClosureFault::Tore => {
                Ok(vec![New::by(who, Fact::ClosureFailed { bench, specimen, fault, running: false, why })])
            }
            _ => Err(Refusal(format!(
                "no count of bench {bench} waits for its slice, so nothing could {word}; when the slice was weighed already, set that trial aside"
            ))),
        }
    }

    /// A determination belongs to another specimen, with its counts and weighings.
    fn move_trial(
        &self,
        specimen: SpecimenId,
        which: TrialRef,
        to: SpecimenId,
        who: Operator,
        why: String,
    ) -> Result<Vec<New>, Refusal> {
        let trial = self.specimen_there(&specimen)?.trial(which);
        let name = about(which.kind, which.no);
        if trial.is_none() {
            return Err(Refusal(format!("{specimen} has no determination {name}")));
        }
        let target = self.specimen_there(&to)?;
        if to == specimen {
            return Err(Refusal(format!("{name} belongs to {to} already")));
        }
        self.room_for_moved(target)?;
        let to_no = target.next_no(which.kind);
        let (trial, no) = (which.kind, which.no);
        Ok(vec![New::by(Some(who), Fact::TrialMoved { specimen, trial, no, to, to_no, why })])
    }

    fn may_be_set_aside(&self, what: Seq) -> Result<(), Refusal> {
        if self.drops_of(what).is_some() || self.loose.contains_key(&what) {
            return Ok(());
        }
        match self.weighing(what) {
            Some(_) => self.may_be_taken_out(what),
            None => Err(Refusal(format!("no weighing or count in force has the number {what}, or its specimen is not at hand"))),
        }
    }

    /// Whether a tied weighing can leave its place without leaving others behind.
    pub(super) fn may_be_taken_out(&self, seq: Seq) -> Result<(), Refusal> {
        self.all_at_hand(seq)?;
        let trials = self.specimens.values().flat_map(|s| &s.trials);
        for trial in trials.filter(|t| t.weighings().any(|w| w.seq == seq)) {
            let container = &trial.container;
            let only_wet = matches!(trial.wets.as_slice(), [one] if one.seq == seq);
            if only_wet && !(trial.dries.is_empty() && trial.repeats.is_empty()) {
                return Err(Refusal(format!(
                    "{container} was weighed again after this wet mass: correct the mass, set the whole trial aside, or take the later weighings back first"
                )));
            }
            let kept = self.containers.get(container).is_some_and(|c| c.tares.iter().any(|w| w.seq == seq));
            if trial.tare.as_ref().is_some_and(|w| w.seq == seq) && !kept {
                return Err(Refusal(format!(
                    "{container} was weighed empty many times since: correct the mass, or set the trial aside"
                )));
            }
        }
        Ok(())
    }

    /// Everything that rests on a weighing must be at hand before it is changed.
    fn all_at_hand(&self, seq: Seq) -> Result<(), Refusal> {
        match self.rests_on(seq).first() {
            Some(id) => Err(Refusal(format!("specimen {id} rests on this weighing and could not be read from the ledger"))),
            None => Ok(()),
        }
    }

    fn trial_counts(&self, specimen: &SpecimenId, which: TrialRef) -> Result<(), Refusal> {
        let trial = self.specimen_there(specimen)?.trial(which);
        match trial.map(|t| t.set_aside.is_some()) {
            Some(false) => Ok(()),
            Some(true) => Err(Refusal(format!("{} of {specimen} is set aside already", about(which.kind, which.no)))),
            None => Err(Refusal(format!("{specimen} has no determination {}", about(which.kind, which.no)))),
        }
    }

    /// A weighing that is in force or loose.
    fn weighing(&self, seq: Seq) -> Option<&Weighing> {
        let of_trials = self.specimens.values().flat_map(Specimen::weighings);
        let of_containers = self.containers.values().flat_map(|c| c.tares.iter().chain(&c.with_lid));
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
