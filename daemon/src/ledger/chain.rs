//! The chain: how inputs are digested and facts are hashed (SHA-256, FIPS 180-4).
//!
//! Every integer is written as eight bytes, most significant first; a text or
//! a run of bytes as its length in four bytes and then itself; an absent text
//! as the byte 0, a present one as the byte 1 and then the text. So two
//! different rows can never be written alike.
//!
//! ```text
//! inputs digest = SHA-256("tarecup inputs 1\n" ‖ each input)
//! input         = no ‖ utc_us ‖ mono_us ‖ boot ‖ kind ‖ instrument? ‖ reason? ‖ bytes
//! fact hash     = SHA-256("tarecup fact 1\n" ‖ previous hash ‖ columns ‖ body ‖ inputs digest)
//! columns       = seq ‖ utc_us ‖ mono_us ‖ boot ‖ kind ‖ who? ‖ through ‖ inputs_to
//! first previous hash = SHA-256("tarecup ledger 1\n" ‖ the sixteen bytes of the ledger's id)
//! ```
//! The instrument is digested by its name, not by the number it is stored
//! under, so that renaming one in the table shows.

use sha2::{Digest as _, Sha256};
use std::fmt;

const TAG_LEDGER: &[u8] = b"tarecup ledger 1\n";
const TAG_FACT: &[u8] = b"tarecup fact 1\n";
const TAG_INPUTS: &[u8] = b"tarecup inputs 1\n";

/// A SHA-256 digest; shown in lower-case hexadecimal.
#[derive(Clone, Copy, PartialEq, Eq, Hash)]
pub struct Digest(pub [u8; 32]);

/// The random name of one ledger; shown as 32 hexadecimal digits.
#[derive(Clone, Copy, PartialEq, Eq, Hash)]
pub struct LedgerId(pub [u8; 16]);

fn write_hex(f: &mut fmt::Formatter<'_>, bytes: &[u8]) -> fmt::Result {
    bytes.iter().try_for_each(|b| write!(f, "{b:02x}"))
}

fn read_hex<const N: usize>(text: &str) -> Option<[u8; N]> {
    let digits = text.as_bytes();
    if digits.len() != 2 * N {
        return None;
    }
    let mut out = [0; N];
    for (byte, pair) in out.iter_mut().zip(digits.chunks_exact(2)) {
        let high = (pair[0] as char).to_digit(16)?;
        let low = (pair[1] as char).to_digit(16)?;
        *byte = (high * 16 + low) as u8;
    }
    Some(out)
}

impl Digest {
    /// The digest of some bytes, for instance of an ask's body.
    pub fn of(bytes: &[u8]) -> Self {
        Self(Sha256::digest(bytes).into())
    }
    /// Reads 64 hexadecimal digits.
    pub fn from_hex(text: &str) -> Option<Self> {
        read_hex(text).map(Self)
    }
}

impl LedgerId {
    /// Reads 32 hexadecimal digits.
    pub fn from_hex(text: &str) -> Option<Self> {
        read_hex(text).map(Self)
    }
}

impl fmt::Display for Digest {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write_hex(f, &self.0)
    }
}
impl fmt::Debug for Digest {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write_hex(f, &self.0)
    }
}
impl fmt::Display for LedgerId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write_hex(f, &self.0)
    }
}
impl fmt::Debug for LedgerId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write_hex(f, &self.0)
    }
}

/// The columns of an input as they are digested. Texts are bytes, because a
/// tampered file may hold what is not text and must still be digested as it is.
pub(crate) struct InputFields<'a> {
    pub no: i64,
    pub utc_us: i64,
    pub mono_us: i64,
    pub boot: i64,
    pub kind: &'a [u8],
    pub instrument: Option<&'a [u8]>,
    pub reason: Option<&'a [u8]>,
    pub bytes: &'a [u8],
}

/// The columns of a fact as they are hashed.
pub(crate) struct FactFields<'a> {
    pub seq: i64,
    pub utc_us: i64,
    pub mono_us: i64,
    pub boot: i64,
    pub kind: &'a [u8],
    pub who: Option<&'a [u8]>,
    pub through: i64,
    pub inputs_to: i64,
    pub body: &'a [u8],
}

fn put_number(out: &mut Vec<u8>, n: i64) {
    out.extend_from_slice(&n.to_be_bytes());
}

/// SQLite keeps no value of 4 GiB, so the length always fits.
fn put_bytes(out: &mut Vec<u8>, bytes: &[u8]) {
    out.extend_from_slice(&(bytes.len() as u32).to_be_bytes());
    out.extend_from_slice(bytes);
}

fn put_optional(out: &mut Vec<u8>, bytes: Option<&[u8]>) {
    out.push(u8::from(bytes.is_some()));
    if let Some(bytes) = bytes {
        put_bytes(out, bytes);
    }
}

/// The running digest of the inputs since the last fact.
pub(crate) struct InputDigest {
    sha: Sha256,
    /// A row is put together here first: one call to the hash for each row is
    /// markedly quicker than one for each column.
    scratch: Vec<u8>,
}

impl InputDigest {
    pub fn new() -> Self {
        Self { sha: Sha256::new_with_prefix(TAG_INPUTS), scratch: Vec::with_capacity(256) }
    }

    pub fn add(&mut self, row: &InputFields<'_>) {
        let out = &mut self.scratch;
        out.clear();
        put_number(out, row.no);
        put_number(out, row.utc_us);
        put_number(out, row.mono_us);
        put_number(out, row.boot);
        put_bytes(out, row.kind);
        put_optional(out, row.instrument);
        put_optional(out, row.reason);
        put_bytes(out, row.bytes);
        self.sha.update(&self.scratch);
    }

    /// The digest so far; begins anew.
    pub fn take(&mut self) -> Digest {
        let sha = std::mem::replace(&mut self.sha, Sha256::new_with_prefix(TAG_INPUTS));
        Digest(sha.finalize().into())
    }
}

/// What the first fact is chained to.
pub(crate) fn genesis(id: &LedgerId) -> Digest {
    let mut sha = Sha256::new_with_prefix(TAG_LEDGER);
    sha.update(id.0);
    Digest(sha.finalize().into())
}

/// The hash of a fact.
pub(crate) fn fact_hash(previous: &Digest, fact: &FactFields<'_>, inputs: &Digest) -> Digest {
    let mut columns = Vec::with_capacity(128);
    put_number(&mut columns, fact.seq);
    put_number(&mut columns, fact.utc_us);
    put_number(&mut columns, fact.mono_us);
    put_number(&mut columns, fact.boot);
    put_bytes(&mut columns, fact.kind);
    put_optional(&mut columns, fact.who);
    put_number(&mut columns, fact.through);
    put_number(&mut columns, fact.inputs_to);
    columns.extend_from_slice(&(fact.body.len() as u32).to_be_bytes());
    let mut sha = Sha256::new_with_prefix(TAG_FACT);
    sha.update(previous.0);
    sha.update(&columns);
    sha.update(fact.body);
    sha.update(inputs.0);
    Digest(sha.finalize().into())
}

#[cfg(test)]
mod tests {
    use super::*;

    /// FIPS 180-4 with NIST's published example "abc"
    /// (csrc.nist.gov, Examples with Intermediate Values, SHA-256).
    #[test]
    fn sha256_is_the_published_one() {
        let abc = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad";
        assert_eq!(Digest::of(b"abc").to_string(), abc);
        assert_eq!(Digest::from_hex(abc), Some(Digest::of(b"abc")));
    }

    #[test]
    fn hexadecimal_of_another_length_or_alphabet_is_refused() {
        assert_eq!(Digest::from_hex("ba78"), None);
        assert_eq!(LedgerId::from_hex(&"g".repeat(32)), None);
        assert_eq!(LedgerId::from_hex(&"é".repeat(16)), None);
        assert_eq!(LedgerId::from_hex(&"0a".repeat(16)), Some(LedgerId([10; 16])));
    }

    fn digest(kind: &[u8], instrument: Option<&[u8]>, reason: Option<&[u8]>, bytes: &[u8]) -> Digest {
        let mut d = InputDigest::new();
        d.add(&InputFields { no: 1, utc_us: 2, mono_us: 3, boot: 4, kind, instrument, reason, bytes });
        d.take()
    }

    /// Bytes that slide from one column into the next give another digest.
    #[test]
    fn columns_cannot_run_into_each_other() {
        let all = [
            digest(b"line", Some(b"pan"), None, b"12"),
            digest(b"line", Some(b"pan1"), None, b"2"),
            digest(b"line", None, Some(b"pan"), b"12"),
            digest(b"linep", Some(b"an"), None, b"12"),
            digest(b"line", Some(b"pan"), Some(b""), b"12"),
            digest(b"line", Some(b""), None, b"12"),
            digest(b"line", None, None, b"12"),
        ];
        for (i, a) in all.iter().enumerate() {
            assert!(all[i + 1..].iter().all(|b| a != b), "row {i} is written like another one");
        }
    }

    #[test]
    fn taking_a_digest_begins_anew() {
        let mut d = InputDigest::new();
        let empty = d.take();
        let row =
            InputFields { no: 1, utc_us: 2, mono_us: 3, boot: 4, kind: b"line", instrument: None, reason: None, bytes: b"x" };
        d.add(&row);
        assert_ne!(d.take(), empty);
        assert_eq!(d.take(), empty);
    }
}
