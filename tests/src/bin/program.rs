//! The program as people start it.

use std::process::ExitCode;

fn main() -> ExitCode {
    ebbmark::commands::run()
}
