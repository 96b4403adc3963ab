//! `jetspan explain KEY`: what a quantity of the record means.

use clap::ArgMatches;

use super::{ALL_MEASURED, CliError};
use crate::map::description::nearest;
use crate::quantity::{QUANTITIES, find};

/// Prints one quantity, or the list of all.
pub fn run(matches: &ArgMatches) -> Result<u8, CliError> {
    let mut text = String::new();
    match matches.get_one::<String>("KEY") {
        None => {
            for q in QUANTITIES {
                let unit =
                    if q.unit.is_empty() { String::new() } else { format!("  [{}]", q.unit) };
                text += &format!("{}{unit}\n", q.path);
            }
        }
        Some(key) => {
            let found = find(key);
            if found.is_empty() {
                let last = |path: &'static str| path.rsplit('.').next().unwrap_or(path);
                let names: Vec<&'static str> = QUANTITIES
                    .iter()
                    .map(|q| q.path)
                    .chain(QUANTITIES.iter().map(|q| last(q.path)))
                    .collect();
                let near = nearest(key, names)
                    .map_or(String::new(), |name| format!(" (nearest: `{name}`)"));
                return Err(CliError::UnknownQuantity { found: key.clone(), near });
            }
            for q in found {
                let symbol =
                    if q.symbol.is_empty() { String::new() } else { format!(" ({})", q.symbol) };
                let unit = if q.unit.is_empty() { "pure number or structure" } else { q.unit };
                text +=
                    &format!("{}{symbol}\n  unit     {unit}\n  meaning  {}\n", q.path, q.meaning);
                if !q.formula.is_empty() {
                    text += &format!("  formula  {}\n", q.formula);
                }
                text += &format!("  source   {}\n", q.source);
            }
        }
    }
    crate::write::print(&text)?;
    Ok(ALL_MEASURED)
}
