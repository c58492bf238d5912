//! The fit of an interface echo and of a geometric train that runs into it: five numbers and their normal equations.
//!
//! The sums over all pairs of pulses that the equations need are sums of r^(n-1) r^(m-1) times what depends on m - n alone.
//! So the pairs of one distance are summed at once, by the moments Σ q^(n-1), Σ n q^(n-1), Σ n² q^(n-1) with q = r².

use super::dense::Dense;
use super::equations::solve;
use crate::math;

/// Most multiples of the wall that are modelled.
const MULTIPLES: usize = 32;
/// Most multiples of the period at which pulses still look alike, and none.
const NEAR: usize = 10;
/// Numbers that are fitted: interface amplitude, wall amplitude, start, period, decay.
const COUNT: usize = 5;
/// Multiples below this share of the first are left out.
const FAINT: f32 = 0.005;
/// Most steps of a polish.
const STEPS: u8 = 16;
/// Shortest and longest decay.
const DECAY: (f32, f32) = (0.02, 0.97);

/// One set of the five numbers, in the units of the tables.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Fit {
    pub(super) interface: f32,
    pub(super) wall: f32,
    pub(super) start: f32,
    pub(super) period: f32,
    pub(super) decay: f32,
    /// Energy that it explains.
    pub(super) explained: f32,
    /// Variance of the period in points², for noise of variance 1.
    pub(super) period_variance: f32,
    /// How much of an error of the distance from interface to first back wall the period takes up.
    pub(super) offset_share: f32,
}

/// Normal equations, the right side last.
type Rows = [[f32; COUNT + 1]; COUNT];

/// What a fit is made with.
pub(super) struct Overlap<'a> {
    pub(super) tables: Dense<'a>,
    /// Shortest and longest period, in points.
    pub(super) shortest: f32,
    pub(super) longest: f32,
    /// How much later than a period after the interface the first back wall comes, in points.
    pub(super) offset: f32,
    pub(super) noise: f32,
}

/// Sums over the walls' pulses with each other, and with the interface's.
#[derive(Default)]
struct Sums {
    /// Wall with wall; with period, decay; period with start, period; decay with start or period, with decay.
    wall_wall: f32,
    wall_period: f32,
    wall_decay: f32,
    start_start: f32,
    start_period: f32,
    period_period: f32,
    decay_start: f32,
    decay_decay: f32,
    /// The pulse's own curvature.
    own: f32,
    /// Interface with wall, with decay; with start, period (pulse with derivatives); derivative with decay; derivative
    /// with derivatives of start and period.
    first_wall: f32,
    first_decay: f32,
    first_start: f32,
    first_period: f32,
    slope_decay: f32,
    slope_start: f32,
    slope_period: f32,
}

impl Overlap<'_> {
    /// Place of a multiple of a fit.
    pub(super) fn place(&self, fit: &Fit, multiple: usize) -> f32 {
        fit.start + self.offset + multiple as f32 * fit.period
    }

    /// How many multiples of a fit lie in the window and matter.
    pub(super) fn multiples(&self, fit: &Fit) -> usize {
        let (mut count, mut weight) = (0, 1.0);
        while count < MULTIPLES && weight > FAINT && self.place(fit, count + 1) <= self.tables.last() {
            weight *= fit.decay;
            count += 1;
        }
        count
    }

    /// Gauss-Newton steps with Levenberg's damping from a start to the nearest maximum.
    #[inline(never)]
    pub(super) fn polish(&self, start: Fit) -> Option<Fit> {
        let mut here = start;
        let mut rows = Rows::default();
        here.explained = self.normal(&here, &mut rows)?;
        let mut damping = 1e-2;
        let limit = 0.1 * self.tables.points_per_cycle;
        for _ in 0..STEPS {
            let mut damped = rows;
            for (number, row) in damped.iter_mut().enumerate() {
                *row.get_mut(number)? *= 1.0 + damping;
            }
            let Some([interface, wall, place, period, decay]) = solve(&mut damped) else {
                break;
            };
            let mut next = Fit {
                interface: here.interface + interface,
                wall: here.wall + wall,
                start: here.start + math::clamp(place, -limit, limit),
                period: math::clamp(
                    here.period + math::clamp(period, -limit, limit),
                    self.shortest,
                    self.longest,
                ),
                decay: math::clamp(here.decay + math::clamp(decay, -0.2, 0.2), DECAY.0, DECAY.1),
                ..here
            };
            next.explained = self.normal(&next, &mut damped).unwrap_or(0.0);
            if next.explained > here.explained {
                let gained = next.explained - here.explained;
                (rows, here) = (damped, next);
                damping *= 0.2;
                if gained < 0.01 * self.noise * self.noise {
                    break;
                }
            } else {
                damping = math::larger(damping, 1e-3) * 8.0;
                if damping > 1e4 {
                    break;
                }
            }
        }
        Some(here)
    }

    /// The same fit with the variance of its period and the share of an offset's error in it.
    #[inline(never)]
    pub(super) fn judged(&self, fit: &Fit) -> Option<Fit> {
        let mut rows = Rows::default();
        let _ = self.normal(fit, &mut rows)?;
        let mut other = rows;
        // The period's variance for noise of variance 1 is its diagonal entry of the inverse.
        for (number, row) in other.iter_mut().enumerate() {
            *row.last_mut()? = if number == 3 { 1.0 } else { 0.0 };
        }
        let [_, _, _, period_variance, _] = solve(&mut other)?;
        // Every back wall later by the same: what it looks like to the five numbers.
        let sums = self.sums(fit, self.multiples(fit));
        let (a, b) = (fit.wall, fit.interface);
        let seen = [
            a * sums.first_start,
            0.0,
            a * (b * sums.slope_start + a * sums.start_start),
            a * a * sums.start_period,
            a * a * sums.decay_start,
        ];
        for (row, value) in rows.iter_mut().zip(seen) {
            *row.last_mut()? = value;
        }
        let [_, _, _, offset_share, _] = solve(&mut rows)?;
        Some(Fit {
            period_variance,
            offset_share,
            ..*fit
        })
    }

    /// Normal equations of the five numbers at a fit, and what it explains.
    #[inline(never)]
    fn normal(&self, fit: &Fit, rows: &mut Rows) -> Option<f32> {
        let count = self.multiples(fit);
        if count == 0 {
            return None;
        }
        let sums = self.sums(fit, count);
        let (a, b) = (fit.wall, fit.interface);
        let first = self.tables.around(fit.start);
        let (mut wall, mut start, mut period, mut decay) = (0.0, 0.0, 0.0, 0.0);
        let (mut weight, mut weaker) = (1.0, 0.0);
        for multiple in 1..=count {
            let order = multiple as f32;
            let here = self.tables.around(self.place(fit, multiple));
            wall += weight * here.value;
            start += weight * here.slope;
            period += order * weight * here.slope;
            decay += (order - 1.0) * weaker * here.value;
            weaker = weight;
            weight *= fit.decay;
        }
        let model = b * b + a * (2.0 * b * sums.first_wall + a * sums.wall_wall);
        let explained = 2.0 * (b * first.value + a * wall) - model;
        // Upper triangle; the right side is what the model leaves over. A shift of everything leaves the model's energy as it is.
        *rows = [
            [
                1.0,
                sums.first_wall,
                a * sums.first_start,
                a * sums.first_period,
                a * sums.first_decay,
                first.value - (b + a * sums.first_wall),
            ],
            [
                0.0,
                sums.wall_wall,
                -b * sums.first_start,
                a * sums.wall_period,
                a * sums.wall_decay,
                wall - (b * sums.first_wall + a * sums.wall_wall),
            ],
            [
                0.0,
                0.0,
                b * b * sums.own + a * (2.0 * b * sums.slope_start + a * sums.start_start),
                a * (b * sums.slope_period + a * sums.start_period),
                a * (b * sums.slope_decay + a * sums.decay_start),
                b * first.slope + a * start,
            ],
            [
                0.0,
                0.0,
                0.0,
                a * a * sums.period_period,
                a * a * sums.decay_start,
                a * (period - (b * sums.first_period + a * sums.wall_period)),
            ],
            [
                0.0,
                0.0,
                0.0,
                0.0,
                a * a * sums.decay_decay,
                a * (decay - (b * sums.first_decay + a * sums.wall_decay)),
            ],
        ];
        Some(explained)
    }

    #[inline(never)]
    fn sums(&self, fit: &Fit, count: usize) -> Sums {
        let mut sums = Sums::default();
        let (r, inverse) = (fit.decay, 1.0 / fit.decay);
        // Pulses of two multiples `apart` from each other, times the decay between them.
        let mut apart = [(0.0, 0.0, 0.0); NEAR];
        let mut power = 1.0;
        for (number, of) in apart.iter_mut().enumerate() {
            let spacing = number as f32 * fit.period;
            if spacing > self.tables.longest() {
                break;
            }
            let alike = self.tables.alike(spacing);
            *of = (power * alike.value, power * alike.slope, -power * alike.curvature);
            if number == 0 {
                sums.own = -alike.curvature;
            }
            power *= r;
        }
        let (mut m0, mut m1, mut m2, mut weight) = (0.0, 0.0, 0.0, 1.0);
        for last in 1..=count {
            let order = last as f32;
            m0 += weight;
            m1 += order * weight;
            m2 += order * order * weight;
            weight *= r * r;
            // So many pairs are this far apart.
            let Some(&(value, slope, down)) = apart.get(count - last) else {
                continue;
            };
            let distance = (count - last) as f32;
            let both = if last == count { 1.0 } else { 2.0 };
            let one = 0.5 * both;
            sums.wall_wall += both * value * m0;
            sums.start_start += both * down * m0;
            sums.start_period += one * down * (2.0 * m1 + distance * m0);
            sums.period_period += both * down * (m2 + distance * m1);
            sums.wall_period += distance * slope * m0;
            sums.wall_decay += one * value * inverse * (2.0 * m1 + (distance - 2.0) * m0);
            sums.decay_start -= distance * slope * inverse * m0;
            sums.decay_decay += both * value * inverse * inverse * (m2 + (distance - 2.0) * m1 + (1.0 - distance) * m0);
        }
        let (mut weight, mut weaker) = (1.0, 0.0);
        for multiple in 1..=count.min(NEAR) {
            let order = multiple as f32;
            let spacing = self.offset + order * fit.period;
            if spacing > self.tables.longest() {
                break;
            }
            let alike = self.tables.alike(spacing);
            let (falling, down) = ((order - 1.0) * weaker, -alike.curvature);
            sums.first_wall += weight * alike.value;
            sums.first_decay += falling * alike.value;
            sums.first_start += weight * alike.slope;
            sums.first_period += order * weight * alike.slope;
            sums.slope_decay -= falling * alike.slope;
            sums.slope_start += weight * down;
            sums.slope_period += order * weight * down;
            weaker = weight;
            weight *= r;
        }
        sums
    }
}
