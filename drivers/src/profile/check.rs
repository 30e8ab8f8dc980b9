//! Check digits: how they are worked out and where they stand.

use super::text::{CheckDigits, CheckKind, CheckOver, CheckPlace, CheckText};
use crate::frame::Parts;

impl CheckKind {
    /// Every kind.
    pub const ALL: [CheckKind; 14] = [
        Self::Xor,
        Self::Sum,
        Self::TwosComplement,
        Self::OnesComplement,
        Self::Sum16,
        Self::Crc16Arc,
        Self::Crc16Modbus,
        Self::Crc16Usb,
        Self::Crc16Umts,
        Self::Crc16Xmodem,
        Self::Crc16Ibm3740,
        Self::Crc16Kermit,
        Self::Crc16X25,
        Self::Crc16Genibus,
    ];

    /// Bytes of its value.
    pub fn bytes(self) -> usize {
        match self {
            Self::Xor | Self::Sum | Self::TwosComplement | Self::OnesComplement => 1,
            _ => 2,
        }
    }

    /// Its value over the bytes.
    pub fn value(self, bytes: impl Iterator<Item = u8>) -> u16 {
        let wide = |b: u8| u16::from(b);
        match self {
            Self::Xor => wide(bytes.fold(0, |a, b| a ^ b)),
            Self::Sum => wide(bytes.fold(0, u8::wrapping_add)),
            Self::TwosComplement => wide(bytes.fold(0, u8::wrapping_sub)),
            Self::OnesComplement => wide(!bytes.fold(0, u8::wrapping_add)),
            Self::Sum16 => bytes.fold(0, |a: u16, b| a.wrapping_add(wide(b))),
            Self::Crc16Arc => reflected(bytes, 0xA001, 0),
            Self::Crc16Modbus => reflected(bytes, 0xA001, 0xFFFF),
            Self::Crc16Usb => !reflected(bytes, 0xA001, 0xFFFF),
            Self::Crc16Umts => straight(bytes, 0x8005, 0),
            Self::Crc16Xmodem => straight(bytes, 0x1021, 0),
            Self::Crc16Ibm3740 => straight(bytes, 0x1021, 0xFFFF),
            Self::Crc16Kermit => reflected(bytes, 0x8408, 0),
            Self::Crc16X25 => !reflected(bytes, 0x8408, 0xFFFF),
            Self::Crc16Genibus => !straight(bytes, 0x1021, 0xFFFF),
        }
    }
}

/// A cyclic redundancy check that takes the highest bit first.
fn straight(bytes: impl Iterator<Item = u8>, poly: u16, init: u16) -> u16 {
    bytes.fold(init, |crc, b| (0..8).fold(crc ^ u16::from(b) << 8, |c, _| if c & 0x8000 != 0 { c << 1 ^ poly } else { c << 1 }))
}

/// A cyclic redundancy check that takes the lowest bit first; `poly` is written reversed.
fn reflected(bytes: impl Iterator<Item = u8>, poly: u16, init: u16) -> u16 {
    bytes.fold(init, |crc, b| (0..8).fold(crc ^ u16::from(b), |c, _| if c & 1 != 0 { c >> 1 ^ poly } else { c >> 1 }))
}

impl CheckText {
    /// How many characters the digits are.
    pub fn width(self) -> usize {
        self.kind.bytes() * if self.digits == CheckDigits::Hex { 2 } else { 1 }
    }

    /// The body without its check digits; `None` when they do not agree with the frame.
    pub(crate) fn stripped<'a>(self, parts: &Parts<'a>) -> Option<&'a [u8]> {
        let (body, digits) = match self.place {
            CheckPlace::AfterEnd => (parts.body, parts.tail),
            CheckPlace::BeforeEnd => parts.body.split_at(parts.body.len().checked_sub(self.width())?),
        };
        let covered = &body[..body.len().checked_sub(self.skip)?];
        let (start, end) = match self.over {
            CheckOver::Body => (false, false),
            CheckOver::BodyAndEnd => (false, true),
            CheckOver::StartAndBody => (true, false),
            CheckOver::StartToEnd => (true, true),
        };
        let start: &[u8] = if start { parts.start } else { &[] };
        let end: &[u8] = if end { parts.end } else { &[] };
        let value = self.kind.value(start.iter().chain(covered).chain(end).copied());
        (self.read(digits)? == value).then_some(body)
    }

    /// The value that the digits stand for.
    fn read(self, digits: &[u8]) -> Option<u16> {
        if digits.len() != self.width() {
            return None;
        }
        let value = match self.digits {
            CheckDigits::Binary => digits.iter().fold(0, |v, b| v << 8 | u16::from(*b)),
            CheckDigits::Hex => digits.iter().try_fold(0u16, |v, b| char::from(*b).to_digit(16).map(|d| v << 4 | (d as u16)))?,
        };
        Some(if self.low_first && self.kind.bytes() == 2 { value.swap_bytes() } else { value })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Check values over the nine characters 123456789, as the catalogue of parametrised CRC algorithms
    /// (reveng.sourceforge.io) gives them, from memory; the sums are worked out by hand: 0x1DD.
    #[test]
    fn the_published_check_values() {
        for (kind, value) in [
            (CheckKind::Xor, 0x31),
            (CheckKind::Sum, 0xDD),
            (CheckKind::TwosComplement, 0x23),
            (CheckKind::OnesComplement, 0x22),
            (CheckKind::Sum16, 0x01DD),
            (CheckKind::Crc16Arc, 0xBB3D),
            (CheckKind::Crc16Modbus, 0x4B37),
            (CheckKind::Crc16Usb, 0xB4C8),
            (CheckKind::Crc16Umts, 0xFEE8),
            (CheckKind::Crc16Xmodem, 0x31C3),
            (CheckKind::Crc16Ibm3740, 0x29B1),
            (CheckKind::Crc16Kermit, 0x2189),
            (CheckKind::Crc16X25, 0x906E),
            (CheckKind::Crc16Genibus, 0xD64E),
        ] {
            assert_eq!(kind.value(b"123456789".iter().copied()), value, "{kind:?}");
        }
    }

    #[test]
    fn digits_are_taken_off_only_when_they_agree() {
        let parts = |body, tail| Parts { start: b"\x02", body, end: b"\x03", tail };
        let check = CheckText {
            kind: CheckKind::Sum,
            over: CheckOver::Body,
            place: CheckPlace::BeforeEnd,
            digits: CheckDigits::Hex,
            skip: 1,
            low_first: false,
        };
        assert_eq!(check.stripped(&parts(b"123456789*dd", b"")), Some(&b"123456789*"[..]));
        assert_eq!(check.stripped(&parts(b"123456789*DE", b"")), None);
        assert_eq!(check.stripped(&parts(b"D", b"")), None);
        let crc = CheckText { kind: CheckKind::Crc16Modbus, place: CheckPlace::AfterEnd, skip: 0, ..check };
        let binary = CheckText { digits: CheckDigits::Binary, low_first: true, ..crc };
        assert_eq!(binary.stripped(&parts(b"123456789", b"\x37\x4B")), Some(&b"123456789"[..]));
        assert_eq!(binary.stripped(&parts(b"123456789", b"\x4B\x37")), None);
    }
}
