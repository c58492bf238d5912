//! What the spreading of the beam does to arrivals: piston diffraction, for the estimator in use.
//!
//! The further an echo has come, the more its phase is ahead of a plane wave's. Correlation, which follows the phase,
//! finds it early; the envelope's maximum, which follows the phase's slope, late. What matters is the whole round
//! trip, S = Σ path · wavelength / radius² (delay line and part), and only differences show: between two echoes, or
//! between an echo and a zero that was learned on a block.
//!
//! A fluid's piston: shear waves from the element's edge are neglected. The pulse counts by its -6 dB band, as a
//! Gaussian spectrum. A reference pulse that was itself learned through some path has the turned phase of that path in it:
//! what an echo differs by is D(S) / D(S_ref), which [`Spreading::relative_to`] tabulates. Where the pulse's path is not
//! known, S_ref = 0 is taken; between two echoes, and between echo and block, the difference cancels to 4 % of the shift.

use crate::math;
use core::f32::consts::{FRAC_1_SQRT_2, FRAC_PI_2, TAU};
use heapless::Vec;

/// What diffraction does to one frequency of a pulse that a piston sends and receives again:
/// D(S) = 1 - exp(-ju) [J0(u) + j J1(u)], u = 2 π / S.
///
/// Rogers & Van Buren 1974 (formula from memory). S is the sum of path times wavelength over the
/// squared element radius, over the whole round trip. It is the paraxial form: within 1 % of the exact
/// integral for elements of five wavelengths and more and paths beyond a third of the radius. Shear
/// waves from the element's edge are neglected, and the effective element can be smaller than the one
/// on the data sheet.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Diffraction {
    /// Real part.
    pub in_phase: f32,
    /// Imaginary part.
    pub quadrature: f32,
    /// How far the phase is ahead of a plane wave's, in radians, 0 to π/2.
    pub phase_advance: f32,
}

impl Diffraction {
    /// The factor at the normalised distance `s`. 0 or less is a plane wave: factor 1.
    #[must_use]
    pub fn at(s: f32) -> Self {
        let u = TAU / s;
        if s <= 0.0 || u == f32::INFINITY {
            return Self {
                in_phase: 1.0,
                quadrature: 0.0,
                phase_advance: 0.0,
            };
        }
        if u < 0.5 {
            // Far away the real part is the small difference of large numbers. The power series of
            // both parts, divided by u so that the phase survives however small u gets.
            let square = u * u;
            let real = u * (0.25 - square * (7.0 / 192.0 - square * (11.0 / 3840.0)));
            let imaginary = 0.5 - square * (5.0 / 48.0 - square * (7.0 / 640.0));
            return Self {
                in_phase: u * real,
                quadrature: u * imaginary,
                phase_advance: math::atan2(imaginary, real),
            };
        }
        let (j0, j1) = math::bessel_j0_j1(u);
        let (sin, cos) = (math::sin(u), math::cos(u));
        let in_phase = 1.0 - (cos * j0 + sin * j1);
        let quadrature = sin * j0 - cos * j1;
        Self {
            in_phase,
            quadrature,
            phase_advance: math::clamp(math::atan2(quadrature, in_phase), 0.0, FRAC_PI_2),
        }
    }

    /// This factor times another's conjugate: what correlation with a pulse of that distance makes of an echo of this.
    fn seen_from(&self, pulse: &Self) -> Self {
        Self {
            in_phase: self.in_phase * pulse.in_phase + self.quadrature * pulse.quadrature,
            quadrature: self.quadrature * pulse.in_phase - self.in_phase * pulse.quadrature,
            phase_advance: self.phase_advance - pulse.phase_advance,
        }
    }

    /// Amplitude relative to a plane wave, 0 to about 1.
    #[must_use]
    pub fn magnitude(&self) -> f32 {
        math::sqrt(self.in_phase * self.in_phase + self.quadrature * self.quadrature)
    }
}

/// Abscissas and weights of Gauss and Hermite for a mean over a normal distribution, nine points (made with NumPy's
/// `hermite_e.hermegauss`); the positive half, and the middle.
const NODES: [(f32, f32); 5] = [
    (0.0, 0.406_349_2),
    (1.023_255_7, 0.244_097_5),
    (2.076_848, 0.049_916_407),
    (3.205_429, 2.789_141_3e-3),
    (4.512_746, 2.234_584_4e-5),
];
/// -6 dB width of a Gaussian amplitude spectrum over its standard deviation, 2 sqrt(0.6 ln 10).
const WIDTH: f32 = 2.350_788;
/// Lines below this share of the centre frequency carry nothing.
const LOWEST_LINE: f32 = 0.05;

/// One line of a pulse's spectrum after its way: frequency over centre frequency, and the factor times the line's weight.
#[derive(Clone, Copy, Debug)]
struct Line {
    frequency: f32,
    in_phase: f32,
    quadrature: f32,
}

type Lines = Vec<Line, 9>;

/// A Gaussian spectrum of this standard deviation at a normalised distance of the centre frequency, as a pulse from the
/// distance `reference` sees it.
fn spectrum(s: f32, reference: f32, deviation: f32) -> Lines {
    let mut lines = Lines::new();
    let mut add = |frequency: f32, weight: f32| {
        let factor = Diffraction::at(s / frequency).seen_from(&Diffraction::at(reference / frequency));
        // Nine places for nine nodes.
        let _ = lines.push(Line {
            frequency,
            in_phase: weight * factor.in_phase,
            quadrature: weight * factor.quadrature,
        });
    };
    for (node, weight) in NODES {
        add(1.0 + deviation * node, weight);
        if node > 0.0 && 1.0 - deviation * node > LOWEST_LINE {
            add(1.0 - deviation * node, weight);
        }
    }
    lines
}

/// How many cycles of the centre frequency too early correlation with the undisturbed pulse finds an echo, for the
/// normalised distance `s` of the centre frequency and the relative bandwidth (-6 dB, two-way). Least squares finds
/// the same place.
///
/// The correlation is the mean of D(S f0 / f) over the pulse's energy spectrum; Newton's method takes its maximum from
/// where the centre frequency's phase puts it.
#[must_use]
pub fn correlation_advance(s: f32, bandwidth: f32) -> f32 {
    let start = Diffraction::at(s).phase_advance;
    advance_of_carrier(start, &spectrum(s, 0.0, bandwidth * (FRAC_1_SQRT_2 / WIDTH)))
}

/// The maximum near the centre frequency's phase, in cycles.
fn advance_of_carrier(phase: f32, lines: &Lines) -> f32 {
    let mut advance = phase / TAU;
    for _ in 0..4 {
        let (mut slope, mut curve) = (0.0, 0.0);
        for line in lines {
            let angle = TAU * line.frequency * advance;
            let (sin, cos) = (math::sin(angle), math::cos(angle));
            slope += line.frequency * (line.quadrature * cos - line.in_phase * sin);
            curve += line.frequency * line.frequency * (line.in_phase * cos + line.quadrature * sin);
        }
        if !(curve > 0.0) {
            break;
        }
        advance += slope / (TAU * curve);
    }
    advance
}

/// How many cycles of the centre frequency too late the maximum of the envelope comes: the mean of D(S f0 / f) over the
/// pulse's amplitude spectrum, Newton's method on the square of its magnitude. Of the opposite sign of
/// [`correlation_advance`]; for [`Estimator::EnvelopePeak`](crate::echo::arrival::Estimator::EnvelopePeak).
#[must_use]
pub fn envelope_delay(s: f32, bandwidth: f32) -> f32 {
    delay_of_envelope(&spectrum(s, 0.0, bandwidth / WIDTH))
}

fn delay_of_envelope(lines: &Lines) -> f32 {
    let mut delay = 0.0;
    for _ in 0..6 {
        // The signal relative to the carrier, and its derivatives by time in cycles.
        let (mut re, mut im, mut re1, mut im1, mut re2, mut im2) = (0.0, 0.0, 0.0, 0.0, 0.0, 0.0);
        for line in lines {
            let omega = TAU * (line.frequency - 1.0);
            let (sin, cos) = (math::sin(omega * delay), math::cos(omega * delay));
            let a = line.in_phase * cos - line.quadrature * sin;
            let b = line.in_phase * sin + line.quadrature * cos;
            re += a;
            im += b;
            re1 -= omega * b;
            im1 += omega * a;
            re2 -= omega * omega * a;
            im2 -= omega * omega * b;
        }
        let slope = re * re1 + im * im1;
        let curve = re1 * re1 + im1 * im1 + re * re2 + im * im2;
        if !(curve < 0.0) {
            break;
        }
        delay -= slope / curve;
    }
    delay
}

/// Intervals of the table.
const STEPS: usize = 32;

/// What the beam does to correlation with pulses of one bandwidth, as a table, because each of its values costs ten thousand
/// instructions: made with the gauge, read for every echo. In cycles of the centre frequency.
///
/// Evenly spaced in sqrt(S) / (1 + sqrt(S)), in which the advance is smooth at both ends; cubic interpolation. Off by at
/// most a thousandth of a cycle for bandwidths from 30 %.
#[derive(Clone, Debug, PartialEq)]
pub struct Spreading {
    advance: [f32; STEPS + 1],
    lag: [f32; STEPS + 1],
}

impl Spreading {
    /// A beam that does not spread.
    pub const NONE: Self = Self {
        advance: [0.0; STEPS + 1],
        lag: [0.0; STEPS + 1],
    };

    /// The table for a relative bandwidth and a pulse that no beam has changed.
    #[must_use]
    pub fn new(bandwidth: f32) -> Self {
        Self::relative_to(0.0, bandwidth)
    }

    /// The table for correlation with a pulse that has come the normalised distance `reference` itself, 0 for one that no
    /// beam has changed: the mean of D(S f0 / f) D*(S_ref f0 / f) over the pulse's energy spectrum, which has its maximum at 0
    /// for S = S_ref.
    #[must_use]
    pub fn relative_to(reference: f32, bandwidth: f32) -> Self {
        let mut table = Self::NONE;
        let of_pulse = Diffraction::at(reference).phase_advance;
        let rows = table.advance.iter_mut().zip(&mut table.lag).enumerate();
        for (step, (advance, lag)) in rows.skip(usize::from(!(reference > 0.0))) {
            // The last one stands for infinity; a million is as far as a tenth of the table's error.
            let root = step as f32 / math::larger((STEPS - step) as f32, 0.032);
            let s = root * root;
            // The correlation's spectrum is the pulse's, squared.
            let lines = spectrum(s, reference, bandwidth * (FRAC_1_SQRT_2 / WIDTH));
            *advance = advance_of_carrier(Diffraction::at(s).phase_advance - of_pulse, &lines);
            *lag = *advance + delay_of_envelope(&lines);
        }
        table
    }

    /// [`correlation_advance`] at a normalised distance, against that of the pulse; that of 0 for less.
    #[must_use]
    pub fn advance(&self, s: f32) -> f32 {
        interpolated(&self.advance, s)
    }

    /// How far the correlation's envelope peaks behind its carrier, which
    /// [`Echo::group_lag`](crate::echo::Echo::group_lag) shows.
    #[must_use]
    pub fn group_lag(&self, s: f32) -> f32 {
        interpolated(&self.lag, s)
    }
}

/// One of the table's columns at a normalised distance.
fn interpolated(column: &[f32; STEPS + 1], s: f32) -> f32 {
    let root = math::sqrt(s);
    let place = if root < 1e6 { root / (1.0 + root) } else { 1.0 } * STEPS as f32;
    let cell = math::saturating_i32(math::floor(place)).clamp(1, STEPS as i32 - 2);
    let x = place - cell as f32;
    let Some([before, left, right, after]) = usize::try_from(cell - 1)
        .ok()
        .and_then(|start| column.get(start..start + 4))
    else {
        return 0.0;
    };
    // Lagrange through four points at -1, 0, 1, 2.
    let (below, above, far) = (x + 1.0, x - 1.0, x - 2.0);
    (above * far * (3.0 * below * left - x * before) + below * x * (above * after - 3.0 * far * right)) * (1.0 / 6.0)
}

/// The beam's spreading along the echoes of one wall, in any unit of time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Beam<'a> {
    /// The advance by distance.
    pub table: &'a Spreading,
    /// Normalised distance at the start of the wall: that of the delay line.
    pub start: f32,
    /// What a unit of straight time adds to it.
    pub rate: f32,
    /// One cycle of the centre frequency.
    pub cycle: f32,
    /// Normalised distance whose advance the start of the wall holds: that of the interface echo, or of the block on
    /// which the zero was learned. `None` if nobody knows: then only differences between echoes can be corrected.
    pub held: Option<f32>,
}

impl Beam<'_> {
    pub(super) fn scaled(&self, factor: f32) -> Self {
        Self {
            rate: self.rate / factor,
            cycle: self.cycle * factor,
            ..*self
        }
    }

    pub(super) fn deviation(&self, straight: f32) -> f32 {
        let held = self.held.map_or(0.0, |s| self.table.advance(s));
        self.cycle * (held - self.table.advance(self.start + self.rate * straight))
    }

    pub(super) fn group_lag(&self, straight: f32) -> f32 {
        self.cycle * self.table.group_lag(self.start + self.rate * straight)
    }

    pub(super) fn straighten(&self, elapsed: f32) -> f32 {
        if self.held.is_none() {
            return elapsed;
        }
        // The advance grows by a few per cent of what the time does: each step gains more than a digit.
        let mut straight = elapsed;
        for _ in 0..3 {
            straight = elapsed - self.deviation(straight);
        }
        straight
    }
}

#[cfg(test)]
pub(crate) mod tests {
    use super::*;
    use proptest::prelude::*;
    use std::vec::Vec;

    #[test]
    fn val_diffraction_factor() {
        // Rogers & Van Buren 1974 (formula from memory), evaluated with SciPy 1.17; S = 0.5 also with
        // mpmath to 30 digits.
        for (s, real, imaginary, degrees) in [
            (0.05, 0.949_721_1, 0.050_179_4, 3.024_463_6),
            (0.1, 0.928_966_6, 0.070_753_59, 4.355_453_4),
            (0.5, 0.842_492_6, 0.154_530_82, 10.393_716),
            (1.0, 0.779_723_1, 0.212_382_53, 15.236_704),
            (1.5, 0.694_230_1, 0.260_043_94, 20.534_89),
            (2.0, 0.695_757_8, 0.284_615_34, 22.248_117),
            (3.0, 0.592_241_9, 0.431_480_25, 36.075_36),
            (5.0, 0.314_330_6, 0.452_789_44, 55.231_26),
            (10.0, 0.093_186_78, 0.289_366_46, 72.149_51),
            (30.0, 0.010_896_318, 0.103_767_17, 84.005_49),
            (100.0, 0.000_986_392_4, 0.031_390_1, 88.200_15),
        ] {
            let factor = Diffraction::at(s);
            assert!((factor.in_phase - real).abs() < 1.5e-6, "S = {s}: {factor:?}");
            assert!((factor.quadrature - imaginary).abs() < 1.5e-6, "S = {s}: {factor:?}");
            assert!(
                (factor.phase_advance.to_degrees() - degrees).abs() < 2e-4,
                "S = {s}: {factor:?}"
            );
            assert!((factor.magnitude() - real.hypot(imaginary)).abs() < 2e-6);
        }
    }

    #[test]
    fn edges_of_the_factor() {
        assert_eq!(Diffraction::at(0.0).in_phase, 1.0);
        assert_eq!(Diffraction::at(1e-40).phase_advance, 0.0);
        assert_eq!(Diffraction::at(-1.0).phase_advance, 0.0);
        assert_eq!(Diffraction::at(f32::INFINITY).phase_advance, FRAC_PI_2);
        assert!(Diffraction::at(f32::NAN).phase_advance.is_nan());
        // The series and the closed form meet: S = 4π.
        let (below, above) = (Diffraction::at(12.566_3), Diffraction::at(12.566_5));
        assert!((below.in_phase - above.in_phase).abs() < 2e-5);
        assert!((below.phase_advance - above.phase_advance).abs() < 2e-5);
    }

    /// How far correlation with the undisturbed pulse finds an echo too early, in cycles of the centre frequency:
    /// Newton's method on the correlation's peak, over a Gaussian spectrum of the given -6 dB width.
    pub(crate) fn correlation_advance_over_60_lines(s: f64, bandwidth: f64) -> f64 {
        advance_against_a_pulse(s, 0.0, bandwidth)
    }

    /// The same by correlation with a pulse that has come the distance `reference` itself.
    fn advance_against_a_pulse(s: f64, reference: f64, bandwidth: f64) -> f64 {
        const LINES: i32 = 60;
        let lines: Vec<(f64, f64, f64)> = (1..=LINES)
            .map(|line| 1.0 + 1.3 * bandwidth * (2.0 * f64::from(line) / f64::from(LINES) - 1.0))
            .filter(|f| *f > 0.02)
            .map(|f| {
                let at = |s: f64| {
                    let factor = Diffraction::at((s / f) as f32);
                    (f64::from(factor.in_phase), f64::from(factor.quadrature))
                };
                let ((re, im), (of_pulse, turned)) = (at(s), at(reference));
                let weight = (-(f - 1.0).powi(2) * 8.0 * std::f64::consts::LN_2 / bandwidth.powi(2)).exp();
                (
                    f,
                    weight * (re * of_pulse + im * turned),
                    weight * (im * of_pulse - re * turned),
                )
            })
            .collect();
        let phase = |s: f64| f64::from(Diffraction::at(s as f32).phase_advance);
        let mut advance = (phase(s) - phase(reference)) / std::f64::consts::TAU;
        for _ in 0..8 {
            let (mut slope, mut curve) = (0.0, 0.0);
            for &(f, re, im) in &lines {
                let omega = std::f64::consts::TAU * f;
                let (sin, cos) = (omega * advance).sin_cos();
                slope += omega * (im * cos - re * sin);
                curve -= omega * omega * (re * cos + im * sin);
            }
            advance -= slope / curve;
        }
        advance
    }

    #[test]
    fn width_of_a_gaussian_spectrum() {
        // -6 dB is 10^(-6/20): a full width of 2 sqrt(2 · 0.3 ln 10) standard deviations.
        let width = 2.0 * (0.6 * std::f64::consts::LN_10).sqrt();
        assert!((f64::from(WIDTH) - width).abs() < 1e-6, "{width}");
    }

    #[test]
    fn val_advance_of_correlation_and_delay_of_the_envelope() {
        // (element mm, wall mm, correlation ns, envelope ns), Gaussian pulse 5 MHz, 60 %, steel 5920 m/s: Rogers & Van
        // Buren's factor in the frequency domain with SciPy 1.17. Correlation early, envelope late.
        for (diameter, wall, correlation, envelope) in [
            (6.0, 2.0, 5.848_885_4, 4.185_402),
            (6.0, 10.0, 16.290_27, 19.754_297),
            (6.0, 50.0, 39.532_36, 7.469_747),
            (10.0, 2.0, 3.303_299_2, 2.237_12f32),
            (10.0, 10.0, 8.234_137, 6.199_1),
            (10.0, 50.0, 27.314_366, 18.135_908),
        ] {
            let s = 2.0 * wall * 1.184 / (0.25 * diameter * diameter);
            let advance = 200.0 * correlation_advance(s, 0.6);
            assert!(
                (advance / correlation - 1.0).abs() < 0.012,
                "S = {s}: {advance} {correlation}"
            );
            let table = 200.0 * Spreading::new(0.6).advance(s);
            assert!(
                (table / correlation - 1.0).abs() < 0.015,
                "S = {s}: {table} {correlation}"
            );
            let delay = 200.0 * envelope_delay(s, 0.6);
            assert!((delay / envelope - 1.0).abs() < 0.04, "S = {s}: {delay} {envelope}");
        }
    }

    #[test]
    fn the_table_follows_the_integral() {
        for bandwidth in [0.3, 0.6, 1.0] {
            let table = Spreading::new(bandwidth);
            for step in 0..200 {
                let s = 0.03 * 1.06f32.powi(step);
                let exact = correlation_advance_over_60_lines(f64::from(s), f64::from(bandwidth)) as f32;
                let off = table.advance(s) - exact;
                assert!(off.abs() < 1e-3, "{bandwidth}, S = {s}: {off} of {exact}");
            }
        }
    }

    #[test]
    fn against_a_pulse_that_has_come_a_way_itself() {
        for bandwidth in [0.3, 0.6, 1.0] {
            for reference in [0.4f32, 2.6, 6.6, 40.0] {
                let table = Spreading::relative_to(reference, bandwidth);
                assert!(table.advance(reference).abs() < 1e-3, "{bandwidth}, {reference}");
                let lag = table.group_lag(reference);
                assert!(lag.abs() < 5e-3, "{bandwidth}, {reference}: {lag}");
                for step in 0..120 {
                    let s = 0.03 * 1.1f32.powi(step);
                    let exact = advance_against_a_pulse(s.into(), reference.into(), bandwidth.into()) as f32;
                    let off = table.advance(s) - exact;
                    assert!(
                        off.abs() < 1e-3,
                        "{bandwidth}, S = {s} of {reference}: {off} of {exact}"
                    );
                }
            }
        }
    }

    #[test]
    fn ends_of_the_table() {
        let table = Spreading::new(0.6);
        assert_eq!((table.advance(0.0), table.advance(-1.0)), (0.0, 0.0));
        assert!(table.advance(f32::NAN).abs() < 0.3);
        for far in [1e6, 1e20, f32::INFINITY] {
            assert!((table.advance(far) - 0.225).abs() < 0.02, "{}", table.advance(far));
        }
        assert_eq!(Spreading::NONE.advance(3.0), 0.0);
    }

    #[test]
    fn straightening_undoes_the_spreading() {
        let table = Spreading::new(0.6);
        for held in [Some(0.0), Some(0.8)] {
            // 5 MHz, 6 mm, steel: S = 2.63 for a round trip of 3.378 µs, in ns.
            let beam = Beam {
                table: &table,
                start: 0.8,
                rate: 2.631 / 3378.0,
                cycle: 200.0,
                held,
            };
            for straight in [400.0, 1000.0, 3378.0, 40_000.0] {
                let back = beam.straighten(straight + beam.deviation(straight));
                assert!((back - straight).abs() < 0.02, "{straight}: {back}");
                let samples = beam.scaled(0.05);
                assert!((20.0 * samples.deviation(0.05 * straight) - beam.deviation(straight)).abs() < 1e-3);
            }
        }
    }

    proptest! {
        #[test]
        fn phase_stays_between_nothing_and_a_quarter(s in 1e-6f32..1e9) {
            let factor = Diffraction::at(s);
            prop_assert!((0.0..=FRAC_PI_2).contains(&factor.phase_advance));
            prop_assert!(factor.magnitude() <= 1.001);
        }

        #[test]
        fn any_input_ends(s in any::<f32>(), bandwidth in any::<f32>()) {
            let _ = Spreading::new(bandwidth).advance(s);
            let _ = Spreading::relative_to(s, bandwidth).group_lag(s);
            let _ = envelope_delay(s, bandwidth);
        }
    }
}
