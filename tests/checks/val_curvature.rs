//! Flat probes on pipes: within the limit of curvature the simulated world's error stays within the stated uncertainty, beyond it
//! the doubt stands.

use halfpulse::wall::curvature::{gap, smallest_radius};
use halfpulse::{
    Doubt, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, ProbeFace, Reading, Scratch, Seconds,
    Span, Surface, Window, Zero,
};
use halfpulse_sim::scene::{self, Couplant, Layer, Scene};
use halfpulse_sim::synthesise::synthesise;
use halfpulse_tests::published::Table;

/// The gap under the rim, R - sqrt(R² - D²/4) (made with NumPy).
#[test]
fn val_gap_at_the_rim() {
    for row in Table::read("physics/curvature.csv").rows() {
        let of = |name| Metres::new(row.number(name) as f32);
        let found = f64::from(gap(of("R_m"), of("probe_dia_m")).get());
        let exact = row.number("edge_gap_m");
        assert!((found / exact - 1.0).abs() < 1e-5, "{row:?}: {found:e}");
    }
}

fn read(diameter: f64, face: (ProbeFace, f64), radius: Option<f64>, span: Span) -> Reading {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    scene.record.samples = 4096;
    scene.record.sample_rate_mhz = 50.0;
    scene.probe.element_diameter_mm = Some(diameter);
    scene.probe.face_impedance_mrayl = Some(face.1);
    scene.wall = Layer {
        velocity_m_s: Some(5920.0),
        ..scene.wall
    };
    scene.couplant = Some(Couplant {
        material: Some("oil".into()),
        film_um: 1.0,
        ..Couplant::default()
    });
    scene.surface = radius.map(|mm| scene::Surface {
        roughness_um: 0.0,
        radius_mm: Some(mm),
    });
    scene.noise.snr_db = Some(40.0);
    let shot = synthesise(&scene, 3).expect("a good scene");
    let mut setup = GaugeSetup::new(
        Hertz::from_mhz(50.0),
        // The beam is not simulated here.
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_face(face.0),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(5.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        span,
        Window {
            from: Seconds::from_us(0.8),
            to: Seconds::from_us(80.0),
        },
    );
    if let Some(mm) = radius {
        setup.surface = Surface::Convex(Metres::from_mm(mm as f32));
    }
    setup.probe.element_diameter = Some(Metres::from_mm(diameter as f32));
    setup.probe.element_diameter_uncertainty = 0.0;
    let mut scratch = Box::new(Scratch::<4096>::ZERO);
    let mut gauge = Gauge::new(setup, scratch.workspace()).expect("a good set-up");
    gauge.measure(&shot.record()).expect("a reading")
}

/// What a reading on a pipe differs by from that on a flat part, for hard and plastic faces of 6 and 10 mm: within the stated
/// uncertainty as far as nothing is doubted; beyond the limit doubted for the curvature.
#[test]
fn val_pipes_within_the_limit_and_beyond() {
    let mut beyond_limit = 0;
    for face in [(ProbeFace::Hard, 38.5), (ProbeFace::Plastic, 2.5)] {
        for diameter in [6.0, 10.0] {
            for span in [Span::TransmissionPulseToBackWall, Span::BackWallToBackWall] {
                let flat = read(diameter, face, None, span);
                for radius in [500.0, 150.0, 60.0, 40.0, 24.0, 12.0] {
                    let curved = read(diameter, face, Some(radius), span);
                    let moved = f64::from((curved.thickness - flat.thickness).as_mm());
                    let expanded = f64::from(curved.expanded().as_mm());
                    println!(
                        "{:?}, {diameter} mm on R {radius} mm, {span:?}: {:+.1} um, U {:.1} um, {}",
                        face.0,
                        1e3 * moved,
                        1e3 * expanded,
                        curved.doubts
                    );
                    let beyond = curved.doubts.contains(Doubt::CurvedSurface);
                    beyond_limit += u32::from(beyond);
                    let limit = (5.0 * diameter).max(25.4);
                    assert!(beyond || radius >= limit, "{face:?} {diameter} {radius} {span:?}");
                    // No pipe as wide as this is doubted for its curvature.
                    assert!(!beyond || radius < 499.0, "{face:?} {diameter} {radius} {span:?}");
                    assert!(
                        !curved.doubts.is_empty() || moved.abs() < expanded,
                        "{face:?} {diameter} {radius} {span:?}"
                    );
                }
            }
        }
    }
    assert!(beyond_limit > 8);
    assert_eq!(flat_limit(), None);
}

fn flat_limit() -> Option<Metres> {
    let setup = GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(5.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(0.8),
            to: Seconds::from_us(80.0),
        },
    );
    smallest_radius(&setup)
}
