//! Coating and wall through it from one record, against the simulated world: with the coating's velocity known and not,
//! with its front seen and hidden in the dead zone, and where its reverberations run into the back walls.

use halfpulse::{
    Coating, Doubt, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, ProbeFace, Reading, Scratch,
    Seconds, Span, Window, Zero,
};
use halfpulse_sim::front_end::{Purpose, Random};
use halfpulse_sim::scene::{DelayLine, Layer, ProbeKind, Scene};
use halfpulse_sim::synthesise::synthesise;

/// Velocities of paints and epoxies: an alkyd paint 2300, epoxies 2600 and 2800 m/s (from memory, of tables after
/// Selfridge, "Approximate material properties in isotropic materials", IEEE Transactions SU-32, 1985).
const PAINTS: [f64; 3] = [2300.0, 2600.0, 2800.0];
/// What nobody who paints knows better: 5 % (common practice).
const SPREAD: f64 = 0.05;

/// How a coated part is looked at.
#[derive(Clone, Copy, Debug)]
enum Way {
    /// Through 15 mm of polystyrene: the coating's front shows.
    DelayLine,
    /// In contact with a face whose impedance is near the paint's: its front lies in the dead zone.
    Contact,
    /// In contact with a hard face, which turns the reverberations of the coating back into it.
    Hard,
}

type MakeProbe = fn(Hertz, f32) -> Probe;

/// One coated part, and what a gauge is told.
struct Painted {
    scene: Scene,
    setup: GaugeSetup,
    coating_mm: f64,
    round_trip_ns: f64,
}

fn painted(way: Way, random: &mut Random, thicknesses: (f64, f64)) -> Painted {
    let mut between = |low: f64, high: f64| low + (high - low) * random.uniform();
    let (frequency, rate) = (10.0, 100.0);
    let wall = between(4.0, 12.0);
    let coating_mm = between(thicknesses.0, thicknesses.1);
    let mut scene = Scene::contact(frequency, 60.0, "carbon steel", wall);
    scene.wall.velocity_m_s = Some(5920.0);
    scene.record.sample_rate_mhz = rate;
    scene.record.samples = 4096;
    scene.record.bits = 12;
    scene.noise.snr_db = Some(between(30.0, 40.0));
    let stated = PAINTS[(between(0.0, 3.0) as usize).min(2)];
    let true_zero = between(-2.0, 2.0);
    scene.probe.zero_offset_ns = true_zero;
    let velocity = stated * (1.0 + SPREAD * random.normal());
    scene.coating = Some(Layer {
        velocity_m_s: Some(velocity),
        thickness_mm: coating_mm,
        attenuation_db_per_m: 200.0,
        ..Scene::contact(frequency, 60.0, "epoxy", 1.0).wall
    });
    let (kind, face, window) = match way {
        Way::DelayLine => {
            scene.probe.kind = ProbeKind::DelayLine;
            scene.delay_line = Some(DelayLine {
                material: Some("polystyrene".into()),
                length_mm: Some(15.0),
                attenuation_exponent: 1.0,
                ..DelayLine::default()
            });
            scene.record.first_sample_us = 10.0;
            scene.record.samples = 1600;
            scene.record.first_back_wall_percent = Some(12.0);
            (Probe::delay_line as MakeProbe, ProbeFace::Plastic, (11.0, 25.0))
        }
        Way::Contact => {
            scene.probe.face_impedance_mrayl = Some(3.5);
            (Probe::contact as MakeProbe, ProbeFace::Plastic, (1.0, 40.0))
        }
        Way::Hard => {
            scene.probe.face_impedance_mrayl = Some(38.5);
            (Probe::contact as MakeProbe, ProbeFace::Hard, (1.0, 40.0))
        }
    };
    let probe = kind(Hertz::from_mhz(frequency as f32), 0.6);
    let setup = GaugeSetup::new(
        Hertz::from_mhz(rate as f32),
        probe
            .with_element_diameter(Metres::new(100.0))
            .with_couplant_film(Metres::ZERO)
            .with_face(face),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::ZERO),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.2)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(window.0),
            to: Seconds::from_us(window.1),
        },
    )
    .with_coating(Coating::new(
        MetresPerSecond::new(stated as f32),
        MetresPerSecond::new((SPREAD * stated) as f32),
    ));
    Painted {
        scene,
        setup,
        coating_mm,
        round_trip_ns: 2e6 * coating_mm / velocity,
    }
}

/// What came of many parts. Shares are of the undoubted readings that show a coating.
#[derive(Debug, Default)]
struct Tally {
    parts: u32,
    refused: u32,
    doubted: u32,
    overlapping: u32,
    coatings: u32,
    wall_outside: u32,
    coating_outside: u32,
    time_outside: u32,
    undoubted_gross: u32,
}

fn read(part: &Painted, setup: GaugeSetup, seed: u64) -> Option<Reading> {
    let shot = synthesise(&part.scene, seed).expect("the scene is sound");
    let mut scratch = Box::new(Scratch::<4096>::ZERO);
    let mut gauge = Gauge::new(setup, scratch.workspace()).expect("the set-up is sound");
    gauge.measure(&shot.record()).ok()
}

fn tally(way: Way, parts: u32, thicknesses: (f64, f64)) -> Tally {
    let mut tally = Tally::default();
    for number in 0..parts {
        let mut random = Random::new(77, Purpose::Variation, u64::from(number));
        let part = painted(way, &mut random, thicknesses);
        tally.parts += 1;
        let known = read(&part, part.setup, u64::from(number));
        let unknown = read(&part, part.setup.with_coating(Coating::UNKNOWN), u64::from(number));
        let Some(known) = known else {
            tally.refused += 1;
            assert!(unknown.is_none(), "{way:?} {number}");
            continue;
        };
        let unknown = unknown.expect("the wall needs no velocity of the coating");
        // The wall, its uncertainty and its doubts owe nothing to the coating's velocity.
        assert_eq!((known.thickness, known.doubts), (unknown.thickness, unknown.doubts));
        assert_eq!(known.budget, unknown.budget);
        let error = (f64::from(known.thickness.as_mm()) - part.scene.wall.thickness_mm).abs();
        let outside = error > f64::from(known.expanded().as_mm());
        let gross = error > f64::from(known.expanded().as_mm()) + 0.25 * 0.592;
        let verbose = std::env::var_os("HALFPULSE_VERBOSE").is_some();
        if verbose {
            println!(
                "{way:?} {number}: wall {:.3} mm, coating {:.3} mm ({:.0} ns): error {:.4} mm, U {:.4} mm, coating {:?}, {}",
                part.scene.wall.thickness_mm,
                part.coating_mm,
                part.round_trip_ns,
                f64::from(known.thickness.as_mm()) - part.scene.wall.thickness_mm,
                known.expanded().as_mm(),
                known.coating.map(|coating| coating.round_trip.time.as_ns()),
                known.doubts
            );
        }
        tally.overlapping += u32::from(known.doubts.contains(Doubt::OverlappingEcho));
        if !known.doubts.is_empty() {
            tally.doubted += 1;
            continue;
        }
        tally.wall_outside += u32::from(outside);
        tally.undoubted_gross += u32::from(gross);
        let (Some(coating), Some(time)) = (known.coating, unknown.coating) else {
            continue;
        };
        tally.coatings += 1;
        assert!(time.thickness.is_none() && time.round_trip == coating.round_trip);
        let thickness = coating.thickness.expect("its velocity is stated");
        let off = (f64::from(thickness.thickness.as_mm()) - part.coating_mm).abs();
        tally.coating_outside += u32::from(off > 2.0 * f64::from(thickness.standard_uncertainty.as_mm()));
        let off = (f64::from(time.round_trip.time.as_ns()) - part.round_trip_ns).abs();
        tally.time_outside += u32::from(off > 2.0 * f64::from(time.round_trip.standard_uncertainty.as_ns()));
    }
    println!(
        "{way:?}, coatings of {} to {} mm: {tally:?}",
        thicknesses.0, thicknesses.1
    );
    tally
}

/// Behind a delay line, 0.5 to 1.5 mm of paint, velocity known to 5 % and not known.
#[test]
fn val_paint_and_wall_behind_a_delay_line() {
    let tally = tally(Way::DelayLine, 120, (0.5, 1.5));
    assert_eq!(tally.undoubted_gross, 0);
    assert!(tally.coatings >= 60, "{tally:?}");
    for outside in [tally.wall_outside, tally.coating_outside, tally.time_outside] {
        assert!(outside * 100 <= tally.coatings * 9, "{tally:?}");
    }
}

/// In contact, with the coating's front in the dead zone: it follows from first back wall, zero and period.
#[test]
fn val_paint_in_the_dead_zone() {
    let tally = tally(Way::Contact, 120, (0.15, 0.6));
    assert_eq!(tally.undoubted_gross, 0);
    assert!(tally.coatings >= 40, "{tally:?}");
    for outside in [tally.wall_outside, tally.coating_outside, tally.time_outside] {
        assert!(outside * 100 <= tally.coatings * 9, "{tally:?}");
    }
}

/// Under a hard face each back wall is followed by reverberations of the coating as high as itself. What they move is
/// doubted, and most of it as overlapping echoes.
#[test]
fn val_reverberations_of_a_coating_are_doubted() {
    let tally = tally(Way::Hard, 120, (0.1, 1.2));
    assert_eq!(tally.undoubted_gross, 0);
    assert!(tally.wall_outside * 20 <= tally.parts, "{tally:?}");
    assert!(tally.doubted + tally.refused > tally.parts / 3, "{tally:?}");
    assert!(tally.overlapping > 0, "{tally:?}");
}
