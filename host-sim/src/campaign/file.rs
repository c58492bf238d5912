//! The campaign file, version 1.
//!
//! An example that can be copied stands in [`EXAMPLE`]; [`KEYS`] describes every key, and
//! `halfpulse campaign --help` prints both. Unknown keys are refused.

use super::calibration::Calibration;
use super::draw::{self, Bundle, Draw, DrawError};
use super::learned::LearnedPulse;
use super::path;
use super::places::{Lines, Places};
use crate::input_error::InputError;
use crate::spelling;
use halfpulse::record::average::MOST_SHOTS;
use std::path::{Path, PathBuf};
use toml::{Table, Value};

/// A campaign file that can be copied.
pub const EXAMPLE: &str = r#"version = 1
name = "steel walls"
seed = 7
runs = 500                                   # of each cell
scene_file = "scene.toml"                    # and / or tables [scene.record], [scene.wall] ..
setup_file = "setup.toml"                    # and / or tables [setup.record], [setup.probe] ..

[grid]                                       # every combination is a cell
"scene.wall.thickness_mm" = { from = 3.0, to = 48.0, steps = 5, log = true }
"scene.noise.snr_db" = [20.0, 30.0, 40.0]
probe = [                                    # several fields together
  { label = "2 MHz", "scene.probe.centre_frequency_mhz" = 2.25, "setup.probe.centre_frequency_mhz" = 2.25 },
  { label = "5 MHz", "scene.probe.centre_frequency_mhz" = 5.0, "setup.probe.centre_frequency_mhz" = 5.0 },
]

[draw]                                       # anew for each run
"scene.wall.velocity_m_s" = { normal = [5920.0, 17.0] }     # the truth; the set-up does not know it
"scene.probe.zero_offset_ns" = { uniform = [-2.0, 2.0], also = ["setup.zero.offset_ns"] }
"shot.time_shift_ns" = { uniform = [0.0, 20.0] }            # a free-running clock

[pulse]                                      # the reference pulse as calibration would learn it
learned = 128
"scene.wall.thickness_mm" = 12.5
"scene.noise.snr_db" = 40.0
"#;

/// What each key of a campaign file says.
pub const KEYS: &[(&str, &str)] = &[
    ("version", "version of the campaign file: 1"),
    ("name", "what it is called in results and tables"),
    ("about", "what it is for; any text"),
    ("seed", "a whole number; run i draws from it and i alone; default 1"),
    ("runs", "runs of each cell"),
    (
        "shots",
        "shots of each run, 1 if left out; an even number up to 512 is averaged as two rounds, whose difference tells noise, movement and interference",
    ),
    ("scene_file", "scene file, relative to this file"),
    ("setup_file", "set-up file, relative to this file"),
    ("scene", "tables of the scene, laid over the scene file; or all of it"),
    ("setup", "tables of the set-up, laid over the set-up file; or all of it"),
    (
        "shot",
        "time_shift_ns: all arrives later; wall_change_um: a thicker wall (quicker than scene.wall.thickness_mm: the echoes' spectra are kept)",
    ),
    (
        "grid",
        "axes: \"FIELD\" = [values], { from, to, steps, log, also }, { values, also }, or NAME = [tables of fields with a label]",
    ),
    (
        "draw",
        "\"FIELD\" = { uniform = [a, b] }, { log_uniform = [a, b] }, { normal = [mean, standard deviation] } or { choice = [values], weights = [..] }, each with also = [fields of the same value], within = [a, b], round = true; { remove = true } takes a table away; NAME = { choice = [tables of fields with a label] }",
    ),
    (
        "pulse",
        "learned: shots from which the reference pulse is learned; further keys: fields of the block's scene and set-up",
    ),
    (
        "calibrate",
        "each run first calibrates on blocks in its own world, as halfpulse calibrate does, and is refused as not-calibrated if that fails: blocks = [{ thickness_mm = 5.0, standard_uncertainty_mm = 0.005, FIELD = .. }, ..], each block's true thickness drawn from its uncertainty; shots of each block (16 if left out); learn = \"zero\", \"velocity\" or \"zero-and-velocity\"; further keys: fields of every block's scene, drawn for each. Blocks are of the wall's material, bare, smooth, parallel and without grain unless their fields say otherwise; shot. does not apply to them",
    ),
];

/// Most cells of a campaign.
pub const MOST_CELLS: u64 = 100_000;
/// Most runs of a campaign, all cells together: a week on 16 cores.
pub const MOST_RUNS: u64 = 1_000_000_000;
const MOST_BYTES: u64 = 1 << 20;

/// One axis of the grid.
#[derive(Clone, Debug, PartialEq)]
pub struct Axis {
    /// Dotted path, or the name of a bundle.
    pub name: String,
    /// Further fields that get the same value.
    pub also: Vec<String>,
    /// Its values.
    pub levels: Vec<Level>,
}

/// One value of an axis.
#[derive(Clone, Debug, PartialEq)]
pub enum Level {
    /// Of a field.
    Value(Value),
    /// Of several fields, some of them perhaps drawn.
    Bundle(Bundle),
}

impl Level {
    /// As tables show it.
    #[must_use]
    pub fn label(&self) -> String {
        match self {
            Self::Value(value) => draw::shown(value),
            Self::Bundle(bundle) => bundle.label.clone(),
        }
    }
}

/// A campaign that has been read.
#[derive(Clone, Debug)]
pub struct Campaign {
    /// Its name.
    pub name: String,
    /// Its seed.
    pub seed: u64,
    /// Runs of each cell.
    pub runs: u64,
    /// Shots of each run: one, or an even number that is averaged as two rounds.
    pub shots: u64,
    /// Tables `scene`, `setup` and `shot` before grid and draws.
    pub base: Table,
    /// The grid; the last axis changes first.
    pub axes: Vec<Axis>,
    /// What each run draws.
    pub draws: Vec<Draw>,
    /// The reference pulse; `None`: modelled, or the set-up's own.
    pub pulse: Option<LearnedPulse>,
    /// On which blocks each run calibrates first; `None`: the set-up stands as it is.
    pub calibration: Option<Calibration>,
    /// What the reference pulse's file of a set-up is relative to.
    pub setup_path: PathBuf,
    /// Lines for faults.
    pub places: Places,
    written: Table,
}

impl Campaign {
    /// Reads a campaign file, and the files that it names.
    ///
    /// # Errors
    /// What is wrong, with file, line and remedy. Each cell's first run is resolved: what no run can be
    /// made of is found here.
    pub fn read(path: &Path) -> Result<Self, InputError> {
        Self::read_changed(path, None, None)
    }

    /// The same with another number of runs of each cell, or another seed.
    ///
    /// # Errors
    /// As [`Campaign::read`].
    pub fn read_changed(path: &Path, runs: Option<u64>, seed: Option<u64>) -> Result<Self, InputError> {
        InputError::check_file(path, MOST_BYTES)?;
        let text = std::fs::read_to_string(path).map_err(|error| InputError::unreadable(path, &error))?;
        let campaign = Self::parse(path, &text, runs, seed)?;
        campaign.check_cells()?;
        Ok(campaign)
    }

    /// The campaign in the header of its results; `path` is what errors name.
    ///
    /// # Errors
    /// As [`Campaign::read`], without looking at the cells.
    pub fn of_results(path: &Path, text: &str) -> Result<Self, InputError> {
        Self::parse(path, text, None, None)
    }

    fn parse(path: &Path, text: &str, runs: Option<u64>, seed: Option<u64>) -> Result<Self, InputError> {
        let mut written = parse_table(path, text)?;
        let mut places = Places::default();
        places.add(path, Lines::of(text, ""));
        for key in written.keys() {
            if !KEYS.iter().any(|(name, _)| name == key) {
                let remedy = match spelling::nearest(key, KEYS.iter().map(|(name, _)| *name), 1).first() {
                    Some(near) => format!("did you mean {near}?"),
                    None => {
                        let known: Vec<&str> = KEYS.iter().map(|(name, _)| *name).collect();
                        format!("known here: {}", known.join(", "))
                    }
                };
                let shown: String = key.chars().take(60).collect();
                return Err(places.fault(key, format!("unknown key {shown}"), remedy));
            }
        }
        if written.get("version").and_then(Value::as_integer) != Some(1) {
            return Err(places.fault("version", "version is not 1", "write version = 1"));
        }
        for (key, value) in [("runs", runs), ("seed", seed)] {
            if let Some(value) = value {
                let value = i64::try_from(value).unwrap_or(i64::MAX);
                written.insert(key.to_string(), Value::Integer(value));
            }
        }
        let setup_path = match text_of(&written, &places, "setup_file")? {
            Some(name) => beside(path, &name),
            None => path.to_path_buf(),
        };
        let mut base = Table::new();
        for root in path::ROOTS {
            let mut table = Table::new();
            if let Some(name) = text_of(&written, &places, &format!("{root}_file"))? {
                let file = beside(path, &name);
                InputError::check_file(&file, MOST_BYTES)?;
                let text = std::fs::read_to_string(&file).map_err(|error| InputError::unreadable(&file, &error))?;
                table = parse_table(&file, &text)?;
                places.add(&file, Lines::of(&text, &format!("{root}.")));
            }
            path::lay_over(&mut table, &table_of(&written, &places, root)?);
            if root != "shot" {
                table.entry("version").or_insert(Value::Integer(1));
            }
            base.insert(root.to_string(), Value::Table(table));
        }
        // What was read from other files belongs to the campaign: results carry all of it.
        for root in path::ROOTS {
            written.remove(&format!("{root}_file"));
            if let Some(table) = base.get(root) {
                written.insert(root.to_string(), table.clone());
            }
        }
        let name = text_of(&written, &places, "name")?.unwrap_or_else(|| {
            let stem = path
                .file_stem()
                .map_or_else(String::new, |stem| stem.to_string_lossy().into_owned());
            stem.chars().filter(|c| !c.is_control()).collect()
        });
        written.insert("name".to_string(), Value::String(name.clone()));
        let campaign = Self {
            name,
            seed: whole_number(&written, &places, "seed", Some(1))?,
            runs: whole_number(&written, &places, "runs", None)?,
            shots: whole_number(&written, &places, "shots", Some(1))?,
            axes: axes(&written, &places)?,
            draws: draws(&written, &places, "draw", &[])?,
            pulse: LearnedPulse::parse(&written, &places)?,
            calibration: Calibration::parse(&written, &places)?,
            base,
            setup_path,
            places,
            written,
        };
        campaign.check_size()?;
        campaign.check_paths()?;
        Ok(campaign)
    }

    /// Number of cells: the product of the axes' values.
    #[must_use]
    pub fn cells(&self) -> u64 {
        self.axes.iter().map(|axis| axis.levels.len() as u64).product()
    }

    /// Runs of all cells together.
    #[must_use]
    pub fn total(&self) -> u64 {
        self.cells() * self.runs
    }

    /// The whole campaign as text, with what was read from other files: what makes two campaigns the same.
    #[must_use]
    pub fn canonical(&self) -> String {
        self.written.to_string()
    }

    /// Checksum of [`Campaign::canonical`].
    #[must_use]
    pub fn checksum(&self) -> String {
        format!("fnv1a64:{:016x}", draw::hash(&self.canonical()))
    }

    /// Names of the axes, then of what is drawn: the last columns of the results.
    #[must_use]
    pub fn columns(&self) -> Vec<String> {
        let mut columns: Vec<String> = self.axes.iter().map(|axis| axis.name.clone()).collect();
        for axis in &self.axes {
            for level in &axis.levels {
                if let Level::Bundle(bundle) = level {
                    bundle.fields.iter().for_each(|field| field.columns(&mut columns));
                }
            }
        }
        self.draws.iter().for_each(|draw| draw.columns(&mut columns));
        columns
    }

    fn check_size(&self) -> Result<(), InputError> {
        if self.runs == 0 {
            return Err(self
                .places
                .fault("runs", "runs = 0 measures nothing", "give at least 1"));
        }
        let two_rounds = self.shots.is_multiple_of(2) && (2..=2 * u64::from(MOST_SHOTS)).contains(&self.shots);
        if self.shots != 1 && !two_rounds {
            let what = format!("shots = {} make no two rounds", self.shots);
            return Err(self.places.fault("shots", what, "give 1, or an even number up to 512"));
        }
        let cells = self
            .axes
            .iter()
            .try_fold(1u64, |cells, axis| cells.checked_mul(axis.levels.len() as u64));
        let cells = cells.filter(|cells| *cells <= MOST_CELLS).ok_or_else(|| {
            let what = format!("the grid has more than {MOST_CELLS} cells");
            self.places.fault("grid", what, "draw some of the fields instead")
        })?;
        if cells.checked_mul(self.runs).is_none_or(|total| total > MOST_RUNS) {
            return Err(self.places.fault(
                "runs",
                format!("{} runs of {cells} cells are more than {MOST_RUNS}", self.runs),
                format!("give at most {} runs", MOST_RUNS / cells),
            ));
        }
        Ok(())
    }

    /// No field may be set twice: which one counts would be a guess.
    fn check_paths(&self) -> Result<(), InputError> {
        let mut seen: Vec<(&str, usize)> = Vec::new();
        let mut sets: Vec<Vec<&str>> = Vec::new();
        for axis in &self.axes {
            let mut paths: Vec<&str> = axis.also.iter().map(String::as_str).collect();
            if path::is_field(&axis.name) {
                paths.push(&axis.name);
            }
            for level in &axis.levels {
                if let Level::Bundle(bundle) = level {
                    paths.extend(bundle.fields.iter().flat_map(Draw::paths));
                }
            }
            sets.push(paths);
        }
        sets.extend(self.draws.iter().map(Draw::paths));
        for (number, paths) in sets.into_iter().enumerate() {
            for path in paths {
                if seen.iter().any(|(other, by)| *other == path && *by != number) {
                    let what = format!("{path} is set twice, by grid and draw");
                    return Err(self.places.fault(path, what, "keep one of the two"));
                }
                seen.push((path, number));
            }
        }
        Ok(())
    }

    fn check_cells(&self) -> Result<(), InputError> {
        for cell in 0..self.cells() {
            let run = cell * self.runs;
            self.resolve(run)?.check().map_err(|error| of_run(run, &error))?;
        }
        Ok(())
    }
}

/// A fault that one run has met, with its number; what the first run meets, all do.
#[must_use]
pub fn of_run(run: u64, error: &InputError) -> InputError {
    let what = match run {
        0 => error.what().to_string(),
        _ => format!("run {run}: {}", error.what()),
    };
    match (error.file(), error.line()) {
        (Some(file), Some(line)) => InputError::in_line(file, line, what, error.remedy()),
        (Some(file), None) => InputError::in_file(file, what, error.remedy()),
        _ => InputError::in_argument(what, error.remedy()),
    }
}

fn beside(path: &Path, name: &str) -> PathBuf {
    path.parent().unwrap_or(Path::new("")).join(name)
}

fn parse_table(path: &Path, text: &str) -> Result<Table, InputError> {
    text.parse::<Table>().map_err(|error| {
        let before = error.span().and_then(|span| text.as_bytes().get(..span.start));
        let line = before.map_or(1, |before| {
            1 + before.iter().filter(|&&byte| byte == b'\n').count() as u64
        });
        let what = error.message().trim_end_matches('.').to_string();
        InputError::in_line(path, line, what, "write key = value lines under [table] lines (TOML)")
    })
}

fn text_of(table: &Table, places: &Places, key: &str) -> Result<Option<String>, InputError> {
    match table.get(key) {
        None => Ok(None),
        Some(Value::String(text)) if !text.contains(char::is_control) => Ok(Some(text.clone())),
        Some(_) => Err(places.fault(key, format!("{key} is no text in one line"), "put it between quotes")),
    }
}

/// A table of the file; empty if it is not there.
pub(super) fn table_of(table: &Table, places: &Places, key: &str) -> Result<Table, InputError> {
    match table.get(key) {
        None => Ok(Table::new()),
        Some(Value::Table(inner)) => Ok(inner.clone()),
        Some(_) => Err(places.fault(key, format!("{key} is no table"), format!("write a line [{key}]"))),
    }
}

fn whole_number(table: &Table, places: &Places, key: &str, default: Option<u64>) -> Result<u64, InputError> {
    match table.get(key) {
        None => default.ok_or_else(|| places.fault(key, format!("{key} is missing"), format!("write {key} = 500"))),
        Some(value) => value
            .as_integer()
            .and_then(|value| u64::try_from(value).ok())
            .ok_or_else(|| {
                places.fault(
                    key,
                    format!("{key} is no whole number of at least 0"),
                    format!("write {key} = 500"),
                )
            }),
    }
}

/// A fault of a distribution, where it stands.
pub(super) fn at(places: &Places, table: &str, name: &str, error: DrawError) -> InputError {
    let key = if path::is_field(name) {
        name.to_string()
    } else {
        format!("{table}.{name}")
    };
    places.fault(&key, format!("{name}: {}", error.what), error.remedy)
}

fn axes(written: &Table, places: &Places) -> Result<Vec<Axis>, InputError> {
    let grid = table_of(written, places, "grid")?;
    let axis = |(name, value): (&String, &Value)| axis(name, value).map_err(|error| at(places, "grid", name, error));
    grid.iter().map(axis).collect()
}

fn axis(name: &str, value: &Value) -> Result<Axis, DrawError> {
    let refuse = |what: &str, remedy: &str| {
        Err(DrawError {
            what: what.to_string(),
            remedy: remedy.to_string(),
        })
    };
    let forms = "write [1.0, 2.0], { from = 1.0, to = 4.0, steps = 4 } or { values = [1.0, 2.0] }";
    let (values, also) = match value {
        Value::Array(values) => (values.clone(), Vec::new()),
        Value::Table(table) => {
            if let Some(key) = table
                .keys()
                .find(|key| !["from", "to", "steps", "log", "values", "also"].contains(&key.as_str()))
            {
                return refuse(&format!("unknown key {key} of an axis"), forms);
            }
            let also = draw::also(table.get("also"))?;
            match table.get("values") {
                Some(Value::Array(values)) if table.len() == 1 + usize::from(!also.is_empty()) => {
                    (values.clone(), also)
                }
                Some(_) => return refuse("values stand beside a range, or are no list", forms),
                None => (steps(table)?, also),
            }
        }
        _ => return refuse("is neither a list nor a range", forms),
    };
    if values.is_empty() {
        return refuse("has no value", forms);
    }
    let level = |(number, value): (usize, &Value)| {
        if path::is_field(name) {
            Ok(Level::Value(value.clone()))
        } else {
            Bundle::parse(value, number).map(Level::Bundle)
        }
    };
    let levels: Result<Vec<Level>, DrawError> = values.iter().enumerate().map(level).collect();
    Ok(Axis {
        name: name.to_string(),
        also,
        levels: levels?,
    })
}

/// Equal steps, or equal ratios.
fn steps(table: &Table) -> Result<Vec<Value>, DrawError> {
    let refuse = |what: &str, remedy: &str| {
        Err(DrawError {
            what: what.to_string(),
            remedy: remedy.to_string(),
        })
    };
    let number = |key: &str| table.get(key).and_then(draw::number).filter(|value| value.is_finite());
    let (Some(from), Some(to)) = (number("from"), number("to")) else {
        return refuse("a range needs from and to", "write { from = 1.0, to = 4.0, steps = 4 }");
    };
    let steps = table.get("steps").and_then(Value::as_integer).unwrap_or(0);
    if !(2..=10_000).contains(&steps) {
        return refuse("steps is no whole number from 2 to 10000", "write steps = 4");
    }
    let log = match table.get("log") {
        None => false,
        Some(Value::Boolean(log)) => *log,
        Some(_) => return refuse("log is neither true nor false", "write log = true"),
    };
    if log && !(from > 0.0 && to > 0.0) {
        return refuse("equal ratios need numbers above 0", "leave log out");
    }
    let last = (steps - 1) as f64;
    Ok((0..steps)
        .map(|step| {
            let share = step as f64 / last;
            let value = if log {
                from * libm::pow(to / from, share)
            } else {
                from + (to - from) * share
            };
            // The ends as they were written, and no dust in the last digits.
            let value = if step == 0 {
                from
            } else if step == steps - 1 {
                to
            } else {
                rounded(value)
            };
            Value::Float(value)
        })
        .collect())
}

/// To nine significant digits.
fn rounded(value: f64) -> f64 {
    format!("{value:.8e}").parse().unwrap_or(value)
}

/// The fields that a table of the file sets, but for keys of its own.
pub(super) fn draws(written: &Table, places: &Places, key: &str, reserved: &[&str]) -> Result<Vec<Draw>, InputError> {
    let table = table_of(written, places, key)?;
    table
        .iter()
        .filter(|(name, _)| !reserved.contains(&name.as_str()))
        .map(|(name, value)| Draw::parse(name, value).map_err(|error| at(places, key, name, error)))
        .collect()
}

/// All keys with what they say, for help.
#[must_use]
pub fn help() -> String {
    let mut text = String::from("Campaign file (TOML), its keys:\n");
    for (name, about) in KEYS {
        text.push_str(&format!("  {name}\n      {about}\n"));
    }
    text
}
