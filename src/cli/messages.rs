//! The only writer on standard error.

use std::io::{IsTerminal, Write};
use std::time::Instant;

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

/// Width of the line of progress in columns.
const WIDTH: usize = 70;

/// Progress over several maps or sources: one line that is rewritten, only on a terminal.
pub struct Progress {
    what: &'static str,
    total: usize,
    shown: bool,
    start: Instant,
}

impl Progress {
    /// Over maps: shown from five on, where standard error is a terminal.
    pub fn new(total: usize) -> Self {
        Self::over("maps", total)
    }

    /// The same over anything else, named in the plural.
    pub fn over(what: &'static str, total: usize) -> Self {
        let shown = total >= 5 && std::io::stderr().is_terminal();
        Self { what, total, shown, start: Instant::now() }
    }

    /// Says that `done` are through, of which `failed` failed.
    pub fn show(&self, done: usize, failed: usize) {
        if self.shown {
            let failures = if failed > 0 { format!(", {failed} failed") } else { String::new() };
            let pace = pace(done, self.total, self.start.elapsed().as_secs_f64());
            let line = format!("{done} of {} {}{failures}{pace}", self.total, self.what);
            let _ = write!(std::io::stderr().lock(), "\r{line:WIDTH$}");
        }
    }

    /// Clears the line.
    pub fn end(&self) {
        if self.shown {
            let _ = write!(std::io::stderr().lock(), "\r{:WIDTH$}\r", "");
        }
    }
}

/// Rate so far and time left at that rate; nothing before there is a rate.
fn pace(done: usize, total: usize, elapsed_s: f64) -> String {
    if done == 0 || elapsed_s <= 0.0 {
        return String::new();
    }
    let rate = done as f64 / elapsed_s;
    let left_s = total.saturating_sub(done) as f64 / rate;
    let left = if left_s < 100.0 {
        format!("{left_s:.0} s")
    } else if left_s < 6000.0 {
        format!("{:.0} min", left_s / 60.0)
    } else {
        format!("{:.1} h", left_s / 3600.0)
    };
    format!(", {rate:.1} a second, {left} left")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn control_characters_are_escaped_and_letters_are_not() {
        assert_eq!(printable("a\nb\u{1b}[31m µ"), "a\\nb\\u{1b}[31m µ");
    }

    #[test]
    fn the_pace_is_rate_and_time_left() {
        assert_eq!(pace(0, 10, 3.0), "");
        // Ten in four seconds: ninety more take thirty-six.
        assert_eq!(pace(10, 100, 4.0), ", 2.5 a second, 36 s left");
        assert_eq!(pace(10, 1000, 10.0), ", 1.0 a second, 16 min left");
        assert_eq!(pace(10, 36_010, 20.0), ", 0.5 a second, 20.0 h left");
        assert_eq!(pace(10, 10, 10.0), ", 1.0 a second, 0 s left");
    }
}
