//! Whether an echo of the last record hides a second one.

use super::Gauge;
use super::steps::surroundings;
use crate::echo::separation::model::decide;
use crate::echo::separation::{PulseTrust, Separation, judge, nearest_pair, stretch_around, suspect, verdict};
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
