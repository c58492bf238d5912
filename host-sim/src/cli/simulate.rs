//! `halfpulse simulate`: shots of a scene, with the truth beside them.

use crate::cli::Outcome;
use crate::input_error::InputError;
use std::io::Write;
use std::path::PathBuf;

/// Arguments of `simulate`.
#[derive(Debug, clap::Args)]
pub struct Arguments {
    /// The scene: probe, part, front end (TOML)
    pub scene: PathBuf,
    /// Same seed, same record
    #[arg(long, default_value_t = 1)]
    pub seed: u64,
    /// How many shots of the same place
    #[arg(long, default_value_t = 1)]
    pub shots: u32,
    /// Where to write the shots: .npy, .csv or .wav; the truth goes beside it as .json
    #[arg(short, long)]
    pub output: PathBuf,
}

/// Runs the command.
///
/// # Errors
/// What is wrong with the scene or the output.
pub fn run(arguments: &Arguments, _out: &mut dyn Write) -> Result<Outcome, InputError> {
    Err(InputError::in_file(
        &arguments.scene,
        "scenes cannot be simulated yet",
        "record a file with an instrument",
    ))
}
