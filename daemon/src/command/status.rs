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
            connection(i),
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
        let urgent = if b["urgent"] == true { "! " } else { "" };
        let loose = b["loose"].as_u64().filter(|n| *n > 0).map(|n| format!(" · {n} loose")).unwrap_or_default();
        out += &format!("bench {:<8} {} · {urgent}{}{loose}\n", text(&b["bench"]), text(&b["signed_in"]), text(&b["next"]));
    }
    out + &beside(s)
}

/// How an instrument is connected. Of one that is silent the last time it was heard, beside it, says since when.
fn connection(instrument: &Value) -> String {
    match instrument["state"].as_str() {
        _ if instrument["unconfirmed"] == true => String::from("unconfirmed"),
        Some("silent") => String::from("silent since"),
        Some("wrong_language") => String::from("wrong language"),
        Some("port_lost") => String::from("port lost"),
        other => other.unwrap_or("-").to_owned(),
    }
}

/// Recordings, and ports that nobody uses.
fn beside(s: &Value) -> String {
    let mut out = String::new();
    for (name, what) in [("recording", "recorded to"), ("unread", "what is not understood is recorded to")] {
        let Some(folder) = s[name]["folder"].as_str() else { continue };
        out += &format!("{what} {folder}");
        if let Some(trouble) = s[name]["trouble"].as_str() {
            out += &format!(" · TROUBLE: {trouble}");
        }
        if let Some(lost) = s[name]["lost"].as_u64().filter(|n| *n > 0) {
            out += &format!(" · {lost} reads lost");
        }
        out.push('\n');
    }
    for port in s["offers"].as_array().into_iter().flatten() {
        let holder = port["held_by"].as_str().map(|h| format!(" · in use by {h}")).unwrap_or_default();
        out +=
            &format!("not in use   {} {}{holder}\n", port["port"].as_str().unwrap_or("-"), port["about"].as_str().unwrap_or(""));
    }
    out
}
