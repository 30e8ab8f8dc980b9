//! Pages as SVG, one file each.

use super::{Mark, Page};
use std::fmt::Write;

/// Draws a page.
pub fn page(page: &Page) -> String {
    let (width, height) = page.paper;
    let mut out = format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" width=\"{width}mm\" height=\"{height}mm\" viewBox=\"0 0 {width} {height}\" \
         shape-rendering=\"crispEdges\">\n<rect width=\"{width}\" height=\"{height}\" fill=\"#fff\"/>\n"
    );
    for mark in &page.marks {
        // Writing into a text does not fail.
        let _ = match mark {
            Mark::Bar(x, y, w, h) => writeln!(out, "<rect x=\"{x:.4}\" y=\"{y:.4}\" width=\"{w:.4}\" height=\"{h:.4}\"/>"),
            Mark::Edge(x, y, w, h) => writeln!(
                out,
                "<rect x=\"{x:.4}\" y=\"{y:.4}\" width=\"{w:.4}\" height=\"{h:.4}\" fill=\"none\" stroke=\"#888\" stroke-width=\"0.15\" shape-rendering=\"auto\"/>"
            ),
            Mark::Text { x, y, size, bold, text } => {
                let weight = if *bold { " font-weight=\"bold\"" } else { "" };
                writeln!(
                    out,
                    "<text x=\"{x:.4}\" y=\"{y:.4}\" font-size=\"{size:.4}\" text-anchor=\"middle\" \
                     font-family=\"Courier, 'Courier New', monospace\"{weight}>{}</text>",
                    escaped(text)
                )
            }
        };
    }
    out.push_str("</svg>\n");
    out
}

fn escaped(text: &str) -> String {
    text.replace('&', "&amp;").replace('<', "&lt;").replace('>', "&gt;")
}
