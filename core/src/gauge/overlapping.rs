//! Walls so thin that their echoes overlap: read anew where the ordinary way has no reading, or a doubtful one.

use super::steps::surroundings;
use super::{Gauge, Interpretation, Reading};
use crate::echo::noise::Noise;
use crate::echo::separation::thin_wall::{Prior, ThinWall, thin_wall};
use crate::echo::separation::{PulseTrust, Unresolved};
use crate::echo::train::Train;
use crate::echo::{Echo, EchoRole};
use crate::outcome::{Doubt, Doubts, NoReading};
use crate::record::Record;
use crate::wall::thin;
use crate::wall::way::path_law;
use crate::workspace::Workspace;

/// Periods of a doubted train, in pulse durations, beyond which nothing that overlaps can have been taken for it.
const LONGEST_DOUBTED: f32 = 6.0;

/// Does a refusal leave room for a wall whose echoes overlap?
const fn may_overlap(why: &NoReading) -> bool {
    matches!(
        why,
        NoReading::NotCoupled
            | NoReading::Ambiguous { .. }
            | NoReading::NotThePulse { .. }
            | NoReading::OneEchoWhereTwoAreNeeded { .. }
            | NoReading::BelowMinimum { .. }
    )
}

/// Doubts of a reading that overlapping echoes would raise.
fn speak_of_overlap(doubts: Doubts) -> bool {
    [
        Doubt::NearMinimum,
        Doubt::PossibleDouble,
        Doubt::OverlappingEcho,
        Doubt::PulseMismatch,
        Doubt::UnevenTrain,
        Doubt::UnexplainedEchoes,
        Doubt::FewEchoes,
        Doubt::EarlierEcho,
    ]
    .iter()
    .any(|doubt| doubts.contains(*doubt))
}

impl Gauge<'_> {
    /// Is an outcome worth a second look? Never where the pulse was not learned, and not for a plain reading.
    pub(super) fn wants_second_look(&self, outcome: &Result<Reading, NoReading>) -> bool {
        if !matches!(self.trust, PulseTrust::Learned { .. }) || !thin::applies(&self.setup) {
            return false;
        }
        let near = || {
            let longest = LONGEST_DOUBTED * self.facts.envelope_duration;
            self.findings.train.is_some_and(|train| train.period < longest)
        };
        match outcome {
            Ok(reading) => speak_of_overlap(reading.doubts) && near(),
            Err(why) => may_overlap(why),
        }
    }

    /// The wall of a train, or why there is none; or that of overlapping echoes, where they tell one and the outcome is in doubt.
    #[inline(never)]
    pub(super) fn wall_or_thin_wall(
        &mut self,
        record: &Record<'_>,
        noise: &Noise,
        found: Result<Train, NoReading>,
    ) -> Result<Reading, NoReading> {
        let mut outcome = found.and_then(|train| self.wall(record, noise, &train));
        if let Some(look) = self.second_look
            && self.wants_second_look(&outcome)
        {
            look(self, record, noise, &mut outcome);
        }
        outcome
    }

    /// Reads the wall from overlapping echoes, if they tell one; else the outcome stays what it is.
    #[inline(never)]
    pub(super) fn look_again(&mut self, record: &Record<'_>, noise: &Noise, outcome: &mut Result<Reading, NoReading>) {
        self.noise = *noise;
        let Ok(found) = self.thin_wall(record) else {
            return;
        };
        let PulseTrust::Learned { mismatch } = self.trust else {
            return;
        };
        let setup = &self.setup;
        let law = path_law(setup, &self.spreading);
        let surroundings = surroundings(setup, self.workspace.pulse, self.facts, record, &self.noise);
        let read = thin::read(setup, &law, record.clock().rate.period(), &found);
        let wrong = thin::wrong_period_probability(&found);
        let doubts = thin::doubts(
            setup,
            &surroundings,
            &self.findings.echoes,
            &found,
            &read,
            mismatch,
            wrong,
        );
        *outcome = Ok(Reading {
            thickness: read.wall,
            standard_uncertainty: read.budget.combined(),
            coverage_factor: setup.coverage_factor,
            coating: None,
            interpretation: Interpretation::ThinWall,
            wrong_cycle_probability: wrong,
            doubts,
            budget: read.budget,
        });
        for echo in &mut self.findings.echoes {
            if matches!(echo.role, EchoRole::BackWall(_)) {
                echo.role = EchoRole::Other;
            }
        }
        self.findings.train = None;
    }

    /// Reads the period of a wall behind a delay line whose echoes overlap with the interface echo and with each other, from
    /// [`SHORTEST_PERIOD`](crate::echo::separation::thin_wall::SHORTEST_PERIOD) of the pulse duration on (0.47 mm of steel at
    /// 5 MHz, 60 %). [`Gauge::measure`] asks it where it needs it, and says so by [`Interpretation::ThinWall`]; here
    /// stands what it rests on. Needs a learned pulse.
    ///
    /// `record` must be the one that was measured last.
    ///
    /// # Errors
    /// Why no wall is told: see [`thin_wall`]; [`Unresolved::PulseUnknown`] with the data sheet's pulse;
    /// [`Unresolved::OnePulse`] if no echo was found.
    #[inline(never)]
    pub fn thin_wall(&mut self, record: &Record<'_>) -> Result<ThinWall, Unresolved> {
        let PulseTrust::Learned { mismatch } = self.trust else {
            return Err(Unresolved::PulseUnknown);
        };
        // The interface echo, or the strongest where none was named.
        let weight = |echo: &Echo| (echo.role == EchoRole::Interface, echo.amplitude);
        let mut first: Option<&Echo> = None;
        for echo in &self.findings.echoes {
            if first.is_none_or(|most| weight(echo) > weight(most)) {
                first = Some(echo);
            }
        }
        let prior = Prior {
            around: first.ok_or(Unresolved::OnePulse)?.position.as_samples(),
            offset: thin::offset(&self.setup).get() * record.clock().rate.get(),
            mismatch,
        };
        let Workspace {
            pulse,
            correlation,
            train,
            ..
        } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, &self.noise);
        thin_wall(&surroundings, &prior, &mut correlation[..], &mut train[..])
    }
}
