//! A field of scene, set-up or shot by its dotted path, such as `scene.wall.thickness_mm`.

use toml::{Table, Value};

/// The three documents whose fields a campaign may set.
pub const ROOTS: [&str; 3] = ["scene", "setup", "shot"];

/// Is this the path of a field, and not the name of a bundle of fields?
#[must_use]
pub fn is_field(path: &str) -> bool {
    let mut parts = path.split('.');
    let root = parts.next().unwrap_or_default();
    ROOTS.contains(&root) && parts.next().is_some()
}

/// Why a value cannot be put where a path points.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct NoSuchPlace {
    /// What is wrong.
    pub what: String,
}

/// Puts a value at a path; tables on the way are made, entries of lists are counted from 0.
///
/// # Errors
/// Something on the way is neither a table nor a list, or the list is shorter.
pub fn set(root: &mut Table, path: &str, value: Value) -> Result<(), NoSuchPlace> {
    let parts: Vec<&str> = path.split('.').collect();
    let Some((last, way)) = parts.split_last() else {
        return Ok(());
    };
    if parts.iter().any(|part| part.is_empty()) {
        return Err(NoSuchPlace {
            what: format!("{path} has an empty part"),
        });
    }
    let Some((first, inner)) = way.split_first() else {
        root.insert((*last).to_string(), value);
        return Ok(());
    };
    let mut here = root
        .entry((*first).to_string())
        .or_insert_with(|| Value::Table(Table::new()));
    for part in inner {
        here = step(here, part, path)?;
    }
    match here {
        Value::Table(table) => {
            table.insert((*last).to_string(), value);
        }
        other => *entry(other, last, path)? = value,
    }
    Ok(())
}

fn step<'v>(here: &'v mut Value, part: &str, path: &str) -> Result<&'v mut Value, NoSuchPlace> {
    match here {
        Value::Table(table) => Ok(table
            .entry(part.to_string())
            .or_insert_with(|| Value::Table(Table::new()))),
        other => entry(other, part, path),
    }
}

fn entry<'v>(here: &'v mut Value, part: &str, path: &str) -> Result<&'v mut Value, NoSuchPlace> {
    let Value::Array(list) = here else {
        return Err(NoSuchPlace {
            what: format!("{path}: what stands before {part} is no table"),
        });
    };
    let entries = list.len();
    part.parse::<usize>()
        .ok()
        .and_then(|number| list.get_mut(number))
        .ok_or_else(|| NoSuchPlace {
            what: format!("{path}: there is no entry {part} in a list of {entries}"),
        })
}

/// Takes away what stands at a path; nothing happens if nothing is there.
pub fn remove(root: &mut Table, path: &str) {
    let mut parts: Vec<&str> = path.split('.').collect();
    let Some(last) = parts.pop() else { return };
    let mut table = root;
    for part in parts {
        let Some(Value::Table(inner)) = table.get_mut(part) else {
            return;
        };
        table = inner;
    }
    table.remove(last);
}

/// Lays the keys of one table over those of another, tables within tables.
pub fn lay_over(under: &mut Table, over: &Table) {
    for (key, value) in over {
        match (under.get_mut(key), value) {
            (Some(Value::Table(inner)), Value::Table(value)) => lay_over(inner, value),
            _ => {
                under.insert(key.clone(), value.clone());
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn table(text: &str) -> Table {
        text.parse().unwrap()
    }

    #[test]
    fn sets_and_removes_by_path() {
        let mut root = table("a = 1\n[b]\nc = 2\nlist = [{x = 1}, {x = 2}]");
        set(&mut root, "b.c", Value::Integer(3)).unwrap();
        set(&mut root, "b.list.1.x", Value::Integer(5)).unwrap();
        set(&mut root, "new.deep.key", Value::Boolean(true)).unwrap();
        assert_eq!(
            root,
            table("a = 1\n[b]\nc = 3\nlist = [{x = 1}, {x = 5}]\n[new.deep]\nkey = true")
        );
        remove(&mut root, "new.deep");
        remove(&mut root, "not.there");
        assert_eq!(root["new"].as_table().unwrap().len(), 0);
        for path in ["b.list.2.x", "a.b.c", "b..c", ""] {
            assert!(set(&mut root, path, Value::Integer(1)).is_err(), "{path}");
        }
    }

    #[test]
    fn lays_one_table_over_another() {
        let mut root = table("a = 1\n[b]\nc = 2\nd = 3");
        lay_over(&mut root, &table("[b]\nc = 7\n[e]\nf = 1"));
        assert_eq!(root, table("a = 1\n[b]\nc = 7\nd = 3\n[e]\nf = 1"));
    }

    #[test]
    fn fields_start_with_a_document() {
        assert!(is_field("scene.wall.thickness_mm") && is_field("shot.time_shift_ns"));
        assert!(!is_field("scene") && !is_field("population") && !is_field("wall.thickness_mm"));
    }
}
