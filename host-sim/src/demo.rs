//! The demonstration: an inspection that never took place, simulated and measured.
//!
//! Fourteen points along a painted steel bend that flow has thinned on its outside. The reference pulse
//! is learned on a bare block first; then every point is one shot through a plastic delay line, read
//! from back wall to back wall, so that the paint drops out. Nothing here knows the truth but the
//! table.

use crate::calibrating::block::{self, BlockRecord};
use crate::calibrating::cut;
use crate::input_error::InputError;
use crate::measuring::HeapScratch;
use crate::record_file::RecordFile;
use crate::scene::{DelayLine, Layer, Noise, Probe, ProbeKind, Recording, Scene, SceneError};
use crate::synthesise::{Synthesiser, synthesise};
use comfy_table::{CellAlignment, Table, presets};
use halfpulse::{
    Coating, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, NoReading, Reading, Seconds, Span, Window,
    Zero,
};
use std::io::Write;
use std::path::Path;

const SEED: u64 = 14;
const SAMPLES: usize = 2048;
/// The pipe's own velocity. The set-up only knows the steel's usual one, 5920 m/s with 17 m/s (k = 1).
const PIPE_VELOCITY: f64 = 5907.0;
const PAINT_VELOCITY: f64 = 2300.0;

/// What the probe finds at one point.
struct Point {
    place: &'static str,
    wall_mm: f64,
    paint_mm: f64,
    /// Roughness of the back wall, rms.
    roughness_um: f64,
    /// Receiver noise in steps of the converter, rms.
    noise_steps: f64,
    coupling: Coupling,
}

#[derive(Clone, Copy, PartialEq)]
enum Coupling {
    Good,
    /// The probe stands in air.
    None,
    /// Somebody turned the gain up.
    Overdriven,
}

const fn point(place: &'static str, wall_mm: f64, paint_mm: f64, roughness_um: f64, noise_steps: f64) -> Point {
    Point {
        place,
        wall_mm,
        paint_mm,
        roughness_um,
        noise_steps,
        coupling: Coupling::Good,
    }
}

const fn coupled(point: Point, coupling: Coupling) -> Point {
    Point { coupling, ..point }
}

const POINTS: [Point; 14] = [
    point("straight, inlet side", 8.214, 0.31, 4.0, 2.0),
    point("weld, inlet side", 8.630, 0.34, 6.0, 2.0),
    point("outside of bend, 10 deg", 7.402, 0.30, 10.0, 2.0),
    point("outside of bend, 25 deg", 6.118, 0.28, 15.0, 2.0),
    point("outside of bend, 40 deg", 4.907, 0.33, 25.0, 3.0),
    coupled(
        point("outside, paint blistered off", 4.655, 0.30, 25.0, 2.0),
        Coupling::None,
    ),
    point("outside of bend, 50 deg", 3.846, 0.29, 30.0, 3.0),
    point("outside of bend, 60 deg", 0.900, 0.32, 20.0, 3.0),
    point("outside of bend, 70 deg", 0.602, 0.30, 15.0, 2.0),
    point("outside, near a radio mast", 5.520, 0.35, 20.0, 120.0),
    point("flank of bend", 7.951, 0.52, 8.0, 2.0),
    coupled(
        point("flank, gain turned up", 7.880, 0.30, 8.0, 2.0),
        Coupling::Overdriven,
    ),
    point("inside of bend", 8.873, 0.25, 4.0, 2.0),
    point("straight, outlet side", 8.196, 0.62, 5.0, 2.0),
];

/// A 10 MHz probe on 15 mm of polystyrene: the second echo of the delay line's end comes at 25.5 us.
fn bare(wall_mm: f64) -> Scene {
    Scene {
        version: 1,
        record: Recording {
            sample_rate_mhz: 100.0,
            samples: SAMPLES,
            first_sample_us: 12.0,
            bits: 12,
            first_back_wall_percent: None,
            gain_db: Some(9.0),
        },
        probe: Probe {
            kind: ProbeKind::DelayLine,
            centre_frequency_mhz: 10.0,
            relative_bandwidth_percent: None,
            attack_ns: Some(90.0),
            decay_ns: Some(180.0),
            phase_degrees: 35.0,
            element_diameter_mm: Some(6.0),
            beam_diffraction: true,
            zero_offset_ns: 0.0,
            face_impedance_mrayl: None,
        },
        delay_line: Some(DelayLine {
            material: Some("polystyrene".into()),
            length_mm: Some(15.0),
            attenuation_db_per_m: 250.0,
            attenuation_exponent: 1.0,
            ..DelayLine::default()
        }),
        wall: Layer {
            material: Some("carbon steel".into()),
            velocity_m_s: Some(PIPE_VELOCITY),
            thickness_mm: wall_mm,
            attenuation_exponent: 2.0,
            ..Layer::default()
        },
        noise: Noise {
            snr_db: None,
            rms_steps: Some(2.0),
        },
        ..Scene::contact(10.0, 60.0, "carbon steel", wall_mm)
    }
}

fn scene_of(point: &Point) -> Scene {
    let mut scene = bare(point.wall_mm);
    scene.noise.rms_steps = Some(point.noise_steps);
    scene.back.material = Some("water".into());
    match point.coupling {
        Coupling::None => {
            // Air from the delay line's end on: nothing else comes back.
            scene.wall.material = Some("air".into());
            scene.wall.velocity_m_s = None;
            return scene;
        }
        Coupling::Overdriven => scene.record.gain_db = Some(36.0),
        Coupling::Good => {}
    }
    scene.coating = Some(Layer {
        velocity_m_s: Some(PAINT_VELOCITY),
        density_kg_m3: Some(1450.0),
        thickness_mm: point.paint_mm,
        attenuation_db_per_m: 1500.0,
        attenuation_exponent: 1.0,
        ..Layer::default()
    });
    // A rough back wall takes exp(-2 (k s)^2) from the echo at every return (Kirchhoff, for gentle
    // slopes): a loss with the square of frequency, here spread over the way through the wall.
    let wave_number = std::f64::consts::TAU * 10e6 / PIPE_VELOCITY;
    let roughness = wave_number * point.roughness_um * 1e-6;
    let decibels = 2.0 * roughness * roughness * 20.0 / std::f64::consts::LN_10;
    scene.wall.attenuation_db_per_m = decibels / (2e-3 * point.wall_mm);
    scene
}

fn setup() -> GaugeSetup {
    let probe = halfpulse::Probe::delay_line(Hertz::from_mhz(10.0), 0.6).with_element_diameter(Metres::from_mm(6.0));
    GaugeSetup {
        sample_rate: Hertz::from_mhz(100.0),
        probe,
        material: Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(17.0)),
        zero: Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        span: Span::BackWallToBackWall,
        window: Window {
            from: Seconds::from_us(12.0),
            to: Seconds::from_us(25.0),
        },
        coverage_factor: 2.0,
        coating: None,
        calibrated: None,
        trigger_jitter: Seconds::ZERO,
        roughness: Metres::ZERO,
        surface: halfpulse::Surface::Flat,
    }
}

fn impossible(error: &SceneError) -> InputError {
    InputError::in_argument(
        format!("the demonstration's own scene is wrong ({error})"),
        "report this",
    )
}

/// Learns the reference pulse on a bare block of 12.5 mm, as `calibrate` does.
fn learn(gauge: &mut Gauge<'_>) -> Result<(), InputError> {
    let mut maker = Synthesiser::new(&bare(12.5)).map_err(|error| impossible(&error))?;
    let shots: Vec<_> = (0..64).map(|number| maker.shot(SEED, 1000 + number)).collect();
    let (format, clock) = (shots[0].format, shots[0].clock);
    let file = RecordFile::from_codes(shots.into_iter().map(|shot| shot.codes).collect(), format);
    let block = BlockRecord::new(Path::new("block of the demonstration"), (12.5, 0.002), file, clock)?;
    let times = block::measure(gauge, &block, false)?;
    let pulse = cut::reference_pulse(&block, &times, gauge.setup())?;
    gauge
        .learn_pulse(&pulse)
        .map_err(|error| InputError::in_argument(error.to_string(), "report this"))
}

/// What came of one point.
struct Inspected {
    point: &'static Point,
    outcome: Result<Reading, NoReading>,
}

/// How a reading compares with the truth.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Verdict {
    /// Within its expanded uncertainty.
    Right,
    /// Beyond it, by less than a quarter wavelength.
    Outside,
    /// Further off.
    Gross,
}

impl Inspected {
    fn error_mm(&self) -> Option<f64> {
        let reading = self.outcome.as_ref().ok()?;
        Some(f64::from(reading.thickness.as_mm()) - self.point.wall_mm)
    }

    fn verdict(&self) -> Option<Verdict> {
        let reading = self.outcome.as_ref().ok()?;
        Some(judge(self.error_mm()?, reading.expanded(), PIPE_VELOCITY))
    }

    fn paint_verdict(&self) -> Option<Verdict> {
        let reading = self.outcome.as_ref().ok()?;
        let paint = reading.coating?.thickness?;
        let error = f64::from(paint.thickness.as_mm()) - self.point.paint_mm;
        let expanded = paint.standard_uncertainty * reading.coverage_factor;
        Some(judge(error, expanded, PAINT_VELOCITY))
    }

    fn doubted(&self) -> bool {
        self.outcome.as_ref().is_ok_and(|reading| !reading.doubts.is_empty())
    }
}

fn judge(error_mm: f64, expanded: Metres, velocity: f64) -> Verdict {
    let (error, expanded) = (error_mm.abs(), f64::from(expanded.as_mm()));
    let quarter_wavelength = 0.25e3 * velocity / 10e6;
    if error <= expanded {
        Verdict::Right
    } else if error <= expanded + quarter_wavelength {
        Verdict::Outside
    } else {
        Verdict::Gross
    }
}

fn inspect() -> Result<Vec<Inspected>, InputError> {
    let fault = |error: halfpulse::SetupError| InputError::in_argument(error.to_string(), "report this");
    let mut scratch = HeapScratch::new(SAMPLES);
    let mut gauge = Gauge::new(setup(), scratch.workspace()).map_err(fault)?;
    learn(&mut gauge)?;
    // The simulated paint has this very velocity.
    let coating = Coating::new(MetresPerSecond::new(PAINT_VELOCITY as f32), MetresPerSecond::ZERO);
    gauge.change_setup(setup().with_coating(coating)).map_err(fault)?;
    POINTS
        .iter()
        .zip(SEED..)
        .map(|(point, seed)| {
            let shot = synthesise(&scene_of(point), seed).map_err(|error| impossible(&error))?;
            Ok(Inspected {
                point,
                outcome: gauge.measure(&shot.record()),
            })
        })
        .collect()
}

/// Runs the demonstration and prints its table and verdict.
///
/// # Errors
/// None that the user could cause.
pub fn run(out: &mut dyn Write) -> Result<(), InputError> {
    let points = inspect()?;
    // A reader who closes the pipe has seen enough.
    let _ = writeln!(
        out,
        "A painted bend that flow has thinned, inspected at fourteen points: simulated, then measured with\n\
         the core. 10 MHz on a plastic delay line, one shot a point; the pulse was learned on a block.\n\
         Lengths in mm; +- is the expanded uncertainty (k = 2).\n\n{}\n\n{}\n\n\
         Next: `halfpulse simulate --help` makes records like these, `halfpulse read --help` measures yours.",
        table(&points),
        sentence(&points)
    );
    Ok(())
}

fn table(points: &[Inspected]) -> Table {
    let mut table = Table::new();
    table.load_style(presets::NOTHING);
    table.set_header([
        "#",
        "place",
        "true wall",
        "reading",
        "error",
        "true paint",
        "paint",
        "doubts, or why there is no reading",
    ]);
    for (number, inspected) in points.iter().enumerate() {
        let point = inspected.point;
        let mut row = vec![
            (number + 1).to_string(),
            point.place.to_string(),
            format!("{:.3}", point.wall_mm),
        ];
        match &inspected.outcome {
            Ok(reading) => {
                let doubts: Vec<&str> = reading.doubts.iter().map(|doubt| doubt.word()).collect();
                row.push(stated(reading.thickness, reading.expanded()));
                row.push(format!("{:+.3}", inspected.error_mm().unwrap_or(f64::NAN)));
                row.push(paint(point));
                let coating = reading.coating.and_then(|coating| coating.thickness);
                row.push(coating.map_or_else(String::new, |coating| {
                    stated(
                        coating.thickness,
                        coating.standard_uncertainty * reading.coverage_factor,
                    )
                }));
                row.push(doubts.join(", "));
            }
            Err(why) => {
                row.extend([String::new(), String::new(), paint(point), String::new()]);
                row.push(format!("no reading: {}", why.word()));
            }
        }
        table.add_row(row);
    }
    for column in [0, 2, 3, 4, 5, 6] {
        if let Some(column) = table.column_mut(column) {
            column.set_cell_alignment(CellAlignment::Right);
        }
    }
    table
}

fn paint(point: &Point) -> String {
    if point.coupling == Coupling::None {
        return String::new();
    }
    format!("{:.2}", point.paint_mm)
}

fn stated(value: Metres, expanded: Metres) -> String {
    format!("{:.3} +- {:.3}", value.as_mm(), expanded.as_mm())
}

/// One line on how the readings compare with the truth.
fn sentence(points: &[Inspected]) -> String {
    let count = |wanted: &dyn Fn(&&Inspected) -> bool| points.iter().filter(|p| wanted(p)).count();
    let readings = count(&|p| p.outcome.is_ok());
    let clean = count(&|p| p.outcome.is_ok() && !p.doubted());
    let clean_right = count(&|p| !p.doubted() && p.verdict() == Some(Verdict::Right));
    let gross = |verdict: Option<Verdict>| verdict == Some(Verdict::Gross);
    let clean_gross = count(&|p| !p.doubted() && (gross(p.verdict()) || gross(p.paint_verdict())));
    let doubted_right = count(&|p| p.doubted() && p.verdict() == Some(Verdict::Right));
    let paint = count(&|p| p.paint_verdict().is_some());
    let paint_right = count(&|p| p.paint_verdict() == Some(Verdict::Right));
    format!(
        "Verdict: {readings} of {} points read, {} refused; true value inside the stated uncertainty: {clean_right} of \
         {clean} walls without a doubt, {doubted_right} of {} doubted, {paint_right} of {paint} paints; grossly wrong \
         without a doubt: {}.",
        points.len(),
        points.len() - readings,
        readings - clean,
        if clean_gross == 0 {
            "none".to_string()
        } else {
            clean_gross.to_string()
        }
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The promise, on fourteen points: what carries no doubt is right within its uncertainty (one in
    /// twenty may lie a little outside), and nothing is grossly wrong without a doubt.
    #[test]
    fn nothing_is_confidently_wrong() {
        let points = inspect().unwrap();
        let clean: Vec<&Inspected> = points.iter().filter(|p| p.outcome.is_ok() && !p.doubted()).collect();
        assert!(clean.len() >= 6, "{}", clean.len());
        let outside = clean.iter().filter(|p| p.verdict() != Some(Verdict::Right)).count();
        assert!(outside <= 1, "{outside}");
        assert!(clean.iter().all(|p| p.verdict() != Some(Verdict::Gross)));
        // The hopeless points are refused for their own reasons.
        let refused = |place: &str| {
            let point = points.iter().find(|p| p.point.place.contains(place)).unwrap();
            point.outcome.as_ref().err().map(NoReading::word)
        };
        assert_eq!(refused("blistered"), Some("not-coupled"));
        assert_eq!(refused("gain turned up"), Some("clipped"));
    }

    #[test]
    fn prints_a_line_a_point_and_a_verdict() {
        let mut text = Vec::new();
        run(&mut text).unwrap();
        let text = String::from_utf8(text).unwrap();
        for point in &POINTS {
            assert!(text.contains(point.place), "{text}");
        }
        assert!(text.contains("of 14 points read"));
        assert!(text.lines().all(|line| line.chars().count() <= 200), "{text}");
    }
}
