//! What an image is made of: its sizes, and who in it calls a panic.

use object::read::elf::{ElfFile32, SectionHeader as _};
use object::{Endianness, Object, ObjectSection, ObjectSymbol, SymbolKind};
use std::collections::{BTreeMap, BTreeSet};
use std::fs;
use std::path::Path;

/// Sizes in bytes.
#[derive(Clone, Copy, Debug, Default)]
pub struct Sizes {
    /// Code, constants and the start values of variables.
    pub flash: u64,
    /// Variables; the stack is not counted.
    pub static_ram: u64,
}

/// Sums the sections that are loaded.
pub fn sizes(file: &Path) -> Result<Sizes, String> {
    let bytes = read(file)?;
    let elf = parse(file, &bytes)?;
    let mut sizes = Sizes::default();
    for section in elf.sections() {
        let header = section.elf_section_header();
        let flags = header.sh_flags(Endianness::Little);
        if flags & object::elf::SHF_ALLOC == object::elf::SectionFlags(0) {
            continue;
        }
        if header.sh_type(Endianness::Little) != object::elf::SHT_NOBITS {
            sizes.flash += section.size();
        }
        if flags & object::elf::SHF_WRITE != object::elf::SectionFlags(0) {
            sizes.static_ram += section.size();
        }
    }
    Ok(sizes)
}

/// Bytes of code by the crate that a function was written in, the largest first. What the optimiser
/// has merged into its caller counts as the caller's.
pub fn code_by_crate(file: &Path) -> Result<Vec<(String, u64)>, String> {
    let bytes = read(file)?;
    let elf = parse(file, &bytes)?;
    let mut crates = BTreeMap::<String, u64>::new();
    for symbol in elf.symbols().filter(|symbol| symbol.kind() == SymbolKind::Text) {
        let name = rustc_demangle::demangle(symbol.name().unwrap_or("?")).to_string();
        let first = name
            .trim_start_matches(['<', '&'])
            .split([':', ' ', '['])
            .next()
            .unwrap_or_default();
        *crates.entry(first.to_owned()).or_default() += symbol.size();
    }
    let mut crates: Vec<(String, u64)> = crates.into_iter().collect();
    crates.sort_by_key(|(name, size)| (std::cmp::Reverse(*size), name.clone()));
    Ok(crates)
}

/// Bytes of flash that are the core's and that of the mathematics it brings: all that is loaded, less what the image's own crates
/// and the start-up code name theirs, less `given` (files that the image only carries). What nobody names, as
/// constants and texts, counts as the core's, so that this is rather too much than too little.
pub fn flash_of_core(file: &Path, given: u64) -> Result<u64, String> {
    let flash = sizes(file)?.flash;
    let bytes = read(file)?;
    let elf = parse(file, &bytes)?;
    let mut others = given;
    for symbol in elf.symbols().filter(|symbol| symbol.size() > 0) {
        let section = symbol
            .section_index()
            .and_then(|index| elf.section_by_index(index).ok());
        let is_loaded = section.is_some_and(|section| {
            let header = section.elf_section_header();
            header.sh_flags(Endianness::Little) & object::elf::SHF_ALLOC != object::elf::SectionFlags(0)
                && header.sh_type(Endianness::Little) != object::elf::SHT_NOBITS
        });
        if is_loaded && is_of_the_image(&format!("{:#}", rustc_demangle::demangle(symbol.name().unwrap_or("?")))) {
            others += symbol.size();
        }
    }
    Ok(flash.saturating_sub(others))
}

/// Code and constants of the board, the image and their start-up code.
fn is_of_the_image(name: &str) -> bool {
    let name = name.trim_start_matches(['<', '&']);
    let own = [
        "halfpulse_mps2::",
        "halfpulse_app::",
        "measure::",
        "cortex_m",
        "defmt::",
    ];
    let start_up = [
        "Reset",
        "main",
        "HardFault",
        "DefaultPreInit",
        "DefaultHandler",
        "__INTERRUPTS",
        "__EXCEPTIONS",
        "__syscall",
    ];
    own.iter().any(|own| name.starts_with(own)) || start_up.iter().any(|start_up| name.starts_with(start_up))
}

/// Size of the largest variable whose name ends like this.
pub fn variable(file: &Path, ending: &str) -> Result<u64, String> {
    let bytes = read(file)?;
    let elf = parse(file, &bytes)?;
    let sizes = elf.symbols().filter_map(|symbol| {
        let name = format!("{:#}", rustc_demangle::demangle(symbol.name().unwrap_or("?")));
        name.ends_with(ending).then_some(symbol.size())
    });
    sizes.max().ok_or_else(|| format!("{} has no {ending}", file.display()))
}

/// Every call of a panicking function of the core library from one that is not: `caller -> callee`.
/// Empty for an image in which no panic can be reached.
pub fn panic_calls(file: &Path) -> Result<BTreeSet<String>, String> {
    let bytes = read(file)?;
    let elf = parse(file, &bytes)?;
    let mut functions = BTreeMap::new();
    for symbol in elf
        .symbols()
        .filter(|symbol| symbol.kind() == SymbolKind::Text && symbol.size() > 0)
    {
        let name = symbol.name().unwrap_or("?");
        // The lowest bit of a function's address says "Thumb".
        functions.insert(
            symbol.address() & !1,
            (symbol.size(), format!("{:#}", rustc_demangle::demangle(name))),
        );
    }
    let mut calls = BTreeSet::new();
    for (&address, (size, caller)) in functions.iter().filter(|(_, (_, name))| !is_panic(name)) {
        for section in elf.sections() {
            let Ok(Some(code)) = section.data_range(address, *size) else {
                continue;
            };
            for target in branch_targets(address, code) {
                if let Some((_, callee)) = functions.get(&target)
                    && is_panic(callee)
                {
                    calls.insert(format!("{caller} -> {callee}"));
                }
            }
        }
    }
    Ok(calls)
}

/// The core library's functions that end in a panic, by the names that its releases of 2025 and 2026 use.
fn is_panic(name: &str) -> bool {
    let name = name.trim_start_matches('<');
    let of_core = name.starts_with("core::") || name.starts_with("__rustc::");
    let panics = [
        "panicking::",
        "_fail",
        "unwrap_failed",
        "expect_failed",
        "panic_",
        "rust_begin_unwind",
    ];
    of_core && panics.iter().any(|part| name.contains(part))
}

/// Targets of the Thumb instructions BL (encoding T1) and B.W (encoding T4), Armv7-M Architecture
/// Reference Manual, A7.7.12 and A7.7.18 (from memory).
fn branch_targets(start: u64, code: &[u8]) -> Vec<u64> {
    let halves: Vec<u32> = code
        .as_chunks::<2>()
        .0
        .iter()
        .map(|&b| u32::from(u16::from_le_bytes(b)))
        .collect();
    let mut targets = Vec::new();
    let mut at = 0;
    while let (Some(&first), second) = (halves.get(at), halves.get(at + 1)) {
        let wide = first >> 11 >= 0b11101;
        if let Some(&second) = second
            && first >> 11 == 0b11110
            && second & 0x9000 == 0x9000
        {
            let sign = first >> 10 & 1;
            let (i1, i2) = (1 ^ (second >> 13 & 1) ^ sign, 1 ^ (second >> 11 & 1) ^ sign);
            let offset = sign << 24 | i1 << 23 | i2 << 22 | (first & 0x3ff) << 12 | (second & 0x7ff) << 1;
            let signed = (offset << 7).cast_signed() >> 7;
            targets.push((start + 2 * at as u64 + 4).wrapping_add_signed(i64::from(signed)));
        }
        at += if wide { 2 } else { 1 };
    }
    targets
}

fn read(file: &Path) -> Result<Vec<u8>, String> {
    fs::read(file).map_err(|error| format!("{}: {error}", file.display()))
}

fn parse<'d>(file: &Path, bytes: &'d [u8]) -> Result<ElfFile32<'d>, String> {
    ElfFile32::parse(bytes).map_err(|error| format!("{}: {error}", file.display()))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Encodings as `arm-none-eabi-as` (binutils 2.40) makes them: forward, backward, and no branch at all.
    #[test]
    fn branches_are_decoded() {
        // 8000: bl 8010    f000 f806
        assert_eq!(branch_targets(0x8000, &[0x00, 0xf0, 0x06, 0xf8]), [0x8010]);
        // 8000: nop; bl 8000   bf00 f7ff fffd
        assert_eq!(branch_targets(0x8000, &[0x00, 0xbf, 0xff, 0xf7, 0xfd, 0xff]), [0x8000]);
        // 8000: b.w 9000    f000 bffe
        assert_eq!(branch_targets(0x8000, &[0x00, 0xf0, 0xfe, 0xbf]), [0x9000]);
        // movw r0, #0xf000 holds the pattern of a branch in neither half: f24f 0000
        assert_eq!(branch_targets(0x8000, &[0x4f, 0xf2, 0x00, 0x00]), [0u64; 0]);
    }

    #[test]
    fn the_core_is_told_from_the_image() {
        for name in [
            "halfpulse::gauge::Gauge::measure",
            "<halfpulse::outcome::NoReading as core::fmt::Display>::fmt",
            "libm::math::expf",
            "memcpy",
        ] {
            assert!(!is_of_the_image(name), "{name}");
        }
        for name in [
            "halfpulse_mps2::canned::RECORDS",
            "<halfpulse_mps2::printout::Line<S>>::word",
            "measure::app::read",
            "__INTERRUPTS",
        ] {
            assert!(is_of_the_image(name), "{name}");
        }
    }

    #[test]
    fn panics_are_told_from_other_functions() {
        for name in [
            "core::panicking::panic_bounds_check",
            "core::slice::index::slice_index_fail",
            "core::option::unwrap_failed",
            "core::cell::panic_already_borrowed",
        ] {
            assert!(is_panic(name), "{name}");
        }
        for name in [
            "halfpulse::gauge::Gauge::measure",
            "core::fmt::write",
            "measure::app::planted_panic",
        ] {
            assert!(!is_panic(name), "{name}");
        }
    }
}
