//! `cargo board worst`: a search for the record that is costliest to read, the question whether an echo is two included.
//!
//! Scenes are numbers between 0 and 1 ([`scenes`]). For every set-up a population is drawn, and in each round the costliest
//! are kept, crossed and changed a little. What counts is the instructions of the emulated board itself, many records in one
//! boot. Same seed, same search, same end. The costliest record that it found is committed as the canned record
//! [`COSTLIEST`], whose cost `cargo board figures` holds against the budget.

mod scenes;

use crate::toolchain::{CORTEX_M4F, Toolchain, root};
use crate::{Checks, Trouble, emulator};
use halfpulse_mps2::canned::{CAPACITY, COSTLIEST};
use halfpulse_mps2::search::{HEADER, MOST_RECORDS, SETUPS};
use halfpulse_sim::{Scene, synthesise};
use halfpulse_tests::oracle::Random;
use scenes::{GENES, Genes, scene};
use std::fs;
use std::path::{Path, PathBuf};

/// Seed of the search.
const SEED: u64 = 5;
/// Seed of every record, as of the canned ones.
const SHOT: u64 = 1;
/// Rounds of a search.
const ROUNDS: usize = 8;
/// Records that a round begins with for each set-up.
const DRAWN: usize = 96;
/// Records of later rounds.
const CHANGED: usize = 64;
/// How many of the costliest become parents.
const PARENTS: usize = 12;
/// Bytes of the board's sample memory.
const MEMORY: usize = 16 << 20;

/// A record that was counted.
#[derive(Clone, Debug)]
struct Found {
    setup: usize,
    genes: Genes,
    measure: u64,
    separate: u64,
    stack: u64,
    reading: bool,
}

impl Found {
    fn cost(&self) -> u64 {
        self.measure + self.separate
    }
}

/// Searches, prints the costliest of each set-up and writes the scene of the costliest of all if asked to.
pub fn run(checks: &mut Checks, write: bool) -> Result<(), Trouble> {
    let toolchain = Toolchain::find(CORTEX_M4F)?;
    let image = toolchain.build_anyhow("worst")?;
    let budget = crate::figures::read_budget().map_err(Trouble::Failed)?;
    let mut random = Random::new(SEED);
    let (mut costliest, mut counted): (Option<Found>, usize) = (None, 0);
    for setup in 0..SETUPS.len() {
        let mut kept: Vec<Found> = Vec::new();
        for round in 0..ROUNDS {
            let asked = if round == 0 { DRAWN } else { CHANGED };
            let asked: Vec<Genes> = (0..asked).map(|_| next(&kept, &mut random)).collect();
            let found = count(&image, setup, &asked)?;
            counted += found.len();
            kept.extend(found);
            kept.sort_by_key(|found| std::cmp::Reverse(found.cost()));
            kept.truncate(PARENTS);
        }
        let best = kept.first().ok_or_else(|| Trouble::failed("no scene could be made"))?;
        say!(
            "set-up {setup}: {} + {} = {} instructions, {} bytes of stack, {}",
            best.measure,
            best.separate,
            best.cost(),
            best.stack,
            if best.reading { "a reading" } else { "refused" }
        );
        if costliest.as_ref().is_none_or(|most| best.cost() > most.cost()) {
            costliest = Some(best.clone());
        }
    }
    let most = costliest.ok_or_else(|| Trouble::failed("nothing was searched"))?;
    let text = file_of(&scene(most.setup, &most.genes), most.setup)?;
    say!("costliest of {counted} records:\n{text}");
    if write {
        let file = path();
        fs::write(&file, text).map_err(|error| Trouble::Failed(format!("{}: {error}", file.display())))?;
        say!("{} written; now: cargo board records", file.display());
    }
    let limit = budget.instructions_of_worst_record;
    let told = format!("{} instructions, budget {limit}", most.cost());
    checks.check(
        "no_record_found_beyond_the_budget",
        if most.cost() <= limit { Ok(told) } else { Err(told) },
    );
    Ok(())
}

fn path() -> PathBuf {
    root().join(format!("firmware-example/mps2/records/{COSTLIEST}.toml"))
}

fn file_of(scene: &Scene, setup: usize) -> Result<String, Trouble> {
    let text = toml::to_string(scene).map_err(|error| Trouble::Failed(error.to_string()))?;
    Ok(format!(
        "# The costliest record that `cargo board worst` has found, read with its set-up number {setup}\n\
         # (firmware-example/mps2/src/search.rs).\n{text}"
    ))
}

/// Drawn, or two parents crossed and changed.
fn next(kept: &[Found], random: &mut Random) -> Genes {
    let mut genes = [0.0; GENES];
    let parent = |random: &mut Random| {
        let number = (random.uniform() * kept.len() as f64) as usize;
        kept.get(number).map(|found| found.genes)
    };
    let (one, other) = (parent(random), parent(random));
    for (place, gene) in genes.iter_mut().enumerate() {
        let inherited = if random.uniform() < 0.8 { one } else { other };
        *gene = match inherited.and_then(|genes| genes.get(place).copied()) {
            Some(gene) if random.uniform() < 0.85 => gene,
            Some(gene) if random.uniform() < 0.7 => (gene + 0.1 * (random.uniform() - 0.5)).clamp(0.0, 1.0),
            _ => random.uniform(),
        };
    }
    genes
}

/// Makes the records and counts them on the board; scenes that cannot be made are left out.
fn count(image: &Path, setup: usize, asked: &[Genes]) -> Result<Vec<Found>, Trouble> {
    let made: Vec<(Genes, Vec<i16>)> = asked
        .iter()
        .filter_map(|genes| Some((*genes, synthesise(&scene(setup, genes), SHOT).ok()?.codes)))
        .take(MOST_RECORDS)
        .collect();
    let mut memory = vec![0i16; HEADER + made.len() * CAPACITY];
    let (header, records) = memory.split_at_mut(HEADER);
    header[0] = made.len() as i16;
    header[1..].fill(setup as i16);
    for (place, (_, codes)) in records.chunks_exact_mut(CAPACITY).zip(&made) {
        place.copy_from_slice(codes);
    }
    let printout = on_board(image, &memory)?;
    let lines: Vec<&str> = printout.lines().filter(|line| line.starts_with("found ")).collect();
    if lines.len() != made.len() {
        return Err(Trouble::Failed(format!(
            "{} records counted of {}",
            lines.len(),
            made.len()
        )));
    }
    let mut found = Vec::new();
    for ((genes, _), line) in made.into_iter().zip(lines) {
        let number = |key: &str| {
            let word = line.split(' ').find_map(|word| word.strip_prefix(key));
            word.and_then(|digits| u64::from_str_radix(digits, 16).ok())
                .ok_or_else(|| Trouble::Failed(format!("the board wrote `{line}`")))
        };
        found.push(Found {
            setup,
            genes,
            measure: number("measure=")?,
            separate: number("separate=")?,
            stack: number("stack=")?,
            reading: number("reading=")? == 1,
        });
    }
    Ok(found)
}

/// Runs the image with these codes in the board's sample memory.
fn on_board(image: &Path, memory: &[i16]) -> Result<String, Trouble> {
    let file = std::env::temp_dir().join(format!("halfpulse-worst-{}", std::process::id()));
    let mut bytes: Vec<u8> = memory.iter().flat_map(|code| code.to_le_bytes()).collect();
    bytes.resize(MEMORY, 0);
    fs::write(&file, bytes).map_err(|error| Trouble::Failed(format!("{}: {error}", file.display())))?;
    let object = format!(
        "memory-backend-file,id=samples,size={MEMORY},mem-path={},share=on",
        file.display()
    );
    let outcome = emulator::run_with(image, &["-object", &object, "-machine", "memory-backend=samples"]);
    let _ = fs::remove_file(&file);
    outcome
}
