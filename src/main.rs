//! The `regauge` command.

fn main() -> std::process::ExitCode {
    regauge::cli::main()
}
