//! Reports as log lines. Whole numbers only: the log's reader puts the text together.

use crate::report::{Report, ReportSink, Shortfall};
use halfpulse::Metres;
use halfpulse::math::round_to_i32;

/// Writes each report to the log.
#[derive(Clone, Copy, Debug, Default)]
pub struct LogSink;

impl ReportSink for LogSink {
    fn report(&mut self, report: &Report<'_>) {
        let number = report.number;
        match &report.outcome {
            Ok(reading) => defmt::info!(
                "reading {=u32}: {=i32} nm +- {=i32} nm, doubts: {}; {=u16} shots at {=i32} dB",
                number,
                nanometres(reading.thickness),
                nanometres(reading.expanded()),
                reading.doubts,
                report.shots,
                round_to_i32(report.gain.get()),
            ),
            Err(Shortfall::NoReading(refusal)) => defmt::info!("reading {=u32}: none, {}", number, refusal),
            Err(Shortfall::Fault(fault)) => defmt::warn!("reading {=u32}: fault, {}", number, fault),
        }
    }
}

fn nanometres(length: Metres) -> i32 {
    round_to_i32(length.get() * 1e9)
}
