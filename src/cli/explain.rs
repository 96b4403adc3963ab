//! `jetspan explain WORD`: what a quantity, a flag or a description key means.

use clap::ArgMatches;

use super::{ALL_MEASURED, CliError};
use crate::flags::FLAG_KINDS;
use crate::map::description::{DESCRIPTION_KEYS, nearest};
use crate::quantity::{QUANTITIES, Quantity, find};

/// Width of the text in columns.
const WIDTH: usize = 80;

/// Prints what is called by a word, or the list of all quantities.
pub fn run(matches: &ArgMatches) -> Result<u8, CliError> {
    let text = match matches.get_one::<String>("KEY") {
        None => QUANTITIES.iter().map(line).collect(),
        Some(word) => explained(word).ok_or_else(|| unknown(word))?,
    };
    crate::write::print(&text)?;
    Ok(ALL_MEASURED)
}

/// One line of the list: path and unit.
fn line(quantity: &Quantity) -> String {
    let unit =
        if quantity.unit.is_empty() { String::new() } else { format!("  [{}]", quantity.unit) };
    format!("{}{unit}\n", quantity.path)
}

/// Looks a word up as path, symbol, flag, description key and group of quantities, in turn.
fn explained(word: &str) -> Option<String> {
    let found = find(word);
    if !found.is_empty() {
        return Some(found.into_iter().map(entry).collect());
    }
    let symbol: Vec<_> =
        QUANTITIES.iter().filter(|q| !q.symbol.is_empty() && same(q.symbol, word)).collect();
    if !symbol.is_empty() {
        return Some(symbol.into_iter().map(entry).collect());
    }
    if let Some(kind) = FLAG_KINDS.iter().find(|kind| same(kind.code, word)) {
        let severity = format!("{:?} of stage {}", kind.severity, kind.stage);
        return Some(
            head(kind.code, "") + &field("flag", &severity) + &field("says", kind.template),
        );
    }
    let key_name = word.trim_start_matches('-').replace('-', "_");
    if let Some(key) = DESCRIPTION_KEYS.iter().find(|key| same(key.name, &key_name)) {
        let flag = format!("--{} {}", key.name.replace('_', "-"), key.value_name);
        return Some(
            head(key.name, "")
                + &field("key", "of the map description")
                + &field("flag", &flag)
                + &field("meaning", key.help),
        );
    }
    let inside = |q: &&Quantity| {
        q.path.split(['.', '[']).any(|part| same(part, word))
            || q.path.starts_with(&format!("{word}."))
    };
    let group: String = QUANTITIES.iter().filter(inside).map(line).collect();
    (!group.is_empty()).then_some(group)
}

fn same(a: &str, b: &str) -> bool {
    a.to_lowercase() == b.to_lowercase()
}

fn unknown(word: &str) -> CliError {
    let last = |path: &'static str| path.rsplit('.').next().unwrap_or(path);
    let names: Vec<&'static str> = QUANTITIES
        .iter()
        .map(|q| q.path)
        .chain(QUANTITIES.iter().map(|q| last(q.path)))
        .chain(FLAG_KINDS.iter().map(|kind| kind.code))
        .collect();
    let near = nearest(word, names).map_or(String::new(), |name| format!(" (nearest: `{name}`)"));
    CliError::UnknownQuantity { found: word.to_owned(), near }
}

fn entry(q: &Quantity) -> String {
    let unit = if q.unit.is_empty() { "none" } else { q.unit };
    let mut text = head(q.path, q.symbol) + &field("unit", unit) + &field("meaning", q.meaning);
    if !q.formula.is_empty() {
        text += &field("formula", q.formula);
    }
    text + &field("source", q.source)
}

fn head(name: &str, symbol: &str) -> String {
    if symbol.is_empty() { format!("{name}\n") } else { format!("{name}  ({symbol})\n") }
}

/// A named paragraph, wrapped and indented.
fn field(name: &str, value: &str) -> String {
    let mut text = String::new();
    let mut row = format!("  {name:<9}");
    for word in value.split(' ') {
        if row.chars().count() + word.chars().count() > WIDTH && !row.trim().is_empty() {
            text += row.trim_end();
            text.push('\n');
            row = " ".repeat(11);
        }
        row += word;
        row.push(' ');
    }
    text += row.trim_end();
    text.push('\n');
    text
}
