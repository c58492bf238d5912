//! The steps of [`Gauge::measure`](super::Gauge::measure), a method for each [`Stage`](super::stage::Stage).

use super::interpretation::{clearest, rules, start_of_wall, times};
use super::{CoatingReading, Gauge, Reading};
use crate::echo::noise::listen;
use crate::echo::pulse::{PulseContext, PulseFacts, ReferencePulse, measure_pulse};
use crate::echo::scan::{Scan, scan};
use crate::echo::separation::{judge, nearest_pair};
use crate::echo::train::{Train, Undecided, find_train};
use crate::echo::{Surroundings, measure_echoes};
use crate::math;
use crate::outcome::NoReading;
use crate::record::{Record, SampleRange};
use crate::setup::{GaugeSetup, PULSE_CAPACITY, ProbeKind, Span};
use crate::units::Metres;
use crate::wall::judgement::{self, Evidence};
use crate::wall::uncertainty::Source;
use crate::wall::{thickness, uncertainty};
use crate::workspace::Workspace;

/// Share of clipped samples in the window, in thousandths, from which nothing is read any more.
const CLIPPED_LIMIT: u16 = 30;

/// What echoes of this record are measured against.
fn surroundings<'a>(
    setup: &GaugeSetup,
    pulse: &'a [f32; PULSE_CAPACITY],
    facts: PulseFacts,
    record: &Record<'a>,
    scan: &Scan,
) -> Surroundings<'a> {
    Surroundings {
        record: *record,
        pulse: ReferencePulse::new(pulse, facts),
        noise: scan.noise,
        timing_noise: scan.timing_noise,
        samples_per_cycle: setup.samples_per_cycle(),
    }
}

impl Gauge<'_> {
    /// Checks what can be checked before looking at the codes' course.
    pub(super) fn usable_range(&mut self, record: &Record<'_>) -> Result<SampleRange, NoReading> {
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

    pub(super) fn scan(&mut self, record: &Record<'_>, range: SampleRange) -> Scan {
        let envelope = self
            .workspace
            .envelope
            .get_mut(..record.codes().len())
            .unwrap_or(&mut []);
        let mut found = scan(
            record.codes(),
            record.format(),
            range,
            &self.detector,
            self.workspace.skirt,
            envelope,
        );
        let pulse = ReferencePulse::new(self.workspace.pulse, self.facts);
        listen(
            record.codes(),
            &pulse,
            &mut found,
            &self.detector,
            self.workspace.skirt,
            envelope,
            &mut self.workspace.correlation[..],
        );
        found
    }

    /// Fits the pulse at every candidate; the noise may turn out lower than the scan thought.
    pub(super) fn measure_echoes(&mut self, record: &Record<'_>, range: SampleRange, scan: &mut Scan) {
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, scan);
        measure_echoes(
            &surroundings,
            scan,
            range,
            &mut self.findings.echoes,
            &mut correlation[..],
        );
        self.findings.noise = scan.noise;
    }

    /// Which echoes are one wall's multiples.
    pub(super) fn find_train(
        &mut self,
        record: &Record<'_>,
        range: SampleRange,
        scan: &Scan,
    ) -> Result<Train, NoReading> {
        if self.findings.echoes.is_empty() {
            return Err(self.nothing_found(record, range));
        }
        let start = start_of_wall(&self.setup, record, &mut self.findings.echoes)?;
        let Workspace { pulse, train: lags, .. } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, scan);
        let rules = rules(&self.setup, &surroundings, range, scan, &self.detector, start);
        let period_of = |samples: f32| self.setup.velocity() * (record.clock().rate.period() * samples) * 0.5;
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
        Ok(train)
    }

    /// Thickness, budget and doubts.
    pub(super) fn wall(&mut self, record: &Record<'_>, scan: &Scan, train: &Train) -> Result<Reading, NoReading> {
        let surroundings = surroundings(&self.setup, self.workspace.pulse, self.facts, record, scan);
        let times = times(record, train, &self.findings.echoes);
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
        let evidence = Evidence {
            setup: &self.setup,
            surroundings: &surroundings,
            echoes: &self.findings.echoes,
            train,
            times: &times,
            wall,
            budget: &budget,
            expanded: standard_uncertainty * self.setup.coverage_factor,
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
    pub(super) fn describe(&mut self, record: &Record<'_>, scan: &Scan) {
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, scan);
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
