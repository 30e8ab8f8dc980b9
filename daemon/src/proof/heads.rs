//! Signed heads: each must be of this chain and signed by the key that the
//! settings of its time name.

use super::{Difference, MOST_DIFFERENCES};
use crate::keys::PublicKey;
use crate::ledger::{Digest, KnownHead, LedgerError, LedgerId, Reader, SignedHead};
use std::collections::{BTreeMap, BTreeSet};

/// What was found of signed heads.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Heads {
    /// How many are good.
    pub signed: u64,
    /// Fingerprints of the keys that signed them.
    pub keys: Vec<String>,
    /// Those that are not.
    pub wrong: Vec<Difference>,
}

/// Checks all stored heads, and those known from elsewhere.
pub(super) fn check(reader: &Reader, ledger: Option<LedgerId>, known: &[KnownHead]) -> Result<Heads, LedgerError> {
    let (mut found, mut keys, mut seq) = (Heads::default(), BTreeSet::new(), 0);
    let named = named_keys(reader)?;
    loop {
        let page = reader.signed_heads_after(seq)?;
        if page.is_empty() {
            break;
        }
        for head in page {
            let Some(head) = head else {
                seq += 1;
                wrong(&mut found, seq, "its signed head is not whole");
                continue;
            };
            seq = head.seq;
            match fault(reader, ledger, &named, &head)? {
                Some(why) => wrong(&mut found, head.seq, why),
                None => {
                    found.signed += 1;
                    keys.insert(PublicKey(head.key));
                }
            }
        }
    }
    for head in known {
        if reader.fact(head.seq)?.is_none_or(|f| f.hash != head.hash) {
            wrong(
                &mut found,
                head.seq,
                "its hash is not the one published for it: the chain was rewritten at or before this fact",
            );
        }
    }
    found.keys = keys.iter().map(PublicKey::fingerprint).collect();
    Ok(found)
}

fn wrong(found: &mut Heads, seq: u64, why: &str) {
    if found.wrong.len() < MOST_DIFFERENCES {
        found.wrong.push(Difference { seq, why: why.into() });
    }
}

/// Which key the settings name from which fact on.
fn named_keys(reader: &Reader) -> Result<BTreeMap<u64, String>, LedgerError> {
    #[derive(serde::Deserialize)]
    struct Settings {
        #[serde(default)]
        signing_key: Option<String>,
    }
    let mut named = BTreeMap::new();
    for fact in reader.facts_of_kind("settings_taken")? {
        let body: serde_json::Value = serde_json::from_slice(&fact.body).unwrap_or_default();
        let Some(input) = body["fact"]["input"].as_u64() else { continue };
        let row = reader.inputs_from(input, 1, None)?.into_iter().next();
        // The settings hold from the start that they follow.
        let settings: Option<Settings> = row.and_then(|r| serde_json::from_slice(&r.bytes).ok());
        named.insert(fact.seq.saturating_sub(1), settings.and_then(|s| s.signing_key).unwrap_or_default());
    }
    Ok(named)
}

fn fault(
    reader: &Reader,
    ledger: Option<LedgerId>,
    named: &BTreeMap<u64, String>,
    head: &SignedHead,
) -> Result<Option<&'static str>, LedgerError> {
    let (key, hash): (PublicKey, Option<Digest>) = (PublicKey(head.key), reader.fact(head.seq)?.map(|f| f.hash));
    let in_force = named.range(..=head.seq).next_back().map(|(_, key)| key.as_str());
    Ok(if hash != Some(head.hash) {
        Some("a head was signed for it with another hash: the chain was rewritten, or cut off, at or before this fact")
    } else if !ledger.is_some_and(|id| key.signed(id, head)) {
        Some("the signature of its head does not hold")
    } else if in_force != Some(key.to_string().as_str()) {
        Some("its head was signed by a key that the settings of its time do not name")
    } else {
        None
    })
}
