//! The command line: flags as typed, files opened, results written. The only part that
//! touches files and the terminal beside `map/read` and `write`.

mod args;
mod explain;
mod measure;
mod messages;
mod simulate;

use std::ffi::OsString;
use std::path::PathBuf;
use std::process::ExitCode;

use clap::error::ErrorKind;

use crate::record::Record;
use crate::write::WriteError;

/// All maps measured (also where nothing was found on them).
const ALL_MEASURED: u8 = 0;
/// Some map failed; its record says why.
const SOME_FAILED: u8 = 1;
/// The call could not be understood, or its output not be written.
const USAGE: u8 = 2;

/// Runs one call of the program and says how it ended.
pub fn run(arguments: impl IntoIterator<Item = OsString>) -> ExitCode {
    let matches = match args::command().try_get_matches_from(arguments) {
        Ok(matches) => matches,
        Err(error) => return ExitCode::from(refused(&error)),
    };
    let outcome = match matches.subcommand() {
        Some(("measure", matches)) => measure::run(matches),
        Some(("simulate", matches)) => simulate::run(matches),
        Some(("explain", matches)) => explain::run(matches),
        Some(("schema", matches)) => schema(matches),
        _ => Ok(ALL_MEASURED),
    };
    match outcome {
        Ok(code) => ExitCode::from(code),
        // The reader has seen enough.
        Err(CliError::Write(WriteError::ClosedPipe)) => ExitCode::from(ALL_MEASURED),
        Err(error) => {
            messages::error(&error.to_string());
            ExitCode::from(USAGE)
        }
    }
}

/// Help, the version, or what was wrong with the call; gives the exit status.
fn refused(error: &clap::Error) -> u8 {
    match error.kind() {
        ErrorKind::DisplayHelp
        | ErrorKind::DisplayVersion
        | ErrorKind::DisplayHelpOnMissingArgumentOrSubcommand => {
            // A closed pipe is no reason to complain.
            let _ = error.print();
            if error.use_stderr() { USAGE } else { ALL_MEASURED }
        }
        _ => {
            messages::error(&format!(
                "{}; --help lists all",
                one_line(&error.render().to_string())
            ));
            USAGE
        }
    }
}

/// The paragraphs of the parser's message before its usage line, as one line.
fn one_line(message: &str) -> String {
    let mut line = String::new();
    for part in message
        .strip_prefix("error: ")
        .unwrap_or(message)
        .lines()
        .map(str::trim)
        .filter(|part| !part.is_empty())
        .take_while(|part| !part.starts_with("Usage:") && !part.starts_with("For more"))
    {
        match line.chars().last() {
            None => {}
            Some(':') => line.push(' '),
            Some(_) => line.push_str("; "),
        }
        line.push_str(part);
    }
    line
}

/// Why a call ended without its result.
#[derive(Debug, thiserror::Error)]
enum CliError {
    #[error(transparent)]
    Description(#[from] crate::map::description::DescriptionError),
    #[error(transparent)]
    Settings(#[from] crate::settings::SettingsError),
    #[error(transparent)]
    Cosmology(#[from] crate::physics::CosmologyError),
    #[error(transparent)]
    Write(#[from] WriteError),
    #[error(
        "no map named and no --manifest; name at least one map file, such as `jetspan measure MAP`"
    )]
    NoMap,
    #[error(
        "no quantity, flag or description key is called `{found}`{near}; `jetspan explain` lists the quantities"
    )]
    UnknownQuantity { found: String, near: String },
    #[error(transparent)]
    Scenario(#[from] crate::simulate::ScenarioError),
    #[error(transparent)]
    Make(#[from] crate::simulate::MakeError),
    #[error(
        "cannot read the scenario {}: {reason}; name a TOML file, - for standard input, or a built-in scenario (--list shows them)", path.display()
    )]
    ScenarioFile { path: PathBuf, reason: String },
    #[error(
        "there is no scenario file `{found}` and no built-in scenario of that name{near}; built in are {names}"
    )]
    UnknownScenario { found: String, near: String, names: String },
    #[error("cannot store the map {name}: {error}")]
    Encode { name: String, error: crate::write::encode::EncodeError },
    #[error("cannot start {threads} threads: {reason}; give a lower number as --threads")]
    Threads { threads: usize, reason: String },
}

fn schema(matches: &clap::ArgMatches) -> Result<u8, CliError> {
    let schema = match matches.get_one::<String>("OF").map(String::as_str) {
        Some("description") => crate::map::description::description_schema(),
        _ => Record::schema(),
    };
    let text = serde_json::to_string_pretty(&schema).unwrap_or_default();
    crate::write::print(&format!("{text}\n"))?;
    Ok(ALL_MEASURED)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_parsers_paragraphs_become_one_line() {
        let text =
            "error: the following arguments were not provided:\n  <OF>\n\n  tip: x\n\nUsage: y\n";
        assert_eq!(one_line(text), "the following arguments were not provided: <OF>; tip: x");
    }
}
