//! What persons ask for. One closed set, the same for every way in.

use super::entities::{Latest, LooseWhat};
use super::role::Role;
use super::{Lab, New, Refusal};
use crate::fact::{Counted, Fact, Intention, Limit, SpecimenOpened, TrialRef, Weighed};
use crate::names::{BenchName, ContainerId, MethodName, Operator, SpecimenId};
use crate::quantity::{Mass, MassUnit};
use crate::sheet::{Kind, Seq};
use crate::signal::Basis;
use crate::stamp::{Stamp, parse_rfc3339};
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

/// An ask that may write. Reading asks are answered without the laboratory.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(tag = "ask", rename_all = "snake_case", deny_unknown_fields)]
#[allow(missing_docs)]
pub enum Ask {
    /// Begin a specimen's tests.
    OpenSpecimen {
        specimen: SpecimenId,
        #[serde(default)]
        method: Option<MethodName>,
        #[serde(default)]
        edition: Option<String>,
        #[serde(default)]
        description: Option<String>,
        #[serde(default)]
        preparation: Option<String>,
        #[serde(default)]
        passing_75um_percent: Option<f64>,
        #[serde(default)]
        clay_percent: Option<f64>,
        #[serde(default)]
        who: Option<Operator>,
    },
    /// Be named on what happens at a bench.
    SignIn { bench: BenchName, operator: Operator },
    /// No longer.
    SignOut { bench: BenchName },
    /// Say what a bench works on.
    Intend {
        bench: BenchName,
        specimen: SpecimenId,
        intention: Intention,
        #[serde(default)]
        who: Option<Operator>,
    },
    /// Nothing in particular.
    IntendNothing {
        bench: BenchName,
        #[serde(default)]
        who: Option<Operator>,
    },
    /// A code, as if a scanner had read it at the bench.
    Code { bench: BenchName, text: String },
    /// Say what the latest weighing at a bench is of.
    SayRole {
        bench: BenchName,
        container: ContainerId,
        role: Role,
        #[serde(default)]
        who: Option<Operator>,
        why: String,
    },
    /// Tie any weighing to a container, also one that is tied already.
    Tie { weighing: Seq, bench: BenchName, container: ContainerId, role: Role, who: Operator, why: String },
    /// Tie a loose count to a specimen.
    TieCount { count: Seq, bench: BenchName, specimen: SpecimenId, who: Operator, why: String },
    /// A weighing or count does not count.
    SetAside { what: Seq, who: Operator, why: String },
    /// A determination does not count.
    SetAsideTrial { specimen: SpecimenId, kind: Kind, no: u32, who: Operator, why: String },
    /// Correct a mass.
    AmendMass { weighing: Seq, mass_g: String, who: Operator, why: String },
    /// Correct a number of drops.
    AmendDrops { count: Seq, drops: u32, who: Operator, why: String },
    /// Enter a mass by hand.
    TypeMass {
        bench: BenchName,
        container: ContainerId,
        mass_g: String,
        #[serde(default)]
        role: Option<Role>,
        who: Operator,
    },
    /// Enter a count by hand.
    TypeDrops { bench: BenchName, drops: u32, who: Operator },
    /// The paste of the counts so far is given up or was made anew.
    NewPaste {
        bench: BenchName,
        #[serde(default)]
        who: Option<Operator>,
        #[serde(default)]
        why: Option<String>,
    },
    /// Take back the latest weighing or count of a bench.
    Undo {
        bench: BenchName,
        #[serde(default)]
        who: Option<Operator>,
        #[serde(default)]
        why: Option<String>,
    },
    /// Enter a container in the register.
    RegisterContainer {
        container: ContainerId,
        #[serde(default)]
        lid_g: Option<String>,
        #[serde(default)]
        who: Option<Operator>,
    },
    /// Declare a container free.
    FreeContainer { container: ContainerId, who: Operator, why: String },
    /// Containers go into the oven.
    IntoOven {
        containers: Vec<ContainerId>,
        #[serde(default)]
        celsius: Option<f64>,
        #[serde(default)]
        who: Option<Operator>,
    },
    /// Containers come out of the oven.
    OutOfOven {
        containers: Vec<ContainerId>,
        #[serde(default)]
        who: Option<Operator>,
    },
    /// The oven was off.
    OvenOff { from: String, to: String, who: Operator, why: String },
    /// A limit cannot be obtained.
    NotObtainable {
        specimen: SpecimenId,
        limit: Limit,
        because: String,
        #[serde(default)]
        who: Option<Operator>,
    },
    /// Answer a check.
    AnswerCheck { specimen: SpecimenId, check: String, about: String, says: String, who: Operator },
    /// Mark a result as reviewed.
    Review { specimen: SpecimenId, who: Operator },
}

fn no(words: String) -> Refusal {
    Refusal(words)
}

impl Lab {
    pub(super) fn asked(&self, ask: Ask, at: &Stamp, _next_seq: Seq) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::OpenSpecimen { .. } => self.open_specimen(ask),
            Ask::SignIn { bench, operator } => {
                self.bench_there(&bench)?;
                let same = self.signed_in(Some(&bench)).as_ref() == Some(&operator);
                let fact = New::by(Some(operator.clone()), Fact::SignedIn { bench, operator });
                Ok(if same { vec![] } else { vec![fact] })
            }
            Ask::SignOut { bench } => {
                let who = self.bench_there(&bench)?.signed_in.clone();
                Ok(if who.is_none() { vec![] } else { vec![New::by(who, Fact::SignedOut { bench })] })
            }
            Ask::Intend { bench, specimen, intention, who } => {
                self.bench_there(&bench)?;
                self.specimen_there(&specimen)?;
                Ok(self.intend(&bench, &specimen, intention, who))
            }
            Ask::IntendNothing { bench, who } => {
                let idle = self.bench_there(&bench)?.intention.is_none();
                let who = who.or_else(|| self.signed_in(Some(&bench)));
                let fact = Fact::IntentionEnded { bench, why: String::from("said so") };
                Ok(if idle { vec![] } else { vec![New::by(who, fact)] })
            }
            Ask::Code { bench, text } => {
                self.bench_there(&bench)?;
                self.code_at(&bench, false, &text, at).map_err(Refusal)
            }
            Ask::SayRole { .. } | Ask::Tie { .. } | Ask::TieCount { .. } => self.ask_tie(ask),
            Ask::TypeMass { .. } | Ask::TypeDrops { .. } => self.ask_typed(ask, at),
            Ask::RegisterContainer { .. } | Ask::FreeContainer { .. } => self.ask_container(ask),
            Ask::IntoOven { .. } | Ask::OutOfOven { .. } | Ask::OvenOff { .. } => self.ask_oven(ask, at),
            Ask::NotObtainable { .. } | Ask::AnswerCheck { .. } | Ask::Review { .. } => self.ask_result(ask),
            Ask::SetAside { .. }
            | Ask::SetAsideTrial { .. }
            | Ask::AmendMass { .. }
            | Ask::AmendDrops { .. }
            | Ask::NewPaste { .. }
            | Ask::Undo { .. } => self.ask_correction(ask),
        }
    }

    pub(super) fn bench_there(&self, bench: &BenchName) -> Result<&super::entities::Bench, Refusal> {
        self.benches.get(bench).ok_or_else(|| {
            let names: Vec<&str> = self.benches.keys().map(BenchName::as_str).collect();
            no(format!("there is no bench {bench}; the benches are {}", names.join(", ")))
        })
    }

    pub(super) fn specimen_there(&self, specimen: &SpecimenId) -> Result<&super::entities::Specimen, Refusal> {
        self.specimens.get(specimen).ok_or_else(|| no(format!("there is no specimen {specimen}; open it first")))
    }

    fn open_specimen(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        let Ask::OpenSpecimen { specimen, method, edition, description, preparation, passing_75um_percent, clay_percent, who } =
            ask
        else {
            return Ok(vec![]);
        };
        if self.specimens.contains_key(&specimen) {
            return Err(no(format!("specimen {specimen} is open already; give a new one another identifier")));
        }
        let name = method.unwrap_or_else(|| self.setup.default_method.clone());
        let Some(method) = self.setup.methods.get(&name) else {
            let names: Vec<&str> = self.setup.methods.keys().map(MethodName::as_str).collect();
            return Err(no(format!("there is no method {name}; the methods are {}", names.join(", "))));
        };
        for (what, percent) in [("passing 0.075 mm", passing_75um_percent), ("clay", clay_percent)] {
            if percent.is_some_and(|p| !(0.0..=100.0).contains(&p)) {
                return Err(no(format!("the share {what} is a percentage between 0 and 100")));
            }
        }
        let edition = edition.unwrap_or_else(|| method.edition.clone());
        let opened =
            SpecimenOpened { specimen, method: name, edition, description, preparation, passing_75um_percent, clay_percent };
        Ok(vec![New::by(who, Fact::SpecimenOpened(opened))])
    }

    fn ask_tie(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::SayRole { bench, container, role, who, why } => {
                let latest = self.bench_there(&bench)?.latest.as_ref();
                let Some(Latest { seq, container: tied, role: as_role, .. }) = latest else {
                    return Err(no(format!("nothing was weighed at bench {bench}; tie an older weighing by its number")));
                };
                if tied.as_ref() == Some(&container) && *as_role == Some(role) {
                    return Ok(vec![]);
                }
                self.tie(*seq, &bench, &container, role, who.or_else(|| self.signed_in(Some(&bench))), why)
            }
            Ask::Tie { weighing, bench, container, role, who, why } => {
                self.bench_there(&bench)?;
                self.tie(weighing, &bench, &container, role, Some(who), why)
            }
            Ask::TieCount { count, bench, specimen, who, why } => {
                self.bench_there(&bench)?;
                self.specimen_there(&specimen)?;
                match self.loose.get(&count).map(|l| &l.what) {
                    Some(LooseWhat::Count(_)) => Ok(vec![New::by(Some(who), Fact::CountTied { count, bench, specimen, why })]),
                    _ => Err(no(format!("no loose count has the number {count}"))),
                }
            }
            _ => Ok(vec![]),
        }
    }

    fn tie(
        &self,
        weighing: Seq,
        bench: &BenchName,
        container: &ContainerId,
        role: Role,
        who: Option<Operator>,
        why: String,
    ) -> Result<Vec<New>, Refusal> {
        needs_words(&why)?;
        // A weighing that is tied already is judged as if it were not.
        let mut without = None;
        let (mass, basis, at) = match self.loose.get(&weighing).map(|l| &l.what) {
            Some(LooseWhat::Weighing { weighing, basis }) => (weighing.mass, *basis, weighing.at),
            _ => {
                let mut lab = self.clone();
                let taken = lab.untie(weighing, &mut Default::default());
                let w =
                    taken.ok_or_else(|| no(format!("no weighing has the number {weighing}, or its specimen is not at hand")))?;
                without = Some(lab);
                (w.mass, Basis::Gross, w.at)
            }
        };
        let lab = without.as_ref().unwrap_or(self);
        let link = lab.link_said(bench, container, role, mass, basis, &at).map_err(Refusal)?;
        Ok(vec![New::by(who, Fact::WeighingTied { weighing, link, why })])
    }

    fn ask_typed(&self, ask: Ask, at: &Stamp) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::TypeMass { bench, container, mass_g, role, who } => {
                self.bench_there(&bench)?;
                let mass = typed_mass(&mass_g)?;
                let link = match role {
                    Some(role) => self.link_said(&bench, &container, role, mass, Basis::Gross, at),
                    None => self.link(&bench, &container, false, mass, Basis::Gross, at),
                };
                let link = Some(link.map_err(Refusal)?);
                let weighed = Weighed { mass_ug: mass, bench: Some(bench), balance: None, taken: None, link, loose: None };
                Ok(vec![New::by(Some(who), Fact::Weighed(weighed))])
            }
            Ask::TypeDrops { bench, drops, who } => {
                let work = self.bench_there(&bench)?.intention.as_ref().filter(|w| w.intention == Intention::Liquid);
                let specimen = work.map(|w| w.specimen.clone());
                if specimen.is_none() {
                    return Err(no(format!("no liquid limit is in work at bench {bench}; say which specimen first")));
                }
                if !(1..=500).contains(&drops) {
                    return Err(no(String::from("a count lies between 1 and 500 drops")));
                }
                let mut facts = self.late_slice(&bench, at);
                let counted = Counted { drops, bench: Some(bench), cup: None, run: None, specimen, loose: None };
                facts.push(New::by(Some(who), Fact::Counted(counted)));
                Ok(facts)
            }
            _ => Ok(vec![]),
        }
    }

    fn ask_container(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::RegisterContainer { container, lid_g, who } => {
                let lid = lid_g.as_deref().map(typed_mass).transpose()?;
                Ok(vec![New::by(who, Fact::ContainerRegistered { container, lid })])
            }
            Ask::FreeContainer { container, who, why } => {
                needs_words(&why)?;
                match self.containers.get(&container) {
                    Some(c) if c.holding.is_some() => Ok(vec![New::by(Some(who), Fact::ContainerFreed { container, why })]),
                    _ => Err(no(format!("{container} holds nothing"))),
                }
            }
            _ => Ok(vec![]),
        }
    }

    fn ask_oven(&self, ask: Ask, at: &Stamp) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::IntoOven { containers, celsius, who } => {
                self.all_hold(&containers)?;
                if celsius.is_some_and(|c| !(20.0..=300.0).contains(&c)) {
                    return Err(no(String::from("an oven temperature lies between 20 and 300 °C")));
                }
                Ok(vec![New::by(who, Fact::IntoOven { containers, celsius })])
            }
            Ask::OutOfOven { containers, who } => {
                self.all_hold(&containers)?;
                Ok(vec![New::by(who, Fact::OutOfOven { containers })])
            }
            Ask::OvenOff { from, to, who, why } => {
                let time = |t: &str| {
                    parse_rfc3339(t).ok_or_else(|| no(format!("\"{t}\" is not a time; write it like 2026-03-02T08:14:05Z")))
                };
                let (from_utc_us, to_utc_us) = (time(&from)?, time(&to)?);
                if from_utc_us >= to_utc_us || to_utc_us > at.utc_us {
                    return Err(no(String::from("the oven was off from a time to a later one, both past")));
                }
                Ok(vec![New::by(Some(who), Fact::OvenOff { from_utc_us, to_utc_us, why })])
            }
            _ => Ok(vec![]),
        }
    }

    fn all_hold(&self, containers: &[ContainerId]) -> Result<(), Refusal> {
        if containers.is_empty() {
            return Err(no(String::from("name the containers")));
        }
        match containers.iter().find(|c| self.containers.get(*c).is_none_or(|c| c.holding.is_none())) {
            Some(empty) => Err(no(format!("{empty} holds nothing that was weighed wet; weigh it first, or leave it out"))),
            None => Ok(()),
        }
    }

    fn ask_result(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::NotObtainable { specimen, limit, because, who } => {
                needs_words(&because)?;
                self.specimen_there(&specimen)?;
                Ok(vec![New::by(who, Fact::NotObtainable { specimen, limit, because })])
            }
            Ask::AnswerCheck { specimen, check, about, says, who } => {
                needs_words(&says)?;
                let limits = self.specimen_there(&specimen)?.limits.as_ref();
                let found = limits.is_some_and(|l| l.checks.iter().any(|c| c.check == check && c.about == about));
                match found {
                    true => Ok(vec![New::by(Some(who), Fact::CheckAnswered { specimen, check, about, says })]),
                    false => Err(no(format!("no check \"{check}\" speaks about \"{about}\" of {specimen}"))),
                }
            }
            Ask::Review { specimen, who } => self.review(specimen, who),
            _ => Ok(vec![]),
        }
    }

    fn review(&self, specimen: SpecimenId, who: Operator) -> Result<Vec<New>, Refusal> {
        let state = self.specimen_there(&specimen)?;
        let complete = state.limits.as_ref().is_some_and(|l| l.state != crate::limits::State::Provisional);
        let tested_by = |t: &super::entities::TrialRecord| t.wets.iter().any(|w| w.by.as_ref() == Some(&who));
        if !complete {
            return Err(no(format!("the result of {specimen} is not complete; answer its holds first")));
        }
        if state.trials.iter().any(tested_by) {
            return Err(no(format!("{who} weighed for {specimen}; a second person reviews")));
        }
        let revision = state.revision;
        Ok(vec![New::by(Some(who), Fact::Reviewed { specimen, revision })])
    }

    /// Which determination of which specimen, or a refusal in words.
    pub(super) fn trial_there(&self, specimen: &SpecimenId, which: TrialRef) -> Result<(), Refusal> {
        let there = self.specimen_there(specimen)?.trial(which).is_some();
        let missing = || no(format!("{specimen} has no such determination number {}", which.no));
        if there { Ok(()) } else { Err(missing()) }
    }
}

/// A mass that a person typed, in grams.
pub(super) fn typed_mass(text: &str) -> Result<Mass, Refusal> {
    let mass = Mass::parse(text, MassUnit::Gram).map_err(|e| no(format!("\"{text}\" is not a mass in grams: {e}")))?;
    if mass <= Mass::ZERO {
        return Err(no(format!("\"{text}\" g is not more than nothing")));
    }
    Ok(mass)
}

/// Corrections say why.
pub(super) fn needs_words(why: &str) -> Result<(), Refusal> {
    match why.trim().is_empty() {
        true => Err(no(String::from("say why, in a few words: the record keeps it"))),
        false => Ok(()),
    }
}
