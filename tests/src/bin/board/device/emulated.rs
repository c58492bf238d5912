//! A gauge in the emulator: started, spoken to, and ended whatever happens.

use crate::Trouble;
use crate::emulator::{self, EMULATOR};
use halfpulse_sim::Scene;
use halfpulse_sim::device::{MappedFile, SimulatedReceiver};
use halfpulse_sim::faults::FaultyLine;
use halfpulse_sim::link::{Conversation, SocketLine};
use std::fs;
use std::io::Read;
use std::os::unix::net::UnixListener;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::sync::atomic::{AtomicU32, Ordering};
use std::thread::{self, JoinHandle};
use std::time::{Duration, Instant};

/// Size of the board's PSRAM.
const SHARED_BYTES: u64 = 16 * 1024 * 1024;
/// For the emulator to connect, and for the gauge to start.
const STARTING: Duration = Duration::from_secs(20);
/// For the emulator to leave after the good-bye.
const LEAVING: Duration = Duration::from_secs(10);

/// Which core.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Core {
    /// Cortex-M4F.
    M4F,
    /// Code for a Cortex-M0+, on a Cortex-M3: neither has a floating point unit.
    WithoutUnit,
}

impl Core {
    /// For people.
    pub fn name(self) -> &'static str {
        match self {
            Self::M4F => "Cortex-M4F (mps2-an386)",
            Self::WithoutUnit => "code for Cortex-M0+, no floating point unit, run by a Cortex-M3 (mps2-an385)",
        }
    }

    /// For the name of a check.
    pub fn word(self) -> &'static str {
        match self {
            Self::M4F => "cortex_m4f",
            Self::WithoutUnit => "without_floating_point_unit",
        }
    }

    fn machine(self) -> [&'static str; 2] {
        match self {
            Self::M4F => ["mps2-an386,memory-backend=samples", "cortex-m4"],
            Self::WithoutUnit => ["mps2-an385,memory-backend=samples", "cortex-m3"],
        }
    }
}

/// Why there is no gauge.
#[derive(Debug)]
pub enum StartError {
    /// The emulator is missing.
    NoEmulator(Trouble),
    /// Anything else.
    Failed(String),
}

impl From<String> for StartError {
    fn from(text: String) -> Self {
        Self::Failed(text)
    }
}

/// The line to the gauge; both ways can be damaged.
pub type Line = FaultyLine<SocketLine>;

/// A gauge that runs.
pub struct EmulatedGauge {
    /// The conversation with it.
    pub conversation: Conversation<Line, SimulatedReceiver, MappedFile>,
    emulator: Running,
    log: Option<JoinHandle<Vec<u8>>>,
}

/// The emulator with its files; both end with this.
struct Running {
    child: Child,
    folder: PathBuf,
}

impl Drop for Running {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
        let _ = fs::remove_dir_all(&self.folder);
    }
}

/// A folder of this run's own, in memory where the system has such a place.
fn own_folder() -> Result<PathBuf, String> {
    static NEXT: AtomicU32 = AtomicU32::new(0);
    let memory = Path::new("/dev/shm");
    let parent = if memory.is_dir() {
        memory.to_owned()
    } else {
        std::env::temp_dir()
    };
    let name = format!(
        "halfpulse-{}-{}",
        std::process::id(),
        NEXT.fetch_add(1, Ordering::Relaxed)
    );
    let folder = parent.join(name);
    fs::create_dir(&folder).map_err(|error| format!("{}: {error}", folder.display()))?;
    Ok(folder)
}

impl EmulatedGauge {
    /// Starts the emulator with an image, connects, and introduces this end.
    pub fn start(image: &Path, core: Core) -> Result<Self, StartError> {
        emulator::find().map_err(StartError::NoEmulator)?;
        let folder = own_folder()?;
        let socket = folder.join("link");
        let shared = folder.join("samples");
        let listener = UnixListener::bind(&socket).map_err(|error| format!("{}: {error}", socket.display()))?;
        let memory =
            MappedFile::create(&shared, SHARED_BYTES).map_err(|error| format!("{}: {error}", shared.display()))?;
        let [machine, cpu] = core.machine();
        let child = Command::new(EMULATOR)
            .arg("-object")
            .arg(format!(
                "memory-backend-file,id=samples,size={SHARED_BYTES},mem-path={},share=on",
                shared.display()
            ))
            .args(["-machine", machine, "-cpu", cpu, "-display", "none", "-monitor", "none"])
            .args(["-semihosting-config", "enable=on,target=native", "-serial", "null"])
            .arg("-chardev")
            .arg(format!("socket,id=link,path={}", socket.display()))
            .args(["-serial", "chardev:link", "-kernel"])
            .arg(image)
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::inherit())
            .spawn()
            .map_err(|error| format!("{EMULATOR} does not start: {error}"))?;
        let mut emulator = Running { child, folder };
        let log = collect(emulator.child.stdout.take());
        let line = SocketLine::new(accept(&listener, &mut emulator.child)?).map_err(|error| error.to_string())?;
        let idle = SimulatedReceiver::new(Scene::contact(5.0, 60.0, "carbon steel", 10.0), 0);
        let mut conversation = Conversation::new(FaultyLine::new(line, 1), idle, memory);
        conversation.introduce(STARTING).map_err(|error| error.to_string())?;
        Ok(Self {
            conversation,
            emulator,
            log: Some(log),
        })
    }

    /// The simulator that the gauge fires at.
    pub fn front_end(&mut self) -> &mut SimulatedReceiver {
        self.conversation.front_end()
    }

    /// Says good-bye, and returns what the gauge logged.
    pub fn finish(mut self) -> Result<Vec<u8>, String> {
        self.conversation
            .send(&halfpulse_app::link::Message::Bye)
            .map_err(|_| "the line to the gauge is closed".to_owned())?;
        let start = Instant::now();
        let status = loop {
            match self.emulator.child.try_wait() {
                Ok(Some(status)) => break status,
                Ok(None) if start.elapsed() < LEAVING => thread::sleep(Duration::from_millis(5)),
                Ok(None) => return Err("the gauge did not leave after the good-bye".to_owned()),
                Err(error) => return Err(error.to_string()),
            }
        };
        let log = self.log.take().and_then(|log| log.join().ok()).unwrap_or_default();
        if status.success() {
            Ok(log)
        } else {
            Err(format!("the gauge ended with {status}"))
        }
    }
}

fn accept(listener: &UnixListener, child: &mut Child) -> Result<std::os::unix::net::UnixStream, String> {
    listener.set_nonblocking(true).map_err(|error| error.to_string())?;
    let start = Instant::now();
    loop {
        match listener.accept() {
            Ok((stream, _)) => return Ok(stream),
            Err(error) if error.kind() != std::io::ErrorKind::WouldBlock => return Err(error.to_string()),
            Err(_) if start.elapsed() > STARTING => return Err("the emulator does not connect".to_owned()),
            Err(_) => {}
        }
        if let Ok(Some(status)) = child.try_wait() {
            return Err(format!("{EMULATOR} ended with {status}"));
        }
        thread::sleep(Duration::from_millis(5));
    }
}

fn collect(pipe: Option<impl Read + Send + 'static>) -> JoinHandle<Vec<u8>> {
    thread::spawn(move || {
        let mut bytes = Vec::new();
        if let Some(mut pipe) = pipe {
            let _ = pipe.read_to_end(&mut bytes);
        }
        bytes
    })
}
