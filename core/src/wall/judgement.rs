//! May this reading be believed? Doubts, and the probability of a wrong cycle.
//!
//! **In**: everything that the steps before have found. **Out**: [`Doubts`]. A doubt is raised only
//! where what it names could move the reading beyond its expanded uncertainty: a gauge that doubts
//! everything says nothing.

use crate::echo::train::Train;
use crate::echo::{Echo, EchoRole, Surroundings, UNRECOGNISED};
use crate::math::{self, RECTANGULAR};
use crate::outcome::{Doubt, Doubts};
use crate::path::PathLaw;
use crate::setup::{EchoSign, GaugeSetup, ProbeKind, Span};
use crate::units::{Metres, Seconds};
use crate::wall::company;
use crate::wall::thickness::{self, Timed, TrainTimes};
use crate::wall::uncertainty::{self, Budget};
use crate::wall::{curvature, way};

/// Wrong-cycle probability above which the signal counts as low.
pub(super) const WRONG_CYCLE_LIMIT: f32 = 1e-3;
/// Below this many samples a cycle the sampling counts as coarse.
const SAMPLES_PER_CYCLE_LIMIT: f32 = 4.0;

/// More energy than this share of the train's in echoes that the train does not explain: among so many, a train can be
/// found by chance. Grain without any back wall reaches 0.3 in all but one of 1000 readings, paint's reverberations 0.15.
const UNEXPLAINED_LIMIT: f32 = 0.3;
/// The same for one or two multiples, to which one coincidence is enough.
const UNEXPLAINED_LIMIT_OF_FEW: f32 = 0.1;

/// Strangers of less than the multiples' own energy may stand beside multiples that do not look like the pulse: spikes are as
/// many again and more, a thin block's echoes under a film, which run into each other, stay below it.
const OTHERS_LIMIT: f32 = 1.0;

/// So many standard uncertainties of an excess are no chance any more (1 in 370).
const BEYOND_CHANCE: f32 = 3.0;
/// Unexplained over explained amplitude from which what came back is not the pulse at all. An evenly attenuated pulse or one of half the
/// bandwidth stays below 0.5; spikes and ringing lie between 0.85 and 5.
const NOT_THE_PULSE: f32 = 0.85;
/// What a reading rests on.
#[derive(Clone, Copy, Debug)]
pub struct Evidence<'a> {
    /// The set-up.
    pub setup: &'a GaugeSetup,
    /// Record, pulse and noise.
    pub surroundings: &'a Surroundings<'a>,
    /// All echoes with their roles.
    pub echoes: &'a [Echo],
    /// The multiples.
    pub train: &'a Train,
    /// The times that the thickness was made from.
    pub times: &'a TrainTimes,
    /// How their times followed from the echoes', in seconds.
    pub law: PathLaw<'a>,
    /// The thickness.
    pub wall: Metres,
    /// Where its uncertainty comes from.
    pub budget: &'a Budget,
    /// Its expanded uncertainty.
    pub expanded: Metres,
    /// What is left of the first back wall's time beside start and period, with its whole uncertainty
    /// ([`uncertainty::excess_uncertainty`]), where the set-up gives a use to it.
    pub excess: Option<Timed>,
}

impl Evidence<'_> {
    fn back_wall(&self, number: u8) -> Option<&Echo> {
        self.echoes.iter().find(|echo| echo.role == EchoRole::BackWall(number))
    }

    fn interface(&self) -> Option<&Echo> {
        self.echoes.iter().find(|echo| echo.role == EchoRole::Interface)
    }

    /// Thickness that a time stands for.
    fn thickness_of(&self, time: Seconds) -> Metres {
        self.setup.velocity() * time * (0.5 * way::gain(self.setup, self.wall))
    }

    /// How far a difference between the pulse and what came back could have moved an arrival.
    ///
    /// Two things tell. A disturbance of relative size e, in quadrature, moves the best fit by e / ω: an
    /// upper bound, but even attenuation, which moves nothing, counts too. The group lag is the shift
    /// itself, for a turned phase, and of the shift's size for an overlapping echo. So the smaller of
    /// the two; but of a pulse that is hardly recognised, only the bound.
    fn shift(&self, mismatch: f32, group_lag: Seconds) -> Metres {
        let bound = self.shift_by(mismatch);
        let told = self.thickness_of(group_lag.abs());
        if mismatch < UNRECOGNISED && told < bound {
            told
        } else {
            bound
        }
    }

    /// The bound alone.
    fn shift_by(&self, mismatch: f32) -> Metres {
        let samples = mismatch / self.surroundings.pulse.facts.angular_frequency;
        self.thickness_of(self.surroundings.record.clock().rate.period() * samples)
    }

    /// What the spreading of the beam, which turns phases by nature, may do to a group lag: about twice its shift, since
    /// the envelope moves the other way. The correction moves arrivals and leaves the echoes' shapes as they are.
    fn known_phase(&self) -> Metres {
        self.thickness_of(way::beam_shift(self.setup, self.wall)) * 2.2
    }

    /// Largest part of the reading that differences between its echoes could stand for.
    fn differing_shift(&self) -> Metres {
        let span = thickness::wall_span(self.setup);
        let reference = match span {
            Span::InterfaceToBackWall => self.interface(),
            Span::TransmissionPulseToBackWall | Span::BackWallToBackWall => self.back_wall(self.train.first_multiple),
        };
        let Some(reference) = reference else {
            return Metres::ZERO;
        };
        // What the beam turns by nature.
        let trip = (self.wall * 2.0 / self.setup.velocity()).get();
        let by_beam = |multiples: f32| Seconds::new(self.law.group_lag(multiples * trip));
        let mut largest = Metres::ZERO;
        for echo in self.echoes {
            let steps = match (span, echo.role) {
                (Span::InterfaceToBackWall, EchoRole::BackWall(1)) => 1.0,
                (Span::BackWallToBackWall, EchoRole::BackWall(number)) if number > self.train.first_multiple => {
                    f32::from(number - self.train.first_multiple)
                }
                _ => continue,
            };
            let mismatch = math::larger(echo.mismatch, reference.mismatch);
            let from = match span {
                Span::InterfaceToBackWall => 0.0,
                _ => f32::from(self.train.first_multiple),
            };
            let (here, there) = (by_beam(from + steps), by_beam(from));
            let strange = echo.strange_lag(here, self.surroundings) - reference.strange_lag(there, self.surroundings);
            // A third to spare: the element's size is not known well.
            let beyond = strange.abs() - (here - there).abs() * 0.3;
            let shift = self.shift(mismatch, Seconds::new(math::larger(beyond.get(), 0.0))) / steps;
            if shift > largest {
                largest = shift;
            }
        }
        largest
    }

    /// How little the echoes that the reading rests on look like the pulse. Between back walls the strongest decides,
    /// elsewhere the worst.
    fn strangeness(&self) -> f32 {
        let train = thickness::wall_span(self.setup) == Span::BackWallToBackWall;
        let strongest = self.used().fold(0.0, |m, echo| math::larger(m, echo.amplitude));
        self.used()
            .filter(|echo| !(train && echo.amplitude < strongest))
            .fold(0.0, |m, echo| math::larger(m, echo.mismatch))
    }

    /// Do all multiples but the strongest together reach a quarter of its height, and what is no multiple little? All strangers count here, those
    /// too that were listened to as grain.
    fn is_even_train(&self) -> bool {
        let (mut all, mut strongest, mut others) = (0.0, 0.0, 0.0);
        for echo in self.echoes {
            let energy = echo.amplitude * echo.amplitude;
            match echo.role {
                EchoRole::BackWall(_) => {
                    all += energy;
                    strongest = math::larger(strongest, energy);
                }
                EchoRole::Other => others += energy,
                _ => {}
            }
        }
        all - strongest > 0.06 * strongest && others < OTHERS_LIMIT * all
    }

    /// Does the strongest of the echoes that the reading rests on stand out of grain and noise? A lone one must.
    fn stands_out(&self) -> bool {
        self.used()
            .any(|echo| self.surroundings.stands_out(echo.amplitude, echo.position.as_samples()))
    }

    /// Did something that looks like the pulse come back before the first back wall that was seen, and after the surface?
    fn has_earlier_echo(&self) -> bool {
        let Some(first) = self.back_wall(self.train.first_multiple) else {
            return false;
        };
        let surface = self
            .interface()
            .map_or(self.setup.zero.offset, |interface| interface.arrival);
        self.echoes.iter().any(|echo| {
            echo.role == EchoRole::Other
                && echo.arrival > surface
                && echo.arrival < first.arrival
                && echo.mismatch < UNRECOGNISED
                && self.surroundings.stands_out(echo.amplitude, echo.position.as_samples())
        })
    }

    /// On a coated part: does the train begin at the zero, as if there were no coating? So do the coating's own reverberations,
    /// and a whole number of their periods later. Behind a delay line the train begins at the coating's far side,
    /// if its front does not show.
    fn begins_at_the_zero(&self, excess: Timed) -> bool {
        let Some(period) = self.times.period else {
            return false;
        };
        let turns = excess.time / period.time;
        let nearest = turns - math::floor(turns + 0.5);
        let chance = excess.standard_uncertainty * BEYOND_CHANCE;
        self.setup.coating.is_some()
            && self.setup.probe.kind != ProbeKind::DelayLine
            // Of a zero that nobody knows nothing can be told.
            && chance < period.time * 0.1
            && (period.time * nearest).abs() < chance
    }

    /// Echoes that the reading is made from.
    fn used(&self) -> impl Iterator<Item = &Echo> {
        let span = thickness::wall_span(self.setup);
        self.echoes.iter().filter(move |echo| match (span, echo.role) {
            (Span::BackWallToBackWall, EchoRole::BackWall(_)) => true,
            (Span::InterfaceToBackWall, EchoRole::Interface) => true,
            (_, EchoRole::BackWall(number)) => number == 1,
            _ => false,
        })
    }
}

/// What overlapping echoes add to the standard uncertainty of a coating's round trip; `None` if they may have moved an
/// arrival by a cycle, or if the coating's front gives no echo of its own behind a delay line: then
/// nothing is said of the coating.
#[must_use]
pub fn coating_overlap(evidence: &Evidence<'_>) -> Option<Seconds> {
    let mut worst = evidence.back_wall(1)?.mismatch;
    if evidence.setup.probe.kind == ProbeKind::DelayLine {
        evidence.echoes.iter().find(|echo| echo.role == EchoRole::Coating)?;
        worst = math::larger(worst, evidence.interface()?.mismatch);
    }
    if worst > UNRECOGNISED {
        return None;
    }
    // A rectangular half width.
    let half_width = evidence.shift_by(worst) * 2.0 / evidence.setup.velocity();
    Some(half_width * RECTANGULAR)
}

/// Upper bound of the probability that the reading is wrong by a cycle.
///
/// A neighbouring cycle wins where noise lifts it above the true one:
/// P ~ 2 Q(sqrt(E (1 - ρ) / 2) A / σ), ρ the likeness of neighbouring cycles (half a cycle away where
/// the echo's sign is free, ρ^(1/4) for a Gaussian pulse). Wherever events were counted, that is
/// optimistic by a factor of 1.1 to 3.6: four times it is stated. For a train the other multiples
/// vote too: A² is the sum over all but the strongest.
#[must_use]
pub fn wrong_cycle_probability(evidence: &Evidence<'_>) -> f32 {
    let facts = &evidence.surroundings.pulse.facts;
    let probability = |amplitude: f32, likeness: f32| {
        let distance = facts.energy * math::larger(1.0 - likeness, 0.0) * 0.5;
        8.0 * math::normal_tail(math::sqrt(distance) * amplitude / evidence.surroundings.noise)
    };
    let half_cycle = math::sqrt(math::sqrt(math::larger(facts.cycle_likeness, 0.0)));
    let likeness = |echo: &Echo| {
        let sign = match echo.role {
            EchoRole::Interface => evidence.setup.probe.interface_sign,
            _ => evidence.setup.probe.back_wall_sign,
        };
        if sign == EchoSign::Unknown {
            half_cycle
        } else {
            facts.cycle_likeness
        }
    };
    let total = match thickness::wall_span(evidence.setup) {
        Span::BackWallToBackWall => probability(evidence.train.support, facts.cycle_likeness),
        Span::TransmissionPulseToBackWall | Span::InterfaceToBackWall => evidence
            .used()
            .fold(0.0, |sum, echo| sum + probability(echo.amplitude, likeness(echo))),
    };
    math::smaller(total, 1.0)
}

/// What a reading would rest on, if that is not the pulse: the share of its energy that is unexplained, in per cent of
/// the explained one. Three multiples at one distance, none far below the others and little else beside them, are no
/// chance, whatever they look like (the echoes of a thin wall run into each other): they are doubted instead. A ringing,
/// of which each swing is a fifth of the one before, has no such multiples, nor have spikes.
#[must_use]
pub fn not_the_pulse(evidence: &Evidence<'_>) -> Option<u16> {
    if evidence.train.echoes > 2 && evidence.is_even_train() {
        return None;
    }
    let strangeness = evidence.strangeness();
    let percent = math::round_to_i32(100.0 * math::smaller(strangeness * strangeness, 100.0));
    (strangeness > NOT_THE_PULSE).then(|| u16::try_from(percent).unwrap_or(u16::MAX))
}

/// The doubts that a set-up alone gives cause for, whatever the echoes look like.
#[must_use]
pub fn doubts_of_setup(setup: &GaugeSetup, wall: Metres, expanded: Metres, budget: &Budget) -> Doubts {
    let mut doubts = Doubts::NONE;
    // A single block covers a point. How far the part lies from it stands in the budget already (velocity,
    // beam); what only a second block shows, a velocity that changes, its stated uncertainty must cover.
    if let Some(range) = setup.calibrated
        && range.from < range.to
    {
        doubts.raise_if(
            wall + expanded < range.from || wall - expanded > range.to,
            Doubt::OutsideCalibratedRange,
        );
    }
    doubts.raise_if(way::unknown_beam_matters(setup, wall, expanded), Doubt::BeamUnknown);
    doubts.raise_if(curvature::matters(setup, expanded), Doubt::CurvedSurface);
    doubts.raise_if(
        uncertainty::unknown_temperature_matters(setup, wall, budget),
        Doubt::TemperatureUnknown,
    );
    doubts.raise_if(way::v_path_matters(setup, wall, expanded), Doubt::VPathUncorrected);
    doubts.raise_if(
        setup.samples_per_cycle() < SAMPLES_PER_CYCLE_LIMIT,
        Doubt::CoarseSampling,
    );
    doubts
}

/// Every doubt that applies; `wrong_cycle` is [`wrong_cycle_probability`], which the reading states too.
#[must_use]
pub fn doubts(evidence: &Evidence<'_>, wrong_cycle: f32) -> Doubts {
    let Evidence {
        setup,
        train,
        wall,
        expanded,
        ..
    } = *evidence;
    let span = thickness::wall_span(setup);
    let facts = &evidence.surroundings.pulse.facts;
    let period = evidence.surroundings.record.clock().rate.period();
    let mut doubts = doubts_of_setup(setup, wall, expanded, evidence.budget);

    // Two echoes have one distance, and nothing but the start can contradict it.
    let start_agrees = train.start_difference.abs() < 0.6 * evidence.surroundings.samples_per_cycle;
    doubts.raise_if(
        span == Span::BackWallToBackWall && train.echoes <= 2 && !start_agrees,
        Doubt::FewEchoes,
    );
    doubts.raise_if(train.period < facts.envelope_duration, Doubt::NearMinimum);
    doubts.raise_if(train.may_be_double, Doubt::PossibleDouble);
    let unexplained_limit = if train.echoes <= 2 {
        UNEXPLAINED_LIMIT_OF_FEW
    } else {
        UNEXPLAINED_LIMIT
    };
    doubts.raise_if(
        train.unexplained > unexplained_limit || train.other_too,
        Doubt::UnexplainedEchoes,
    );

    let differing = evidence.differing_shift();
    doubts.raise_if(
        differing > expanded && differing > expanded + evidence.known_phase(),
        Doubt::OverlappingEcho,
    );
    doubts.raise_if(evidence.strangeness() > UNRECOGNISED, Doubt::PulseMismatch);
    doubts.raise_if(train.thinner_too || evidence.has_earlier_echo(), Doubt::EarlierEcho);
    // A V makes the first echoes of thin walls weak and moves the others by its own law.
    if setup.probe.kind != ProbeKind::DualElement {
        doubts.raise_if(
            company::beats(evidence.surroundings, evidence.echoes),
            Doubt::OverlappingEcho,
        );
        doubts.raise_if(
            company::parts(evidence.surroundings, evidence.echoes, train),
            Doubt::EarlierEcho,
        );
    }
    if span == Span::TransmissionPulseToBackWall
        && let Some(first) = evidence.back_wall(1)
    {
        doubts.raise_if(
            evidence.shift(first.mismatch, first.group_lag) > expanded + evidence.known_phase(),
            Doubt::PulseMismatch,
        );
    }
    doubts.raise_if(wrong_cycle > WRONG_CYCLE_LIMIT, Doubt::LowSignal);
    doubts.raise_if(!evidence.stands_out(), Doubt::LowSignal);
    doubts.raise_if(
        evidence.used().any(|echo| echo.clipped && echo.information == 0.0),
        Doubt::ClippedEcho,
    );

    // First arrival less zero against the period: paint and a wrong zero show here.
    if let Some(excess) = evidence.excess {
        // Straight times already. More than the reading allows, and more than chance.
        let shown = (setup.velocity() * excess.time * 0.5).abs();
        let chance = setup.velocity() * excess.standard_uncertainty * (0.5 * BEYOND_CHANCE);
        let contradicted = if span == Span::BackWallToBackWall {
            evidence.begins_at_the_zero(excess)
        } else {
            shown > expanded && shown > chance
        };
        doubts.raise_if(contradicted, Doubt::ZeroContradicted);
    }
    // Arrivals that do not lie on a line, by more than chance and by more than the reading allows.
    let typical = evidence
        .surroundings
        .arrival_noise(train.support, train.first.as_samples())
        * math::sqrt(train.unevenness);
    let scatter = evidence.thickness_of(period * typical);
    doubts.raise_if(
        span == Span::BackWallToBackWall && train.is_uneven() && scatter > expanded,
        Doubt::UnevenTrain,
    );
    doubts
}
