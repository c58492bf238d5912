//! The accuracy page, core/ACCURACY.md, kept true by the tests that measure its figures.
//!
//! Each block of figures there is a code block whose info line names the test that prints it. The test hands over what it
//! prints line by line and fails if the page says something else. After a change that moves a figure:
//! `HALFPULSE_WRITE_README=1 cargo test`, then look at the difference.

use std::path::Path;
use std::sync::{Mutex, PoisonError};

/// Tests run side by side, and all of them write one file.
static FILE: Mutex<()> = Mutex::new(());

/// The figures of one test.
#[must_use = "call `check` at the end"]
#[derive(Debug)]
pub struct Figures {
    test: &'static str,
    text: String,
}

impl Figures {
    /// None yet.
    pub const fn of(test: &'static str) -> Self {
        Self {
            test,
            text: String::new(),
        }
    }

    /// Prints a line and keeps it for the page.
    pub fn line(&mut self, line: &str) {
        println!("{line}");
        self.text.push_str(line.trim_end());
        self.text.push('\n');
    }

    /// The page must have a block of this test that says just this.
    ///
    /// # Panics
    /// If it says something else, or has no such block.
    pub fn check(self) {
        let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("../../core/ACCURACY.md");
        let _guard = FILE.lock().unwrap_or_else(PoisonError::into_inner);
        let page = std::fs::read_to_string(&path).expect("core/ACCURACY.md is there");
        let Some(changed) = with_block(&page, self.test, &self.text) else {
            panic!("core/ACCURACY.md has no block that begins with ```text {}", self.test);
        };
        if changed == page {
            return;
        }
        assert!(
            std::env::var_os("HALFPULSE_WRITE_README").is_some(),
            "core/ACCURACY.md is not what {} measured (printed above). To take it over: HALFPULSE_WRITE_README=1 cargo test",
            self.test
        );
        std::fs::write(&path, changed).expect("core/ACCURACY.md can be written");
    }
}

/// The page with another text in the block of a test; `None` if it has no such block.
fn with_block(page: &str, test: &str, text: &str) -> Option<String> {
    let start = format!("\n```text {test}\n");
    let from = page.find(&start)? + start.len();
    let to = from + page.get(from..)?.find("```")?;
    Some(format!("{}{text}{}", page.get(..from)?, page.get(to..)?))
}

#[cfg(test)]
mod tests {
    use super::with_block;

    #[test]
    fn a_block_is_replaced_and_nothing_else() {
        let page = "# Page\n\n```text one\nold\n```\n\n```text one_more\nkept\n```\n";
        let changed = with_block(page, "one", "new\nlines\n").expect("the block is there");
        assert_eq!(
            changed,
            "# Page\n\n```text one\nnew\nlines\n```\n\n```text one_more\nkept\n```\n"
        );
        assert_eq!(with_block(page, "two", ""), None);
    }
}
