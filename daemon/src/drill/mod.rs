//! What does this set-up catch? Simulated laboratories make mistakes at a
//! known rate, and what the program says of them is counted.

mod player;
mod tally;

pub use player::{Outcome, Played, Player, understood};
pub use tally::{Clean, Row, Tally};

use tarecup_core::lab::Lab;
use tarecup_core::stamp::HOUR_US;
use tarecup_simulators::drill::{Balance, Mistake, Play};

/// Sessions that a laboratory has behind it before anything is planted in it.
const BEHIND: u64 = 4;
/// Sessions played in one laboratory.
const A_LABORATORY: u64 = 40;
/// 2026-03-02, 07:00 UTC: any day does.
const BEGIN_US: i64 = 1_772_434_800_000_000;

/// Plays `specimens` clean specimens and as many with one mistake each, half at
/// either kind of balance. `progress` hears how many sessions are done, and of
/// how many.
///
/// # Errors
/// When there is no scratch folder, or the program could not take what was played.
pub fn drill(seed: u64, specimens: u64, progress: &mut dyn FnMut(u64, u64)) -> Result<Tally, String> {
    let mut tally = Tally::new(seed, specimens);
    let mut player = Player::new().map_err(|e| e.to_string())?;
    // Two specimens a session, both clean or one of them with a mistake.
    let (clean, planted) = (specimens.div_ceil(2), specimens);
    let of = clean + planted;
    let mut behind: Option<(u64, Balance, Lab)> = None;
    for n in 0..of {
        let balance = Balance::ALL[(n % 2) as usize];
        let laboratory = seed.wrapping_mul(0x0001_0000_01B3).wrapping_add(n / A_LABORATORY);
        if behind.as_ref().is_none_or(|(l, b, _)| (*l, *b) != (laboratory, balance)) {
            behind = Some((laboratory, balance, history(&mut player, laboratory, balance)?));
        }
        let lab = behind.as_ref().map(|(.., lab)| lab.clone());
        let begin_us = BEGIN_US + (BEHIND as i64 + 2) * 48 * HOUR_US;
        let play = Play { laboratory, session: BEHIND + 1 + n, balance, typed: false, mistake: None, begin_us };
        if n < clean {
            tally.clean(balance, &player.play(&play, lab)?.0);
        } else {
            let mistake = Mistake::ALL[((n - clean) / 2) as usize % Mistake::ALL.len()];
            let play = Play { typed: mistake.typed(), ..play };
            let without = player.play(&play, lab.clone())?.0;
            let with = player.play(&Play { mistake: Some(mistake), ..play }, lab)?.0;
            tally.planted(balance, mistake, &without, &with);
        }
        progress(n + 1, of);
    }
    Ok(tally)
}

/// A laboratory with some clean sessions behind it, whose own spread is therefore known.
fn history(player: &mut Player, laboratory: u64, balance: Balance) -> Result<Lab, String> {
    let mut lab = None;
    for session in 1..=BEHIND {
        let begin_us = BEGIN_US + session as i64 * 48 * HOUR_US;
        let play = Play { laboratory, session, balance, typed: false, mistake: None, begin_us };
        lab = Some(player.play(&play, lab)?.1);
    }
    lab.ok_or_else(|| String::from("a laboratory without history"))
}
