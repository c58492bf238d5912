//! Echoes that the converter has cut off: fitted to the samples that are whole.
//!
//! **In**: the codes under an echo some of which stand at a rail, and a first arrival. **Out**: [`Mended`]: the arrival by
//! least squares over the whole samples alone (amplitude, delay and a constant are free), and how much of the pulse's
//! information on its delay they carry.
//!
//! A correlation that takes cut samples as they are scatters half again to three times as far as it must (by
//! simulation at 40 dB: 0.24, 0.46, 0.90 ns for 1.5, 3 and 5 times full scale), without them 0.14, 0.18, 0.29 ns
//! (`val_clipped_echoes`). [`fill_in`] lets the joint fit of a train use the same samples: with the cut samples set to
//! what the fitted pulse says, the full correlation has its maximum where the fit to the whole samples has it.
//!
//! Not for an echo of which hardly anything is whole ([`LEAST_INFORMATION`]), nor for what the receiver does after it
//! was overdriven (baseline shift, slow recovery): that is not in the samples' codes.

use crate::echo::arrival::Arrival;
use crate::echo::interpolate;
use crate::echo::pulse::ReferencePulse;
use crate::math;
use crate::record::AdcFormat;
use crate::units::SamplePosition;

/// Share of the pulse's delay information below which a cut echo is not believed.
pub const LEAST_INFORMATION: f32 = 0.03;
/// Most steps of the fit; it converges in three or four.
const STEPS: usize = 6;
/// Steps below this many samples are the last: what follows them is smaller by far.
const SMALL: f32 = 1e-3;

/// By how much each step has to be smaller than the one before.
const LESS: f32 = 0.7;

/// A cut echo, fitted to its whole samples.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Mended {
    /// Place and amplitude (codes, with sign; it may be far beyond full scale).
    pub arrival: Arrival,
    /// Share of Σ s'² that the whole samples carry on the delay, 0 to 1, with amplitude and constant unknown.
    pub information: f32,
    /// Mean square of what the fit leaves at the whole samples, in squared codes.
    pub unexplained: f32,
    /// Energy of the pulse at the whole samples.
    pub energy: f32,
}

/// Stands this code at a rail?
#[must_use]
pub fn is_cut(code: i16, format: &AdcFormat) -> bool {
    code >= format.upper_rail() || code <= format.lower_rail()
}

/// Sums of the linearised fit: amplitude, constant and delay.
#[derive(Default)]
struct Normal {
    ss: f32,
    s1: f32,
    sd: f32,
    n: f32,
    d1: f32,
    dd: f32,
    sx: f32,
    x1: f32,
    dx: f32,
    xx: f32,
}

impl Normal {
    fn add(&mut self, s: f32, d: f32, x: f32) {
        self.ss += s * s;
        self.s1 += s;
        self.sd += s * d;
        self.n += 1.0;
        self.d1 += d;
        self.dd += d * d;
        self.sx += s * x;
        self.x1 += x;
        self.dx += d * x;
        self.xx += x * x;
    }

    /// Amplitude and constant at this delay, with what the pulse's derivative still finds then and its variance; `None`
    /// if the samples do not tell them.
    fn solve(&self) -> Option<(f32, f32, f32, f32)> {
        let determinant = self.ss * self.n - self.s1 * self.s1;
        if !(determinant > 1e-6 * self.ss * self.n) {
            return None;
        }
        let apart = |p: f32, q: f32| {
            let first = (self.n * p - self.s1 * q) / determinant;
            (first, (self.ss * q - self.s1 * p) / determinant)
        };
        let (amplitude, constant) = apart(self.sx, self.x1);
        let (along_s, along_one) = apart(self.sd, self.d1);
        let found = self.dx - amplitude * self.sd - constant * self.d1;
        let left = self.dd - along_s * self.sd - along_one * self.d1;
        Some((amplitude, constant, found, left))
    }
}

/// Fits the pulse to the whole samples under an echo. `None` if they do not determine it, or if the fit leaves the
/// first arrival by more than half a cycle.
#[must_use]
#[inline(never)]
pub fn mend(
    codes: &[i16],
    format: &AdcFormat,
    pulse: &ReferencePulse<'_>,
    first: &Arrival,
    samples_per_cycle: f32,
) -> Option<Mended> {
    let start = SamplePosition::new(first.position.index, first.position.fraction - pulse.facts.origin);
    let under = codes.get(start.index as usize..)?;
    let mut place = start.fraction;
    let mut result = None;
    let mut last = f32::INFINITY;
    for _ in 0..STEPS {
        let normal = sums(under, format, pulse, place);
        let (amplitude, constant, found, left) = normal.solve()?;
        // x = a s(t - place) + b: a shift by δ adds -a δ s'.
        let step = -found / (amplitude * left);
        let unexplained = normal.xx - amplitude * normal.sx - constant * normal.x1;
        result = Some((
            amplitude,
            left,
            unexplained / math::larger(normal.n - 4.0, 1.0),
            normal.ss,
        ));
        let step = math::clamp(step, -0.1 * samples_per_cycle, 0.1 * samples_per_cycle);
        place += step;
        // Steps that do not become small are those of a shape that is not the pulse's: no number of them ends.
        let leaves = (place - start.fraction).abs() > 0.5 * samples_per_cycle;
        if !(step.abs() > SMALL && step.abs() < LESS * last) || leaves {
            break;
        }
        last = step.abs();
    }
    let (amplitude, left, unexplained, energy) = result?;
    let information = math::clamp(left / pulse.facts.derivative_energy, 0.0, 1.0);
    if !((place - start.fraction).abs() < 0.5 * samples_per_cycle && information > LEAST_INFORMATION) {
        return None;
    }
    Some(Mended {
        arrival: Arrival {
            position: SamplePosition::new(start.index, place + pulse.facts.origin),
            amplitude,
            // Side lobes of a cut echo tell nothing.
            group_lag: samples_per_cycle,
            sharpness: 1.0,
        },
        information,
        unexplained: math::larger(unexplained, 0.0),
        energy,
    })
}

/// The sums over the whole samples, with the pulse's first sample at `place` after the first of `under`.
fn sums(under: &[i16], format: &AdcFormat, pulse: &ReferencePulse<'_>, place: f32) -> Normal {
    let between = interpolate::Between::new(-place);
    let at = |number: i32| between.of(pulse.samples, number);
    let mut normal = Normal::default();
    // The pulse from three samples before the one that is looked at to three behind it.
    let mut near = [0.0, at(-3), at(-2), at(-1), at(0), at(1), at(2)];
    for (number, &code) in (3..).zip(under).take(pulse.samples.len()) {
        let [_, b, c, d, e, f, g] = near;
        near = [b, c, d, e, f, g, at(number)];
        if is_cut(code, format) {
            continue;
        }
        let [first, second, third, s, fifth, sixth, seventh] = near;
        // Its slope by central differences of sixth order: 0.1 % low at a sixth of the sample rate.
        let slope = 0.75 * (fifth - third) - 0.15 * (sixth - second) + (1.0 / 60.0) * (seventh - first);
        normal.add(s, slope, f32::from(code));
    }
    normal
}

/// Adds to correlations of the codes with the pulse, R\[k\] = Σ s\[j\] x\[first + k + j\], what the cut samples under an
/// echo lack of the fitted pulse.
pub fn fill_in(
    codes: &[i16],
    format: &AdcFormat,
    pulse: &ReferencePulse<'_>,
    echo: SamplePosition,
    amplitude: f32,
    first: i32,
    lags: &mut [f32],
) {
    let start = SamplePosition::new(echo.index, echo.fraction - pulse.facts.origin);
    let between = interpolate::Between::new(-start.fraction);
    let under = codes.get(start.index as usize..).unwrap_or(&[]);
    for (number, &code) in (0..).zip(under).take(pulse.samples.len() + 1) {
        if !is_cut(code, format) {
            continue;
        }
        let lacking = amplitude * between.of(pulse.samples, number) - f32::from(code);
        // The sample's place in the pulse, for the first lag.
        let place = i64::from(start.index) + i64::from(number) - i64::from(first);
        for (k, lag) in lags.iter_mut().enumerate() {
            let sample = usize::try_from(place - k as i64)
                .ok()
                .and_then(|j| pulse.samples.get(j));
            *lag += lacking * sample.copied().unwrap_or(0.0);
        }
    }
}
