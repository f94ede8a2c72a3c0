//! argv → command → exit code.

#![forbid(unsafe_code)]

use std::process::ExitCode;

fn main() -> ExitCode {
    ExitCode::from(asfound::cli::run(std::env::args_os()))
}
