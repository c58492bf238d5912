//! The stored record of the uncoupled probe that a set-up names: read once, taken off every shot.

use crate::input_error::InputError;
use crate::measuring::{self, Measured, Refusal, Shot};
use crate::record_file;
use crate::setup_file::SetupFile;
use halfpulse::{Gauge, Metres, Record, SampleClock, Seconds, Uncoupled, UncoupledError};
use std::path::Path;

/// The word for a shot whose transmission pulse is not that of the stored record.
pub const OTHER_TAIL: &str = "other-transmission-pulse";

/// The average of the stored shots, and from when on echoes are looked for once it has been taken off.
pub struct StoredRecord {
    shot: Shot,
    clock: SampleClock,
    from: Seconds,
}

impl StoredRecord {
    /// The record that a set-up names; `None` if it names none.
    ///
    /// # Errors
    /// A file that cannot be used with this set-up.
    pub fn of(setup: &SetupFile) -> Result<Option<Self>, InputError> {
        let measure = &setup.keys.measure;
        match (&measure.uncoupled_record, measure.uncoupled_from_us) {
            (Some(name), Some(from_us)) => Ok(Some(Self::read(&setup.pulse_path(name), from_us, setup)?)),
            _ => Ok(None),
        }
    }

    /// A record from its file: the average of its shots.
    ///
    /// # Errors
    /// As [`StoredRecord::of`].
    pub fn read(path: &Path, from_us: f64, setup: &SetupFile) -> Result<Self, InputError> {
        let file = record_file::read(path, &setup.coding())?;
        Ok(Self {
            clock: measuring::clock(path, &file, setup, 1)?,
            shot: measuring::averaged(path, &file)?,
            from: Seconds::from_us(from_us as f32),
        })
    }

    /// The record as the core takes it.
    #[must_use]
    pub fn lend(&self) -> Uncoupled<'_> {
        Uncoupled {
            record: Record::new(&self.shot.codes, self.shot.format, self.clock),
            from: self.from,
        }
    }

    /// Does it belong to this shot? The shot stays as it is.
    ///
    /// # Errors
    /// Why it does not.
    pub fn fits(&self, shot: &Shot, clock: &SampleClock, to: Seconds) -> Result<(), UncoupledError> {
        let mut codes = shot.codes.clone();
        self.lend().take_off(&mut codes, &shot.format, clock, to).map(|_| ())
    }

    /// Takes the record off a shot and measures what is left; a shot that it does not belong to is refused.
    pub fn measure(&self, gauge: &mut Gauge<'_>, name: &str, shot: &mut Shot, clock: SampleClock) -> Measured {
        let outcome = gauge.measure_uncoupled(&mut shot.codes, shot.format, clock, &self.lend());
        let belongs = outcome.is_ok();
        Measured {
            file: name.to_string(),
            shot: shot.number,
            span: Some(gauge.setup().span),
            outcome: match outcome {
                Ok(outcome) => outcome.map_err(Refusal::from),
                Err(why) => Err(Refusal {
                    reason: OTHER_TAIL,
                    detail: why.to_string(),
                }),
            },
            thin_wall: None,
            findings: if belongs {
                gauge.findings().clone()
            } else {
                halfpulse::Findings::default()
            },
            full_scale: shot.format.full_scale(),
            wall_limits: self.wall_limits(gauge, &Record::new(&shot.codes, shot.format, clock)),
            jitter: None,
        }
    }

    /// The smallest and the largest wall, with a window that begins inside the dead zone.
    fn wall_limits(&self, gauge: &mut Gauge<'_>, record: &Record<'_>) -> Option<(Metres, Metres)> {
        let setup = *gauge.setup();
        let mut opened = setup;
        opened.window.from = self.from;
        gauge.change_setup(opened).ok()?;
        let limits = gauge.wall_limits_of(record);
        gauge.change_setup(setup).ok()?;
        Some(limits)
    }
}
