//! The thin binary: parse, do, exit.

use clap::Parser;

fn main() -> std::process::ExitCode {
    truewidth::cli::execute(&truewidth::cli::Cli::parse())
}
