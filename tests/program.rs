//! The program as the tests drive it. Cargo builds it with the tests, so it is never stale.

use std::process::ExitCode;

fn main() -> ExitCode {
    kilter::run(std::env::args_os())
}
