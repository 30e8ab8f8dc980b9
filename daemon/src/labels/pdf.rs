//! Pages as one PDF, with the typefaces that every reader has.

use super::{LETTER, Mark, Page};
use pdf_writer::{Content, Name, Pdf, Rect, Ref, Str};

/// Points in a millimetre.
const POINT: f64 = 72.0 / 25.4;
const PLAIN: Name<'static> = Name(b"P");
const BOLD: Name<'static> = Name(b"B");

/// Draws all pages into one document.
pub fn document(pages: &[Page]) -> Vec<u8> {
    let mut pdf = Pdf::new();
    let [catalog, tree, plain, bold] = [1, 2, 3, 4].map(Ref::new);
    pdf.catalog(catalog).pages(tree);
    let page_ref = |i: usize| Ref::new(5 + 2 * i as i32);
    let content_ref = |i: usize| Ref::new(6 + 2 * i as i32);
    pdf.pages(tree).kids((0..pages.len()).map(page_ref)).count(pages.len() as i32);
    for (font, name) in [(plain, &b"Courier"[..]), (bold, &b"Courier-Bold"[..])] {
        pdf.type1_font(font).base_font(Name(name));
    }
    for (i, page) in pages.iter().enumerate() {
        let (width, height) = page.paper;
        let mut written = pdf.page(page_ref(i));
        written.media_box(Rect::new(0.0, 0.0, (width * POINT) as f32, (height * POINT) as f32));
        written.parent(tree).contents(content_ref(i));
        written.resources().fonts().pair(PLAIN, plain).pair(BOLD, bold);
        drop(written);
        pdf.stream(content_ref(i), content(page).as_slice());
    }
    pdf.finish()
}

fn content(page: &Page) -> Vec<u8> {
    let mut out = Content::new();
    // PDF counts from the lower left corner.
    let at = |x: f64, y: f64| ((x * POINT) as f32, ((page.paper.1 - y) * POINT) as f32);
    let long = |mm: f64| (mm * POINT) as f32;
    for mark in &page.marks {
        match mark {
            Mark::Bar(x, y, w, h) => {
                let (x, y) = at(*x, y + h);
                out.rect(x, y, long(*w), long(*h)).fill_nonzero();
            }
            Mark::Edge(x, y, w, h) => {
                let (x, y) = at(*x, y + h);
                out.set_line_width(long(0.1)).set_stroke_gray(0.5).rect(x, y, long(*w), long(*h)).stroke();
            }
            Mark::Text { x, y, size, bold, text } => {
                let (x, y) = at(x - text.len() as f64 * LETTER * size / 2.0, *y);
                out.begin_text().set_font(if *bold { BOLD } else { PLAIN }, long(*size));
                out.next_line(x, y).show(Str(text.as_bytes())).end_text();
            }
        }
    }
    out.finish().to_vec()
}
