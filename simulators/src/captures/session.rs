//! What happens on a pan, and what a display shows meanwhile.

use super::{pick, size};
use crate::rng::Rng;

/// What is shown at one moment.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Shown {
    /// So many steps of the last digit.
    Steps(i64),
    /// No number: more than it can weigh, or a fault.
    Trouble,
}

/// One moment of a session.
#[derive(Clone, Copy, Debug)]
pub(super) struct Moment {
    pub shown: Shown,
    pub steady: bool,
    pub net: bool,
}

/// What a session is like.
#[derive(Clone, Copy, Debug)]
pub(super) struct Plan {
    /// Largest load, in steps.
    pub most: i64,
    /// The tare key is used between the loads.
    pub tare: bool,
    /// Masses below zero can be shown.
    pub negative: bool,
    /// Something is too heavy, or a fault comes.
    pub trouble: bool,
    /// Each line comes of a key pressed.
    pub keyed: bool,
    /// Nothing moves about zero: where marks combine, the combination would be too rare to be understood.
    pub zero_rests: bool,
}

struct Play<'a> {
    rng: &'a mut Rng,
    plan: Plan,
    moments: Vec<Moment>,
    net: bool,
}

/// A session: empty pan, one load, removed, another load. Returns the loads as well.
pub(super) fn play(rng: &mut Rng, plan: Plan) -> (Vec<Moment>, [i64; 2]) {
    let first = load(rng, plan.most);
    let second = loop {
        let other = load(rng, plan.most);
        if (other - first).abs() > first / 10 {
            break other;
        }
    };
    let mut play = Play { rng, plan, moments: Vec::new(), net: false };
    if plan.keyed {
        play.keyed(first, second)
    } else {
        play.running(first, second)
    }
    (play.moments, [first, second])
}

/// A load, as likely small as large.
fn load(rng: &mut Rng, most: i64) -> i64 {
    let share = rng.unit() * rng.unit();
    ((most as f64 * (0.02 + 0.98 * share)) as i64).clamp(60.min(most), most)
}

impl Play<'_> {
    fn running(&mut self, first: i64, second: i64) {
        let lines = size(self.rng, 3, 7);
        self.rest(0, lines);
        self.move_to(0, first);
        let lines = size(self.rng, 4, 9);
        self.rest(first, lines);
        if self.plan.tare {
            self.tared(first);
        } else {
            self.move_to(first, 0);
        }
        let lines = size(self.rng, 3, 6);
        self.rest(0, lines);
        if self.plan.trouble {
            let many = size(self.rng, 1, 3);
            self.trouble(many);
        }
        self.move_to(0, second);
        let lines = size(self.rng, 4, 9);
        self.rest(second, lines);
        if self.rng.chance(0.5) {
            self.move_to(second, 0);
            let lines = size(self.rng, 2, 5);
            self.rest(0, lines);
        }
    }

    /// The load is tared away, something is filled in and all is taken off; or the tare is given up before that.
    fn tared(&mut self, first: i64) {
        let soil = load(self.rng, self.plan.most) / 2 + 1;
        self.net = true;
        let lines = size(self.rng, 3, 6);
        self.rest(0, lines);
        self.move_to(0, soil);
        let lines = size(self.rng, 4, 8);
        self.rest(soil, lines);
        if self.plan.negative {
            self.move_to(soil, -first);
            let lines = size(self.rng, 3, 5);
            self.rest(-first, lines);
            self.net = false;
        } else {
            self.net = false;
            self.rest(first + soil, 3);
            self.move_to(first + soil, 0);
        }
    }

    fn keyed(&mut self, first: i64, second: i64) {
        self.rest(0, 1);
        self.rest(first, 2);
        if self.plan.tare {
            let soil = load(self.rng, self.plan.most) / 2 + 1;
            self.net = true;
            self.rest(0, 1);
            self.rest(soil, 2);
            if self.plan.negative {
                self.rest(-first, 1);
            }
            self.net = false;
        }
        self.rest(0, 1);
        if self.plan.trouble {
            self.trouble(1);
        }
        self.rest(second, 2);
        let more = size(self.rng, 5, 12);
        for _ in 0..more {
            let again = if self.rng.chance(0.2) { 0 } else { load(self.rng, self.plan.most) };
            self.rest(again, 1);
        }
    }

    fn rest(&mut self, at: i64, lines: usize) {
        let wander = self.rng.chance(0.15);
        for _ in 0..lines {
            let off = if wander && self.rng.chance(0.3) { pick(self.rng, &[-1, 1]) } else { 0 };
            self.say(at + off, true);
        }
    }

    /// A few lines on the way, then a few about the goal, all marked as moving.
    fn move_to(&mut self, from: i64, to: i64) {
        let ramp = size(self.rng, 2, 5);
        let mut shares: Vec<f64> = (0..ramp).map(|_| self.rng.unit()).collect();
        shares.sort_by(f64::total_cmp);
        for share in shares {
            let share = 0.05 + 1.0 * share;
            self.say(from + ((to - from) as f64 * share) as i64, false);
        }
        let near = size(self.rng, 1, 4);
        for left in (0..near).rev() {
            let reach = 3 * i64::try_from(left).unwrap_or(0) + 2;
            let off = self.rng.between(-reach, reach);
            self.say(to + off, false);
        }
    }

    fn trouble(&mut self, lines: usize) {
        for _ in 0..lines {
            self.moments.push(Moment { shown: Shown::Trouble, steady: false, net: self.net });
        }
    }

    fn say(&mut self, steps: i64, steady: bool) {
        let steps = if self.plan.negative { steps } else { steps.max(0) };
        let steps = if steps == 0 && !steady && self.plan.zero_rests { 1 } else { steps };
        self.moments.push(Moment { shown: Shown::Steps(steps), steady, net: self.net });
    }
}
