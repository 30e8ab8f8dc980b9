//! The key that heads are signed with (Ed25519, RFC 8032).
//!
//! It lies outside the state directory, so that who gets hold of a ledger or
//! a backup cannot sign another one.

use crate::ledger::{Digest, LedgerId, SignedHead};
use ed25519_dalek::{Signature, Signer, SigningKey, Verifier, VerifyingKey};
use std::fs::OpenOptions;
use std::io::Write;
use std::os::unix::fs::{MetadataExt, OpenOptionsExt};
use std::path::{Path, PathBuf};

const TAG: &[u8] = b"tarecup head 1\n";

/// A head as it is signed: a place in the chain, and when it was reached.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct HeadText {
    /// The ledger.
    pub ledger: LedgerId,
    /// Its epoch.
    pub epoch: u64,
    /// The last fact.
    pub seq: u64,
    /// Its hash.
    pub hash: Digest,
    /// Wall time, microseconds.
    pub at_utc_us: i64,
}

impl HeadText {
    /// The bytes that are signed: a tag, the ledger's id, then epoch, number,
    /// hash and time; numbers as eight bytes, most significant first.
    fn bytes(&self) -> Vec<u8> {
        let mut out = TAG.to_vec();
        out.extend_from_slice(&self.ledger.0);
        out.extend_from_slice(&self.epoch.to_be_bytes());
        out.extend_from_slice(&self.seq.to_be_bytes());
        out.extend_from_slice(&self.hash.0);
        out.extend_from_slice(&self.at_utc_us.to_be_bytes());
        out
    }
}

/// Signs heads.
#[derive(Clone)]
pub struct Key(SigningKey);

impl std::fmt::Debug for Key {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "Key({})", self.public())
    }
}

impl Key {
    /// A new key.
    ///
    /// # Errors
    /// When the system gives no random numbers.
    pub fn random() -> Result<Self, String> {
        let mut seed = [0; 32];
        getrandom::fill(&mut seed).map_err(|e| format!("the system gives no random numbers: {e}"))?;
        Ok(Self(SigningKey::from_bytes(&seed)))
    }

    /// The key of demonstrations. It is no secret: what it signs is thrown away, and the same day played twice is
    /// the same to the byte.
    pub fn of_demonstrations() -> Self {
        Self(SigningKey::from_bytes(&[7; 32]))
    }

    /// The key in a file, which is made with a new one when it is not there.
    ///
    /// # Errors
    /// In words, with what to try.
    pub fn load_or_make(path: &Path) -> Result<Self, String> {
        match std::fs::read_to_string(path) {
            Ok(text) => {
                refuse_when_open(path)?;
                let seed = Digest::from_hex(text.trim());
                let seed = seed.ok_or_else(|| {
                    format!(
                        "{} holds no signing key: 64 hexadecimal digits are expected; move it away to have a new one made",
                        path.display()
                    )
                })?;
                Ok(Self(SigningKey::from_bytes(&seed.0)))
            }
            Err(e) if e.kind() == std::io::ErrorKind::NotFound => Self::make(path),
            Err(e) => Err(cannot(path, &e)),
        }
    }

    fn make(path: &Path) -> Result<Self, String> {
        let key = Self::random()?;
        let write = || {
            if let Some(folder) = path.parent() {
                std::fs::create_dir_all(folder)?;
            }
            // Killed here, it must not leave half a key that no later start would take: the name is given to a whole one.
            let mut part = path.as_os_str().to_owned();
            part.push(".part");
            let _ = std::fs::remove_file(&part);
            let mut file = OpenOptions::new().write(true).create_new(true).mode(0o600).open(&part)?;
            writeln!(file, "{}", Digest(key.0.to_bytes()))?;
            file.sync_all()?;
            // Unlike renaming, this does not take the place of a key that another process has made meanwhile.
            let named = std::fs::hard_link(&part, path);
            std::fs::remove_file(&part)?;
            named
        };
        write().map_err(|e| cannot(path, &e))?;
        Ok(key)
    }

    /// The public half, in hexadecimal digits.
    pub fn public(&self) -> PublicKey {
        PublicKey(self.0.verifying_key().to_bytes())
    }

    /// Signs a head.
    pub fn sign(&self, head: &HeadText) -> SignedHead {
        SignedHead {
            seq: head.seq,
            hash: head.hash,
            epoch: head.epoch,
            at_utc_us: head.at_utc_us,
            key: self.public().0,
            signature: self.0.sign(&head.bytes()).to_bytes(),
        }
    }

    /// Signs any bytes, for instance a report, under a word that keeps it apart from heads.
    pub fn sign_bytes(&self, word: &str, bytes: &[u8]) -> String {
        let mut text = format!("tarecup {word}\n").into_bytes();
        text.extend_from_slice(bytes);
        hex(&self.0.sign(&text).to_bytes())
    }
}

fn cannot(path: &Path, e: &std::io::Error) -> String {
    format!(
        "the signing key {}: {e}; name a file this user can write with signing_key_file in [record], outside the state directory",
        path.display()
    )
}

/// A key that others can read proves nothing.
fn refuse_when_open(path: &Path) -> Result<(), String> {
    match std::fs::metadata(path) {
        Ok(found) if found.mode() & 0o077 != 0 => Err(format!(
            "the signing key {} can be read by others; chmod 600 it, or move it away to have a new one made",
            path.display()
        )),
        _ => Ok(()),
    }
}

/// The public half of a key.
#[derive(Clone, Copy, PartialEq, Eq, Debug, Hash, PartialOrd, Ord)]
pub struct PublicKey(pub [u8; 32]);

impl std::fmt::Display for PublicKey {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(&hex(&self.0))
    }
}

impl PublicKey {
    /// A short name of the key, to be compared by people: the first eight bytes of its SHA-256.
    pub fn fingerprint(&self) -> String {
        let digest = Digest::of(&self.0).to_string();
        let groups: Vec<&str> = (0..4).filter_map(|n| digest.get(n * 4..n * 4 + 4)).collect();
        groups.join("-")
    }

    /// Whether a signed head is of this ledger and signed by this key.
    pub fn signed(&self, ledger: LedgerId, head: &SignedHead) -> bool {
        let text = HeadText { ledger, epoch: head.epoch, seq: head.seq, hash: head.hash, at_utc_us: head.at_utc_us };
        let key = VerifyingKey::from_bytes(&self.0);
        head.key == self.0 && key.is_ok_and(|k| k.verify(&text.bytes(), &Signature::from_bytes(&head.signature)).is_ok())
    }
}

/// Lower-case hexadecimal digits.
pub fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|b| format!("{b:02x}")).collect()
}

/// Where the key lies when the configuration does not say: what the service
/// manager hands over, else the user's configuration folder.
pub fn usual_place() -> Option<PathBuf> {
    let from = |name: &str| std::env::var_os(name).map(PathBuf::from);
    let handed = from("CREDENTIALS_DIRECTORY").map(|d| d.join("signing.key")).filter(|p| p.is_file());
    let first = |dirs: PathBuf| PathBuf::from(dirs.to_string_lossy().split(':').next().unwrap_or_default());
    let manager = from("CONFIGURATION_DIRECTORY").map(|d| first(d).join("signing.key"));
    let own = from("XDG_CONFIG_HOME").or_else(|| from("HOME").map(|h| h.join(".config"))).map(|d| d.join("tarecup/signing.key"));
    handed.or(manager).or(own)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn head() -> HeadText {
        HeadText { ledger: LedgerId([7; 16]), epoch: 1, seq: 12, hash: Digest([9; 32]), at_utc_us: 1_800_000_000_000_000 }
    }

    #[test]
    fn a_signature_holds_for_its_head_and_nothing_else() {
        let (key, other) = (Key::random().expect("a key"), Key::random().expect("a key"));
        let signed = key.sign(&head());
        assert!(key.public().signed(LedgerId([7; 16]), &signed));
        assert!(!other.public().signed(LedgerId([7; 16]), &signed));
        assert!(!key.public().signed(LedgerId([8; 16]), &signed));
        for changed in [
            SignedHead { seq: 13, ..signed.clone() },
            SignedHead { epoch: 2, ..signed.clone() },
            SignedHead { hash: Digest([8; 32]), ..signed.clone() },
            SignedHead { at_utc_us: 0, ..signed.clone() },
        ] {
            assert!(!key.public().signed(LedgerId([7; 16]), &changed), "{changed:?}");
        }
    }

    /// RFC 8032 §7.1, test 1: the public key that belongs to a secret one.
    #[test]
    fn keys_are_those_of_the_standard() {
        let secret = Digest::from_hex("9d61b19deffd5a60ba844af492ec2cc44449c5697b326919703bac031cae7f60").expect("hex");
        let key = Key(SigningKey::from_bytes(&secret.0));
        assert_eq!(key.public().to_string(), "d75a980182b10ab7d54bfed3c964073a0ee172f3daa62325af021a68f707511a");
    }

    #[test]
    fn a_key_file_is_made_once_and_its_owners_alone() {
        let folder = tempfile::tempdir().expect("a folder");
        let path = folder.path().join("deep/signing.key");
        let key = Key::load_or_make(&path).expect("made");
        assert_eq!(std::fs::metadata(&path).expect("there").mode() & 0o777, 0o600);
        assert_eq!(Key::load_or_make(&path).expect("read").public(), key.public());
        let open = std::os::unix::fs::PermissionsExt::from_mode(0o644);
        std::fs::set_permissions(&path, open).expect("opened up");
        assert!(Key::load_or_make(&path).is_err_and(|says| says.contains("chmod 600")));
        std::fs::write(folder.path().join("x"), "no key\n").expect("written");
        let closed = std::os::unix::fs::PermissionsExt::from_mode(0o600);
        std::fs::set_permissions(folder.path().join("x"), closed).expect("closed");
        assert!(Key::load_or_make(&folder.path().join("x")).is_err_and(|says| says.contains("64 hexadecimal")));
    }
}
