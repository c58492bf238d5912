//! A compiler with a core library for the microcontroller, wherever this machine keeps one.

use crate::Trouble;
use std::env;
use std::fmt;
use std::fs;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};

/// Cortex-M4 and -M7 with single-precision floating point unit.
pub const CORTEX_M4F: &str = "thumbv7em-none-eabihf";
/// Cortex-M0 and -M0+, without one.
pub const CORTEX_M0_PLUS: &str = "thumbv6m-none-eabi";

/// Debian's compiler, which is not the one that rustup puts first into the path.
const SYSTEM_COMPILER: &str = "/usr/bin/rustc";

/// The words in the name of the function that the image's panic handler misses
/// (firmware-example/mps2/src/board.rs): the linker prints them.
pub const REACHABLE: &str = "a panic is reachable";

/// The features of the image.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Features {
    /// As it is meant.
    Normal,
    /// With a panic on purpose.
    PlantedPanic,
    /// With a panic handler that links.
    PanicReport,
    /// Both: a panic on purpose that links.
    PlantedPanicReport,
}

impl Features {
    fn list(self) -> &'static str {
        match self {
            Self::Normal => "",
            Self::PlantedPanic => "planted-panic",
            Self::PanicReport => "panic-report",
            Self::PlantedPanicReport => "planted-panic,panic-report",
        }
    }
}

/// How to build for one target.
#[derive(Debug)]
pub struct Toolchain {
    target: String,
    compiler: PathBuf,
    /// Where the core library's sources are, if it must be built first.
    sources: Option<PathBuf>,
    /// The linker, where the compiler brings none.
    linker: Option<PathBuf>,
}

impl fmt::Display for Toolchain {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let version = answer(&self.compiler, &["--version"]).unwrap_or_default();
        match &self.sources {
            None => write!(f, "{version}, target installed"),
            Some(sources) => write!(f, "{version}, core library built from {}", sources.display()),
        }
    }
}

impl Toolchain {
    /// Looks for an installed target first (rustup), then for the sources of a core library that
    /// belong to a compiler (Debian, or rustup's component rust-src).
    pub fn find(target: &str) -> Result<Self, Trouble> {
        let usual = env::var_os("RUSTC").map_or_else(|| PathBuf::from("rustc"), PathBuf::from);
        let compilers = [usual, PathBuf::from(SYSTEM_COMPILER)];
        let found = |compiler: &PathBuf, sources| Self {
            target: target.to_owned(),
            compiler: compiler.clone(),
            sources,
            linker: if own_linker(compiler).is_some() {
                None
            } else {
                other_linker()
            },
        };
        if let Some(compiler) = compilers.iter().find(|compiler| target_installed(compiler, target)) {
            return Ok(found(compiler, None));
        }
        for compiler in &compilers {
            if let Some(sources) = core_sources(compiler) {
                let toolchain = found(compiler, Some(sources));
                if toolchain.linker.is_none() && own_linker(compiler).is_none() {
                    return Err(Trouble::Missing(
                        "no linker for the microcontroller. On Debian:\n  apt-get install -y --no-install-recommends lld"
                            .to_owned(),
                    ));
                }
                return Ok(toolchain);
            }
        }
        Err(Trouble::Missing(format!(
            "no core library for {target}. Get it in one of two ways:\n  \
             rustup target add {target}\n  \
             apt-get install -y --no-install-recommends rustc-web rust-web-src     (Debian, as root)"
        )))
    }

    /// Cross builds the core alone.
    pub fn build_core(&self) -> Result<(), String> {
        let mut cargo = self.cargo();
        cargo.args(["--package", "halfpulse"]);
        run_cargo(cargo)
    }

    /// Builds the image `measure` and returns its file.
    pub fn build_measure(&self, features: Features) -> Result<PathBuf, String> {
        let mut cargo = self.cargo();
        cargo.args([
            "--package",
            "halfpulse-mps2",
            "--bin",
            "measure",
            "--features",
            features.list(),
        ]);
        run_cargo(cargo)?;
        let built = target_folder().join(&self.target).join("firmware/measure");
        if features == Features::Normal {
            return Ok(built);
        }
        // Other features would overwrite it: keep each under its own name.
        let kept = built.with_file_name(format!("measure-{}", features.list().replace(',', "-")));
        fs::copy(&built, &kept).map_err(|error| format!("{}: {error}", kept.display()))?;
        Ok(kept)
    }

    /// The image as it is meant; if a panic keeps it from linking, the one that links all the same, so
    /// that bits and costs can be looked at while `cargo board panics` fails.
    pub fn build_measure_anyhow(&self) -> Result<PathBuf, Trouble> {
        self.build_measure(Features::Normal)
            .or_else(|text| {
                if text.contains(REACHABLE) {
                    say!("note: {REACHABLE} (see `cargo board panics`); this image carries a panic handler");
                    self.build_measure(Features::PanicReport)
                } else {
                    Err(text)
                }
            })
            .map_err(Trouble::Failed)
    }

    /// Builds an image, or, while a panic can be reached, one that says so when it happens.
    pub fn build_anyhow(&self, binary: &str) -> Result<PathBuf, Trouble> {
        let build = |features: Features| {
            let mut cargo = self.cargo();
            cargo.args(["--package", "halfpulse-mps2", "--bin", binary]);
            cargo.args(["--features", features.list()]);
            run_cargo(cargo)?;
            Ok(target_folder().join(&self.target).join("firmware").join(binary))
        };
        build(Features::Normal)
            .or_else(|text: String| {
                if text.contains(REACHABLE) {
                    say!("note: {REACHABLE} (see `cargo board panics`); this image carries a panic handler");
                    build(Features::PanicReport)
                } else {
                    Err(text)
                }
            })
            .map_err(Trouble::Failed)
    }

    fn cargo(&self) -> Command {
        let mut cargo = Command::new(env::var_os("CARGO").unwrap_or_else(|| "cargo".into()));
        cargo.current_dir(root()).stdin(Stdio::null());
        // They belong to the host's build.
        cargo
            .env_remove("RUSTFLAGS")
            .env_remove("CARGO_ENCODED_RUSTFLAGS")
            .env_remove("CARGO_BUILD_TARGET");
        cargo.args([
            "build",
            "--quiet",
            "--locked",
            "--profile",
            "firmware",
            "--target",
            &self.target,
            "--target-dir",
        ]);
        cargo.arg(target_folder());
        cargo.env("RUSTC", &self.compiler);
        // Which log lines are compiled in: without it only errors.
        cargo.env("DEFMT_LOG", "info");
        if self.sources.is_some() {
            // Only on this command line: in a configuration file both would reach host builds too.
            cargo.arg("-Zbuild-std=core").env("RUSTC_BOOTSTRAP", "1");
        }
        if let Some(linker) = &self.linker {
            let variable = format!("CARGO_TARGET_{}_LINKER", self.target.replace('-', "_").to_uppercase());
            cargo.env(variable, linker);
        }
        cargo
    }
}

fn run_cargo(mut cargo: Command) -> Result<(), String> {
    let output = cargo
        .output()
        .map_err(|error| format!("cargo does not start: {error}"))?;
    if output.status.success() {
        Ok(())
    } else {
        Err(String::from_utf8_lossy(&output.stderr).into_owned())
    }
}

/// The folder of the workspace.
pub fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .parent()
        .unwrap_or(Path::new("."))
        .to_owned()
}

/// Cross builds have a folder of their own, so that they and host builds do not undo each other.
pub fn target_folder() -> PathBuf {
    match env::var_os("CARGO_TARGET_DIR") {
        Some(folder) => root().join(folder).join("board"),
        None => root().join("target/board"),
    }
}

/// What a program says on one question.
pub fn answer(program: &Path, arguments: &[&str]) -> Option<String> {
    let output = Command::new(program)
        .args(arguments)
        .stdin(Stdio::null())
        .output()
        .ok()?;
    output
        .status
        .success()
        .then(|| String::from_utf8_lossy(&output.stdout).trim().to_owned())
}

fn target_installed(compiler: &Path, target: &str) -> bool {
    let Some(folder) = answer(compiler, &["--print", "target-libdir", "--target", target]) else {
        return false;
    };
    fs::read_dir(folder).is_ok_and(|mut entries| {
        entries.any(|entry| entry.is_ok_and(|entry| entry.file_name().to_string_lossy().starts_with("libcore-")))
    })
}

/// Sources must belong to the compiler: another version's do not compile.
fn core_sources(compiler: &Path) -> Option<PathBuf> {
    let library = Path::new(&answer(compiler, &["--print", "sysroot"])?).join("lib/rustlib/src/rust/library");
    library.join("core/src/lib.rs").is_file().then_some(library)
}

fn own_linker(compiler: &Path) -> Option<PathBuf> {
    let libraries = answer(compiler, &["--print", "target-libdir"])?;
    let linker = Path::new(&libraries).parent()?.join("bin/rust-lld");
    linker.is_file().then_some(linker)
}

/// Any other compiler's linker will do, or the system's.
fn other_linker() -> Option<PathBuf> {
    own_linker(Path::new("rustc")).or_else(|| {
        let names = [
            "ld.lld",
            "ld.lld-22",
            "ld.lld-19",
            "ld.lld-16",
            "ld.lld-14",
            "arm-none-eabi-ld",
        ];
        let path = env::var_os("PATH")?;
        let folders: Vec<PathBuf> = env::split_paths(&path).collect();
        names
            .iter()
            .flat_map(|name| folders.iter().map(move |folder| folder.join(name)))
            .find(|file| file.is_file())
    })
}
