//! `tarecup status`: how is the running service doing?

use super::{FAILED, NOBODY, NOT_RECORDING, StateArg, WRONG_INPUT, files};
use crate::socket::{self, ClientError};
use serde_json::Value;
use std::time::Duration;

/// Arguments of `status`.
#[derive(clap::Args)]
pub struct StatusArgs {
    #[command(flatten)]
    state: StateArg,
    /// The whole status as JSON.
    #[arg(long)]
    json: bool,
}

/// Runs `status`.
pub fn run(args: &StatusArgs) -> u8 {
    let dir = match files::state_dir(args.state.state.as_deref(), None) {
        Ok(dir) => dir,
        Err(says) => {
            eprintln!("{says}");
            return WRONG_INPUT;
        }
    };
    match socket::ask_service(&dir, r#"{"ask":"status"}"#, Duration::from_secs(5)) {
        Err(e) => {
            eprintln!("{e}");
            if matches!(e, ClientError::Nobody { .. }) { NOBODY } else { FAILED }
        }
        Ok(answer) => {
            let answer: Value = serde_json::from_str(&answer).unwrap_or_default();
            let status = &answer["status"];
            if args.json {
                say!("{status}");
            } else {
                say!("{}", (told(status)).trim_end());
            }
            if status["not_recording"].is_string() { NOT_RECORDING } else { 0 }
        }
    }
}

fn told(s: &Value) -> String {
    let text = |v: &Value| v.as_str().unwrap_or("-").to_string();
    let mut out = match s["not_recording"].as_str() {
        Some(why) => format!("NOT RECORDING: {why}\n"),
        None => String::from("recording\n"),
    };
    out += &format!(
        "station {} · ledger {} epoch {} · fact {} · input {}\n",
        text(&s["station"]),
        text(&s["ledger"]),
        s["epoch"],
        s["seq"],
        s["inputs"]
    );
    for (what, says) in [("room", &s["room"]), ("clock", &s["clock"])] {
        if let Some(says) = says.as_str() {
            out += &format!("{what}: {says}\n");
        }
    }
    out += &match s["broker_trouble"].as_str() {
        Some(why) => format!("broker: {why}\n"),
        None => format!("broker: delivered through fact {}\n", s["delivered_through"]),
    };
    for i in s["instruments"].as_array().into_iter().flatten() {
        let rejects: u64 = i["rejects"].as_object().into_iter().flatten().filter_map(|(_, n)| n.as_u64()).sum();
        out += &format!(
            "{:<12} {:<14} heard {} · {} lines, {rejects} not understood",
            text(&i["instrument"]),
            text(&i["state"]),
            text(&i["last_heard"]),
            i["lines"]
        );
        for (reason, n) in i["rejects"].as_object().into_iter().flatten() {
            out += &format!(" ({reason} {n})");
        }
        if let Some(detail) = i["detail"].as_str() {
            out += &format!(" · {detail}");
        }
        out.push('\n');
    }
    for (what, name) in [("cup", "trials in the cup"), ("cone", "trials with the cone"), ("threads", "thread containers")] {
        let own = &s["own_scatter"][what];
        if let Some(sd) = own["sd_percent"].as_f64() {
            out += &format!(
                "own scatter of {name}: {sd:.2} % water, {} degrees of freedom, {} specimens\n",
                own["degrees_of_freedom"], own["specimens"]
            );
        }
    }
    for b in s["benches"].as_array().into_iter().flatten() {
        out += &format!("bench {:<8} {} · {}\n", text(&b["bench"]), text(&b["signed_in"]), text(&b["next"]));
    }
    out
}
