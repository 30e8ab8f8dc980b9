//! The lines that balances of different make-up send, written from the description of each dialect.

use crate::balance::{Shown, Value};

/// How a balance speaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum BalanceDialect {
    /// A stream: sign, ten columns of value, blank, `g`, two blanks, `S` at rest or `U`.
    SignedSteady,
    /// A stream: ten columns of value, blank, `g`; no word about rest.
    PlainStream,
    /// A slip at each press of the print key: gross, tare, net, a blank line.
    SlipGrossNet,
    /// A stream: unit first, sign, eleven columns of value with a decimal comma, `~` while moving.
    CommaStream,
    /// A stream of messages between STX and ETX, with an exclusive or as check digits.
    FramedXor,
    /// One line at each press of the print key: `G` or `N`, blank, ten columns of value, blank, `g`.
    PrintLine,
    /// A sentence in answer to a sentence.
    AskedLong,
}

use BalanceDialect::{AskedLong, CommaStream, FramedXor, PlainStream, PrintLine, SignedSteady, SlipGrossNet};

impl BalanceDialect {
    /// All of them.
    pub const ALL: [BalanceDialect; 7] = [SignedSteady, PlainStream, SlipGrossNet, CommaStream, FramedXor, PrintLine, AskedLong];

    /// The name, as the instrument profile has it.
    pub fn name(self) -> &'static str {
        match self {
            SignedSteady => "signed-steady",
            PlainStream => "plain-stream",
            SlipGrossNet => "slip-gross-net",
            CommaStream => "comma-stream",
            FramedXor => "framed-xor",
            PrintLine => "print-line",
            AskedLong => "asked-long",
        }
    }

    /// Finds a dialect by name.
    pub fn named(name: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|d| d.name() == name)
    }

    /// It speaks only when its print key is pressed; each line (or slip) is a weighing.
    pub fn on_key(self) -> bool {
        matches!(self, SlipGrossNet | PrintLine)
    }

    /// It speaks only when asked.
    pub fn asked(self) -> bool {
        self.question().is_some()
    }

    /// What must be sent to it to hear a line; `None` for one that speaks by itself.
    pub fn question(self) -> Option<&'static [u8]> {
        match self {
            AskedLong => Some(b"WHAT MASS IS ON THE PAN NOW PLEASE\r\n"),
            _ => None,
        }
    }

    /// Takes one whole question out of what has been received; false when there is none yet. What cannot become a
    /// question is thrown away, so that the buffer stays short.
    pub fn take_request(self, received: &mut Vec<u8>) -> bool {
        let Some(question) = self.question() else {
            received.clear();
            return false;
        };
        match received.windows(question.len()).position(|w| w == question) {
            Some(at) => {
                received.drain(..at + question.len());
                true
            }
            None => {
                let keep = received.len().min(question.len().saturating_sub(1));
                received.drain(..received.len() - keep);
                false
            }
        }
    }

    /// The bytes for what the display shows. Empty where the dialect has no word for it.
    pub fn line(self, decimals: u8, shown: &Shown) -> Vec<u8> {
        let text = match self {
            SignedSteady => signed_steady(decimals, shown),
            PlainStream => plain_stream(decimals, shown),
            SlipGrossNet => slip_gross_net(decimals, shown),
            CommaStream => comma_stream(decimals, shown),
            FramedXor => framed_xor(decimals, shown),
            PrintLine => print_line(decimals, shown),
            AskedLong => asked_long(decimals, shown),
        };
        text.into_bytes()
    }
}

/// `+   23.4571 g  S`; the range left: ten dashes and `O`, the sign saying on which side.
fn signed_steady(decimals: u8, shown: &Shown) -> String {
    let steady = if shown.steady { 'S' } else { 'U' };
    match shown.value {
        Value::Mass(ug) => format!("{}{:>10} g  {steady}\r\n", sign(ug), digits(ug, decimals)),
        Value::Overload => "+---------- g  O\r\n".into(),
        Value::Underload => "----------- g  O\r\n".into(),
        Value::NotReady => String::new(),
    }
}

/// `     23.46 g`, the minus sign before the first digit.
fn plain_stream(decimals: u8, shown: &Shown) -> String {
    match shown.value {
        Value::Mass(ug) => format!("{:>10} g\r\n", with_minus(ug, decimals)),
        Value::Overload => format!("{:>10} g\r\n", "OVER"),
        Value::Underload => format!("{:>10} g\r\n", "UNDER"),
        Value::NotReady => String::new(),
    }
}

/// A slip of three lines and a blank one; `NOT AT REST` when the key is pressed too early.
fn slip_gross_net(decimals: u8, shown: &Shown) -> String {
    match shown.value {
        Value::Mass(net) if shown.steady => {
            let line = |word: &str, ug: i64| format!("{word:<5}{:>12} g\r\n", with_minus(ug, decimals));
            let gross = net.saturating_add(shown.tared_ug);
            format!("{}{}{}\r\n", line("GROSS", gross), line("TARE", shown.tared_ug), line("NET", net))
        }
        Value::Overload => format!("{:<5}{:>12}\r\n\r\n", "GROSS", "OVER"),
        _ => "NOT AT REST\r\n\r\n".into(),
    }
}

/// `g  +    23,4571 ~`, a blank in place of `~` at rest.
fn comma_stream(decimals: u8, shown: &Shown) -> String {
    let mark = if shown.steady { ' ' } else { '~' };
    let value = |sign: char, text: &str| format!("{:<2} {sign}{text:>11} {mark}\r\n", "g");
    match shown.value {
        Value::Mass(ug) => value(sign(ug), &digits(ug, decimals).replace('.', ",")),
        Value::Overload => value('+', "^^^^^^^^^^^"),
        Value::Underload => value('-', "___________"),
        Value::NotReady => String::new(),
    }
}

/// STX, `+0023.4571g S`, ETX, two hexadecimal digits.
fn framed_xor(decimals: u8, shown: &Shown) -> String {
    let steady = if shown.steady { 'S' } else { 'U' };
    // The mark stands in its own column after whatever takes the place of sign, value and unit; words have none.
    let body = match shown.value {
        Value::Mass(ug) => format!("{}{:0>9}{:<2}{steady}", sign(ug), digits(ug, decimals), "g"),
        Value::Overload => "OVERLOAD".into(),
        Value::Underload => "UNDERLOAD".into(),
        Value::NotReady => "NOTREADY".into(),
    };
    let check = body.bytes().fold(0, |sum, byte| sum ^ byte);
    format!("\u{2}{body}\u{3}{check:02X}")
}

/// `G      23.46 g`; `WAIT` when the key is pressed too early.
fn print_line(decimals: u8, shown: &Shown) -> String {
    let basis = if shown.net() { 'N' } else { 'G' };
    match shown.value {
        Value::Mass(ug) if shown.steady => format!("{basis} {:>10} g\r\n", with_minus(ug, decimals)),
        Value::Overload => format!("{:>12}\r\n", "OVER"),
        Value::Underload => format!("{:>12}\r\n", "UNDER"),
        _ => format!("{:>12}\r\n", "WAIT"),
    }
}

/// `THE PAN HOLDS +   23.4571 g AT REST`.
fn asked_long(decimals: u8, shown: &Shown) -> String {
    let steady = if shown.steady { "AT REST" } else { "MOVING" };
    match shown.value {
        Value::Mass(ug) => format!("THE PAN HOLDS {}{:>10} g {steady}\r\n", sign(ug), digits(ug, decimals)),
        Value::Overload => "THE PAN HOLDS TOO MUCH\r\n".into(),
        Value::Underload => "THE PAN HOLDS TOO LITTLE\r\n".into(),
        Value::NotReady => "NOT READY\r\n".into(),
    }
}

/// `-` below zero, else `+`.
fn sign(ug: i64) -> char {
    if ug < 0 { '-' } else { '+' }
}

/// The value with a minus sign where it is below zero.
fn with_minus(ug: i64, decimals: u8) -> String {
    format!("{}{}", if ug < 0 { "-" } else { "" }, digits(ug, decimals))
}

/// The magnitude in grams with exactly so many decimals (1 to 6); what lies beyond them is cut off.
fn digits(ug: i64, decimals: u8) -> String {
    let decimals = decimals.clamp(1, 6);
    let steps_per_g = 10u64.pow(u32::from(decimals));
    let steps = ug.unsigned_abs() / (1_000_000 / steps_per_g);
    format!("{}.{:0width$}", steps / steps_per_g, steps % steps_per_g, width = usize::from(decimals))
}
