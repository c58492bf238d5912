//! Whether an echo of the last record hides a second one.

use super::Gauge;
use super::steps::surroundings;
use crate::echo::Echo;
use crate::echo::separation::model::decide;
use crate::echo::separation::thin_wall::{ThinWall, thin_wall};
use crate::echo::separation::{
    PulseTrust, Separation, Unresolved, judge, nearest_pair, stretch_around, suspect, verdict,
};
use crate::record::Record;
use crate::workspace::Workspace;

impl Gauge<'_> {
    /// Asks the model of two pulses about the record that was measured last: whether the nearest pair of echoes can be
    /// told apart although they overlap, or, where all stand clear of each other, whether the echo whose shape
    /// stands out most is two. The answer replaces [`super::Findings::separation`], which until then is the
    /// classical verdict. `None` if [`Gauge::measure`] found no echo.
    ///
    /// `record` must be the one that was measured: what was found in it is used. It takes about half as long as a
    /// reading (`cargo board cost` counts it). See [`crate::echo::separation`] for what it can tell and
    /// when not to trust it, and [`Gauge::trust_pulse`] for how far the reference pulse counts.
    #[inline(never)]
    pub fn separate(&mut self, record: &Record<'_>) -> Option<Separation> {
        let echoes = &self.findings.echoes;
        let Workspace {
            pulse,
            correlation,
            train,
            ..
        } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, &self.noise);
        let duration = self.facts.envelope_duration;
        let (first, last) = suspect(echoes, duration)?;
        let classical =
            nearest_pair(echoes).map(|(first, second)| judge(&surroundings, &first, &second, &mut correlation[..]));
        let stretch = stretch_around(&first, &last, echoes, duration, self.trust);
        let answer = decide(&surroundings, &stretch, &mut correlation[..], &mut train[..]);
        let separation = verdict(&answer, classical, &record.clock());
        self.findings.separation = Some(separation);
        Some(separation)
    }

    /// Reads a wall behind a delay line whose echoes overlap with the interface echo and with each other, from 0.3 pulse durations
    /// of period on (0.47 mm of steel at 5 MHz, 60 %): where [`Gauge::measure`] has answered
    /// [`crate::NoReading::BelowMinimum`] or found no train. The wall is half the period times the velocity; the period's
    /// uncertainty is that of noise and pulse alone. Needs a learned pulse. It takes some 5 million instructions on a Cortex-M4F
    /// (30 ms at 170 MHz) and 4 KiB of stack.
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
        let mut strongest: Option<&Echo> = None;
        for echo in &self.findings.echoes {
            if strongest.is_none_or(|most| echo.amplitude > most.amplitude) {
                strongest = Some(echo);
            }
        }
        let around = strongest.ok_or(Unresolved::OnePulse)?.position.as_samples();
        let Workspace {
            pulse,
            correlation,
            train,
            ..
        } = &mut self.workspace;
        let surroundings = surroundings(&self.setup, pulse, self.facts, record, &self.noise);
        thin_wall(&surroundings, around, mismatch, &mut correlation[..], &mut train[..])
    }

    /// How well the reference pulse's shape is taken to be known: [`PulseTrust::Modelled`] for the data sheet's pulse,
    /// [`PulseTrust::learned`] after [`Gauge::learn_pulse`].
    #[must_use]
    pub const fn pulse_trust(&self) -> PulseTrust {
        self.trust
    }

    /// Says otherwise: that the echoes of a part are less alike than the pulse's quality says, or that nothing is known of
    /// their shape. Learning or modelling another pulse sets it back.
    pub const fn trust_pulse(&mut self, trust: PulseTrust) {
        self.trust = trust;
    }
}
