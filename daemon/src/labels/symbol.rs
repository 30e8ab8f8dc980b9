//! A text as the dark modules of a printed code.

use barcoders::sym::code128::Code128;
use qrcode::{Color, EcLevel, QrCode};

/// Kinds of printed code.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, clap::ValueEnum)]
pub enum Kind {
    /// Lines, ISO/IEC 15417; any scanner reads them.
    #[default]
    Code128,
    /// A square, ISO/IEC 18004; shorter for long names, needs a camera.
    Qr,
}

impl Kind {
    /// Its name.
    pub fn word(self) -> &'static str {
        match self {
            Self::Code128 => "Code 128",
            Self::Qr => "QR code",
        }
    }
}

/// A code in modules.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Symbol {
    /// Its kind.
    pub kind: Kind,
    /// Modules across, without the free space around it.
    pub width: usize,
    /// The dark ones.
    pub runs: Vec<Run>,
}

/// Dark modules side by side.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Run {
    /// Row, from the top; lines have one row.
    pub row: usize,
    /// First module.
    pub from: usize,
    /// How many.
    pub len: usize,
}

impl Symbol {
    /// Encodes printable ASCII.
    ///
    /// # Errors
    /// What cannot be encoded.
    pub fn of(text: &str, kind: Kind) -> Result<Self, String> {
        if text.is_empty() || !text.bytes().all(|b| (0x20..0x7F).contains(&b)) {
            return Err(String::from("only letters, digits and signs of ASCII can be"));
        }
        let (width, dark) = match kind {
            // Set B alone: it has all of printable ASCII.
            Kind::Code128 => {
                let code = Code128::new(format!("\u{181}{text}")).map_err(|e| e.to_string())?;
                let modules: Vec<bool> = code.encode().into_iter().map(|m| m == 1).collect();
                (modules.len(), modules)
            }
            Kind::Qr => {
                let code = QrCode::with_error_correction_level(text, EcLevel::M).map_err(|e| e.to_string())?;
                let dark: Vec<bool> = code.to_colors().into_iter().map(|c| c == Color::Dark).collect();
                (code.width(), dark)
            }
        };
        let runs = dark.chunks(width.max(1)).enumerate().flat_map(|(row, modules)| runs(row, modules)).collect();
        Ok(Self { kind, width, runs })
    }

    /// Free modules that each side needs.
    pub fn quiet(&self) -> usize {
        match self.kind {
            Kind::Code128 => 10,
            Kind::Qr => 4,
        }
    }
}

fn runs(row: usize, modules: &[bool]) -> Vec<Run> {
    let mut runs: Vec<Run> = Vec::new();
    for (i, _) in modules.iter().enumerate().filter(|(_, dark)| **dark) {
        match runs.last_mut().filter(|r| r.from + r.len == i) {
            Some(run) => run.len += 1,
            None => runs.push(Run { row, from: i, len: 1 }),
        }
    }
    runs
}
