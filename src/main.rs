//! The command `asterskein`.

mod cli;

use std::process::ExitCode;

fn main() -> ExitCode {
    cli::run().into()
}
