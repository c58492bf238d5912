//! Which echoes are the multiples of one wall, and their common period.
//!
//! **In**: the echoes of a record and what is known of the start (zero or interface). **Out**: a
//! [`Train`], or the refusal to choose between two walls.
//!
//! *Choosing.* Every distance between two near echoes, and every echo's distance from the start divided by 1
//! to 4, is a hypothesis for the period. Its teeth are scored against the echoes: a tooth gains what its
//! echo's height says against noise, ln(1 + A²/3σ²) less the same at the detection threshold, at most
//! 4.5; a tooth without echo loses; a tooth hidden in the dead zone loses a little; an unexplained echo
//! above 35 % of the largest loses its own gain; a first tooth below 22 % of the largest makes it
//! unlikely. The best score wins, if it leads the best *different* period by [`MARGIN`].
//!
//! Echoes are looked at where they would lie, were their ways straight ([`PathLaw`]): there every train is even.
//!
//! *Fitting.* Start and period are fitted to the correlations of all multiples at once (all amplitudes
//! free): the joint least squares that two arrivals alone fall short of by 1.6 to 4 times. Weak
//! multiples are read only where the strong ones predict them. For white noise the standard uncertainty is the
//! Cramér-Rao bound: with weights A², moments S0, S1, S2 of the multiple's number,
//! u²(period) = noise² / Σs'² · S0 / (S0 S2 - S1²).
//!
//! Fails, and says so only by [`Train::may_be_double`]: first echo inside the dead zone and fewer than
//! two visible ones.

mod choosing;
mod coating;
mod fitting;

use crate::echo::{Echo, EchoList, EchoRole, Surroundings};
use crate::math;
use crate::path::PathLaw;
use crate::units::SamplePosition;
use crate::workspace::{ECHO_CAPACITY, TRAIN_LAGS};

pub use choosing::{Hypothesis, MARGIN};
pub use coating::mark_coating;
pub use fitting::unexplained;

/// What is known before the echoes are looked at. Places are in samples from the record's first.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rules<'a> {
    /// Where the wall begins: zero offset or interface echo.
    pub start: f32,
    /// How far from a whole number of periods after the start the train may lie without objection.
    pub start_tolerance: f32,
    /// Smallest distance of two multiples that can be read.
    pub shortest: f32,
    /// First sample at which an echo could have been seen.
    pub visible_from: f32,
    /// Last such sample.
    pub visible_to: f32,
    /// Detection threshold in standard deviations of a fitted amplitude.
    pub threshold: f32,
    /// How the echoes' times follow from the wall's straight ones, in samples.
    pub law: PathLaw<'a>,
}

impl Rules<'_> {
    /// Where an echo would lie, were its way straight. A beam's spreading moves it by less than what choosing tolerates,
    /// and is left to the fit.
    #[must_use]
    pub fn straight_place(&self, place: f32) -> f32 {
        match self.law {
            law @ PathLaw::V(_) => self.start + law.straighten(place - self.start),
            _ => place,
        }
    }
}

/// The multiples of one wall.
#[derive(Clone, Copy, Debug, PartialEq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Train {
    /// Number of the first multiple that was seen.
    pub first_multiple: u8,
    /// Echoes that took part.
    pub echoes: u8,
    /// The period in samples, of straight ways: fitted from two echoes on, else the lone echo's straight distance from
    /// the start.
    pub period: f32,
    /// Its standard uncertainty in samples from noise; `None` for a lone echo.
    pub period_uncertainty: Option<f32>,
    /// Root of the sum of squares of what the arrivals count in the period: its error, if each arrival were off by one of
    /// its own. The root of 2 for two echoes, less for more. 0 for a lone echo.
    pub contrast: f32,
    /// Correlation of the errors of period and first place: -S1 / sqrt(S0 S2). 0 for a lone echo.
    pub correlation: f32,
    /// Root of the sum of squared amplitudes (codes) of all multiples but the strongest: what a wrong
    /// cycle of the period would have to overcome.
    pub support: f32,
    /// Fitted place of the first multiple that was seen.
    pub first: SamplePosition,
    /// How far the start lies from where the train begins, in samples: first - start less the actual time of
    /// first_multiple · period.
    pub start_difference: f32,
    /// Scatter of the arrivals about the fit over what noise explains (chi-square per degree of
    /// freedom); 0 without a degree of freedom.
    pub unevenness: f32,
    /// Degrees of freedom of that scatter.
    pub freedom: u8,
    /// Energy of the echoes inside the window, behind the start, that no multiple explains, over that of the multiples.
    pub unexplained: f32,
    /// Beside this train the echoes hold another one of a thinner wall: a pit, a step or a lamination under the probe.
    pub thinner_too: bool,
    /// The echoes that this train leaves over make a train of another period.
    pub other_too: bool,
    /// A wall of half or a third of this thickness would have its first echo in the dead zone and is not excluded by
    /// the others; or an echo stronger than the second multiple stands half-way to it.
    pub may_be_double: bool,
}

impl Train {
    /// Do the arrivals scatter about the fit by more than noise and chance (five standard deviations
    /// of chi-square) explain?
    #[must_use]
    pub fn is_uneven(&self) -> bool {
        self.freedom > 0 && self.unevenness > 1.0 + 5.0 * math::sqrt(2.0 / f32::from(self.freedom))
    }
}

/// No period stands out.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Undecided {
    /// No hypothesis scores above noise.
    NoTrain,
    /// Two different periods explain the echoes about as well.
    Ambiguous {
        /// How many are within the margin, the best included.
        candidates: u8,
        /// The best period in samples.
        best: f32,
        /// The best different one.
        next: f32,
    },
}

/// Which period explains the echoes?
///
/// Echoes that already have a role other than [`EchoRole::Other`] (an interface echo) take no part.
///
/// # Errors
/// [`Undecided`].
pub fn choose(surroundings: &Surroundings<'_>, echoes: &EchoList, rules: &Rules) -> Result<Hypothesis, Undecided> {
    choosing::leader(&choosing::ranked(surroundings, echoes, rules, tolerance(surroundings)))
}

/// Fits the chosen train, gives its echoes their roles and adds weak multiples that only the fit could find.
///
/// # Errors
/// [`Undecided::NoTrain`] if the first multiple is lost in the fit.
pub fn fit(
    surroundings: &Surroundings<'_>,
    echoes: &mut EchoList,
    rules: &Rules<'_>,
    choice: &Hypothesis,
    lags: &mut [f32; ECHO_CAPACITY * TRAIN_LAGS],
) -> Result<Train, Undecided> {
    fitting::fit(surroundings, echoes, rules, choice, tolerance(surroundings), lags).ok_or(Undecided::NoTrain)
}

/// Do the echoes that a fitted train has left over hold another train? Grain's peaks are as many, but each of them speaks
/// against every train that the others might be; what follows every multiple at one distance (a mode-converted echo) has the same
/// period. The first answer is for a thinner wall's from the same start on, the second for any other.
#[must_use]
#[inline(never)]
pub fn other_trains(
    surroundings: &Surroundings<'_>,
    echoes: &EchoList,
    rules: &Rules<'_>,
    train: &Train,
) -> (bool, bool) {
    let first = train.first.as_samples();
    let before = |echo: &Echo| {
        let place = echo.position.as_samples();
        echo.role == EchoRole::Other && place > rules.start && place < first
    };
    let energy = |explained: bool| {
        let of = |echo: &&Echo| {
            matches!(echo.role, EchoRole::BackWall(_)) == explained && (explained || echo.role == EchoRole::Other)
        };
        echoes
            .iter()
            .filter(of)
            .fold(0.0, |sum, echo| sum + echo.amplitude * echo.amplitude)
    };
    // One echo makes no train.
    if echoes.iter().filter(|echo| echo.role == EchoRole::Other).count() < 2 {
        return (false, false);
    }
    // Not only of what stands out of the grain: a whole train of strangers was listened to as grain.
    if energy(false) < WORTH_A_LOOK * energy(true) && !echoes.iter().any(before) {
        return (false, false);
    }
    let tolerance = tolerance(surroundings);
    let ranked = choosing::ranked(surroundings, echoes, rules, tolerance);
    let Some(best) = ranked.first() else {
        return (false, false);
    };
    let leads = choosing::leader(&ranked).is_ok();
    let off_start = (best.zero - rules.start).abs();
    // Three echoes that find the start of the wall by themselves need not weigh much.
    let from_start = best.echoes > 2 && off_start < tolerance && best.score > FROM_START;
    let same_start = off_start < rules.start_tolerance + tolerance && best.score > SECOND_TRAIN;
    let thinner = best.period < train.period && (from_start || same_start) && echoes.iter().any(before);
    let strange = (best.period - train.period).abs() > tolerance;
    (leads && thinner, strange && best.score > CLEAR_TRAIN)
}

/// The same for one that begins where the wall does.
const FROM_START: f32 = 3.0;

/// The same for a train that need not begin where the chosen one does, nor lead: three echoes with all their weight. Grain
/// at -20 dB of the back wall reaches it in 1 of 600 readings.
const CLEAR_TRAIN: f32 = 10.0;

/// From this share of unexplained energy on a second train is looked for behind the first back wall too.
const WORTH_A_LOOK: f32 = 0.1;
/// Score from which a second train is believed: two echoes that speak for it with all their weight.
const SECOND_TRAIN: f32 = 6.0;

/// How far from its tooth, in samples, an echo may lie.
fn tolerance(surroundings: &Surroundings<'_>) -> f32 {
    0.2 * surroundings.samples_per_cycle
}
