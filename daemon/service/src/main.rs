//! The program.

use std::process::ExitCode;

fn main() -> ExitCode {
    ebbmark::commands::run()
}
