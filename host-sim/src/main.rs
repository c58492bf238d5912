//! The command `halfpulse`.

fn main() -> std::process::ExitCode {
    halfpulse_sim::cli::main()
}
