//! The `borewake` program.

use std::process::ExitCode;

fn main() -> ExitCode {
    borewake::cli::main(std::env::args_os()).into()
}
