//! `tarecup labels`: sheets of container labels, specimen labels and cards, to print.

use super::{FAILED, StateArg, WRONG_INPUT, files};
use crate::labels::symbol::Kind;
use crate::labels::{Label, Layout, MOST_LABELS, Page, list, pages, pdf, svg};
use crate::ledger::{Reader, Which};
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use tarecup_core::lab::CARDS;

/// Arguments of `labels`.
#[derive(clap::Args)]
pub struct LabelsArgs {
    /// File to write: NAME.pdf, or NAME.svg (one file a page).
    #[arg(long, value_name = "FILE")]
    out: PathBuf,
    /// Labels of containers: names and ranges, such as C1..C40,C99.
    #[arg(long, value_name = "LIST")]
    containers: Option<String>,
    /// Labels of all containers of the ledger.
    #[arg(long)]
    registered: bool,
    /// Labels of specimens.
    #[arg(long, value_name = "LIST")]
    specimens: Option<String>,
    /// The cards that stand for asks.
    #[arg(long)]
    cards: bool,
    /// Cards to sign in with, by initials.
    #[arg(long, value_name = "LIST")]
    operators: Option<String>,
    /// What codes are drawn as.
    #[arg(long, value_enum, default_value_t)]
    symbol: Kind,
    /// The paper.
    #[arg(long, value_enum, default_value_t)]
    paper: Paper,
    /// Width and height of a label, mm.
    #[arg(long, value_name = "WxH", default_value = "48x25", value_parser = size)]
    size: (f64, f64),
    /// Width and height of a card, mm.
    #[arg(long, value_name = "WxH", default_value = "85.6x54", value_parser = size)]
    card_size: (f64, f64),
    /// Free edge of the paper, mm.
    #[arg(long, value_name = "MM", default_value = "10", value_parser = millimetres)]
    margin: f64,
    /// Space between labels, mm.
    #[arg(long, value_name = "MM", default_value = "0", value_parser = millimetres)]
    gap: f64,
    /// Do not draw the labels' edges (for sheets that are cut already).
    #[arg(long)]
    no_outline: bool,
    #[command(flatten)]
    state: StateArg,
}

/// Papers.
#[derive(Clone, Copy, Default, clap::ValueEnum)]
enum Paper {
    /// 210 × 297 mm.
    #[default]
    A4,
    /// 8½ × 11 inches.
    Letter,
}

/// Reads `48x25`.
fn size(text: &str) -> Result<(f64, f64), String> {
    let parts = text.split_once(['x', 'X', '×']).map(|(w, h)| (w.trim().parse::<f64>(), h.trim().parse::<f64>()));
    match parts {
        Some((Ok(w), Ok(h))) if (5.0..=400.0).contains(&w) && (5.0..=400.0).contains(&h) => Ok((w, h)),
        _ => Err(String::from("write width and height in millimetres, 5 to 400, such as 48x25")),
    }
}

fn millimetres(text: &str) -> Result<f64, String> {
    let mm = text.trim().parse::<f64>().ok().filter(|mm| (0.0..=100.0).contains(mm));
    mm.ok_or_else(|| String::from("write millimetres, 0 to 100"))
}

/// Runs `labels`.
pub fn run(args: &LabelsArgs) -> u8 {
    let drawn = match drawn(args) {
        Ok(drawn) => drawn,
        Err(says) => {
            eprintln!("{says}");
            return WRONG_INPUT;
        }
    };
    match written(&args.out, &drawn) {
        Ok(files) => {
            for file in files {
                say!("{}", file.display());
            }
            0
        }
        Err(says) => {
            eprintln!("{says}");
            FAILED
        }
    }
}

/// All pages: labels first, then cards.
fn drawn(args: &LabelsArgs) -> Result<Vec<Page>, String> {
    if !matches!(extension(&args.out), "pdf" | "svg") {
        return Err(format!("--out {}: its name ends neither with .pdf nor with .svg; write one of them", args.out.display()));
    }
    let (labels, cards) = (labels(args)?, cards(args)?);
    if labels.is_empty() && cards.is_empty() {
        return Err(String::from(
            "there is nothing to print: name --containers C1..C40, --registered, --specimens, --cards or --operators",
        ));
    }
    let paper = match args.paper {
        Paper::A4 => (210.0, 297.0),
        Paper::Letter => (215.9, 279.4),
    };
    let layout =
        Layout { paper, label: args.size, margin: args.margin, gap: args.gap, outline: !args.no_outline, kind: args.symbol };
    let mut all = pages(&labels, &layout).map_err(|e| e.to_string())?;
    all.extend(pages(&cards, &Layout { label: args.card_size, ..layout }).map_err(|e| e.to_string())?);
    Ok(all)
}

fn labels(args: &LabelsArgs) -> Result<Vec<Label>, String> {
    let read = |key: &str, list: &Option<String>| match list {
        Some(text) => list::names(text).map_err(|e| format!("--{key}: {e}")),
        None => Ok(Vec::new()),
    };
    let mut containers = read("containers", &args.containers)?;
    if args.registered {
        let known: BTreeSet<String> = containers.iter().cloned().collect();
        containers.extend(registered(args)?.into_iter().filter(|c| !known.contains(c)));
    }
    let specimens = read("specimens", &args.specimens)?;
    if let Some(both) = specimens.iter().find(|s| containers.contains(s)) {
        return Err(format!(
            "\"{both}\" would be a container and a specimen: one code means one thing; give one of them another name"
        ));
    }
    if containers.len() + specimens.len() > MOST_LABELS {
        return Err(format!("more than {MOST_LABELS} labels at once; print them in parts"));
    }
    let label = |code, words: &str| Label { code, words: words.to_owned() };
    let containers = containers.into_iter().map(|c| label(c, ""));
    Ok(containers.chain(specimens.into_iter().map(|s| label(s, "specimen"))).collect())
}

/// The containers of the ledger.
fn registered(args: &LabelsArgs) -> Result<Vec<String>, String> {
    let state = files::state_dir(args.state.state.as_deref(), None)?;
    let says = |e: crate::ledger::LedgerError| format!("--registered: {e}");
    let reader = Reader::open(&state).map_err(says)?;
    let mut all: Vec<String> = Vec::new();
    loop {
        let after = all.last().cloned().unwrap_or_default();
        let page = reader.documents("container", Which::All, &after, 500).map_err(says)?;
        if page.is_empty() || all.len() > MOST_LABELS {
            return Ok(all);
        }
        all.extend(page.into_iter().map(|d| d.id));
    }
}

fn cards(args: &LabelsArgs) -> Result<Vec<Label>, String> {
    let mut cards = Vec::new();
    let label = |code: String, words: String| Label { code, words };
    if args.cards {
        // The one that signs in is not whole without initials.
        let whole = CARDS.iter().filter(|(card, _)| !card.ends_with('-'));
        cards.extend(whole.map(|(card, words)| label((*card).to_owned(), (*words).to_owned())));
    }
    if let Some(text) = &args.operators {
        let names = list::names(text).map_err(|e| format!("--operators: {e}"))?;
        cards.extend(names.into_iter().map(|name| label(format!("+by-{name}"), format!("{name} signs in"))));
    }
    Ok(cards)
}

fn extension(path: &Path) -> &str {
    path.extension().and_then(|e| e.to_str()).unwrap_or_default()
}

/// Writes the files; gives their names.
fn written(out: &Path, pages: &[Page]) -> Result<Vec<PathBuf>, String> {
    let write = |path: PathBuf, bytes: &[u8]| match std::fs::write(&path, bytes) {
        Ok(()) => Ok(path),
        Err(e) => Err(format!("{} cannot be written ({e}); name another file with --out", path.display())),
    };
    if extension(out) == "pdf" {
        return write(out.to_path_buf(), &pdf::document(pages)).map(|path| vec![path]);
    }
    let stem = out.file_stem().unwrap_or_default().to_string_lossy().into_owned();
    let name = |no: usize| if pages.len() == 1 { out.to_path_buf() } else { out.with_file_name(format!("{stem}-{no}.svg")) };
    pages.iter().enumerate().map(|(i, page)| write(name(i + 1), svg::page(page).as_bytes())).collect()
}
