//! Advice at the bench while it can still help: too few drops or too many, which
//! windows want a trial, how much water brings the paste there.
//!
//! Advice is only ever said. No fact and no result rests on it.
//!
//! **Grams of water.** On the flow line `Δw = slope · log10(N_wanted / N_now)`, and
//! a paste of mass P at water content w holds P/(1 + w/100) of dry soil, so
//! `grams = P/(1 + w/100) · Δw/100`. The water content of the paste is not known
//! before the oven: until a trial of this soil is dried, slope and water content
//! are those that the method's file supposes, and the uncertainty says so.

use super::Lab;
use super::entities::{Bench, Specimen};
use super::result::sheet;
use crate::checks::windows::{MOST_WINDOWS, missing};
use crate::fact::Intention;
use crate::method::{LiquidHow, Method};
use crate::names::{BenchName, SpecimenId};
use crate::quantity::Mass;
use crate::sheet::{Kind, Seq};
use crate::soil::determined::{Determined, determine};
use crate::soil::flow::FlowLine;
use crate::soil::limits::{liquid_trials_needed, threads_needed};
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;
use serde::Serialize;

/// More drops than a count has.
const MOST_DROPS: u32 = 500;

/// Fall of water content for ten times the drops, and where it is from.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Slope {
    /// Change per tenfold number of drops, percent of dry mass: negative.
    pub per_decade: f64,
    /// Its standard uncertainty.
    pub sd: f64,
    /// Where it is from, in words.
    pub from: String,
}

/// What the person who wants advice knows more than the record.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Wish {
    /// Mass of the paste in the dish.
    pub paste: Option<Mass>,
    /// Drops of the paste as it is now, in place of the latest count.
    pub drops: Option<u32>,
    /// Slope from the laboratory's own flow lines, in place of the method's.
    pub slope: Option<Slope>,
}

/// How a count lies to what is wanted.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Fit {
    /// Of use: a slice may be taken.
    Wanted,
    /// Permitted, but it fills no window that still wants a trial.
    Spare,
    /// More drops than the method permits: the paste is too dry.
    TooMany,
    /// Fewer drops than the method permits: the paste is too wet.
    TooFew,
}

/// The latest count and what to do with it.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct CountNow {
    /// The fact; `None` when the drops were only asked about.
    pub seq: Option<Seq>,
    /// Drops.
    pub drops: u32,
    /// How it lies.
    pub fit: Fit,
    /// Its slice is owed; else it was weighed already.
    pub slice_owed: bool,
}

/// A drop window of the method.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
pub struct Window {
    /// From so many drops.
    pub from: u32,
    /// To so many.
    pub to: u32,
    /// No trial of its own lies in it yet.
    pub open: bool,
}

/// How far the paste is from the drops wanted.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct WaterStep {
    /// Drops now.
    pub from_drops: u32,
    /// Drops wanted.
    pub to_drops: u32,
    /// Change of the water content, percent of dry mass; positive: water is added.
    pub change_percent: f64,
    /// Its standard uncertainty.
    pub change_u: f64,
    /// Mass of the paste, grams, when it was stated.
    pub paste_g: Option<f64>,
    /// Grams of water for that paste; negative: so much is to dry off.
    pub water_g: Option<f64>,
    /// Its standard uncertainty.
    pub water_u_g: Option<f64>,
    /// The same for 100 g of paste.
    pub water_g_per_100g: f64,
    /// Its standard uncertainty.
    pub water_u_g_per_100g: f64,
    /// Water content of the paste, percent, from–to; equal when it is known.
    pub paste_water_percent: [f64; 2],
    /// The slope it rests on.
    pub slope: Slope,
}

/// What helps now.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Advice {
    /// For which specimen.
    pub specimen: SpecimenId,
    /// Liquid trials weighed wet and not set aside.
    pub trials: u32,
    /// Liquid trials that the method wants.
    pub trials_wanted: u32,
    /// Containers of threads begun, and wanted.
    pub threads: [u32; 2],
    /// The latest count.
    pub count: Option<CountNow>,
    /// Windows of the method.
    pub windows: Vec<Window>,
    /// Drops that would fill a window, from–to: with several ways to give trials to windows, more than the open ones.
    pub wanted_drops: Vec<[u32; 2]>,
    /// Drops to aim at next.
    pub aim: Option<[u32; 2]>,
    /// What brings the paste there.
    pub water: Option<WaterStep>,
    /// Sentences for the person at the bench, most pressing first.
    pub says: Vec<String>,
}

/// What is known of the liquid trials of a specimen.
struct Known<'a> {
    method: &'a Method,
    /// Drops of each trial that counts, in order.
    drops: Vec<f64>,
    /// Drops and water content of those that are dried.
    points: Vec<(f64, f64)>,
}

impl Lab {
    /// Advice at a bench: about the slice owed there, else about what is in work.
    pub fn advice(&self, bench: &BenchName, wish: &Wish) -> Option<Advice> {
        let bench = self.benches.get(bench)?;
        let in_work = bench.intention.as_ref().filter(|w| w.intention != Intention::Natural).map(|w| &w.specimen);
        let specimen = bench.owed.as_ref().map(|o| &o.specimen).or(in_work)?;
        self.advice_on(specimen, Some(bench), wish)
    }

    /// Advice about a specimen, wherever it is worked on.
    pub fn advice_for(&self, specimen: &SpecimenId, wish: &Wish) -> Option<Advice> {
        let owes = |b: &&Bench| b.owed.as_ref().is_some_and(|o| o.specimen == *specimen);
        self.advice_on(specimen, self.benches.values().find(owes), wish)
    }

    fn advice_on(&self, id: &SpecimenId, bench: Option<&Bench>, wish: &Wish) -> Option<Advice> {
        let specimen = self.specimens.get(id)?;
        // Drops are advised on; a method that counts none has no use for it.
        let method = self.setup.methods.get(&specimen.method).filter(|m| counts_drops(m))?;
        let sheet = sheet(specimen);
        let worked = determine(&sheet, method);
        let known = known(method, &worked);
        let owed = bench.and_then(|b| b.owed.as_ref()).filter(|o| o.specimen == *id);
        let windows = windows(&known);
        let latest = latest_count(specimen, owed.map(|o| (o.counts.last().copied(), o.drops)), wish);
        let count = latest.map(|(seq, drops)| {
            let slice_owed = owed.is_some() && wish.drops.is_none();
            CountNow { seq, drops, fit: fit(&known, drops, slice_owed), slice_owed }
        });
        let aim = count.as_ref().and_then(|c| aim(&known, &windows, c));
        let water = count.as_ref().zip(aim).and_then(|(c, aim)| water_step(&known, c.drops, aim, wish));
        let begun = |kind| worked.iter().filter(|t| t.counts_as(kind)).count() as u32;
        let mut advice = Advice {
            specimen: id.clone(),
            trials: begun(Kind::Liquid),
            trials_wanted: if wants_liquid(specimen) { liquid_trials_needed(method) as u32 } else { 0 },
            threads: [begun(Kind::Thread), if wants_plastic(specimen) { threads_needed(method) as u32 } else { 0 }],
            count,
            windows,
            wanted_drops: helpful(&known),
            aim,
            water,
            says: Vec::new(),
        };
        advice.says = words(&advice, specimen, method, owed.map_or(&[], |o| &o.counts));
        Some(advice)
    }
}

/// The liquid limit is wanted and was not given up.
pub(super) fn wants_liquid(specimen: &Specimen) -> bool {
    specimen.liquid_not_obtainable.is_none() && specimen.wants(Intention::Liquid)
}

/// The plastic limit is wanted and was not given up.
pub(super) fn wants_plastic(specimen: &Specimen) -> bool {
    specimen.plastic_not_obtainable.is_none() && specimen.wants(Intention::Plastic)
}

fn counts_drops(method: &Method) -> bool {
    matches!(method.liquid.how, LiquidHow::FlowLine | LiquidHow::OnePoint)
}

fn known<'a>(method: &'a Method, worked: &[Determined]) -> Known<'a> {
    let liquid = || worked.iter().filter(|t| t.counts_as(Kind::Liquid));
    Known {
        method,
        drops: liquid().filter_map(|t| t.drops).collect(),
        points: liquid().filter_map(Determined::liquid_point).collect(),
    }
}

/// Every window, and whether it still wants a trial. By one point every trial may lie in the same one.
fn windows(known: &Known) -> Vec<Window> {
    let liquid = &known.method.liquid;
    let all = &liquid.windows[..liquid.windows.len().min(MOST_WINDOWS)];
    let lacking = known.drops.len() < liquid_trials_needed(known.method);
    let mut open = match liquid.how == LiquidHow::OnePoint {
        false => missing(all, &known.drops),
        true if lacking => all.to_vec(),
        true => Vec::new(),
    };
    let mut window = |&[from, to]: &[u32; 2]| {
        let at = open.iter().position(|w| *w == [from, to]);
        Window { from, to, open: at.map(|n| open.remove(n)).is_some() }
    };
    all.iter().map(&mut window).collect()
}

/// The count that advice is about: what was asked, the slice owed, or the latest trial.
fn latest_count(specimen: &Specimen, owed: Option<(Option<Seq>, u32)>, wish: &Wish) -> Option<(Option<Seq>, u32)> {
    if let Some(drops) = wish.drops {
        return Some((None, drops));
    }
    let trial = || {
        let last = specimen.trials.iter().rev().find(|t| t.kind == Kind::Liquid && t.set_aside.is_none())?;
        let count = last.counts.last().and_then(|&c| specimen.count(c))?;
        Some((Some(count.seq), count.drops))
    };
    // A count that was given up still tells how wet the paste is.
    let given_up = || specimen.counts.last().map(|c| (Some(c.seq), c.drops));
    owed.or_else(|| if specimen.trials.iter().any(|t| t.kind == Kind::Liquid) { trial() } else { given_up() })
}

fn fit(known: &Known, drops: u32, slice_owed: bool) -> Fit {
    let [low, high] = known.method.liquid.drops;
    if drops < low {
        return Fit::TooFew;
    }
    if drops > high {
        return Fit::TooMany;
    }
    // A slice that was weighed has filled its window; one that is owed would.
    let before = open_count(known, None);
    let after = open_count(known, Some(drops).filter(|_| slice_owed));
    let lacking = known.drops.len() < liquid_trials_needed(known.method);
    if known.method.liquid.how == LiquidHow::OnePoint && slice_owed {
        let inside = known.method.liquid.windows.iter().any(|[from, to]| (*from..=*to).contains(&drops));
        return if inside && lacking { Fit::Wanted } else { Fit::Spare };
    }
    let helps = after < before || (known.method.liquid.windows.is_empty() && lacking) || (before == 0 && lacking);
    if helps || !slice_owed { Fit::Wanted } else { Fit::Spare }
}

/// Windows that want a trial, with one more trial at these drops.
fn open_count(known: &Known, more: Option<u32>) -> usize {
    let mut drops = known.drops.clone();
    drops.extend(more.map(f64::from));
    windows(&Known { method: known.method, drops, points: Vec::new() }).iter().filter(|w| w.open).count()
}

/// Drops to aim at: with a slice that may be taken none, else the open window that is nearest.
fn aim(known: &Known, windows: &[Window], count: &CountNow) -> Option<[u32; 2]> {
    if count.slice_owed && count.fit == Fit::Wanted {
        return None;
    }
    let liquid = &known.method.liquid;
    let lacking = known.drops.len() < liquid_trials_needed(known.method);
    let far = |from: f64, w: &[u32; 2]| libm::fabs(libm::log10(f64::from(middle(*w)).max(1.0)) - libm::log10(from.max(1.0)));
    let near_now = |a: &[u32; 2], b: &[u32; 2]| far(f64::from(count.drops), a).total_cmp(&far(f64::from(count.drops), b));
    let open: Vec<[u32; 2]> = windows.iter().filter(|w| w.open).map(|w| [w.from, w.to]).collect();
    match open.len() {
        0 => (),
        // The last one: of the places that fill a window, the one that spreads the line most.
        1 if liquid.how == LiquidHow::FlowLine && !known.drops.is_empty() => {
            let spread = |w: &[u32; 2]| known.drops.iter().map(|&d| far(d, w)).fold(f64::INFINITY, f64::min);
            let places = windows.iter().flat_map(|w| helpful(known).into_iter().filter_map(|h| both([w.from, w.to], h)));
            return places.max_by(|a, b| spread(a).total_cmp(&spread(b)).then_with(|| near_now(b, a)));
        }
        _ => return open.into_iter().min_by(near_now),
    }
    let [low, high] = liquid.drops;
    let below = known.drops.iter().any(|&d| d < 25.0);
    let above = known.drops.iter().any(|&d| d > 25.0);
    match (liquid.both_sides && !known.drops.is_empty(), below, above) {
        (true, false, _) if low < 25 => Some([low, 24]),
        (true, _, false) if high > 25 => Some([26, high]),
        _ if lacking || count.slice_owed => Some([low, high]),
        _ => None,
    }
}

/// Drops that would fill a window, as ranges.
fn helpful(known: &Known) -> Vec<[u32; 2]> {
    let all = &known.method.liquid.windows;
    let (Some(low), Some(high)) = (all.iter().map(|w| w[0]).min(), all.iter().map(|w| w[1]).max()) else { return Vec::new() };
    let before = open_count(known, None);
    let fills = |drops: u32| match known.method.liquid.how == LiquidHow::OnePoint {
        false => open_count(known, Some(drops)) < before,
        true => before > 0 && all.iter().any(|[from, to]| (*from..=*to).contains(&drops)),
    };
    let mut ranges: Vec<[u32; 2]> = Vec::new();
    // A method's file may hold any number; more drops than this are never counted.
    for drops in (low..=high.min(MOST_DROPS)).filter(|&d| fills(d)) {
        match ranges.last_mut().filter(|r| r[1] + 1 == drops) {
            Some(range) => range[1] = drops,
            None => ranges.push([drops, drops]),
        }
    }
    ranges
}

/// What two ranges have in common.
fn both(a: [u32; 2], b: [u32; 2]) -> Option<[u32; 2]> {
    let both = [a[0].max(b[0]), a[1].min(b[1])];
    (both[0] <= both[1]).then_some(both)
}

fn middle([from, to]: [u32; 2]) -> u32 {
    from.saturating_add(to) / 2
}

/// How many decades lie between two numbers of drops.
fn decades(from: u32, to: u32) -> f64 {
    libm::log10(f64::from(to.max(1))) - libm::log10(f64::from(from.max(1)))
}

/// This soil's own line, the laboratory's, or what the method supposes.
fn slope(known: &Known, wish: &Wish) -> Option<Slope> {
    let own = FlowLine::fit(&known.points).ok().filter(|l| l.slope() < 0.0);
    let liquid = &known.method.liquid;
    let general =
        wish.slope.clone().filter(|s| s.per_decade < 0.0 && s.per_decade.is_finite() && s.sd >= 0.0 && s.sd.is_finite());
    let supposed = general.or_else(|| {
        let from = known.method.source.get("liquid.slope_per_decade");
        let from = from.map_or_else(|| String::from("the method's file"), |s| format!("supposed by the method's file: {s}"));
        Some(Slope { per_decade: -liquid.slope_per_decade?, sd: liquid.slope_sd.unwrap_or(0.0), from })
    });
    let Some(line) = own else { return supposed };
    // Two trials make a line and tell nothing of its scatter: it is then as uncertain as soils are different.
    let sd = line.line().u_slope().filter(|u| u.is_finite()).or(supposed.map(|s| s.sd)).unwrap_or(0.0);
    let from = format!("{} dried trials of this soil", line.points());
    Some(Slope { per_decade: line.slope(), sd, from })
}

/// Water content of the paste that closed at these drops, from–to.
fn paste_water(known: &Known, drops: u32, slope: &Slope) -> Option<[f64; 2]> {
    if known.points.is_empty() {
        return known.method.liquid.paste_water_percent;
    }
    // Along the slope from the dried trials' middle.
    let n = known.points.len() as f64;
    let x: f64 = known.points.iter().map(|p| libm::log10(p.0)).sum::<f64>() / n;
    let w: f64 = known.points.iter().map(|p| p.1).sum::<f64>() / n;
    let at = w + slope.per_decade * (libm::log10(f64::from(drops.max(1))) - x);
    (at.is_finite() && at > 0.0).then_some([at, at])
}

fn water_step(known: &Known, drops: u32, aim: [u32; 2], wish: &Wish) -> Option<WaterStep> {
    let inside = (aim[0]..=aim[1]).contains(&drops);
    let to = middle(aim);
    if drops == 0 || inside || to == drops {
        return None;
    }
    let slope = slope(known, wish)?;
    let range = paste_water(known, drops, &slope)?;
    let apart = decades(drops, to);
    let (change, change_u) = (slope.per_decade * apart, slope.sd * libm::fabs(apart));
    // Dry soil in a gram of paste: between its ends every value is as likely as another.
    let dry = range.map(|w| 1.0 / (1.0 + w / 100.0));
    let (share, share_u) = ((dry[0] + dry[1]) / 2.0, libm::fabs(dry[0] - dry[1]) / libm::sqrt(12.0));
    let per_gram = share * change / 100.0;
    let per_gram_u = libm::hypot(share * change_u, share_u * change) / 100.0;
    let paste_g = wish.paste.filter(|p| *p > Mass::ZERO).map(Mass::grams);
    Some(WaterStep {
        from_drops: drops,
        to_drops: to,
        change_percent: change,
        change_u,
        paste_g,
        water_g: paste_g.map(|p| p * per_gram),
        water_u_g: paste_g.map(|p| p * per_gram_u),
        water_g_per_100g: 100.0 * per_gram,
        water_u_g_per_100g: 100.0 * per_gram_u,
        paste_water_percent: range,
        slope,
    })
}

fn words(advice: &Advice, specimen: &Specimen, method: &Method, closures: &[Seq]) -> Vec<String> {
    let mut says = Vec::new();
    if let Some(count) = &advice.count {
        says.extend(about_count(count, method));
        says.extend(about_run(specimen, method, closures));
    }
    says.extend(advice.water.as_ref().map(about_water));
    says.extend(about_windows(advice));
    says
}

fn about_count(count: &CountNow, method: &Method) -> Option<String> {
    let (drops, [low, high]) = (count.drops, method.liquid.drops);
    let permits = format!("the method permits {low} to {high}");
    match count.fit {
        Fit::TooMany => Some(format!("{drops} drops are too many ({permits}): add water, mix well and count again")),
        Fit::TooFew => Some(format!(
            "{drops} drops are too few ({permits}): let the paste dry by mixing, never by dry soil, and count again"
        )),
        Fit::Spare => Some(format!("{drops} drops are permitted but fill no window that still wants a trial")),
        Fit::Wanted if count.slice_owed => Some(format!("{drops} drops are of use: take the slice")),
        Fit::Wanted => None,
    }
}

/// What is wrong with the closures themselves.
fn about_run(specimen: &Specimen, method: &Method, closures: &[Seq]) -> Vec<String> {
    let runs: Vec<_> = closures.iter().filter_map(|&c| specimen.count(c)).collect();
    let mut says = Vec::new();
    if let [.., before, last] = runs.as_slice()
        && before.drops.abs_diff(last.drops) > method.liquid.closures_within
    {
        says.push(format!(
            "two closures of this paste took {} and {} drops; the method lets them differ by {}: mix and count once more before the slice",
            before.drops, last.drops, method.liquid.closures_within
        ));
    }
    let Some(last) = runs.last() else { return says };
    let [slow, fast] = method.liquid.rate_per_s;
    if let Some(rate) = last.rate_per_s.filter(|r| !(slow..=fast).contains(r)) {
        says.push(format!(
            "the cup fell {rate:.2} times a second; the method wants {slow} to {fast}: set the drive and count again"
        ));
    }
    if let Some(why) = &last.interrupted {
        says.push(format!("part of the count may be missing ({why}): count again, or correct the drops"));
    } else if last.gaps > 0 {
        says.push(format!("{} gaps were heard between the drops: count again, or correct the drops", last.gaps));
    }
    says
}

fn about_water(step: &WaterStep) -> String {
    let (amount, u, of) = match (step.paste_g, step.water_g, step.water_u_g) {
        (Some(paste), Some(g), Some(u)) => (g, u, format!("to {paste:.0} g of paste")),
        _ => (step.water_g_per_100g, step.water_u_g_per_100g, String::from("to each 100 g of paste")),
    };
    let to = format!("from {} drops to about {}", step.from_drops, step.to_drops);
    let from = &step.slope.from;
    if amount > 0.0 {
        let first = (amount - u).max(amount / 2.0);
        return format!(
            "{to}: about {amount:.1} g of water {of} (standard uncertainty {u:.1} g; slope of {from}). Add {first:.1} g first and mix: more can follow, none comes out again"
        );
    }
    let of = of.replacen("to", "from", 1);
    format!(
        "{to}: about {:.1} g of water are to dry off {of} (standard uncertainty {u:.1} g; slope of {from}), by mixing in the air",
        -amount
    )
}

fn about_windows(advice: &Advice) -> Option<String> {
    let left = advice.trials_wanted.saturating_sub(advice.trials);
    let open = &advice.wanted_drops;
    if advice.trials_wanted == 0 || (left == 0 && open.is_empty()) {
        return None;
    }
    let trials = match left {
        0 => String::from("trials enough"),
        1 => String::from("1 trial more"),
        n => format!("{n} trials more"),
    };
    Some(match open.is_empty() {
        true => format!("{trials}, of {}", advice.trials_wanted),
        false => format!("{trials}, of {}; a window wants one of {} drops", advice.trials_wanted, ranges_text(open)),
    })
}

/// `15–25, 30–35`.
pub(super) fn ranges_text(ranges: &[[u32; 2]]) -> String {
    let texts: Vec<String> = ranges.iter().map(|[from, to]| format!("{from}–{to}")).collect();
    texts.join(", ")
}
