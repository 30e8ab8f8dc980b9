//! The command line: one file per verb.
//!
//! Exit codes: 0 done · 1 something failed while at work · 2 the input
//! (arguments, config, scenario) is wrong, nothing was started · 3 the demo
//! ended and a specimen is not complete · 4 nothing is being recorded · 5 no
//! service answers.

/// Prints a line for people or programs. A reader that went away is no trouble of ours.
macro_rules! say {
    ($($arg:tt)*) => {{
        use std::io::Write as _;
        let _ = writeln!(std::io::stdout().lock(), $($arg)*);
    }};
}

mod ask;
mod check;
mod demo;
mod files;
mod learn;
mod ports;
mod run;
mod status;
mod tell;
mod work;

use clap::{Parser, Subcommand, ValueEnum};
use std::path::PathBuf;
use std::process::ExitCode;

/// Something failed while at work.
pub const FAILED: u8 = 1;
/// The input is wrong; nothing was started.
pub const WRONG_INPUT: u8 = 2;
/// A specimen is not complete.
pub const NOT_COMPLETE: u8 = 3;
/// Nothing is being recorded.
pub const NOT_RECORDING: u8 = 4;
/// No service answers.
pub const NOBODY: u8 = 5;

#[derive(Parser)]
#[command(
    name = "tarecup",
    version,
    about = "Ties balances and a liquid-limit cup counter to moisture containers, keeps the record, publishes soil limits.",
    after_help = "Exit codes: 0 done, 1 failed, 2 wrong input, 3 demo ended with an incomplete specimen, 4 not recording, 5 no service answers.\nThe results are index values: design and classification decisions belong to a licensed practitioner under local codes."
)]
struct Cli {
    #[command(subcommand)]
    verb: Verb,
    /// How the log is written.
    #[arg(long, global = true, value_enum)]
    log: Option<LogForm>,
}

/// Form of the log.
#[derive(Clone, Copy, PartialEq, Eq, ValueEnum)]
enum LogForm {
    /// For people.
    Text,
    /// One JSON object a line.
    Json,
}

#[derive(Subcommand)]
enum Verb {
    /// Play a day with simulated instruments: no files and no hardware needed.
    Demo(demo::DemoArgs),
    /// Run the service.
    Run(run::RunArgs),
    /// Check a config file; nothing is started.
    Check(check::CheckArgs),
    /// Compute limits from scenario or sheet files, without instruments.
    Work(work::WorkArgs),
    /// Ask the running service for something.
    Ask(ask::AskArgs),
    /// How the running service is doing.
    Status(status::StatusArgs),
    /// List serial ports by their stable paths.
    Ports(ports::PortsArgs),
    /// Work out a profile by listening to an instrument; nothing is sent to it.
    Learn(learn::LearnArgs),
}

/// Where things lie.
#[derive(clap::Args, Clone)]
struct StateArg {
    /// State directory (ledger and local socket). Default: the service manager's, else the user's data folder.
    #[arg(long, value_name = "DIR")]
    state: Option<PathBuf>,
}

/// Runs the program.
pub fn main() -> ExitCode {
    let cli = match Cli::try_parse() {
        Ok(cli) => cli,
        Err(e) => {
            let _ = e.print();
            return ExitCode::from(if e.use_stderr() { WRONG_INPUT } else { 0 });
        }
    };
    prepare_process();
    ExitCode::from(match cli.verb {
        Verb::Demo(args) => demo::run(args, cli.log),
        Verb::Run(args) => run::run(args, cli.log),
        Verb::Check(args) => check::run(&args),
        Verb::Work(args) => work::run(&args),
        Verb::Ask(args) => ask::run(&args),
        Verb::Status(args) => status::run(&args),
        Verb::Ports(args) => ports::run(&args),
        Verb::Learn(args) => learn::run(&args),
    })
}

/// What is written is its owner's alone; as many files and sockets may be open as the system allows.
fn prepare_process() {
    use rustix::process::{Resource, getrlimit, setrlimit};
    rustix::process::umask(rustix::fs::Mode::from_raw_mode(0o077));
    let mut limit = getrlimit(Resource::Nofile);
    limit.current = limit.maximum;
    let _ = setrlimit(Resource::Nofile, limit);
}

/// Starts the log on standard error. A log that cannot be written stops nothing.
fn start_log(form: Option<LogForm>, default_level: &str) {
    use std::io::IsTerminal;
    use tracing_subscriber::EnvFilter;
    let filter = EnvFilter::try_from_env("TARECUP_LOG")
        .unwrap_or_else(|_| EnvFilter::new(format!("{default_level},mqtt5=off,rumqttc=warn")));
    let log = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(std::io::stderr)
        .with_target(false)
        .log_internal_errors(false);
    // A second start in one process (tests) keeps the first.
    let _ = match form {
        Some(LogForm::Json) => log.json().try_init(),
        _ => log.with_ansi(std::io::stderr().is_terminal()).try_init(),
    };
}
