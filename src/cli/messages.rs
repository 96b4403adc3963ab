//! The only writer on standard error.

use std::io::{IsTerminal, Write};

/// One line that says what went wrong, whatever file names and damaged files put into it.
pub fn error(message: &str) {
    let _ = writeln!(std::io::stderr().lock(), "error: {}", printable(message));
}

/// Text without control characters: they are written as escapes.
fn printable(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        if c.is_control() { out.extend(c.escape_default()) } else { out.push(c) }
    }
    out
}

/// Progress over several maps: one line that is rewritten, only on a terminal.
pub struct Progress {
    total: usize,
    shown: bool,
}

impl Progress {
    /// Shown from five maps on, where standard error is a terminal.
    pub fn new(total: usize) -> Self {
        Self { total, shown: total >= 5 && std::io::stderr().is_terminal() }
    }

    /// Says that `done` maps are through, of which `failed` failed.
    pub fn show(&self, done: usize, failed: usize) {
        if self.shown {
            let failures = if failed > 0 { format!(", {failed} failed") } else { String::new() };
            let _ = write!(std::io::stderr().lock(), "\r{done} of {} maps{failures} ", self.total);
        }
    }

    /// Clears the line.
    pub fn end(&self) {
        if self.shown {
            let _ = write!(std::io::stderr().lock(), "\r{:40}\r", "");
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn control_characters_are_escaped_and_letters_are_not() {
        assert_eq!(printable("a\nb\u{1b}[31m µ"), "a\\nb\\u{1b}[31m µ");
    }
}
