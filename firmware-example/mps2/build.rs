//! Hands the board's memory map and the start-up code's linker script to the linker.

fn main() {
    println!("cargo::rerun-if-changed=memory.x");
    // Here and not in .cargo/config.toml: another board has other scripts.
    if std::env::var("CARGO_CFG_TARGET_OS").is_ok_and(|os| os == "none") {
        let folder = std::env::var("CARGO_MANIFEST_DIR").expect("cargo sets CARGO_MANIFEST_DIR");
        println!("cargo::rustc-link-search={folder}");
        println!("cargo::rustc-link-arg-bins=-Tlink.x");
        // `measure` writes no log.
        println!("cargo::rustc-link-arg-bin=gauge=-Tdefmt.x");
    }
}
