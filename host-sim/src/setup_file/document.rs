//! A TOML file whose every fault can name its line.

use super::keys;
use crate::input_error::InputError;
use crate::spelling::nearest;
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use toml::Spanned;
use toml::de::{DeTable, DeValue};

/// Where each key stands, for faults that are found later.
#[derive(Clone, Debug)]
pub struct Place {
    path: PathBuf,
    lines: BTreeMap<(&'static str, &'static str), u64>,
}

impl Place {
    /// A file that has not been read.
    pub fn without_lines(path: &Path) -> Self {
        Self {
            path: path.to_path_buf(),
            lines: BTreeMap::new(),
        }
    }

    /// The file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// A fault of one key; of its table or of the file if the key is not there.
    pub fn fault(&self, table: &'static str, name: &'static str, what: &str, remedy: &str) -> InputError {
        let line = self.lines.get(&(table, name)).or_else(|| self.lines.get(&(table, "")));
        let what = format!("{}{what}", label(table, name));
        match line {
            Some(&line) => InputError::in_line(&self.path, line, what, remedy),
            None => InputError::in_file(&self.path, what, remedy),
        }
    }
}

fn label(table: &str, name: &str) -> String {
    if table.is_empty() {
        format!("{name}: ")
    } else {
        format!("[{table}] {name}: ")
    }
}

/// A parsed file that holds only known tables and keys.
pub struct Document<'t> {
    pub place: Place,
    values: BTreeMap<(&'static str, &'static str), DeValue<'t>>,
    tables: Vec<&'static str>,
}

impl<'t> Document<'t> {
    /// Parses the text and refuses what is not known.
    pub fn parse(path: &Path, text: &'t str) -> Result<Self, InputError> {
        let line_of = |offset: usize| {
            let before = text.as_bytes().get(..offset).unwrap_or(text.as_bytes());
            before.iter().filter(|byte| **byte == b'\n').count() as u64 + 1
        };
        let top = DeTable::parse(text).map_err(|error| {
            let line = error.span().map_or(1, |span| line_of(span.start));
            InputError::in_line(
                path,
                line,
                error.message().trim_end_matches('.'),
                "write key = value lines under [table] lines (TOML)",
            )
        })?;
        let mut document = Self {
            place: Place::without_lines(path),
            values: BTreeMap::new(),
            tables: Vec::new(),
        };
        for (name, value) in top.into_inner() {
            let line = line_of(name.span().start);
            let written = name.into_inner();
            let inner = match value.into_inner() {
                DeValue::Table(inner) => inner,
                value => {
                    document.add("", &written, line, value)?;
                    continue;
                }
            };
            let known = keys::tables().find(|table| *table == written);
            let Some(table) = known else {
                let known = keys::tables().filter(|table| !table.is_empty());
                return Err(unknown(path, line, &format!("table [{written}]"), &written, known));
            };
            document.tables.push(table);
            document.place.lines.insert((table, ""), line);
            for (name, value) in inner {
                let line = line_of(Spanned::span(&name).start);
                document.add(table, &name.into_inner(), line, value.into_inner())?;
            }
        }
        Ok(document)
    }

    fn add(&mut self, table: &'static str, name: &str, line: u64, value: DeValue<'t>) -> Result<(), InputError> {
        let Some(key) = keys::keys_of(table).find(|key| key.name == name) else {
            let known = keys::keys_of(table).map(|key| key.name);
            let what = if table.is_empty() {
                format!("key {name}")
            } else {
                format!("key {name} in [{table}]")
            };
            return Err(unknown(&self.place.path, line, &what, name, known));
        };
        self.place.lines.insert((table, key.name), line);
        self.values.insert((table, key.name), value);
        Ok(())
    }

    /// Is this table there?
    pub fn has_table(&self, table: &str) -> bool {
        self.tables.contains(&table)
    }

    /// A number, whole or not.
    pub fn number(&self, table: &'static str, name: &'static str) -> Result<Option<f64>, InputError> {
        self.values
            .get(&(table, name))
            .map(|value| {
                as_number(value).ok_or_else(|| {
                    self.place
                        .fault(table, name, "is not a number", "write a number without quotes or unit")
                })
            })
            .transpose()
    }

    /// A number that must be there.
    pub fn needed_number(&self, table: &'static str, name: &'static str) -> Result<f64, InputError> {
        self.number(table, name)?.ok_or_else(|| self.missing(table, name))
    }

    /// A whole number from 0 to 255.
    pub fn small_integer(&self, table: &'static str, name: &'static str) -> Result<Option<u8>, InputError> {
        self.values
            .get(&(table, name))
            .map(|value| {
                let integer = value.as_integer();
                let parsed = integer.and_then(|i| u8::from_str_radix(i.as_str(), i.radix()).ok());
                parsed.ok_or_else(|| {
                    self.place
                        .fault(table, name, "is not a small whole number", about(table, name))
                })
            })
            .transpose()
    }

    /// A list of numbers.
    pub fn numbers(&self, table: &'static str, name: &'static str) -> Result<Vec<f64>, InputError> {
        let Some(value) = self.values.get(&(table, name)) else {
            return Ok(Vec::new());
        };
        let list = value
            .as_array()
            .and_then(|array| array.iter().map(|v| as_number(v.get_ref())).collect());
        list.ok_or_else(|| {
            self.place
                .fault(table, name, "is not a list of numbers", "write it like [5.0, 25.0]")
        })
    }

    /// A text in quotes.
    pub fn text(&self, table: &'static str, name: &'static str) -> Result<Option<String>, InputError> {
        self.values
            .get(&(table, name))
            .map(|value| {
                value
                    .as_str()
                    .map(str::to_string)
                    .ok_or_else(|| self.place.fault(table, name, "is not a text", "put it between quotes"))
            })
            .transpose()
    }

    /// One of some words.
    pub fn word<T: Copy>(
        &self,
        table: &'static str,
        name: &'static str,
        words: &[(&'static str, T)],
    ) -> Result<Option<T>, InputError> {
        let Some(text) = self.text(table, name)? else {
            return Ok(None);
        };
        if let Some((_, value)) = words.iter().find(|(word, _)| *word == text) {
            return Ok(Some(*value));
        }
        let choices: Vec<&str> = words.iter().map(|(word, _)| *word).collect();
        let shown: String = text.chars().take(40).collect();
        let what = match nearest(&text, choices.iter().copied(), 1).first() {
            Some(near) => format!("\"{shown}\" is not known, \"{near}\" is"),
            None => format!("\"{shown}\" is not known"),
        };
        Err(self
            .place
            .fault(table, name, &what, &format!("write one of: {}", choices.join(", "))))
    }

    /// A needed key that is not there.
    pub fn missing(&self, table: &'static str, name: &'static str) -> InputError {
        self.place.fault(
            table,
            name,
            "is missing",
            &format!("add {name}: {}", about(table, name)),
        )
    }
}

fn about(table: &str, name: &str) -> &'static str {
    keys::keys_of(table)
        .find(|key| key.name == name)
        .map_or("", |key| key.about)
}

fn as_number(value: &DeValue<'_>) -> Option<f64> {
    if let Some(float) = value.as_float() {
        return float.as_str().parse().ok();
    }
    let integer = value.as_integer()?;
    i64::from_str_radix(integer.as_str(), integer.radix())
        .ok()
        .map(|i| i as f64)
}

fn unknown<'k>(path: &Path, line: u64, what: &str, name: &str, known: impl Iterator<Item = &'k str>) -> InputError {
    let shown: String = what.chars().take(80).collect();
    let known: Vec<&str> = known.collect();
    let remedy = match nearest(name, known.iter().copied(), 1).first() {
        Some(near) => format!("did you mean {near}?"),
        None => format!("known here: {}", known.join(", ")),
    };
    InputError::in_line(path, line, format!("unknown {shown}"), remedy)
}
