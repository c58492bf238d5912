//! What was typed, and what it means.
//!
//! Exit status: 0 when every record gave a reading (or the command did what was asked), 2 when some
//! record was refused, 1 on an error; 1 wins. Errors go to stderr, one line each:
//! `error: FILE:LINE: what; remedy`.

pub mod calibrate;
pub mod campaign;
pub mod json;
pub mod materials;
pub mod read;
pub mod simulate;
pub mod text;
pub mod words;

use crate::input_error::InputError;
use clap::{Parser, Subcommand};
use std::io::Write;
use std::process::ExitCode;

/// How a command ended, if nothing was wrong with what it was given.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Outcome {
    /// Everything that was asked for is there.
    Done,
    /// At least one record was refused.
    Refused,
    /// At least one file was wrong; its error has been printed already.
    Failed,
}

impl Outcome {
    fn exit_code(self) -> ExitCode {
        match self {
            Self::Done => ExitCode::SUCCESS,
            Self::Refused => ExitCode::from(2),
            Self::Failed => ExitCode::FAILURE,
        }
    }
}

/// Measures the thickness of walls from recorded ultrasonic echoes, and simulates such records.
#[derive(Debug, Parser)]
#[command(
    name = "halfpulse",
    version,
    about = "Measures wall thickness from recorded ultrasonic echoes: a reading with its uncertainty, or the reason why there is none",
    after_help = "Without a command: the demonstration, an inspection simulated and measured.\n\
                  Exit status: 0 a reading for every record, 2 some record refused, 1 an error.\n\
                  `halfpulse COMMAND --help` explains each command with examples."
)]
struct Arguments {
    #[command(subcommand)]
    command: Option<Command>,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Simulates shots of a scene, with the truth beside them
    Simulate(simulate::Arguments),
    /// Measures recorded shots: a reading with its uncertainty, or the reason why there is none
    Read(read::Arguments),
    /// Learns reference pulse, zero and velocity from blocks of known thickness
    Calibrate(calibrate::Arguments),
    /// Lists the materials that scenes know: velocities, how well they are known, and where from
    Materials(materials::Arguments),
    /// Simulates and measures many runs over a grid of scenes: how often right, doubted, refused, wrong
    Campaign(campaign::Arguments),
    /// Merges the shards of a campaign
    Merge(campaign::MergeArguments),
}

/// An output that cannot be written; one that its reader has closed had enough, which is no fault.
///
/// # Errors
/// Everything but a closed pipe.
pub fn written(result: std::io::Result<()>) -> Result<(), InputError> {
    match result {
        Err(error) if error.kind() != std::io::ErrorKind::BrokenPipe => Err(InputError::in_argument(
            format!("the output cannot be written ({error})"),
            "check where it goes and the space there",
        )),
        _ => Ok(()),
    }
}

/// Prints one error in one line on stderr.
pub fn print_error(error: &InputError) {
    // Nothing is left to do if stderr is closed.
    let _ = writeln!(std::io::stderr(), "error: {error}");
}

/// The whole program: parses the arguments, runs the command, returns the exit status.
#[must_use]
pub fn main() -> ExitCode {
    let arguments = match Arguments::try_parse() {
        Ok(arguments) => arguments,
        Err(error) => return usage(&error),
    };
    let mut out = std::io::stdout().lock();
    let result = match arguments.command {
        None => crate::demo::run(&mut out).map(|()| Outcome::Done),
        Some(Command::Simulate(arguments)) => simulate::run(&arguments, &mut out),
        Some(Command::Read(arguments)) => read::run(&arguments, &mut out),
        Some(Command::Calibrate(arguments)) => calibrate::run(&arguments, &mut out),
        Some(Command::Materials(arguments)) => materials::run(&arguments, &mut out),
        Some(Command::Campaign(arguments)) => campaign::run(&arguments, &mut out),
        Some(Command::Merge(arguments)) => campaign::run_merge(&arguments, &mut out),
    };
    match result {
        Ok(outcome) => outcome.exit_code(),
        Err(error) => {
            print_error(&error);
            ExitCode::FAILURE
        }
    }
}

/// Help and version are answers; anything else is an error in one line, with status 1 (not clap's 2,
/// which here means a refused record).
fn usage(error: &clap::Error) -> ExitCode {
    if !error.use_stderr() {
        let _ = error.print();
        return ExitCode::SUCCESS;
    }
    let text = error.to_string();
    // clap's first paragraph holds the fault; tips and usage follow.
    let what: Vec<&str> = text
        .lines()
        .take_while(|line| !line.starts_with("Usage:") && !line.starts_with("For more information"))
        .map(str::trim)
        .collect();
    let what = what.join(" ");
    let what = what.trim().trim_start_matches("error: ").trim_end();
    print_error(&InputError::in_argument(what, "see halfpulse --help"));
    ExitCode::FAILURE
}

#[cfg(test)]
mod tests {
    use super::*;
    use clap::CommandFactory;

    #[test]
    fn the_command_line_is_consistent() {
        Arguments::command().debug_assert();
    }
}
