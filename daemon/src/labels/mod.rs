//! Sheets of labels and cards to print: codes that a scanner reads, with what
//! they say in words. Pure: texts in, pages of marks out; `svg` and `pdf` draw them.
//!
//! Lengths are millimetres from the upper left corner of the page.

pub mod list;
pub mod pdf;
pub mod svg;
pub mod symbol;

use symbol::{Kind, Symbol};

/// Width of one letter of the type in use, a monospaced one, as part of its size.
pub const LETTER: f64 = 0.6;
/// What a printer can place: a three-hundredth of an inch.
const DOT: f64 = 25.4 / 300.0;
/// Free space inside a label's edge.
const PADDING: f64 = 1.5;
/// Strip at the foot of a page for the bar that shows the scale.
const FOOT: f64 = 12.0;
/// The bar that shows the scale.
const SCALE_BAR: f64 = 100.0;
/// Labels on all pages together.
pub const MOST_LABELS: usize = 2_000;

/// One label: what the scanner reads, and words below it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Label {
    /// The code.
    pub code: String,
    /// What it does or is, for people; may be empty.
    pub words: String,
}

/// How labels are laid out.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Layout {
    /// Width and height of the paper.
    pub paper: (f64, f64),
    /// Width and height of a label.
    pub label: (f64, f64),
    /// Free edge of the paper.
    pub margin: f64,
    /// Space between labels.
    pub gap: f64,
    /// Draw the labels' edges, to cut along.
    pub outline: bool,
    /// What the codes are drawn as.
    pub kind: Kind,
}

/// A page of marks.
#[derive(Clone, Debug, PartialEq)]
pub struct Page {
    /// Width and height of the paper.
    pub paper: (f64, f64),
    /// What is drawn.
    pub marks: Vec<Mark>,
}

/// Something drawn, in black.
#[derive(Clone, Debug, PartialEq)]
pub enum Mark {
    /// A filled rectangle: left, top, width, height.
    Bar(f64, f64, f64, f64),
    /// A rectangle's thin edge: left, top, width, height.
    Edge(f64, f64, f64, f64),
    /// A line of text.
    Text {
        /// Middle of the line.
        x: f64,
        /// Where the letters stand.
        y: f64,
        /// Size of the letters.
        size: f64,
        /// In bold.
        bold: bool,
        /// ASCII.
        text: String,
    },
}

/// Why labels cannot be drawn, with what to try.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum LabelFault {
    /// A label does not fit on the paper.
    #[error("a label of {0} does not fit on this paper with its margins; choose a smaller --size or a smaller --margin")]
    Paper(String),
    /// The code does not fit on a label.
    #[error(
        "\"{code}\" does not fit as {kind} on a label of {size}: its lines would be too thin or too short to be read; {try_this}"
    )]
    Code {
        /// Which code.
        code: String,
        /// What it was to be drawn as.
        kind: &'static str,
        /// Size of the label.
        size: String,
        /// What to try.
        try_this: &'static str,
    },
    /// The code cannot be drawn at all.
    #[error("\"{0}\" cannot be drawn as a code: {1}")]
    Drawn(String, String),
}

/// Lays labels out on as many pages as they need.
///
/// # Errors
/// When a label does not fit on the paper, or a code not on its label.
pub fn pages(labels: &[Label], layout: &Layout) -> Result<Vec<Page>, LabelFault> {
    let (across, down) = grid(layout)?;
    let per_page = across * down;
    let count = labels.len().div_ceil(per_page);
    let mut pages = Vec::with_capacity(count);
    for (no, chunk) in labels.chunks(per_page).enumerate() {
        let mut page = Page { paper: layout.paper, marks: Vec::new() };
        for (i, label) in chunk.iter().enumerate() {
            let left = layout.margin + (i % across) as f64 * (layout.label.0 + layout.gap);
            let top = layout.margin + (i / across) as f64 * (layout.label.1 + layout.gap);
            draw(label, (left, top), layout, &mut page.marks)?;
        }
        foot(layout, no + 1, count, &mut page.marks);
        pages.push(page);
    }
    Ok(pages)
}

/// Labels in a row and rows on a page.
fn grid(layout: &Layout) -> Result<(usize, usize), LabelFault> {
    let fits = |room: f64, one: f64| ((room + layout.gap + 1e-9) / (one + layout.gap)).floor();
    let across = fits(layout.paper.0 - 2.0 * layout.margin, layout.label.0);
    let down = fits(layout.paper.1 - layout.margin - layout.margin.max(FOOT), layout.label.1);
    if !(1.0..1_000.0).contains(&across) || !(1.0..1_000.0).contains(&down) {
        return Err(LabelFault::Paper(size(layout)));
    }
    Ok((across as usize, down as usize))
}

fn size(layout: &Layout) -> String {
    format!("{} × {} mm", layout.label.0, layout.label.1)
}

fn draw(label: &Label, (left, top): (f64, f64), layout: &Layout, marks: &mut Vec<Mark>) -> Result<(), LabelFault> {
    let (width, height) = layout.label;
    if layout.outline {
        marks.push(Mark::Edge(left, top, width, height));
    }
    let room = width - 2.0 * PADDING;
    let middle = left + width / 2.0;
    // From the foot of the label upwards: words, the code in letters, the code itself.
    let mut y = top + height - PADDING;
    let small = (height * 0.07).clamp(1.8, 4.0);
    for line in wrapped(&label.words, (room / (LETTER * small)) as usize).into_iter().rev() {
        marks.push(Mark::Text { x: middle, y: y - 0.2 * small, size: small, bold: false, text: line });
        y -= 1.15 * small;
    }
    let large = (height * 0.18).min(room / (LETTER * label.code.len().max(1) as f64)).min(9.0);
    marks.push(Mark::Text { x: middle, y: y - 0.2 * large, size: large, bold: true, text: label.code.clone() });
    y -= 1.1 * large;
    let symbol = Symbol::of(&label.code, layout.kind).map_err(|why| LabelFault::Drawn(label.code.clone(), why))?;
    let area = (left + PADDING, top + PADDING, room, y - top - PADDING);
    place(&symbol, area, marks).ok_or_else(|| LabelFault::Code {
        code: label.code.clone(),
        kind: layout.kind.word(),
        size: size(layout),
        try_this: match layout.kind {
            Kind::Code128 => "choose a wider --size, or --symbol qr",
            Kind::Qr => "choose a larger --size",
        },
    })
}

/// Draws a code as large as its area and a printer's dots allow; nothing when
/// it would be too fine to be read. Limits are common practice, no source.
fn place(symbol: &Symbol, (left, top, width, height): (f64, f64, f64, f64), marks: &mut Vec<Mark>) -> Option<()> {
    let quiet = symbol.quiet();
    let modules = (symbol.width + 2 * quiet) as f64;
    let square = symbol.kind == Kind::Qr;
    let room = if square { width.min(height) } else { width };
    let (least, most) = if square { (4.0, 12.0) } else { (3.0, 6.0) };
    let dots = (room / modules / DOT).floor().min(most);
    if dots < least || (!square && height < 5.0) {
        return None;
    }
    let module = dots * DOT;
    let x0 = left + (width - modules * module) / 2.0 + quiet as f64 * module;
    let (y0, tall) =
        if square { (top + (height - modules * module) / 2.0 + quiet as f64 * module, module) } else { (top, height.min(20.0)) };
    for run in &symbol.runs {
        let (x, y) = (x0 + run.from as f64 * module, y0 + run.row as f64 * module);
        marks.push(Mark::Bar(x, y, run.len as f64 * module, tall));
    }
    Some(())
}

/// Breaks words into lines of at most so many letters; at most three lines.
fn wrapped(words: &str, letters: usize) -> Vec<String> {
    let mut lines: Vec<String> = Vec::new();
    for word in words.split_ascii_whitespace() {
        match lines.last_mut().filter(|l| l.len() + 1 + word.len() <= letters) {
            Some(line) => {
                line.push(' ');
                line.push_str(word);
            }
            None => lines.push(word.to_owned()),
        }
    }
    lines.truncate(3);
    lines
}

/// A bar of known length: a printer that "fits to page" makes every code smaller.
fn foot(layout: &Layout, page: usize, pages: usize, marks: &mut Vec<Mark>) {
    let (width, height) = layout.paper;
    let left = (width - SCALE_BAR) / 2.0;
    let y = height - 8.0;
    marks.push(Mark::Bar(left, y, SCALE_BAR, 0.3));
    for x in [left, left + SCALE_BAR - 0.3] {
        marks.push(Mark::Bar(x, y - 1.5, 0.3, 3.3));
    }
    let text = format!("This line is 100 mm long; if not, print again at 100 %. Page {page} of {pages}");
    marks.push(Mark::Text { x: width / 2.0, y: y + 4.0, size: 2.2, bold: false, text });
}

#[cfg(test)]
mod tests;
