//! The facade: one record in, a reading or a refusal out.
//!
//! [`Gauge::measure`] runs the steps in their order: health of the record, scan, echoes, interface,
//! train, times, thickness, budget, doubts. Every step stays public, for who wants to build another
//! gauge from them.

use crate::echo::correlation::Sign;
use crate::echo::pulse::{PulseContext, PulseFacts, PulseMetrics, ReferencePulse, learn, measure_pulse, model};
use crate::echo::scan::{Detector, Scan, scan};
use crate::echo::separation::{Separation, judge, nearest_pair};
use crate::echo::train::{Rules, Train, Undecided, find_train};
use crate::echo::{Echo, EchoList, EchoRole, Surroundings, measure_echo, unexplained_per_sample};
use crate::math;
use crate::outcome::{Doubts, NoReading};
use crate::record::{Record, RecordHealth, SampleRange};
use crate::setup::{GaugeSetup, PULSE_CAPACITY, ProbeKind, SetupError, Span};
use crate::units::{Metres, Seconds};
use crate::wall::judgement::{self, Evidence};
use crate::wall::thickness::{self, Timed, TrainTimes};
use crate::wall::uncertainty::{self, Budget};
use crate::workspace::Workspace;

/// Share of clipped samples in the window, in thousandths, from which nothing is read any more.
const CLIPPED_LIMIT: u16 = 30;
/// An interface echo is the first one that reaches this share of the strongest.
const INTERFACE_SHARE: f32 = 0.35;

/// A thickness that can be signed for.
#[derive(Clone, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Reading {
    /// The wall, without any coating.
    pub thickness: Metres,
    /// Its standard uncertainty (k = 1): the budget's combined value.
    pub standard_uncertainty: Metres,
    /// k of the expanded uncertainty.
    pub coverage_factor: f32,
    /// The coating, where the set-up names one and the echoes show it.
    pub coating: Option<CoatingReading>,
    /// Upper bound of the probability that another cycle was read.
    pub wrong_cycle_probability: f32,
    /// Reasons to look twice.
    pub doubts: Doubts,
    /// Where the uncertainty comes from.
    pub budget: Budget,
}

impl Reading {
    /// Expanded uncertainty: coverage factor times standard uncertainty.
    #[must_use]
    pub fn expanded(&self) -> Metres {
        self.standard_uncertainty * self.coverage_factor
    }
}

/// A coating's thickness.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct CoatingReading {
    /// Its thickness.
    pub thickness: Metres,
    /// Standard uncertainty (k = 1).
    pub standard_uncertainty: Metres,
}

/// What the last record held, whether or not it gave a reading.
#[derive(Clone, Debug, PartialEq, Default)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Findings {
    /// Extremes and clipped samples inside the window.
    pub health: RecordHealth,
    /// Root mean square of the noise per sample, in codes.
    pub noise: f32,
    /// The echoes in the order of their arrival.
    pub echoes: EchoList,
    /// The multiples of the wall, if they could be told.
    pub train: Option<Train>,
    /// The pulse as the best echo shows it; `None` if no echo stands high enough above the noise.
    pub pulse: Option<PulseMetrics>,
    /// The nearest pair of echoes; `None` with fewer than two.
    pub separation: Option<Separation>,
}

/// A gauge: set-up, scratch memory and the reference pulse.
#[derive(Debug)]
pub struct Gauge<'w> {
    setup: GaugeSetup,
    workspace: Workspace<'w>,
    facts: PulseFacts,
    detector: Detector,
    learned: bool,
    findings: Findings,
}

impl<'w> Gauge<'w> {
    /// Makes a gauge with the pulse that the probe's data sheet promises.
    ///
    /// # Errors
    /// A wrong set-up, a pulse that does not fit, or scratch memory that is too small.
    #[inline(never)]
    pub fn new(setup: GaugeSetup, workspace: Workspace<'w>) -> Result<Self, SetupError> {
        if let Some(error) = setup.check() {
            return Err(error);
        }
        let facts = model(&setup, workspace.pulse)?;
        let needed = 2 * u32::from(facts.length);
        let got = u32::try_from(workspace.envelope.len()).unwrap_or(u32::MAX);
        if got < needed {
            return Err(SetupError::WorkspaceTooSmall { needed, got });
        }
        let detector = Detector::default();
        let mut gauge = Self {
            setup,
            workspace,
            facts,
            detector,
            learned: false,
            findings: Findings::default(),
        };
        gauge.fit_detector();
        Ok(gauge)
    }

    /// Replaces the reference pulse by one learned from an echo.
    ///
    /// `samples` are at the set-up's sample rate. The pulse is scaled to an envelope peak of 1, and
    /// its origin is the interpolated maximum of its envelope.
    ///
    /// # Errors
    /// [`SetupError::PulseTooLong`] or [`SetupError::PulseEmpty`]; the modelled pulse is in force then.
    pub fn learn_pulse(&mut self, samples: &[f32]) -> Result<(), SetupError> {
        let learned = learn(samples, self.setup.samples_per_cycle(), self.workspace.pulse);
        self.learned = learned.is_ok();
        let result = match learned {
            Ok(facts) => {
                self.facts = facts;
                Ok(())
            }
            Err(error) => {
                self.facts = model(&self.setup, self.workspace.pulse)?;
                Err(error)
            }
        };
        self.fit_detector();
        result
    }

    /// Takes another set-up, after a calibration or from a menu. The reference pulse is kept if the
    /// sample rate and the probe's frequency and bandwidth are the same, and modelled again if not.
    ///
    /// # Errors
    /// A wrong set-up; the old one stays in force.
    pub fn change_setup(&mut self, setup: GaugeSetup) -> Result<(), SetupError> {
        if let Some(error) = setup.check() {
            return Err(error);
        }
        let (old, new) = (&self.setup.probe, &setup.probe);
        let same_pulse = self.setup.sample_rate == setup.sample_rate
            && old.centre_frequency == new.centre_frequency
            && old.relative_bandwidth == new.relative_bandwidth;
        if !same_pulse {
            // Only a pulse that is too long can fail, and then the old one is written back.
            let modelled = model(&setup, self.workspace.pulse);
            self.learned = false;
            if let Err(error) = modelled {
                self.facts = model(&self.setup, self.workspace.pulse)?;
                self.fit_detector();
                return Err(error);
            }
            self.facts = modelled?;
        }
        self.setup = setup;
        self.fit_detector();
        Ok(())
    }

    /// The set-up in force.
    #[must_use]
    pub const fn setup(&self) -> &GaugeSetup {
        &self.setup
    }

    /// The reference pulse in force.
    #[must_use]
    pub fn pulse(&self) -> ReferencePulse<'_> {
        ReferencePulse::new(self.workspace.pulse, self.facts)
    }

    /// What the last record held: echoes, pulse, separation.
    #[must_use]
    pub const fn findings(&self) -> &Findings {
        &self.findings
    }

    fn fit_detector(&mut self) {
        let pulse = ReferencePulse::new(self.workspace.pulse, self.facts);
        self.detector = Detector::new(self.setup.samples_per_cycle(), &pulse, self.workspace.skirt);
    }

    /// Measures one record.
    ///
    /// # Errors
    /// A refusal with its evidence: a normal outcome. [`Gauge::findings`] tells what was seen.
    #[inline(never)]
    pub fn measure(&mut self, record: &Record<'_>) -> Result<Reading, NoReading> {
        self.findings = Findings::default();
        let range = self.usable_range(record)?;
        let mut scan = self.scan(record, range);
        let mut outcome = self.read(record, range, &scan);
        // Where echoes fill the record, the scan has taken them for noise; what the fits leave over knows better.
        if let Some(noise) = self.noise_beside_fits(record) {
            scan.noise = noise;
            self.findings.echoes.clear();
            outcome = self.read(record, range, &scan);
        }
        // What is known of the pulse helps most where there was no reading.
        self.describe(record);
        outcome
    }

    /// Noise from what the fitted pulses leave of the back walls: the mean of the two quietest, if that
    /// is far below the scan's estimate (less could be chance).
    fn noise_beside_fits(&self, record: &Record<'_>) -> Option<f32> {
        let (mut quietest, mut second) = (f32::INFINITY, f32::INFINITY);
        for echo in self
            .findings
            .echoes
            .iter()
            .filter(|echo| matches!(echo.role, EchoRole::BackWall(_)))
        {
            let left = unexplained_per_sample(record, &self.pulse(), echo)?;
            if left < quietest {
                (quietest, second) = (left, quietest);
            } else if left < second {
                second = left;
            }
        }
        let noise = math::sqrt(0.5 * (quietest + second));
        let noise = math::larger(noise, record.format().rounding_noise());
        (noise < 0.7 * self.findings.noise).then_some(noise)
    }

    /// Checks what can be checked before looking at the codes' course.
    fn usable_range(&mut self, record: &Record<'_>) -> Result<SampleRange, NoReading> {
        let (expected, got) = (self.setup.sample_rate, record.clock().rate);
        if !((expected - got).abs().get() <= 1e-6 * expected.get()) {
            return Err(NoReading::SampleRateMismatch { expected, got });
        }
        let (capacity, length) = (self.workspace.envelope.len(), record.codes().len());
        if length > capacity {
            let number = |n: usize| u32::try_from(n).unwrap_or(u32::MAX);
            return Err(NoReading::RecordTooLong {
                capacity: number(capacity),
                got: number(length),
            });
        }
        let range = record.window(self.setup.window)?;
        let needed = 2 * u32::from(self.facts.length);
        if range.length() < needed {
            return Err(NoReading::RecordTooShort {
                needed,
                got: range.length(),
            });
        }
        let health = record.health(range);
        self.findings.health = health;
        if health.is_dead() {
            return Err(NoReading::DeadReceiver);
        }
        if health.stuck_bits() != 0 {
            return Err(NoReading::StuckBits {
                mask: health.stuck_bits(),
            });
        }
        let per_mille = health.clipped_per_mille();
        if per_mille > CLIPPED_LIMIT {
            return Err(NoReading::Clipped { per_mille });
        }
        Ok(range)
    }

    fn scan(&mut self, record: &Record<'_>, range: SampleRange) -> Scan {
        let envelope = self
            .workspace
            .envelope
            .get_mut(..record.codes().len())
            .unwrap_or(&mut []);
        scan(
            record.codes(),
            record.format(),
            range,
            &self.detector,
            self.workspace.skirt,
            envelope,
        )
    }

    /// Fits the pulse at every candidate.
    fn measure_echoes(&mut self, record: &Record<'_>, range: SampleRange, scan: &Scan) {
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = Surroundings {
            record: *record,
            pulse: ReferencePulse::new(pulse, self.facts),
            noise: scan.noise,
            samples_per_cycle: self.setup.samples_per_cycle(),
        };
        let cycle = surroundings.samples_per_cycle;
        for candidate in scan
            .candidates
            .iter()
            .filter(|c| c.index >= range.start && c.index < range.end)
        {
            let Some(echo) = measure_echo(&surroundings, candidate.index, Sign::Either, &mut correlation[..]) else {
                continue;
            };
            if echo.position.index < range.start || echo.position.index >= range.end {
                continue;
            }
            // Two candidates can climb to one top.
            let echoes = &mut self.findings.echoes;
            let twin = echoes
                .last_mut()
                .filter(|last| echo.position.samples_after(last.position).abs() < cycle);
            match twin {
                Some(last) if echo.amplitude > last.amplitude => *last = echo,
                Some(_) => {}
                None => {
                    // As many places as candidates: it cannot be full.
                    let _ = echoes.push(echo);
                }
            }
        }
    }

    /// From candidates to a reading.
    fn read(&mut self, record: &Record<'_>, range: SampleRange, scan: &Scan) -> Result<Reading, NoReading> {
        self.findings.noise = scan.noise;
        self.measure_echoes(record, range, scan);
        if self.findings.echoes.is_empty() {
            return Err(self.nothing_found(record, range));
        }
        let start = self.start_of_wall(record)?;
        let Workspace { pulse, train: lags, .. } = &mut self.workspace;
        let surroundings = Surroundings {
            record: *record,
            pulse: ReferencePulse::new(pulse, self.facts),
            noise: scan.noise,
            samples_per_cycle: self.setup.samples_per_cycle(),
        };
        let rules = rules(&self.setup, &surroundings, range, scan, &self.detector, start);
        let period_of = |samples: f32| thickness_of(&self.setup, record.clock().rate.period() * samples);
        let train = match find_train(&surroundings, &mut self.findings.echoes, &rules, lags) {
            Ok(train) => train,
            Err(Undecided::Ambiguous { candidates, best, next }) => {
                return Err(NoReading::Ambiguous {
                    candidates,
                    best: period_of(best),
                    next: period_of(next),
                });
            }
            Err(Undecided::NoTrain) if self.setup.probe.kind == ProbeKind::DelayLine => {
                return Err(NoReading::NotCoupled);
            }
            Err(Undecided::NoTrain) => return Err(NoReading::NoEcho { noise: scan.noise }),
        };
        self.findings.train = Some(train);

        let times = times(record, &train, &self.findings.echoes);
        let needs_two = thickness::wall_span(&self.setup) == Span::BackWallToBackWall;
        if needs_two && times.period.is_none() {
            return Err(NoReading::OneEchoWhereTwoAreNeeded {
                at: times.first_back_wall.time,
            });
        }
        let Some(wall) = thickness::wall(&self.setup, &times) else {
            return Err(NoReading::NoInterfaceEcho);
        };
        let minimum = thickness::thinnest_wall(
            &self.setup,
            record.clock().rate.period() * surroundings.pulse.facts.envelope_duration,
        );
        if !(wall >= minimum * 0.999) {
            return Err(NoReading::BelowMinimum { minimum });
        }
        let budget = uncertainty::budget(&self.setup, &times, wall);
        let standard_uncertainty = budget.combined();
        let evidence = Evidence {
            setup: &self.setup,
            surroundings: &surroundings,
            echoes: &self.findings.echoes,
            train: &train,
            times: &times,
            wall,
            budget: &budget,
            expanded: standard_uncertainty * self.setup.coverage_factor,
            learned_pulse: self.learned,
        };
        let coating = thickness::coating(&self.setup, &times).and_then(|thickness| {
            let from_times = uncertainty::coating_uncertainty(&self.setup, &times, wall)?;
            let from_overlap = judgement::coating_overlap(&evidence)?;
            let (a, b) = (from_times.get(), from_overlap.get());
            Some(CoatingReading {
                thickness,
                standard_uncertainty: Metres::new(math::sqrt(a * a + b * b)),
            })
        });
        Ok(Reading {
            thickness: wall,
            standard_uncertainty,
            coverage_factor: self.setup.coverage_factor,
            coating,
            wrong_cycle_probability: judgement::wrong_cycle_probability(&evidence),
            doubts: judgement::doubts(&evidence),
            budget,
        })
    }

    /// Why there is no echo: a transmission pulse before the window tells that the pulser works.
    fn nothing_found(&self, record: &Record<'_>, range: SampleRange) -> NoReading {
        let before = record.health(SampleRange {
            start: 0,
            end: range.start,
        });
        let swing = f32::from(before.highest) - f32::from(before.lowest);
        if before.samples > 0 && swing > 0.1 * record.format().full_scale() && swing > 20.0 * self.findings.noise {
            NoReading::OnlyTransmissionPulse
        } else {
            NoReading::NoEcho {
                noise: self.findings.noise,
            }
        }
    }

    /// Where the wall begins, in samples from the record's first; marks the interface echo and the
    /// coating's far side on the way.
    fn start_of_wall(&mut self, record: &Record<'_>) -> Result<f32, NoReading> {
        let clock = record.clock();
        if self.setup.probe.kind != ProbeKind::DelayLine {
            return if self.setup.span == Span::InterfaceToBackWall {
                Err(NoReading::NoInterfaceEcho)
            } else {
                Ok(clock.samples_at(self.setup.zero.offset))
            };
        }
        let echoes = &mut self.findings.echoes;
        let strongest = echoes.iter().fold(0.0, |m, echo| math::larger(m, echo.amplitude));
        let main = echoes
            .iter()
            .position(|echo| echo.amplitude >= INTERFACE_SHARE * strongest);
        let Some(main) = main else {
            return Err(NoReading::NoInterfaceEcho);
        };
        let coated = self.setup.coating.is_some();
        let mut place = 0.0;
        for (number, echo) in echoes.iter_mut().enumerate().take(main + 1) {
            if number == main {
                // Behind a coating the strong echo is the coating's far side, if its front shows too.
                echo.role = if coated && main > 0 {
                    EchoRole::Coating
                } else {
                    EchoRole::Interface
                };
                place = echo.position.as_samples();
            } else if coated && number + 1 == main {
                echo.role = EchoRole::Interface;
            }
        }
        let offset = if self.setup.span == Span::InterfaceToBackWall {
            self.setup.zero.offset
        } else {
            Seconds::ZERO
        };
        Ok(place + offset.get() * clock.rate.get())
    }

    /// Pulse metrics of the best echo, and the verdict on the nearest pair.
    #[inline(never)]
    fn describe(&mut self, record: &Record<'_>) {
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = Surroundings {
            record: *record,
            pulse: ReferencePulse::new(pulse, self.facts),
            noise: self.findings.noise,
            samples_per_cycle: self.setup.samples_per_cycle(),
        };
        let scratch = &mut correlation[..];
        if let Some((first, second)) = nearest_pair(&self.findings.echoes) {
            self.findings.separation = Some(judge(&surroundings, &first, &second, scratch));
        }
        let Some((best, room)) = clearest(&self.findings.echoes) else {
            return;
        };
        let context = PulseContext {
            sample_rate: record.clock().rate,
            centre_frequency: self.setup.probe.centre_frequency,
            bandwidth: self.setup.probe.bandwidth(),
            velocity: self.setup.material.velocity,
            noise: self.findings.noise,
        };
        // Two durations to either side hold the -40 dB support; a neighbour's half of the way is its own.
        let reach = math::smaller(2.0 * self.facts.envelope_duration, 0.5 * room);
        let reach = usize::try_from(math::saturating_i32(reach))
            .unwrap_or(0)
            .min(PULSE_CAPACITY / 2 - 1);
        let at = best.position.index as usize;
        let Some(codes) = record.codes().get(at.saturating_sub(reach)..) else {
            return;
        };
        let Some(window) = scratch.get_mut(..codes.len().min(at.min(reach) + reach + 1)) else {
            return;
        };
        for (sample, &code) in window.iter_mut().zip(codes) {
            *sample = f32::from(code);
        }
        self.findings.pulse = measure_pulse(window, &context);
    }
}

/// Wall that a round-trip time stands for.
fn thickness_of(setup: &GaugeSetup, time: Seconds) -> Metres {
    setup.material.velocity * time * 0.5
}

/// What the train may look like.
fn rules(
    setup: &GaugeSetup,
    surroundings: &Surroundings<'_>,
    range: SampleRange,
    scan: &Scan,
    detector: &Detector,
    start: f32,
) -> Rules {
    let facts = &surroundings.pulse.facts;
    let format = surroundings.record.format();
    let shortest = thickness::SMALLEST_SPACING * facts.envelope_duration;
    // The pulse has to lie inside the window's record as a whole to be measured.
    let edge = range.start as f32 + if range.start == 0 { facts.origin } else { 0.0 };
    let mut visible_to = range.end as f32;
    let (visible_from, start_tolerance) = if setup.probe.kind == ProbeKind::DelayLine {
        // From the delay line's own second echo on, at twice the time of its first, two trains would mix.
        // Its zero is not known better than to a few per cent: stay clear of it.
        let trigger = surroundings.record.clock().samples_at(Seconds::ZERO);
        let second = trigger + 1.97 * (start - trigger);
        visible_to = math::smaller(visible_to, second - facts.envelope_duration);
        (
            math::larger(edge, start + shortest),
            0.6 * surroundings.samples_per_cycle,
        )
    } else {
        let zero = 3.0 * setup.zero.standard_uncertainty.get() * setup.sample_rate.get();
        // Through a coating of unknown thickness the train may begin anywhere.
        let tolerance = if setup.coating.is_some() { f32::INFINITY } else { zero };
        (edge, 0.6 * surroundings.samples_per_cycle + tolerance)
    };
    Rules {
        start,
        start_tolerance,
        shortest,
        visible_from,
        visible_to,
        threshold: scan.threshold / detector.counts_per_code(format) / surroundings.amplitude_noise(),
    }
}

/// The times that thickness and budget are made from.
fn times(record: &Record<'_>, train: &Train, echoes: &[Echo]) -> TrainTimes {
    let clock = record.clock();
    let seconds = |samples: f32| clock.rate.period() * samples;
    let role = |role: EchoRole| echoes.iter().find(|echo| echo.role == role);
    let timed = |echo: &Echo| Timed::new(echo.arrival, echo.standard_uncertainty);
    let period = train.period_uncertainty.map(|u| {
        // Arrivals that scatter more than noise explains widen the period's uncertainty (Birge's
        // ratio), once they do so beyond chance.
        let limit = 1.0 + 3.0 * math::sqrt(2.0 / f32::from(train.freedom).max(1.0));
        let ratio = if train.unevenness > limit {
            math::sqrt(train.unevenness)
        } else {
            1.0
        };
        Timed::new(seconds(train.period), seconds(u * ratio))
    });
    let first = role(EchoRole::BackWall(1)).map(timed).unwrap_or_else(|| {
        // The first back wall lies in the dead zone: it follows from the others.
        let steps = f32::from(train.first_multiple) - 1.0;
        let u = period.map_or(Seconds::ZERO, |p| {
            p.standard_uncertainty * f32::from(train.first_multiple)
        });
        Timed::new(clock.time_of(train.first) - seconds(train.period) * steps, u)
    });
    let mut times = TrainTimes::single(first);
    if let Some(period) = period {
        times = times.with_period(period, train.correlation);
    }
    if let Some(interface) = role(EchoRole::Interface) {
        times = times.with_interface(timed(interface));
    }
    times
}

/// The strongest echo that is not clipped, a back wall if there is one, and its distance in samples
/// to the nearest other.
fn clearest(echoes: &[Echo]) -> Option<(Echo, f32)> {
    let is_wall = |echo: &Echo| matches!(echo.role, EchoRole::BackWall(_));
    let mut best: Option<Echo> = None;
    for echo in echoes.iter().filter(|echo| !echo.clipped) {
        let better = best.is_none_or(|b| (is_wall(echo), echo.amplitude) > (is_wall(&b), b.amplitude));
        if better {
            best = Some(*echo);
        }
    }
    let best = best?;
    let mut room = f32::INFINITY;
    for echo in echoes {
        let distance = echo.position.samples_after(best.position).abs();
        if distance > 0.0 && distance < room {
            room = distance;
        }
    }
    Some((best, room))
}
