//! One or two pulses whose common shape is only roughly known: the fit for a pulse from a data sheet.
//!
//! The modelled pulse exp(-v²/2) (1 + γ (v³ - 3v)) cos(ω u + φ), v = u/σ, may be turned in phase, moved in frequency,
//! wider, narrower or less symmetrical than the data sheet says, the same for both echoes. All of it is fitted together
//! with delays and amplitudes, with the data sheet as prior knowledge: normal with the standard deviations
//! below. What a wrong shape would pass off as a second echo is then explained by the shape, in the hypothesis of
//! one echo too. Gauss-Newton with Marquardt's damping (1963, from memory) on the samples themselves.

use super::equations::solve;
use crate::echo::pulse::ReferencePulse;
use crate::math;

/// Standard deviation of the phase: 25 degrees.
const PHASE: f32 = 0.436;
/// Relative standard deviation of the centre frequency: the slope of attenuation in the part is in it.
const FREQUENCY: f32 = 0.05;
/// Relative standard deviation of the pulse's length.
const WIDTH: f32 = 0.08;
/// Standard deviation of the skewness γ: a rise of half or twice the decay is about 0.1.
const SKEW: f32 = 0.07;
/// A Gaussian's duration at -20 dB over its σ: 2 sqrt(2 ln 10).
const DURATION_OVER_SIGMA: f32 = 4.291_932;
/// The pulse counts as zero this many σ from its middle (-42 dB).
const SUPPORT: f32 = 3.1;
/// Numbers that a fit of two has: amplitude and delay of the first, phase, frequency, width, skewness, amplitude and
/// delay of the second.
const COUNT: usize = 8;

/// Points a cycle: enough for a band up to two and a half times the centre frequency, and no more, for every point costs.
const POINTS_PER_CYCLE: f32 = 5.0;

/// What the fit knows from the start. It counts in points: means of as many neighbouring samples as leave 5 to 10 points a
/// cycle, so that its work does not grow with the sample rate. What the means do to the pulse is in its figures.
#[derive(Clone, Copy, Debug)]
pub struct Model<'a> {
    codes: &'a [i16],
    /// Samples a point.
    stride: usize,
    /// What a code of no signal is.
    mean: f32,
    /// Radians a point of the centre frequency.
    turn: f32,
    /// The envelope's standard deviation in points.
    sigma: f32,
    /// Root mean square of a point's noise, in codes.
    noise: f32,
    /// Amplitude of the points' pulse over that of the samples'.
    lowered: f32,
}

/// Where a fit stands or starts.
#[derive(Clone, Copy, Debug, Default)]
pub struct Fit {
    /// Point of the first echo's middle ([`Model::point_of`]).
    pub first: f32,
    /// Its amplitude in codes.
    pub first_amplitude: f32,
    /// Point of the second echo's middle.
    pub second: f32,
    /// Its amplitude; 0 in a fit of one.
    pub second_amplitude: f32,
    /// Phase in radians, beyond the data sheet's.
    pub phase: f32,
    /// Relative change of the frequency.
    pub frequency: f32,
    /// Relative change of the width.
    pub width: f32,
    /// Skewness γ.
    pub skew: f32,
    /// Energy of the points that is explained, less what the change of shape costs as prior knowledge sees it.
    pub explained: f32,
    /// Variance of the spacing in points²; for a fit of two that has come to its end.
    pub spacing_variance: f32,
}

/// Normal equations: a row each, the right side last.
type Rows = [[f32; COUNT + 1]; COUNT];

/// Two sets of normal equations, kept in the caller's scratch memory to spare the stack.
#[derive(Debug)]
pub struct Work<'w> {
    here: &'w mut Rows,
    next: &'w mut Rows,
}

impl<'w> Work<'w> {
    /// Takes them from `memory`, which needs [`WORK`] entries.
    #[must_use]
    pub fn new(memory: &'w mut [f32]) -> Option<Self> {
        let (rows, _) = memory.as_chunks_mut::<{ COUNT + 1 }>();
        let (here, rest) = rows.split_first_chunk_mut::<COUNT>()?;
        let (next, _) = rest.split_first_chunk_mut::<COUNT>()?;
        Some(Self { here, next })
    }
}

/// Entries of scratch memory that a fit needs.
pub const WORK: usize = 2 * COUNT * (COUNT + 1);

impl<'a> Model<'a> {
    /// Takes the figures of the modelled pulse; `noise` is that of a sample.
    #[must_use]
    pub fn new(codes: &'a [i16], mean: f32, pulse: &ReferencePulse<'_>, samples_per_cycle: f32, noise: f32) -> Self {
        let stride = usize::try_from(math::saturating_i32(samples_per_cycle / POINTS_PER_CYCLE))
            .unwrap_or(1)
            .max(1);
        let samples = stride as f32;
        // A mean of n samples smooths about as a Gaussian of the variance (n² - 1) / 12 does, which leaves a Gaussian
        // pulse one: longer, at a lower frequency, lower.
        let variance = (samples * samples - 1.0) / 12.0;
        let sigma = pulse.facts.envelope_duration / DURATION_OVER_SIGMA;
        let longer = math::sqrt(1.0 + variance / (sigma * sigma));
        let turn = core::f32::consts::TAU / samples_per_cycle;
        let slower = 1.0 / (longer * longer);
        Self {
            codes,
            stride,
            mean,
            turn: turn * slower * samples,
            sigma: sigma * longer / samples,
            noise: noise / math::sqrt(samples),
            lowered: math::exp(-0.5 * variance * turn * turn * slower) / longer,
        }
    }

    /// What a fit's amplitudes are times this, samples' amplitudes are.
    #[must_use]
    pub fn amplitude_of_samples(&self) -> f32 {
        1.0 / self.lowered
    }

    /// The point at a sample of the codes.
    #[must_use]
    pub fn point_of(&self, sample: f32) -> f32 {
        let samples = self.stride as f32;
        (sample - 0.5 * (samples - 1.0)) / samples
    }

    /// The sample at a point.
    #[must_use]
    pub fn sample_of(&self, point: f32) -> f32 {
        let samples = self.stride as f32;
        point * samples + 0.5 * (samples - 1.0)
    }

    /// Samples a point: energies of points times this are energies of samples.
    #[must_use]
    pub fn stride(&self) -> f32 {
        self.stride as f32
    }

    /// Share of the explained energy that a fit leaves unexplained, less what noise explains with three standard
    /// deviations to spare.
    #[must_use]
    pub fn unexplained(&self, fit: &Fit) -> f32 {
        let (first, count) = self.support(fit);
        let (mut sum, mut squares, mut points) = (0.0, 0.0, 0.0);
        for signal in self.signals(first, count) {
            sum += signal;
            squares += signal * signal;
            points += 1.0;
        }
        let energy = squares - sum * (sum / math::larger(points, 1.0));
        let freedom = math::larger(points - 5.0, 1.0);
        let by_noise = self.noise * self.noise * (freedom + 3.0 * math::sqrt(2.0 * freedom));
        math::larger(energy - fit.explained - by_noise, 0.0) / fit.explained
    }

    /// First point and number of points under the pulses of a fit.
    fn support(&self, fit: &Fit) -> (usize, usize) {
        let sigma = self.sigma * (1.0 + fit.width);
        let (early, late) = if fit.second_amplitude == 0.0 {
            (fit.first, fit.first)
        } else {
            (
                math::smaller(fit.first, fit.second),
                math::larger(fit.first, fit.second),
            )
        };
        let whole = |place: f32| usize::try_from(math::saturating_i32(math::floor(place))).unwrap_or(0);
        let begin = whole(early - SUPPORT * sigma);
        (begin, whole(late + SUPPORT * sigma + 1.0).saturating_sub(begin))
    }

    /// Points without the mean.
    fn signals(&self, first: usize, count: usize) -> impl Iterator<Item = f32> {
        let codes = self.codes.get(first.saturating_mul(self.stride)..).unwrap_or(&[]);
        let share = 1.0 / self.stride as f32;
        let mean = self.mean;
        codes.chunks_exact(self.stride.max(1)).take(count).map(move |codes| {
            let mut sum = 0.0;
            for &code in codes {
                sum += f32::from(code);
            }
            sum * share - mean
        })
    }

    /// Fits from a start, one echo (`second_amplitude` is 0 and stays it) or two, in so many steps at most.
    #[must_use]
    #[inline(never)]
    pub fn fit(&self, start: &Fit, steps: u8, work: &mut Work<'_>) -> Fit {
        let scale = math::larger(start.first_amplitude.abs(), start.second_amplitude.abs());
        let (mut rows, mut other) = (&mut *work.here, &mut *work.next);
        let mut here = *start;
        here.explained = self.normal(&here, scale, rows, true);
        let enough = math::larger(0.05 * self.noise * self.noise, 3e-6 * here.explained);
        let mut damping = 1e-3;
        for number in 0..steps {
            *other = *rows;
            for (place, row) in other.iter_mut().enumerate() {
                if let Some(own) = row.get_mut(place) {
                    // What is not fitted stands still.
                    *own = if *own > 0.0 { *own * (1.0 + damping) } else { 1.0 };
                }
            }
            let Some([a1, t1, phase, frequency, width, skew, a2, t2]) = solve(other) else {
                break;
            };
            let limit = |step: f32| math::clamp(step, -0.6, 0.6) / self.turn;
            let mut next = Fit {
                first_amplitude: here.first_amplitude + scale * a1,
                first: here.first + limit(t1),
                phase: math::clamp(here.phase + phase, -1.3, 1.3),
                frequency: math::clamp(here.frequency + frequency, -0.3, 0.3),
                width: math::clamp(here.width + width, -0.4, 0.6),
                skew: math::clamp(here.skew + skew, -0.4, 0.4),
                second_amplitude: here.second_amplitude + scale * a2,
                second: here.second + limit(t2),
                ..here
            };
            // The matrix changes little from step to step: every other one makes do with the last.
            let renew = number & 1 == 1;
            if !renew {
                *other = *rows;
            }
            next.explained = self.normal(&next, scale, other, renew);
            if next.explained > here.explained {
                let gained = next.explained - here.explained;
                core::mem::swap(&mut rows, &mut other);
                here = next;
                damping *= 0.2;
                if gained < enough {
                    break;
                }
            } else {
                damping = math::larger(damping, 1e-3) * 8.0;
                if damping > 1e3 {
                    break;
                }
            }
        }
        if start.second_amplitude != 0.0 {
            here.spacing_variance = self.spacing_variance(rows, scale);
        }
        here
    }

    /// Normal equations at a fit (last column: the right side), in units of `scale` for amplitudes and radians for
    /// delays; only the right side unless they are renewed. Gives what the fit explains.
    #[inline(never)]
    fn normal(&self, fit: &Fit, scale: f32, rows: &mut Rows, renew: bool) -> f32 {
        if renew {
            *rows = [[0.0; COUNT + 1]; COUNT];
        }
        let mut right = [0.0; COUNT];
        let sigma = self.sigma * (1.0 + fit.width);
        let turn = self.turn * (1.0 + fit.frequency);
        let (first, count) = self.support(fit);
        let begin = first as f32;
        let inverse = 1.0 / scale;
        let (b1, b2) = (fit.first_amplitude * inverse, fit.second_amplitude * inverse);
        let mut one = Wave::new(begin - fit.first, sigma, turn, fit);
        let mut two = Wave::new(begin - fit.second, sigma, turn, fit);
        let wider = 1.0 / ((1.0 + fit.width) * sigma * sigma);
        let narrow = 1.0 / (sigma * self.turn);
        let ratio = turn / self.turn;
        let mut explained = 0.0;
        for signal in self.signals(first, count) {
            let signal = signal * inverse;
            let left = signal - b1 * one.direct - b2 * two.direct;
            explained += signal * signal - left * left;
            let slopes = [
                one.direct,
                b1 * (one.along * narrow + ratio * one.turned),
                -(b1 * one.turned + b2 * two.turned),
                -self.turn * (b1 * one.place * one.turned + b2 * two.place * two.turned),
                wider * (b1 * one.place * one.place * one.direct + b2 * two.place * two.place * two.direct),
                b1 * one.skewed + b2 * two.skewed,
                if b2 == 0.0 { 0.0 } else { two.direct },
                b2 * (two.along * narrow + ratio * two.turned),
            ];
            add_right(&mut right, &slopes, left);
            if renew {
                add_products(rows, &slopes);
            }
            one.step();
            two.step();
        }
        for (row, sum) in rows.iter_mut().zip(right) {
            if let Some(last) = row.last_mut() {
                *last = sum;
            }
        }
        self.add_prior(fit, inverse, rows, renew, &mut explained);
        explained * scale * scale
    }

    /// The data sheet as four more observations.
    #[inline(never)]
    fn add_prior(&self, fit: &Fit, inverse: f32, rows: &mut Rows, renew: bool, explained: &mut f32) {
        let noise = self.noise * inverse;
        let known = [
            (fit.phase, PHASE),
            (fit.frequency, FREQUENCY),
            (fit.width, WIDTH),
            (fit.skew, SKEW),
        ];
        for ((number, row), (value, deviation)) in rows.iter_mut().enumerate().skip(2).zip(known) {
            let weight = (noise / deviation) * (noise / deviation);
            if let Some(own) = row.get_mut(number).filter(|_| renew) {
                *own += weight;
            }
            if let Some(right) = row.last_mut() {
                *right -= weight * value;
            }
            *explained -= weight * value * value;
        }
    }

    /// Variance of the spacing from the inverse of the normal equations.
    fn spacing_variance(&self, rows: &mut Rows, scale: f32) -> f32 {
        let direction = [0.0, -1.0, 0.0, 0.0, 0.0, 0.0, 0.0, 1.0];
        for (row, value) in rows.iter_mut().zip(direction) {
            if let Some(right) = row.last_mut() {
                *right = value;
            }
        }
        let Some(answer) = solve(rows) else {
            return f32::INFINITY;
        };
        let mut variance = 0.0;
        for (a, b) in answer.iter().zip(direction) {
            variance += a * b;
        }
        let unit = self.noise / (scale * self.turn);
        variance * unit * unit
    }
}

/// A pulse from sample to sample: two multiplications for the envelope, a turn for the carrier.
struct Wave {
    /// Samples after the pulse's middle.
    place: f32,
    /// The pulse.
    direct: f32,
    /// The same a quarter cycle on.
    turned: f32,
    /// σ times what the envelope's slope contributes to a change of the delay.
    along: f32,
    /// The pulse's derivative by skewness.
    skewed: f32,
    envelope: f32,
    growth: f32,
    change: f32,
    cosine: f32,
    sine: f32,
    turn: (f32, f32),
    inverse: f32,
    skew: f32,
}

impl Wave {
    #[inline(never)]
    fn new(place: f32, sigma: f32, turn: f32, fit: &Fit) -> Self {
        let half = 0.5 / (sigma * sigma);
        let (cosine, sine) = cosine_and_sine(turn * place + fit.phase);
        let mut wave = Self {
            place,
            direct: 0.0,
            turned: 0.0,
            along: 0.0,
            skewed: 0.0,
            envelope: math::exp(-place * place * half),
            growth: math::exp(-(2.0 * place + 1.0) * half),
            change: math::exp(-2.0 * half),
            cosine,
            sine,
            turn: cosine_and_sine(turn),
            inverse: 1.0 / sigma,
            skew: fit.skew,
        };
        wave.fill();
        wave
    }

    fn fill(&mut self) {
        let v = self.place * self.inverse;
        let odd = v * (v * v - 3.0);
        let shape = 1.0 + self.skew * odd;
        let symmetrical = self.envelope * self.cosine;
        self.direct = shape * symmetrical;
        self.turned = shape * self.envelope * self.sine;
        self.skewed = odd * symmetrical;
        self.along = symmetrical * (v * shape - 3.0 * self.skew * (v * v - 1.0));
    }

    #[inline(always)]
    fn step(&mut self) {
        self.place += 1.0;
        self.envelope *= self.growth;
        self.growth *= self.change;
        let (c, s) = self.turn;
        (self.cosine, self.sine) = (self.cosine * c - self.sine * s, self.sine * c + self.cosine * s);
        self.fill();
    }
}

#[inline(never)]
fn cosine_and_sine(angle: f32) -> (f32, f32) {
    (math::cos(angle), math::sin(angle))
}

/// Adds the products of one sample's slopes to the upper triangle. Written out: this runs for every sample of every step, and
/// an optimiser for size leaves loops as they stand.
#[inline(always)]
fn add_products(rows: &mut Rows, slopes: &[f32; COUNT]) {
    macro_rules! add {
        ($row:ident, $slope:ident: [$($skipped:tt)*] $($cell:ident $other:ident)*) => {
            let [$($skipped,)* $($cell,)* _] = $row;
            $(*$cell += $slope * $other;)*
        };
    }
    let [s0, s1, s2, s3, s4, s5, s6, s7] = *slopes;
    let [r0, r1, r2, r3, r4, r5, r6, r7] = rows;
    add!(r0, s0: [] a s0 b s1 c s2 d s3 e s4 f s5 g s6 h s7);
    add!(r1, s1: [_] b s1 c s2 d s3 e s4 f s5 g s6 h s7);
    add!(r2, s2: [_ _] c s2 d s3 e s4 f s5 g s6 h s7);
    add!(r3, s3: [_ _ _] d s3 e s4 f s5 g s6 h s7);
    add!(r4, s4: [_ _ _ _] e s4 f s5 g s6 h s7);
    add!(r5, s5: [_ _ _ _ _] f s5 g s6 h s7);
    add!(r6, s6: [_ _ _ _ _ _] g s6 h s7);
    add!(r7, s7: [_ _ _ _ _ _ _] h s7);
}

/// Adds a sample's slopes times what is left of it.
#[inline(always)]
fn add_right(right: &mut [f32; COUNT], slopes: &[f32; COUNT], left: f32) {
    let [s0, s1, s2, s3, s4, s5, s6, s7] = *slopes;
    let [a, b, c, d, e, f, g, h] = right;
    *a += s0 * left;
    *b += s1 * left;
    *c += s2 * left;
    *d += s3 * left;
    *e += s4 * left;
    *f += s5 * left;
    *g += s6 * left;
    *h += s7 * left;
}
