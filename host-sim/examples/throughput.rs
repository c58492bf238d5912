//! Prints how many records of 4096 samples one core simulates and measures in a second:
//!
//!     cargo run --release -p halfpulse-sim --example throughput
//!
//! With a word behind `--`, only the lines that contain it. Six back-wall echoes of 10 mm of steel, 5 MHz, 60 %,
//! 50 MS/s, 12 bits, 30 dB. First one scene with new noise and a shift by a part of a sample in every shot; then
//! another scene in every shot, plain and with everything that a wall can have.
//!
//! Refusals there are no fault of this program. With a lasting pulse (attack and decay) the modelled pulse of the set-up
//! does not fit; film, roughness and beam turn the echoes' phase, so that a wall half a cycle thicker explains
//! them about as well as the right one.

use halfpulse::{
    Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Scratch, Seconds, Span, Window, Zero,
};
use halfpulse_sim::scene::{Couplant, Pit, Scene};
use halfpulse_sim::{Synthesiser, Variation, synthesise};
use std::time::{Duration, Instant};

const TIME: Duration = Duration::from_secs(2);

fn scene() -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    scene.record.samples = 4096;
    scene.noise.snr_db = Some(30.0);
    scene.echoes.back_walls = Some(6);
    scene
}

fn setup() -> GaugeSetup {
    GaugeSetup::try_new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(5.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(1.0),
            to: Seconds::from_us(80.0),
        },
    )
    .expect("a good set-up")
}

/// Time that this program has had a core for itself, where the system tells (Linux); else what a clock
/// shows, which is fair on an idle machine only.
fn core_time(start: Instant) -> Duration {
    let told = std::fs::read_to_string("/proc/self/schedstat").ok();
    let nanoseconds = told.and_then(|text| text.split_whitespace().next()?.parse().ok());
    nanoseconds.map_or_else(|| start.elapsed(), Duration::from_nanos)
}

/// Runs `shot` until the time is over; prints the rate, and how many shots gave a reading.
fn run(name: &str, mut shot: impl FnMut(u64) -> bool) {
    if std::env::args().nth(1).is_some_and(|word| !name.contains(&word)) {
        return;
    }
    let start = Instant::now();
    let before = core_time(start);
    let (mut shots, mut readings) = (0u64, 0u64);
    while start.elapsed() < TIME {
        readings += u64::from(shot(shots));
        shots += 1;
    }
    let rate = shots as f64 / (core_time(start) - before).as_secs_f64();
    println!("{name:<58}{rate:>8.0} records a second, {readings} of {shots} read");
}

fn main() {
    let mut scratch = Box::new(Scratch::<4096>::ZERO);
    let mut gauge = Gauge::new(setup(), scratch.workspace()).expect("a good set-up");
    let mut maker = Synthesiser::new(&scene()).expect("a good scene");
    run("measured only, the same record", {
        let record = maker.shot(1, 0);
        let gauge = &mut gauge;
        move |_| gauge.measure(&record.record()).is_ok()
    });
    run("simulated only, new noise", |shot| {
        maker.shot(1, shot).codes[100] < 2047
    });
    let part_of_a_sample = |shot: u64| Variation {
        time_shift: (shot % 97) as f64 * 2e-10,
        ..Variation::default()
    };
    run("simulated only, new noise and shift", |shot| {
        maker.varied_shot(1, shot, part_of_a_sample(shot)).codes[100] < 2047
    });
    run("same scene, new noise and shift, measured", |shot| {
        let made = maker.varied_shot(1, shot, part_of_a_sample(shot));
        gauge.measure(&made.record()).is_ok()
    });
    run("another wall in every shot, measured", |shot| {
        let mut scene = scene();
        scene.wall.thickness_mm = 6.0 + (shot % 991) as f64 * 0.01;
        let made = synthesise(&scene, shot).expect("a good scene");
        gauge.measure(&made.record()).is_ok()
    });
    run("... with attack and decay", |shot| {
        let mut scene = scene();
        scene.probe.relative_bandwidth_percent = None;
        (scene.probe.attack_ns, scene.probe.decay_ns) = (Some(180.0), Some(360.0));
        scene.wall.thickness_mm = 6.0 + (shot % 991) as f64 * 0.01;
        let made = synthesise(&scene, shot).expect("a good scene");
        gauge.measure(&made.record()).is_ok()
    });
    run("... with film, losses, roughness, pit and beam", |shot| {
        let mut scene = scene();
        scene.wall.thickness_mm = 6.0 + (shot % 991) as f64 * 0.01;
        scene.wall.attenuation_db_per_m = 20.0;
        scene.wall.attenuation_exponent = 2.0;
        scene.probe.element_diameter_mm = Some(6.0);
        scene.probe.beam_diffraction = true;
        scene.probe.face_impedance_mrayl = Some(8.0);
        scene.couplant = Some(Couplant {
            material: Some("glycerine".into()),
            film_um: 5.0,
            ..Couplant::default()
        });
        scene.back.roughness_um = 20.0;
        scene.pit = Some(Pit {
            remaining_mm: 4.0,
            area_percent: 15.0,
        });
        let made = synthesise(&scene, shot).expect("a good scene");
        gauge.measure(&made.record()).is_ok()
    });
}
