//! A balance: a load on a pan, a display that follows it, and the lines it sends.

use crate::Timed;
use crate::dialect::BalanceDialect;
use crate::rng::Rng;

/// Lines of the empty pan before a container is put on it.
pub const ZERO_LINES: usize = 3;
/// Lines of a loaded pan after it has come to rest.
pub const STEADY_LINES: usize = 16;
/// Lines of the empty pan after the container has been lifted.
pub const EMPTY_LINES: usize = 3;
/// After loading: what is left of the step at each line, per mille. A damped swing of the pan, then rest.
const SWING: [i64; 5] = [620, 240, -70, 25, -9];
/// All lines of a placement on a streaming balance.
pub const PLACEMENT_LINES: usize = ZERO_LINES + SWING.len() + STEADY_LINES + SWING.len() + EMPTY_LINES;
/// A swinging pan is shown at least this many digits away from rest, so that no swinging line agrees with a resting one.
const SWING_DIGITS: i64 = 20;
/// Below this part of its capacity under zero a balance shows nothing any more.
const UNDERLOAD_PART: i64 = 20;
/// From loading the pan to the press of the print key, µs.
const KEY_US: u64 = 4_000_000;

/// What kind of balance it is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Settings {
    /// How it speaks.
    pub dialect: BalanceDialect,
    /// Decimals of a gram, 1 to 6.
    pub decimals: u8,
    /// The largest mass it can weigh, µg.
    pub capacity_ug: i64,
    /// Time between its lines, µs.
    pub interval_us: u64,
}

impl Settings {
    /// Ten lines a second, up to 620 g. Decimals beyond 1 to 6 are brought into that range.
    pub fn new(dialect: BalanceDialect, decimals: u8) -> Self {
        Self { dialect, decimals: decimals.clamp(1, 6), capacity_ug: 620_000_000, interval_us: 100_000 }
    }

    /// One step of the last digit, µg.
    pub fn step_ug(&self) -> i64 {
        10i64.pow(6 - u32::from(self.decimals.clamp(1, 6)))
    }
}

/// How far the display departs from the truth.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Noise {
    /// Swinging lines are off by up to this many digits more.
    pub swing_digits: i64,
    /// The first this many resting lines are off by up to one digit. At most 3: a program that takes the eighth agreeing
    /// line must find the exact mass there.
    pub early_lines: u32,
    /// Probability that a line of the empty pan is off by one digit.
    pub zero_flicker: f64,
}

impl Noise {
    /// None: every line at rest shows the exact mass.
    pub const NONE: Noise = Noise { swing_digits: 0, early_lines: 0, zero_flicker: 0.0 };
    /// A balance on an ordinary bench.
    pub const BENCH: Noise = Noise { swing_digits: 15, early_lines: 3, zero_flicker: 0.05 };
}

/// What the display shows.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Value {
    /// A mass, µg, a whole number of steps.
    Mass(i64),
    /// More than the balance can weigh.
    Overload,
    /// Less than it can show: the pan itself is missing.
    Underload,
    /// It cannot measure now.
    NotReady,
}

/// One state of the display.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Shown {
    /// The value, without what was tared away.
    pub value: Value,
    /// At rest.
    pub steady: bool,
    /// What was tared away, µg.
    pub tared_ug: i64,
}

impl Shown {
    /// Something was tared away.
    pub fn net(&self) -> bool {
        self.tared_ug != 0
    }
}

/// One balance.
#[derive(Clone, Debug)]
pub struct Balance {
    settings: Settings,
    noise: Noise,
    rng: Rng,
    load_ug: i64,
    before_ug: i64,
    /// Lines since the load changed.
    lines: u32,
    tared_ug: i64,
    drift_ug_per_line: i64,
    /// Lines for which it cannot measure.
    not_ready: u32,
}

impl Balance {
    /// An empty, zeroed balance at rest.
    pub fn new(settings: Settings, noise: Noise, seed: u64) -> Self {
        Self {
            settings,
            noise,
            rng: Rng::new(seed),
            load_ug: 0,
            before_ug: 0,
            lines: u32::MAX,
            tared_ug: 0,
            drift_ug_per_line: 0,
            not_ready: 0,
        }
    }

    /// What kind it is.
    pub fn settings(&self) -> &Settings {
        &self.settings
    }

    /// Puts this much on the empty pan, or changes what is on it.
    pub fn put(&mut self, load_ug: i64) {
        self.before_ug = self.load_ug;
        self.load_ug = load_ug;
        self.lines = 0;
    }

    /// Lifts everything.
    pub fn lift(&mut self) {
        self.put(0);
    }

    /// The tare key: what is on the pan now shows as zero, and masses are net from here. On an empty pan: gross again.
    pub fn tare_key(&mut self) {
        self.tared_ug = self.load_ug;
    }

    /// From now on what is on a loaded pan changes by so much a line: soil drying (negative), or a warm container
    /// that reads low and rises as it cools (positive). Ends when the pan is lifted.
    pub fn drift(&mut self, ug_per_line: i64) {
        self.drift_ug_per_line = ug_per_line;
    }

    /// For the next lines the balance cannot measure: it was just switched on, or is adjusting itself.
    pub fn not_ready(&mut self, lines: u32) {
        self.not_ready = lines;
    }

    /// What the display shows at the next line.
    pub fn next_shown(&mut self) -> Shown {
        let n = self.lines;
        self.lines = self.lines.saturating_add(1);
        if self.load_ug != 0 {
            self.load_ug = self.load_ug.saturating_add(self.drift_ug_per_line);
        } else {
            self.drift_ug_per_line = 0;
        }
        let steady = n as usize >= SWING.len();
        let off = if steady { self.resting(n) } else { self.swinging(n as usize) };
        let step = self.settings.step_ug();
        let value = if self.not_ready > 0 {
            self.not_ready -= 1;
            Value::NotReady
        } else if self.load_ug > self.settings.capacity_ug {
            Value::Overload
        } else if self.load_ug < self.settings.capacity_ug / -UNDERLOAD_PART {
            Value::Underload
        } else {
            Value::Mass(rounded(self.load_ug.saturating_sub(self.tared_ug).saturating_add(off), step))
        };
        Shown { value, steady, tared_ug: self.tared_ug }
    }

    /// The next line.
    pub fn next_line(&mut self) -> Vec<u8> {
        let shown = self.next_shown();
        self.settings.dialect.line(self.settings.decimals, &shown)
    }

    /// How far a line at rest is off.
    fn resting(&mut self, n: u32) -> i64 {
        let step = self.settings.step_ug();
        let early = n.saturating_sub(SWING.len() as u32) < self.noise.early_lines.min(3);
        if self.load_ug != 0 && early {
            return self.rng.between(-1, 1) * step;
        }
        if self.load_ug == 0 && self.noise.zero_flicker > 0.0 && self.rng.chance(self.noise.zero_flicker) {
            return if self.rng.chance(0.5) { step } else { -step };
        }
        0
    }

    /// How far a line of the swinging pan is off.
    fn swinging(&mut self, n: usize) -> i64 {
        let step = self.settings.step_ug();
        let change = self.before_ug.saturating_sub(self.load_ug);
        let swing = (i128::from(change) * i128::from(SWING[n]) / 1000) as i64;
        let noise = self.rng.between(-self.noise.swing_digits, self.noise.swing_digits) * step;
        let least = SWING_DIGITS * step;
        // The sign of the swing itself decides on which side a small one is pushed out.
        let side = if (change < 0) == (SWING[n] < 0) { 1 } else { -1 };
        let off = swing.saturating_add(noise);
        if off.saturating_mul(side) < least { side * least } else { off }
    }

    /// All that the balance sends from the empty pan to the empty pan when a mass is put on it and lifted again. At rest
    /// it shows exactly this mass (a whole number of steps), apart from [`Noise::early_lines`].
    pub fn placement(&mut self, mass_ug: i64) -> Vec<Timed> {
        let mut out = Vec::new();
        if self.settings.dialect.on_key() {
            self.put(mass_ug);
            self.lines = u32::MAX;
            out.push((KEY_US, self.next_line()));
            self.lift();
            self.lines = u32::MAX;
            return out;
        }
        self.lines_into(&mut out, ZERO_LINES);
        self.put(mass_ug);
        self.lines_into(&mut out, SWING.len() + STEADY_LINES);
        self.lift();
        self.lines_into(&mut out, SWING.len() + EMPTY_LINES);
        out
    }

    fn lines_into(&mut self, out: &mut Vec<Timed>, n: usize) {
        for _ in 0..n {
            let line = self.next_line();
            out.push((self.settings.interval_us, line));
        }
    }
}

/// How long [`Balance::placement`] lasts, µs.
pub fn placement_lasts_us(settings: &Settings) -> i64 {
    if settings.dialect.on_key() {
        return KEY_US as i64;
    }
    (PLACEMENT_LINES as u64).saturating_mul(settings.interval_us).min(i64::MAX as u64) as i64
}

/// To the nearest step, half away from zero.
fn rounded(ug: i64, step: i64) -> i64 {
    let half = step / 2;
    let away = if ug < 0 { ug.saturating_sub(half) } else { ug.saturating_add(half) };
    away / step * step
}
