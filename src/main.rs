//! Parses the arguments, calls the command, maps the result to an exit code.

use std::process::ExitCode;

fn main() -> ExitCode {
    outwait::cli::run(std::env::args_os())
}
