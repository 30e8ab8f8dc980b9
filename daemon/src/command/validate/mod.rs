//! `tarecup validate`: published examples and reference computations, worked
//! by the program as it is installed here, with a dated report.
//!
//! ISO/IEC 17025:2017, 7.11.2, asks a laboratory to validate the computing it
//! relies on, also after a change. The report names the program by its version
//! and by the SHA-256 of the file that ran.

mod cases;

use super::{FAILED, WRONG_INPUT};
use crate::ledger::Digest;
use cases::Compared;
use serde_json::{Value, json};
use std::path::PathBuf;
use tarecup_core::stamp::rfc3339;
use tarecup_drivers::heard::Clock;

const SHEETS: &str = include_str!("sheets.toml");
const CASES: &str = include_str!("cases.toml");

/// Arguments of `validate`.
#[derive(clap::Args)]
pub struct ValidateArgs {
    /// The report as JSON on standard output.
    #[arg(long)]
    json: bool,
    /// Write the report, as JSON, to this file; an existing one is not overwritten.
    #[arg(long, value_name = "FILE")]
    out: Option<PathBuf>,
}

/// Signs the digest of a report; what comes back stands in it as text.
pub type Sign<'s> = &'s dyn Fn(&[u8]) -> String;

/// Runs `validate`. Done when every value agrees, failed when one does not.
pub fn run(args: &ValidateArgs) -> u8 {
    let compared = match worked(CASES) {
        Ok(compared) => compared,
        Err(says) => {
            eprintln!("{says}; the program is damaged: install it again");
            return FAILED;
        }
    };
    let now = crate::clock::MachineClock::new().now().utc_us;
    let report = report(&compared, &rfc3339(now), &executable(), None);
    if let Some(path) = &args.out
        && let Err(e) = write_new(path, &report)
    {
        eprintln!("{}: {e}; name a new file in a folder that may be written", path.display());
        return WRONG_INPUT;
    }
    if args.json {
        say!("{report}");
    } else {
        say!("{}", told(&compared, &report).trim_end());
    }
    if compared.iter().all(|c| c.ok) { 0 } else { FAILED }
}

fn worked(cases: &str) -> Result<Vec<Compared>, String> {
    let methods = tarecup_config::methods::shipped().map_err(|f| f.to_string())?;
    cases::work(SHEETS, cases, &methods)
}

fn write_new(path: &PathBuf, report: &Value) -> std::io::Result<()> {
    use std::io::Write as _;
    let mut file = std::fs::OpenOptions::new().write(true).create_new(true).open(path)?;
    writeln!(file, "{report:#}")?;
    file.sync_all()
}

/// SHA-256 of the file that runs; null where it cannot be read.
fn executable() -> Value {
    let bytes = std::env::current_exe().and_then(std::fs::read);
    bytes.map_or(Value::Null, |b| json!(Digest::of(&b).to_string()))
}

/// The report. Its digest is that of the same JSON, without spaces, without `digest` and `signature`.
fn report(compared: &[Compared], at: &str, executable_sha256: &Value, sign: Option<Sign>) -> Value {
    let failed = compared.iter().filter(|c| !c.ok).count();
    let mut report = json!({
        "v": 1,
        "at": at,
        "program": env!("CARGO_PKG_VERSION"),
        "executable_sha256": executable_sha256,
        "machine": format!("{} {}", std::env::consts::OS, std::env::consts::ARCH),
        "cases_sha256": Digest::of(format!("{SHEETS}{CASES}").as_bytes()).to_string(),
        "compared": compared.len(),
        "failed": failed,
        "ok": failed == 0,
        "values": compared,
    });
    let digest = Digest::of(report.to_string().as_bytes());
    report["digest"] = json!(digest.to_string());
    report["signature"] = json!(sign.map(|sign| sign(&digest.0)));
    report
}

fn told(compared: &[Compared], report: &Value) -> String {
    let text = |v: &Value| v.as_str().unwrap_or("-").to_string();
    let shown = |v: &cases::Value| match v {
        cases::Value::Number(n) => format!("{n}"),
        cases::Value::Word(w) => w.clone(),
    };
    let mut out = format!(
        "validation of tarecup {} at {}\nexecutable sha-256 {}\n\n",
        text(&report["program"]),
        text(&report["at"]),
        text(&report["executable_sha256"])
    );
    let mut source = "";
    for c in compared {
        if c.source != source {
            source = &c.source;
            out += &format!("{source}\n");
        }
        let mark = if c.ok { "ok    " } else { "WRONG " };
        let got = c.got.as_ref().map_or_else(|| String::from("nothing"), shown);
        out += &format!("  {mark} {} {}: {got}, expected {} within {:e}\n", c.case, c.what, shown(&c.expected), c.within);
    }
    let wrong = compared.iter().filter(|c| !c.ok).count();
    out += &format!("\n{} values, {wrong} wrong; digest of the report {}\n", compared.len(), text(&report["digest"]));
    if wrong > 0 {
        out += "Do not report results of this program: keep this report, and ask whoever installed it.\n";
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn everything_agrees_and_a_wrong_answer_is_noticed() {
        let right = worked(CASES).unwrap();
        assert!(right.len() > 60, "{}", right.len());
        let wrong: Vec<_> = right.iter().filter(|c| !c.ok).collect();
        assert!(wrong.is_empty(), "{wrong:#?}");
        for (from, to) in [
            ("[37.25, 0.005]", "[37.26, 0.005]"),
            ("group = \"CL\"", "group = \"CH\""),
            ("u_at = [0.0041, 5e-5]", "u_at = [0.0073, 5e-5]"),
            ("[2.07438016528926, 1e-13]", "[2.07438016528927, 1e-15]"),
            ("activity = [0.4, 1e-9]", "activty = [0.4, 1e-9]"),
        ] {
            let altered = worked(&CASES.replace(from, to)).unwrap();
            assert_eq!(altered.iter().filter(|c| !c.ok).count(), 1, "{from}");
        }
        assert!(worked("").is_err() && worked(&CASES.replace("[sheet.E1]", "[sheet.E9]")).unwrap_err().contains("E9"));
    }

    #[test]
    fn a_digest_covers_the_report() {
        let compared = worked(CASES).unwrap();
        let sign = |digest: &[u8]| format!("{} bytes", digest.len());
        let mut report = report(&compared, "2026-03-02T08:00:00Z", &Value::Null, Some(&sign));
        assert_eq!(report["signature"], "32 bytes");
        let digest = report["digest"].as_str().unwrap().to_string();
        report.as_object_mut().unwrap().retain(|k, _| k != "digest" && k != "signature");
        assert_eq!(Digest::of(report.to_string().as_bytes()).to_string(), digest);
    }
}
