//! The facade: one record in, a reading or a refusal out.

use crate::echo::EchoList;
use crate::echo::pulse::PulseMetrics;
use crate::echo::separation::Separation;
use crate::outcome::{Doubts, NoReading};
use crate::record::{Record, RecordHealth};
use crate::setup::{GaugeSetup, SetupError};
use crate::units::Metres;
use crate::wall::uncertainty::Budget;
use crate::workspace::Workspace;

/// A thickness that can be signed for.
#[derive(Clone, Debug, PartialEq)]
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
pub struct CoatingReading {
    /// Its thickness.
    pub thickness: Metres,
    /// Standard uncertainty (k = 1).
    pub standard_uncertainty: Metres,
}

/// What the last record held, whether or not it gave a reading.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct Findings {
    /// Extremes and clipped samples inside the window.
    pub health: RecordHealth,
    /// Root mean square of the noise per sample, in codes.
    pub noise: f32,
    /// The echoes in the order of their arrival.
    pub echoes: EchoList,
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
    findings: Findings,
}

impl<'w> Gauge<'w> {
    /// Makes a gauge with the pulse that the probe's data sheet promises.
    ///
    /// # Errors
    /// A wrong set-up, a pulse that does not fit, or scratch memory that is too small.
    pub fn new(setup: GaugeSetup, workspace: Workspace<'w>) -> Result<Self, SetupError> {
        if let Some(error) = setup.check() {
            return Err(error);
        }
        Ok(Self {
            setup,
            workspace,
            findings: Findings::default(),
        })
    }

    /// Replaces the reference pulse by one learned from an echo.
    ///
    /// `samples` are at the set-up's sample rate. The pulse is scaled to an envelope peak of 1, and
    /// its origin is the interpolated maximum of its envelope.
    ///
    /// # Errors
    /// [`SetupError::PulseTooLong`] or [`SetupError::PulseEmpty`]; the old pulse stays in force.
    pub fn learn_pulse(&mut self, samples: &[f32]) -> Result<(), SetupError> {
        let _ = (samples, &self.workspace);
        Err(SetupError::PulseEmpty)
    }

    /// Takes another set-up, after a calibration or from a menu. The reference pulse is kept if the
    /// sample rate and the probe are the same, and modelled again if not.
    ///
    /// # Errors
    /// A wrong set-up; the old one stays in force.
    pub fn change_setup(&mut self, setup: GaugeSetup) -> Result<(), SetupError> {
        if let Some(error) = setup.check() {
            return Err(error);
        }
        self.setup = setup;
        Ok(())
    }

    /// The set-up in force.
    #[must_use]
    pub const fn setup(&self) -> &GaugeSetup {
        &self.setup
    }

    /// Measures one record.
    ///
    /// # Errors
    /// A refusal with its evidence: a normal outcome. [`Gauge::findings`] tells what was seen.
    pub fn measure(&mut self, record: &Record<'_>) -> Result<Reading, NoReading> {
        let range = record.window(self.setup.window)?;
        self.findings = Findings {
            health: record.health(range),
            ..Findings::default()
        };
        Err(NoReading::NoEcho { noise: 0.0 })
    }

    /// What the last record held: echoes, pulse, separation.
    #[must_use]
    pub const fn findings(&self) -> &Findings {
        &self.findings
    }
}
