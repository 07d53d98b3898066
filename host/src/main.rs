//! The `ringvolt` command.

fn main() -> std::process::ExitCode {
    ringvolt::cli::main()
}
