//! Seven-bit characters whose parity bit was read as an eighth data bit.

use super::Refusal;
use super::frames::Heard;
use crate::port::CharFrame;
use crate::profile::text::SerialText;

/// Bytes that must agree before a parity is believed.
const ENOUGH: usize = 32;

/// The bytes without their parity bit, if all of them carry one, and the
/// frame that the line should have.
pub(super) fn stripped(heard: Heard) -> Result<(Heard, Option<SerialText>), Refusal> {
    let high = heard.bytes.iter().filter(|b| **b >= 0x80).count();
    if high * 5 < heard.bytes.len() {
        return Ok((heard, None));
    }
    let all = |is: fn(u32) -> bool| heard.bytes.iter().all(|b| is(b.count_ones()));
    let parity = match (all(|n| n % 2 == 0), all(|n| n % 2 == 1)) {
        (true, _) => ('E', 1),
        (_, true) => ('O', 1),
        // A parity bit that is always set looks like a second stop bit.
        _ if high == heard.bytes.len() => ('N', 2),
        _ => return Err(garbled()),
    };
    if heard.bytes.len() < ENOUGH {
        return Err(garbled());
    }
    let frame = CharFrame { data_bits: 7, parity: parity.0, stop_bits: parity.1 };
    let bytes = heard.bytes.iter().map(|b| b & 0x7F).collect();
    Ok((Heard { bytes, ..heard }, Some(SerialText { baud: None, frame: Some(frame), flow: None })))
}

fn garbled() -> Refusal {
    Refusal::new(None, 1, "the bytes are no text: listen again with another speed or character frame, such as 7E1 or 7O1")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn heard(bytes: Vec<u8>) -> Heard {
        Heard { bytes, gaps: Vec::new() }
    }

    #[test]
    fn a_parity_all_bytes_agree_with_is_taken_off() {
        let text = b"  12.34 g\r\n  25.00 g\r\n  25.01 g\r\n".to_vec();
        let with = |odd: bool| {
            let bit = |b: &u8| if (b.count_ones() % 2 == 1) != odd { b | 0x80 } else { *b };
            text.iter().map(bit).collect::<Vec<u8>>()
        };
        for (bytes, frame) in [(with(false), "7E1"), (with(true), "7O1"), (text.iter().map(|b| b | 0x80).collect(), "7N2")] {
            let (found, serial) = stripped(heard(bytes)).expect("stripped");
            assert_eq!(found.bytes, text);
            assert_eq!(serial.and_then(|s| s.frame).map(String::from).as_deref(), Some(frame));
        }
        assert_eq!(stripped(heard(text.clone())).expect("as it is").1, None);
        let mut mixed = with(false);
        mixed[3] ^= 0x80;
        assert!(stripped(heard(mixed)).is_err());
    }
}
