//! The `ellbow` program: everything is in the library.

use std::process::ExitCode;

fn main() -> ExitCode {
    ExitCode::from(ellbow::cli::main(std::env::args_os()))
}
