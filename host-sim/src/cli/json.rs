//! One object a record, for programs. Its keys are described in [`KEYS`].

use crate::measuring::Measured;
use crate::setup_file::span_word;
use halfpulse::echo::pulse::PulseMetrics;
use halfpulse::echo::separation::{EchoPair, Separation, Unresolved};
use halfpulse::{Echo, EchoRole, LimitState, Limits, LimitsVerdict, Polarity};
use serde::Serialize;

use super::words;

/// What the keys mean, for help.
pub const KEYS: &str = "\
JSON, one object a record and line; numbers or null, never NaN; more keys may follow later:
  file, shot                     as given; shots count from 0, and so do averages of N shots; null with
                                 --average of all and with --interleave
  span                           as in the set-up; null without one
  thickness_mm                   the wall without coating; null if refused
  standard_uncertainty_mm        k = 1
  expanded_uncertainty_mm        coverage_factor times as much
  coverage_factor
  coating_mm, coating_standard_uncertainty_mm         null without a velocity in [coating]
  coating_round_trip_ns, coating_round_trip_standard_uncertainty_ns
  interpretation                 train: echoes that stand clear of each other; thin-wall: echoes that overlap,
                                 fitted together with the interface echo; null if refused
  wrong_cycle_probability        upper bound of having read another cycle
  doubts                         words, see below; empty if there is none
  no_reading                     null, or {reason, detail}: a word, and a sentence with the advice
  echoes                         [{arrival_ns, standard_uncertainty_ns, amplitude_percent, snr_db,
                                 polarity, role, multiple}], in the order of their arrival after the
                                 transmission trigger; amplitude: fitted envelope peak over full scale;
                                 SNR: envelope peak over noise rms; polarity: positive or negative
                                 relative to the reference pulse; multiple: 1.. of a back wall, else null
  pulse                          null, or {centre_frequency_mhz, lower_frequency_mhz,
                                 upper_frequency_mhz, relative_bandwidth_percent, q,
                                 duration_20db_envelope_ns, duration_20db_rectified_ns,
                                 spatial_pulse_length_mm, axial_resolution_mm}: two-way spectrum at
                                 -6 dB; q: centre over width; the envelope's duration is that of the
                                 pulse's shape; the rectified signal's is up to half a cycle shorter and
                                 jumps by half-waves with the carrier's phase; spatial pulse length:
                                 velocity times the envelope's duration; axial resolution: half of it;
                                 the lengths are null without a set-up, all is null below 26 dB, where
                                 the -20 dB points lie in the noise
  separation                     null, or {verdict, reason, first_arrival_ns, spacing_ns,
                                 standard_uncertainty_ns, amplitude_ratio, log_odds} of the nearest pair of
                                 echoes; reason: why it is not resolved, else null; ratio: second over
                                 first; log_odds: natural logarithm of the likelihood ratio of two echoes
                                 over one, null without --separate; without a pair its keys are null
  smallest_wall_mm, largest_wall_mm   between which walls span, pulse, window and record's length allow a
                                 reading; null without a set-up, largest below smallest where none does
  budget                         [{term, standard_uncertainty_mm}]
  dominating_term                the largest of them
  limits                         null without a reading or without [limits] in the set-up, or
                                 {minimum, warning, maximum, guard_band_mm, conformance_probability}:
                                 the three are below, above or undecided, null if not asked for; always
                                 undecided for a reading with doubts; the probability that the wall
                                 keeps to minimum and maximum rests on reading and uncertainty alone
  jitter                         null without --jitter and where no echo tells it, or {rms_ns,
                                 standard_uncertainty_ns, shots, arrival_ns, snr_db, wanders} of all
                                 shots of the file: noise taken off; wanders: the echo slides rather than
                                 scatters, so something moved; null of fewer than eight shots
";

#[derive(Serialize)]
struct JsonRecord<'m> {
    file: &'m str,
    shot: Option<usize>,
    span: Option<&'static str>,
    thickness_mm: Option<f32>,
    standard_uncertainty_mm: Option<f32>,
    expanded_uncertainty_mm: Option<f32>,
    coverage_factor: Option<f32>,
    coating_mm: Option<f32>,
    coating_standard_uncertainty_mm: Option<f32>,
    coating_round_trip_ns: Option<f32>,
    coating_round_trip_standard_uncertainty_ns: Option<f32>,
    interpretation: Option<&'static str>,
    wrong_cycle_probability: Option<f32>,
    doubts: Vec<&'static str>,
    no_reading: Option<JsonRefusal<'m>>,
    echoes: Vec<JsonEcho>,
    pulse: Option<JsonPulse>,
    separation: Option<JsonSeparation>,
    smallest_wall_mm: Option<f32>,
    largest_wall_mm: Option<f32>,
    budget: Vec<JsonTerm>,
    dominating_term: Option<&'static str>,
    limits: Option<JsonLimits>,
    jitter: Option<JsonJitter>,
}

#[derive(Serialize)]
struct JsonJitter {
    rms_ns: Option<f32>,
    standard_uncertainty_ns: Option<f32>,
    shots: u16,
    arrival_ns: Option<f32>,
    snr_db: Option<f32>,
    wanders: Option<bool>,
}

#[derive(Serialize)]
struct JsonLimits {
    minimum: &'static str,
    warning: Option<&'static str>,
    maximum: Option<&'static str>,
    guard_band_mm: Option<f32>,
    conformance_probability: Option<f32>,
}

#[derive(Serialize)]
struct JsonRefusal<'m> {
    reason: &'static str,
    detail: &'m str,
}

#[derive(Serialize)]
struct JsonEcho {
    arrival_ns: Option<f32>,
    standard_uncertainty_ns: Option<f32>,
    amplitude_percent: Option<f32>,
    snr_db: Option<f32>,
    polarity: &'static str,
    role: &'static str,
    multiple: Option<u8>,
}

#[derive(Serialize)]
struct JsonPulse {
    centre_frequency_mhz: Option<f32>,
    lower_frequency_mhz: Option<f32>,
    upper_frequency_mhz: Option<f32>,
    relative_bandwidth_percent: Option<f32>,
    q: Option<f32>,
    duration_20db_envelope_ns: Option<f32>,
    duration_20db_rectified_ns: Option<f32>,
    spatial_pulse_length_mm: Option<f32>,
    axial_resolution_mm: Option<f32>,
}

#[derive(Serialize)]
struct JsonSeparation {
    verdict: &'static str,
    reason: Option<&'static str>,
    first_arrival_ns: Option<f32>,
    spacing_ns: Option<f32>,
    standard_uncertainty_ns: Option<f32>,
    amplitude_ratio: Option<f32>,
    log_odds: Option<f32>,
}

#[derive(Serialize)]
struct JsonTerm {
    term: &'static str,
    standard_uncertainty_mm: Option<f32>,
}

/// JSON has no NaN and no infinity.
fn finite(value: f32) -> Option<f32> {
    value.is_finite().then_some(value)
}

fn echo(echo: &Echo, full_scale: f32) -> JsonEcho {
    JsonEcho {
        arrival_ns: finite(echo.arrival.as_ns()),
        standard_uncertainty_ns: finite(echo.standard_uncertainty.as_ns()),
        amplitude_percent: finite(100.0 * echo.amplitude / full_scale),
        snr_db: finite(echo.snr.get()),
        polarity: match echo.polarity {
            Polarity::Positive => "positive",
            Polarity::Negative => "negative",
        },
        role: words::role(echo.role),
        multiple: match echo.role {
            EchoRole::BackWall(multiple) => Some(multiple),
            _ => None,
        },
    }
}

fn pulse(pulse: &PulseMetrics, velocity_known: bool) -> JsonPulse {
    let length = |metres: halfpulse::Metres| finite(metres.as_mm()).filter(|_| velocity_known);
    JsonPulse {
        centre_frequency_mhz: finite(pulse.centre_frequency().as_mhz()),
        lower_frequency_mhz: finite(pulse.lower_frequency.as_mhz()),
        upper_frequency_mhz: finite(pulse.upper_frequency.as_mhz()),
        relative_bandwidth_percent: finite(100.0 * pulse.relative_bandwidth()),
        q: finite(pulse.q()),
        duration_20db_envelope_ns: finite(pulse.envelope_duration.as_ns()),
        duration_20db_rectified_ns: finite(pulse.rectified_duration.as_ns()),
        spatial_pulse_length_mm: length(pulse.spatial_pulse_length),
        axial_resolution_mm: length(pulse.axial_resolution()),
    }
}

fn separation(separation: &Separation) -> JsonSeparation {
    let of_pair = |number: fn(&EchoPair) -> f32| separation.pair.as_ref().and_then(|pair| finite(number(pair)));
    JsonSeparation {
        verdict: separation.verdict.word(),
        reason: separation.unresolved.map(Unresolved::word),
        first_arrival_ns: of_pair(|pair| pair.first.as_ns()),
        spacing_ns: of_pair(|pair| pair.spacing.as_ns()),
        standard_uncertainty_ns: of_pair(|pair| pair.standard_uncertainty.as_ns()),
        amplitude_ratio: of_pair(|pair| pair.amplitude_ratio),
        log_odds: separation.log_odds.and_then(finite),
    }
}

fn verdict(verdict: &LimitsVerdict) -> JsonLimits {
    JsonLimits {
        minimum: verdict.minimum.word(),
        warning: verdict.warning.map(LimitState::word),
        maximum: verdict.maximum.map(LimitState::word),
        guard_band_mm: finite(verdict.guard_band.as_mm()),
        conformance_probability: finite(verdict.conformance_probability),
    }
}

/// One record as one line of JSON, without the line's end.
#[must_use]
pub fn line(measured: &Measured, limits: Option<&Limits>) -> String {
    let reading = measured.outcome.as_ref().ok();
    let trip = reading
        .and_then(|reading| reading.coating)
        .map(|coating| coating.round_trip);
    let coating = reading.and_then(|reading| reading.coating?.thickness);
    let record = JsonRecord {
        file: &measured.file,
        shot: measured.shot,
        span: measured.span.map(span_word),
        thickness_mm: reading.and_then(|r| finite(r.thickness.as_mm())),
        standard_uncertainty_mm: reading.and_then(|r| finite(r.standard_uncertainty.as_mm())),
        expanded_uncertainty_mm: reading.and_then(|r| finite(r.expanded().as_mm())),
        coverage_factor: reading.and_then(|r| finite(r.coverage_factor)),
        coating_mm: coating.and_then(|c| finite(c.thickness.as_mm())),
        coating_standard_uncertainty_mm: coating.and_then(|c| finite(c.standard_uncertainty.as_mm())),
        coating_round_trip_ns: trip.and_then(|trip| finite(trip.time.as_ns())),
        coating_round_trip_standard_uncertainty_ns: trip.and_then(|trip| finite(trip.standard_uncertainty.as_ns())),
        interpretation: reading.map(|r| r.interpretation.word()),
        wrong_cycle_probability: reading.and_then(|r| finite(r.wrong_cycle_probability)),
        doubts: reading.map_or(Vec::new(), |r| r.doubts.iter().map(|d| d.word()).collect()),
        no_reading: measured.outcome.as_ref().err().map(|refusal| JsonRefusal {
            reason: refusal.reason,
            detail: &refusal.detail,
        }),
        echoes: measured
            .findings
            .echoes
            .iter()
            .map(|e| echo(e, measured.full_scale))
            .collect(),
        pulse: measured
            .findings
            .pulse
            .as_ref()
            .map(|p| pulse(p, measured.span.is_some())),
        separation: measured.findings.separation.as_ref().map(separation),
        smallest_wall_mm: measured.wall_limits.and_then(|(smallest, _)| finite(smallest.as_mm())),
        largest_wall_mm: measured.wall_limits.and_then(|(_, largest)| finite(largest.as_mm())),
        budget: reading.map_or(Vec::new(), |r| {
            let terms = r.budget.terms().iter();
            terms
                .map(|term| JsonTerm {
                    term: term.source.word(),
                    standard_uncertainty_mm: finite(term.standard_uncertainty.as_mm()),
                })
                .collect()
        }),
        dominating_term: reading.and_then(|r| r.budget.dominating()).map(|source| source.word()),
        limits: reading.and_then(|r| Some(verdict(&r.against(limits?)))),
        jitter: measured.jitter.as_ref().map(|found| JsonJitter {
            rms_ns: finite(found.jitter.rms.as_ns()),
            standard_uncertainty_ns: finite(found.jitter.standard_uncertainty.as_ns()),
            shots: found.jitter.shots,
            arrival_ns: finite(found.arrival.as_ns()),
            snr_db: finite(found.snr.get()),
            wanders: found.wanders,
        }),
    };
    // Strings and finite numbers always serialise.
    serde_json::to_string(&record).unwrap_or_default()
}
