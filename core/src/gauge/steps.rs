//! The steps of [`Gauge::measure`](super::Gauge::measure), a method for each [`Stage`](super::stage::Stage).

use super::interpretation::{clearest, coating_trip, rules, signs, start_of_wall, times};
use super::{CoatingReading, CoatingThickness, Gauge, Interpretation, Reading};
use crate::echo::noise::{Noise, TimingNoise, listen, reached};
use crate::echo::pulse::{PulseContext, PulseFacts, ReferencePulse, measure_pulse};
use crate::echo::rest::{Rest, is_below_the_step, rest};
use crate::echo::scan::{CANDIDATE_CAPACITY, Candidate, Scan, scan};
use crate::echo::separation::{judge, nearest_pair};
use crate::echo::train::{Hypothesis, Rules, Train, Undecided, choose, fit, mark_coating, other_trains, unexplained};
use crate::echo::{Echo, EchoRole, Surroundings, measure_echoes, settle_half_cycles};
use crate::math;
use crate::order;
use crate::outcome::NoReading;
use crate::path::PathLaw;
use crate::record::{Record, RecordHealth, SampleRange};
use crate::setup::{EchoSign, GaugeSetup, PULSE_CAPACITY, ProbeKind, Span};
use crate::units::Seconds;
use crate::wall::judgement::{self, Evidence};
use crate::wall::thickness::Timed;
use crate::wall::uncertainty::Source;
use crate::wall::way::path_law;
use crate::wall::{thickness, uncertainty};
use crate::workspace::Workspace;
use heapless::Vec;

/// Share of clipped samples in the window, in thousandths, from which nothing is read any more.
const CLIPPED_LIMIT: u16 = 30;

/// What echoes of this record are measured against.
#[inline(never)]
pub(super) fn surroundings<'a>(
    setup: &GaugeSetup,
    pulse: &'a [f32; PULSE_CAPACITY],
    facts: PulseFacts,
    record: &Record<'a>,
    noise: &Noise,
) -> Surroundings<'a> {
    Surroundings {
        record: *record,
        pulse: ReferencePulse::new(pulse, facts),
        noise: noise.per_sample,
        timing_noise: noise.timing,
        samples_per_cycle: setup.samples_per_cycle(),
    }
}

/// Height over the scan's threshold, or over that of its like, up to which a peak that no train explains is taken for grain.
const GRAIN_LIMIT: f32 = 2.5;
/// So many peaks that no train explains are each other's like.
const GRAIN_PEAKS: usize = 4;

/// Does a piece of work in a frame of its own, which is off the stack before the next piece begins: inlined, the
/// frames of all would add up.
#[inline(never)]
fn apart<R>(work: impl FnOnce() -> R) -> R {
    work()
}

/// The coating, where one is asked for and shown.
#[inline(never)]
fn coating(evidence: &Evidence<'_>) -> Option<CoatingReading> {
    let coating = evidence.setup.coating.as_ref()?;
    // The echoes show none where nothing is left.
    let trip = evidence.excess.filter(|excess| excess.time > Seconds::ZERO)?;
    let from_overlap = judgement::coating_overlap(evidence)?;
    let (a, b) = (trip.standard_uncertainty.get(), from_overlap.get());
    let round_trip = Timed::new(trip.time, Seconds::new(math::sqrt(a * a + b * b)));
    Some(CoatingReading {
        round_trip,
        thickness: thickness::coating(coating, round_trip).map(|(thickness, standard_uncertainty)| CoatingThickness {
            thickness,
            standard_uncertainty,
        }),
    })
}

impl Gauge<'_> {
    /// Checks what can be checked before looking at the codes' course.
    #[inline(never)]
    pub(super) fn usable_range(&mut self, record: &Record<'_>) -> Result<SampleRange, NoReading> {
        let range = self.sound_range(record)?;
        self.not_clipped(self.findings.health)?;
        Ok(range)
    }

    /// Refuses what is clipped too much.
    pub(super) fn not_clipped(&self, health: RecordHealth) -> Result<(), NoReading> {
        let per_mille = health.clipped_per_mille();
        if per_mille > CLIPPED_LIMIT {
            return Err(NoReading::Clipped { per_mille });
        }
        Ok(())
    }

    /// The same without the share of clipped samples.
    pub(super) fn sound_range(&mut self, record: &Record<'_>) -> Result<SampleRange, NoReading> {
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
        Ok(range)
    }

    #[inline(never)]
    pub(super) fn scan(&mut self, record: &Record<'_>, range: SampleRange) -> (Scan, Noise) {
        let envelope = self
            .workspace
            .envelope
            .get_mut(..record.codes().len())
            .unwrap_or(&mut []);
        let found = scan(
            record.codes(),
            record.format(),
            range,
            &self.detector,
            self.workspace.skirt,
            envelope,
        );
        let pulse = ReferencePulse::new(self.workspace.pulse, self.facts);
        let echoes = reached(
            found.candidates.iter().copied(),
            &pulse,
            &found,
            &self.detector,
            self.workspace.skirt,
        );
        let noise = Noise {
            per_sample: found.noise,
            timing: listen(record, &pulse, &found, found.filled, &echoes, envelope, found.threshold),
            sure: found.quiet,
        };
        (found, noise)
    }

    /// What the codes between the echoes tell of noise below the converter's step.
    #[inline(never)]
    fn rest(&self, record: &Record<'_>, scan: &Scan) -> Option<Rest> {
        let pulse = ReferencePulse::new(self.workspace.pulse, self.facts);
        let candidates = scan.candidates.iter().copied();
        let echoes = reached(candidates, &pulse, scan, &self.detector, self.workspace.skirt);
        rest(record, scan.filled, &echoes)
    }

    /// Fits the pulse at every candidate; the noise may turn out lower than the scan thought.
    #[inline(never)]
    pub(super) fn measure_echoes(&mut self, record: &Record<'_>, range: SampleRange, scan: &Scan, noise: &mut Noise) {
        if is_below_the_step(record, scan.noise)
            && let Some(rest) = self.rest(record, scan)
        {
            noise.per_sample = rest.under_echo(noise.per_sample);
            rest.timing(&mut noise.timing);
        }
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, noise);
        measure_echoes(
            &surroundings,
            &scan.candidates,
            signs(&self.setup, &scan.candidates),
            noise,
            range,
            &mut self.findings.echoes,
            &mut correlation[..],
        );
        self.findings.noise = noise.per_sample;
    }

    /// Which echoes are one wall's multiples.
    #[inline(never)]
    pub(super) fn find_train(
        &mut self,
        record: &Record<'_>,
        range: SampleRange,
        scan: &Scan,
        noise: &mut Noise,
    ) -> Result<Train, NoReading> {
        if self.findings.echoes.is_empty() {
            return Err(self.nothing_found(record, range));
        }
        let start = start_of_wall(&self.setup, record, &mut self.findings.echoes)?;
        self.settle_half_cycles(record, noise, start);
        let (rules, chosen) = apart(|| {
            let before = surroundings(&self.setup, self.workspace.pulse, self.facts, record, noise);
            let law = path_law(&self.setup, &self.spreading);
            let rules = rules(&self.setup, &law, &before, range, scan, &self.detector, start);
            let chosen = choose(&before, &self.findings.echoes, &rules);
            (rules, chosen)
        });
        let hypothesis = chosen.map_err(|why| self.undecided(record, noise, why))?;
        if let Some(mut timing) = self.listen_again(record, scan, &rules, &hypothesis) {
            if is_below_the_step(record, scan.noise)
                && let Some(rest) = self.rest(record, scan)
            {
                rest.timing(&mut timing);
            }
            apart(|| {
                let heard = core::mem::replace(&mut noise.timing, timing);
                let surroundings = surroundings(&self.setup, self.workspace.pulse, self.facts, record, noise);
                for echo in &mut self.findings.echoes {
                    echo.reassess(&heard, &surroundings);
                }
            });
        }
        let fitted = apart(|| {
            let Workspace { pulse, train: lags, .. } = &mut self.workspace;
            let surroundings = surroundings(&self.setup, pulse, self.facts, record, noise);
            let mut train = fit(&surroundings, &mut self.findings.echoes, &rules, &hypothesis, lags)?;
            if let Some(trip) = coating_trip(&self.setup, &train, &self.findings.echoes) {
                mark_coating(&surroundings, &mut self.findings.echoes, &rules, &train, trip);
                train.unexplained = unexplained(&surroundings, &self.findings.echoes, &rules);
            }
            (train.thinner_too, train.other_too) = other_trains(&surroundings, &self.findings.echoes, &rules, &train);
            Ok(train)
        });
        let train = fitted.map_err(|why| self.undecided(record, noise, why))?;
        self.findings.train = Some(train);
        Ok(train)
    }

    /// Where the beam turns phases and nobody says which sign back walls have, the group lag tells the half cycle.
    #[inline(never)]
    fn settle_half_cycles(&mut self, record: &Record<'_>, noise: &Noise, start: f32) {
        let law = path_law(&self.setup, &self.spreading);
        let law = law.scaled(self.setup.sample_rate.get());
        if !matches!(law, PathLaw::Beam(_)) || self.setup.probe.back_wall_sign != EchoSign::Unknown {
            return;
        }
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, noise);
        let expected = |place: f32| law.group_lag(math::larger(place - start, 0.0));
        settle_half_cycles(&surroundings, &mut self.findings.echoes, expected, &mut correlation[..]);
    }

    /// The timing noise once it is known which echoes are the wall's: grain stands above the scan's threshold too where it is
    /// loud, and to stay away from it would be to listen only where it is not. And before the part's
    /// surface there is none. `None` if that changes nothing.
    #[inline(never)]
    fn listen_again(
        &self,
        record: &Record<'_>,
        scan: &Scan,
        rules: &Rules<'_>,
        hypothesis: &Hypothesis,
    ) -> Option<TimingNoise> {
        let cycle = self.setup.samples_per_cycle();
        let explained = |candidate: &Candidate| {
            let place = candidate.index as f32;
            let known =
                |echo: &Echo| echo.role != EchoRole::Other && (echo.position.as_samples() - place).abs() < cycle;
            hypothesis.explains(rules.straight_place(place), cycle) || self.findings.echoes.iter().any(known)
        };
        let mut strangers: Vec<u16, CANDIDATE_CAPACITY> = Vec::new();
        for candidate in scan.candidates.iter().filter(|candidate| !explained(candidate)) {
            let _ = strangers.push(candidate.height);
        }
        order::sort(&mut strangers, |a, b| a < b);
        let filled = scan.filled;
        let surface = math::saturating_i32(rules.start).max(0).unsigned_abs();
        if strangers.is_empty() && surface <= filled.start {
            return None;
        }
        let range = SampleRange {
            start: surface.max(filled.start).min(filled.end),
            end: filled.end,
        };
        // Few strangers are echoes unless they hardly stand out; many of about one height are grain.
        let usual = strangers.get(strangers.len() / 2).copied().unwrap_or(0);
        let mut loud = GRAIN_LIMIT * scan.threshold;
        if strangers.len() >= GRAIN_PEAKS {
            loud = math::larger(loud, GRAIN_LIMIT * f32::from(usual));
        }
        let is_echo = |candidate: &Candidate| f32::from(candidate.height) > loud || explained(candidate);
        let pulse = ReferencePulse::new(self.workspace.pulse, self.facts);
        let echoes = scan.candidates.iter().copied().filter(is_echo);
        let echoes = reached(echoes, &pulse, scan, &self.detector, self.workspace.skirt);
        let envelope = self.workspace.envelope.get(..record.codes().len())?;
        Some(listen(record, &pulse, scan, range, &echoes, envelope, loud))
    }

    /// Why there is no train.
    #[inline(never)]
    fn undecided(&self, record: &Record<'_>, noise: &Noise, why: Undecided) -> NoReading {
        let wall_of = |samples: f32| self.setup.velocity() * (record.clock().rate.period() * samples) * 0.5;
        match why {
            Undecided::Ambiguous { candidates, best, next } => NoReading::Ambiguous {
                candidates,
                best: wall_of(best),
                next: wall_of(next),
            },
            Undecided::NoTrain if self.setup.probe.kind == ProbeKind::DelayLine => NoReading::NotCoupled,
            Undecided::NoTrain => NoReading::NoEcho {
                noise: noise.per_sample,
            },
        }
    }

    /// Thickness, budget and doubts.
    #[inline(never)]
    pub(super) fn wall(&mut self, record: &Record<'_>, noise: &Noise, train: &Train) -> Result<Reading, NoReading> {
        let surroundings = surroundings(&self.setup, self.workspace.pulse, self.facts, record, noise);
        let law = path_law(&self.setup, &self.spreading);
        let times = times(&self.setup, &law, record, train, &self.findings.echoes);
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
        let mut budget = uncertainty::budget(&self.setup, &times, wall);
        budget.add(
            Source::ReferencePulse,
            uncertainty::reference_pulse(&self.setup, &self.facts),
        );
        let standard_uncertainty = budget.combined();
        // Start and period against the first back wall: a coating, or a check of the zero.
        let excess = if self.setup.coating.is_some() || !needs_two {
            uncertainty::whole_excess(&self.setup, &times, wall)
        } else {
            None
        };
        let evidence = Evidence {
            setup: &self.setup,
            surroundings: &surroundings,
            echoes: &self.findings.echoes,
            train,
            times: &times,
            law,
            wall,
            budget: &budget,
            expanded: standard_uncertainty * self.setup.coverage_factor,
            excess,
        };
        if let Some(unexplained_percent) = judgement::not_the_pulse(&evidence) {
            return Err(NoReading::NotThePulse { unexplained_percent });
        }
        let coating = coating(&evidence);
        let wrong_cycle_probability = judgement::wrong_cycle_probability(&evidence);
        Ok(Reading {
            thickness: wall,
            standard_uncertainty,
            coverage_factor: self.setup.coverage_factor,
            coating,
            interpretation: Interpretation::Train,
            wrong_cycle_probability,
            doubts: judgement::doubts(&evidence, wrong_cycle_probability),
            budget,
        })
    }

    /// Why there is no echo: a transmission pulse before the window tells that the pulser works.
    #[inline(never)]
    pub(super) fn nothing_found(&self, record: &Record<'_>, range: SampleRange) -> NoReading {
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

    /// Pulse metrics of the best echo, and the verdict on the nearest pair.
    #[inline(never)]
    pub(super) fn describe(&mut self, record: &Record<'_>, noise: &Noise) {
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, noise);
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
            velocity: self.setup.velocity(),
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
