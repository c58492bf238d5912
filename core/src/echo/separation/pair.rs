//! Two pulses of known shape in one window: the search over all pairs of delays.
//!
//! For delays t1 and t2 the best amplitudes follow in closed form, and what the two explain of the record's
//! energy is J = (c1² + c2² - 2 ρ c1 c2) / (1 - ρ²), with the correlation c at the two delays and the pulse's
//! autocorrelation ρ at their spacing (variable projection: Golub and Pereyra 1973, from memory). Every pair
//! of a grid is tried, because J has a maximum in every half cycle; the best are polished by Gauss-Newton steps
//! (Levenberg's damping) in the two delays alone.

use super::lags::Lags;
use crate::echo::correlation::{Sign, coarse_maximum, refine};
use crate::echo::interpolate::REACH;
use crate::math;
use crate::order;
use heapless::Vec;

/// Least number of grid points a cycle. The grid only finds basins, half a cycle wide: what is decided on is interpolated to
/// 3e-5 of the correlation, and polished.
pub const GRID: f32 = 20.0;
/// Most starts that are polished.
const STARTS: usize = 8;
/// Most pairs that are kept.
pub const KEPT: usize = 4;
/// Smallest share of one pulse in the other that counts as a second echo.
const LEAST_RATIO: f32 = 0.05;
/// Most steps of a polish.
const STEPS: u8 = 12;

/// One pulse fitted.
#[derive(Clone, Copy, Debug)]
pub struct Single {
    /// Its delay, in points.
    pub place: f32,
    /// Amplitude times the root of the pulse's energy.
    pub amplitude: f32,
}

impl Single {
    /// Energy that it explains.
    #[must_use]
    pub fn explained(&self) -> f32 {
        self.amplitude * self.amplitude
    }
}

/// Two pulses fitted; amplitudes carry the root of the pulse's energy.
#[derive(Clone, Copy, Debug)]
pub struct Pair {
    /// Delay of the first, in points.
    pub first: f32,
    /// Delay of the second, in points.
    pub second: f32,
    /// Amplitude of the first.
    pub first_amplitude: f32,
    /// Amplitude of the second.
    pub second_amplitude: f32,
    /// Energy that the two explain.
    pub explained: f32,
    /// Variance of the spacing in points², for noise of variance 1.
    pub spacing_variance: f32,
}

impl Pair {
    /// From the first to the second, in points.
    #[must_use]
    pub fn spacing(&self) -> f32 {
        self.second - self.first
    }

    /// Is neither of the two a mere trifle of the other?
    #[must_use]
    pub fn is_balanced(&self) -> bool {
        let (a, b) = (self.first_amplitude.abs(), self.second_amplitude.abs());
        a >= LEAST_RATIO * b && b >= LEAST_RATIO * a
    }
}

/// The best single pulse.
#[must_use]
pub fn single(lags: &Lags<'_>) -> Option<Single> {
    let last = usize::try_from(math::saturating_i32(lags.last())).ok()?;
    let coarse = coarse_maximum(lags.correlation, REACH, last, Sign::Either, lags.points_per_cycle)?;
    let (place, amplitude) = refine(lags.correlation, coarse);
    Some(Single { place, amplitude })
}

/// Where a polish starts.
#[derive(Clone, Copy, Debug)]
struct Start {
    first: f32,
    spacing: f32,
    explained: f32,
}

/// The best pairs, the best of them first, at spacings of at least `shortest` points. `grid` holds the
/// correlation between its points while the search runs; with less room than the window needs, the window is cut.
#[must_use]
#[inline(never)]
pub fn pairs(lags: &Lags<'_>, shortest: f32, noise: f32, grid: &mut [f32]) -> Vec<Pair, KEPT> {
    let divide = math::larger(math::floor(GRID / lags.points_per_cycle + 0.999), 1.0);
    let fine = 1.0 / divide;
    let places = usize::try_from(math::saturating_i32((lags.last() - REACH as f32) * divide)).unwrap_or(0) + 1;
    let room = places.min(grid.len());
    let grid = grid.get_mut(..room).unwrap_or(&mut []);
    for (number, value) in grid.iter_mut().enumerate() {
        *value = lags.at(REACH as f32 + number as f32 * fine);
    }
    let starts = starts(lags, shortest, fine, grid);
    let mut found: Vec<Pair, KEPT> = Vec::new();
    for start in &starts {
        let Some(pair) = polish(lags, start.first, start.first + start.spacing, shortest, noise) else {
            continue;
        };
        if pair.is_balanced() {
            insert(&mut found, pair);
        }
    }
    found
}

/// Keeps the list in the order of what is explained, without twins.
fn insert(found: &mut Vec<Pair, KEPT>, pair: Pair) {
    let twin = found
        .iter()
        .any(|other| (other.first - pair.first).abs() < 0.1 && (other.second - pair.second).abs() < 0.1);
    if twin {
        return;
    }
    let place = found
        .iter()
        .position(|other| other.explained < pair.explained)
        .unwrap_or(found.len());
    if found.is_full() && place < found.len() {
        let _ = found.pop();
    }
    if found.push(pair).is_ok() {
        order::sink_last(found, |a, b| a.explained > b.explained);
    }
}

/// The best pair at every spacing of the grid, and of those the local maxima.
#[inline(never)]
fn starts(lags: &Lags<'_>, shortest: f32, fine: f32, grid: &[f32]) -> Vec<Start, STARTS> {
    let mut starts: Vec<Start, STARTS> = Vec::new();
    let first = usize::try_from(math::saturating_i32(shortest / fine)).unwrap_or(0) + 1;
    let last = usize::try_from(math::saturating_i32(lags.longest() / fine)).unwrap_or(0);
    // Three neighbouring spacings tell a local maximum.
    let none = Start {
        first: 0.0,
        spacing: 0.0,
        explained: 0.0,
    };
    let (mut before, mut middle) = (none, none);
    for distance in first..=last.min(grid.len()) + 1 {
        let spacing = distance as f32 * fine;
        let now = if distance <= last {
            best_at(grid, distance, lags.alike(spacing)).map_or(none, |(index, explained)| Start {
                first: REACH as f32 + index as f32 * fine,
                spacing,
                explained,
            })
        } else {
            none
        };
        if middle.explained > 0.0 && middle.explained >= before.explained && middle.explained > now.explained {
            let place = starts
                .iter()
                .position(|other| other.explained < middle.explained)
                .unwrap_or(starts.len());
            if starts.is_full() && place < starts.len() {
                let _ = starts.pop();
            }
            // `insert` could panic, as far as the optimiser for size can tell.
            if starts.push(middle).is_ok() {
                order::sink_last(&mut starts, |a, b| a.explained > b.explained);
            }
        }
        (before, middle) = (middle, now);
    }
    starts
}

/// The best pair of grid points `distance` apart: index of the first, and what the two explain.
fn best_at(grid: &[f32], distance: usize, alike: f32) -> Option<(usize, f32)> {
    let later = grid.get(distance..)?;
    let share = 1.0 / (1.0 - alike * alike);
    let twice = 2.0 * alike;
    let (mut index, mut best) = (0, 0.0);
    for (number, (&x, &y)) in grid.iter().zip(later).enumerate() {
        let explained = x * (x - twice * y) + y * y;
        if explained > best {
            (index, best) = (number, explained);
        }
    }
    (best > 0.0).then_some((index, best * share))
}

/// Gauss-Newton steps from a pair of delays to the nearest maximum.
///
/// With the amplitudes eliminated the normal equations are S u = r, u = amplitude times step: S has the
/// diagonal κ - ρ'²/(1 - ρ²) and beside it -ρ'' - ρ ρ'²/(1 - ρ²); r is the slope of the correlation of what is left
/// over. S is also the information (for unit noise and amplitudes) that the spacing's variance follows from.
#[must_use]
#[inline(never)]
pub fn polish(lags: &Lags<'_>, first: f32, second: f32, shortest: f32, noise: f32) -> Option<Pair> {
    let (low, high) = (REACH as f32, lags.last());
    let longest_step = 0.1 * lags.points_per_cycle;
    let enough = 0.01 * noise * noise;
    let mut damping = 1e-3;
    let mut here = Step::at(lags, first, second)?;
    for _ in 0..STEPS {
        let (s11, s12) = (here.own * (1.0 + damping), here.cross);
        let determinant = s11 * s11 - s12 * s12;
        if !(determinant > 0.0) {
            return None;
        }
        let u1 = (s11 * here.slope1 - s12 * here.slope2) / determinant;
        let u2 = (s11 * here.slope2 - s12 * here.slope1) / determinant;
        // What the step promises.
        let gain = u1 * here.slope1 + u2 * here.slope2;
        if gain < enough {
            break;
        }
        let limited = |step: f32| math::clamp(step, -longest_step, longest_step);
        let t1 = math::clamp(here.pair.first + limited(u1 / here.pair.first_amplitude), low, high);
        let t2 = math::clamp(here.pair.second + limited(u2 / here.pair.second_amplitude), low, high);
        let next = if t2 - t1 >= shortest && t2 - t1 <= lags.longest() {
            Step::at(lags, t1, t2)
        } else {
            None
        };
        match next {
            Some(next) if next.pair.explained > here.pair.explained => {
                here = next;
                damping *= 0.2;
            }
            _ => {
                damping = math::larger(damping, 1e-3) * 8.0;
                if damping > 1e3 {
                    break;
                }
            }
        }
    }
    Some(here.pair)
}

/// One pair with what the next step needs.
struct Step {
    pair: Pair,
    own: f32,
    cross: f32,
    slope1: f32,
    slope2: f32,
}

impl Step {
    fn at(lags: &Lags<'_>, first: f32, second: f32) -> Option<Self> {
        let (c1, c2) = (lags.around(first), lags.around(second));
        let alike = lags.alike_around(second - first);
        let rho = alike.value;
        let share = 1.0 / (1.0 - rho * rho);
        if !(share > 0.0 && share.is_finite()) {
            return None;
        }
        let a1 = (c1.value - rho * c2.value) * share;
        let a2 = (c2.value - rho * c1.value) * share;
        let lost = alike.slope * alike.slope * share;
        let own = lags.derivative_energy - lost;
        let cross = -alike.curvature - rho * lost;
        let determinant = own * own - cross * cross;
        let inverse = own / (a1 * a1) + own / (a2 * a2) + 2.0 * cross / (a1 * a2);
        Some(Self {
            pair: Pair {
                first,
                second,
                first_amplitude: a1,
                second_amplitude: a2,
                explained: c1.value * a1 + c2.value * a2,
                spacing_variance: inverse / determinant,
            },
            own,
            cross,
            slope1: c1.slope + a2 * alike.slope,
            slope2: c2.slope - a1 * alike.slope,
        })
    }
}
