//! Records as JSON: one object, or JSON Lines.

use crate::record::Record;

/// A record as text that ends in a line break: on one line where `one_line`, else indented.
pub fn record(record: &Record, one_line: bool) -> String {
    let text =
        if one_line { serde_json::to_string(record) } else { serde_json::to_string_pretty(record) };
    // A record holds only strings, numbers and lists: writing it cannot fail.
    text.unwrap_or_default() + "\n"
}
