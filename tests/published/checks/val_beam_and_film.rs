//! What the spreading beam and the couplant film do to echoes: the core's formulas against published ones and against SciPy.

use halfpulse::path::Spreading;
use halfpulse::path::diffraction::Diffraction;
use halfpulse::wall::beam::{beam_width, loss, near_field_length, near_field_length_exact, uncorrected_shift};
use halfpulse::wall::coupling::{STEEL_IMPEDANCE, reflection_advance, transmission_delay};
use halfpulse::wall::way::{path_deviation, path_law};
use halfpulse::{GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, ProbeFace, Seconds, Span, Window, Zero};
use halfpulse_published::{Table, oracle};

const FIVE: Hertz = Hertz::from_mhz(5.0);
const STEEL: MetresPerSecond = MetresPerSecond::new(5920.0);

/// A contact probe with this element on steel, with a zero that holds no spreading.
fn contact(diameter: Metres) -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(FIVE, 0.6).with_element_diameter(diameter),
        Material::new(STEEL, MetresPerSecond::ZERO),
        Zero::new(Seconds::ZERO, Seconds::ZERO).with_learned_on(Metres::ZERO),
        Span::TransmissionPulseToBackWall,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(60.0),
        },
    )
}

/// A piston's factor, both parts and its phase, from the near field to the far.
///
/// Source: P. H. Rogers and A. L. Van Buren, J. Acoust. Soc. Am. 55 (1974) 724 (formula from memory), evaluated with
/// SciPy 1.17.1: `diffraction_factor.csv`.
#[test]
fn val_factor_of_a_piston() {
    for row in Table::read("physics/diffraction_factor.csv").rows() {
        let factor = Diffraction::at(row.number("S") as f32);
        assert!(
            (f64::from(factor.in_phase) - row.number("ReD")).abs() < 1e-6,
            "{row:?}: {factor:?}"
        );
        assert!(
            (f64::from(factor.quadrature) - row.number("ImD")).abs() < 1e-6,
            "{row:?}: {factor:?}"
        );
        let degrees = f64::from(factor.phase_advance).to_degrees();
        assert!((degrees - row.number("phase_deg")).abs() < 1e-3, "{row:?}: {degrees}");
        let db = f64::from(loss(row.number("S") as f32).get());
        assert!((db - row.number("dB")).abs() < 2e-4, "{row:?}: {db} dB");
    }
}

/// Far away a piston's echo falls as π / S.
///
/// Source: the limit of Rogers and Van Buren's formula for small u = 2 π / S: |D| = u / 2 (`farfield_pi_over_S` has it).
#[test]
fn val_far_field_of_a_piston() {
    for row in Table::read("physics/diffraction_factor.csv").rows() {
        let (s, far) = (row.number("S"), row.number("farfield_pi_over_S"));
        let ratio = f64::from(Diffraction::at(s as f32).magnitude()) / far;
        if s > 20.0 {
            assert!((ratio - 1.0).abs() < 0.02, "S {s}: {ratio}");
        }
        // And on, where the table ends.
        let ratio = f64::from(Diffraction::at(1e4 * s as f32).magnitude()) / (far * 1e-4);
        assert!((ratio - 1.0).abs() < 1e-3, "S {s}e4: {ratio}");
    }
}

/// How early the first back wall comes, by the phase at 5 MHz.
///
/// Source: `diffraction_delay.csv`, Rogers and Van Buren's formula with SciPy 1.17.1.
#[test]
fn val_shift_of_the_first_back_wall_by_its_phase() {
    for row in Table::read("physics/diffraction_delay.csv").rows() {
        let shift = uncorrected_shift(
            Metres::new(row.number("dia_m") as f32),
            STEEL,
            FIVE,
            Metres::ZERO,
            Metres::new(2.0 * row.number("d_m") as f32),
        );
        let ratio = f64::from(shift.get()) / -row.number("dt_phase_f0_s");
        assert!((ratio - 1.0).abs() < 1e-4, "{row:?}: {ratio}");
    }
}

/// How much the second back wall comes early against the first, by correlation of whole pulses: the difference that the
/// set-up's law takes off.
///
/// Source: `diffraction_echo_to_echo.csv`, exact integral and correlation with SciPy 1.17.1.
#[test]
fn val_shift_between_back_walls() {
    let spreading = Spreading::new(0.6);
    for row in Table::read("physics/diffraction_echo_to_echo.csv").rows() {
        let diameter = Metres::new(row.number("dia_m") as f32);
        let law = path_law(&contact(diameter), &spreading);
        let trip = (2.0 * row.number("d_m") / 5920.0) as f32;
        let found = f64::from(law.deviation(2.0 * trip) - law.deviation(trip));
        // Half a thousandth of a cycle.
        assert!((found - row.number("dt_s")).abs() < 0.1e-9, "{row:?}: {found}");
    }
}

/// How much earlier than straight the first back wall comes, by correlation of whole pulses, as calibration takes it off a
/// block's time.
///
/// Source: `diffraction_delay.csv`, column `dt_xcorr_s`: Rogers and Van Buren's formula over the band of a 60 % pulse and
/// correlation with SciPy 1.17.1.
#[test]
fn val_shift_of_a_block_by_correlation() {
    let spreading = Spreading::new(0.6);
    for row in Table::read("physics/diffraction_delay.csv").rows() {
        let setup = contact(Metres::new(row.number("dia_m") as f32));
        let shift = path_deviation(&setup, &spreading, Metres::new(row.number("d_m") as f32));
        let ratio = f64::from(shift.get()) / row.number("dt_xcorr_s");
        println!("{row:?}: {ratio}");
        assert!((ratio - 1.0).abs() < 0.02, "{row:?}: {ratio}");
        // While nobody knows what the zero holds, nothing is taken off.
        let mut unknown = setup;
        unknown.zero.learned_on = None;
        assert_eq!(
            path_deviation(&unknown, &spreading, Metres::from_mm(25.0)),
            Seconds::ZERO
        );
    }
}

/// Near field lengths of usual probes.
///
/// Source: J. and H. Krautkrämer, Ultrasonic Testing of Materials, N = D² / 4 λ and (D² - λ²) / 4 λ (from memory), worked
/// out by hand.
#[test]
fn val_near_field() {
    for (diameter_mm, mhz, velocity, short_mm, exact_mm) in [
        (10.0, 5.0, 5920.0, 21.114_865, 20.818_865),
        (24.0, 2.0, 5920.0, 48.648_649, 47.908_65),
        (6.0, 4.0, 1480.0, 24.324_324, 24.231_824),
    ] {
        let wavelength = MetresPerSecond::new(velocity) / Hertz::from_mhz(mhz);
        let diameter = Metres::from_mm(diameter_mm);
        assert!((near_field_length(diameter, wavelength).as_mm() - short_mm).abs() < 1e-4);
        assert!((near_field_length_exact(diameter, wavelength).as_mm() - exact_mm).abs() < 1e-4);
    }
}

/// The beam's -6 dB edge lies where the piston's directivity, 2 J1(x) / x, has fallen by 3 dB on each of two ways.
///
/// Source: the directivity of a piston (P. M. Morse and K. U. Ingard, Theoretical Acoustics, from memory), Bessel's
/// integral evaluated by `oracle::bessel`.
#[test]
fn val_width_of_the_beam() {
    for (diameter_mm, mhz) in [(10.0, 5.0), (6.0, 2.25), (20.0, 10.0)] {
        let wavelength = STEEL / Hertz::from_mhz(mhz);
        let (diameter, range) = (Metres::from_mm(diameter_mm), Metres::new(0.5));
        let edge = f64::from(beam_width(diameter, wavelength, range).get()) / 2.0;
        let x = std::f64::consts::PI * f64::from(diameter.get()) / f64::from(wavelength.get()) * edge / 0.5;
        let two_ways = (2.0 * oracle::bessel(1, x) / x).powi(2);
        assert!(
            (20.0 * two_ways.log10() + 6.0).abs() < 2e-4,
            "{diameter_mm} mm, {mhz} MHz: {two_ways}"
        );
    }
}

/// A film of oil delays the first back wall, by correlation of whole pulses: within 8 % while the film is thin against its
/// quarter wavelength.
///
/// Source: `couplant_delay.csv`, textbook transfer matrix and correlation with SciPy 1.17.1.
#[test]
fn val_delay_by_a_film() {
    let mut checked = 0;
    for row in Table::read("physics/couplant_delay.csv").rows() {
        let face = match row.text("face") {
            "alumina face" => ProbeFace::Hard,
            "polystyrene delay" => ProbeFace::Plastic,
            _ => continue,
        };
        let film = row.number("h_m");
        if row.text("film") != "oil" || film == 0.0 || film > 1e-5 {
            continue;
        }
        let delay = transmission_delay(face, STEEL_IMPEDANCE, FIVE, Metres::new(film as f32));
        let ratio = f64::from(delay.get()) / row.number("dt_xcorr_s");
        println!("{row:?}: {ratio}");
        assert!((ratio - 1.0).abs() < 0.08, "{row:?}: {ratio}");
        checked += 1;
    }
    assert!(checked >= 8, "{checked} films");
}

/// A film under the probe makes what is reflected at it come early, by correlation of whole pulses, from back wall to back
/// wall.
///
/// Source: `couplant_echo_to_echo.csv`, textbook transfer matrix and correlation with SciPy 1.17.1 (oil).
#[test]
fn val_reflection_at_a_film() {
    let mut checked = 0;
    for row in Table::read("physics/couplant_echo_to_echo.csv").rows() {
        let film = row.number("h_m");
        if row.text("face") != "alumina face" || film == 0.0 || film > 1e-5 {
            continue;
        }
        let advance = reflection_advance(ProbeFace::Hard, STEEL_IMPEDANCE, FIVE, Metres::new(film as f32));
        let ratio = f64::from(advance.get()) / -row.number("dt_xcorr_s");
        println!("{row:?}: {ratio}");
        assert!((ratio - 1.0).abs() < 0.08, "{row:?}: {ratio}");
        checked += 1;
    }
    assert!(checked >= 4, "{checked} films");
}
