//! The spreading of the beam, corrected: against the exact integral, in an independent model's A-scan, and in the
//! simulated world, whose beam is its own.

use halfpulse::path::diffraction::{Spreading, correlation_advance, envelope_delay};
use halfpulse::wall::thickness::{Timed, TrainTimes, wall};
use halfpulse::wall::way::path_law;
use halfpulse::{
    AdcFormat, DelayLine, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, NoReading, Probe, Reading,
    Record, SampleClock, Scratch, Seconds, Span, Window, Zero,
};
use halfpulse_sim::scene::{Layer, Scene};
use halfpulse_sim::synthesise::synthesise;
use halfpulse_tests::page::Figures;
use halfpulse_tests::published::{Table, delay_line_codes};

const STEEL: MetresPerSecond = MetresPerSecond::new(5920.0);

fn contact(diameter_m: f64, span: Span, learned_on: Option<Metres>) -> GaugeSetup {
    let probe = Probe::contact(Hertz::from_mhz(5.0), 0.6)
        .with_element_diameter(Metres::new(diameter_m as f32))
        .with_couplant_film(Metres::ZERO);
    let mut zero = Zero::new(Seconds::ZERO, Seconds::ZERO);
    zero.learned_on = learned_on;
    GaugeSetup::new(
        Hertz::from_mhz(100.0),
        probe,
        Material::new(STEEL, MetresPerSecond::ZERO),
        zero,
        span,
        Window {
            from: Seconds::from_us(0.4),
            to: Seconds::from_us(80.0),
        },
    )
}

/// Williams' exact integral (numerically, correlation and envelope of a Gaussian pulse of 5 MHz, 60 %, on steel 5920 m/s;
/// SciPy 1.17): a reading from the transmission pulse errs by 10 to 117 µm without the correction, and by less than a
/// tenth of that with it. Of the envelope, which errs the other way, a twelfth is left.
#[test]
fn val_first_back_wall_against_the_exact_integral() {
    let mut figures = Figures::of("val_first_back_wall_against_the_exact_integral");
    let table = Spreading::new(0.6);
    for row in Table::read("physics/diffraction_exact.csv").rows() {
        let (diameter, depth) = (row.number("dia_m"), row.number("d_m"));
        let setup = contact(diameter, Span::TransmissionPulseToBackWall, Some(Metres::ZERO));
        let exact = row.number("xcorr_exact_s");
        let arrival = 2.0 * depth / 5920.0 + exact;
        let times = TrainTimes::single(Timed::new(Seconds::new(arrival as f32), Seconds::ZERO));
        let straightened = times.straightened(&path_law(&setup, &table), Seconds::ZERO);
        let found = f64::from(wall(&setup, &straightened).expect("a wall").get()) - depth;
        let uncorrected = 2960.0 * exact;
        figures.line(&format!(
            "element {:.0} mm, wall {:.0} mm: {:+.2} um uncorrected, {:+.2} um corrected",
            1e3 * diameter,
            1e3 * depth,
            1e6 * uncorrected,
            1e6 * found
        ));
        assert!(uncorrected < -9e-6, "{row:?}");
        assert!(
            found.abs() < 0.1 * uncorrected.abs(),
            "{row:?}: {found:e} of {uncorrected:e}"
        );

        let s = row.number("S") as f32;
        let (advance, delay) = (correlation_advance(s, 0.6) * 200.0, envelope_delay(s, 0.6) * 200.0);
        assert!(
            (f64::from(advance) + 1e9 * exact).abs() < 0.03 * 1e9 * exact.abs(),
            "{row:?}: {advance}"
        );
        let envelope = 1e9 * row.number("env_exact_s");
        assert!(
            envelope > 0.0 && (f64::from(delay) - envelope).abs() < 0.08 * envelope,
            "{row:?}: {delay}"
        );
    }
    figures.check();
}

/// Zero on one block and another wall, and the difference of the first two back walls: the table's own columns (SciPy
/// 1.17). What is applied is the difference to what the zero holds, once.
#[test]
fn val_differences_of_the_shift() {
    let table = Spreading::new(0.6);
    let shift = |diameter: f64, depth: f64| {
        let rows = Table::read("physics/diffraction_delay.csv");
        let same = |a: f64, b: f64| (a - b).abs() < 1e-9;
        let found = rows
            .rows()
            .find(|row| same(row.number("dia_m"), diameter) && same(row.number("d_m"), depth))
            .map(|row| row.number("dt_xcorr_s"));
        found.expect("a row")
    };
    for diameter in [6e-3, 10e-3] {
        // A zero learned on 2 mm without correction holds that block's shift.
        let setup = contact(diameter, Span::TransmissionPulseToBackWall, Some(Metres::from_mm(2.0)));
        let zero = shift(diameter, 2e-3);
        for depth in [2e-3, 10e-3, 50e-3] {
            let arrival = 2.0 * depth / 5920.0 + shift(diameter, depth) - zero;
            let times = TrainTimes::single(Timed::new(Seconds::new(arrival as f32), Seconds::ZERO));
            let times = times.straightened(&path_law(&setup, &table), Seconds::ZERO);
            let found = f64::from(wall(&setup, &times).expect("a wall").get()) - depth;
            assert!(found.abs() < 0.6e-6, "{diameter} m, {depth} m: {found:e}");
        }
    }
    for row in Table::read("physics/diffraction_echo_to_echo.csv").rows() {
        let setup = contact(row.number("dia_m"), Span::BackWallToBackWall, None);
        let law = path_law(&setup, &table);
        let trip = 2.0 * row.number("d_m") / 5920.0;
        let found = f64::from(law.deviation(2.0 * trip as f32) - law.deviation(trip as f32));
        let off = found - row.number("dt_s");
        assert!(off.abs() < 0.04 * row.number("dt_s").abs(), "{row:?}: {found:e}");
    }
}

fn measure(setup: GaugeSetup, codes: &[i16], bits: u8) -> Result<Reading, NoReading> {
    let mut scratch = Box::new(Scratch::<8192>::ZERO);
    let mut gauge = Gauge::new(setup, scratch.workspace()).expect("a good set-up");
    let mut clock = SampleClock::new(setup.sample_rate);
    clock.first_sample = setup.window.from - Seconds::from_us(0.4);
    let record = Record::new(codes, AdcFormat::signed(bits), clock);
    gauge.measure(&record)
}

fn read(setup: GaugeSetup, codes: &[i16], bits: u8) -> Reading {
    measure(setup, codes, bits).expect("a reading")
}

/// The independent NumPy model's A-scan behind 8 mm of polystyrene (diffraction of the whole path, absorption, 5 µm of
/// couplant): 4.000 mm of steel, which read 3.986 and 3.980 mm without the correction. What is left is the couplant
/// (5.4 µm of film at most, from the interface) and absorption's dispersion.
#[test]
fn val_reference_a_scan_reads_4_mm() {
    for (span, most) in [(Span::InterfaceToBackWall, 3.0), (Span::BackWallToBackWall, 1.5)] {
        let probe = Probe::delay_line(Hertz::from_mhz(5.0), 0.6)
            .with_element_diameter(Metres::from_mm(6.0))
            .with_couplant_film(Metres::ZERO)
            .with_delay_line(DelayLine {
                length: Metres::from_mm(8.0),
                velocity: MetresPerSecond::new(2350.0),
            });
        let setup = GaugeSetup::new(
            Hertz::from_mhz(100.0),
            probe,
            Material::new(STEEL, MetresPerSecond::ZERO),
            Zero::new(Seconds::ZERO, Seconds::ZERO),
            span,
            Window {
                from: Seconds::from_us(6.4),
                to: Seconds::from_us(14.9),
            },
        );
        let codes = delay_line_codes();
        let reading = read(setup, &codes, 16);
        let error = (f64::from(reading.thickness.as_mm()) - 4.0) * 1e3;
        let expanded = f64::from(reading.expanded().as_mm()) * 1e3;
        println!(
            "{span:?}: {error:+.2} um, U {expanded:.2} um, doubts {}",
            reading.doubts
        );
        assert!(
            error.abs() < most && error.abs() < expanded,
            "{span:?}: {error} of {expanded}"
        );
        assert!(expanded < 8.0, "{span:?}: {expanded}");
        let mut hidden = setup;
        hidden.probe.delay_line = None;
        let uncorrected = read(hidden, &codes, 16);
        assert!(uncorrected.standard_uncertainty > reading.standard_uncertainty * 4.0);
    }
}

/// The simulated world's own beam (its factor is checked against the published one elsewhere), contact probes of 6 and
/// 10 mm on 2 to 50 mm, 50 dB: within a tenth of what the beam does, by both spans.
#[test]
fn val_simulated_beams_are_corrected() {
    let mut figures = Figures::of("val_simulated_beams_are_corrected");
    for diameter in [6.0, 10.0] {
        for (number, mm) in [3.0, 6.0, 10.0, 25.0, 50.0].into_iter().enumerate() {
            let mut scene = Scene::contact(5.0, 60.0, "carbon steel", mm);
            scene.record.samples = 8192;
            scene.record.sample_rate_mhz = 100.0;
            scene.record.bits = 16;
            scene.probe.element_diameter_mm = Some(diameter);
            scene.probe.beam_diffraction = true;
            scene.wall = Layer {
                velocity_m_s: Some(5920.0),
                thickness_mm: mm,
                ..scene.wall
            };
            scene.noise.snr_db = Some(55.0);
            let shot = synthesise(&scene, number as u64).expect("a good scene");
            for span in [Span::TransmissionPulseToBackWall, Span::BackWallToBackWall] {
                let setup = contact(1e-3 * diameter, span, Some(Metres::ZERO));
                let reading = read(setup, &shot.codes, 16);
                let error = (f64::from(reading.thickness.as_mm()) - mm) * 1e3;
                let expanded = f64::from(reading.expanded().as_mm()) * 1e3;
                let mut unknown = setup;
                unknown.probe.element_diameter = None;
                let uncorrected = read(unknown, &shot.codes, 16);
                let before = (f64::from(uncorrected.thickness.as_mm()) - mm) * 1e3;
                figures.line(&format!(
                    "{diameter} mm, wall {mm} mm, {span:?}: {before:+.2} um, corrected {error:+.2} um, U {expanded:.2} um, {}",
                    reading.doubts
                ));
                assert!(error.abs() < 0.1 * before.abs() + 0.3, "{span:?}: {error} of {before}");
                assert!(error.abs() < expanded);
                assert!(reading.doubts.is_empty(), "{}", reading.doubts);
            }
        }
    }
    figures.check();
}

/// Far away the phase is a quarter of a cycle ahead, and two half cycles of opposite sign fit an echo about as well: 0.28 mm
/// apart. With an element that is known the group lag tells them apart; sign and beam of the simulated world, 25 dB.
#[test]
fn val_far_echoes_keep_their_half_cycle() {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 60.0);
    scene.record.samples = 4096;
    scene.record.sample_rate_mhz = 50.0;
    scene.probe.element_diameter_mm = Some(6.0);
    scene.probe.beam_diffraction = true;
    scene.wall = Layer {
        velocity_m_s: Some(5920.0),
        thickness_mm: 60.0,
        ..scene.wall
    };
    scene.noise.snr_db = Some(25.0);
    let mut worst = 0f64;
    let (mut refused, mut flipped) = (0, 0);
    for seed in 0..60 {
        let shot = synthesise(&scene, seed).expect("a good scene");
        let mut setup = contact(6e-3, Span::TransmissionPulseToBackWall, Some(Metres::ZERO));
        setup.sample_rate = Hertz::from_mhz(50.0);
        match measure(setup, &shot.codes, scene.record.bits) {
            Ok(reading) => worst = worst.max((f64::from(reading.thickness.as_mm()) - 60.0).abs()),
            Err(_) => refused += 1,
        }
        setup.probe.element_diameter = None;
        // Refused, or a quarter of a wavelength off.
        flipped += u32::from(match measure(setup, &shot.codes, scene.record.bits) {
            Ok(uncorrected) => f64::from(uncorrected.thickness.as_mm()) > 60.05,
            Err(_) => true,
        });
    }
    println!(
        "worst of 60: {:.1} um; refused or on the other half cycle without a known element: {flipped}",
        1e3 * worst
    );
    assert!(worst < 0.02 && refused <= 2, "{worst} mm, {refused} refused");
    assert!(flipped > 3, "{flipped}: the scene does not try it");
}
