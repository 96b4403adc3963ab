//! The command line of jetspan; everything is in the library.

use std::process::ExitCode;

fn main() -> ExitCode {
    jetspan::cli::run(std::env::args_os())
}
