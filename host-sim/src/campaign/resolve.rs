//! Cell and run to scene and set-up.

use super::draw::Assignment;
use super::file::{Axis, Campaign, Level};
use super::path;
use super::places::Lines;
use crate::input_error::InputError;
use crate::scene::Scene;
use crate::setup_file::SetupFile;
use crate::synthesise::Variation;
use toml::{Table, Value};

/// Fields of the probe and of the receiver that the block shares with the part.
const OF_THE_PROBE: [&str; 17] = [
    "scene.probe.kind",
    "scene.probe.centre_frequency_mhz",
    "scene.probe.relative_bandwidth_percent",
    "scene.probe.attack_ns",
    "scene.probe.decay_ns",
    "scene.probe.phase_degrees",
    "scene.delay_line",
    "scene.record.sample_rate_mhz",
    "scene.record.samples",
    "scene.record.first_sample_us",
    "scene.record.bits",
    "setup.record",
    "setup.probe.kind",
    "setup.probe.centre_frequency_mhz",
    "setup.probe.relative_bandwidth_percent",
    "setup.probe.face",
    "setup.measure",
];

/// What one run measures.
#[derive(Clone, Debug)]
pub struct Resolved<'c> {
    campaign: &'c Campaign,
    /// Number of the run, from 0, in the whole campaign.
    pub run: u64,
    /// Its cell, from 0.
    pub cell: u64,
    /// Tables `scene`, `setup` and `shot`.
    pub root: Table,
    /// The same of the block on which the pulse is learned, if one is.
    pub block: Option<Table>,
    /// The same of each block on which the run calibrates first.
    pub blocks: Vec<Table>,
    /// What stands in the columns of [`Campaign::columns`]; empty if the run has no such thing.
    pub shown: Vec<String>,
}

impl Campaign {
    /// The value of each axis in a cell. The last axis changes first.
    #[must_use]
    pub fn levels(&self, cell: u64) -> Vec<(&Axis, &Level)> {
        let mut rest = cell;
        let mut levels: Vec<(&Axis, &Level)> = self
            .axes
            .iter()
            .rev()
            .filter_map(|axis| {
                let count = axis.levels.len().max(1) as u64;
                let level = axis.levels.get((rest % count) as usize)?;
                rest /= count;
                Some((axis, level))
            })
            .collect();
        levels.reverse();
        levels
    }

    /// The scene, set-up and variation of a run.
    ///
    /// # Errors
    /// A field that cannot be set, with its line.
    pub fn resolve(&self, run: u64) -> Result<Resolved<'_>, InputError> {
        let cell = run / self.runs.max(1);
        let (mut grid, mut drawn_fields) = (Vec::new(), Vec::new());
        let mut shown: Vec<(String, String)> = Vec::new();
        let levels = self.levels(cell);
        // Bundles first: a single field may then differ from its bundle.
        for (axis, level) in &levels {
            shown.push((axis.name.clone(), level.label()));
            if let Level::Bundle(bundle) = level {
                for field in &bundle.fields {
                    let list = if field.is_random() {
                        &mut drawn_fields
                    } else {
                        &mut grid
                    };
                    field.draw(self.seed, run, list, &mut shown);
                }
            }
        }
        for (axis, level) in &levels {
            if let Level::Value(value) = level {
                for path in axis.also.iter().chain([&axis.name]) {
                    grid.push(Assignment {
                        path: path.clone(),
                        value: Some(value.clone()),
                    });
                }
            }
        }
        let (single, bundles): (Vec<_>, Vec<_>) = self.draws.iter().partition(|draw| path::is_field(&draw.name));
        for draw in bundles.into_iter().chain(single) {
            draw.draw(self.seed, run, &mut drawn_fields, &mut shown);
        }
        let mut root = self.base.clone();
        self.assign(&mut root, &grid)?;
        let block = match &self.pulse {
            None => None,
            Some(pulse) => {
                let mut block = root.clone();
                let of_the_probe = |path: &str| {
                    OF_THE_PROBE.iter().any(|field| {
                        path.strip_prefix(field)
                            .is_some_and(|rest| rest.is_empty() || rest.starts_with('.'))
                    })
                };
                let probe: Vec<Assignment> = drawn_fields
                    .iter()
                    .filter(|field| of_the_probe(&field.path))
                    .cloned()
                    .collect();
                self.assign(&mut block, &probe)?;
                let mut fields = Vec::new();
                for field in &pulse.fields {
                    field.draw(self.seed, run, &mut fields, &mut Vec::new());
                }
                self.assign(&mut block, &fields)?;
                Some(block)
            }
        };
        self.assign(&mut root, &drawn_fields)?;
        let blocks = match &self.calibration {
            None => Vec::new(),
            Some(calibration) => calibration
                .fields(self.seed, run)
                .iter()
                .map(|fields| {
                    let mut block = root.clone();
                    self.assign(&mut block, fields)?;
                    Ok(block)
                })
                .collect::<Result<_, InputError>>()?,
        };
        let of_column = |column: String| {
            let found = shown.iter().find(|(name, _)| *name == column);
            found.map_or_else(String::new, |(_, value)| value.clone())
        };
        Ok(Resolved {
            campaign: self,
            run,
            cell,
            root,
            block,
            blocks,
            shown: self.columns().into_iter().map(of_column).collect(),
        })
    }

    fn assign(&self, root: &mut Table, fields: &[Assignment]) -> Result<(), InputError> {
        for field in fields {
            match &field.value {
                None => path::remove(root, &field.path),
                Some(value) => path::set(root, &field.path, value.clone()).map_err(|error| {
                    self.places
                        .fault(&field.path, error.what, "give the path of a field that is there")
                })?,
            }
        }
        Ok(())
    }

    /// The scene that stands in a resolved table.
    ///
    /// # Errors
    /// What is wrong with it, where the campaign or one of its files sets it.
    pub fn scene_of(&self, root: &Table) -> Result<Scene, InputError> {
        let table = root.get("scene").cloned().unwrap_or(Value::Table(Table::new()));
        if let Ok(scene) = table.try_into::<Scene>()
            && scene.check().is_ok()
        {
            return Ok(scene);
        }
        // Once more by way of a text, whose faults have a line, which leads to the field.
        let text = document(root, "scene");
        Scene::from_toml(&text).map_err(|error| self.fault_in(&text, "scene.", error.line, &error.what, &error.remedy))
    }

    /// The set-up that stands in a resolved table.
    ///
    /// # Errors
    /// As [`Campaign::scene_of`].
    pub fn setup_of(&self, root: &Table) -> Result<SetupFile, InputError> {
        let text = document(root, "setup");
        SetupFile::parse(&self.setup_path, &text)
            .map_err(|error| self.fault_in(&text, "setup.", error.line(), error.what(), error.remedy()))
    }

    fn fault_in(&self, text: &str, prefix: &str, line: Option<u64>, what: &str, remedy: &str) -> InputError {
        let lines = Lines::of(text, prefix);
        let root = prefix.trim_end_matches('.');
        let path = line.and_then(|line| lines.path_at(line)).unwrap_or(root);
        // Most sentences name their key.
        let named = path.rsplit('.').next().is_some_and(|key| what.contains(key));
        let what = format!("{}: {what}", if named { root } else { path });
        self.places.fault(path, what, remedy)
    }

    /// How the shot differs from its scene.
    ///
    /// # Errors
    /// A key that is not known, or no number.
    pub fn variation_of(&self, root: &Table) -> Result<Variation, InputError> {
        let mut variation = Variation::default();
        let Some(Value::Table(table)) = root.get("shot") else {
            return Ok(variation);
        };
        for (key, value) in table {
            let path = format!("shot.{key}");
            let (field, unit, most) = match key.as_str() {
                "time_shift_ns" => (&mut variation.time_shift, 1e-9, 1000.0),
                "wall_change_um" => (&mut variation.wall_change, 1e-6, 1e6),
                _ => {
                    let known = ["time_shift_ns", "wall_change_um"];
                    let near = crate::spelling::nearest(key, known, 1);
                    let remedy = match near.first() {
                        Some(near) => format!("did you mean shot.{near}?"),
                        None => format!("known here: {}", known.join(", ")),
                    };
                    return Err(self.places.fault(&path, format!("unknown field {path}"), remedy));
                }
            };
            match super::draw::number(value) {
                Some(value) if value.is_finite() && value.abs() <= most => *field = value * unit,
                _ => {
                    let what = format!("{path}: {value} is out of range");
                    return Err(self.places.fault(&path, what, format!("give -{most} to {most}")));
                }
            }
        }
        Ok(variation)
    }
}

/// One of the three tables as the text of a file.
#[must_use]
pub fn document(root: &Table, name: &str) -> String {
    root.get(name)
        .and_then(Value::as_table)
        .map_or_else(String::new, Table::to_string)
}

impl Resolved<'_> {
    /// The scene.
    ///
    /// # Errors
    /// What is wrong with it, with its line.
    pub fn scene(&self) -> Result<Scene, InputError> {
        self.campaign.scene_of(&self.root)
    }

    /// The set-up.
    ///
    /// # Errors
    /// What is wrong with it, with its line.
    pub fn setup(&self) -> Result<SetupFile, InputError> {
        self.campaign.setup_of(&self.root)
    }

    /// Can it be simulated and measured?
    ///
    /// # Errors
    /// What is wrong.
    pub fn check(&self) -> Result<(), InputError> {
        self.scene()?;
        self.setup()?;
        self.campaign.variation_of(&self.root)?;
        if let Some(block) = &self.block {
            self.campaign.scene_of(block)?;
            self.campaign.setup_of(block)?;
        }
        for block in &self.blocks {
            self.campaign.scene_of(block)?;
        }
        match &self.campaign.calibration {
            None => Ok(()),
            Some(calibration) => calibration.check(self.campaign, &self.setup()?),
        }
    }
}
