//! The facade: one record in, a reading or a refusal out.
//!
//! [`Gauge::measure`] runs the steps in their order: health of the record, scan, echoes,
//! interface, train, times, thickness, budget, doubts. Every step stays public, for who wants to build
//! another gauge from them; [`interpretation`] holds what a set-up means for one record.

pub mod interpretation;
mod overlapping;
mod separating;
pub mod stage;
mod steps;
pub mod two_gains;
mod two_rounds;
pub mod uncoupled;

use self::stage::{Stage, StageMeter};
use crate::echo::noise::Noise;
use crate::echo::pulse::{PulseFacts, PulseMetrics, PulseQuality, ReferencePulse, learn, model};
use crate::echo::scan::Detector;
use crate::echo::separation::{PulseTrust, Separation};
use crate::echo::train::Train;
use crate::echo::{EchoList, EchoRole};
use crate::outcome::{Doubts, NoReading};
use crate::path::Spreading;
use crate::record::{Record, RecordHealth};
use crate::setup::{DelayLine, GaugeSetup, SetupError};
use crate::units::{Metres, MetresPerSecond, Seconds};
use crate::wall::limits::{Limits, LimitsVerdict};
use crate::wall::thickness::{self, Timed};
use crate::wall::uncertainty::Budget;
use crate::wall::{thin, way};
use crate::workspace::{CORRELATION_CAPACITY, Workspace};

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
    /// The coating, where the set-up names one and the echoes show it. The wall owes nothing to it.
    pub coating: Option<CoatingReading>,
    /// What the echoes were read as.
    pub interpretation: Interpretation,
    /// Upper bound of the probability that another cycle was read; of a thin wall, that another period was, or that there is
    /// no wall.
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

    /// Where this reading stands to the limits of its place: below, above, or undecided within the uncertainty. A reading
    /// with a doubt decides nothing. Read [`crate::wall::limits`] before relying on it.
    #[must_use]
    pub fn against(&self, limits: &Limits) -> LimitsVerdict {
        limits.judge(
            self.thickness,
            self.standard_uncertainty,
            self.coverage_factor,
            self.doubts,
        )
    }
}

/// What the echoes of a reading were taken for.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
#[non_exhaustive]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Interpretation {
    /// Echoes that stand clear of each other: the multiples of one wall, or a lone one.
    #[default]
    Train,
    /// A wall behind a delay line so thin that its echoes overlap with each other and with the interface echo, all of them
    /// fitted at once: see [`crate::echo::separation::thin_wall`].
    ThinWall,
}

impl Interpretation {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Train => "train",
            Self::ThinWall => "thin-wall",
        }
    }
}

/// What the echoes show of a coating.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct CoatingReading {
    /// The time that sound takes down and up through it, with its standard uncertainty (k = 1): of timing, zero, beam and
    /// couplant, and of the echoes that overlap.
    pub round_trip: Timed,
    /// Its thickness, if the set-up names its velocity.
    pub thickness: Option<CoatingThickness>,
}

/// A coating's thickness.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct CoatingThickness {
    /// The thickness.
    pub thickness: Metres,
    /// Standard uncertainty (k = 1): of the round trip, and of the coating's velocity.
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
    /// The multiples of the wall, if they could be told; `None` for a thin wall, see [`Gauge::thin_wall`].
    pub train: Option<Train>,
    /// The pulse as the best echo shows it; `None` if no echo stands high enough above the noise.
    pub pulse: Option<PulseMetrics>,
    /// The verdict on the nearest pair of echoes: the classical one, `None` with fewer than two; after
    /// [`Gauge::separate`] that of the model.
    pub separation: Option<Separation>,
}

/// A gauge: set-up, scratch memory and the reference pulse.
#[derive(Debug)]
pub struct Gauge<'w> {
    setup: GaugeSetup,
    workspace: Workspace<'w>,
    facts: PulseFacts,
    trust: PulseTrust,
    noise: Noise,
    detector: Detector,
    spreading: Spreading,
    learned_on: Option<Metres>,
    second_look: Option<SecondLook<'w>>,
    findings: Findings,
}

/// What reads a record again whose outcome is in doubt. A function's address and not its name, so that an image that never
/// learns a pulse, and so can never need it, does not hold it.
type SecondLook<'w> = for<'g, 'r, 'c> fn(&'g mut Gauge<'w>, &'r Record<'c>, &'r Noise, &mut Result<Reading, NoReading>);

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
            trust: PulseTrust::Modelled,
            noise: Noise::default(),
            detector,
            spreading: way::spreading(&setup, None),
            learned_on: None,
            second_look: None,
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
        self.learn_pulse_of_quality(samples, PulseQuality::UNKNOWN)
    }

    /// The same for a pulse whose own noise and mismatch were measured when it was learned.
    ///
    /// # Errors
    /// As [`Gauge::learn_pulse`]; [`SetupError::PulseQuality`] for shares that are none.
    pub fn learn_pulse_of_quality(&mut self, samples: &[f32], quality: PulseQuality) -> Result<(), SetupError> {
        if !quality.is_possible() {
            return Err(SetupError::PulseQuality);
        }
        let learned = learn(samples, self.setup.samples_per_cycle(), self.workspace.pulse);
        self.take_pulse(learned, quality)
    }

    /// Memory for the samples of a pulse on their way to [`Gauge::learn_pulse_from_scratch`], for who has none of their own.
    /// Every record that is measured overwrites it.
    pub fn scratch(&mut self) -> &mut [f32; CORRELATION_CAPACITY] {
        self.workspace.correlation
    }

    /// As [`Gauge::learn_pulse_of_quality`], from the first `length` samples of [`Gauge::scratch`].
    ///
    /// # Errors
    /// As there.
    #[inline(never)]
    pub fn learn_pulse_from_scratch(&mut self, length: usize, quality: PulseQuality) -> Result<(), SetupError> {
        if !quality.is_possible() {
            return Err(SetupError::PulseQuality);
        }
        let Workspace { correlation, pulse, .. } = &mut self.workspace;
        let learned = match correlation.get(..length) {
            Some(samples) => learn(samples, self.setup.samples_per_cycle(), pulse),
            None => Err(SetupError::PulseTooLong),
        };
        self.take_pulse(learned, quality)
    }

    /// Back to the pulse that the probe's data sheet promises.
    ///
    /// # Errors
    /// None for a set-up that made this gauge.
    pub fn forget_pulse(&mut self) -> Result<(), SetupError> {
        let modelled = model(&self.setup, self.workspace.pulse);
        self.take_pulse(modelled, PulseQuality::UNKNOWN)?;
        self.trust = PulseTrust::Modelled;
        Ok(())
    }

    /// Puts a pulse in force whose samples stand in the workspace, or the modelled one if it is none.
    #[inline(never)]
    fn take_pulse(&mut self, learned: Result<PulseFacts, SetupError>, quality: PulseQuality) -> Result<(), SetupError> {
        self.trust = PulseTrust::Modelled;
        let (facts, learned_on, result) = match learned {
            Ok(facts) => (facts.with_quality(quality), quality.learned_on, Ok(())),
            Err(error) => (model(&self.setup, self.workspace.pulse)?, None, Err(error)),
        };
        self.facts = facts;
        if result.is_ok() {
            self.trust = PulseTrust::learned(&self.facts);
            self.second_look = Some(Self::look_again);
        }
        if learned_on != self.learned_on {
            self.learned_on = learned_on;
            self.spreading = way::spreading(&self.setup, learned_on);
        }
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
        let learned_on = if same_pulse { self.learned_on } else { None };
        if !same_pulse {
            self.trust = PulseTrust::Modelled;
            // Only a pulse that is too long can fail, and then the old one is written back.
            let modelled = model(&setup, self.workspace.pulse);
            if let Err(error) = modelled {
                self.facts = model(&self.setup, self.workspace.pulse)?;
                self.fit_detector();
                return Err(error);
            }
            self.facts = modelled?;
        }
        if learned_on != self.learned_on || !way::same_spreading(&self.setup, &setup, learned_on) {
            self.spreading = way::spreading(&setup, learned_on);
            self.learned_on = learned_on;
        }
        self.setup = setup;
        self.fit_detector();
        Ok(())
    }

    /// How much later than straight the first back wall of a block comes, by the V of a dual-element probe or the
    /// spreading of the beam: its time less this is what a calibration needs, see [`way::path_deviation`].
    #[must_use]
    pub fn path_deviation(&self, wall: Metres) -> Seconds {
        way::path_deviation(&self.setup, &self.spreading, wall)
    }

    /// The thinnest and the thickest wall that the set-up reads with the pulse in force. Behind a delay line a learned pulse
    /// reads walls half as thin as a modelled one ([`thin::thinnest`]).
    #[must_use]
    pub fn wall_limits(&self) -> (Metres, Metres) {
        let duration = self.setup.sample_rate.period() * self.facts.envelope_duration;
        let learned = matches!(self.trust, PulseTrust::Learned { .. });
        let thinnest = if learned && thin::applies(&self.setup) {
            thin::thinnest(&self.setup, duration)
        } else {
            thickness::thinnest_wall(&self.setup, duration)
        };
        (thinnest, thickness::thickest_wall(&self.setup, duration))
    }

    /// The same as far as a record goes that was just measured, and behind a delay line that the set-up does not state, from the
    /// interface echo that it shows. What is thicker (and what no record of this length can show) is refused.
    #[must_use]
    pub fn wall_limits_of(&self, record: &Record<'_>) -> (Metres, Metres) {
        let clock = record.clock();
        let mut setup = self.setup;
        let end = clock.first_sample + clock.rate.period() * record.codes().len() as f32;
        if end < setup.window.to {
            setup.window.to = end;
        }
        if clock.first_sample > setup.window.from {
            setup.window.from = clock.first_sample;
        }
        let interface = self
            .findings
            .echoes
            .iter()
            .find(|echo| echo.role == EchoRole::Interface);
        if let (None, Some(interface)) = (setup.probe.delay_line, interface) {
            // Any velocity: only the time counts.
            let velocity = MetresPerSecond::new(2000.0);
            setup.probe.delay_line = Some(DelayLine {
                length: velocity * interface.arrival * 0.5,
                velocity,
            });
        }
        let duration = clock.rate.period() * self.facts.envelope_duration;
        (
            thickness::thinnest_wall(&setup, duration),
            thickness::thickest_wall(&setup, duration),
        )
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

    /// The block that the reference pulse in force was learned on, if that is known: what the beam does to echoes is told
    /// against what it did to the pulse, see [`Spreading::relative_to`].
    #[must_use]
    pub const fn pulse_learned_on(&self) -> Option<Metres> {
        self.learned_on
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
        self.measure_metered(record, &mut ())
    }

    /// The same, with each stage's work handed to a meter.
    ///
    /// # Errors
    /// As [`Gauge::measure`].
    pub fn measure_metered(&mut self, record: &Record<'_>, meter: &mut impl StageMeter) -> Result<Reading, NoReading> {
        self.findings = Findings::default();
        let range = meter.meter(Stage::Health, || self.usable_range(record))?;
        // Not taken apart: that would be a second copy on the stack.
        let mut heard = meter.meter(Stage::Scan, || self.scan(record, range));
        let (scan, noise) = &mut heard;
        meter.meter(Stage::Echoes, || self.measure_echoes(record, range, scan, noise));
        let found = meter.meter(Stage::Train, || self.find_train(record, range, scan, noise));
        let outcome = meter.meter(Stage::Wall, || self.wall_or_thin_wall(record, noise, found));
        // What is known of the pulse helps most where there was no reading.
        meter.meter(Stage::Pulse, || self.describe(record, noise));
        self.noise = *noise;
        outcome
    }
}
