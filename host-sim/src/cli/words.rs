//! The words that programs meet: roles, verdicts, doubts, refusals, terms of the budget.

use crate::measuring::NO_SETUP;
use halfpulse::echo::separation::Verdict;
use halfpulse::wall::uncertainty::Source;
use halfpulse::{Doubt, EchoRole, Hertz, Metres, NoReading, Seconds};

/// The word for an echo's role.
#[must_use]
pub const fn role(role: EchoRole) -> &'static str {
    match role {
        EchoRole::TransmissionPulse => "transmission-pulse",
        EchoRole::Interface => "interface",
        EchoRole::Coating => "coating",
        EchoRole::BackWall(_) => "back-wall",
        EchoRole::ModeConverted => "mode-converted",
        EchoRole::Other => "other",
    }
}

/// The word for a verdict.
#[must_use]
pub const fn verdict(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::ResolvedClassically => "resolved-classically",
        Verdict::ResolvedByModel => "resolved-by-model",
        Verdict::NotResolved => "not-resolved",
    }
}

/// One refusal of every kind; their evidence means nothing.
const REFUSALS: &[NoReading] = &[
    NoReading::SampleRateMismatch {
        expected: Hertz::ZERO,
        got: Hertz::ZERO,
    },
    NoReading::RecordTooLong { capacity: 0, got: 0 },
    NoReading::RecordTooShort { needed: 0, got: 0 },
    NoReading::WindowOutsideRecord,
    NoReading::DeadReceiver,
    NoReading::StuckBits { mask: 0 },
    NoReading::Clipped { per_mille: 0 },
    NoReading::NoEcho { noise: 0.0 },
    NoReading::OnlyTransmissionPulse,
    NoReading::NotCoupled,
    NoReading::NoInterfaceEcho,
    NoReading::OneEchoWhereTwoAreNeeded { at: Seconds::ZERO },
    NoReading::Ambiguous {
        candidates: 0,
        best: Metres::ZERO,
        next: Metres::ZERO,
    },
    NoReading::BelowMinimum { minimum: Metres::ZERO },
];

/// Every term of the budget, with what it stands for.
const TERMS: &[(Source, &str)] = &[
    (Source::Timing, "noise moves the echoes' arrivals"),
    (Source::Velocity, "the part's velocity"),
    (Source::Zero, "the probe's zero"),
    (
        Source::Calibration,
        "velocity and zero together, tied to each other by a calibration",
    ),
    (Source::Beam, "the beam's spreading, not corrected"),
    (
        Source::Coupling,
        "the couplant film differs from the one at calibration",
    ),
];

/// All words with what they mean or what to do about them.
#[must_use]
pub fn help() -> String {
    let mut text = String::from("Doubts (the reading stands, but look twice):\n");
    for doubt in Doubt::ALL {
        text.push_str(&format!("  {:<31}{}\n", doubt.word(), doubt.advice()));
    }
    text.push_str("\nRefusals (there is no reading):\n");
    text.push_str(&format!("  {NO_SETUP:<31}give a set-up with --setup\n"));
    for refusal in REFUSALS {
        text.push_str(&format!("  {:<31}{}\n", refusal.word(), refusal.advice()));
    }
    text.push_str("\nTerms of the uncertainty budget:\n");
    for (source, about) in TERMS {
        text.push_str(&format!("  {:<31}{about}\n", source.word()));
    }
    text.push_str(
        "\nRoles of echoes: transmission-pulse, interface, coating, back-wall, mode-converted, other\n\
         Verdicts on the nearest pair: resolved-classically, resolved-by-model, not-resolved\n",
    );
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn words_are_kebab_case_and_all_different() {
        let mut words: Vec<&str> = Doubt::ALL.iter().map(|d| d.word()).collect();
        words.extend(REFUSALS.iter().map(NoReading::word));
        words.push(NO_SETUP);
        // "clipped" and the like must not mean a doubt here and a refusal there.
        let count = words.len();
        words.sort_unstable();
        words.dedup();
        assert_eq!(words.len(), count);
        words.extend(TERMS.iter().map(|(source, _)| source.word()));
        for word in words {
            assert!(word.chars().all(|c| c.is_ascii_lowercase() || c == '-'), "{word}");
            assert!(help().contains(word));
        }
    }
}
