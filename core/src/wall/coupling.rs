//! The couplant film: a spring between probe and part that moves echoes far more than its own travel time.
//!
//! All shifts are phase shifts at the centre frequency, for a film of oil (1.51 MRayl, 1740 m/s) between
//! half-spaces at normal incidence. For a broadband pulse they agree with correlation within 8 % while the
//! film is thin against its quarter wavelength (87 µm at 5 MHz). Glycerine moves less, water up to a fifth more.

use crate::math;
use crate::setup::{Probe, ProbeFace, Span};
use crate::units::{Hertz, Metres, Seconds};
use core::f32::consts::{PI, TAU};

/// Acoustic impedance of low-carbon steel in Rayl (7850 kg/m³ times 5920 m/s): what a part is
/// taken to be.
pub const STEEL_IMPEDANCE: f32 = 46.47e6;
/// Impedance of the couplant film, oil, in Rayl.
pub(super) const FILM_IMPEDANCE: f32 = 1.51e6;
/// Velocity in the couplant film in metres per second.
pub(super) const FILM_VELOCITY: f32 = 1740.0;

/// Acoustic impedance of the probe's face in Rayl.
#[must_use]
pub const fn face_impedance(face: ProbeFace) -> f32 {
    match face {
        ProbeFace::Hard => 38.5e6,
        ProbeFace::Plastic => 2.48e6,
    }
}

/// How much later an echo comes that went through the film twice, compared with no film:
/// 2 φ / ω with tan φ = tan(ω h / c) (Z0 Zs / Zf + Zf) / (Z0 + Zs), the phase of the transmission through
/// one layer. For thin films that is a spring, 2 atan(ω τ / 2) / ω with τ = 2 h / c (Z0 Zs / Zf + Zf) / (Z0 + Zs).
///
/// The delay grows with the film, and less and less: two films differ in delay by less than the film that is
/// their difference causes.
#[must_use]
pub fn transmission_delay(face: ProbeFace, part_impedance: f32, frequency: Hertz, film: Metres) -> Seconds {
    let (probe, omega) = (face_impedance(face), TAU * frequency.get());
    let angle = omega * film.get() / FILM_VELOCITY;
    let stiff = probe * part_impedance / FILM_IMPEDANCE + FILM_IMPEDANCE;
    let within = math::atan2(stiff * math::sin(angle), (probe + part_impedance) * math::cos(angle));
    // The phase and the bare travel through the film pass every multiple of π together.
    let phase = within + TAU * math::floor((angle + PI) / TAU);
    Seconds::new(2.0 * phase / omega)
}

/// How much *earlier* an echo comes that was reflected inside the part by the film under the probe, compared
/// with reflection at a free surface: the phase of (Zs y - 1) / (Zs y + 1), y = 1 / Z0 + j ω h / (Zf c), a
/// spring in front of the face. The film's mass is left out, which for a plastic face overstates the shift.
///
/// If the part is softer than the face (aluminium under a ceramic face), an echo behind a very thin film is
/// turned upside down, and the value approaches half a cycle.
#[must_use]
pub fn reflection_advance(face: ProbeFace, part_impedance: f32, frequency: Hertz, film: Metres) -> Seconds {
    let omega = TAU * frequency.get();
    let (mismatch, spring) = (
        part_impedance / face_impedance(face),
        spring(part_impedance, omega, film),
    );
    let phase = math::atan2(spring, mismatch - 1.0) - math::atan2(spring, mismatch + 1.0);
    Seconds::new(phase / omega)
}

/// Largest [`reflection_advance`] over all films from none to `film`. The shift is largest for a thin film:
/// 1.2 µm of oil between steel and a ceramic face at 5 MHz. It has its maximum where the film's
/// impedance ratio is sqrt((Zs / Z0)² - 1).
#[must_use]
pub fn largest_reflection_advance(face: ProbeFace, part_impedance: f32, frequency: Hertz, film: Metres) -> Seconds {
    let omega = TAU * frequency.get();
    let mismatch = part_impedance / face_impedance(face);
    let worst = math::sqrt(mismatch * mismatch - 1.0);
    let here = spring(part_impedance, omega, film);
    let spring = if here > worst { worst } else { here };
    let phase = math::atan2(spring, mismatch - 1.0) - math::atan2(spring, mismatch + 1.0);
    Seconds::new(phase / omega)
}

/// Impedance of the part over that of the film's compliance.
pub(super) fn spring(part_impedance: f32, omega: f32, film: Metres) -> f32 {
    omega * film.get() * part_impedance / (FILM_IMPEDANCE * FILM_VELOCITY)
}

/// How far the couplant film can move the time that a span reads: a half-width, for a steel part. 0 if the
/// set-up says that the film cannot differ. It counts for every contact probe and all spans: a hard face shifts even echo
/// to echo.
///
/// The budget takes it for a rectangle about nothing, which at k = 2 is 1.15 half-widths: every film up to the stated one lies
/// inside, whatever films are usual. From the transmission pulse the shift goes either way, as the film is thicker or thinner than at
/// calibration. Between echoes it goes one way, towards thin walls, and under a hard face lies near its largest value for most films
/// (0.58 to 1 of it from 0.3 to 5 µm at 5 MHz): a distribution about its mean would be narrower, but that mean would have to be added
/// to every reading, and be wrong by itself for the film that nobody has measured. So where this term dominates, more than
/// 95 % of readings lie inside.
///
/// * Transmission pulse to back wall: the echo went through the film twice, [`transmission_delay`].
/// * Back wall to back wall: each period contains one reflection at the film, [`largest_reflection_advance`].
/// * Interface to back wall: the interface echo is shifted by its reflection at the film, and the back wall by
///   its way through it. For a film without loss these two are tied to each other (energy is conserved:
///   2 arg t = arg r + arg r' + π, with r seen from the probe and r' from the part), and what remains is exactly
///   the shift of a reflection seen from the part, as for back wall to back wall.
///
/// Not to be trusted for parts of about the face's impedance or below it (aluminium under a hard face).
#[must_use]
pub fn half_width(probe: &Probe, span: Span) -> Seconds {
    let (face, film, frequency) = (probe.face, probe.couplant_film, probe.centre_frequency);
    match span {
        Span::TransmissionPulseToBackWall => transmission_delay(face, STEEL_IMPEDANCE, frequency, film),
        Span::InterfaceToBackWall | Span::BackWallToBackWall => {
            largest_reflection_advance(face, STEEL_IMPEDANCE, frequency, film)
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    const FIVE: Hertz = Hertz::from_mhz(5.0);

    fn um(film: f32) -> Metres {
        Metres::new(film * 1e-6)
    }

    #[test]
    fn val_two_way_transmission() {
        // (face, film µm, ns): exact layer matrices applied to a Gaussian pulse, 5 MHz, 60 %, shift by
        // correlation; NumPy, formula from memory (Brekhovskikh, Waves in Layered Media).
        for (face, film, correlation) in [
            (ProbeFace::Hard, 0.5, 7.975_680_5),
            (ProbeFace::Hard, 1.0, 15.676_127),
            (ProbeFace::Hard, 2.0, 29.500_315),
            (ProbeFace::Hard, 5.0, 56.925_26),
            (ProbeFace::Hard, 10.0, 76.785_52),
            (ProbeFace::Hard, 20.0, 89.889_03),
            (ProbeFace::Plastic, 0.5, 0.913_769_85),
            (ProbeFace::Plastic, 1.0, 1.827_274_2),
            (ProbeFace::Plastic, 5.0, 9.094_585),
            (ProbeFace::Plastic, 10.0, 17.941_158),
            (ProbeFace::Plastic, 20.0, 34.197_96),
        ] {
            let delay = transmission_delay(face, STEEL_IMPEDANCE, FIVE, um(film)).as_ns();
            assert!(
                (delay - correlation).abs() < 0.025 * correlation,
                "{face:?} {film} µm: {delay} ns, correlation {correlation} ns"
            );
        }
        // The thin-film law: 13.96188 (hard) and 1.590 (plastic) times the travel time 2 h / c.
        for (face, law) in [(ProbeFace::Hard, 13.961_88), (ProbeFace::Plastic, 1.590)] {
            let delay = transmission_delay(face, STEEL_IMPEDANCE, FIVE, um(0.01)).as_ns();
            assert!(
                (delay / (2.0 * 0.01e-6 / 1740.0 * 1e9) - law).abs() < 0.002 * law,
                "{face:?}"
            );
        }
    }

    #[test]
    fn val_reflection() {
        // As above, first to second back wall; (face, film µm, ns early, tolerance). Leaving out the film's
        // mass overstates the plastic face's shift.
        for (face, film, correlation, tolerance) in [
            (ProbeFace::Hard, 1.0, 29.006_21, 0.08),
            (ProbeFace::Hard, 2.0, 27.266_997, 0.08),
            (ProbeFace::Hard, 5.0, 17.779_414, 0.08),
            (ProbeFace::Hard, 10.0, 10.238_355, 0.08),
            (ProbeFace::Plastic, 1.0, 0.063_516, 0.7),
            (ProbeFace::Plastic, 5.0, 0.310_881, 0.7),
            (ProbeFace::Plastic, 20.0, 0.926_901, 0.7),
        ] {
            let shift = reflection_advance(face, STEEL_IMPEDANCE, FIVE, um(film)).as_ns();
            assert!(
                shift > correlation && shift < correlation * (1.0 + tolerance),
                "{face:?} {film} µm: {shift} ns, correlation {correlation} ns"
            );
        }
    }

    /// Phase shift of back wall minus interface, from the complex reflection and transmission of one layer in f64.
    fn interface_to_back_wall(probe: f64, part: f64, omega: f64, film: f64) -> f64 {
        let (zf, angle) = (f64::from(FILM_IMPEDANCE), omega * film / f64::from(FILM_VELOCITY));
        // Both share a denominator: t² ~ 1 / den², r ~ num / den.
        let den = ((probe + part) * angle.cos(), (probe * part / zf + zf) * angle.sin());
        let num = ((part - probe) * angle.cos(), (zf - probe * part / zf) * angle.sin());
        let (transmitted, reflected) = (-2.0 * den.1.atan2(den.0), num.1.atan2(num.0) - den.1.atan2(den.0));
        -(transmitted - reflected) / omega
    }

    #[test]
    fn interface_to_back_wall_shifts_like_back_wall_to_back_wall() {
        let omega = std::f64::consts::TAU * 5e6;
        for film in [0.5, 1.0, 2.0, 5.0, 10.0] {
            let difference = -interface_to_back_wall(38.5e6, 46.47e6, omega, film * 1e-6) * 1e9;
            let reflection =
                f64::from(reflection_advance(ProbeFace::Hard, STEEL_IMPEDANCE, FIVE, um(film as f32)).as_ns());
            assert!(
                (difference - reflection).abs() < 0.02 * reflection,
                "{film} µm: {difference} against {reflection} ns"
            );
            let difference = -interface_to_back_wall(2.48e6, 46.47e6, omega, film * 1e-6) * 1e9;
            let reflection =
                f64::from(reflection_advance(ProbeFace::Plastic, STEEL_IMPEDANCE, FIVE, um(film as f32)).as_ns());
            assert!(
                difference > 0.0 && difference < reflection,
                "{film} µm: {difference} against {reflection} ns"
            );
        }
    }

    #[test]
    fn half_widths_by_span() {
        let contact = Probe::contact(FIVE, 0.6);
        let delay_line = Probe::delay_line(FIVE, 0.6);
        let ns = |probe: &Probe, span| half_width(probe, span).as_ns();
        assert!((ns(&contact, Span::TransmissionPulseToBackWall) - 29.5).abs() < 0.5);
        assert!((ns(&contact, Span::BackWallToBackWall) - 31.1).abs() < 0.2);
        assert!(ns(&delay_line, Span::InterfaceToBackWall) < 0.3);
        let dry = contact.with_couplant_film(Metres::ZERO);
        for span in [
            Span::TransmissionPulseToBackWall,
            Span::InterfaceToBackWall,
            Span::BackWallToBackWall,
        ] {
            assert_eq!(half_width(&dry, span), Seconds::ZERO);
        }
    }

    #[test]
    fn the_rectangle_holds_every_film_between_echoes() {
        // Shares of the films up to the stated one (drawn evenly) whose shift lies within k = 2 of the rectangle, and within
        // one about the middle of all shifts, which would have to be corrected for.
        for (face, film_um) in [
            (ProbeFace::Hard, 2.0),
            (ProbeFace::Hard, 5.0),
            (ProbeFace::Hard, 10.0),
            (ProbeFace::Plastic, 10.0),
        ] {
            let half_width = largest_reflection_advance(face, STEEL_IMPEDANCE, FIVE, um(film_um)).as_ns();
            let expanded = 2.0 * math::RECTANGULAR * half_width;
            let shifts: std::vec::Vec<f32> = (1..=1000)
                .map(|n| reflection_advance(face, STEEL_IMPEDANCE, FIVE, um(film_um * n as f32 / 1000.0)).as_ns())
                .collect();
            let inside = shifts.iter().filter(|shift| (0.0..=expanded).contains(*shift)).count();
            let mean = shifts.iter().sum::<f32>() / 1000.0;
            std::println!(
                "{face:?}, up to {film_um} um: U {expanded:.2} ns, mean {mean:.2} ns, {inside} of 1000 inside"
            );
            assert_eq!(inside, 1000);
            assert!(mean > 0.3 * half_width && expanded < 1.16 * half_width, "{mean}");
        }
    }

    proptest! {
        #[test]
        fn more_film_never_means_less_delay(film in 0.0f32..80.0, more in 0.0f32..80.0, hard: bool, mhz in 1.0f32..15.0) {
            let face = if hard { ProbeFace::Hard } else { ProbeFace::Plastic };
            let delay = |film| transmission_delay(face, STEEL_IMPEDANCE, Hertz::from_mhz(mhz), um(film)).as_ns();
            prop_assert!(delay(film + more) >= delay(film) - 1e-3);
        }

        #[test]
        fn two_thin_films_differ_by_less_than_their_difference_causes(film in 0.0f32..6.0, more in 0.0f32..6.0, hard: bool, mhz in 1.0f32..15.0) {
            let face = if hard { ProbeFace::Hard } else { ProbeFace::Plastic };
            let delay = |film| transmission_delay(face, STEEL_IMPEDANCE, Hertz::from_mhz(mhz), um(film)).as_ns();
            prop_assert!(delay(film + more) - delay(film) <= delay(more) * 1.001 + 1e-3);
        }

        #[test]
        fn the_largest_is_above_every_smaller_film(film in 0.0f32..200.0, share in 0.0f32..=1.0, hard: bool, mhz in 1.0f32..15.0) {
            let face = if hard { ProbeFace::Hard } else { ProbeFace::Plastic };
            let f = Hertz::from_mhz(mhz);
            let largest = largest_reflection_advance(face, STEEL_IMPEDANCE, f, um(film)).as_ns();
            prop_assert!(reflection_advance(face, STEEL_IMPEDANCE, f, um(film * share)).as_ns() <= largest + 1e-3);
        }
    }
}
