//! Recorded shots through the core: memory for records of any length, and what comes out.

use crate::input_error::InputError;
use crate::joining::TriggerJitter;
use crate::record_file::RecordFile;
use crate::setup_file::SetupFile;
use halfpulse::echo::separation::thin_wall::ThinWall;
use halfpulse::record::average::{AverageError, Averager, MOST_SHOTS};
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::workspace::{CORRELATION_CAPACITY, ECHO_CAPACITY, TRAIN_LAGS};
use halfpulse::{
    AdcFormat, Findings, Gauge, Interpretation, Metres, NoReading, Reading, Record, SampleClock, Seconds, Span,
    Workspace,
};
use std::path::Path;

/// Scratch memory on the heap, for records whose length is known only when they are read.
pub struct HeapScratch {
    envelope: Vec<u16>,
    pulse: Box<[f32; PULSE_CAPACITY]>,
    skirt: Box<[u16; PULSE_CAPACITY]>,
    correlation: Box<[f32; CORRELATION_CAPACITY]>,
    train: Box<[f32; ECHO_CAPACITY * TRAIN_LAGS]>,
}

impl HeapScratch {
    /// Memory for records of up to `samples`; at least what the longest pulse asks for, so that a record
    /// that is too short is refused and not the set-up.
    #[must_use]
    pub fn new(samples: usize) -> Self {
        Self {
            envelope: vec![0; samples.max(8 * PULSE_CAPACITY)],
            pulse: Box::new([0.0; PULSE_CAPACITY]),
            skirt: Box::new([0; PULSE_CAPACITY]),
            correlation: Box::new([0.0; CORRELATION_CAPACITY]),
            train: Box::new([0.0; ECHO_CAPACITY * TRAIN_LAGS]),
        }
    }

    /// Lends the memory to a gauge.
    pub fn workspace(&mut self) -> Workspace<'_> {
        Workspace {
            envelope: &mut self.envelope,
            pulse: &mut self.pulse,
            skirt: &mut self.skirt,
            correlation: &mut self.correlation,
            train: &mut self.train,
        }
    }
}

/// Why a record has no reading.
#[derive(Clone, Debug, PartialEq)]
pub struct Refusal {
    /// One word of the documented list.
    pub reason: &'static str,
    /// The reason with its evidence and the advice.
    pub detail: String,
}

/// The word for a record that was looked at without a set-up.
pub const NO_SETUP: &str = "no-set-up";

impl Refusal {
    /// There is no set-up: echoes and pulse are all that can be told.
    #[must_use]
    pub fn no_setup() -> Self {
        Self {
            reason: NO_SETUP,
            detail: "without a set-up there is no velocity and no zero; give one with --setup".to_string(),
        }
    }
}

impl From<NoReading> for Refusal {
    fn from(why: NoReading) -> Self {
        Self {
            reason: why.word(),
            detail: why.to_string(),
        }
    }
}

/// One record, measured.
#[derive(Clone, Debug)]
pub struct Measured {
    /// The file's name as it was given.
    pub file: String,
    /// Which shot of the file, from 0; `None` for the average of all.
    pub shot: Option<usize>,
    /// The span, if a set-up names one.
    pub span: Option<Span>,
    /// A reading, or why there is none.
    pub outcome: Result<Reading, Refusal>,
    /// What the record held.
    pub findings: Findings,
    /// What a thin wall's reading rests on.
    pub thin_wall: Option<ThinWall>,
    /// Codes from zero to full scale.
    pub full_scale: f32,
    /// The smallest and the largest wall that set-up and record can read, if there is a set-up.
    pub wall_limits: Option<(Metres, Metres)>,
    /// The trigger's jitter as the file's shots show it, if that was asked for and an echo tells it.
    pub jitter: Option<TriggerJitter>,
}

impl Measured {
    /// What was not measured at all.
    #[must_use]
    pub fn refused(gauge: &Gauge<'_>, reason: &'static str, detail: String) -> Self {
        Self {
            file: String::new(),
            shot: None,
            span: Some(gauge.setup().span),
            outcome: Err(Refusal { reason, detail }),
            thin_wall: None,
            findings: gauge.findings().clone(),
            full_scale: 1.0,
            wall_limits: None,
            jitter: None,
        }
    }
}

/// How far, in samples, the set-up's time of the first sample may lie from the file's: the rounding of times
/// to whole nanoseconds at up to 200 MS/s.
const FIRST_SAMPLE_TOLERANCE: f64 = 0.1;

/// The clock of a file's shots under a set-up, whose sample rate is that of the record that `phases` delayed shots make (1: of a
/// shot).
///
/// # Errors
/// The file states another sample rate, or another time of its first sample, than the set-up.
pub fn clock(path: &Path, file: &RecordFile, setup: &SetupFile, phases: u8) -> Result<SampleClock, InputError> {
    let keys = &setup.keys.record;
    let phases = phases.max(1);
    let rate = keys.sample_rate_mhz * 1e6 / f64::from(phases);
    if let Some(stated) = file.sample_rate
        && !stated.agrees_with(rate)
    {
        let interleaved = if phases > 1 {
            format!(", {phases} delays of {} MHz", rate * 1e-6)
        } else {
            String::new()
        };
        return Err(InputError::in_file(
            path,
            format!(
                "was sampled at {} MHz, {} says {} MHz{interleaved}",
                stated.hertz * 1e-6,
                setup.path().display(),
                keys.sample_rate_mhz
            ),
            "correct [record] sample_rate_mhz, or use the set-up that belongs to this record",
        ));
    }
    let first = match (keys.first_sample_us, file.first_sample_s) {
        (Some(us), Some(stated)) if (us * 1e-6 - stated).abs() * rate > FIRST_SAMPLE_TOLERANCE => {
            return Err(InputError::in_file(
                path,
                format!(
                    "starts at {} us, {} says {us} us",
                    (stated * 1e12).round() * 1e-6,
                    setup.path().display()
                ),
                "correct [record] first_sample_us, or leave it out",
            ));
        }
        (Some(us), _) => us * 1e-6,
        (None, stated) => stated.unwrap_or(0.0),
    };
    Ok(SampleClock {
        rate: halfpulse::Hertz::from_mhz((keys.sample_rate_mhz / f64::from(phases)) as f32),
        first_sample: Seconds::new(first as f32),
    })
}

/// One shot, or the average of all, of a file.
#[derive(Clone, Debug)]
pub struct Shot {
    /// Which one; `None` for the average.
    pub number: Option<usize>,
    /// Its codes.
    pub codes: Vec<i16>,
    /// What they stand for.
    pub format: AdcFormat,
}

/// The shots of a file one by one.
#[must_use]
pub fn shots(file: RecordFile) -> Vec<Shot> {
    let format = file.format;
    let numbered = file.shots.into_iter().enumerate();
    numbered
        .map(|(number, codes)| Shot {
            number: Some(number),
            codes,
            format,
        })
        .collect()
}

/// The average of a file's shots, with the resolution that averaging gains.
///
/// # Errors
/// More shots than one average takes.
pub fn averaged(path: &Path, file: &RecordFile) -> Result<Shot, InputError> {
    let fault = |error: AverageError| match error {
        AverageError::TooManyShots => InputError::in_file(
            path,
            format!("has {} shots, an average takes {MOST_SHOTS}", file.shots.len()),
            "split the file",
        ),
        other => InputError::in_file(
            path,
            format!("cannot be averaged ({other})"),
            "measure the shots one by one",
        ),
    };
    let samples = file.shots.first().map_or(0, Vec::len);
    let mut sums = vec![0; samples];
    let mut averager = Averager::new(&mut sums);
    // All shots of a file have one clock; which one does not matter here.
    let clock = SampleClock::new(halfpulse::Hertz::from_mhz(1.0));
    for codes in &file.shots {
        averager.add(&Record::new(codes, file.format, clock)).map_err(fault)?;
    }
    let mut codes = vec![0; samples];
    let format = averager.finish(&mut codes).map_err(fault)?.format();
    Ok(Shot {
        number: None,
        codes,
        format,
    })
}

/// What the reading that was made last rests on, if it is that of a thin wall.
pub fn thin_wall(gauge: &mut Gauge<'_>, record: &Record<'_>, outcome: &Result<Reading, Refusal>) -> Option<ThinWall> {
    let thin = matches!(outcome, Ok(reading) if reading.interpretation == Interpretation::ThinWall);
    thin.then(|| gauge.thin_wall(record).ok()).flatten()
}

/// Measures one shot.
pub fn measure(gauge: &mut Gauge<'_>, name: &str, shot: &Shot, clock: SampleClock) -> Measured {
    let record = Record::new(&shot.codes, shot.format, clock);
    let outcome = gauge.measure(&record).map_err(Refusal::from);
    Measured {
        file: name.to_string(),
        shot: shot.number,
        span: Some(gauge.setup().span),
        thin_wall: thin_wall(gauge, &record, &outcome),
        outcome,
        findings: gauge.findings().clone(),
        full_scale: shot.format.full_scale(),
        wall_limits: Some(gauge.wall_limits_of(&record)),
        jitter: None,
    }
}

/// Asks whether an echo of the shot that was measured last is two, and puts the answer beside what was found.
pub fn separate(gauge: &mut Gauge<'_>, shot: &Shot, clock: SampleClock, measured: &mut Measured) {
    let _ = gauge.separate(&Record::new(&shot.codes, shot.format, clock));
    measured.findings.separation = gauge.findings().separation;
}
