//! No panic can be reached in the image, and the check that says so can fail.
//!
//! The image's panic handler calls a function that does not exist: if the optimiser cannot prove
//! every panic away, the image does not link.

use crate::toolchain::{CORTEX_M4F, Features, REACHABLE, Toolchain};
use crate::{Checks, Trouble, image};

pub fn run(checks: &mut Checks) -> Result<(), Trouble> {
    let toolchain = Toolchain::find(CORTEX_M4F)?;
    checks.check("no_panic_can_be_reached", no_panic(&toolchain));
    checks.check("no_panic_in_the_whole_gauge", no_panic_in_the_gauge(&toolchain));
    checks.check("a_planted_panic_does_not_link", planted_panic_does_not_link(&toolchain));
    checks.check("a_planted_panic_is_traced", planted_panic_is_traced(&toolchain));
    Ok(())
}

fn no_panic(toolchain: &Toolchain) -> Result<String, String> {
    match toolchain.build_measure(Features::Normal) {
        Ok(file) => {
            let calls = image::panic_calls(&file)?;
            if calls.is_empty() {
                Ok("it links, and no function calls a panicking one".to_owned())
            } else {
                Err(list(calls))
            }
        }
        Err(text) if text.contains(REACHABLE) => {
            let file = toolchain.build_measure(Features::PanicReport)?;
            Err(format!("panics can be reached:\n{}", list(image::panic_calls(&file)?)))
        }
        Err(text) => Err(text),
    }
}

/// The application with its link and its log: it takes bytes from outside, and must not fall over them.
fn no_panic_in_the_gauge(toolchain: &Toolchain) -> Result<String, String> {
    let file = toolchain
        .build_anyhow("gauge")
        .map_err(|trouble| format!("{trouble:?}"))?;
    let calls = image::panic_calls(&file)?;
    if calls.is_empty() {
        Ok("it links, and no function calls a panicking one".to_owned())
    } else {
        Err(list(calls))
    }
}

fn planted_panic_does_not_link(toolchain: &Toolchain) -> Result<String, String> {
    match toolchain.build_measure(Features::PlantedPanic) {
        Ok(_) => Err("an image with a planted panic was linked: the check proves nothing".to_owned()),
        Err(text) if text.contains(REACHABLE) => Ok("the linker refuses it".to_owned()),
        Err(text) => Err(text),
    }
}

fn planted_panic_is_traced(toolchain: &Toolchain) -> Result<String, String> {
    let calls = image::panic_calls(&toolchain.build_measure(Features::PlantedPanicReport)?)?;
    if calls.iter().any(|call| call.contains("panic_bounds_check")) {
        Ok(list(calls))
    } else {
        Err(format!(
            "the planted panic is not among the calls that were found:\n{}",
            list(calls)
        ))
    }
}

fn list(calls: impl IntoIterator<Item = String>) -> String {
    calls.into_iter().collect::<Vec<_>>().join("\n")
}
