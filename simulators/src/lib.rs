//! Simulated instruments of a soils laboratory and an operator who plays a day with them.
//!
//! Everything here is written from the descriptions of the instruments' dialects and shares no code with the
//! programs that read them: a misreading must not be able to hide on both sides.
//!
//! Masses are integer micrograms, times integer microseconds. Nothing here reads the clock except to pace a day or to
//! wait for a cable.

#![forbid(unsafe_code)]

pub mod balance;
pub mod captures;
pub mod counter;
pub mod day;
pub mod dialect;
pub mod drill;
pub mod operator;
pub mod play;
pub mod pty;
pub mod rng;
pub mod schedule;
pub mod trouble;

/// Bytes with their delay after the ones before, µs.
pub type Timed = (u64, Vec<u8>);

/// A mass as grams with no more decimals than it needs.
pub fn grams(ug: i64) -> String {
    let (whole, rest) = (ug.unsigned_abs() / 1_000_000, ug.unsigned_abs() % 1_000_000);
    let sign = if ug < 0 { "-" } else { "" };
    let text = format!("{sign}{whole}.{rest:06}");
    text.trim_end_matches('0').trim_end_matches('.').to_string()
}

/// What a code scanner sends for a code: the text, CR LF.
pub fn scanner_bytes(code: &str) -> Vec<u8> {
    format!("{code}\r\n").into_bytes()
}

#[cfg(test)]
mod tests {
    #[test]
    fn grams_are_exact() {
        for (ug, text) in [(0, "0"), (21_430_000, "21.43"), (-1, "-0.000001"), (10_000_000, "10"), (100_100, "0.1001")] {
            assert_eq!(super::grams(ug), text);
        }
        assert_eq!(super::grams(i64::MIN), "-9223372036854.775808");
    }
}
