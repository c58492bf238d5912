//! A small campaign, and the command run on it.

use super::Bench;

/// Three cells of small records: fixed scenes, drawn scenes, a bundle with a draw of its own.
pub const SMALL: &str = r#"version = 1
name = "small"
seed = 5
runs = 4
[scene]
record = { sample_rate_mhz = 50.0, samples = 1024 }
probe = { kind = "contact", centre_frequency_mhz = 5.0, relative_bandwidth_percent = 60.0 }
wall = { material = "carbon steel", velocity_m_s = 5920.0, thickness_mm = 8.0 }
noise = { snr_db = 30.0 }
[setup]
record = { sample_rate_mhz = 50.0, bits = 12 }
probe = { kind = "contact", centre_frequency_mhz = 5.0, relative_bandwidth_percent = 60.0, element_diameter_mm = 6.0 }
material = { velocity_m_s = 5920.0, velocity_standard_uncertainty_m_s = 6.0 }
zero = { offset_ns = 0.0, standard_uncertainty_ns = 1.0 }
measure = { span = "back-wall-to-back-wall", from_us = 0.5 }
[grid]
walls = [
  { label = "fixed", "scene.wall.thickness_mm" = 8.0 },
  { label = "drawn, \"thin\"", "scene.wall.thickness_mm" = { log_uniform = [4.0, 12.0] } },
  { label = "moving", "shot.wall_change_um" = { uniform = [-50.0, 50.0] }, "shot.time_shift_ns" = { uniform = [0.0, 20.0] } },
]
[draw]
"setup.zero.offset_ns" = { normal = [0.0, 1.0], within = [-3.0, 3.0] }
"#;

/// A folder with that campaign in it.
pub fn bench() -> Bench {
    let bench = Bench::new();
    bench.write("small.toml", SMALL);
    bench
}

/// What the command writes; it must not fail.
pub fn done(bench: &Bench, arguments: &[&str]) -> String {
    let run = bench.run(arguments);
    assert_eq!(run.status, 0, "{arguments:?}: {}", run.errors);
    run.out
}

/// The one line of the error.
pub fn failed(bench: &Bench, arguments: &[&str]) -> String {
    bench.run(arguments).error().to_string()
}
