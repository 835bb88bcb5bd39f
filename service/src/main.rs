//! The program `kilter`: everything is in the library, so that tests can drive it.

use std::process::ExitCode;

fn main() -> ExitCode {
    kilter::run(std::env::args_os())
}
