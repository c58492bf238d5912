//! What a reading costs on the microcontroller, beside its budgets.

use crate::toolchain::{CORTEX_M4F, Toolchain, root};
use crate::{Checks, Trouble, emulator, image};
use halfpulse_mps2::canned::{COSTLIEST, RECORDS};
use halfpulse_tests::readme;
use serde::Deserialize;
use std::fs;

/// The committed budgets.
#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Budget {
    /// Executed instructions of one reading.
    pub instructions: u64,
    /// The same with the question whether an echo is two.
    pub instructions_with_separation: u64,
    /// The same for the costliest record that a search has found (`cargo board worst`).
    pub instructions_of_worst_record: u64,
    /// Code and constants.
    pub flash_bytes: u64,
    /// The core's share of them, and that of the mathematics it brings.
    pub flash_of_core_bytes: u64,
    /// Scratch memory beyond codes and sums of averages.
    pub scratch_bytes: u64,
    /// Variables.
    pub static_ram_bytes: u64,
    /// The deepest call of a measurement.
    pub stack_bytes: u64,
    /// The deepest call of the whole gauge.
    pub gauge_stack_bytes: u64,
}

/// One line of costs that the board wrote.
#[derive(Clone, Debug, PartialEq)]
struct Cost {
    record: String,
    what: String,
    instructions: u64,
    stack: u64,
}

pub fn run(checks: &mut Checks) -> Result<(), Trouble> {
    let budget = read_budget().map_err(Trouble::Failed)?;
    let toolchain = Toolchain::find(CORTEX_M4F)?;
    let file = toolchain.build_measure_anyhow()?;
    let costs = parse(&emulator::run(&file)?).map_err(Trouble::Failed)?;
    let sizes = image::sizes(&file).map_err(Trouble::Failed)?;
    let scratch = image::variable(&file, "::SCRATCH").map_err(Trouble::Failed)?;
    let records: u64 = RECORDS.iter().map(|record| record.file.len() as u64).sum();

    say!(
        "{:<20} {:<10} {:>13} {:>12}",
        "record",
        "step",
        "instructions",
        "stack bytes"
    );
    for cost in &costs {
        say!(
            "{:<20} {:<10} {:>13} {:>12}",
            cost.record,
            cost.what,
            cost.instructions,
            cost.stack
        );
    }
    // What was searched for has a budget of its own.
    let usual = costs.iter().filter(|cost| cost.record != COSTLIEST);
    let measuring = usual.clone().filter(|cost| cost.what == "measure");
    let instructions = measuring.map(|cost| cost.instructions).max().unwrap_or(u64::MAX);
    let whole = |record: &str| -> u64 {
        let of_record = costs
            .iter()
            .filter(|cost| cost.record == record && cost.what != "gauge-new");
        of_record.map(|cost| cost.instructions).sum()
    };
    let separated = usual.map(|cost| whole(&cost.record)).max().unwrap_or(u64::MAX);
    let worst = whole(COSTLIEST);
    let stack = costs.iter().map(|cost| cost.stack).max().unwrap_or(u64::MAX);
    let core = image::flash_of_core(&file, records).map_err(Trouble::Failed)?;
    say!("\nCortex-M4F, {toolchain}; instructions as executed, not cycles; records of 4096 samples");
    let code = image::code_by_crate(&file).map_err(Trouble::Failed)?;
    let largest: Vec<String> = code
        .iter()
        .take(6)
        .map(|(name, size)| format!("{name} {size}"))
        .collect();
    say!("bytes of code by crate: {}", largest.join(", "));
    for (name, row, what, value, limit) in [
        (
            "instructions",
            "instructions of the costliest canned reading, 4096 samples, Cortex-M4F",
            "instructions of the costliest reading",
            instructions,
            budget.instructions,
        ),
        (
            "instructions_with_separation",
            "the same with the question whether an echo is two",
            "instructions of the costliest reading with its separation",
            separated,
            budget.instructions_with_separation,
        ),
        (
            "instructions_of_worst_record",
            "the same for the costliest record that a search has found",
            "instructions of the record that `cargo board worst` has found, with its separation",
            worst,
            budget.instructions_of_worst_record,
        ),
        (
            "flash",
            "flash of the whole measuring image without its records",
            "bytes of flash without the canned records",
            sizes.flash.saturating_sub(records),
            budget.flash_bytes,
        ),
        (
            "flash_of_core",
            "of it the core, separation and texts included",
            "bytes of flash that are not the image's own: core, its texts and mathematics",
            core,
            budget.flash_of_core_bytes,
        ),
        (
            "scratch",
            "scratch memory for 4096 samples, beyond the codes",
            "bytes of scratch memory for 4096 samples",
            scratch,
            budget.scratch_bytes,
        ),
        (
            "static_ram",
            "static RAM, codes and scratch included",
            "bytes of static RAM, codes and scratch memory included",
            sizes.static_ram,
            budget.static_ram_bytes,
        ),
        (
            "stack",
            "stack from reset to the deepest call",
            "bytes of stack from reset to the deepest call",
            stack,
            budget.stack_bytes,
        ),
    ] {
        let text = format!("{value} {what}; budget {limit}");
        let unit = if name.starts_with("instructions") { "" } else { " bytes" };
        readme::figure_of_this_compiler(row, &format!("{value}{unit} (limit {limit})"), "cargo board figures");
        checks.check(
            &format!("{name}_within_budget"),
            if value <= limit { Ok(text) } else { Err(text) },
        );
    }
    Ok(())
}

/// Reads tests/board_budget.toml.
pub fn read_budget() -> Result<Budget, String> {
    let file = root().join("tests/board_budget.toml");
    let text = fs::read_to_string(&file).map_err(|error| format!("{}: {error}", file.display()))?;
    toml::from_str(&text).map_err(|error| format!("{}: {error}", file.display()))
}

/// Reads the board's `cost` lines; each belongs to the record named before it.
fn parse(printout: &str) -> Result<Vec<Cost>, String> {
    let mut record = "";
    let mut costs = Vec::new();
    for line in printout.lines() {
        record = line.strip_prefix("record ").unwrap_or(record);
        let Some(rest) = line.strip_prefix("cost ") else {
            continue;
        };
        let number = |key: &str| {
            rest.split(' ')
                .find_map(|word| word.strip_prefix(key)?.strip_prefix('='))
                .and_then(|digits| u64::from_str_radix(digits, 16).ok())
                .ok_or_else(|| format!("no {key} in the board's line `{line}`"))
        };
        costs.push(Cost {
            record: record.to_owned(),
            what: rest.split(' ').next().unwrap_or_default().to_owned(),
            instructions: number("instructions")?,
            stack: number("stack")?,
        });
    }
    if costs.iter().filter(|cost| cost.what == "measure").count() == RECORDS.len() {
        Ok(costs)
    } else {
        Err(format!(
            "the board did not write the costs of {} records:\n{printout}",
            RECORDS.len()
        ))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_committed_budget_can_be_read() {
        let budget = read_budget().unwrap();
        assert!(budget.instructions > 0 && budget.stack_bytes > 0);
    }

    #[test]
    fn costs_belong_to_their_record() {
        let one = "record a\nhealth x=1\ncost measure instructions=000000ff stack=00000010\n";
        let costs = parse(&one.repeat(RECORDS.len())).unwrap();
        assert_eq!(
            costs[0],
            Cost {
                record: "a".to_owned(),
                what: "measure".to_owned(),
                instructions: 255,
                stack: 16
            }
        );
        assert!(parse(one).is_err(), "too few records");
        assert!(
            parse(&"record a\ncost measure stack=1\n".repeat(RECORDS.len())).is_err(),
            "no instructions"
        );
    }
}
