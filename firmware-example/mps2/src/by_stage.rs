//! [`Gauge::measure`](halfpulse::Gauge::measure) taken apart: the core's public steps in its order, each
//! handed to a meter, so that a reading's cost can be told stage by stage.
//!
//! It must give the reading that the gauge gives, which a test holds it to, and its sum must be what the
//! gauge takes, which `cargo board cost` holds it to.

use halfpulse::echo::pulse::{PulseContext, PulseFacts, ReferencePulse, measure_pulse, model};
use halfpulse::echo::scan::{Detector, Scan, scan};
use halfpulse::echo::separation::{judge, nearest_pair};
use halfpulse::echo::train::{Train, Undecided, find_train};
use halfpulse::echo::{Surroundings, measure_echoes};
use halfpulse::gauge::interpretation::{clearest, rules, start_of_wall, times};
use halfpulse::math;
use halfpulse::record::SampleRange;
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::wall::judgement::{self, Evidence};
use halfpulse::wall::uncertainty::Source;
use halfpulse::wall::{thickness, uncertainty};
use halfpulse::{CoatingReading, EchoList, GaugeSetup, Metres, NoReading, Reading, Record, SetupError, Workspace};

/// The stages, in the order in which a record goes through them.
pub const STAGES: [&str; 6] = ["health", "scan", "echoes", "train", "wall", "pulse"];

/// Where a stage's work is counted.
pub trait Meter {
    /// Does the work of a stage; `stage` is its place in [`STAGES`].
    fn count<R>(&mut self, stage: usize, work: impl FnOnce() -> R) -> R;
}

/// Counts nothing.
impl Meter for () {
    fn count<R>(&mut self, _: usize, work: impl FnOnce() -> R) -> R {
        work()
    }
}

/// What a gauge prepares once.
#[derive(Debug)]
pub struct Prepared<'w> {
    setup: GaugeSetup,
    workspace: Workspace<'w>,
    facts: PulseFacts,
    detector: Detector,
}

impl<'w> Prepared<'w> {
    /// As [`halfpulse::Gauge::new`], for records that fit.
    ///
    /// # Errors
    /// A pulse that does not fit.
    pub fn new(setup: GaugeSetup, workspace: Workspace<'w>) -> Result<Self, SetupError> {
        let facts = model(&setup, workspace.pulse)?;
        let pulse = ReferencePulse::new(workspace.pulse, facts);
        let detector = Detector::new(setup.samples_per_cycle(), &pulse, workspace.skirt);
        Ok(Self {
            setup,
            workspace,
            facts,
            detector,
        })
    }

    fn surroundings<'a>(&'a self, record: &Record<'a>, noise: f32) -> Surroundings<'a> {
        Surroundings {
            record: *record,
            pulse: ReferencePulse::new(self.workspace.pulse, self.facts),
            noise,
            samples_per_cycle: self.setup.samples_per_cycle(),
        }
    }

    /// Measures one of the canned records, stage by stage.
    ///
    /// # Errors
    /// As [`halfpulse::Gauge::measure`], as far as the canned records go.
    pub fn measure(&mut self, record: &Record<'_>, meter: &mut impl Meter) -> Result<Reading, NoReading> {
        let range = meter.count(0, || {
            let range = record.window(self.setup.window)?;
            let health = record.health(range);
            if health.is_dead() || health.stuck_bits() != 0 || health.clipped_per_mille() > 30 {
                return Err(NoReading::DeadReceiver);
            }
            Ok(range)
        })?;
        let mut found = meter.count(1, || {
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
        });
        let mut echoes = EchoList::new();
        meter.count(2, || self.measure_echoes(record, range, &mut found, &mut echoes));
        let outcome = self.read(record, range, &found, &mut echoes, meter);
        meter.count(5, || self.describe(record, found.noise, &echoes));
        outcome
    }

    fn read(
        &mut self,
        record: &Record<'_>,
        range: SampleRange,
        found: &Scan,
        echoes: &mut EchoList,
        meter: &mut impl Meter,
    ) -> Result<Reading, NoReading> {
        if echoes.is_empty() {
            return Err(meter.count(2, || self.nothing_found(record, range, found.noise)));
        }
        let train = meter.count(3, || self.find_train(record, range, found, echoes))?;
        meter.count(4, || self.wall(record, found.noise, echoes, &train))
    }

    fn measure_echoes(&mut self, record: &Record<'_>, range: SampleRange, found: &mut Scan, echoes: &mut EchoList) {
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = Surroundings {
            record: *record,
            pulse: ReferencePulse::new(pulse, self.facts),
            noise: found.noise,
            samples_per_cycle: self.setup.samples_per_cycle(),
        };
        found.noise = measure_echoes(&surroundings, &found.candidates, range, echoes, &mut correlation[..]);
    }

    fn nothing_found(&self, record: &Record<'_>, range: SampleRange, noise: f32) -> NoReading {
        let before = record.health(SampleRange {
            start: 0,
            end: range.start,
        });
        let swing = f32::from(before.highest) - f32::from(before.lowest);
        if before.samples > 0 && swing > 0.1 * record.format().full_scale() && swing > 20.0 * noise {
            NoReading::OnlyTransmissionPulse
        } else {
            NoReading::NoEcho { noise }
        }
    }

    fn find_train(
        &mut self,
        record: &Record<'_>,
        range: SampleRange,
        found: &Scan,
        echoes: &mut EchoList,
    ) -> Result<Train, NoReading> {
        let start = start_of_wall(&self.setup, record, echoes)?;
        let Workspace { pulse, train, .. } = &mut self.workspace;
        let surroundings = Surroundings {
            record: *record,
            pulse: ReferencePulse::new(pulse, self.facts),
            noise: found.noise,
            samples_per_cycle: self.setup.samples_per_cycle(),
        };
        let rules = rules(&self.setup, &surroundings, range, found, &self.detector, start);
        find_train(&surroundings, echoes, &rules, train).map_err(|undecided| match undecided {
            Undecided::NoTrain => NoReading::NoEcho { noise: found.noise },
            Undecided::Ambiguous { candidates, .. } => NoReading::Ambiguous {
                candidates,
                best: Metres::ZERO,
                next: Metres::ZERO,
            },
        })
    }

    fn wall(&self, record: &Record<'_>, noise: f32, echoes: &EchoList, train: &Train) -> Result<Reading, NoReading> {
        let surroundings = self.surroundings(record, noise);
        let setup = &self.setup;
        let times = times(record, train, echoes);
        let wall = thickness::wall(setup, &times).ok_or(NoReading::NoInterfaceEcho)?;
        let mut budget = uncertainty::budget(setup, &times, wall);
        budget.add(Source::ReferencePulse, uncertainty::reference_pulse(setup, &self.facts));
        let standard_uncertainty = budget.combined();
        let evidence = Evidence {
            setup,
            surroundings: &surroundings,
            echoes,
            train,
            times: &times,
            wall,
            budget: &budget,
            expanded: standard_uncertainty * setup.coverage_factor,
        };
        let coating = thickness::coating(setup, &times).and_then(|thickness| {
            let from_times = uncertainty::coating_uncertainty(setup, &times, wall)?;
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
            coverage_factor: setup.coverage_factor,
            coating,
            wrong_cycle_probability: judgement::wrong_cycle_probability(&evidence),
            doubts: judgement::doubts(&evidence),
            budget,
        })
    }

    fn describe(&mut self, record: &Record<'_>, noise: f32, echoes: &EchoList) {
        let Workspace { pulse, correlation, .. } = &mut self.workspace;
        let surroundings = Surroundings {
            record: *record,
            pulse: ReferencePulse::new(pulse, self.facts),
            noise,
            samples_per_cycle: self.setup.samples_per_cycle(),
        };
        let scratch = &mut correlation[..];
        if let Some((first, second)) = nearest_pair(echoes) {
            keep(judge(&surroundings, &first, &second, scratch));
        }
        let Some((best, room)) = clearest(echoes) else {
            return;
        };
        let context = PulseContext {
            sample_rate: record.clock().rate,
            centre_frequency: self.setup.probe.centre_frequency,
            bandwidth: self.setup.probe.bandwidth(),
            velocity: self.setup.velocity(),
            noise,
        };
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
        keep(measure_pulse(window, &context));
    }
}

/// Keeps the optimiser from leaving out what nobody looks at.
fn keep<T>(value: T) {
    core::hint::black_box(value);
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::canned::{CAPACITY, RECORDS};
    use halfpulse::{Gauge, Scratch};

    #[test]
    fn stage_by_stage_it_is_the_gauges_reading() {
        let (mut one, mut other) = (Scratch::<CAPACITY>::ZERO, Scratch::<CAPACITY>::ZERO);
        for canned in &RECORDS {
            let mut codes = [0; CAPACITY];
            let record = Record::new(canned.copy_codes(&mut codes), canned.format, canned.clock);
            let mut gauge = Gauge::new(canned.setup, one.workspace()).unwrap();
            let mut stages = Prepared::new(canned.setup, other.workspace()).unwrap();
            let staged = stages.measure(&record, &mut ());
            assert_eq!(staged, gauge.measure(&record), "{}", canned.name);
        }
    }
}
