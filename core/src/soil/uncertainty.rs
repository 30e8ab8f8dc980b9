//! How uncertain a limit is, after JCGM 100:2008.
//!
//! Three parts. *Scatter*: how far careful trials lie from their line, or thread
//! containers from their mean; three trials say next to nothing of it, so it
//! comes from the laboratory's own results, or, before there are enough, from
//! what the method file states. *Reading*: the balance's last digit and its
//! repeatability, half a drop; scatter contains them, so a trial counts with the
//! larger of the two. *Common*: a balance's departure from a straight line, the
//! same for every mass read on it. The water content does not change when all
//! three masses are off by the same, so it cancels where one balance weighed all.

use super::determined::Determined;
use super::flow::FlowLine;
use super::limits::CONFIDENCE;
use super::slopes::Slopes;
use super::student;
use crate::beside::Beside;
use crate::limits::{LiquidLimit, PlasticLimit, PlasticityIndex, Severity};
use crate::method::{Device, LiquidHow, Method, Uncertainty};
use crate::names::InstrumentName;
use crate::quantity::Mass;
use crate::sheet::Kind;
use alloc::collections::BTreeMap;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};
use statrs::distribution::{ContinuousCDF, FisherSnedecor};

/// Trials that scatter as much as this share of careful ones at most are judged by themselves.
const RARE: f64 = 0.01;
/// Standard deviation of a value known to one step: a rectangle one step wide (JCGM 100:2008, 4.3.7).
const OF_A_STEP: f64 = 0.288_675_134_594_812_9;
/// Standard deviation of a value known to lie within plus or minus one.
const OF_A_BOUND: f64 = 0.577_350_269_189_625_8;

/// Squares about fitted values with the degrees of freedom they have, of many specimens together.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Pooled {
    /// Sum of squares, (percent water)².
    pub sum_sq: f64,
    /// Degrees of freedom.
    pub df: u64,
}

/// What is known of a balance beside its lines.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Balance {
    /// Standard deviation of repeated readings, grams.
    pub repeatability_g: Option<f64>,
    /// Largest departure from a straight line, grams.
    pub linearity_g: Option<f64>,
}

/// What the laboratory's own record adds to one specimen's trials. The default is a laboratory without a record.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Laboratory {
    /// Trials about their lines, by the device of the specimen's method; the specimen itself left out.
    pub lines: Pooled,
    /// Thread containers about their means; the specimen itself left out.
    pub threads: Pooled,
    /// Slopes of flow lines in the cup against liquid limits; the specimen itself left out.
    pub slopes: Slopes,
    /// Its balances.
    pub balances: BTreeMap<InstrumentName, Balance>,
    /// Plasticity indices as shares of the A-line against liquid limits; the specimen itself left out.
    pub pairs: Slopes,
    /// Specimens tested at the same time.
    pub beside: Vec<Beside>,
    /// How often balances are to be checked with a reference mass, when that is asked for.
    pub balance_rule: Option<BalanceRule>,
}

/// How often balances are to be checked with a reference mass.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct BalanceRule {
    /// At least so often, µs.
    pub every_us: i64,
    /// Tolerance of the check; left out: that of the reference mass's class and a step of the balance.
    pub tolerance: Option<Mass>,
    /// What a weighing without a check in this time is worth.
    pub overdue: Severity,
}

type Name<'a> = Option<&'a InstrumentName>;

/// What is uncertain in one value.
#[derive(Clone, Debug, Default)]
pub struct Budget<'a> {
    /// Variance of what is independent from mass to mass and trial to trial.
    independent: f64,
    /// Degrees of freedom of that variance; `None`: as good as known.
    freedom: Option<u64>,
    /// Change of the value when every mass read on a balance is off by a gram.
    by_balance: BTreeMap<Name<'a>, f64>,
}

impl<'a> Budget<'a> {
    fn add(&mut self, weight: f64, other: &Budget<'a>) {
        for (name, change) in &other.by_balance {
            *self.by_balance.entry(*name).or_default() += weight * change;
        }
    }

    /// Standard uncertainty, the balances' common part included.
    fn u(&self, of: &Known) -> f64 {
        let common: f64 = self.by_balance.iter().map(|(name, change)| change * of.linearity(*name)).map(|u| u * u).sum();
        libm::sqrt(self.independent + common)
    }

    fn interval(&self, value: f64, u: f64) -> Option<[f64; 2]> {
        let factor = student::two_sided(CONFIDENCE, self.freedom.unwrap_or(u64::MAX))?;
        let half = factor * u;
        (half.is_finite() && value.is_finite()).then_some([value - half, value + half])
    }
}

/// What is known of balances, by name and by the method.
struct Known<'a> {
    lab: &'a Laboratory,
    stated: Option<&'a Uncertainty>,
    step_g: f64,
}

impl<'a> Known<'a> {
    fn new(method: &'a Method, lab: &'a Laboratory) -> Self {
        Known { lab, stated: method.uncertainty.as_ref(), step_g: method.liquid.balance_reads_g }
    }
    fn balance(&self, name: Name) -> Balance {
        name.and_then(|n| self.lab.balances.get(n)).copied().unwrap_or_default()
    }
    fn linearity(&self, name: Name) -> f64 {
        let bound = self.balance(name).linearity_g.or(self.stated.map(|s| s.balance_linearity_g)).unwrap_or(0.0);
        bound * OF_A_BOUND
    }
    fn reading(&self, name: Name, step: Option<f64>) -> f64 {
        let repeats = self.balance(name).repeatability_g.or(self.stated.map(|s| s.balance_repeatability_g)).unwrap_or(0.0);
        libm::hypot(step.unwrap_or(self.step_g) * OF_A_STEP, repeats)
    }

    /// One water content from its three masses; nothing is known of one that was given as such.
    fn water<'t>(&self, t: &Determined<'t>) -> Option<Budget<'t>> {
        let (tare, dry, water) = (t.trial.tare?, t.trial.dry.last()?, t.water()?);
        t.trial.wet?;
        let soil = (dry.mass - tare).grams();
        // Derivatives of 100·(wet − dry)/(dry − tare): they sum to nothing.
        let changes = [water / soil, 100.0 / soil, -(100.0 + water) / soil];
        let mut budget = Budget::default();
        for (change, reading) in changes.into_iter().zip(&t.trial.readings) {
            let name = reading.balance.as_ref();
            let u = change * self.reading(name, reading.step.map(|s| s.grams()));
            budget.independent += u * u;
            *budget.by_balance.entry(name).or_default() += change;
        }
        budget.independent.is_finite().then_some(budget)
    }
}

/// Standard uncertainty of one reading of a balance, grams: its last digit and its repeatability.
pub fn reading_of(method: &Method, lab: &Laboratory, balance: Option<&InstrumentName>, step_g: Option<f64>) -> f64 {
    Known::new(method, lab).reading(balance, step_g)
}

/// Standard uncertainty of a water content that comes from weighing alone.
pub fn of_water(t: &Determined, method: &Method, lab: &Laboratory) -> Option<f64> {
    let known = Known::new(method, lab);
    known.water(t).map(|b| b.u(&known)).filter(|u| u.is_finite())
}

/// What careful trials of this laboratory scatter by: its own record, with what the method states while that is short.
pub fn usual(stated: (f64, u32), history_from: u32, lab: Pooled) -> Pooled {
    let prior = Pooled { sum_sq: stated.0 * stated.0 * f64::from(stated.1), df: u64::from(stated.1) };
    if lab.df > 0 && lab.df >= u64::from(history_from) { lab } else { prior.with(lab) }
}

/// A standard deviation, how well it is known, and whence.
#[derive(Clone, Debug, PartialEq)]
struct Scatter {
    variance: f64,
    freedom: u64,
    from: String,
}

/// What careful trials scatter by. `own`: these trials about their own line.
fn scatter(stated: (f64, u32), history_from: u32, lab: Pooled, own: Pooled) -> Scatter {
    let enough = lab.df > 0 && lab.df >= u64::from(history_from);
    let base = usual(stated, history_from, lab);
    let all = base.with(own);
    if own.stands_out_of(base) {
        let from = String::from("these trials alone: they scatter more than careful work does");
        return Scatter { variance: own.variance(), freedom: own.df, from };
    }
    let from = if enough {
        format!("laboratory, {}", freedom_text(all.df))
    } else if lab.df > 0 {
        format!("stated prior, with {} of the laboratory", freedom_text(lab.df))
    } else {
        String::from("stated prior")
    };
    Scatter { variance: all.variance(), freedom: all.df, from }
}

fn freedom_text(df: u64) -> String {
    if df == 1 { String::from("1 degree of freedom") } else { format!("{df} degrees of freedom") }
}

impl Pooled {
    fn with(self, other: Pooled) -> Pooled {
        Pooled { sum_sq: self.sum_sq + other.sum_sq, df: self.df + other.df }
    }
    /// Mean square.
    pub fn variance(self) -> f64 {
        if self.df == 0 { 0.0 } else { self.sum_sq / self.df as f64 }
    }
    /// Whether careful work scatters so only once in a hundred times (F test, one-sided).
    fn stands_out_of(self, base: Pooled) -> bool {
        self.is_rarer_than(RARE, base)
    }
    /// Whether careful work scatters so less often than this (F test, one-sided).
    pub fn is_rarer_than(self, rare: f64, base: Pooled) -> bool {
        let (own, others) = (self.variance(), base.variance());
        if self.df == 0 || own == 0.0 {
            return false;
        }
        let (above, below) = (self.df as f64, base.df as f64);
        let share = self.sum_sq / (self.sum_sq + below * others);
        // Without a quotient (nothing ever scattered, or no sound number) the trials speak for themselves.
        if !(share > 0.0 && share < 1.0) || base.df == 0 {
            return true;
        }
        FisherSnedecor::new(above, below).ok().is_none_or(|f| 1.0 - f.cdf(own / others) < rare)
    }
}

/// Puts `u` and the interval of the liquid limit in place; the classical interval stays beside it.
pub fn liquid<'a>(
    limit: &mut LiquidLimit,
    line: Option<&FlowLine>,
    trials: &[Determined<'a>],
    method: &Method,
    lab: &Laboratory,
) -> Budget<'a> {
    limit.interval_95_classical = limit.interval_95;
    let own_u = limit.u;
    let budget = match (line, &method.uncertainty) {
        (_, None) => None,
        (Some(line), Some(stated)) => Some(on_line(limit, line, trials, method, stated, lab)),
        (None, Some(stated)) if method.liquid.how == LiquidHow::OnePoint => Some(by_one_point(trials, method, stated, lab)),
        (None, Some(_)) => None,
    };
    let Some((budget, from)) = budget else {
        limit.u_from = own_u.map(|_| String::from("these trials alone"));
        let freedom = u64::from(limit.points).checked_sub(if line.is_some() { 2 } else { 1 });
        return Budget { independent: own_u.map_or(0.0, |u| u * u), freedom, by_balance: BTreeMap::new() };
    };
    let u = budget.u(&Known::new(method, lab));
    limit.u = u.is_finite().then_some(u);
    limit.interval_95 = budget.interval(limit.value, u);
    limit.u_from = limit.u.map(|_| from);
    budget
}

/// The limit read off a line: a weighted sum of the trials' water contents, so
/// the covariance of slope and intercept is in the weights.
fn on_line<'a>(
    limit: &LiquidLimit,
    line: &FlowLine,
    trials: &[Determined<'a>],
    method: &Method,
    stated: &Uncertainty,
    lab: &Laboratory,
) -> (Budget<'a>, String) {
    let known = Known::new(method, lab);
    let n = line.points() as f64;
    let freedom = (line.points() as u64).saturating_sub(2);
    let own = limit.residual_sd.map_or(Pooled::default(), |sd| Pooled { sum_sq: sd * sd * freedom as f64, df: freedom });
    let scatter = scatter((stated.residual_sd, stated.residual_df), stated.history_from_df, lab.lines, own);
    let across = line.across();
    let away = across.place(super::limits::reading_at_limit(method)) - line.mean_x();
    let mut budget = Budget { independent: 0.0, freedom: Some(scatter.freedom), by_balance: BTreeMap::new() };
    for t in trials {
        let Some((reading, _)) = t.liquid_point() else { continue };
        let weight = 1.0 / n + away * (across.place(reading) - line.mean_x()) / line.sxx();
        let along = line.slope() * across.rate(reading) * reading_u(method);
        let water = known.water(t).unwrap_or_default();
        let of_trial = scatter.variance.max(water.independent + along * along);
        budget.independent += weight * weight * of_trial;
        budget.add(weight, &water);
    }
    (budget, scatter.from)
}

/// Half a drop either way, or half a step of the gauge.
fn reading_u(method: &Method) -> f64 {
    match method.device() {
        Device::Cup => OF_A_STEP,
        Device::Cone => OF_A_STEP * method.cone.as_ref().map_or(0.0, |c| c.gauge_reads_mm),
    }
}

/// The exponent suits soils on the average: how far a limit by one point lies
/// from that of the line is stated, and more trials of the same soil do not help.
fn by_one_point<'a>(trials: &[Determined<'a>], method: &Method, stated: &Uncertainty, lab: &Laboratory) -> (Budget<'a>, String) {
    let known = Known::new(method, lab);
    let points: Vec<&Determined> = trials.iter().filter(|t| t.liquid_point().is_some()).collect();
    let weight = 1.0 / points.len().max(1) as f64;
    let exponent = method.liquid.exponent.unwrap_or(0.0);
    let sd = stated.residual_sd;
    let mut budget = Budget { independent: sd * sd, freedom: Some(u64::from(stated.residual_df)), by_balance: BTreeMap::new() };
    for t in points {
        let Some((drops, water)) = t.liquid_point() else { continue };
        let weighed = known.water(t).unwrap_or_default();
        let exponent = super::limits::exponent_for(drops, water, exponent, method);
        let along = exponent * water / drops * reading_u(method);
        budget.independent += weight * weight * (weighed.independent + along * along);
        budget.add(weight, &weighed);
    }
    (budget, String::from("stated prior"))
}

/// Puts `u` and the interval of the plastic limit in place.
pub fn plastic<'a>(limit: &mut PlasticLimit, trials: &[Determined<'a>], method: &Method, lab: &Laboratory) -> Budget<'a> {
    let n = limit.points.max(1);
    let own_freedom = u64::from(n) - 1;
    let Some(stated) = &method.uncertainty else {
        limit.u_from = limit.u.map(|_| String::from("these containers alone"));
        let budget = Budget { independent: limit.u.map_or(0.0, |u| u * u), freedom: Some(own_freedom), ..Budget::default() };
        limit.interval_95 = limit.u.and_then(|u| budget.interval(limit.value, u));
        return budget;
    };
    let known = Known::new(method, lab);
    let own =
        limit.u.map_or(Pooled::default(), |u| Pooled { sum_sq: u * u * f64::from(n) * own_freedom as f64, df: own_freedom });
    let scatter = scatter((stated.thread_sd, stated.thread_df), stated.history_from_df, lab.threads, own);
    let weight = 1.0 / f64::from(n);
    let mut budget = Budget { freedom: Some(scatter.freedom), ..Budget::default() };
    for t in trials.iter().filter(|t| t.counts_as(Kind::Thread) && t.water().is_some()) {
        let water = known.water(t).unwrap_or_default();
        budget.independent += weight * weight * scatter.variance.max(water.independent);
        budget.add(weight, &water);
    }
    let u = budget.u(&known);
    limit.u = u.is_finite().then_some(u);
    limit.interval_95 = budget.interval(limit.value, u);
    limit.u_from = limit.u.map(|_| scatter.from);
    budget
}

/// Puts `u` and the interval of the plasticity index in place: the difference of
/// two limits, of which what the same balance has in common cancels in part.
pub fn index(
    index: &mut PlasticityIndex,
    liquid: (&LiquidLimit, &Budget),
    plastic: (&PlasticLimit, &Budget),
    method: &Method,
    lab: &Laboratory,
) {
    index.u = None;
    let (Some(value), Some(_), Some(_)) = (index.value, liquid.0.u, plastic.0.u) else { return };
    let (a, b) = (liquid.1, plastic.1);
    let mut both = Budget { independent: a.independent + b.independent, freedom: together(a, b), ..Budget::default() };
    both.add(1.0, a);
    both.add(-1.0, b);
    let u = both.u(&Known::new(method, lab));
    index.u = u.is_finite().then_some(u);
    index.interval_95 = index.u.and_then(|u| both.interval(value, u));
}

/// Effective degrees of freedom of a sum (JCGM 100:2008, G.4.1, Welch and Satterthwaite), rounded down.
fn together(a: &Budget, b: &Budget) -> Option<u64> {
    let part = |x: &Budget| x.freedom.map_or(0.0, |df| x.independent * x.independent / df as f64);
    let sum = a.independent + b.independent;
    let freedom = sum * sum / (part(a) + part(b));
    // No end of them where nothing is uncertain; none where a part has none.
    if freedom.is_nan() { None } else { Some(freedom as u64) }
}

#[cfg(test)]
mod tests {
    use super::*;

    const PRIOR: (f64, u32) = (0.2, 8);

    fn pool(sd: f64, df: u64) -> Pooled {
        Pooled { sum_sq: sd * sd * df as f64, df }
    }

    #[test]
    fn the_record_takes_the_place_of_the_prior() {
        let none = scatter(PRIOR, 10, Pooled::default(), Pooled::default());
        assert_eq!((none.freedom, none.from.as_str()), (8, "stated prior"));
        assert!((none.variance - 0.04).abs() < 1e-15);
        let few = scatter(PRIOR, 10, pool(0.1, 4), pool(0.1, 1));
        assert_eq!((few.freedom, few.from.as_str()), (13, "stated prior, with 4 degrees of freedom of the laboratory"));
        let many = scatter(PRIOR, 10, pool(0.1, 40), pool(0.1, 1));
        assert_eq!((many.freedom, many.from.as_str()), (41, "laboratory, 41 degrees of freedom"));
        assert!((many.variance - 0.01).abs() < 1e-15);
    }

    #[test]
    fn wild_trials_are_not_excused_by_a_careful_record() {
        let wild = scatter(PRIOR, 10, pool(0.15, 40), pool(1.0, 1));
        assert_eq!(wild.freedom, 1);
        assert!(wild.from.contains("alone") && (wild.variance - 1.0).abs() < 1e-12);
        // Twice the usual scatter happens to everybody.
        assert_eq!(scatter(PRIOR, 10, pool(0.15, 40), pool(0.3, 1)).freedom, 41);
        // A record in which nothing ever scattered says nothing.
        assert_eq!(scatter(PRIOR, 10, pool(0.0, 40), pool(0.3, 1)).freedom, 1);
        assert_eq!(scatter((0.0, 0), 0, Pooled::default(), pool(0.3, 2)).freedom, 2);
    }
}
