//! The command-line program: parse, run, exit code.

mod cli;

fn main() -> std::process::ExitCode {
    cli::main()
}
