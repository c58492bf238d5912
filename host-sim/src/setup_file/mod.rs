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
//! * A zero belongs to the reference pulse it was learned with: if the file names the pulse's checksum,
//!   another pulse is an error.
//! * Unknown keys are refused; every key is described in [`keys::KEYS`] and by `halfpulse read --help`.
//!   Keys that later versions add keep version 1 and have defaults.

mod document;
pub mod keys;
mod write;

use crate::input_error::InputError;
use crate::record_file::{CodeKind, Coding, npy};
use document::{Document, Place};
use halfpulse::{
    CalibratedRange, Coating, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, ProbeFace, ProbeKind,
    Seconds, SetupError, Span, Window, Workspace, Zero,
};
use std::path::{Path, PathBuf};

const CODES: &[(&str, CodeKind)] = &[("signed", CodeKind::Signed), ("offset-binary", CodeKind::OffsetBinary)];
const KINDS: &[(&str, ProbeKind)] = &[
    ("contact", ProbeKind::Contact),
    ("delay-line", ProbeKind::DelayLine),
    ("dual-element", ProbeKind::DualElement),
];
const FACES: &[(&str, ProbeFace)] = &[("hard", ProbeFace::Hard), ("plastic", ProbeFace::Plastic)];
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

/// `[record]`: what the converter's numbers mean.
#[derive(Clone, Debug, PartialEq)]
pub struct RecordKeys {
    /// Samples per microsecond.
    pub sample_rate_mhz: f64,
    /// Time of the first sample after the trigger; `None`: what the record's file says, else 0.
    pub first_sample_us: Option<f64>,
    /// The converter's bits.
    pub bits: Option<u8>,
    /// How codes stand for voltages.
    pub codes: CodeKind,
    /// Full scale of floats.
    pub full_scale: Option<f64>,
}

/// `[probe]`.
#[derive(Clone, Debug, PartialEq)]
pub struct ProbeKeys {
    /// How it meets the part.
    pub kind: ProbeKind,
    /// Middle of the -6 dB limits.
    pub centre_frequency_mhz: f64,
    /// -6 dB width over the centre frequency.
    pub relative_bandwidth_percent: f64,
    /// Diameter of the element, if known.
    pub element_diameter_mm: Option<f64>,
    /// What touches the couplant; `None`: by kind.
    pub face: Option<ProbeFace>,
    /// Uncertain couplant film.
    pub couplant_film_um: f64,
    /// File of the learned pulse, relative to the set-up file.
    pub reference_pulse: Option<String>,
}

/// `[material]`.
#[derive(Clone, Debug, PartialEq)]
pub struct MaterialKeys {
    /// Its name, only shown.
    pub name: Option<String>,
    /// Velocity of longitudinal waves.
    pub velocity_m_s: f64,
    /// Its standard uncertainty.
    pub velocity_standard_uncertainty_m_s: f64,
}

/// `[zero]`.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct ZeroKeys {
    /// Where the part's front surface lies.
    pub offset_ns: f64,
    /// Its standard uncertainty, if stated.
    pub standard_uncertainty_ns: Option<f64>,
    /// Checksum of the pulse that it was learned with.
    pub reference_pulse_checksum: Option<String>,
}

/// `[measure]`.
#[derive(Clone, Debug, PartialEq)]
pub struct MeasureKeys {
    /// Between which events the thickness is read.
    pub span: Span,
    /// Start of the window.
    pub from_us: f64,
    /// End of the window; `None`: the record's end.
    pub to_us: Option<f64>,
    /// k.
    pub coverage_factor: f64,
}

/// `[calibration]`: what calibrate has found out.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct CalibrationKeys {
    /// Correlation of the errors of velocity and zero.
    pub velocity_zero_correlation: Option<f64>,
    /// Thinnest thickness covered, with the next.
    pub from_mm: Option<f64>,
    /// Thickest thickness covered.
    pub to_mm: Option<f64>,
    /// The blocks, only shown.
    pub blocks_mm: Vec<f64>,
    /// Their temperature, only shown.
    pub temperature_c: Option<f64>,
    /// The day, only shown.
    pub date: Option<String>,
}

/// Everything that a set-up file says.
#[derive(Clone, Debug, PartialEq)]
pub struct SetupKeys {
    /// `[record]`
    pub record: RecordKeys,
    /// `[probe]`
    pub probe: ProbeKeys,
    /// `[material]`
    pub material: MaterialKeys,
    /// `[coating] velocity_m_s`, if the table is there.
    pub coating_velocity_m_s: Option<f64>,
    /// `[zero]`
    pub zero: ZeroKeys,
    /// `[measure]`
    pub measure: MeasureKeys,
    /// `[calibration]`
    pub calibration: Option<CalibrationKeys>,
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

    /// Where a set-up error of the core stands in the file.
    #[must_use]
    pub fn locate(&self, error: SetupError) -> InputError {
        let (table, name) = match error {
            SetupError::SampleRate | SetupError::SampleRateBelowBand => ("record", "sample_rate_mhz"),
            SetupError::CentreFrequency => ("probe", "centre_frequency_mhz"),
            SetupError::RelativeBandwidth => ("probe", "relative_bandwidth_percent"),
            SetupError::ElementDiameter => ("probe", "element_diameter_mm"),
            SetupError::CouplantFilm => ("probe", "couplant_film_um"),
            SetupError::Velocity => ("material", "velocity_m_s"),
            SetupError::VelocityUncertainty => ("material", "velocity_standard_uncertainty_m_s"),
            SetupError::ZeroOffset => ("zero", "offset_ns"),
            SetupError::ZeroUncertainty => ("zero", "standard_uncertainty_ns"),
            SetupError::ZeroCorrelation => ("calibration", "velocity_zero_correlation"),
            SetupError::Window => ("measure", "from_us"),
            SetupError::CoverageFactor => ("measure", "coverage_factor"),
            SetupError::CoatingVelocity => ("coating", "velocity_m_s"),
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
            gauge.learn_pulse(pulse).map_err(|error| self.locate(error))?;
        }
        Ok(gauge)
    }
}

impl SetupKeys {
    fn from_document(document: &Document<'_>) -> Result<Self, InputError> {
        let needed_word = |table, name| document.missing(table, name);
        Ok(Self {
            record: RecordKeys {
                sample_rate_mhz: document.needed_number("record", "sample_rate_mhz")?,
                first_sample_us: document.number("record", "first_sample_us")?,
                bits: document.small_integer("record", "bits")?,
                codes: document.word("record", "codes", CODES)?.unwrap_or_default(),
                full_scale: document.number("record", "full_scale")?,
            },
            probe: ProbeKeys {
                kind: document
                    .word("probe", "kind", KINDS)?
                    .ok_or_else(|| needed_word("probe", "kind"))?,
                centre_frequency_mhz: document.needed_number("probe", "centre_frequency_mhz")?,
                relative_bandwidth_percent: document.needed_number("probe", "relative_bandwidth_percent")?,
                element_diameter_mm: document.number("probe", "element_diameter_mm")?,
                face: document.word("probe", "face", FACES)?,
                couplant_film_um: document.number("probe", "couplant_film_um")?.unwrap_or(2.0),
                reference_pulse: document.text("probe", "reference_pulse")?,
            },
            material: MaterialKeys {
                name: document.text("material", "name")?,
                velocity_m_s: document.needed_number("material", "velocity_m_s")?,
                velocity_standard_uncertainty_m_s: document
                    .needed_number("material", "velocity_standard_uncertainty_m_s")?,
            },
            coating_velocity_m_s: if document.has_table("coating") {
                Some(document.needed_number("coating", "velocity_m_s")?)
            } else {
                None
            },
            zero: ZeroKeys {
                offset_ns: document.number("zero", "offset_ns")?.unwrap_or(0.0),
                standard_uncertainty_ns: document.number("zero", "standard_uncertainty_ns")?,
                reference_pulse_checksum: document.text("zero", "reference_pulse_checksum")?,
            },
            measure: MeasureKeys {
                span: document
                    .word("measure", "span", SPANS)?
                    .ok_or_else(|| needed_word("measure", "span"))?,
                from_us: document.needed_number("measure", "from_us")?,
                to_us: document.number("measure", "to_us")?,
                coverage_factor: document.number("measure", "coverage_factor")?.unwrap_or(2.0),
            },
            calibration: if document.has_table("calibration") {
                Some(CalibrationKeys {
                    velocity_zero_correlation: document.number("calibration", "velocity_zero_correlation")?,
                    from_mm: document.number("calibration", "from_mm")?,
                    to_mm: document.number("calibration", "to_mm")?,
                    blocks_mm: document.numbers("calibration", "blocks_mm")?,
                    temperature_c: document.number("calibration", "temperature_c")?,
                    date: document.text("calibration", "date")?,
                })
            } else {
                None
            },
        })
    }

    /// The core's set-up, unchecked.
    fn to_gauge_setup(&self) -> GaugeSetup {
        let centre = Hertz::from_mhz(self.probe.centre_frequency_mhz as f32);
        let bandwidth = (self.probe.relative_bandwidth_percent / 100.0) as f32;
        let mut probe = match self.probe.kind {
            ProbeKind::Contact => Probe::contact(centre, bandwidth),
            ProbeKind::DelayLine => Probe::delay_line(centre, bandwidth),
            ProbeKind::DualElement => Probe::dual_element(centre, bandwidth),
        };
        probe.element_diameter = self.probe.element_diameter_mm.map(|mm| Metres::from_mm(mm as f32));
        probe.face = self.probe.face.unwrap_or(probe.face);
        probe.couplant_film = Metres::new((self.probe.couplant_film_um * 1e-6) as f32);
        let calibration = self.calibration.as_ref();
        // An offset without a stated uncertainty: an unknown one where it only serves to check (a second
        // of uncertainty contradicts nothing), an exact one between two echoes of the same record.
        let unstated = match self.measure.span {
            Span::InterfaceToBackWall => 0.0,
            _ => 1e9,
        };
        GaugeSetup {
            sample_rate: Hertz::from_mhz(self.record.sample_rate_mhz as f32),
            probe,
            material: Material::new(
                MetresPerSecond::new(self.material.velocity_m_s as f32),
                MetresPerSecond::new(self.material.velocity_standard_uncertainty_m_s as f32),
            ),
            zero: Zero {
                offset: Seconds::from_ns(self.zero.offset_ns as f32),
                standard_uncertainty: Seconds::from_ns(self.zero.standard_uncertainty_ns.unwrap_or(unstated) as f32),
                velocity_correlation: calibration.and_then(|c| c.velocity_zero_correlation).unwrap_or(0.0) as f32,
            },
            span: self.measure.span,
            window: Window {
                from: Seconds::from_us(self.measure.from_us as f32),
                // A second: longer than any record.
                to: Seconds::from_us(self.measure.to_us.unwrap_or(1e6) as f32),
            },
            coverage_factor: self.measure.coverage_factor as f32,
            coating: self.coating_velocity_m_s.map(|velocity| Coating {
                velocity: MetresPerSecond::new(velocity as f32),
            }),
            calibrated: calibration.and_then(|c| {
                Some(CalibratedRange {
                    from: Metres::from_mm(c.from_mm? as f32),
                    to: Metres::from_mm(c.to_mm? as f32),
                })
            }),
        }
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
