//! `tarecup-simulators`: simulated instruments on pseudo-terminals, for whoever builds or tries something that listens.

#![forbid(unsafe_code)]

use anyhow::{Context, bail};
use clap::{Args, Parser, Subcommand};
use nix::sys::signal::{SigSet, Signal};
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use tarecup_simulators::balance::{Balance, Noise, Settings};
use tarecup_simulators::counter::{CupDialect, CupRun};
use tarecup_simulators::dialect::BalanceDialect;
use tarecup_simulators::play::{PlayedBench, Scene, Work};
use tarecup_simulators::rng::Rng;
use tarecup_simulators::trouble::{KINDS, Trouble};

/// Simulated balances, cup counters and code scanners on pseudo-terminals.
#[derive(Parser)]
#[command(version, after_help = "Exit codes: 0 ended as asked, 1 an instrument failed, 2 the command was not understood.")]
struct Cli {
    #[command(subcommand)]
    verb: Verb,
}

#[derive(Subcommand)]
enum Verb {
    /// Play endless work at benches, in real time, until interrupted
    #[command(after_help = "Example: tarecup-simulators play --dir /tmp/bench --trouble split,noise\n\
        Then open /tmp/bench/pan-1, cup-1 and scan-1 as serial ports.")]
    Play(PlayArgs),
    /// List the dialects with an example of each
    Dialects,
}

#[derive(Args)]
struct PlayArgs {
    /// Folder for the links; made when it is missing
    #[arg(long)]
    dir: PathBuf,
    /// Number of benches, each with a balance, a cup counter and a scanner
    #[arg(long, default_value_t = 1, value_parser = clap::value_parser!(u8).range(1..=16))]
    benches: u8,
    /// The same seed plays the same work
    #[arg(long, default_value_t = 1)]
    seed: u64,
    /// How the balances speak (see `dialects`)
    #[arg(long, default_value = "signed-steady", value_parser = balance_dialect)]
    dialect: BalanceDialect,
    /// How the cup counters speak (see `dialects`)
    #[arg(long, default_value = "running-total", value_parser = cup_dialect)]
    cup: CupDialect,
    /// Decimals of a gram on the balances
    #[arg(long, default_value_t = 2, value_parser = clap::value_parser!(u8).range(1..=4))]
    decimals: u8,
    /// Drops per second
    #[arg(long, default_value_t = 2.0)]
    rate: f64,
    /// Seconds between pieces of work
    #[arg(long, default_value_t = 5, value_parser = clap::value_parser!(u64).range(0..=3600))]
    pause: u64,
    /// Simulated seconds per second
    #[arg(long, default_value_t = 1.0)]
    speed: f64,
    /// Balances without any noise
    #[arg(long)]
    exact: bool,
    /// Trouble on the cables, separated by commas: noise, split, merge, half, silence, unplug
    #[arg(long, value_delimiter = ',', value_parser = trouble_kind)]
    trouble: Vec<String>,
    /// How likely each piece of bytes meets each trouble, 0 to 1
    #[arg(long, default_value_t = 0.02)]
    trouble_share: f64,
    /// End after this many pieces of work at each bench
    #[arg(long)]
    jobs: Option<u64>,
    /// Say nothing about the work
    #[arg(long)]
    quiet: bool,
}

fn balance_dialect(text: &str) -> Result<BalanceDialect, String> {
    let known = || BalanceDialect::ALL.map(BalanceDialect::name).join(", ");
    BalanceDialect::named(text).ok_or_else(|| format!("no balance speaks so; choose one of: {}", known()))
}

fn cup_dialect(text: &str) -> Result<CupDialect, String> {
    let known = || CupDialect::ALL.map(CupDialect::name).join(", ");
    CupDialect::named(text).ok_or_else(|| format!("no cup counter speaks so; choose one of: {}", known()))
}

fn trouble_kind(text: &str) -> Result<String, String> {
    if KINDS.contains(&text) { Ok(text.to_string()) } else { Err(format!("no such trouble; choose from: {}", KINDS.join(", "))) }
}

fn main() -> anyhow::Result<()> {
    match Cli::parse().verb {
        Verb::Play(args) => play(&args),
        Verb::Dialects => {
            dialects();
            Ok(())
        }
    }
}

fn dialects() {
    println!("balances:");
    for dialect in BalanceDialect::ALL {
        println!("  {:<16}{}", dialect.name(), example(dialect, 4));
    }
    println!("cup counters:");
    for dialect in CupDialect::ALL {
        println!("  {:<16}{}", dialect.name(), cup_example(dialect));
    }
    println!("scanners:\n  {:<16}{}", "plain-code", tarecup_simulators::scanner_bytes("C11").escape_ascii());
}

/// What a balance says of 23.4571 g (or what of it fits its decimals).
fn example(dialect: BalanceDialect, decimals: u8) -> String {
    let settings = Settings::new(dialect, decimals);
    let step = settings.step_ug();
    let mut balance = Balance::new(settings, Noise::NONE, 0);
    let placed = balance.placement(23_457_100 / step * step);
    // On a key there is one line; otherwise the middle of the stream is at rest on the mass.
    placed.get(placed.len() / 2).map(|(_, line)| line.escape_ascii().to_string()).unwrap_or_default()
}

fn cup_example(dialect: CupDialect) -> String {
    let run = CupRun::clean(2, 2.0).bytes(dialect, &mut Rng::new(0)).unwrap_or_default();
    run.iter().map(|(_, bytes)| bytes.escape_ascii().to_string()).collect::<Vec<_>>().join("  ")
}

fn scene(args: &PlayArgs) -> anyhow::Result<Scene> {
    CupRun::clean(1, args.rate).check().context("--rate")?;
    if !(0.01..=1000.0).contains(&args.speed) {
        bail!("--speed {} is out of range; give 0.01 to 1000", args.speed);
    }
    if !(0.0..=1.0).contains(&args.trouble_share) {
        bail!("--trouble-share {} is not a share; give 0 to 1, such as 0.02", args.trouble_share);
    }
    let mut trouble = Trouble::default();
    for kind in &args.trouble {
        trouble.set(kind, args.trouble_share);
    }
    Ok(Scene {
        balance: Settings::new(args.dialect, args.decimals),
        noise: if args.exact { Noise::NONE } else { Noise::BENCH },
        cup: args.cup,
        rate_per_s: args.rate,
        pause_us: args.pause * 1_000_000,
        speed: args.speed,
        trouble,
    })
}

fn play(args: &PlayArgs) -> anyhow::Result<()> {
    let scene = scene(args)?;
    // Before any thread is made, so that all of them leave the signals to the one that waits for them.
    let stop = stop_on_signal()?;
    std::fs::create_dir_all(&args.dir)
        .with_context(|| format!("cannot make {}; choose a folder that you may write to", args.dir.display()))?;
    let mut benches = Vec::new();
    for no in 1..=usize::from(args.benches) {
        let bench = PlayedBench::open(&args.dir, no, scene, args.seed.wrapping_add(no as u64))?;
        let [scanner, balance, cup] = bench.links().map(|l| l.display().to_string());
        println!("{balance}  {}, says {}", args.dialect.name(), example(args.dialect, args.decimals));
        println!("{cup}  {}, says {}", args.cup.name(), cup_example(args.cup));
        println!("{scanner}  plain-code, says {}", tarecup_simulators::scanner_bytes("C11").escape_ascii());
        benches.push(bench);
    }
    if args.jobs.is_none() {
        println!("playing; interrupt (Ctrl-C) to end");
    }
    std::thread::scope(|scope| {
        let threads: Vec<_> = benches
            .into_iter()
            .zip(1..)
            .map(|(bench, no)| {
                let stop = &stop;
                scope.spawn(move || play_bench(args, bench, no, stop))
            })
            .collect();
        threads.into_iter().try_for_each(|t| t.join().unwrap_or_else(|_| bail!("a bench ended unexpectedly; please report this")))
    })
}

fn play_bench(args: &PlayArgs, mut bench: PlayedBench, no: u64, stop: &AtomicBool) -> anyhow::Result<()> {
    let step = Settings::new(args.dialect, args.decimals).step_ug();
    let work = Work::new(args.seed.wrapping_mul(1_000_003).wrapping_add(no), step, args.rate);
    let most = args.jobs.map_or(usize::MAX, |n| usize::try_from(n).unwrap_or(usize::MAX));
    for job in work.take(most) {
        if stop.load(Ordering::Relaxed) {
            break;
        }
        if !args.quiet {
            println!("bench {no}: {job}");
        }
        bench.play(&job, stop).with_context(|| format!("bench {no}"))?;
    }
    Ok(())
}

/// A flag that the usual signals raise: the links must be taken away before the program ends.
fn stop_on_signal() -> anyhow::Result<Arc<AtomicBool>> {
    let mut signals = SigSet::empty();
    for signal in [Signal::SIGINT, Signal::SIGTERM, Signal::SIGHUP] {
        signals.add(signal);
    }
    signals.thread_block().context("cannot wait for signals")?;
    let stop = Arc::new(AtomicBool::new(false));
    let raised = Arc::clone(&stop);
    std::thread::spawn(move || {
        // A second signal ends the program at once.
        if signals.wait().is_ok() {
            raised.store(true, Ordering::Relaxed);
            if signals.wait().is_ok() {
                std::process::exit(130);
            }
        }
    });
    Ok(stop)
}
