//! What came back, and when.
//!
//! The steps in the order of the signal: [`scan`] finds candidates in the whole record with integers;
//! [`measure_echoes`] fits the reference pulse at each candidate, in a short `f32` window;
//! [`learning`] makes the reference pulse from a block's shots; [`shots`] tells jitter from arrivals shot by shot; [`separation`] says whether neighbours can be told apart; [`train`] finds the multiples of one wall.

pub mod envelope;
pub mod interpolate;
pub mod pulse;
pub mod learning;
pub mod correlation;
pub mod arrival;
pub mod clipping;
pub mod scan;
pub mod noise;
pub mod rest;
pub mod separation;
pub mod train;
pub mod shots;

use crate::echo::arrival::{Arrival, Estimator, Search, estimate, group_lag_noise};
use crate::echo::clipping::{is_cut, mend};
use crate::echo::correlation::{Sign, energy};
use crate::echo::noise::{Noise, TimingNoise};
use crate::echo::pulse::ReferencePulse;
use crate::echo::scan::Candidate;
use crate::math;
use crate::order;
use crate::record::{Record, SampleRange};
use crate::units::{Decibels, SamplePosition, Seconds};
use crate::workspace::ECHO_CAPACITY;
use heapless::Vec;

/// Sign of an echo relative to the reference pulse.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Polarity {
    /// As the reference pulse.
    Positive,
    /// Upside down.
    Negative,
}

/// What an echo was found to be.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum EchoRole {
    /// The transmission pulse.
    TransmissionPulse,
    /// The end of the delay line, or the part's front surface behind a water path.
    Interface,
    /// The far side of a coating.
    Coating,
    /// A multiple of the wall; the number says which, from 1.
    BackWall(u8),
    /// An echo that travelled partly as a shear wave.
    ModeConverted,
    /// Anything else.
    Other,
}

/// One echo.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Echo {
    /// Place of the reference pulse's origin (its envelope's maximum) in the record.
    pub position: SamplePosition,
    /// The same as a time after the transmission trigger.
    pub arrival: Seconds,
    /// Standard uncertainty of the arrival from the record's noise alone.
    pub standard_uncertainty: Seconds,
    /// Fitted envelope peak in codes, positive.
    pub amplitude: f32,
    /// Sign relative to the reference pulse.
    pub polarity: Polarity,
    /// Envelope peak over the noise's root mean square per sample.
    pub snr: Decibels,
    /// Root of the energy that the fitted pulse leaves unexplained (beyond what noise explains with
    /// five standard deviations to spare) over the root of the fitted energy: 0 for a perfect match.
    pub mismatch: f32,
    /// How far the correlation's envelope peaks behind its carrier ([`Arrival::group_lag`]), less what
    /// four standard deviations of noise explain. It is what a turned phase or an overlapping echo moves;
    /// even attenuation leaves it alone.
    pub group_lag: Seconds,
    /// Some sample under the pulse is clipped.
    pub clipped: bool,
    /// Share of the pulse's information on the delay that the echo was fitted with: 1 for a whole echo, less for a clipped
    /// one, which is fitted to its whole samples alone; 0 if those do not determine it.
    pub information: f32,
    /// What it was found to be.
    pub role: EchoRole,
}

impl Echo {
    /// What noise explains of a group lag.
    fn chance_of_lag(&self, now: &Surroundings<'_>) -> Seconds {
        let noise = now.timing_noise.at(self.position.as_samples());
        let chance = GROUP_LAG_CHANCE * group_lag_noise(now.samples_per_cycle, self.amplitude / noise, &now.pulse);
        now.record.clock().rate.period() * chance
    }

    /// How far the group lag lies from the one that its way gives an echo, beyond what noise explains; with the sign of what
    /// is too much. [`Echo::group_lag`] itself for a way that gives none.
    #[must_use]
    pub fn strange_lag(&self, expected: Seconds, now: &Surroundings<'_>) -> Seconds {
        if expected == Seconds::ZERO {
            return self.group_lag;
        }
        let chance = self.chance_of_lag(now);
        // What noise explains has been taken off, towards nothing: the lag may be so much more, and as much again.
        let (low, high) = if self.group_lag > Seconds::ZERO {
            (self.group_lag, self.group_lag + chance * 2.0)
        } else if self.group_lag < Seconds::ZERO {
            (self.group_lag - chance * 2.0, self.group_lag)
        } else {
            (chance * -2.0, chance * 2.0)
        };
        if expected < low {
            low - expected
        } else if expected > high {
            high - expected
        } else {
            Seconds::ZERO
        }
    }

    /// Fitted amplitude with the polarity's sign.
    #[must_use]
    pub fn signed_amplitude(&self) -> f32 {
        match self.polarity {
            Polarity::Positive => self.amplitude,
            Polarity::Negative => -self.amplitude,
        }
    }
}

impl Echo {
    /// The same echo in a noise that is known better now.
    pub(crate) fn reassess(&mut self, before: &TimingNoise, now: &Surroundings<'_>) {
        if *before == now.timing_noise {
            return;
        }
        let place = self.position.as_samples();
        let (old, new) = (before.at(place), now.timing_noise.at(place));
        self.standard_uncertainty = self.standard_uncertainty * (new / old);
        let more = group_lag_noise(now.samples_per_cycle, self.amplitude / (new - old), &now.pulse);
        if more > 0.0 {
            let allowance = now.record.clock().rate.period() * (GROUP_LAG_CHANCE * more);
            self.group_lag = toward_zero(self.group_lag, allowance);
        }
    }
}

/// Standard deviations of a group lag that chance is allowed.
const GROUP_LAG_CHANCE: f32 = 4.0;

/// A time without what noise explains of it.
fn toward_zero(time: Seconds, allowance: Seconds) -> Seconds {
    let left = math::larger(time.abs().get() - allowance.get(), 0.0);
    Seconds::new(if time.get() < 0.0 { -left } else { left })
}

/// What one echo is measured against.
#[derive(Clone, Copy, Debug)]
pub struct Surroundings<'a> {
    /// The record.
    pub record: Record<'a>,
    /// The reference pulse.
    pub pulse: ReferencePulse<'a>,
    /// Root mean square of the noise per sample, in codes.
    pub noise: f32,
    /// What of the noise moves arrivals: see [`noise`].
    pub timing_noise: TimingNoise,
    /// Samples a cycle of the centre frequency.
    pub samples_per_cycle: f32,
}

impl Surroundings<'_> {
    /// Standard deviation of a fitted amplitude, in codes.
    #[must_use]
    pub fn amplitude_noise(&self) -> f32 {
        self.noise / math::sqrt(self.pulse.facts.energy)
    }

    /// Is an echo of this amplitude at this place (in samples from the record's first) more than a peak of the noise, grain
    /// included?
    #[must_use]
    pub fn stands_out(&self, amplitude: f32, place: f32) -> bool {
        amplitude * math::sqrt(self.pulse.facts.energy) > STANDS_OUT * self.timing_noise.at(place)
    }

    /// Standard deviation of a least-squares arrival in samples, for a known pulse of this amplitude at this place (in
    /// samples from the record's first): timing noise / (amplitude · sqrt(Σ s'²)). In white noise that is the
    /// Cramér-Rao bound.
    #[must_use]
    pub fn arrival_noise(&self, amplitude: f32, place: f32) -> f32 {
        self.timing_noise.at(place) / (amplitude.abs() * math::sqrt(self.pulse.facts.derivative_energy))
    }
}

/// Standard deviations of an amplitude above which a peak is an echo and not grain: among the hundred independent values of a
/// record, chance reaches 4.
pub(crate) const STANDS_OUT: f32 = 6.0;

/// An echo of which this share of the amplitude is unexplained is hardly recognised.
pub(crate) const UNRECOGNISED: f32 = 0.5;

/// The least-squares arrival near `index`, within three quarters of a cycle. `None` if the pulse would stand out of
/// the record.
fn find_arrival(surroundings: &Surroundings<'_>, index: u32, sign: Sign, scratch: &mut [f32]) -> Option<Arrival> {
    let samples_per_cycle = surroundings.samples_per_cycle;
    let search = Search {
        around: index,
        reach: 0.75 * samples_per_cycle,
        sign,
        samples_per_cycle,
    };
    let codes = surroundings.record.codes();
    estimate(Estimator::LeastSquares, codes, &search, &surroundings.pulse, scratch)
}

/// Everything about an echo whose arrival is known.
///
/// The standard uncertainty is timing noise · sqrt(Σ s'²) over the curvature of the correlation's top: for an echo
/// of the pulse's shape in white noise the Cramér-Rao bound, which the fit reaches. It knows
/// nothing of a wrong pulse and of overlapping echoes: see [`Echo::mismatch`]. A clipped echo is fitted anew to its whole
/// samples ([`clipping`]).
#[must_use]
pub fn echo_at(surroundings: &Surroundings<'_>, arrival: Arrival) -> Option<Echo> {
    let Surroundings {
        record, pulse, noise, ..
    } = surroundings;
    let under = under(record, pulse, arrival.position)?;
    let format = record.format();
    let clipped = under.iter().any(|&code| is_cut(code, &format));
    let (mut arrival, mut information) = (arrival, 1.0);
    // Numbers that were fitted: delay, amplitude, mean.
    let mut freedom = under.len() as f32 - 3.0;
    let mut energy_under = pulse.facts.energy;
    let mut left = None;
    if clipped {
        let mended = mend(record.codes(), &format, pulse, &arrival, surroundings.samples_per_cycle);
        information = mended.map_or(0.0, |mended| mended.information);
        if let Some(mended) = mended {
            let whole = under.iter().filter(|&&code| !is_cut(code, &format)).count();
            freedom = math::larger(whole as f32 - 4.0, 1.0);
            energy_under = mended.energy;
            left = Some(mended.unexplained * freedom);
            arrival = mended.arrival;
        }
    }
    let amplitude = arrival.amplitude.abs();
    if !(amplitude > 0.0) {
        return None;
    }
    let explained = amplitude * amplitude * energy_under;
    // Chance adds up to five standard deviations.
    let from_noise = noise * noise * (freedom + 5.0 * math::sqrt(2.0 * freedom));
    let left = left.unwrap_or_else(|| energy(under) - explained);
    let excess = (left - from_noise) / explained;
    let clock = record.clock();
    let place = arrival.position.as_samples();
    let timing_noise = surroundings.timing_noise.at(place);
    let by_noise = GROUP_LAG_CHANCE * group_lag_noise(surroundings.samples_per_cycle, amplitude / timing_noise, pulse);
    let period = clock.rate.period();
    let sharpness = arrival.sharpness * math::sqrt(if information > 0.0 { information } else { 1.0 });
    Some(Echo {
        position: arrival.position,
        arrival: clock.time_of(arrival.position),
        standard_uncertainty: period * surroundings.arrival_noise(amplitude * sharpness, place),
        amplitude,
        polarity: if arrival.amplitude < 0.0 {
            Polarity::Negative
        } else {
            Polarity::Positive
        },
        snr: Decibels::from_amplitude_ratio(amplitude / noise),
        mismatch: math::sqrt(excess),
        group_lag: toward_zero(period * arrival.group_lag, period * by_noise),
        clipped,
        information,
        role: EchoRole::Other,
    })
}

/// The samples under an echo's pulse.
fn under<'r>(record: &Record<'r>, pulse: &ReferencePulse<'_>, position: SamplePosition) -> Option<&'r [i16]> {
    let start = SamplePosition::new(position.index, position.fraction - pulse.facts.origin);
    let start = start.index as usize;
    record.codes().get(start..start.checked_add(pulse.samples.len())?)
}

/// Mean square of what a fitted pulse leaves of an echo, in squared codes: the noise's variance if nothing else is
/// there, more if the shapes differ. Delay, amplitude and mean were fitted.
fn unexplained_per_sample(record: &Record<'_>, pulse: &ReferencePulse<'_>, arrival: &Arrival) -> Option<f32> {
    let codes = under(record, pulse, arrival.position)?;
    let left = energy(codes) - arrival.amplitude * arrival.amplitude * pulse.facts.energy;
    Some(math::larger(left, 0.0) / math::larger(codes.len() as f32 - 3.0, 1.0))
}

/// Share of a cycle up to which a turned phase leaves the right half cycle clearly ahead.
const LITTLE_TURNED: f32 = 0.15;

/// Share of a cycle by which a lag may differ from the one that its way gives, and the half cycle still be told by it.
const SURELY_SETTLED: f32 = 0.1;

/// Moves echoes that were found on the wrong half cycle for the way they came.
///
/// A beam turns an echo's phase by up to a quarter of a cycle: then two half cycles of opposite sign fit it about as well,
/// and noise decides between them. What tells them apart is the group lag, of which one has what its way gives
/// (`expected_lag` in samples for a place) and the other half a cycle less or more: the nearer one is taken. Where the way
/// turns the phase by little the choice is not in doubt and echoes stay as they are, and so do those that have a role.
///
/// What turns all echoes alike (the way through a couplant film, a modelled pulse of another phase than the probe's)
/// adds to every lag. The strongest echo says how much, and so all of one train land on one half cycle, be it the
/// right one or its neighbour.
pub fn settle_half_cycles(
    surroundings: &Surroundings<'_>,
    echoes: &mut EchoList,
    expected_lag: impl Fn(f32) -> f32,
    scratch: &mut [f32],
) {
    let cycle = surroundings.samples_per_cycle;
    let half = 0.5 * cycle;
    let is_turned = |expected: f32| expected.abs() >= LITTLE_TURNED * cycle;
    let mut common = 0.0;
    if let Some(strongest) = strongest_other(echoes)
        && let Some(lag) = whole_lag(surroundings, &strongest, scratch)
    {
        let expected = expected_lag(strongest.position.as_samples());
        common = lag - expected;
        let settled = common - math::round_to_i32(common / half) as f32 * half;
        if is_turned(expected) && settled.abs() < SURELY_SETTLED * cycle {
            common = settled;
        }
    }
    let mut any = false;
    for echo in echoes.iter_mut().filter(|echo| echo.role == EchoRole::Other) {
        let expected = expected_lag(echo.position.as_samples());
        if !is_turned(expected) {
            continue;
        }
        let Some(lag) = whole_lag(surroundings, echo, scratch) else {
            continue;
        };
        let moved = math::round_to_i32((lag - expected - common) / half);
        if moved == 0 {
            continue;
        }
        let place = math::round_to_i32(echo.position.as_samples() + moved as f32 * half);
        let (here, opposite) = signs_of(echo);
        let sign = if moved % 2 == 0 { here } else { opposite };
        let settled = u32::try_from(place)
            .ok()
            .and_then(|place| find_arrival(surroundings, place, sign, scratch))
            .filter(|arrival| arrival.amplitude.abs() > 0.6 * echo.amplitude)
            .and_then(|arrival| echo_at(surroundings, arrival));
        if let Some(settled) = settled {
            *echo = settled;
            any = true;
        }
    }
    if any {
        // Two of one echo may have met.
        order::sort(echoes, |a, b| a.position.samples_after(b.position) < 0.0);
        let mut last: Option<SamplePosition> = None;
        echoes.retain(|echo| {
            let apart = last.is_none_or(|last| echo.position.samples_after(last) >= half);
            last = Some(echo.position);
            apart || echo.role != EchoRole::Other
        });
    }
}

/// The strongest echo without a role that is whole: the lag of a clipped one says how it was cut.
fn strongest_other(echoes: &EchoList) -> Option<Echo> {
    let mut strongest: Option<Echo> = None;
    for echo in echoes
        .iter()
        .filter(|echo| echo.role == EchoRole::Other && !echo.clipped)
    {
        if strongest.is_none_or(|s| echo.amplitude > s.amplitude) {
            strongest = Some(*echo);
        }
    }
    strongest
}

/// An echo's own sign, and the other one.
fn signs_of(echo: &Echo) -> (Sign, Sign) {
    match echo.polarity {
        Polarity::Positive => (Sign::Positive, Sign::Negative),
        Polarity::Negative => (Sign::Negative, Sign::Positive),
    }
}

/// The group lag of an echo in samples, with what noise explains: the list holds it without.
fn whole_lag(surroundings: &Surroundings<'_>, echo: &Echo, scratch: &mut [f32]) -> Option<f32> {
    let chance = echo.chance_of_lag(surroundings);
    let rate = surroundings.record.clock().rate.get();
    if echo.group_lag > Seconds::ZERO {
        Some((echo.group_lag + chance).get() * rate)
    } else if echo.group_lag < Seconds::ZERO {
        Some((echo.group_lag - chance).get() * rate)
    } else {
        find_arrival(surroundings, echo.position.index, signs_of(echo).0, scratch).map(|found| found.group_lag)
    }
}

/// The signs that echoes are searched with.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Signs {
    /// Of the candidate that is the interface echo, and its place in the list; `None` where there is none.
    pub interface: Option<(usize, Sign)>,
    /// Of all others.
    pub others: Sign,
}

/// Fits the pulse at every candidate inside `range` and lists the echoes. A noise that is not sure may turn out lower: where
/// the fits show that echoes have been taken for noise.
///
/// Where echoes fill the record, the scan finds no quiet stretch. What the two best fits leave over is
/// then a better estimate (of white noise); it is believed where it lies below the scan's by more than chance (three
/// standard deviations of what so few samples tell, at least 30 %).
pub fn measure_echoes(
    surroundings: &Surroundings<'_>,
    candidates: &[Candidate],
    signs: Signs,
    noise: &mut Noise,
    range: SampleRange,
    echoes: &mut EchoList,
    scratch: &mut [f32],
) {
    let (record, pulse) = (&surroundings.record, &surroundings.pulse);
    let cycle = surroundings.samples_per_cycle;
    let inside = |index: u32| index >= range.start && index < range.end;
    // A pulse that stands out of the record would be taken for its neighbouring half cycle that does
    // not: a cycle of margin at either end.
    let whole = |offset: f32| usize::try_from(math::saturating_i32(offset + cycle)).unwrap_or(0);
    let before = whole(pulse.facts.origin);
    let after = whole(f32::from(pulse.facts.length) - pulse.facts.origin);
    let usable = |index: u32| {
        let place = index as usize;
        inside(index) && place >= before && place + after < record.codes().len()
    };

    let mut arrivals: Vec<Arrival, ECHO_CAPACITY> = Vec::new();
    for (number, candidate) in candidates
        .iter()
        .enumerate()
        .filter(|(_, candidate)| usable(candidate.index))
    {
        let sign = match signs.interface {
            Some((interface, sign)) if interface == number => sign,
            _ => signs.others,
        };
        let arrival = find_arrival(surroundings, candidate.index, sign, scratch);
        let Some(arrival) = arrival.filter(|arrival| inside(arrival.position.index)) else {
            continue;
        };
        // Two candidates can climb to one top.
        let twin = arrivals
            .last_mut()
            .filter(|last| arrival.position.samples_after(last.position).abs() < cycle);
        match twin {
            Some(last) if arrival.amplitude.abs() > last.amplitude.abs() => *last = arrival,
            Some(_) => {}
            None => {
                // As many places as candidates: it cannot be full.
                let _ = arrivals.push(arrival);
            }
        }
    }

    if !noise.sure
        && let Some(fitted) = noise_beside_fits(surroundings, &arrivals)
    {
        (noise.per_sample, noise.timing) = (fitted, TimingNoise::steady(fitted));
    }
    let surroundings = Surroundings {
        noise: noise.per_sample,
        timing_noise: noise.timing,
        ..*surroundings
    };
    echoes.clear();
    for arrival in &arrivals {
        if let Some(echo) = echo_at(&surroundings, *arrival) {
            let _ = echoes.push(echo);
        }
    }
}

/// The noise that the two best fits leave over, if it lies below the scan's by more than chance.
fn noise_beside_fits(surroundings: &Surroundings<'_>, arrivals: &[Arrival]) -> Option<f32> {
    let (record, pulse) = (&surroundings.record, &surroundings.pulse);
    let (mut quietest, mut second) = (f32::INFINITY, f32::INFINITY);
    for left in arrivals
        .iter()
        .filter_map(|arrival| unexplained_per_sample(record, pulse, arrival))
    {
        if left < quietest {
            (quietest, second) = (left, quietest);
        } else if left < second {
            second = left;
        }
    }
    // Relative standard deviation of one estimate; picking the two smallest biases by about as much.
    let spread = 1.0 / math::sqrt(2.0 * math::larger(f32::from(pulse.facts.length) - 3.0, 1.0));
    let left = math::sqrt(0.5 * (quietest + second)) * (1.0 + spread);
    let fitted = math::larger(left, record.format().rounding_noise(left));
    let limit = math::smaller(0.7, 1.0 - 3.0 * spread);
    (fitted < limit * surroundings.noise).then_some(fitted)
}

/// The echoes of one record in the order of their arrival.
pub type EchoList = Vec<Echo, ECHO_CAPACITY>;
