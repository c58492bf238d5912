//! The uncertainty budget: named terms, combined as JCGM 100:2008 (5.1.2) says.

use crate::math;
use crate::units::Metres;
use heapless::Vec;

/// Where a share of the uncertainty comes from.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[non_exhaustive]
pub enum Source {
    /// Noise moves the echoes' arrivals.
    Timing,
    /// The part's velocity.
    Velocity,
    /// The probe's zero.
    Zero,
    /// Velocity and zero together, where a calibration has tied their errors to each other.
    Calibration,
    /// The beam's spreading moves echoes (piston diffraction), not corrected.
    Beam,
    /// The couplant film differs from the one at calibration.
    Coupling,
}

impl Source {
    /// One stable word for programs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Timing => "timing",
            Self::Velocity => "velocity",
            Self::Zero => "zero",
            Self::Calibration => "calibration",
            Self::Beam => "beam",
            Self::Coupling => "coupling",
        }
    }
}

/// One line of the budget.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Term {
    /// Where it comes from.
    pub source: Source,
    /// Its contribution to the thickness's standard uncertainty (k = 1).
    pub standard_uncertainty: Metres,
}

/// The uncertainty budget of one reading. Terms are independent of each other.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct Budget {
    terms: Vec<Term, 8>,
}

impl Budget {
    /// An empty budget.
    #[must_use]
    pub const fn new() -> Self {
        Self { terms: Vec::new() }
    }

    /// Adds a term; one that is zero, negative or not a number is left out.
    pub fn add(&mut self, source: Source, standard_uncertainty: Metres) {
        if standard_uncertainty.get() > 0.0 {
            // Eight places for six sources: a full list cannot happen, and would lose nothing but a line.
            let _ = self.terms.push(Term {
                source,
                standard_uncertainty,
            });
        }
    }

    /// The lines, in the order in which they were added.
    #[must_use]
    pub fn terms(&self) -> &[Term] {
        &self.terms
    }

    /// Root of the sum of squares.
    #[must_use]
    pub fn combined(&self) -> Metres {
        let mut sum = 0.0;
        for term in &self.terms {
            sum += term.standard_uncertainty.get() * term.standard_uncertainty.get();
        }
        Metres::new(math::sqrt(sum))
    }

    /// The source of the largest term.
    #[must_use]
    pub fn dominating(&self) -> Option<Source> {
        let mut largest: Option<Term> = None;
        for &term in &self.terms {
            if largest.is_none_or(|l| term.standard_uncertainty.get() > l.standard_uncertainty.get()) {
                largest = Some(term);
            }
        }
        largest.map(|term| term.source)
    }
}
