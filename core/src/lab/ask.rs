//! What persons ask for. One closed set, the same for every way in.

use super::entities::{Bench, Container, Latest, LooseWhat, MassClass, Specimen};
use super::role::Role;
use super::{Lab, New, Refusal};
use crate::fact::{Counted, Fact, Intention, Limit, Link, SpecimenOpened, Weighed};
use crate::limits::{Severity, State};
use crate::names::{BenchName, ContainerId, InstrumentName, MethodName, Operator, SpecimenId};
use crate::near::meant;
use crate::quantity::{Mass, MassUnit};
use crate::sheet::{Kind, Seq};
use crate::signal::Basis;
use crate::stamp::Stamp;
use alloc::collections::{BTreeMap, BTreeSet};
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

/// Longest text of a reason or description, in characters.
const LONGEST_WORDS: usize = 1_000;

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
        /// What is wanted; left out: liquid and plastic limit.
        #[serde(default)]
        wanted: Vec<Intention>,
        #[serde(default)]
        liquid_limit_oven_dried: Option<f64>,
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
    /// Tie a count whose slice was not taken to a specimen: its slice is owed at the bench.
    TieCount { count: Seq, bench: BenchName, specimen: SpecimenId, who: Operator, why: String },
    /// A weighing or count does not count.
    SetAside { what: Seq, who: Operator, why: String },
    /// A loose weighing or count is what these words say: it stays loose and needs nobody any more.
    Explain { what: Seq, who: Operator, why: String },
    /// A determination was begun for the wrong specimen.
    MoveTrial { specimen: SpecimenId, kind: Kind, no: u32, to: SpecimenId, who: Operator, why: String },
    /// A determination does not count.
    SetAsideTrial { specimen: SpecimenId, kind: Kind, no: u32, who: Operator, why: String },
    /// Correct a mass.
    AmendMass {
        weighing: Seq,
        #[serde(deserialize_with = "mass_text")]
        mass_g: String,
        who: Operator,
        why: String,
    },
    /// Correct a number of drops.
    AmendDrops { count: Seq, drops: u32, who: Operator, why: String },
    /// Correct a penetration.
    AmendPenetration { what: Seq, penetration_mm: f64, who: Operator, why: String },
    /// Enter a mass by hand.
    TypeMass {
        bench: BenchName,
        container: ContainerId,
        #[serde(deserialize_with = "mass_text")]
        mass_g: String,
        #[serde(default)]
        role: Option<Role>,
        who: Operator,
    },
    /// Enter a count by hand.
    TypeDrops { bench: BenchName, drops: u32, who: Operator },
    /// Enter a penetration of the cone by hand.
    TypePenetration { bench: BenchName, penetration_mm: f64, who: Operator },
    /// The paste of the counts so far is given up or was made anew.
    NewPaste {
        bench: BenchName,
        #[serde(default)]
        who: Option<Operator>,
        #[serde(default)]
        why: Option<String>,
    },
    /// The soil slid in the groove: the latest count, or the run that goes on, does not stand.
    Slid {
        bench: BenchName,
        #[serde(default)]
        who: Option<Operator>,
        #[serde(default)]
        why: Option<String>,
    },
    /// The groove tore: the latest count, or the run that goes on, does not stand.
    GrooveTore {
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
        #[serde(default, deserialize_with = "mass_text_option")]
        lid_g: Option<String>,
        /// Its empty mass as it stands in a register: typed, and marked so for ever.
        #[serde(default, deserialize_with = "mass_text_option")]
        tare_g: Option<String>,
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
    /// The oven was off; left out `to`: it is on again just now.
    OvenOff {
        from: String,
        #[serde(default)]
        to: Option<String>,
        who: Operator,
        why: String,
    },
    /// The clock of the machine is right: what seemed later before was the error.
    ClockRight { who: Operator, why: String },
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
    /// Check a balance with a reference mass: the loose mass on its pan, else the next one.
    CheckBalance {
        balance: InstrumentName,
        #[serde(deserialize_with = "mass_text")]
        nominal_g: String,
        #[serde(default, deserialize_with = "mass_text_option")]
        certificate_g: Option<String>,
        #[serde(default)]
        class: Option<MassClass>,
        who: Operator,
    },
    /// Say how a cup was found.
    CheckCup {
        cup: InstrumentName,
        drop_height_mm: f64,
        wear: String,
        base: String,
        #[serde(default)]
        tool: Option<String>,
        who: Operator,
    },
    /// Mark a result as reviewed.
    Review { specimen: SpecimenId, who: Operator },
}

pub(super) fn no(words: String) -> Refusal {
    Refusal(words)
}

impl Lab {
    pub(super) fn asked(&self, ask: Ask, at: &Stamp) -> Result<Vec<New>, Refusal> {
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
                self.code_at(&bench, &[], &text, at).map_err(Refusal)
            }
            Ask::SayRole { .. } | Ask::Tie { .. } | Ask::TieCount { .. } => self.ask_tie(ask),
            Ask::TypeMass { .. } | Ask::TypeDrops { .. } | Ask::TypePenetration { .. } => self.ask_typed(ask, at),
            Ask::RegisterContainer { .. } | Ask::FreeContainer { .. } => self.ask_container(ask, at),
            Ask::IntoOven { .. } | Ask::OutOfOven { .. } | Ask::OvenOff { .. } => self.ask_oven(ask, at),
            Ask::ClockRight { who, why } => self.ask_clock_right(who, why),
            Ask::NotObtainable { .. } | Ask::AnswerCheck { .. } | Ask::Review { .. } => self.ask_result(ask),
            Ask::CheckBalance { .. } | Ask::CheckCup { .. } => self.ask_checked(ask, at),
            Ask::SetAside { .. }
            | Ask::SetAsideTrial { .. }
            | Ask::AmendMass { .. }
            | Ask::AmendDrops { .. }
            | Ask::AmendPenetration { .. }
            | Ask::Explain { .. }
            | Ask::MoveTrial { .. }
            | Ask::NewPaste { .. }
            | Ask::Slid { .. }
            | Ask::GrooveTore { .. }
            | Ask::Undo { .. } => self.ask_correction(ask),
        }
    }

    pub(super) fn bench_there(&self, bench: &BenchName) -> Result<&Bench, Refusal> {
        self.benches.get(bench).ok_or_else(|| {
            let names: Vec<&str> = self.benches.keys().map(BenchName::as_str).collect();
            let hint = meant(bench.as_str(), names.iter().copied());
            no(format!("there is no bench {bench}{hint}; the benches are {}", names.join(", ")))
        })
    }

    pub(super) fn specimen_there(&self, specimen: &SpecimenId) -> Result<&Specimen, Refusal> {
        self.specimens.get(specimen).ok_or_else(|| {
            let hint = meant(specimen.as_str(), self.specimens.keys().map(SpecimenId::as_str));
            no(format!("there is no specimen {specimen}{hint}; open it first"))
        })
    }

    fn open_specimen(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        let Ask::OpenSpecimen {
            specimen,
            method,
            edition,
            description,
            preparation,
            passing_75um_percent,
            clay_percent,
            liquid_limit_oven_dried,
            mut wanted,
            who,
        } = ask
        else {
            return Ok(vec![]);
        };
        wanted.sort_unstable();
        wanted.dedup();
        if self.specimens.contains_key(&specimen) {
            return Err(no(format!("specimen {specimen} is open already; give a new one another identifier")));
        }
        let code = ContainerId::new(specimen.as_str());
        if code.is_ok_and(|c| self.containers.contains_key(&c)) {
            return Err(no(format!(
                "{specimen} is a container: a code can mean only one thing, so give the specimen another identifier"
            )));
        }
        let name = method.unwrap_or_else(|| self.setup.default_method.clone());
        let Some(method) = self.setup.methods.get(&name) else {
            let names: Vec<&str> = self.setup.methods.keys().map(MethodName::as_str).collect();
            let hint = meant(name.as_str(), names.iter().copied());
            return Err(no(format!("there is no method {name}{hint}; the methods are {}", names.join(", "))));
        };
        for (what, percent) in [("passing 0.075 mm", passing_75um_percent), ("clay", clay_percent)] {
            if percent.is_some_and(|p| !(0.0..=100.0).contains(&p)) {
                return Err(no(format!("the share {what} is a percentage between 0 and 100")));
            }
        }
        if liquid_limit_oven_dried.is_some_and(|l| !(l > 0.0 && l < 1_000.0)) {
            return Err(no(String::from("the liquid limit of the oven-dried soil lies between 0 and 1000 percent")));
        }
        for words in [&edition, &description, &preparation].into_iter().flatten() {
            not_too_long(words)?;
        }
        let edition = edition.unwrap_or_else(|| method.edition.clone());
        let opened = SpecimenOpened {
            specimen,
            method: name,
            edition,
            description,
            preparation,
            passing_75um_percent,
            clay_percent,
            liquid_limit_oven_dried,
            wanted,
        };
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
                needs_words(&why)?;
                self.tie_count(count, &bench, &specimen)?;
                Ok(vec![New::by(Some(who), Fact::CountTied { count, bench, specimen, why })])
            }
            _ => Ok(vec![]),
        }
    }

    /// Whether a count may be tied to a specimen, its slice owed at a bench.
    fn tie_count(&self, count: Seq, bench: &BenchName, specimen: &SpecimenId) -> Result<(), Refusal> {
        let state = self.bench_there(bench)?;
        self.specimen_there(specimen)?;
        let loose = self.loose.get(&count).and_then(|l| match &l.what {
            LooseWhat::Count(c) => Some(c),
            LooseWhat::Weighing { .. } => None,
        });
        let tied = || self.specimens.values().find_map(|s| s.count(count).map(|c| (s, c)));
        let found = match loose {
            Some(c) => c,
            None => {
                let (of, c) =
                    tied().ok_or_else(|| no(format!("no count has the number {count}, or its specimen is not at hand")))?;
                if of.trials.iter().any(|t| t.counts.contains(&count)) {
                    return Err(no(format!("a slice of count {count} was weighed for {}: take that weighing back first", of.id)));
                }
                // One of a groove that did not fail after all comes back; what else was set aside stays so.
                if c.set_aside.is_some() && c.failed.is_none() {
                    return Err(no(format!("count {count} was set aside; enter its drops by hand if it counts after all")));
                }
                c
            }
        };
        let Some(owed) = state.owed.as_ref().filter(|o| !o.counts.contains(&count)) else { return Ok(()) };
        if owed.penetration_mm.is_some() != found.penetration_mm.is_some() {
            return Err(no(format!(
                "another slice is owed at bench {bench}, and cup and cone are never mixed: weigh it or give up its paste first"
            )));
        }
        let apart = owed.ended.since(&found.at).us.saturating_abs() >= self.setup.linking.slice_us;
        if owed.specimen != *specimen || apart {
            return Err(no(format!(
                "another slice is owed at bench {bench} ({} drops for {}): weigh it or give up its paste first",
                owed.drops, owed.specimen
            )));
        }
        Ok(())
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
        if let Some(LooseWhat::Weighing { weighing: w, basis }) = self.loose.get(&weighing).map(|l| &l.what) {
            let link = self.link_said(bench, container, role, (w.mass, *basis), &w.at, None).map_err(Refusal)?;
            return Ok(vec![New::by(who, self.tied(weighing, link, bench, why))]);
        }
        self.may_be_taken_out(weighing)?;
        // A weighing that is tied already is judged as if it were not.
        let mut without = self.around(weighing, container);
        let untied = without
            .untie(weighing, &mut Default::default())
            .ok_or_else(|| no(format!("no weighing has the number {weighing}, or its specimen is not at hand")))?;
        let w = &untied.weighing;
        let link = without.link_said(bench, container, role, (w.mass, Basis::Gross), &w.at, Some(&untied)).map_err(Refusal)?;
        Ok(vec![New::by(who, self.tied(weighing, link, bench, why))])
    }

    /// The fact of a tie; it names the bench where several show the weighing.
    pub(super) fn tied(&self, weighing: Seq, link: Link, bench: &BenchName, why: String) -> Fact {
        let shows = |b: &&Bench| b.latest.as_ref().is_some_and(|l| l.seq == weighing);
        let bench = (self.benches.values().filter(shows).count() > 1).then(|| bench.clone());
        Fact::WeighingTied { weighing, link, bench, why }
    }

    /// The part of the laboratory that tying a weighing to a container looks at.
    fn around(&self, weighing: Seq, container: &ContainerId) -> Lab {
        let used = |c: &Container| c.tares.iter().chain(&c.with_lid).any(|w| w.seq == weighing);
        let of_trial = |s: &Specimen| s.weighings().any(|w| w.seq == weighing);
        let mut specimens: BTreeSet<&SpecimenId> = self.specimens.values().filter(|s| of_trial(s)).map(|s| &s.id).collect();
        let trials = self.specimens.values().flat_map(|s| &s.trials);
        let holder = trials.filter(|t| t.weighings().any(|w| w.seq == weighing)).map(|t| &t.container);
        let ids: BTreeSet<&ContainerId> =
            holder.chain(self.containers.values().filter(|c| used(c)).map(|c| &c.id)).chain([container]).collect();
        let containers: Vec<&Container> = ids.into_iter().filter_map(|id| self.containers.get(id)).collect();
        for held in containers.iter().filter_map(|c| c.holding.as_ref()) {
            specimens.insert(&held.specimen);
            specimens.extend(held.before.as_ref().map(|b| &b.specimen));
        }
        specimens.extend(containers.iter().filter_map(|c| c.released.as_ref()).map(|r| &r.holding.specimen));
        for bench in self.benches.values() {
            specimens.extend(bench.intention.as_ref().map(|w| &w.specimen));
            specimens.extend(bench.owed.as_ref().map(|o| &o.specimen));
        }
        let specimens = specimens.into_iter().filter_map(|id| self.specimens.get(id));
        Lab {
            setup: self.setup.clone(),
            specimens: specimens.map(|s| (s.id.clone(), s.clone())).collect(),
            containers: containers.into_iter().map(|c| (c.id.clone(), c.clone())).collect(),
            benches: self.benches.clone(),
            instruments: BTreeMap::new(),
            loose: BTreeMap::new(),
            statistics: self.statistics,
            clock: self.clock.clone(),
            running: BTreeMap::new(),
        }
    }

    fn ask_typed(&self, ask: Ask, at: &Stamp) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::TypeMass { bench, container, mass_g, role, who } => {
                self.bench_there(&bench)?;
                let mass = typed_mass(&mass_g)?;
                let link = match role {
                    Some(role) => self.link_said(&bench, &container, role, (mass, Basis::Gross), at, None),
                    None => self.link(core::slice::from_ref(&bench), &container, mass, Basis::Gross, at),
                };
                let link = Some(link.map_err(Refusal)?);
                let (bench, or_at) = (Some(bench), vec![]);
                let weighed = Weighed { mass_ug: mass, bench, or_at, balance: None, taken: None, link, loose: None };
                Ok(vec![New::by(Some(who), Fact::Weighed(weighed))])
            }
            Ask::TypeDrops { bench, drops, who } => {
                let work = self.bench_there(&bench)?.intention.as_ref().filter(|w| w.intention == Intention::Liquid);
                let Some(specimen) = work.map(|w| w.specimen.clone()) else {
                    return Err(no(format!("no liquid limit is in work at bench {bench}; say which specimen first")));
                };
                drops_believable(drops)?;
                self.room_for_count(&bench).map_err(Refusal)?;
                let mut facts = self.late_slice(&bench, &specimen, at);
                let (bench, specimen) = (Some(bench), Some(specimen));
                let counted = Counted { drops, bench, cup: None, run: None, specimen, replaces: None, loose: None, failed: None };
                facts.push(New::by(Some(who), Fact::Counted(counted)));
                Ok(facts)
            }
            Ask::TypePenetration { bench, penetration_mm, who } => self.penetration_typed(bench, penetration_mm, who, at),
            _ => Ok(vec![]),
        }
    }

    fn ask_container(&self, ask: Ask, at: &Stamp) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::RegisterContainer { container, lid_g, tare_g, who } => {
                let lid = lid_g.as_deref().map(typed_mass).transpose()?;
                let tare = tare_g.as_deref().map(typed_mass).transpose()?;
                if SpecimenId::new(container.as_str()).is_ok_and(|s| self.specimens.contains_key(&s)) {
                    return Err(no(format!(
                        "{container} is a specimen: a code can mean only one thing, so number the container otherwise"
                    )));
                }
                let typed = tare.map(|t| self.typed_tare(&container, t, who.as_ref(), at)).transpose()?.flatten();
                let registered = New::by(who.clone(), Fact::ContainerRegistered { container, lid });
                Ok([registered].into_iter().chain(typed.map(|fact| New::by(who, fact))).collect())
            }
            Ask::FreeContainer { container, who, why } => {
                needs_words(&why)?;
                match self.containers.get(&container) {
                    Some(c) if c.holding.is_some() => Ok(vec![New::by(Some(who), Fact::ContainerFreed { container, why })]),
                    Some(_) => Err(no(format!("{container} holds nothing"))),
                    None => Err(no(format!("there is no container {container}{}", self.container_meant(&container)))),
                }
            }
            _ => Ok(vec![]),
        }
    }

    fn ask_result(&self, ask: Ask) -> Result<Vec<New>, Refusal> {
        match ask {
            Ask::NotObtainable { specimen, limit, because, who } => {
                needs_words(&because)?;
                self.specimen_there(&specimen)?;
                let at_work = |b: &&Bench| b.intention.as_ref().is_some_and(|w| w.specimen == specimen);
                let signed_in = || self.benches.values().filter(at_work).find_map(|b| b.signed_in.clone());
                let who = who.or_else(signed_in).ok_or_else(|| no(String::from("say who states it: the result rests on it")))?;
                Ok(vec![New::by(Some(who), Fact::NotObtainable { specimen, limit, because })])
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
        match state.limits.as_ref().map(|l| l.state) {
            Some(State::Complete) => (),
            Some(State::Reviewed) => return Err(no(format!("the result of {specimen} is reviewed already"))),
            _ => {
                let rows = state.limits.iter().flat_map(|l| &l.checks).filter(|c| c.answered.is_none());
                let open: Vec<String> = rows
                    .filter(|c| c.severity == Severity::Hold || crate::checks::keeps_provisional(&c.check))
                    .map(|c| format!("{} ({})", c.about, c.check))
                    .collect();
                return Err(no(format!(
                    "the result of {specimen} is not complete; bring what is missing and answer its holds first: {}",
                    open.join(", ")
                )));
            }
        }
        // The same initials in another case are the same person.
        if worked_on(state).any(|by| by.as_str().eq_ignore_ascii_case(who.as_str())) {
            return Err(no(format!("{who} worked on {specimen}; a second person reviews")));
        }
        let revision = state.revision;
        Ok(vec![New::by(Some(who), Fact::Reviewed { specimen, revision })])
    }
}

/// Everybody whose hand is in a specimen's result: who weighed, counted, corrected, set aside, stated or answered.
fn worked_on(specimen: &Specimen) -> impl Iterator<Item = &Operator> {
    let weighings = specimen.weighings().flat_map(|w| w.by.iter().chain(w.corrected.iter().filter_map(|c| c.by.as_ref())));
    let counts = specimen.counts.iter().flat_map(|c| c.by.iter().chain(c.corrected.iter().filter_map(|s| s.by.as_ref())));
    let moved = specimen.trials.iter().filter_map(|t| t.moved.as_ref()).map(|m| &m.said);
    let aside = specimen.trials.iter().filter_map(|t| t.set_aside.as_ref()).chain(moved);
    let stated = specimen.liquid_not_obtainable.iter().chain(&specimen.plastic_not_obtainable);
    let said = aside.chain(stated).filter_map(|s| s.by.as_ref());
    let given_up = specimen.counts.iter().filter_map(|c| c.set_aside.as_ref()).filter_map(|s| s.by.as_ref());
    let answered = specimen.answers.iter().filter_map(|a| a.by.as_ref());
    weighings.chain(counts).chain(given_up).chain(said).chain(answered)
}

/// A number of drops that a person states.
pub(super) fn drops_believable(drops: u32) -> Result<(), Refusal> {
    match (1..=500).contains(&drops) {
        true => Ok(()),
        false => Err(no(String::from("a count lies between 1 and 500 drops"))),
    }
}

/// A penetration that a person states.
pub(super) fn depth_believable(mm: f64) -> Result<(), Refusal> {
    match mm > 0.0 && mm <= 60.0 {
        true => Ok(()),
        false => Err(no(String::from("a penetration lies above 0 and goes to 60 mm at most: the cup is no deeper"))),
    }
}

/// A mass in grams as text, or as the JSON number that stands for the same text.
fn mass_text<'de, D: serde::Deserializer<'de>>(from: D) -> Result<String, D::Error> {
    #[derive(Deserialize)]
    #[serde(untagged)]
    enum Given {
        Text(String),
        Number(f64),
    }
    Ok(match Given::deserialize(from).map_err(|_| serde::de::Error::custom("a mass is written in grams, such as \"21.43\""))? {
        Given::Text(text) => text,
        // The shortest text that reads back as this number: 21.43 stays 21.43.
        Given::Number(number) => format!("{number}"),
    })
}

fn mass_text_option<'de, D: serde::Deserializer<'de>>(from: D) -> Result<Option<String>, D::Error> {
    #[derive(Deserialize)]
    struct Given(#[serde(deserialize_with = "mass_text")] String);
    Ok(Option::<Given>::deserialize(from)?.map(|Given(text)| text))
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
        false => not_too_long(why),
    }
}

/// The record keeps words, not files.
fn not_too_long(words: &str) -> Result<(), Refusal> {
    match words.chars().count() > LONGEST_WORDS {
        true => Err(no(format!("at most {LONGEST_WORDS} characters fit here; keep a longer text elsewhere and name it"))),
        false => Ok(()),
    }
}
