//! The decision with a pulse from the data sheet: its shape is fitted too, in both hypotheses, and the decision with the
//! shape as it stands has to agree.

use super::Unresolved;
use super::model::{Answer, Decision, LEFT_OVER, Split, under};
use super::pair::Pair;
use super::shape::{Fit, Model, Work};
use crate::echo::Surroundings;
use crate::echo::interpolate::REACH;
use crate::math;
use crate::units::SamplePosition;
use heapless::Vec;

/// Least 2 ln Λ once the shape is free on both sides: 98 % of single echoes stay below it with frequency, phase and width wrong
/// at once, 99 % with one of them (`val_separation_with_a_modelled_pulse`).
const THRESHOLD_FREE: f32 = 8.0;
/// The same for the shape as it stands.
const THRESHOLD_STIFF: f32 = 14.0;
/// How many of the best pairs the fit with a free shape starts from.
const STARTS: usize = 3;
/// Share of the lead of the data sheet's shape that counts when pairs are compared: shapes far from the sheet in several
/// numbers at once are rarer than three independent ones.
const STIFFNESS: f32 = 0.08;
/// Energy that a fitted shape still leaves unexplained, over the echo's; what the pair leaves comes on top.
const MISMATCH: f32 = 1e-5;
/// The same for the shape as it stands.
const MISMATCH_STIFF: f32 = 3.2e-4;
/// Smallest ratio of the amplitudes.
const LEAST_RATIO: f32 = 0.05;
/// Steps that every start gets.
const FIRST_STEPS: u8 = 3;
/// Steps that those get on top which can still be the best.
const MORE_STEPS: u8 = 6;
/// They can if they explain no less than the best by this share of what the best gains over one echo.
const HOPE: f32 = 0.25;

impl Decision<'_> {
    /// Decides with and without freedom of shape.
    #[inline(never)]
    pub(super) fn roughly_known(&self, best: &Pair, found: &[Pair], memory: &mut [f32]) -> Answer {
        let Some(mut work) = Work::new(memory) else {
            return Answer::refused(Unresolved::NoRoom);
        };
        let Surroundings {
            record,
            pulse,
            samples_per_cycle,
            ..
        } = self.surroundings;
        // The fit counts samples from a little before the window: small numbers keep their digits.
        let base = self.lags.start.max(0);
        let codes = usize::try_from(base).ok().and_then(|base| record.codes().get(base..));
        let window = under(
            self.surroundings,
            self.absolute(REACH as f32),
            self.absolute(self.lags.last()),
        );
        let mut mean = 0.0;
        for &code in window {
            mean += f32::from(code);
        }
        mean /= window.len().max(1) as f32;
        let model = Model::new(codes.unwrap_or(&[]), mean, pulse, *samples_per_cycle, self.noise);
        let raised = model.amplitude_of_samples();
        let unit = 1.0 / (math::sqrt(pulse.facts.energy) * raised);
        let shifted = |place: f32| model.point_of(self.samples(place) + self.lags.start.min(0) as f32);

        let single = Fit {
            first: shifted(self.one.place),
            first_amplitude: self.one.amplitude * unit,
            ..Fit::default()
        };
        let one = model.fit(&single, FIRST_STEPS + MORE_STEPS, &mut work);
        let mut fits: Vec<Fit, STARTS> = Vec::new();
        for pair in found.iter().take(STARTS) {
            let start = Fit {
                first: shifted(pair.first),
                first_amplitude: pair.first_amplitude * unit,
                second: shifted(pair.second),
                second_amplitude: pair.second_amplitude * unit,
                ..Fit::default()
            };
            let _ = fits.push(model.fit(&start, FIRST_STEPS, &mut work));
        }
        let most = fits.iter().fold(0.0, |most, fit| math::larger(most, fit.explained));
        // Energies of points as energies of samples, which the tables' are.
        let stride = model.stride();
        let hopeless = most - HOPE * (most - one.explained) - 20.0 * self.noise * self.noise / stride;
        let (mut fit, mut cost) = (Fit::default(), 0.0);
        for (own, pair) in fits.iter_mut().zip(found) {
            if own.explained >= hopeless {
                *own = model.fit(own, MORE_STEPS, &mut work);
            }
            let stiffness = STIFFNESS * (best.explained - pair.explained) / stride;
            if own.explained - stiffness > fit.explained - cost {
                (fit, cost) = (*own, stiffness);
            }
        }
        if !(fit.explained > 0.0) {
            return Answer::refused(Unresolved::OnePulse);
        }
        let left = model.unexplained(&fit);
        let mismatch = math::larger(MISMATCH, LEFT_OVER * left);
        let gained = self.statistic(stride * (fit.explained - one.explained), mismatch);
        let stiff = self.statistic(best.explained - self.one.explained(), MISMATCH_STIFF);
        let spacing = stride * (fit.second - fit.first);
        let others = fits.iter().zip(found).map(|(other, pair)| {
            let stiffness = STIFFNESS * (best.explained - pair.explained);
            let apart = stride * (other.second - other.first);
            (apart, stride * other.explained - stiffness)
        });
        let lead = self.lead((spacing, stride * (fit.explained - cost)), others, mismatch);
        let ratio = (fit.second_amplitude / fit.first_amplitude).abs();
        let sound = ratio >= LEAST_RATIO && ratio * LEAST_RATIO <= 1.0 && fit.spacing_variance > 0.0;
        let split = self.accept(gained, THRESHOLD_FREE, spacing, lead).and_then(|()| {
            if !(stiff > THRESHOLD_STIFF && sound) {
                return Err(Unresolved::ModelsDisagree);
            }
            Ok(Split {
                first: SamplePosition::new(base.unsigned_abs(), model.sample_of(fit.first)),
                spacing,
                spacing_uncertainty: stride * math::sqrt(fit.spacing_variance * self.inflation(mismatch)),
                first_amplitude: fit.first_amplitude * raised,
                second_amplitude: fit.second_amplitude * raised,
            })
        });
        Answer {
            split,
            log_odds: Some(0.5 * math::smaller(gained, stiff)),
        }
    }
}
