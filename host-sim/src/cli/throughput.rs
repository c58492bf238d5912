//! `halfpulse campaign --throughput`: how many records a second one core simulates and measures.

use crate::cli::written;
use crate::input_error::InputError;
use crate::measuring::HeapScratch;
use crate::scene::Scene;
use crate::synthesise::{Synthesiser, Variation};
use halfpulse::{Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Seconds, Span, Window, Zero};
use std::io::Write;
use std::time::{Duration, Instant};

/// How long each kind is timed.
const TIME: Duration = Duration::from_secs(2);

/// Six echoes in 4096 samples of 12 bits at 50 MS/s, 30 dB: the scene that `tests/oracles/throughput.py`
/// makes too.
fn six_echoes() -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    scene.record.samples = 4096;
    scene.wall.velocity_m_s = Some(5920.0);
    scene.echoes.back_walls = Some(6);
    scene.echoes.decay = Some(0.8);
    scene.noise.snr_db = Some(30.0);
    scene
}

fn setup() -> Result<GaugeSetup, InputError> {
    GaugeSetup::try_new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(5.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(80.0),
        },
    )
    .map_err(|error| InputError::in_argument(error.to_string(), "report this"))
}

/// Times both kinds on one core and prints records a second.
///
/// # Errors
/// The output cannot be written.
pub fn run(out: &mut dyn Write) -> Result<(), InputError> {
    let fault = |error: crate::scene::SceneError| InputError::in_argument(error.to_string(), "report this");
    let mut scratch = HeapScratch::new(4096);
    let mut gauge = Gauge::new(setup()?, scratch.workspace())
        .map_err(|error| InputError::in_argument(error.to_string(), "report this"))?;
    let mut maker = Synthesiser::new(&six_echoes()).map_err(fault)?;
    let fixed = rate(|number| {
        // A part of a sample, another each time.
        let variation = Variation {
            time_shift: (number % 97) as f64 / 97.0 * 20e-9,
            wall_change: 0.0,
        };
        let shot = maker.varied_shot(1, number, variation);
        gauge.measure(&shot.record()).is_ok()
    });
    let made = rate(|number| {
        let shot = maker.shot(1, number);
        shot.codes.len() == 4096
    });
    let shot = maker.shot(1, 0);
    let measured = rate(|_| gauge.measure(&shot.record()).is_ok());
    let mut scene = six_echoes();
    let different = rate(|number| {
        scene.wall.thickness_mm = 8.0 + (number % 1009) as f64 * 0.004;
        scene.wall.velocity_m_s = Some(5900.0 + (number % 41) as f64);
        match Synthesiser::new(&scene) {
            Ok(mut maker) => gauge.measure(&maker.shot(1, number).record()).is_ok(),
            Err(_) => false,
        }
    });
    let build = if cfg!(debug_assertions) {
        "a build with checks; build with --release"
    } else {
        "release build"
    };
    written(writeln!(
        out,
        "records of 4096 samples with six echoes, a second, on one core ({build}):\n\
         \x20 fixed scene, new noise and shift each, simulated and measured: {fixed:.0}\n\
         \x20 another scene each, simulated and measured: {different:.0}\n\
         \x20 of the fixed scene only simulated, without shift: {made:.0}; only measured: {measured:.0}"
    ))
}

/// Calls a second for some seconds; 0 if one fails.
fn rate(mut work: impl FnMut(u64) -> bool) -> f64 {
    let start = Instant::now();
    let mut count = 0;
    while start.elapsed() < TIME {
        if !work(count) {
            return 0.0;
        }
        count += 1;
    }
    count as f64 / start.elapsed().as_secs_f64()
}
