//! A session as it reaches the program: lines of instruments and asks, in
//! order of time.

use super::plan::{Determination, Kind, Plan};
use super::scale::{Weighing, weigh};
use super::{Balance, Mistake};
use crate::rng::Rng;

/// The bench.
pub const BENCH: &str = "bench-1";
/// The balance.
pub const BALANCE: &str = "pan-1";
/// The cup counter.
pub const CUP: &str = "cup-1";
const WHO: &str = "AB";
const SECOND: i64 = 1_000_000;
const MINUTE: i64 = 60 * SECOND;
const HOUR: i64 = 60 * MINUTE;

/// One thing that reaches the program.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Event {
    /// Bytes of an instrument.
    Line {
        /// When, microseconds.
        at_us: i64,
        /// Whose.
        instrument: &'static str,
        /// The bytes, terminator included.
        bytes: Vec<u8>,
    },
    /// Somebody asked for something.
    Ask {
        /// When, microseconds.
        at_us: i64,
        /// The ask as JSON.
        json: String,
    },
}

impl Event {
    pub(super) fn line(at_us: i64, instrument: &'static str, text: String) -> Self {
        Self::Line { at_us, instrument, bytes: text.into_bytes() }
    }
    /// When.
    pub fn at_us(&self) -> i64 {
        match self {
            Self::Line { at_us, .. } | Self::Ask { at_us, .. } => *at_us,
        }
    }
}

/// Everything that happened.
#[derive(Clone, Debug, PartialEq)]
pub struct Session {
    /// In order of time.
    pub events: Vec<Event>,
    /// What is true of it.
    pub plan: Plan,
}

/// How a session is played.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Play {
    /// Seed of the laboratory: the technician's hand and the balance.
    pub laboratory: u64,
    /// Number of the session in it: soils and containers.
    pub session: u64,
    /// The kind of balance.
    pub balance: Balance,
    /// Masses and drops are typed from a form.
    pub typed: bool,
    /// What goes wrong.
    pub mistake: Option<Mistake>,
    /// Wall time of its first event, microseconds.
    pub begin_us: i64,
}

/// Plays a session.
pub fn session(play: &Play) -> Session {
    let Play { balance, typed, mistake, begin_us, .. } = *play;
    let plan = Plan::drawn(play.laboratory, play.session);
    let mut slip = Rng::new(plan.noise ^ 0x0DD5_0F5E_ED00_0001);
    let target = slip.between(0, 4) as usize;
    let mut hand = Hand { plan: &plan, balance, typed, mistake, target, slip, at: begin_us, events: Vec::new(), step: 0 };
    hand.ask(&format!(r#"{{"ask":"sign_in","bench":"{BENCH}","operator":"{WHO}"}}"#));
    hand.register();
    for specimen in 0..2 {
        hand.liquid(specimen);
    }
    for specimen in 0..2 {
        hand.threads(specimen);
    }
    hand.oven_and_dry();
    let events = hand.events;
    Session { events, plan }
}

/// The technician.
struct Hand<'p> {
    plan: &'p Plan,
    balance: Balance,
    typed: bool,
    mistake: Option<Mistake>,
    /// The determination that a mistake befalls.
    target: usize,
    slip: Rng,
    at: i64,
    events: Vec<Event>,
    step: u64,
}

/// Of which weighing.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Which {
    Tare,
    Wet,
    Dry,
}

impl Hand<'_> {
    fn has(&self, mistake: Mistake) -> bool {
        self.mistake == Some(mistake)
    }

    /// Mistakes befall the first specimen.
    fn befalls(&self, mistake: Mistake, specimen: usize, n: usize) -> bool {
        self.has(mistake) && specimen == 0 && n == self.target
    }

    fn between(&mut self, low: f64, high: f64) -> f64 {
        low + (high - low) * self.slip.unit()
    }

    /// Pauses that are the same with and without a mistake.
    fn pause(&mut self, low_s: f64, high_s: f64) {
        self.step += 1;
        let share = Rng::new(self.plan.noise ^ self.step.wrapping_mul(0x9E37)).unit();
        self.at += ((low_s + (high_s - low_s) * share) * 1e6) as i64;
    }

    fn ask(&mut self, json: &str) {
        self.pause(1.0, 3.0);
        self.events.push(Event::Ask { at_us: self.at, json: json.into() });
    }

    fn code(&mut self, container: &str) {
        self.ask(&format!(r#"{{"ask":"code","bench":"{BENCH}","text":"{container}"}}"#));
    }

    /// Puts something on the pan under a code.
    fn weigh(&mut self, code: &str, weighing: Weighing) {
        self.code(code);
        self.pause(1.0, 2.0);
        let noise = self.plan.noise ^ self.step.wrapping_mul(0x2545_F491_4F6C_DD1D);
        self.at = weigh(self.balance, &weighing, self.plan.repeatability_ug, noise, self.at, &mut self.events);
        self.at += 3 * SECOND;
    }

    /// Enters a mass by hand, as the form has it.
    fn typed_mass(&mut self, code: &str, text: &str, role: &str) {
        let json = format!(
            r#"{{"ask":"type_mass","bench":"{BENCH}","container":"{code}","mass_g":"{text}","role":"{role}","who":"{WHO}"}}"#
        );
        self.ask(&json);
    }

    /// The day before: every container is weighed empty, each under its own code.
    fn register(&mut self) {
        for specimen in 0..2 {
            for n in 0..5 {
                let d = self.plan.specimens[specimen].determinations[n].clone();
                if self.typed {
                    let text = self.form(specimen, n, Which::Tare, d.tare_ug);
                    self.typed_mass(&d.container, &text, "tare");
                } else {
                    self.weigh(&d.container, Weighing { mass_ug: d.tare_ug, ..Weighing::default() });
                }
            }
        }
        self.at += 16 * HOUR;
        self.ask(&format!(r#"{{"ask":"sign_in","bench":"{BENCH}","operator":"{WHO}"}}"#));
        for specimen in 0..2 {
            let id = &self.plan.specimens[specimen].id;
            self.ask(&format!(r#"{{"ask":"open_specimen","specimen":"{id}","who":"{WHO}"}}"#));
        }
    }

    fn intend(&mut self, specimen: usize, intention: &str) {
        let id = &self.plan.specimens[specimen].id;
        self.ask(&format!(r#"{{"ask":"intend","bench":"{BENCH}","specimen":"{id}","intention":"{intention}","who":"{WHO}"}}"#));
    }

    /// Containers are weighed empty once more before use.
    fn empties(&mut self, specimen: usize, of: std::ops::Range<usize>) {
        let exchange = self.has(Mistake::TaresExchanged) && specimen == 0 && of.contains(&0);
        for n in of {
            let d = self.plan.specimens[specimen].determinations[n].clone();
            let code = match (exchange, n) {
                (true, 0) => self.plan.specimens[specimen].determinations[1].container.clone(),
                (true, 1) => self.plan.specimens[specimen].determinations[0].container.clone(),
                _ => d.container.clone(),
            };
            let weighing = self.troubled(specimen, n, Which::Tare, Weighing { mass_ug: d.tare_ug, ..Weighing::default() });
            self.weigh(&code, weighing);
        }
    }

    fn liquid(&mut self, specimen: usize) {
        if !self.typed {
            self.ask(&format!(r#"{{"ask":"intend_nothing","bench":"{BENCH}","who":"{WHO}"}}"#));
            self.empties(specimen, 0..3);
        }
        self.intend(specimen, "liquid");
        for n in 0..3 {
            let d = self.plan.specimens[specimen].determinations[n].clone();
            self.count(specimen, n, &d);
            self.pause(20.0, 50.0);
            if self.befalls(Mistake::LostWater, specimen, n) {
                self.at += (self.between(10.0, 40.0) * MINUTE as f64) as i64;
            }
            self.slice(specimen, n, &d);
            self.pause(240.0, 420.0);
        }
    }

    fn slice(&mut self, specimen: usize, n: usize, d: &Determination) {
        let wet_of = self.exchanged(Mistake::WetExchanged, specimen, n);
        let twice = self.has(Mistake::ContainerTwice) && specimen == 0 && n == 1;
        let code = match twice {
            true => self.plan.specimens[0].determinations[0].container.clone(),
            false => self.plan.specimens[specimen].determinations[wet_of].container.clone(),
        };
        if self.typed {
            let text = self.form(specimen, n, Which::Wet, d.wet_ug);
            return self.typed_mass(&d.container, &text, "wet");
        }
        let mut weighing = Weighing { mass_ug: d.wet_ug, ..Weighing::default() };
        let water = (d.wet_ug - d.dry_ug) as f64;
        if self.befalls(Mistake::LostWater, specimen, n) {
            weighing.mass_ug -= (water * self.between(0.01, 0.08)) as i64;
            weighing.drift_ug_per_s = -150.0;
        }
        if self.befalls(Mistake::WateredAfterCount, specimen, n) {
            weighing.mass_ug += (self.between(0.02, 0.05) * (d.dry_ug - d.tare_ug) as f64) as i64;
        }
        let weighing = self.troubled(specimen, n, Which::Wet, weighing);
        self.weigh(&code, weighing);
    }

    /// Whose code is read where two of the first specimen's trials are exchanged.
    fn exchanged(&self, mistake: Mistake, specimen: usize, n: usize) -> usize {
        let (a, b) = (self.target % 3, (self.target + 1) % 3);
        match (self.has(mistake) && specimen == 0, n) {
            (true, n) if n == a => b,
            (true, n) if n == b => a,
            _ => n,
        }
    }

    /// What goes wrong around one weighing.
    fn troubled(&mut self, specimen: usize, n: usize, which: Which, mut w: Weighing) -> Weighing {
        // The weighing that a mistake befalls: now the empty one, now the wet, now the dry.
        let of_three = match self.target % 3 {
            _ if self.target >= 3 => Which::Dry,
            0 => Which::Dry,
            1 => Which::Wet,
            _ => Which::Tare,
        };
        if self.befalls(Mistake::LeftOnPan, specimen, n) && which == of_three {
            w.pan_ug = (self.between(0.1, 1.5) * 1e6) as i64;
        }
        if self.befalls(Mistake::NotZeroed, specimen, n) && which == of_three {
            let sign = if self.slip.chance(0.5) { -1.0 } else { 1.0 };
            w.pan_ug = (sign * self.between(0.05, 0.6) * 1e6) as i64;
        }
        let with_lid = if self.target.is_multiple_of(2) { Which::Wet } else { Which::Dry };
        if self.befalls(Mistake::LidOnce, specimen, n) && which == with_lid {
            w.mass_ug += self.plan.lid_ug;
        }
        w
    }

    fn count(&mut self, specimen: usize, n: usize, d: &Determination) {
        if self.typed {
            let reversed = self.has(Mistake::DropsReversed) && specimen == 0;
            let drops = self.plan.specimens[specimen].determinations[if reversed { 2 - n } else { n }].drops;
            return self.ask(&format!(r#"{{"ask":"type_drops","bench":"{BENCH}","drops":{drops},"who":"{WHO}"}}"#));
        }
        self.pause(30.0, 60.0);
        let liquid_target = specimen == 0 && n == self.target % 3;
        let mut rate = d.rate;
        if liquid_target && self.has(Mistake::CrankFast) {
            rate = self.between(2.4, 3.0);
        }
        if liquid_target && self.has(Mistake::CrankSlow) {
            rate = self.between(1.2, 1.6);
        }
        let wrong = if liquid_target { self.slip.between(2, 6) as u32 } else { 0 };
        let mut noise = Rng::new(self.plan.noise ^ (self.step << 20));
        for drop in 0..d.drops {
            self.at += (1e6 / rate * (1.0 + 0.015 * (noise.unit() - 0.5))) as i64;
            // Spread over the middle of the run, each by itself.
            let hit = liquid_target && drop % 3 == 1 && drop / 3 > 0 && drop / 3 <= wrong;
            if hit && self.has(Mistake::DropsMissed) {
                continue;
            }
            self.events.push(Event::line(self.at, CUP, "tick\r\n".into()));
            if hit && self.has(Mistake::DropsDoubled) {
                self.events.push(Event::line(self.at + 190_000, CUP, "tick\r\n".into()));
            }
        }
        self.at += SECOND;
        self.events.push(Event::line(self.at, CUP, "done\r\n".into()));
    }

    fn threads(&mut self, specimen: usize) {
        if !self.typed {
            self.ask(&format!(r#"{{"ask":"intend_nothing","bench":"{BENCH}","who":"{WHO}"}}"#));
            self.empties(specimen, 3..5);
        }
        let named = if self.has(Mistake::LabelsExchanged) { 1 - specimen } else { specimen };
        self.intend(named, "plastic");
        for n in 3..5 {
            let d = self.plan.specimens[specimen].determinations[n].clone();
            debug_assert_eq!(d.kind, Kind::Thread);
            self.pause(300.0, 600.0);
            self.slice(specimen, n, &d);
        }
        self.ask(&format!(r#"{{"ask":"intend_nothing","bench":"{BENCH}","who":"{WHO}"}}"#));
    }

    fn oven(&mut self, ask: &str, specimen: usize) {
        let of = |s: usize| self.plan.specimens[s].determinations.iter().map(|d| format!("\"{}\"", d.container));
        let containers: Vec<String> = of(specimen).collect();
        let celsius = if ask == "into_oven" { r#","celsius":110"# } else { "" };
        self.ask(&format!(r#"{{"ask":"{ask}","containers":[{}]{celsius},"who":"{WHO}"}}"#, containers.join(",")));
    }

    fn oven_and_dry(&mut self) {
        self.pause(300.0, 900.0);
        self.oven("into_oven", 0);
        self.oven("into_oven", 1);
        let early = self.has(Mistake::NotDry);
        self.at += if early { (self.between(1.5, 5.0) * HOUR as f64) as i64 } else { 0 };
        if !early {
            self.pause(16.0 * 3_600.0, 19.0 * 3_600.0);
        }
        self.ask(&format!(r#"{{"ask":"sign_in","bench":"{BENCH}","operator":"{WHO}"}}"#));
        self.oven("out_of_oven", 0);
        if self.has(Mistake::Warm) {
            self.at += (self.between(1.0, 4.0) * MINUTE as f64) as i64;
        } else {
            self.pause(30.0 * 60.0, 60.0 * 60.0);
        }
        if self.has(Mistake::TookUpMoisture) {
            self.at += (self.between(3.0, 20.0) * HOUR as f64) as i64;
        }
        let last = self.residue_of(early);
        self.dry(0, last);
        if early {
            self.at += 14 * HOUR;
        }
        self.oven("out_of_oven", 1);
        self.pause(30.0 * 60.0, 60.0 * 60.0);
        self.dry(1, 0.0);
    }

    /// The share of its water that soil still holds which came out too early.
    fn residue_of(&mut self, early: bool) -> f64 {
        if early { self.between(0.03, 0.15) } else { 0.0 }
    }

    fn dry(&mut self, specimen: usize, residue: f64) {
        for n in 0..5 {
            let d = self.plan.specimens[specimen].determinations[n].clone();
            if self.typed {
                let text = self.form(specimen, n, Which::Dry, d.dry_ug);
                self.typed_mass(&d.container, &text, "dry");
                continue;
            }
            let across = self.has(Mistake::DryExchangedAcross) && n == self.target;
            let of = self.exchanged(Mistake::DryExchanged, specimen, n);
            let code = match across {
                true => self.plan.specimens[1 - specimen].determinations[n].container.clone(),
                false => self.plan.specimens[specimen].determinations[of].container.clone(),
            };
            let weighing = self.dry_weighing(specimen, n, &d, residue);
            self.weigh(&code, weighing);
        }
    }

    fn dry_weighing(&mut self, specimen: usize, n: usize, d: &Determination, residue: f64) -> Weighing {
        let (soil, water) = ((d.dry_ug - d.tare_ug) as f64, (d.wet_ug - d.dry_ug) as f64);
        let mut w = Weighing { mass_ug: d.dry_ug + (water * residue) as i64, ..Weighing::default() };
        if self.has(Mistake::Warm) && specimen == 0 {
            // A draught lifts a warm container by some hundredths to a few tenths of a gram [mem].
            w.low_ug = self.between(0.03, 0.25) * 1e6;
            w.rises_s = self.between(60.0, 180.0);
        }
        if self.has(Mistake::TookUpMoisture) && specimen == 0 {
            w.mass_ug += (soil * self.between(0.003, 0.02)) as i64;
            w.drift_ug_per_s = 20.0;
        }
        if self.befalls(Mistake::Spilt, specimen, n) {
            w.mass_ug -= (self.between(0.2, 1.5) * 1e6).min(soil * 0.5) as i64;
        }
        self.troubled(specimen, n, Which::Dry, w)
    }

    /// What is typed for a mass.
    fn form(&mut self, specimen: usize, n: usize, which: Which, ug: i64) -> String {
        let text = typed_grams(ug);
        if self.befalls(Mistake::LeftOverMasses, specimen, n) {
            let other = &self.plan.specimens[1].determinations[n];
            return typed_grams(match which {
                Which::Tare => other.tare_ug,
                Which::Wet => other.wet_ug,
                Which::Dry => other.dry_ug,
            });
        }
        if which == Which::Dry && self.befalls(Mistake::Kilograms, specimen, n) {
            return format!("{:.5}", ug as f64 / 1e9);
        }
        if which == Which::Dry && self.befalls(Mistake::DigitAltered, specimen, n) {
            return altered(&text, &mut self.slip);
        }
        text
    }
}

/// A mass as a form has it, with two decimals.
fn typed_grams(ug: i64) -> String {
    format!("{:.2}", (ug as f64 / 1e4).round() / 100.0)
}

/// One digit of a number becomes another one.
fn altered(text: &str, slip: &mut Rng) -> String {
    let digits: Vec<usize> = text.char_indices().filter(|(_, c)| c.is_ascii_digit()).map(|(i, _)| i).collect();
    let at = digits[slip.between(0, digits.len() as i64 - 1) as usize];
    let old = text.as_bytes()[at] - b'0';
    let new = (old + slip.between(1, 9) as u8) % 10;
    format!("{}{}{}", &text[..at], new, &text[at + 1..])
}

#[cfg(test)]
mod tests {
    use super::*;

    fn play(session: u64, balance: Balance, typed: bool, mistake: Option<Mistake>) -> Session {
        super::session(&Play { laboratory: 5, session, balance, typed, mistake, begin_us: 1_772_431_200_000_000 })
    }

    #[test]
    fn the_same_seed_plays_the_same_session() {
        for balance in Balance::ALL {
            assert_eq!(play(3, balance, false, None), play(3, balance, false, None));
        }
    }

    #[test]
    fn events_are_in_order_and_every_mistake_changes_something() {
        for mistake in Mistake::ALL {
            let changed = (0..6).any(|seed| {
                let with = play(seed, Balance::Streaming, mistake.typed(), Some(mistake));
                assert!(with.events.windows(2).all(|w| w[0].at_us() <= w[1].at_us() + 200_000), "{mistake:?}");
                with.events != play(seed, Balance::Streaming, mistake.typed(), None).events
            });
            assert!(changed, "{mistake:?} changes nothing");
        }
    }

    #[test]
    fn one_digit_and_only_one_is_altered() {
        let mut slip = Rng::new(1);
        for _ in 0..100 {
            let other = altered("33.39", &mut slip);
            assert_eq!(other.chars().zip("33.39".chars()).filter(|(a, b)| a != b).count(), 1, "{other}");
        }
    }
}
