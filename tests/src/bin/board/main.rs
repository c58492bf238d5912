//! `cargo board`: everything about the microcontroller, from a machine that has none.
//!
//! Finds a core library for the target (or the means to build one), builds the firmware, runs it in
//! the emulator and looks at what came out: the same bits as on the host, no panic that can be
//! reached, and what it costs.

/// Prints a line; whoever has closed the pipe does not want it, and that is no error.
macro_rules! say {
    ($($text:tt)*) => {{
        use std::io::Write as _;
        let _ = writeln!(std::io::stdout(), $($text)*);
    }};
}

mod compare;
mod cost;
#[cfg(unix)]
mod device;
mod emulator;
mod figures;
mod image;
mod panics;
mod records;
mod toolchain;
mod worst;

use std::process::ExitCode;
use toolchain::{CORTEX_M0_PLUS, CORTEX_M4F, Features, Toolchain};

const HELP: &str = "\
usage: cargo board VERB

  build [TARGET]  cross build: the core for Cortex-M4F and Cortex-M0+, and the image `measure`;
                  with TARGET (thumbv7em-none-eabihf, thumbv6m-none-eabi) only for that one
  cost [--write]  instructions of a reading by stage, estimated cycles beside them, against the committed
                  tests/board_costs.txt; with --write that table is written anew
  device          the gauge in the emulator fires at the simulator here: 200 readings of different walls,
                  gains and averages on a Cortex-M4F, 20 without floating point unit, each the same as this
                  machine's to the last bit; then faults on purpose, and the decoded log
  panics          no panic can be reached in the image, and the check that says so can fail
  figures         instructions, flash, static RAM and stack, beside the budgets of tests/board_budget.toml
  records         make the canned records again from their scenes (firmware-example/mps2/records)
  worst [--write] search for the record that is costliest to read (some minutes), held against the budget; with --write its
                  scene becomes the canned record `costliest`
  tools           what is there and what is missing

Every verb builds what it needs. Exit status 0: all is well; 1: something failed; 3: a tool is missing.
";

/// Why a verb came to nothing.
#[derive(Debug)]
pub enum Trouble {
    /// A tool is missing; the text says how to get it.
    Missing(String),
    /// Anything else that went wrong.
    Failed(String),
}

impl Trouble {
    fn failed(text: impl Into<String>) -> Self {
        Self::Failed(text.into())
    }
}

/// Counts checks and prints them as the test runner does.
#[derive(Debug, Default)]
pub struct Checks {
    passed: u32,
    failed: u32,
}

impl Checks {
    /// One check: `Ok` with what is worth telling, or `Err` with what is wrong.
    pub fn check(&mut self, name: &str, outcome: Result<String, String>) {
        let (verdict, text) = match outcome {
            Ok(text) => {
                self.passed += 1;
                ("ok", text)
            }
            Err(text) => {
                self.failed += 1;
                ("FAILED", text)
            }
        };
        say!("test board::{name} ... {verdict}");
        for line in text.lines() {
            say!("    {line}");
        }
    }

    /// The closing line, in the test runner's words.
    fn close(&self) -> ExitCode {
        let (verdict, code) = if self.failed == 0 {
            ("ok", ExitCode::SUCCESS)
        } else {
            ("FAILED", ExitCode::FAILURE)
        };
        say!(
            "\ntest result: {verdict}. {} passed; {} failed; 0 ignored; 0 measured; 0 filtered out",
            self.passed,
            self.failed
        );
        code
    }
}

fn main() -> ExitCode {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let words: Vec<&str> = arguments.iter().map(String::as_str).collect();
    let mut checks = Checks::default();
    let outcome = match words.as_slice() {
        ["build"] => build(&mut checks, &[CORTEX_M4F, CORTEX_M0_PLUS]),
        ["build", target] if [CORTEX_M4F, CORTEX_M0_PLUS].contains(target) => build(&mut checks, &[target]),
        ["run"] => compare::run(&mut checks),
        ["cost"] => cost::run(&mut checks, false),
        ["cost", "--write"] => cost::run(&mut checks, true),
        // The emulator's serial port is a Unix socket.
        #[cfg(unix)]
        ["device"] => device::run(&mut checks),
        ["worst"] => worst::run(&mut checks, false),
        ["worst", "--write"] => worst::run(&mut checks, true),
        ["panics"] => panics::run(&mut checks),
        ["figures"] => figures::run(&mut checks),
        ["records"] => return told(records::write()),
        ["tools"] => return told(tools()),
        ["--help" | "-h" | "help"] => {
            print!("{HELP}");
            return ExitCode::SUCCESS;
        }
        _ => {
            eprint!("{HELP}");
            return ExitCode::FAILURE;
        }
    };
    match outcome {
        Ok(()) => checks.close(),
        Err(trouble) => told(Err(trouble)),
    }
}

/// For verbs without checks.
fn told(outcome: Result<(), Trouble>) -> ExitCode {
    match outcome {
        Ok(()) => ExitCode::SUCCESS,
        Err(Trouble::Missing(text)) => {
            eprintln!("board: {text}");
            ExitCode::from(3)
        }
        Err(Trouble::Failed(text)) => {
            eprintln!("board: {text}");
            ExitCode::FAILURE
        }
    }
}

fn build(checks: &mut Checks, targets: &[&str]) -> Result<(), Trouble> {
    for target in targets {
        let toolchain = Toolchain::find(target)?;
        let outcome = toolchain.build_core();
        checks.check(
            &format!("core_builds_for_{}", target.replace('-', "_")),
            outcome.map(|()| toolchain.to_string()),
        );
        if *target == CORTEX_M4F {
            let outcome = toolchain.build_measure(Features::Normal);
            checks.check("measure_links", outcome.map(|image| image.display().to_string()));
        }
    }
    Ok(())
}

fn tools() -> Result<(), Trouble> {
    let mut missing = String::new();
    for target in [CORTEX_M4F, CORTEX_M0_PLUS] {
        match Toolchain::find(target) {
            Ok(toolchain) => say!("{target}: {toolchain}"),
            Err(Trouble::Missing(text) | Trouble::Failed(text)) => missing += &format!("{text}\n"),
        }
    }
    match emulator::find() {
        Ok(version) => say!("emulator: {version}"),
        Err(Trouble::Missing(text) | Trouble::Failed(text)) => missing += &text,
    }
    if missing.is_empty() {
        Ok(())
    } else {
        Err(Trouble::Missing(missing))
    }
}
