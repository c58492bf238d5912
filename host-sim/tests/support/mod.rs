//! What the tests of the command share: the command itself, and records made here from formulas, so
//! that neither the simulator nor the core judges itself.

#![allow(dead_code)] // Each test binary uses a part of it.
#![allow(clippy::disallowed_methods)] // No bits are compared between machines here.

pub mod small;

use std::f64::consts::{PI, TAU};
use std::path::PathBuf;
use std::process::{Child, Command, Output, Stdio};
use tempfile::TempDir;

pub const RATE_MHZ: f64 = 50.0;
pub const VELOCITY: f64 = 5920.0;

/// A folder with a set-up for a clean train, and the command run in it.
pub struct Bench {
    folder: TempDir,
}

impl Bench {
    pub fn new() -> Self {
        let bench = Self {
            folder: TempDir::new().expect("a folder for the test"),
        };
        bench.write("setup.toml", setup("back-wall-to-back-wall", 0.0, 1.0));
        bench
    }

    pub fn path(&self, name: &str) -> PathBuf {
        self.folder.path().join(name)
    }

    pub fn write(&self, name: &str, content: impl AsRef<[u8]>) {
        std::fs::write(self.path(name), content).expect("a file for the test");
    }

    pub fn read(&self, name: &str) -> String {
        std::fs::read_to_string(self.path(name)).expect("a text that the test has made")
    }

    pub fn write_shots(&self, name: &str, shots: &[Vec<i16>]) {
        let path = self.path(name);
        halfpulse_sim::record_file::write(&path, shots, RATE_MHZ * 1e6, 0.0).expect("a record for the test");
    }

    pub fn run(&self, arguments: &[&str]) -> Run {
        self.run_into(arguments, Stdio::piped())
    }

    /// `halfpulse calibrate` with these arguments, which has to work; what it says.
    pub fn calibrate(&self, arguments: &[&str]) -> String {
        let run = self.run(&[&["calibrate"], arguments].concat());
        assert_eq!(run.status, 0, "{}{}", run.out, run.errors);
        run.out
    }

    /// [`Bench::run`] with stdout going elsewhere.
    pub fn run_into(&self, arguments: &[&str], out: Stdio) -> Run {
        let output = Command::new(env!("CARGO_BIN_EXE_halfpulse"))
            .args(arguments)
            .current_dir(self.folder.path())
            .stdout(out)
            .stderr(Stdio::piped())
            .spawn()
            .and_then(Child::wait_with_output)
            .expect("the command starts");
        Run::new(&output)
    }
}

/// What came of one run.
pub struct Run {
    pub status: i32,
    pub out: String,
    pub errors: String,
}

impl Run {
    fn new(output: &Output) -> Self {
        let run = Self {
            status: output.status.code().unwrap_or(-1),
            out: String::from_utf8_lossy(&output.stdout).into_owned(),
            errors: String::from_utf8_lossy(&output.stderr).into_owned(),
        };
        assert!(!run.errors.contains("panicked"), "{}", run.errors);
        run
    }

    /// The one line of an error, after `error: `.
    pub fn error(&self) -> &str {
        assert_eq!(self.status, 1, "{} {}", self.out, self.errors);
        let mut lines = self.errors.lines().filter(|line| line.starts_with("error: "));
        let line = lines.next().expect("an error");
        assert_eq!(lines.next(), None, "{}", self.errors);
        assert!(line.contains("; "), "no remedy: {line}");
        line.trim_start_matches("error: ")
    }

    /// The JSON objects, one a line.
    pub fn json(&self) -> Vec<serde_json::Value> {
        let lines = self.out.lines();
        lines
            .map(|line| serde_json::from_str(line).expect("an object a line"))
            .collect()
    }
}

/// A set-up of a contact probe, 12 bits, without couplant film and element, so that the budget holds
/// nothing that these records do not contain.
pub fn setup(span: &str, velocity_uncertainty: f64, zero_uncertainty_ns: f64) -> String {
    format!(
        "version = 1
[record]
sample_rate_mhz = {RATE_MHZ}
first_sample_us = 0.0
bits = 12
codes = \"signed\"
[probe]
kind = \"contact\"
centre_frequency_mhz = 5.0
relative_bandwidth_percent = 60
couplant_film_um = 0.0
[material]
name = \"carbon steel\"
velocity_m_s = {VELOCITY}
velocity_standard_uncertainty_m_s = {velocity_uncertainty}
[zero]
offset_ns = 0.0
standard_uncertainty_ns = {zero_uncertainty_ns}
[measure]
span = \"{span}\"
from_us = 0.5
to_us = 60.0
coverage_factor = 2.0
"
    )
}

/// An echo train of a wall: multiples of `wall_mm` after `zero_us`, each `decay` times the one before.
#[derive(Clone, Copy)]
pub struct Train {
    pub wall_mm: f64,
    pub zero_us: f64,
    pub velocity: f64,
    pub first: f64,
    pub decay: f64,
    pub echoes: usize,
    pub noise: f64,
    pub samples: usize,
    /// Decay over rise of the envelope: 1 is the Gaussian that the gauge models.
    pub skew: f64,
    /// Phase of the carrier at the envelope's maximum.
    pub phase: f64,
    /// Amplitude of an upside-down echo at the zero: the end of a delay line; 0 for none.
    pub interface: f64,
}

impl Train {
    pub const CLEAN: Self = Self {
        wall_mm: 10.0,
        zero_us: 0.0,
        velocity: VELOCITY,
        first: 1500.0,
        decay: 0.8,
        echoes: 5,
        noise: 5.0,
        samples: 1500,
        skew: 1.0,
        phase: 0.0,
        interface: 0.0,
    };

    /// A pulse that the gauge's model does not know, and a zero of 0.4 us.
    pub const UNMODELLED: Self = Self {
        zero_us: 0.4,
        skew: 1.6,
        phase: 0.9,
        ..Self::CLEAN
    };

    /// The same train in another wall.
    pub fn of_wall(self, wall_mm: f64) -> Self {
        Self { wall_mm, ..self }
    }

    /// One shot as 12-bit codes.
    pub fn shot(&self, seed: u64) -> Vec<i16> {
        // Sequences of neighbouring seeds must not overlap: they walk in the same steps.
        let mut random = Random(seed.wrapping_mul(0xd1b5_4a32_d192_ed03));
        let trip = 2.0 * self.wall_mm * 1e-3 / self.velocity * 1e6;
        (0..self.samples)
            .map(|i| {
                let t = i as f64 / RATE_MHZ;
                let echoes = (1..=self.echoes).map(|n| {
                    let amplitude = self.first * self.decay.powi(n as i32 - 1);
                    amplitude * self.pulse(t - self.zero_us - n as f64 * trip)
                });
                let interface = -self.interface * self.pulse(t - self.zero_us);
                let value = interface + echoes.sum::<f64>() + self.noise * random.normal();
                value.round().clamp(-2048.0, 2047.0) as i16
            })
            .collect()
    }

    pub fn shots(&self, count: u64, seed: u64) -> Vec<Vec<i16>> {
        (0..count).map(|shot| self.shot(seed * 1000 + shot)).collect()
    }

    /// A Gaussian, of 60 % bandwidth at 5 MHz if it is not skewed; time in µs.
    fn pulse(&self, t: f64) -> f64 {
        let sigma = 1.175_394 / (PI * 3.0) * if t > 0.0 { self.skew } else { 1.0 };
        (-0.5 * (t / sigma).powi(2)).exp() * (TAU * 5.0 * t + self.phase).cos()
    }
}

/// SplitMix64 (Steele, Lea, Flood 2014), and normals by Box and Muller.
struct Random(u64);

impl Random {
    fn uniform(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        (((z ^ (z >> 31)) >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }

    fn normal(&mut self) -> f64 {
        (-2.0 * self.uniform().ln()).sqrt() * (TAU * self.uniform()).cos()
    }
}

/// A `.npy` file of floats, made by hand.
pub fn npy_of_floats(values: &[f32]) -> Vec<u8> {
    let mut header = format!(
        "{{'descr': '<f4', 'fortran_order': False, 'shape': ({},), }}",
        values.len()
    );
    while !(10 + header.len() + 1).is_multiple_of(64) {
        header.push(' ');
    }
    header.push('\n');
    let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
    bytes.extend((header.len() as u16).to_le_bytes());
    bytes.extend(header.as_bytes());
    bytes.extend(values.iter().flat_map(|value| value.to_le_bytes()));
    bytes
}
