//! Reading Rust source and Markdown just well enough for the house rules.

/// A function of a source file.
pub struct Function {
    /// Its name.
    pub name: String,
    /// Line of its `fn`, from 1.
    pub line: usize,
    /// Lines from its `fn` to its last brace.
    pub lines: usize,
}

/// The source with comments, texts and characters blanked out; lines stay where they are.
pub fn code_only(text: &str) -> String {
    let c: Vec<char> = text.chars().collect();
    let mut out = String::with_capacity(text.len());
    let mut at = 0;
    while at < c.len() {
        let to = end_of_blank(&c, at);
        if to == at {
            out.push(c[at]);
            at += 1;
        } else {
            out.extend(c[at..to].iter().map(|&c| if c == '\n' { '\n' } else { ' ' }));
            at = to;
        }
    }
    out
}

/// Where a comment, text or character that begins at `at` ends; `at` itself when none begins there.
fn end_of_blank(c: &[char], at: usize) -> usize {
    let next = |n: usize| c.get(at + n).copied().unwrap_or('\0');
    match (c[at], next(1)) {
        ('/', '/') => find(c, at, |w| w[0] == '\n'),
        ('/', '*') => end_of_comment(c, at),
        ('"', _) => end_of_text(c, at + 1, '"'),
        ('\'', '\\') => end_of_text(c, at + 1, '\''),
        ('\'', _) if next(2) == '\'' => at + 3,
        ('r', '"' | '#') if at == 0 || !is_name(c[at - 1]) || (c[at - 1] == 'b' && (at < 2 || !is_name(c[at - 2]))) => {
            let hashes = c[at + 1..].iter().take_while(|c| **c == '#').count();
            match next(1 + hashes) {
                '"' => end_of_raw(c, at + 2 + hashes, hashes),
                _ => at,
            }
        }
        _ => at,
    }
}

fn find(c: &[char], from: usize, is: impl Fn(&[char]) -> bool) -> usize {
    (from..c.len()).find(|&n| is(&c[n..])).unwrap_or(c.len())
}

fn end_of_comment(c: &[char], at: usize) -> usize {
    let (mut depth, mut n) = (0usize, at);
    while n + 1 < c.len() {
        match (c[n], c[n + 1]) {
            ('/', '*') => (depth, n) = (depth + 1, n + 2),
            ('*', '/') => (depth, n) = (depth - 1, n + 2),
            _ => n += 1,
        }
        if depth == 0 {
            return n;
        }
    }
    c.len()
}

fn end_of_text(c: &[char], from: usize, quote: char) -> usize {
    let mut n = from;
    while n < c.len() {
        match c[n] {
            '\\' => n += 2,
            q if q == quote => return n + 1,
            _ => n += 1,
        }
    }
    c.len()
}

fn end_of_raw(c: &[char], from: usize, hashes: usize) -> usize {
    let ends = |w: &[char]| w[0] == '"' && w.len() > hashes && w[1..=hashes].iter().all(|c| *c == '#');
    (find(c, from, ends) + 1 + hashes).min(c.len())
}

fn is_name(c: char) -> bool {
    c.is_alphanumeric() || c == '_'
}

/// The functions of a source that went through [`code_only`].
pub fn functions(code: &str) -> Vec<Function> {
    let c: Vec<char> = code.chars().collect();
    let mut found = Vec::new();
    let mut line = 1;
    for at in 0..c.len() {
        line += usize::from(c[at] == '\n');
        let word = c[at..].starts_with(&['f', 'n']) && (at == 0 || !is_name(c[at - 1])) && c.get(at + 2) == Some(&' ');
        let name: String = if word { c[at + 3..].iter().take_while(|c| is_name(**c)).collect() } else { String::new() };
        if !name.is_empty()
            && let Some(end) = end_of_body(&c, at)
        {
            let lines = 1 + c[at..end].iter().filter(|c| **c == '\n').count();
            found.push(Function { name, line, lines });
        }
    }
    found
}

/// The last brace of the function that begins at `at`; none when it has no body.
fn end_of_body(c: &[char], at: usize) -> Option<usize> {
    let (mut round, mut curly) = (0i32, 0i32);
    for (n, c) in c.iter().enumerate().skip(at) {
        match c {
            '(' | '[' => round += 1,
            ')' | ']' => round -= 1,
            '{' if round == 0 || curly > 0 => curly += 1,
            '}' if curly > 0 => {
                curly -= 1;
                if curly == 0 {
                    return Some(n);
                }
            }
            ';' if round == 0 && curly == 0 => return None,
            _ => (),
        }
    }
    None
}

/// The variants of an enum in a source that went through [`code_only`] and is formatted.
pub fn variants(code: &str, name: &str) -> Vec<String> {
    let head = format!("pub enum {name} {{");
    let body = code.lines().skip_while(|l| *l != head).skip(1).take_while(|l| *l != "}");
    let variant = |l: &str| {
        let text = l.strip_prefix("    ").filter(|t| t.starts_with(|c: char| c.is_ascii_uppercase()))?;
        Some(text.chars().take_while(|c| is_name(*c)).collect())
    };
    body.filter_map(variant).collect()
}

/// `OpenSpecimen` as `open_specimen`.
pub fn snake_case(name: &str) -> String {
    let mut out = String::new();
    for (n, c) in name.chars().enumerate() {
        if c.is_ascii_uppercase() && n > 0 {
            out.push('_');
        }
        out.push(c.to_ascii_lowercase());
    }
    out
}

/// Fenced blocks of a Markdown text: the word after the fence, and what is inside.
pub fn fenced(text: &str) -> Vec<(String, String)> {
    let mut blocks: Vec<(String, String)> = Vec::new();
    let mut inside = false;
    for line in text.lines() {
        match line.trim_start().strip_prefix("```") {
            Some(word) => {
                if !inside {
                    blocks.push((word.trim().to_string(), String::new()));
                }
                inside = !inside;
            }
            None if inside => {
                if let Some((_, block)) = blocks.last_mut() {
                    block.push_str(line);
                    block.push('\n');
                }
            }
            None => (),
        }
    }
    blocks
}

/// Everything that stands as code in a Markdown text: lines of fenced blocks, and spans.
pub fn code_pieces(text: &str) -> Vec<String> {
    let mut pieces = Vec::new();
    let mut inside = false;
    for line in text.lines() {
        if line.trim_start().starts_with("```") {
            inside = !inside;
        } else if inside {
            pieces.push(line.trim().to_string());
        } else {
            pieces.extend(line.split('`').skip(1).step_by(2).map(String::from));
        }
    }
    pieces
}
