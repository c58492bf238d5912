//! Ways that are not straight down: core's V-path against published values and against the simulated world.

use halfpulse::path::Spreading;
use halfpulse::wall::thickness::{Timed, TrainTimes, wall};
use halfpulse::wall::uncertainty::{Source, budget};
use halfpulse::wall::way::{path_deviation, path_law};
use halfpulse::{
    AdcFormat, DelayLine, Doubt, ElementSeparation, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe,
    Record, SampleClock, Scratch, Seconds, Span, Window, Zero,
};
use halfpulse_sim::scene::{self, Layer, ProbeKind, Scene};
use halfpulse_sim::synthesise::synthesise;
use halfpulse_tests::published::Table;

const STEEL: MetresPerSecond = MetresPerSecond::new(5920.0);
const BLOCKS: DelayLine = DelayLine {
    length: Metres::new(8e-3),
    velocity: MetresPerSecond::new(2350.0),
};

fn setup(span: Span, separation_mm: f64, blocks: Option<DelayLine>) -> GaugeSetup {
    let separation = ElementSeparation::new(Metres::from_mm(separation_mm as f32), Metres::from_mm(0.1));
    let mut probe = Probe::dual_element(Hertz::from_mhz(5.0), 0.6)
        .with_couplant_film(Metres::ZERO)
        .with_separation(separation);
    probe.delay_line = blocks;
    let offset = blocks.map_or(Seconds::ZERO, |line| line.length * 2.0 / line.velocity);
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        probe,
        Material::new(STEEL, MetresPerSecond::new(10.0)),
        Zero::new(offset, Seconds::from_ns(2.0)),
        span,
        Window {
            from: offset + Seconds::from_us(0.3),
            to: offset + Seconds::from_us(75.0),
        },
    )
}

/// A first back wall at this time, with 1 ns of noise, as if its way were straight.
fn straightened(time: f64, setup: &GaugeSetup) -> TrainTimes {
    let arrival = Timed::new(Seconds::new(time as f32), Seconds::from_ns(1.0));
    TrainTimes::single(arrival).straightened(&path_law(setup, &Spreading::NONE), setup.zero.offset)
}

/// Times to thickness: 2 sqrt(d² + s²) / c, and with blocks Fermat's way by direct minimisation (SciPy 1.17), from 1 to
/// 100 mm. Half a micrometre is what an `f32` of 40 µs leaves, times what the V makes of it at 1 mm.
#[test]
fn val_v_path_times_to_thickness() {
    let span = Span::TransmissionPulseToBackWall;
    let mut cases = Vec::new();
    for row in Table::read("physics/v_path.csv").rows() {
        let setup = setup(span, 2e3 * row.number("half_spacing_m"), None);
        cases.push((setup, row.number("tof_s"), row.number("d_m")));
    }
    for row in Table::read("physics/v_path_delay.csv").rows() {
        let setup = setup(span, 6.4, Some(BLOCKS));
        cases.push((setup, row.number("tof_min_s"), row.number("d_m")));
        // The angle in the part is the law's slope.
        let straight = 2.0 * row.number("d_m") / 5920.0;
        let cosine = f64::from(path_law(&setup, &Spreading::NONE).slope(straight as f32));
        assert!(
            (cosine - row.number("theta2_deg").to_radians().cos()).abs() < 1e-5,
            "{row:?}"
        );
    }
    for (setup, time, expected) in cases {
        let found = wall(&setup, &straightened(time, &setup)).expect("a wall");
        let off = f64::from(found.get()) - expected;
        assert!(off.abs() < 0.5e-6 + 1e-7 * expected, "{expected} m: {off:e} off");
        let block = time - f64::from(path_deviation(&setup, &Spreading::NONE, Metres::new(expected as f32)).get());
        let straight = f64::from(setup.zero.offset.get()) + 2.0 * expected / 5920.0;
        assert!((block - straight).abs() < 2e-11 + 2e-7 * straight, "{expected} m");
    }
}

/// The budget's terms are the partial derivatives (JCGM 100:2008, 5.1.2), here by differences of the closed form
/// d = sqrt((c (t - t0) / 2)² - s²) in double precision.
#[test]
fn val_v_path_sensitivities() {
    let setup = setup(Span::TransmissionPulseToBackWall, 4.0, None);
    let thickness = |c: f64, time: f64, s: f64| ((c * time / 2.0).powi(2) - s * s).sqrt();
    for mm in [1.0, 2.0, 5.0, 25.0] {
        let d = mm * 1e-3;
        let time = 2.0 * f64::hypot(d, 2e-3) / 5920.0;
        let times = straightened(time, &setup);
        let budget = budget(&setup, &times, Metres::new(d as f32));
        let partial = |by: &dyn Fn(f64) -> f64, step: f64| ((by(step) - by(-step)) / (2.0 * step)).abs();
        for (source, expected) in [
            (
                Source::Timing,
                partial(&|x| thickness(5920.0, time + x, 2e-3), 1e-11) * 1e-9,
            ),
            (
                Source::Zero,
                partial(&|x| thickness(5920.0, time + x, 2e-3), 1e-11) * 2e-9,
            ),
            (
                Source::Velocity,
                partial(&|x| thickness(5920.0 + x, time, 2e-3), 0.1) * 10.0,
            ),
            (
                Source::VPath,
                partial(&|x| thickness(5920.0, time, 2e-3 + x), 1e-8) * 0.05e-3,
            ),
        ] {
            let term = budget
                .terms()
                .iter()
                .find(|term| term.source == source)
                .expect("a term");
            let found = f64::from(term.standard_uncertainty.get());
            assert!(
                (found / expected - 1.0).abs() < 2e-3,
                "{mm} mm, {source:?}: {found:e} {expected:e}"
            );
        }
    }
}

/// Simulated dual-element probes on blocks, 3 to 100 mm, 30 dB: read right within their uncertainty and without a doubt,
/// by first echo and between echoes; without the stated distance, with the doubt.
#[test]
fn val_simulated_dual_elements_read_right() {
    for (number, mm) in [3.0, 4.5, 7.0, 12.0, 30.0, 80.0].into_iter().enumerate() {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", mm);
        scene.record.samples = 4096;
        scene.record.sample_rate_mhz = 50.0;
        scene.record.first_sample_us = 6.0;
        scene.probe.kind = ProbeKind::DualElement;
        scene.dual_element = Some(scene::DualElement {
            separation_mm: 6.4,
            crosstalk_percent: 0.2,
            crosstalk_delay_ns: 0.0,
        });
        scene.delay_line = Some(scene::DelayLine {
            velocity_m_s: Some(2350.0),
            impedance_mrayl: Some(2.48),
            length_mm: Some(8.0),
            attenuation_exponent: 1.0,
            ..scene::DelayLine::default()
        });
        scene.wall = Layer {
            velocity_m_s: Some(5920.0),
            thickness_mm: mm,
            ..scene.wall
        };
        scene.noise.snr_db = Some(30.0);
        let shot = synthesise(&scene, number as u64).expect("a good scene");
        for span in [Span::TransmissionPulseToBackWall, Span::BackWallToBackWall] {
            let mut setup = setup(span, 6.4, Some(BLOCKS));
            setup.probe.element_diameter = Some(Metres::new(100.0));
            let read = |setup: GaugeSetup| {
                let mut scratch = Box::new(Scratch::<4096>::ZERO);
                let mut gauge = Gauge::new(setup, scratch.workspace()).expect("a good set-up");
                let mut clock = SampleClock::new(setup.sample_rate);
                clock.first_sample = Seconds::from_us(6.0);
                gauge.measure(&Record::new(&shot.codes, AdcFormat::signed(12), clock))
            };
            let Ok(reading) = read(setup) else {
                // The second echo of 80 mm lies inside the record, that of nothing thicker.
                panic!("{span:?}, {mm} mm: {:?}", read(setup));
            };
            let error = f64::from(reading.thickness.as_mm()) - mm;
            let expanded = f64::from(reading.expanded().as_mm());
            println!(
                "{span:?}, {mm} mm: {:+.1} um, U {:.1} um, {}",
                1e3 * error,
                1e3 * expanded,
                reading.doubts
            );
            // The distance is exact here, and so is the velocity.
            assert!(error.abs() < 0.25 * expanded, "{span:?}, {mm} mm: {error} {expanded}");
            assert!(reading.doubts.is_empty(), "{span:?}, {mm} mm: {}", reading.doubts);
            setup.probe.separation = None;
            if let Ok(reading) = read(setup) {
                assert!(reading.doubts.contains(Doubt::VPathUncorrected));
            }
        }
    }
}
