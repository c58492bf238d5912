//! Every check against the outside names its source, and there are enough of them.
//!
//! `cargo test -p halfpulse-published sources -- --nocapture` prints the list. What counts: a test `val_*` of this crate in a file that
//! uses the core, with a line `Source:` in its documentation. That none of them passes whatever the core does is what
//! `cargo mutants` is for (DEVELOPERS.md).

use std::path::Path;

/// Checks of the core against the outside that there must be.
const AT_LEAST: usize = 40;

/// A check, and the source that its documentation names.
struct Check {
    name: String,
    source: Option<String>,
}

/// The tests `val_*` of a file with their sources: what follows `Source:` up to the end of its paragraph.
fn checks_of(text: &str) -> Vec<Check> {
    let mut checks = Vec::new();
    let mut documentation: Vec<&str> = Vec::new();
    let mut is_test = false;
    for line in text.lines().map(str::trim) {
        if let Some(words) = line.strip_prefix("///") {
            documentation.push(words.trim());
        } else if line == "#[test]" {
            is_test = true;
        } else {
            if let Some(name) = line.strip_prefix("fn val_").filter(|_| is_test) {
                let start = documentation.iter().position(|words| words.starts_with("Source: "));
                let source = start.map(|start| {
                    let words = documentation[start..].iter().take_while(|words| !words.is_empty());
                    words.copied().collect::<Vec<_>>().join(" ")["Source: ".len()..].to_owned()
                });
                let end = name.find('(').unwrap_or(name.len());
                checks.push(Check {
                    name: format!("val_{}", &name[..end]),
                    source,
                });
            }
            if !line.starts_with("#[") {
                documentation.clear();
                is_test = false;
            }
        }
    }
    checks
}

#[test]
fn every_check_names_its_source() {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("checks");
    let mut files: Vec<_> = std::fs::read_dir(&folder)
        .expect("the folder of the checks")
        .map(|entry| entry.expect("an entry").path())
        .collect();
    files.sort();
    let main = std::fs::read_to_string(folder.join("main.rs")).expect("main.rs");
    let (mut counted, mut nameless) = (0, Vec::new());
    for path in files {
        let file = path.file_stem().expect("a name").to_string_lossy().into_owned();
        let text = std::fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()));
        if !file.starts_with("val_") || !text.contains("use halfpulse::") {
            continue;
        }
        assert!(
            main.contains(&format!("mod {file};")),
            "{file}.rs is not in main.rs, so nothing runs it"
        );
        for Check { name, source } in checks_of(&text) {
            match source {
                Some(source) if source.len() > 10 => {
                    counted += 1;
                    println!("{counted:3}  {file}::{name}\n     {source}");
                }
                _ => nameless.push(format!("{file}::{name}")),
            }
        }
    }
    println!("{counted} checks of the core against the outside");
    assert!(
        nameless.is_empty(),
        "without a line `/// Source: ...`: {}",
        nameless.join(", ")
    );
    assert!(counted >= AT_LEAST, "only {counted} checks, {AT_LEAST} are wanted");
}

#[test]
fn checks_without_a_source_are_noticed() {
    let text = "/// What.\n///\n/// Source: a book,\n/// second line.\n///\n/// More.\n#[test]\nfn val_a() {\n}\n\
                /// What.\n#[test]\nfn val_b() {}\nfn val_helper() {}\n/// Source: nothing.\nfn other() {}\n#[test]\nfn val_c() {}\n";
    let found = checks_of(text);
    let names: Vec<&str> = found.iter().map(|check| check.name.as_str()).collect();
    assert_eq!(names, ["val_a", "val_b", "val_c"]);
    assert_eq!(found[0].source.as_deref(), Some("a book, second line."));
    assert!(found[1].source.is_none() && found[2].source.is_none());
}
