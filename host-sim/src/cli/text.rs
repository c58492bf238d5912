//! One record as a block of text, for people.

use super::words;
use crate::joining::TriggerJitter;
use crate::measuring::Measured;
use halfpulse::echo::pulse::METRICS_MINIMUM_SNR;
use halfpulse::echo::separation::Separation;
use halfpulse::echo::separation::thin_wall::ThinWall;
use halfpulse::{EchoRole, Limits, Polarity, Reading};
use std::fmt::Write as _;

/// As many decimals of a millimetre as show two digits of an uncertainty: 2 to 5.
fn decimals(uncertainty_mm: f32) -> usize {
    let wanted = 1.0 - libm::log10(f64::from(uncertainty_mm).max(1e-9)).floor();
    wanted.clamp(2.0, 5.0) as usize
}

fn reading_block(text: &mut String, reading: &Reading) {
    let expanded = reading.expanded().as_mm();
    let digits = decimals(expanded);
    let _ = writeln!(
        text,
        "{:.digits$} mm +- {expanded:.digits$} mm (k = {})",
        reading.thickness.as_mm(),
        reading.coverage_factor
    );
    if let Some(coating) = reading.coating {
        let k = reading.coverage_factor;
        let _ = match coating.thickness {
            Some(coating) => {
                let expanded = coating.standard_uncertainty.as_mm() * k;
                let digits = decimals(expanded);
                let thickness = coating.thickness.as_mm();
                writeln!(text, "  coating {thickness:.digits$} mm +- {expanded:.digits$} mm")
            }
            None => writeln!(
                text,
                "  coating {:.1} ns +- {:.1} ns down and up; state its velocity for a thickness",
                coating.round_trip.time.as_ns(),
                coating.round_trip.standard_uncertainty.as_ns() * k
            ),
        };
    }
    for doubt in reading.doubts.iter() {
        let _ = writeln!(text, "  doubt {}: {}", doubt.word(), doubt.advice());
    }
    // Far below this bound the assumptions behind it no longer carry.
    let bound = reading.wrong_cycle_probability.max(1e-9);
    let _ = writeln!(text, "  probability that another cycle was read: at most {bound:.0e}");
}

fn budget_block(text: &mut String, reading: &Reading) {
    if reading.budget.terms().is_empty() {
        return;
    }
    text.push_str("  uncertainty (k = 1):");
    for (number, term) in reading.budget.terms().iter().enumerate() {
        let separator = if number == 0 { "" } else { "," };
        let _ = write!(
            text,
            "{separator} {} {:.5} mm",
            term.source.word(),
            term.standard_uncertainty.as_mm()
        );
    }
    if let Some(largest) = reading.budget.dominating() {
        let _ = write!(text, "; most from {}", largest.word());
    }
    text.push('\n');
}

/// Where the reading stands to the limits of its place.
fn limits_block(text: &mut String, reading: &Reading, limits: &Limits) {
    let verdict = reading.against(limits);
    let lines = [
        ("minimum", Some(limits.minimum), Some(verdict.minimum)),
        ("warning", limits.warning, verdict.warning),
        ("maximum", limits.maximum, verdict.maximum),
    ];
    for (name, limit, state) in lines {
        if let (Some(limit), Some(state)) = (limit, state) {
            let _ = writeln!(text, "  {name} {:.3} mm: {}", limit.as_mm(), state.word());
        }
    }
    let digits = decimals(verdict.guard_band.as_mm());
    let _ = write!(text, "  guard band {:.digits$} mm", verdict.guard_band.as_mm());
    if reading.doubts.is_empty() {
        let _ = writeln!(
            text,
            "; by reading and uncertainty alone the wall keeps to minimum and maximum with probability {:.4}",
            verdict.conformance_probability
        );
    } else {
        text.push_str("; a reading with a doubt decides nothing\n");
    }
}

/// A likelihood ratio by its natural logarithm. Far beyond a million to one it says no more than that.
fn ratio(log_odds: f32) -> String {
    let tens = f64::from(log_odds) / std::f64::consts::LN_10;
    if tens > 6.0 {
        "more than a million to one".to_string()
    } else {
        format!("{:.0} to one", 10f64.powf(tens))
    }
}

/// How a thin wall's echoes were read.
fn thin_wall_line(text: &mut String, wall: &ThinWall) {
    let _ = writeln!(
        text,
        "  a thin wall: its echoes overlap and were fitted together with the interface echo, each {:.2} of the one before; \
         {} against no wall, {} against another period, {:.3} % of the energy left over",
        wall.decay,
        ratio(wall.log_odds),
        ratio(wall.log_lead),
        100.0 * wall.unexplained
    );
}

/// The verdict on the nearest pair. Likelihood ratios far beyond a million to one say no more than that.
fn separation_line(text: &mut String, separation: &Separation) {
    match &separation.pair {
        Some(pair) => {
            let _ = write!(
                text,
                "  nearest pair: {:.2} ns apart (u {:.3} ns), amplitude ratio {:+.2}, {}",
                pair.spacing.as_ns(),
                pair.standard_uncertainty.as_ns(),
                pair.amplitude_ratio,
                separation.verdict.word()
            );
        }
        None => {
            let _ = write!(text, "  second echo: {}", separation.verdict.word());
        }
    }
    if let Some(why) = separation.unresolved {
        let _ = write!(text, " ({})", why.word());
    }
    if let Some(odds) = separation.log_odds {
        let tens = f64::from(odds) / std::f64::consts::LN_10;
        let _ = if tens > 6.0 {
            write!(text, "; more than a million to one for two")
        } else {
            write!(text, "; likelihood ratio of two over one {:.2e}", 10f64.powf(tens))
        };
    }
    text.push('\n');
}

/// What the scatter of an echo tells of the trigger.
fn jitter_line(text: &mut String, found: &TriggerJitter) {
    let _ = write!(
        text,
        "  trigger jitter: {:.3} ns rms (u {:.3} ns), from {} shots of the echo at {:.1} ns ({:.1} dB)",
        found.jitter.rms.as_ns(),
        found.jitter.standard_uncertainty.as_ns(),
        found.jitter.shots,
        found.arrival.as_ns(),
        found.snr.get()
    );
    text.push_str(match found.wanders {
        Some(true) => "; but the echo wanders: probe or part moved\n",
        _ => "\n",
    });
}

/// The block of one record.
#[must_use]
pub fn block(measured: &Measured, limits: Option<&Limits>) -> String {
    let mut text = measured.file.clone();
    match measured.shot {
        Some(shot) => {
            let _ = write!(text, ", shot {shot}: ");
        }
        None => text.push_str(", average: "),
    }
    match &measured.outcome {
        Ok(reading) => {
            reading_block(&mut text, reading);
            if let Some(wall) = &measured.thin_wall {
                thin_wall_line(&mut text, wall);
            }
            if let Some(limits) = limits {
                limits_block(&mut text, reading, limits);
            }
        }
        Err(refusal) => {
            let _ = writeln!(text, "no reading: {}: {}", refusal.reason, refusal.detail);
        }
    }
    let findings = &measured.findings;
    if !findings.echoes.is_empty() {
        text.push_str("     arrival ns        u ns  amplitude      SNR  polarity  role\n");
    }
    for echo in &findings.echoes {
        let polarity = match echo.polarity {
            Polarity::Positive => "positive",
            Polarity::Negative => "negative",
        };
        let _ = write!(
            text,
            "  {:>13.2}  {:>10.3}  {:>7.1} %  {:>4.1} dB  {polarity}  {}",
            echo.arrival.as_ns(),
            echo.standard_uncertainty.as_ns(),
            100.0 * echo.amplitude / measured.full_scale,
            echo.snr.get(),
            words::role(echo.role),
        );
        if let EchoRole::BackWall(multiple) = echo.role {
            let _ = write!(text, " {multiple}");
        }
        if echo.clipped {
            text.push_str(", clipped");
        }
        text.push('\n');
    }
    if let Some(pulse) = &findings.pulse {
        let _ = write!(
            text,
            "  pulse: {:.2} MHz, {:.2} to {:.2} MHz at -6 dB ({:.0} %, Q {:.2}); at -20 dB envelope {:.0} ns, rectified {:.0} ns",
            pulse.centre_frequency().as_mhz(),
            pulse.lower_frequency.as_mhz(),
            pulse.upper_frequency.as_mhz(),
            100.0 * pulse.relative_bandwidth(),
            pulse.q(),
            pulse.envelope_duration.as_ns(),
            pulse.rectified_duration.as_ns()
        );
        if measured.span.is_some() {
            let _ = write!(
                text,
                ": spatial pulse length {:.2} mm, axial resolution {:.2} mm",
                pulse.spatial_pulse_length.as_mm(),
                pulse.axial_resolution().as_mm()
            );
        }
        text.push('\n');
    } else if !findings.echoes.is_empty() {
        let _ = writeln!(
            text,
            "  pulse: not described, no echo stands {:.0} dB above the noise with room around it; average more shots",
            METRICS_MINIMUM_SNR.get()
        );
    }
    if let Some(separation) = &findings.separation {
        separation_line(&mut text, separation);
    }
    if let Some((smallest, largest)) = measured.wall_limits {
        let _ = if smallest < largest {
            let (smallest, largest) = (smallest.as_mm(), largest.as_mm());
            writeln!(
                text,
                "  set-up and record read walls from {smallest:.2} to {largest:.1} mm"
            )
        } else {
            writeln!(
                text,
                "  set-up and record read no wall: record for longer, or move the window"
            )
        };
    }
    if let Ok(reading) = &measured.outcome {
        budget_block(&mut text, reading);
    }
    if let Some(found) = &measured.jitter {
        jitter_line(&mut text, found);
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn two_digits_of_the_uncertainty_are_shown() {
        assert_eq!(decimals(0.03), 3);
        assert_eq!(decimals(0.003), 4);
        assert_eq!(decimals(12.0), 2);
        assert_eq!(decimals(0.0), 5);
        assert_eq!(decimals(f32::NAN), 5);
    }
}
