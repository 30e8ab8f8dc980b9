//! Check values that instruments put behind what they send.

use super::pick;
use crate::rng::Rng;

/// How the bytes are summed up.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Sum {
    /// Exclusive or.
    Xor,
    /// Sum, its lowest eight bits.
    Plain,
    /// What makes the sum zero.
    Complement,
    /// CRC-16 with polynomial 0x8005, bits reversed, and this beginning.
    Reflected(u16),
    /// CRC-16 with polynomial 0x1021 and this beginning.
    Forward(u16),
}

/// A check value: how, over what, and how it is written.
#[derive(Clone, Copy, Debug)]
pub(super) struct Check {
    pub sum: Sum,
    pub hex: bool,
    pub upper: bool,
    /// Of a CRC, the low byte first.
    pub low_first: bool,
    /// The start byte is summed up too.
    pub with_start: bool,
    /// It stands after the terminator.
    pub after_end: bool,
    /// The terminator is summed up too.
    pub with_end: bool,
}

impl Check {
    pub fn invent(rng: &mut Rng) -> Self {
        let sum = pick(
            rng,
            &[
                Sum::Xor,
                Sum::Xor,
                Sum::Plain,
                Sum::Plain,
                Sum::Complement,
                Sum::Reflected(0xFFFF),
                Sum::Reflected(0),
                Sum::Forward(0xFFFF),
                Sum::Forward(0),
            ],
        );
        let after_end = rng.chance(0.35);
        Self {
            sum,
            hex: rng.chance(0.8),
            upper: rng.chance(0.8),
            low_first: rng.chance(0.3),
            with_start: rng.chance(0.25),
            after_end,
            with_end: after_end && rng.chance(0.4),
        }
    }

    /// The value over `bytes`, as it is sent.
    pub fn of(&self, bytes: &[u8]) -> Vec<u8> {
        let value = sum(self.sum, bytes);
        let raw = match self.sum {
            Sum::Reflected(_) | Sum::Forward(_) if self.low_first => value.to_le_bytes().to_vec(),
            Sum::Reflected(_) | Sum::Forward(_) => value.to_be_bytes().to_vec(),
            _ => value.to_le_bytes()[..1].to_vec(),
        };
        if !self.hex {
            return raw;
        }
        let text: String = raw.iter().map(|b| if self.upper { format!("{b:02X}") } else { format!("{b:02x}") }).collect();
        text.into_bytes()
    }

    /// For people.
    pub fn about(&self) -> String {
        let place = if self.after_end { "after" } else { "before" };
        format!("check {:?} {} {place} the end", self.sum, if self.hex { "hex" } else { "binary" })
    }
}

fn sum(kind: Sum, bytes: &[u8]) -> u16 {
    match kind {
        Sum::Xor => u16::from(bytes.iter().fold(0, |a, b| a ^ b)),
        Sum::Plain => u16::from(bytes.iter().fold(0u8, |a, b| a.wrapping_add(*b))),
        Sum::Complement => u16::from(bytes.iter().fold(0u8, |a, b| a.wrapping_add(*b)).wrapping_neg()),
        Sum::Reflected(begin) => bytes
            .iter()
            .fold(begin, |crc, b| (0..8).fold(crc ^ u16::from(*b), |c, _| if c & 1 == 1 { (c >> 1) ^ 0xA001 } else { c >> 1 })),
        Sum::Forward(begin) => bytes.iter().fold(begin, |crc, b| {
            (0..8).fold(crc ^ (u16::from(*b) << 8), |c, _| if c & 0x8000 != 0 { (c << 1) ^ 0x1021 } else { c << 1 })
        }),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sums_are_those_of_the_catalogues() {
        // Check values over "123456789" as catalogues of CRCs list them (from memory): with polynomial 0x8005 reversed
        // 4B37 beginning with FFFF, BB3D with 0; with polynomial 0x1021 29B1 beginning with FFFF, 31C3 with 0.
        for (kind, value) in [
            (Sum::Reflected(0xFFFF), 0x4B37),
            (Sum::Reflected(0), 0xBB3D),
            (Sum::Forward(0xFFFF), 0x29B1),
            (Sum::Forward(0), 0x31C3),
            (Sum::Xor, 0x31),
            (Sum::Plain, 0xDD),
            (Sum::Complement, 0x23),
        ] {
            assert_eq!(sum(kind, b"123456789"), value, "{kind:?}");
        }
    }

    #[test]
    fn values_are_written_as_described() {
        let hex = Check {
            sum: Sum::Forward(0),
            hex: true,
            upper: true,
            low_first: false,
            with_start: false,
            after_end: false,
            with_end: false,
        };
        assert_eq!(hex.of(b"123456789"), b"31C3");
        assert_eq!(Check { low_first: true, upper: false, ..hex }.of(b"123456789"), b"c331");
        assert_eq!(Check { hex: false, sum: Sum::Plain, ..hex }.of(b"123456789"), [0xDD]);
    }
}
