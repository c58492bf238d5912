//! Echoes that are not the wall's: a coating's reverberations are known for what they are, and a train of another period makes a doubt.
//!
//! Truth: the simulator's layers (its own check is `val_world_paths`).

use halfpulse::{
    Coating, Doubt, EchoRole, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Scratch, Seconds,
    Span, Window, Zero,
};
use halfpulse_sim::scene::{Layer, Scene};
use halfpulse_sim::synthesise::Synthesiser;

const STEEL: f32 = 5920.0;
const EPOXY: f32 = 2500.0;

fn setup() -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6)
            .with_couplant_film(Metres::ZERO)
            .with_element_diameter(Metres::new(100.0)),
        Material::new(MetresPerSecond::new(STEEL), MetresPerSecond::new(5.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(2.0)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(80.0),
        },
    )
}

fn painted(wall_mm: f64, paint_mm: f64) -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", wall_mm);
    scene.record.samples = 4096;
    scene.record.first_back_wall_percent = Some(20.0);
    scene.wall.velocity_m_s = Some(f64::from(STEEL));
    scene.coating = Some(Layer {
        material: Some("epoxy".into()),
        velocity_m_s: Some(f64::from(EPOXY)),
        attenuation_db_per_m: 200.0,
        attenuation_exponent: 1.0,
        thickness_mm: paint_mm,
        ..Layer::default()
    });
    scene.noise.snr_db = Some(35.0);
    scene
}

/// A set-up that names its coating: the rounds to and fro in it, before the first back wall and behind every one, have the coating's role,
/// the wall is read without a doubt, and paint and wall lie within their uncertainty.
#[test]
fn val_reverberations_of_a_coating() {
    let mut scratch = Box::new(Scratch::<4096>::ZERO);
    let setup = setup().with_coating(Coating::new(MetresPerSecond::new(EPOXY), MetresPerSecond::ZERO));
    let mut gauge = Gauge::new(setup, scratch.workspace()).expect("the set-up is sound");
    let (mut undoubted, mut rounds, walls) = (0u32, 0u32, 40u8);
    for number in 0..walls {
        let (wall, paint) = (8.0 + 0.31 * f64::from(number), 0.85 + 0.011 * f64::from(number % 20));
        let mut maker = Synthesiser::new(&painted(wall, paint)).expect("the scene is sound");
        let reading = gauge.measure(&maker.shot(3, u64::from(number)).record());
        let reading = reading.unwrap_or_else(|why| panic!("{wall} mm under {paint} mm: {why}"));
        let error = f64::from(reading.thickness.as_mm()) - wall;
        if !reading.doubts.is_empty() {
            println!("{wall:.2} mm under {paint:.3} mm: {error:+.4} mm, {}", reading.doubts);
        }
        assert!(
            !reading.doubts.contains(Doubt::EarlierEcho),
            "{wall} mm under {paint} mm: {}",
            reading.doubts
        );
        undoubted += u32::from(reading.doubts.is_empty());
        assert!(
            error.abs() < 1.5 * f64::from(reading.expanded().as_mm()),
            "{wall} mm under {paint} mm: {error}"
        );
        let round = 2.0 * paint / f64::from(EPOXY) * 1e3;
        for echo in &gauge.findings().echoes {
            let after = f64::from(echo.arrival.as_us()) / round;
            if f64::from(echo.arrival.as_us()) < 2.0 * wall / f64::from(STEEL) * 1e3 {
                assert_eq!(
                    echo.role,
                    EchoRole::Coating,
                    "{wall} mm under {paint} mm, after {after} rounds"
                );
                assert!((after - after.round()).abs() < 0.1, "{after} rounds");
                rounds += 1;
            }
        }
    }
    println!("{undoubted} of {walls} without a doubt, {rounds} rounds before a first back wall");
    assert!(undoubted >= 34 && rounds >= 40, "{undoubted} {rounds}");
}

/// The same paint under a set-up that does not know of it. Where the paint is strong and thick enough to be taken for the wall, its
/// reading must not pass: the wall's own train is left over, and has another period.
#[test]
fn val_unknown_paint_is_not_the_wall() {
    let mut scratch = Box::new(Scratch::<4096>::ZERO);
    let mut gauge = Gauge::new(setup(), scratch.workspace()).expect("the set-up is sound");
    let (mut taken, mut told) = (0, 0);
    for number in 0..60 {
        let (wall, paint) = (4.0 + 0.05 * f64::from(number), 1.0 + 0.013 * f64::from(number % 30));
        let mut scene = painted(wall, paint);
        scene.noise.snr_db = Some(26.0);
        let mut maker = Synthesiser::new(&scene).expect("the scene is sound");
        let Ok(reading) = gauge.measure(&maker.shot(4, number as u64).record()) else {
            continue;
        };
        let error = f64::from(reading.thickness.as_mm()) - wall;
        if error.abs() > 0.3 {
            taken += 1;
            told += u32::from(!reading.doubts.is_empty());
            assert!(
                !reading.doubts.is_empty(),
                "{wall} mm under {paint} mm: {error:+.3} mm, no doubt"
            );
        }
    }
    println!("{taken} of 60 read something else than the wall, {told} of them with a doubt");
    assert!(taken > 0, "the scene does not try it");
}
