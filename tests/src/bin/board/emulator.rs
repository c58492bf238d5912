//! The emulated board, never for longer than a bounded time.

use crate::Trouble;
use crate::toolchain::answer;
use std::io::Read;
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::thread;
use std::time::{Duration, Instant};

/// The program.
pub const EMULATOR: &str = "qemu-system-arm";

/// Far beyond what the records need, even on a busy machine.
const PATIENCE: Duration = Duration::from_secs(60);

/// The emulator's version.
pub fn find() -> Result<String, Trouble> {
    answer(Path::new(EMULATOR), &["--version"])
        .and_then(|text| text.lines().next().map(str::to_owned))
        .ok_or_else(|| {
            Trouble::Missing(format!(
                "no {EMULATOR}. On Debian, as root:\n  apt-get install -y --no-install-recommends qemu-system-arm\n\
                 elsewhere: your system's package of QEMU"
            ))
        })
}

/// Runs an image on the emulated Cortex-M4F board until it leaves, and returns what it wrote.
pub fn run(image: &Path) -> Result<String, Trouble> {
    run_with(image, &[])
}

/// The same with more arguments for the emulator.
pub fn run_with(image: &Path, more: &[&str]) -> Result<String, Trouble> {
    find()?;
    let mut command = Command::new(EMULATOR);
    command
        .args([
            "-machine",
            "mps2-an386",
            "-cpu",
            "cortex-m4",
            "-display",
            "none",
            "-monitor",
            "none",
            "-serial",
            "null",
        ])
        // 128 ns of emulated time for each instruction: the board's timer counts instructions.
        .args(["-icount", "shift=7"])
        .args(more)
        .args(["-semihosting-config", "enable=on,target=native", "-kernel"])
        .arg(image)
        .stdin(Stdio::null())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped());
    let mut child = command
        .spawn()
        .map_err(|error| Trouble::failed(format!("{EMULATOR} does not start: {error}")))?;
    let written = collect(child.stdout.take());
    let complaints = collect(child.stderr.take());
    let status = wait(&mut child)?;
    let text = |pipe: thread::JoinHandle<String>| pipe.join().unwrap_or_default();
    let (written, complaints) = (text(written), text(complaints));
    if status.success() {
        Ok(written)
    } else {
        Err(Trouble::failed(format!(
            "the image ended with {status}\n{written}{complaints}"
        )))
    }
}

fn collect(pipe: Option<impl Read + Send + 'static>) -> thread::JoinHandle<String> {
    thread::spawn(move || {
        let mut bytes = Vec::new();
        if let Some(mut pipe) = pipe {
            let _ = pipe.read_to_end(&mut bytes);
        }
        String::from_utf8_lossy(&bytes).into_owned()
    })
}

fn wait(child: &mut Child) -> Result<std::process::ExitStatus, Trouble> {
    let start = Instant::now();
    loop {
        match child.try_wait() {
            Ok(Some(status)) => return Ok(status),
            Ok(None) if start.elapsed() < PATIENCE => thread::sleep(Duration::from_millis(10)),
            Ok(None) => {
                let _ = child.kill();
                let _ = child.wait();
                return Err(Trouble::failed(format!(
                    "the image did not end within {} s",
                    PATIENCE.as_secs()
                )));
            }
            Err(error) => return Err(Trouble::failed(format!("{EMULATOR}: {error}"))),
        }
    }
}
