//! The set-up file, version 1: what a gauge must be told, as TOML.
//!
//! An example that can be copied stands in [`keys::EXAMPLE`].
//!
//! * All times count from the transmission trigger: sample i was taken at
//!   `first_sample_us` + i / `sample_rate_mhz`.
//! * Spans: transmission pulse to back wall reads 2 d / c = first back wall - offset; interface to back
//!   wall reads 2 d / c = first back wall - interface - offset (normally 0); back wall to back wall
//!   reads 2 d / c = period of the train and uses the offset only to check.
//! * Without `[zero] standard_uncertainty_ns` the offset of back-wall-to-back-wall counts as unknown
//!   (no check), that of interface-to-back-wall as exact; transmission-pulse-to-back-wall refuses.
//! * With `[dual_element]` the times are those along a V, and with an element diameter those of a beam that spreads; both
//!   are corrected. A transmission-pulse-to-back-wall reading also rests on what the zero holds of the beam
//!   (`learned_on_mm`): not known, the first back wall stays as it came, and the budget says so.
//!   Likewise the pulse carries the way it was learned through (`reference_pulse_learned_on_mm`): what an echo is corrected by is
//!   what the beam does to it against what it did to the pulse.
//! * With `[coating]` wall and coating are read from one record: the wall between back walls, the coating from what is left
//!   of the first back wall's time. With a velocity it is a thickness, without one a time.
//! * A zero belongs to the reference pulse it was learned with: if the file names the pulse's checksum,
//!   another pulse is an error.
//! * Unknown keys are refused; every key is described in [`keys::KEYS`] and by `halfpulse read --help`.
//!   Keys that later versions add keep version 1 and have defaults.

mod contents;
mod document;
pub mod keys;
mod write;

pub use contents::{
    CalibrationKeys, CoatingKeys, DelayLineKeys, DualElementKeys, LimitsKeys, MaterialKeys, MeasureKeys, PartKeys,
    ProbeKeys, RecordKeys, SetupKeys, ZeroKeys,
};

use crate::input_error::InputError;
use crate::record_file::{CodeKind, Coding, npy};
use document::{Document, Place};
use halfpulse::{EchoSign, Gauge, GaugeSetup, Limits, LimitsError, ProbeFace, ProbeKind, SetupError, Span, Workspace};
use std::path::{Path, PathBuf};

const CODES: &[(&str, CodeKind)] = &[("signed", CodeKind::Signed), ("offset-binary", CodeKind::OffsetBinary)];
const KINDS: &[(&str, ProbeKind)] = &[
    ("contact", ProbeKind::Contact),
    ("delay-line", ProbeKind::DelayLine),
    ("dual-element", ProbeKind::DualElement),
];
const FACES: &[(&str, ProbeFace)] = &[("hard", ProbeFace::Hard), ("plastic", ProbeFace::Plastic)];
const SIGNS: &[(&str, EchoSign)] = &[
    ("unknown", EchoSign::Unknown),
    ("as-pulse", EchoSign::AsPulse),
    ("inverted", EchoSign::Inverted),
];
const SPANS: &[(&str, Span)] = &[
    ("transmission-pulse-to-back-wall", Span::TransmissionPulseToBackWall),
    ("interface-to-back-wall", Span::InterfaceToBackWall),
    ("back-wall-to-back-wall", Span::BackWallToBackWall),
];

/// The word for a span.
#[must_use]
pub fn span_word(span: Span) -> &'static str {
    word_of(SPANS, span)
}

fn word_of<T: PartialEq>(words: &[(&'static str, T)], value: T) -> &'static str {
    words.iter().find(|(_, v)| *v == value).map_or("", |(word, _)| word)
}

/// A set-up file that has been read: its keys, and where they stand.
#[derive(Clone, Debug)]
pub struct SetupFile {
    /// What it says.
    pub keys: SetupKeys,
    place: Place,
}

impl SetupFile {
    /// Reads and checks a set-up file. What it returns gives a valid [`GaugeSetup`].
    ///
    /// # Errors
    /// Anything that is wrong with it, with file, line, key and remedy.
    pub fn read(path: &Path) -> Result<Self, InputError> {
        const MOST_BYTES: u64 = 1 << 20;
        InputError::check_file(path, MOST_BYTES)?;
        let text = std::fs::read_to_string(path).map_err(|error| InputError::unreadable(path, &error))?;
        Self::parse(path, &text)
    }

    /// The same from text; `path` is what errors name and what the pulse's file is relative to.
    ///
    /// # Errors
    /// As [`SetupFile::read`].
    pub fn parse(path: &Path, text: &str) -> Result<Self, InputError> {
        let document = Document::parse(path, text)?;
        match document.number("", "version")? {
            Some(1.0) => {}
            Some(other) => {
                return Err(document.place.fault(
                    "",
                    "version",
                    &format!("{other} is not known to this program"),
                    "write version = 1",
                ));
            }
            None => return Err(document.missing("", "version")),
        }
        let keys = SetupKeys::from_document(&document)?;
        let file = Self {
            keys,
            place: document.place,
        };
        file.check_host_keys()?;
        file.gauge_setup()?;
        file.limits()?;
        Ok(file)
    }

    /// A set-up that comes from no file.
    #[must_use]
    pub fn from_keys(keys: SetupKeys, path: &Path) -> Self {
        Self {
            keys,
            place: Place::without_lines(path),
        }
    }

    /// The file's name.
    #[must_use]
    pub fn path(&self) -> &Path {
        self.place.path()
    }

    /// How numbers of a record's file become codes.
    #[must_use]
    pub const fn coding(&self) -> Coding {
        Coding {
            bits: self.keys.record.bits,
            codes: self.keys.record.codes,
            full_scale: self.keys.record.full_scale,
        }
    }

    /// What the core does not see.
    fn check_host_keys(&self) -> Result<(), InputError> {
        let measure = &self.keys.measure;
        match (&measure.uncoupled_record, measure.uncoupled_from_us) {
            (None, None) => {}
            (Some(_), Some(from)) if from < measure.from_us && measure.span != Span::InterfaceToBackWall => {}
            (Some(_), Some(_)) => {
                return Err(self.place.fault(
                    "measure",
                    "uncoupled_from_us",
                    "an uncoupled record opens the time before from_us, of spans that do not begin at an interface",
                    "give a time before from_us, or remove both keys",
                ));
            }
            (Some(_), None) | (None, Some(_)) => {
                return Err(self.place.fault(
                    "measure",
                    if measure.uncoupled_record.is_some() {
                        "uncoupled_record"
                    } else {
                        "uncoupled_from_us"
                    },
                    "uncoupled_record and uncoupled_from_us belong together",
                    "give both, or remove both",
                ));
            }
        }
        let record = &self.keys.record;
        if record.bits.is_some_and(|bits| !(2..=16).contains(&bits)) {
            return Err(self
                .place
                .fault("record", "bits", "must be from 2 to 16", "state the converter's bits"));
        }
        if record
            .full_scale
            .is_some_and(|scale| !(scale.is_finite() && scale > 0.0))
        {
            return Err(self.place.fault(
                "record",
                "full_scale",
                "must be a positive number",
                "state the value at which the converter clips",
            ));
        }
        if record
            .first_sample_us
            .is_some_and(|time| !(time.is_finite() && time.abs() <= 1e6))
        {
            return Err(self.place.fault(
                "record",
                "first_sample_us",
                "is no time of a record",
                "state microseconds after the transmission trigger",
            ));
        }
        if self.keys.zero.standard_uncertainty_ns.is_none()
            && self.keys.measure.span == Span::TransmissionPulseToBackWall
        {
            return Err(self.place.fault(
                "zero",
                "standard_uncertainty_ns",
                "is missing, and this span rests on the zero",
                "calibrate on a block, or state the offset with its standard uncertainty",
            ));
        }
        let coefficient = "velocity_temperature_coefficient_m_s_k";
        let stated = [
            ("part", "temperature_c", self.keys.part.temperature_c),
            (
                "material",
                "velocity_temperature_coefficient_standard_uncertainty_m_s_k",
                self.keys
                    .material
                    .velocity_temperature_coefficient_standard_uncertainty_m_s_k,
            ),
        ];
        for (table, name, value) in stated {
            if value.is_some() && self.keys.material.velocity_temperature_coefficient_m_s_k.is_none() {
                return Err(self.place.fault(
                    table,
                    name,
                    "changes nothing without the material's coefficient",
                    &format!("add [material] {coefficient}, or leave this out"),
                ));
            }
        }
        if self.keys.part.temperature_standard_uncertainty_k.is_some() && self.keys.part.temperature_c.is_none() {
            return Err(self.place.fault(
                "part",
                "temperature_standard_uncertainty_k",
                "belongs to a temperature that is not stated",
                "add temperature_c, or leave this out",
            ));
        }
        if self.keys.part.outer_radius_mm.is_some() && self.keys.part.inner_radius_mm.is_some() {
            return Err(self.place.fault(
                "part",
                "inner_radius_mm",
                "stands beside outer_radius_mm, and a probe sits on one side of a pipe",
                "state the one under the probe",
            ));
        }
        if let Some(coating) = self.keys.coating
            && coating.velocity_standard_uncertainty_m_s.is_some()
            && coating.velocity_m_s.is_none()
        {
            return Err(self.place.fault(
                "coating",
                "velocity_standard_uncertainty_m_s",
                "belongs to a velocity that is not stated",
                "add velocity_m_s, or leave this out",
            ));
        }
        if let Some(block) = self.keys.probe.reference_pulse_learned_on_mm
            && !(0.0..=1e6).contains(&block)
        {
            return Err(self.place.fault(
                "probe",
                "reference_pulse_learned_on_mm",
                "must be a thickness from 0 to 1e6",
                "state the block's thickness, or leave it out",
            ));
        }
        if !self.keys.pulse_quality().is_possible() {
            return Err(self.place.fault(
                "probe",
                "reference_pulse_noise_percent",
                "and mismatch must be from 0 to 100",
                "calibrate again",
            ));
        }
        if let Some(limits) = &self.keys.limits
            && limits.guard_band_factor.is_some()
            && limits.wrong_decision_probability.is_some()
        {
            return Err(self.place.fault(
                "limits",
                "wrong_decision_probability",
                "stands beside guard_band_factor, and both say how wide the guard band is",
                "state one of them",
            ));
        }
        if let Some(calibration) = &self.keys.calibration
            && calibration.from_mm.is_some() != calibration.to_mm.is_some()
        {
            return Err(self.place.fault(
                "calibration",
                if calibration.from_mm.is_some() {
                    "from_mm"
                } else {
                    "to_mm"
                },
                "stands alone",
                "state both from_mm and to_mm, or none",
            ));
        }
        Ok(())
    }

    /// The core's set-up.
    ///
    /// # Errors
    /// The first key whose value cannot be used.
    pub fn gauge_setup(&self) -> Result<GaugeSetup, InputError> {
        let setup = self.keys.to_gauge_setup();
        match setup.check() {
            None => Ok(setup),
            Some(error) => Err(self.locate(error)),
        }
    }

    /// The limits of the place, if the file has the table.
    ///
    /// # Errors
    /// The first key whose value cannot be used.
    pub fn limits(&self) -> Result<Option<Limits>, InputError> {
        let Some(limits) = self.keys.to_limits() else {
            return Ok(None);
        };
        let Some(error) = limits.check() else {
            return Ok(Some(limits));
        };
        let name = match error {
            LimitsError::Minimum => "minimum_mm",
            LimitsError::Warning => "warning_mm",
            LimitsError::Maximum => "maximum_mm",
            _ if self.keys.limits.as_ref().is_some_and(|l| l.guard_band_factor.is_some()) => "guard_band_factor",
            _ => "wrong_decision_probability",
        };
        Err(self.place.fault("limits", name, error.sentence(), "correct this value"))
    }

    /// Where a set-up error of the core stands in the file.
    #[must_use]
    pub fn locate(&self, error: SetupError) -> InputError {
        let (table, name) = match error {
            SetupError::SampleRate | SetupError::SampleRateBelowBand => ("record", "sample_rate_mhz"),
            SetupError::CentreFrequency => ("probe", "centre_frequency_mhz"),
            SetupError::RelativeBandwidth => ("probe", "relative_bandwidth_percent"),
            SetupError::ElementDiameter => ("probe", "element_diameter_mm"),
            SetupError::ElementDiameterUncertainty => ("probe", "element_diameter_uncertainty_percent"),
            SetupError::DelayLine => ("delay_line", "velocity_m_s"),
            SetupError::ElementSeparation => ("dual_element", "separation_mm"),
            SetupError::ZeroLearnedOn => ("zero", "learned_on_mm"),
            SetupError::EchoPhase => ("probe", "echo_phase_degrees"),
            SetupError::CouplantFilm => ("probe", "couplant_film_um"),
            SetupError::Velocity => ("material", "velocity_m_s"),
            SetupError::VelocityUncertainty => ("material", "velocity_standard_uncertainty_m_s"),
            SetupError::PartVelocityUncertainty => ("material", "part_velocity_standard_uncertainty_m_s"),
            SetupError::TemperatureCoefficient => ("material", "velocity_temperature_coefficient_m_s_k"),
            SetupError::ReferenceTemperature => ("material", "velocity_temperature_c"),
            SetupError::PartTemperature => ("part", "temperature_c"),
            SetupError::Roughness => ("part", "roughness_um"),
            SetupError::PulseQuality => ("probe", "reference_pulse_noise_percent"),
            SetupError::ZeroOffset => ("zero", "offset_ns"),
            SetupError::ZeroUncertainty => ("zero", "standard_uncertainty_ns"),
            SetupError::ZeroCorrelation => ("calibration", "velocity_zero_correlation"),
            SetupError::Window => ("measure", "from_us"),
            SetupError::TriggerJitter => ("record", "trigger_jitter_ns"),
            SetupError::CoverageFactor => ("measure", "coverage_factor"),
            SetupError::CoatingVelocity => ("coating", self.blame_in_coating()),
            SetupError::Surface if self.keys.part.outer_radius_mm.is_some() => ("part", "outer_radius_mm"),
            SetupError::Surface => ("part", "inner_radius_mm"),
            SetupError::CalibratedRange => ("calibration", "from_mm"),
            SetupError::PulseTooLong | SetupError::PulseEmpty if self.keys.probe.reference_pulse.is_some() => {
                ("probe", "reference_pulse")
            }
            SetupError::PulseTooLong => ("record", "sample_rate_mhz"),
            _ => ("probe", "relative_bandwidth_percent"),
        };
        let sentence = error.to_string();
        // The core's sentences hold what must be; some hold the remedy behind a colon.
        let (what, remedy) = sentence.split_once(": ").unwrap_or((&sentence, "correct this value"));
        self.place.fault(table, name, what, remedy)
    }

    /// Which of the coating's keys is wrong, if one is.
    fn blame_in_coating(&self) -> &'static str {
        let velocity = self.keys.coating.and_then(|coating| coating.velocity_m_s);
        if velocity.is_some_and(|velocity| (1.0..=1e6).contains(&velocity)) {
            "velocity_standard_uncertainty_m_s"
        } else {
            "velocity_m_s"
        }
    }

    /// The learned pulse, if the set-up names one; its checksum must be the one that the zero was
    /// learned with.
    ///
    /// # Errors
    /// A file that cannot be used; another checksum; a checksum without a pulse.
    pub fn reference_pulse(&self) -> Result<Option<Vec<f32>>, InputError> {
        let stated = self.keys.zero.reference_pulse_checksum.as_deref();
        let Some(name) = &self.keys.probe.reference_pulse else {
            if stated.is_some() {
                return Err(self.place.fault(
                    "zero",
                    "reference_pulse_checksum",
                    "the zero was learned with a pulse that [probe] reference_pulse does not name",
                    "name the pulse's file, or calibrate again",
                ));
            }
            return Ok(None);
        };
        let path = self.pulse_path(name);
        let pulse = npy::read_pulse(&path)?;
        if let Some(stated) = stated {
            let found = checksum(&pulse);
            if stated != found {
                return Err(self.place.fault(
                    "zero",
                    "reference_pulse_checksum",
                    &format!(
                        "the zero was learned with another pulse: {} has {found}",
                        path.display()
                    ),
                    "bring the pulse's file back, or calibrate again",
                ));
            }
        }
        Ok(Some(pulse))
    }

    /// Where a pulse's file of this name lies.
    #[must_use]
    pub fn pulse_path(&self, name: &str) -> PathBuf {
        self.path().parent().unwrap_or(Path::new("")).join(name)
    }

    /// A gauge with this set-up and its reference pulse.
    ///
    /// # Errors
    /// As [`SetupFile::gauge_setup`] and [`SetupFile::reference_pulse`]; a pulse that the core refuses.
    pub fn gauge<'w>(&self, workspace: Workspace<'w>) -> Result<Gauge<'w>, InputError> {
        let pulse = self.reference_pulse()?;
        self.gauge_with_pulse(workspace, pulse.as_deref())
    }

    /// A gauge with this set-up and a pulse that is at hand; the file that the set-up names is not read.
    ///
    /// # Errors
    /// As [`SetupFile::gauge_setup`]; a pulse that the core refuses.
    pub fn gauge_with_pulse<'w>(
        &self,
        workspace: Workspace<'w>,
        pulse: Option<&[f32]>,
    ) -> Result<Gauge<'w>, InputError> {
        let mut gauge = Gauge::new(self.gauge_setup()?, workspace).map_err(|error| self.locate(error))?;
        if let Some(pulse) = pulse {
            gauge
                .learn_pulse_of_quality(pulse, self.keys.pulse_quality())
                .map_err(|error| self.locate(error))?;
        }
        Ok(gauge)
    }
}

/// Checksum of a reference pulse: FNV-1a, 64 bits, over its float32 samples in little-endian order
/// (Fowler, Noll, Vo; the constants are those of draft-eastlake-fnv). It finds a pulse that was
/// exchanged or changed; it is no protection against forgery.
#[must_use]
pub fn checksum(pulse: &[f32]) -> String {
    let mut hash = 0xcbf2_9ce4_8422_2325u64;
    for byte in pulse.iter().flat_map(|value| value.to_le_bytes()) {
        hash = (hash ^ u64::from(byte)).wrapping_mul(0x0000_0100_0000_01b3);
    }
    format!("fnv1a64:{hash:016x}")
}

#[cfg(test)]
mod tests;
