//! Writes every page of the bench screen, in every state, as files to look at:
//! `cargo run -p tarecup --example screen_pages -- FOLDER`.

use std::path::Path;
use tarecup::screen::pages;
use tarecup::screen::words::ENGLISH;

#[path = "../src/screen/view"]
mod view {
    pub use tarecup::screen::view::*;
    #[path = "sample.rs"]
    pub mod sample;
}
use view::{Due, sample};

fn main() -> std::io::Result<()> {
    let folder = std::env::args().nth(1).unwrap_or_else(|| String::from("target/screen"));
    let folder = Path::new(&folder);
    std::fs::create_dir_all(folder.join("assets"))?;
    for (name, text) in [("style.css", pages::STYLE), ("script.js", pages::SCRIPT), ("icon.svg", pages::ICON)] {
        std::fs::write(folder.join("assets").join(name), text)?;
    }
    let w = &ENGLISH;
    let mut open = sample::shelf();
    open.rows.retain(|r| r.due == Due::NotYet);
    open.off_since = Some(sample::at("09:15:00"));
    let mut complete = sample::specimen();
    complete.state = String::from("complete");
    complete.checks.clear();
    let all = [
        ("bench", pages::bench(&sample::bench(), w)),
        ("bench-idle", pages::bench(&sample::bench_idle(), w)),
        ("bench-cup", pages::bench(&sample::bench_cup(), w)),
        ("bench-trouble", pages::bench(&sample::bench_trouble(), w)),
        ("shelf", pages::shelf(&sample::shelf(), w)),
        ("shelf-off", pages::shelf(&open, w)),
        ("loose", pages::loose(&sample::loose(), w)),
        ("correct", pages::correct(&sample::correction(), w)),
        ("specimen", pages::specimen(&sample::specimen(), w)),
        ("specimen-complete", pages::specimen(&complete, w)),
        ("laboratory", pages::laboratory(&sample::laboratory(), w)),
        ("import", pages::import(&sample::import(), w)),
        ("sign-in", pages::sign_in(&sample::sign_in(), w)),
        ("problem", pages::problem(&sample::problem(), w)),
    ];
    for (name, page) in all {
        // Files lie beside their assets, so that a browser finds both without a server.
        let text = page.into_string().replace("\"/assets/", "\"assets/");
        std::fs::write(folder.join(format!("{name}.html")), &text)?;
        println!("{name}.html {} bytes", text.len());
    }
    Ok(())
}
