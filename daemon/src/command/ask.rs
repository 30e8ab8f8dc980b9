//! `tarecup ask`: ask the running service for something.

use super::{FAILED, NOBODY, StateArg, WRONG_INPUT, files};
use crate::asks;
use crate::socket::{self, ClientError};
use serde_json::{Map, Value};
use std::time::Duration;

/// Arguments of `ask`.
#[derive(clap::Args)]
#[command(
    after_help = "Examples:\n  tarecup ask sign_in bench=north operator=AB\n  tarecup ask open_specimen specimen=S-101 method=d4318-multipoint\n  tarecup ask intend bench=north specimen=S-101 intention=liquid\n  tarecup ask into_oven containers=C11,C12\n  tarecup ask set_aside what=118 who=AB why=\"soil slid\"\n  tarecup ask '{\"ask\":\"document\",\"kind\":\"specimen\",\"id\":\"S-101\"}'"
)]
pub struct AskArgs {
    #[command(flatten)]
    state: StateArg,
    /// What to ask: one JSON object, or a word followed by NAME=VALUE.
    #[arg(required = true, value_name = "ASK")]
    ask: Vec<String>,
}

/// Runs `ask`.
pub fn run(args: &AskArgs) -> u8 {
    let text = match ask_text(&args.ask) {
        Ok(text) => text,
        Err(says) => {
            eprintln!("{says}");
            return WRONG_INPUT;
        }
    };
    let dir = match files::state_dir(args.state.state.as_deref(), None) {
        Ok(dir) => dir,
        Err(says) => {
            eprintln!("{says}");
            return WRONG_INPUT;
        }
    };
    match socket::ask_service(&dir, &text, Duration::from_secs(10)) {
        Ok(answer) => {
            say!("{answer}");
            let ok = serde_json::from_str::<Value>(&answer).is_ok_and(|a| a["ok"] == Value::Bool(true));
            if ok { 0 } else { FAILED }
        }
        Err(e @ ClientError::Nobody { .. }) => {
            eprintln!("{e}");
            NOBODY
        }
        Err(e) => {
            eprintln!("{e}");
            FAILED
        }
    }
}

fn ask_text(words: &[String]) -> Result<String, String> {
    if let [one] = words
        && one.trim_start().starts_with('{')
    {
        return Ok(one.clone());
    }
    let mut ask = Map::new();
    let (word, members) = words.split_first().ok_or("say what to ask")?;
    ask.insert("ask".into(), Value::String(word.clone()));
    for member in members {
        let (name, value) = member.split_once('=').ok_or_else(|| format!("\"{member}\" is not NAME=VALUE"))?;
        ask.insert(name.into(), asks::member(name, value)?);
    }
    Ok(Value::Object(ask).to_string())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn text(words: &[&str]) -> Result<Value, String> {
        let words: Vec<String> = words.iter().map(|w| (*w).to_string()).collect();
        ask_text(&words).map(|t| serde_json::from_str(&t).unwrap_or_default())
    }

    #[test]
    fn words_become_json() {
        assert_eq!(text(&["set_aside", "what=118", "who=AB", "why=soil slid"]).unwrap()["what"], 118);
        assert_eq!(text(&["into_oven", "containers=C1, C2"]).unwrap()["containers"][1], "C2");
        assert_eq!(text(&["not_obtainable", "limit=plastic"]).unwrap()["limit"], "plastic");
        assert_eq!(text(&["facts_after", "seq=3", "limit=5"]).unwrap()["limit"], 5);
        assert_eq!(text(&["type_penetration", "bench=north", "penetration_mm=19.8", "who=AB"]).unwrap()["penetration_mm"], 19.8);
        assert!(text(&["set_aside", "what"]).is_err());
        assert!(text(&["set_aside", "what=x"]).is_err());
        assert_eq!(text(&[r#"{"ask":"status"}"#]).unwrap()["ask"], "status");
    }
}
