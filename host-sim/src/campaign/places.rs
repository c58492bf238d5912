//! In which line of a campaign file, or of the files it names, each key stands.

use super::path;
use crate::input_error::InputError;
use std::path::{Path, PathBuf};
use toml::de::{DeTable, DeValue};

/// Keys with their lines.
#[derive(Clone, Debug, Default)]
pub struct Lines {
    /// Dotted path and line, in the order of the file; those that are written as a path (in grid, draw and pulse)
    /// first, because they win.
    keys: Vec<(String, u64)>,
}

fn line_of(text: &str, byte: usize) -> u64 {
    let before = text.as_bytes().get(..byte).unwrap_or(text.as_bytes());
    1 + before.iter().filter(|&&byte| byte == b'\n').count() as u64
}

impl Lines {
    /// Of a text that parses; of any other none. `prefix` goes before each path (with its dot).
    #[must_use]
    pub fn of(text: &str, prefix: &str) -> Self {
        let mut keys = Vec::new();
        if let Ok(table) = DeTable::parse(text) {
            nested(text, prefix, table.get_ref(), &mut keys);
            keys.sort_by_key(|(_, _, as_path)| !as_path);
        }
        Self {
            keys: keys.into_iter().map(|(name, line, _)| (name, line)).collect(),
        }
    }

    /// The line of a path, or of the nearest table round it.
    #[must_use]
    pub fn find(&self, path: &str) -> Option<u64> {
        let mut path = path;
        loop {
            if let Some((_, line)) = self.keys.iter().find(|(key, _)| key == path) {
                return Some(*line);
            }
            path = path.rsplit_once('.')?.0;
        }
    }

    /// The line of exactly this path.
    #[must_use]
    pub fn find_exactly(&self, path: &str) -> Option<u64> {
        self.keys.iter().find(|(key, _)| key == path).map(|(_, line)| *line)
    }

    /// The line of the first key inside a table of this path.
    #[must_use]
    pub fn find_inside(&self, path: &str) -> Option<u64> {
        let inside = |key: &str| key.strip_prefix(path).is_some_and(|rest| rest.starts_with('.'));
        self.keys.iter().find(|(key, _)| inside(key)).map(|(_, line)| *line)
    }

    /// The path of the key in a line, or of the last one before it.
    #[must_use]
    pub fn path_at(&self, line: u64) -> Option<&str> {
        let before = self.keys.iter().filter(|(_, at)| *at <= line);
        before.max_by_key(|(_, at)| *at).map(|(path, _)| path.as_str())
    }
}

/// Dotted path, line, and whether it is written as a path.
type Keys = Vec<(String, u64, bool)>;

/// A quoted key that is the path of a field counts by itself, wherever it stands.
fn nested(text: &str, prefix: &str, table: &DeTable<'_>, keys: &mut Keys) {
    for (key, value) in table {
        let name: &str = key.get_ref();
        let as_path = path::is_field(name);
        let own = if as_path {
            name.to_string()
        } else {
            format!("{prefix}{name}")
        };
        keys.push((own.clone(), line_of(text, key.span().start), as_path));
        inside(text, &format!("{own}."), value.get_ref(), keys);
    }
}

fn inside(text: &str, prefix: &str, value: &DeValue<'_>, keys: &mut Keys) {
    match value {
        DeValue::Table(table) => nested(text, prefix, table, keys),
        DeValue::Array(list) => {
            for (number, entry) in list.iter().enumerate() {
                let line = line_of(text, entry.span().start);
                match entry.get_ref() {
                    // The fields of `also`.
                    DeValue::String(path) if path::is_field(path) => keys.push((path.to_string(), line, true)),
                    other => inside(text, &format!("{prefix}{number}."), other, keys),
                }
            }
        }
        _ => {}
    }
}

/// One file with its lines.
#[derive(Clone, Debug)]
pub struct Source {
    /// Its name.
    pub path: PathBuf,
    /// Its keys.
    pub lines: Lines,
}

/// The campaign file first, then the scene and set-up files that it names.
#[derive(Clone, Debug, Default)]
pub struct Places {
    sources: Vec<Source>,
}

impl Places {
    /// Adds a file.
    pub fn add(&mut self, path: &Path, lines: Lines) {
        self.sources.push(Source {
            path: path.to_path_buf(),
            lines,
        });
    }

    /// A fault of one key, in the file that sets it.
    #[must_use]
    pub fn fault(&self, path: &str, what: impl Into<String>, remedy: impl Into<String>) -> InputError {
        let first = |find: fn(&Lines, &str) -> Option<u64>| {
            let mut sources = self.sources.iter();
            sources.find_map(|source| Some((source, find(&source.lines, path)?)))
        };
        let found = first(Lines::find_exactly)
            .or_else(|| first(Lines::find_inside))
            .or_else(|| first(Lines::find));
        match (found, self.sources.first()) {
            (Some((source, line)), _) => InputError::in_line(&source.path, line, what, remedy),
            (None, Some(source)) => InputError::in_file(&source.path, what, remedy),
            (None, None) => InputError::in_argument(what, remedy),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn finds_lines_of_fields_and_tables() {
        let text = "runs = 1\n[scene.wall]\nthickness_mm = 3\n[grid]\n\"scene.wall.x\" = [1]\nname = [\n { \"setup.a.b\" = { uniform = [1, 2], also = [\"setup.c.d\"] } },\n]\n";
        let lines = Lines::of(text, "");
        for (path, line) in [
            ("runs", 1),
            ("scene.wall.thickness_mm", 3),
            ("scene.wall.x", 5),
            ("setup.a.b", 7),
            ("setup.c.d", 7),
            ("scene.wall.unknown", 2),
        ] {
            assert_eq!(lines.find(path), Some(line), "{path}");
        }
        assert_eq!(lines.find("other"), None);
        assert_eq!(lines.path_at(3), Some("scene.wall.thickness_mm"));
    }
}
