//! What is written about one record: every number that the core hands out, as the bits it consists
//! of, so that host and board can be compared to the last one.
//!
//! Numbers are written as eight hexadecimal digits without `core::fmt`. The sentences of refusals
//! and doubts are written with it on purpose: they must not bring a panic into the image either.

use core::fmt::{self, Write};
use halfpulse::echo::separation::Separation;
use halfpulse::{CoatingReading, Echo, EchoRole, Findings, NoReading, Polarity, Reading};

/// Where the lines go.
pub trait Sink {
    /// Takes the next piece of text.
    fn text(&mut self, text: &str);
}

/// A line under way: a first word, then `key=bits` pairs.
#[derive(Debug)]
pub struct Line<'s, S: Sink>(&'s mut S);

impl<'s, S: Sink> Line<'s, S> {
    /// Starts a line with what it is about.
    pub fn new(sink: &'s mut S, what: &str) -> Self {
        sink.text(what);
        Self(sink)
    }

    /// Adds a whole number.
    #[must_use]
    pub fn word(self, key: &str, value: u32) -> Self {
        let mut digits = [b'0'; 8];
        let mut rest = value;
        for digit in digits.iter_mut().rev() {
            let nibble = (rest & 15) as u8;
            *digit = if nibble < 10 { b'0' + nibble } else { b'a' + nibble - 10 };
            rest >>= 4;
        }
        self.0.text(" ");
        self.0.text(key);
        self.0.text("=");
        self.0.text(core::str::from_utf8(&digits).unwrap_or(""));
        self
    }

    /// Adds a number's bits.
    #[must_use]
    pub fn bits(self, key: &str, value: f32) -> Self {
        self.word(key, value.to_bits())
    }

    /// Adds words.
    #[must_use]
    pub fn words(self, words: &str) -> Self {
        self.0.text(" ");
        self.0.text(words);
        self
    }

    /// Adds a sentence that the core writes.
    #[must_use]
    pub fn sentence(self, sentence: &dyn fmt::Display) -> Self {
        self.0.text(" ");
        let _ = write!(Pieces(self.0), "{sentence}");
        self
    }

    /// Ends the line.
    pub fn end(self) {
        self.0.text("\n");
    }
}

/// A sink as `core::fmt` wants it.
struct Pieces<'s, S: Sink>(&'s mut S);

impl<S: Sink> Write for Pieces<'_, S> {
    fn write_str(&mut self, text: &str) -> fmt::Result {
        self.0.text(text);
        Ok(())
    }
}

/// Writes the outcome of one measurement.
#[inline(never)]
pub fn outcome(sink: &mut impl Sink, name: &str, outcome: &Result<Reading, NoReading>, findings: &Findings) {
    Line::new(sink, "record").words(name).end();
    match outcome {
        Ok(reading) => write_reading(sink, reading),
        Err(refusal) => Line::new(sink, "refusal").words(refusal.word()).sentence(refusal).end(),
    }
    write_findings(sink, findings);
}

fn write_reading(sink: &mut impl Sink, reading: &Reading) {
    Line::new(sink, "reading")
        .bits("thickness", reading.thickness.get())
        .bits("standard-uncertainty", reading.standard_uncertainty.get())
        .bits("coverage-factor", reading.coverage_factor)
        .bits("wrong-cycle-probability", reading.wrong_cycle_probability)
        .word("doubts", reading.doubts.bits())
        .sentence(&reading.doubts)
        .end();
    if let Some(CoatingReading { round_trip, thickness }) = reading.coating {
        Line::new(sink, "coating-round-trip")
            .bits("time", round_trip.time.get())
            .bits("standard-uncertainty", round_trip.standard_uncertainty.get())
            .end();
        if let Some(coating) = thickness {
            Line::new(sink, "coating")
                .bits("thickness", coating.thickness.get())
                .bits("standard-uncertainty", coating.standard_uncertainty.get())
                .end();
        }
    }
    for term in reading.budget.terms() {
        Line::new(sink, "budget")
            .words(term.source.word())
            .bits("standard-uncertainty", term.standard_uncertainty.get())
            .end();
    }
}

fn write_findings(sink: &mut impl Sink, findings: &Findings) {
    let health = &findings.health;
    Line::new(sink, "health")
        .word("samples", health.samples)
        .word("clipped", health.clipped)
        .word("lowest", i32::from(health.lowest) as u32)
        .word("highest", i32::from(health.highest) as u32)
        .word("constant-bits", u32::from(health.constant_bits))
        .bits("noise", findings.noise)
        .end();
    for echo in &findings.echoes {
        write_echo(sink, echo);
    }
    if let Some(pulse) = &findings.pulse {
        Line::new(sink, "pulse")
            .bits("lower-frequency", pulse.lower_frequency.get())
            .bits("upper-frequency", pulse.upper_frequency.get())
            .bits("envelope-duration", pulse.envelope_duration.get())
            .bits("rectified-duration", pulse.rectified_duration.get())
            .bits("spatial-pulse-length", pulse.spatial_pulse_length.get())
            .end();
    }
    separation(sink, findings.separation.as_ref());
}

/// Writes the verdict on the nearest pair of echoes, if there is one.
#[inline(never)]
pub fn separation(sink: &mut impl Sink, separation: Option<&Separation>) {
    let Some(separation) = separation else {
        return;
    };
    let mut line = Line::new(sink, "separation").word("verdict", separation.verdict as u32);
    if let Some(pair) = &separation.pair {
        line = line
            .bits("first", pair.first.get())
            .bits("spacing", pair.spacing.get())
            .bits("standard-uncertainty", pair.standard_uncertainty.get())
            .bits("amplitude-ratio", pair.amplitude_ratio);
    }
    if let Some(why) = separation.unresolved {
        line = line.word("unresolved", why as u32);
    }
    match separation.log_odds {
        Some(odds) => line.bits("log-odds", odds).end(),
        None => line.end(),
    }
}

fn write_echo(sink: &mut impl Sink, echo: &Echo) {
    let (role, multiple) = match echo.role {
        EchoRole::TransmissionPulse => ("transmission-pulse", 0),
        EchoRole::Interface => ("interface", 0),
        EchoRole::Coating => ("coating", 0),
        EchoRole::BackWall(multiple) => ("back-wall", multiple),
        EchoRole::ModeConverted => ("mode-converted", 0),
        EchoRole::Other => ("other", 0),
    };
    Line::new(sink, "echo")
        .words(role)
        .word("multiple", u32::from(multiple))
        .word("index", echo.position.index)
        .bits("fraction", echo.position.fraction)
        .bits("arrival", echo.arrival.get())
        .bits("standard-uncertainty", echo.standard_uncertainty.get())
        .bits("amplitude", echo.amplitude)
        .word("negative", u32::from(echo.polarity == Polarity::Negative))
        .bits("snr", echo.snr.get())
        .bits("mismatch", echo.mismatch)
        .word("clipped", u32::from(echo.clipped))
        .end();
}

/// Writes the last line, without which a printout is not complete.
pub fn end(sink: &mut impl Sink, records: u32) {
    Line::new(sink, "end").word("records", records).end();
}
