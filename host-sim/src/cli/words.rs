//! The words that programs meet: roles, verdicts, doubts, refusals, terms of the budget.

use crate::measuring::NO_SETUP;
use crate::uncoupled::OTHER_TAIL;
use halfpulse::echo::separation::Unresolved;
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
    NoReading::NotThePulse { unexplained_percent: 0 },
    NoReading::Ambiguous {
        candidates: 0,
        best: Metres::ZERO,
        next: Metres::ZERO,
    },
    NoReading::BelowMinimum { minimum: Metres::ZERO },
    NoReading::Unsteady {
        echoes: 0,
        moved: Metres::ZERO,
    },
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
    (Source::Phase, "coupling turns one echo of the record against another"),
    (
        Source::Temperature,
        "the part is warmer or colder than its velocity holds for",
    ),
    (
        Source::ReferencePulse,
        "the noise that the reference pulse itself was learned with",
    ),
    (Source::Overlap, "the pulse's shape, where a thin wall's echoes overlap"),
    (Source::Roughness, "the back wall's roughness"),
    (Source::VPath, "the distance of a dual-element probe's elements"),
];

/// Every reason for not telling two echoes apart.
const UNRESOLVED: &[(Unresolved, &str)] = &[
    (Unresolved::Overlap, "they overlap; ask with --separate"),
    (
        Unresolved::OnePulse,
        "one pulse explains the record about as well as two",
    ),
    (
        Unresolved::TooClose,
        "closer than 0.12 of the pulse duration: an attenuated echo looks the same",
    ),
    (Unresolved::Ambiguous, "more than one spacing explains the record"),
    (
        Unresolved::ModelsDisagree,
        "with and without freedom of the pulse's shape the answers differ: learn the pulse",
    ),
    (
        Unresolved::Clipped,
        "clipped samples forge second echoes: lower the gain",
    ),
    (Unresolved::NoRoom, "the record ends there, or the pulse is too long"),
    (
        Unresolved::PulseUnknown,
        "the pulse is only known from a data sheet: learn it",
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
    text.push_str(&format!(
        "  {OTHER_TAIL:<31}record the uncoupled probe anew, at this gain and with this probe\n"
    ));
    for refusal in REFUSALS {
        text.push_str(&format!("  {:<31}{}\n", refusal.word(), refusal.advice()));
    }
    text.push_str("\nTerms of the uncertainty budget:\n");
    for (source, about) in TERMS {
        text.push_str(&format!("  {:<31}{about}\n", source.word()));
    }
    text.push_str(
        "\nRoles of echoes: transmission-pulse, interface, coating, back-wall, mode-converted, other\n\
         Verdicts on the nearest pair of echoes:\n  \
         resolved-classically: spacing at least half the spatial pulse length, and a valley of 6 dB\n  \
         resolved-by-model: closer, but only two pulses explain the record (with --separate)\n  \
         not-resolved\n\
         Why a pair is not resolved:\n",
    );
    for (why, about) in UNRESOLVED {
        text.push_str(&format!("  {:<31}{about}\n", why.word()));
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The words in the core's source between two marks: the core cannot list its own refusals.
    fn words_in<'s>(source: &'s str, from: &str, to: &str) -> Vec<&'s str> {
        let part = source
            .split_once(from)
            .and_then(|(_, rest)| rest.split_once(to))
            .expect("the marks")
            .0;
        part.split("=> \"")
            .skip(1)
            .filter_map(|rest| rest.split('"').next())
            .collect()
    }

    #[test]
    fn no_word_of_the_core_is_missing() {
        let help = help();
        let mut words = words_in(
            include_str!("../../../core/src/outcome.rs"),
            "impl NoReading",
            "pub const fn advice",
        );
        assert_eq!(words.len(), REFUSALS.len());
        words.extend(words_in(
            include_str!("../../../core/src/wall/uncertainty.rs"),
            "impl Source",
            "}\n}",
        ));
        assert_eq!(words.len(), REFUSALS.len() + TERMS.len());
        let separation = include_str!("../../../core/src/echo/separation/mod.rs");
        words.extend(words_in(separation, "impl Verdict", "}\n}"));
        words.extend(words_in(separation, "impl Unresolved", "}\n}"));
        for word in words {
            assert!(help.contains(&format!("  {word}")), "{word}");
        }
    }

    #[test]
    fn words_are_kebab_case_and_all_different() {
        let mut words: Vec<&str> = Doubt::ALL.iter().map(|d| d.word()).collect();
        words.extend(REFUSALS.iter().map(NoReading::word));
        words.extend([NO_SETUP, OTHER_TAIL]);
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
