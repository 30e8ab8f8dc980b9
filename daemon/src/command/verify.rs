//! `tarecup verify`: whether a ledger is as it was written.

use super::{FAILED, StateArg, WRONG_INPUT, files};
use crate::ledger::{Digest, KnownHead, LedgerId};
use crate::proof::{self, Difference, Proof, Step};
use serde_json::{Value, json};
use std::io::{IsTerminal, Write};
use std::path::{Path, PathBuf};

/// Arguments of `verify`.
#[derive(clap::Args)]
pub struct VerifyArgs {
    /// The ledger: its file or the state directory it is in. Default: that of --state.
    ledger: Option<PathBuf>,
    #[command(flatten)]
    state: StateArg,
    /// A head known from elsewhere: a file with a published head payload, or SEQ:HASH. Repeat for several.
    #[arg(long, value_name = "FILE|SEQ:HASH")]
    head: Vec<String>,
    /// Decide everything again from the inputs, with this program, and list the differences.
    #[arg(long)]
    redecide: bool,
    /// Print one JSON object.
    #[arg(long)]
    json: bool,
}

/// Runs `verify`.
pub fn run(args: &VerifyArgs) -> u8 {
    let path = match args.ledger.clone().map_or_else(|| files::state_dir(args.state.state.as_deref(), None), Ok) {
        Ok(path) => path,
        Err(says) => return wrong(&says),
    };
    let heads: Result<Vec<KnownHead>, String> = args.head.iter().map(|h| known_head(h)).collect();
    let heads = match heads {
        Ok(heads) => heads,
        Err(says) => return wrong(&says),
    };
    let quiet = args.json || !std::io::stderr().is_terminal();
    match proof::prove(&path, &heads, args.redecide, &mut |step| show(quiet, step)) {
        Err(e) => {
            done_showing(quiet);
            if args.json {
                say!("{}", json!({"ok": false, "error": {"says": e.to_string()}}));
            }
            eprintln!("{e}");
            FAILED
        }
        Ok(proof) => {
            done_showing(quiet);
            if args.json {
                say!("{}", as_json(&path, &proof));
            } else {
                tell(&path, &proof);
            }
            if proof.first_bad().is_none() { 0 } else { FAILED }
        }
    }
}

fn wrong(says: &str) -> u8 {
    eprintln!("{says}");
    WRONG_INPUT
}

/// A head given on the command line.
fn known_head(text: &str) -> Result<KnownHead, String> {
    if let Some((seq, hash)) = text.split_once(':')
        && let (Ok(seq), Some(hash)) = (seq.parse(), Digest::from_hex(hash))
    {
        return Ok(KnownHead { id: None, seq, hash });
    }
    let says = "a head is SEQ:HASH with 64 hexadecimal digits, or a file with the payload of the topic head";
    let file = std::fs::read_to_string(text).map_err(|e| format!("{text}: {e}; {says}"))?;
    let head: Value = serde_json::from_str(&file).map_err(|e| format!("{text} is not JSON: {e}; {says}"))?;
    let hash = head["hash"].as_str().and_then(Digest::from_hex);
    let (Some(seq), Some(hash)) = (head["seq"].as_u64(), hash) else {
        return Err(format!("{text} has no \"seq\" and \"hash\"; {says}"));
    };
    Ok(KnownHead { id: head["ledger"].as_str().and_then(LedgerId::from_hex), seq, hash })
}

fn show(quiet: bool, step: Step<'_>) {
    if quiet {
        return;
    }
    let text = match step {
        Step::Chain(p) => format!("chain: fact {} of {}, input {} of {}", p.facts, p.of_facts, p.inputs, p.of_inputs),
        Step::Documents(facts) => format!("documents: {facts} facts"),
        Step::Again(inputs) => format!("deciding again: {inputs} inputs"),
    };
    let _ = write!(std::io::stderr(), "\r\x1b[K{text}");
}

fn done_showing(quiet: bool) {
    if !quiet {
        let _ = write!(std::io::stderr(), "\r\x1b[K");
    }
}

fn as_json(path: &Path, proof: &Proof) -> Value {
    let bad = proof.first_bad();
    json!({
        "ok": bad.is_none(), "path": path.display().to_string(),
        "ledger": proof.chain.id.map(|id| id.to_string()), "facts": proof.chain.facts, "inputs": proof.chain.inputs,
        "inputs_unchained": proof.chain.inputs_unchained, "hash": proof.chain.last_hash.map(|h| h.to_string()),
        "first_bad": bad.map(|(seq, why)| json!({"seq": seq, "why": why})),
        "heads": proof.heads.as_ref().map(|h| json!({"signed": h.signed, "keys": h.keys})),
        "documents": proof.documents, "redecided": proof.redecided,
    })
}

fn tell(path: &Path, proof: &Proof) {
    let chain = &proof.chain;
    say!("ledger {} at {}", chain.id.map_or_else(|| String::from("(none)"), |id| id.to_string()), path.display());
    say!("chain      {} facts, {} inputs, of which {} after the last fact", chain.facts, chain.inputs, chain.inputs_unchained);
    if let Some(heads) = &proof.heads {
        let keys = if heads.keys.is_empty() { String::from("none") } else { heads.keys.join(", ") };
        say!("signatures {} heads; keys: {keys}", heads.signed);
    }
    if let Some(documents) = &proof.documents {
        say!("documents  {}", count(documents, "follow from the facts", "do not follow from the facts"));
        list(documents);
    }
    if let Some(differences) = &proof.redecided {
        say!("decisions  {}", count(differences, "are decided alike today", "differ from what this program decides"));
        list(differences);
    }
    match proof.first_bad() {
        None => say!("as it was written, up to fact {}", chain.facts),
        Some((seq, why)) => say!(
            "NOT as it was written: fact {seq}: {why}\nKeep this file as it is, and compare with the last backup and the published heads."
        ),
    }
}

fn count(differences: &[Difference], good: &str, bad: &str) -> String {
    match differences.len() {
        0 => format!("all {good}"),
        n => format!("{n} {bad}"),
    }
}

fn list(differences: &[Difference]) {
    for difference in differences.iter().take(20) {
        say!("  fact {}: {}", difference.seq, difference.why);
    }
    if differences.len() > 20 {
        say!("  and {} more", differences.len() - 20);
    }
}
