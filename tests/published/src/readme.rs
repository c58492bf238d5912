//! The table of figures in README.md, kept true by the tests that measure them.
//!
//! Every row is written by one test, which then checks that README says just that. After a change that
//! moves a figure: `HALFPULSE_WRITE_README=1 cargo test`, then look at the difference.

use std::path::Path;
use std::sync::{Mutex, PoisonError};

/// Tests run side by side, and all of them write one file.
static FILE: Mutex<()> = Mutex::new(());

/// States a figure: README's row of this label must have this value and name this test.
///
/// # Panics
/// If README says something else, or has no such row.
pub fn figure(label: &str, value: &str, test: &str) {
    println!("{label}: {value}");
    row(label, value, test, true);
}

/// The same for a figure that depends on the compiler's version: written when asked for, never compared.
///
/// # Panics
/// If README has no such row.
pub fn figure_of_this_compiler(label: &str, value: &str, command: &str) {
    row(label, value, command, false);
}

fn row(label: &str, value: &str, test: &str, compare: bool) {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("../../README.md");
    let _guard = FILE.lock().unwrap_or_else(PoisonError::into_inner);
    let text = std::fs::read_to_string(&path).expect("README.md is there");
    let wanted = format!("| {label} | {value} | `{test}` |");
    let start = format!("| {label} |");
    let found = text.lines().find(|line| line.starts_with(&start)).unwrap_or_else(|| {
        panic!("README.md has no row for this figure. Add the line\n{wanted}");
    });
    if found == wanted {
        return;
    }
    let write = std::env::var_os("HALFPULSE_WRITE_README").is_some();
    if !write && !compare {
        return;
    }
    assert!(
        write,
        "README.md is not what was measured.\nit says   {found}\nmeasured  {wanted}\nTo take it over: HALFPULSE_WRITE_README=1 cargo test"
    );
    std::fs::write(&path, text.replace(found, &wanted)).expect("README.md can be written");
}
