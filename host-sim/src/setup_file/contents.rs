//! What a set-up file says, table by table: from the document, and to what the core takes.

use super::document::Document;
use super::{CODES, FACES, KINDS, SIGNS, SPANS};
use crate::input_error::InputError;
use crate::record_file::CodeKind;
use halfpulse::echo::pulse::PulseQuality;
use halfpulse::{
    CalibratedRange, Celsius, Coating, DelayLine, EchoSign, ElementSeparation, GaugeSetup, Guard, Hertz, Limits,
    Material, Metres, MetresPerSecond, Probe, ProbeFace, ProbeKind, Seconds, Span, Surface, VelocityTemperature,
    Window, Zero,
};

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
    /// Jitter of the pulser against the sample clock, rms; `None`: none.
    pub trigger_jitter_ns: Option<f64>,
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
    /// Standard uncertainty of the diameter that acts.
    pub element_diameter_uncertainty_percent: f64,
    /// What touches the couplant; `None`: by kind.
    pub face: Option<ProbeFace>,
    /// Uncertain couplant film.
    pub couplant_film_um: f64,
    /// Standard uncertainty of the phase between echoes; `None`: by face.
    pub echo_phase_degrees: Option<f64>,
    /// Sign of the back-wall echoes relative to the reference pulse.
    pub back_wall_sign: Option<EchoSign>,
    /// Sign of the interface echo.
    pub interface_sign: Option<EchoSign>,
    /// File of the learned pulse, relative to the set-up file.
    pub reference_pulse: Option<String>,
    /// The learned pulse's own noise.
    pub reference_pulse_noise_percent: Option<f64>,
    /// How far other shots' echoes differ from it.
    pub reference_pulse_mismatch_percent: Option<f64>,
    /// The block that it was learned on.
    pub reference_pulse_learned_on_mm: Option<f64>,
}

/// `[delay_line]`: also the delay blocks of a dual-element probe.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DelayLineKeys {
    /// Length, once.
    pub length_mm: f64,
    /// Velocity of longitudinal waves.
    pub velocity_m_s: f64,
}

/// `[dual_element]`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DualElementKeys {
    /// Distance of the elements' centres.
    pub separation_mm: f64,
    /// Its standard uncertainty; `None`: 3 %.
    pub separation_standard_uncertainty_mm: Option<f64>,
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
    /// How far the part's may differ from the blocks'.
    pub part_velocity_standard_uncertainty_m_s: Option<f64>,
    /// How it changes with temperature; `None` leaves temperature out.
    pub velocity_temperature_coefficient_m_s_k: Option<f64>,
    /// The coefficient's standard uncertainty.
    pub velocity_temperature_coefficient_standard_uncertainty_m_s_k: Option<f64>,
    /// The temperature that it holds at.
    pub velocity_temperature_c: Option<f64>,
}

/// `[part]`: what is known of the part, besides its material.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct PartKeys {
    /// The back wall's root mean square roughness.
    pub roughness_um: Option<f64>,
    /// Its temperature.
    pub temperature_c: Option<f64>,
    /// The temperature's standard uncertainty.
    pub temperature_standard_uncertainty_k: Option<f64>,
    /// Radius of a pipe's outside under the probe.
    pub outer_radius_mm: Option<f64>,
    /// Radius of a pipe's inside under the probe.
    pub inner_radius_mm: Option<f64>,
}

/// `[coating]`.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct CoatingKeys {
    /// Velocity of longitudinal waves, if known.
    pub velocity_m_s: Option<f64>,
    /// Its standard uncertainty; `None`: 5 %.
    pub velocity_standard_uncertainty_m_s: Option<f64>,
}

/// `[limits]`: between which thicknesses the wall shall be.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct LimitsKeys {
    /// Not thinner.
    pub minimum_mm: f64,
    /// Below this somebody wants to know.
    pub warning_mm: Option<f64>,
    /// Not thicker.
    pub maximum_mm: Option<f64>,
    /// Guard band in expanded uncertainties.
    pub guard_band_factor: Option<f64>,
    /// Or by the probability of a wrong decision.
    pub wrong_decision_probability: Option<f64>,
}

/// `[zero]`.
#[derive(Clone, Debug, PartialEq, Default)]
pub struct ZeroKeys {
    /// Where the part's front surface lies.
    pub offset_ns: f64,
    /// Its standard uncertainty, if stated.
    pub standard_uncertainty_ns: Option<f64>,
    /// Block whose beam spreading the offset holds, if known; 0: none.
    pub learned_on_mm: Option<f64>,
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
    /// File of the uncoupled probe's record, relative to the set-up file.
    pub uncoupled_record: Option<String>,
    /// From when on echoes are looked for once it has been taken off.
    pub uncoupled_from_us: Option<f64>,
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
    /// `[delay_line]`
    pub delay_line: Option<DelayLineKeys>,
    /// `[dual_element]`
    pub dual_element: Option<DualElementKeys>,
    /// `[material]`
    pub material: MaterialKeys,
    /// `[coating]`
    pub coating: Option<CoatingKeys>,
    /// `[zero]`
    pub zero: ZeroKeys,
    /// `[part]`
    pub part: PartKeys,
    /// `[measure]`
    pub measure: MeasureKeys,
    /// `[limits]`
    pub limits: Option<LimitsKeys>,
    /// `[calibration]`
    pub calibration: Option<CalibrationKeys>,
}

impl SetupKeys {
    pub(super) fn from_document(document: &Document<'_>) -> Result<Self, InputError> {
        let needed_word = |table, name| document.missing(table, name);
        Ok(Self {
            record: RecordKeys {
                sample_rate_mhz: document.needed_number("record", "sample_rate_mhz")?,
                first_sample_us: document.number("record", "first_sample_us")?,
                bits: document.small_integer("record", "bits")?,
                codes: document.word("record", "codes", CODES)?.unwrap_or_default(),
                full_scale: document.number("record", "full_scale")?,
                trigger_jitter_ns: document.number("record", "trigger_jitter_ns")?,
            },
            probe: ProbeKeys {
                kind: document
                    .word("probe", "kind", KINDS)?
                    .ok_or_else(|| needed_word("probe", "kind"))?,
                centre_frequency_mhz: document.needed_number("probe", "centre_frequency_mhz")?,
                relative_bandwidth_percent: document.needed_number("probe", "relative_bandwidth_percent")?,
                element_diameter_mm: document.number("probe", "element_diameter_mm")?,
                element_diameter_uncertainty_percent: document
                    .number("probe", "element_diameter_uncertainty_percent")?
                    .unwrap_or(7.0),
                face: document.word("probe", "face", FACES)?,
                couplant_film_um: document.number("probe", "couplant_film_um")?.unwrap_or(2.0),
                echo_phase_degrees: document.number("probe", "echo_phase_degrees")?,
                back_wall_sign: document.word("probe", "back_wall_sign", SIGNS)?,
                interface_sign: document.word("probe", "interface_sign", SIGNS)?,
                reference_pulse: document.text("probe", "reference_pulse")?,
                reference_pulse_noise_percent: document.number("probe", "reference_pulse_noise_percent")?,
                reference_pulse_mismatch_percent: document.number("probe", "reference_pulse_mismatch_percent")?,
                reference_pulse_learned_on_mm: document.number("probe", "reference_pulse_learned_on_mm")?,
            },
            delay_line: if document.has_table("delay_line") {
                Some(DelayLineKeys {
                    length_mm: document.needed_number("delay_line", "length_mm")?,
                    velocity_m_s: document.needed_number("delay_line", "velocity_m_s")?,
                })
            } else {
                None
            },
            dual_element: if document.has_table("dual_element") {
                Some(DualElementKeys {
                    separation_mm: document.needed_number("dual_element", "separation_mm")?,
                    separation_standard_uncertainty_mm: document
                        .number("dual_element", "separation_standard_uncertainty_mm")?,
                })
            } else {
                None
            },
            material: MaterialKeys {
                name: document.text("material", "name")?,
                velocity_m_s: document.needed_number("material", "velocity_m_s")?,
                velocity_standard_uncertainty_m_s: document
                    .needed_number("material", "velocity_standard_uncertainty_m_s")?,
                part_velocity_standard_uncertainty_m_s: document
                    .number("material", "part_velocity_standard_uncertainty_m_s")?,
                velocity_temperature_coefficient_m_s_k: document
                    .number("material", "velocity_temperature_coefficient_m_s_k")?,
                velocity_temperature_coefficient_standard_uncertainty_m_s_k: document.number(
                    "material",
                    "velocity_temperature_coefficient_standard_uncertainty_m_s_k",
                )?,
                velocity_temperature_c: document.number("material", "velocity_temperature_c")?,
            },
            part: PartKeys {
                roughness_um: document.number("part", "roughness_um")?,
                temperature_c: document.number("part", "temperature_c")?,
                temperature_standard_uncertainty_k: document.number("part", "temperature_standard_uncertainty_k")?,
                outer_radius_mm: document.number("part", "outer_radius_mm")?,
                inner_radius_mm: document.number("part", "inner_radius_mm")?,
            },
            coating: if document.has_table("coating") {
                Some(CoatingKeys {
                    velocity_m_s: document.number("coating", "velocity_m_s")?,
                    velocity_standard_uncertainty_m_s: document
                        .number("coating", "velocity_standard_uncertainty_m_s")?,
                })
            } else {
                None
            },
            zero: ZeroKeys {
                offset_ns: document.number("zero", "offset_ns")?.unwrap_or(0.0),
                standard_uncertainty_ns: document.number("zero", "standard_uncertainty_ns")?,
                learned_on_mm: document.number("zero", "learned_on_mm")?,
                reference_pulse_checksum: document.text("zero", "reference_pulse_checksum")?,
            },
            measure: MeasureKeys {
                span: document
                    .word("measure", "span", SPANS)?
                    .ok_or_else(|| needed_word("measure", "span"))?,
                from_us: document.needed_number("measure", "from_us")?,
                to_us: document.number("measure", "to_us")?,
                uncoupled_record: document.text("measure", "uncoupled_record")?,
                uncoupled_from_us: document.number("measure", "uncoupled_from_us")?,
                coverage_factor: document.number("measure", "coverage_factor")?.unwrap_or(2.0),
            },
            limits: if document.has_table("limits") {
                Some(LimitsKeys {
                    minimum_mm: document.needed_number("limits", "minimum_mm")?,
                    warning_mm: document.number("limits", "warning_mm")?,
                    maximum_mm: document.number("limits", "maximum_mm")?,
                    guard_band_factor: document.number("limits", "guard_band_factor")?,
                    wrong_decision_probability: document.number("limits", "wrong_decision_probability")?,
                })
            } else {
                None
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

    /// The part's material, unchecked.
    fn to_material(&self) -> Material {
        let keys = &self.material;
        let velocity = |m_s: f64| MetresPerSecond::new(m_s as f32);
        let mut material = Material::new(
            velocity(keys.velocity_m_s),
            velocity(keys.velocity_standard_uncertainty_m_s),
        );
        material.part_velocity_standard_uncertainty =
            velocity(keys.part_velocity_standard_uncertainty_m_s.unwrap_or(0.0));
        if let Some(coefficient) = keys.velocity_temperature_coefficient_m_s_k {
            let reference = keys.velocity_temperature_c.unwrap_or(20.0);
            let mut follows = VelocityTemperature::new(coefficient as f32, Celsius::new(reference as f32));
            if let Some(uncertainty) = keys.velocity_temperature_coefficient_standard_uncertainty_m_s_k {
                follows.coefficient_standard_uncertainty = uncertainty as f32;
            }
            if let Some(temperature) = self.part.temperature_c {
                let uncertainty = self.part.temperature_standard_uncertainty_k.unwrap_or(1.0);
                follows = follows.with_part(Celsius::new(temperature as f32), Celsius::new(uncertainty as f32));
            }
            material.temperature = Some(follows);
        }
        material
    }

    /// The shape of the part under the probe, unchecked.
    fn to_surface(&self) -> Surface {
        let radius = |mm: f64| Metres::from_mm(mm as f32);
        match (self.part.outer_radius_mm, self.part.inner_radius_mm) {
            (Some(mm), _) => Surface::Convex(radius(mm)),
            (None, Some(mm)) => Surface::Concave(radius(mm)),
            (None, None) => Surface::Flat,
        }
    }

    /// The learned pulse's quality, unchecked.
    pub(super) fn pulse_quality(&self) -> PulseQuality {
        let share = |percent: Option<f64>| percent.map_or(0.0, |percent| (percent / 100.0) as f32);
        PulseQuality {
            noise: share(self.probe.reference_pulse_noise_percent),
            mismatch: share(self.probe.reference_pulse_mismatch_percent),
            learned_on: (self.probe.reference_pulse_learned_on_mm).map(|mm| Metres::from_mm(mm as f32)),
        }
    }

    /// The limits, unchecked; `None` without the table.
    pub(super) fn to_limits(&self) -> Option<Limits> {
        let keys = self.limits.as_ref()?;
        let thickness = |mm: f64| Metres::from_mm(mm as f32);
        Some(Limits {
            minimum: thickness(keys.minimum_mm),
            warning: keys.warning_mm.map(thickness),
            maximum: keys.maximum_mm.map(thickness),
            guard: match keys.wrong_decision_probability {
                Some(probability) => Guard::WrongDecision(probability as f32),
                None => Guard::Expanded(keys.guard_band_factor.unwrap_or(1.0) as f32),
            },
        })
    }

    /// The core's set-up, unchecked.
    pub(super) fn to_gauge_setup(&self) -> GaugeSetup {
        let centre = Hertz::from_mhz(self.probe.centre_frequency_mhz as f32);
        let bandwidth = (self.probe.relative_bandwidth_percent / 100.0) as f32;
        let mut probe = match self.probe.kind {
            ProbeKind::Contact => Probe::contact(centre, bandwidth),
            ProbeKind::DelayLine => Probe::delay_line(centre, bandwidth),
            ProbeKind::DualElement => Probe::dual_element(centre, bandwidth),
        };
        probe.element_diameter = self.probe.element_diameter_mm.map(|mm| Metres::from_mm(mm as f32));
        probe.face = self.probe.face.unwrap_or(probe.face);
        probe.element_diameter_uncertainty = (self.probe.element_diameter_uncertainty_percent / 100.0) as f32;
        probe.couplant_film = Metres::new((self.probe.couplant_film_um * 1e-6) as f32);
        probe.echo_phase_degrees = self.probe.echo_phase_degrees.map(|degrees| degrees as f32);
        probe.delay_line = self.delay_line.map(|line| DelayLine {
            length: Metres::from_mm(line.length_mm as f32),
            velocity: MetresPerSecond::new(line.velocity_m_s as f32),
        });
        probe.separation = self.dual_element.map(|dual| {
            let uncertainty = dual.separation_standard_uncertainty_mm;
            ElementSeparation::new(
                Metres::from_mm(dual.separation_mm as f32),
                Metres::from_mm(uncertainty.unwrap_or(0.03 * dual.separation_mm.abs()) as f32),
            )
        });
        probe.back_wall_sign = self.probe.back_wall_sign.unwrap_or_default();
        probe.interface_sign = self.probe.interface_sign.unwrap_or_default();
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
            material: self.to_material(),
            zero: Zero {
                offset: Seconds::from_ns(self.zero.offset_ns as f32),
                standard_uncertainty: Seconds::from_ns(self.zero.standard_uncertainty_ns.unwrap_or(unstated) as f32),
                velocity_correlation: calibration.and_then(|c| c.velocity_zero_correlation).unwrap_or(0.0) as f32,
                learned_on: self.zero.learned_on_mm.map(|mm| Metres::from_mm(mm as f32)),
            },
            span: self.measure.span,
            window: Window {
                from: Seconds::from_us(self.measure.from_us as f32),
                // A second: longer than any record.
                to: Seconds::from_us(self.measure.to_us.unwrap_or(1e6) as f32),
            },
            coverage_factor: self.measure.coverage_factor as f32,
            coating: self.coating.map(|coating| match coating.velocity_m_s {
                Some(velocity) => {
                    let uncertainty = coating
                        .velocity_standard_uncertainty_m_s
                        .unwrap_or(0.05 * velocity.abs());
                    Coating::new(
                        MetresPerSecond::new(velocity as f32),
                        MetresPerSecond::new(uncertainty as f32),
                    )
                }
                None => Coating::UNKNOWN,
            }),
            surface: self.to_surface(),
            roughness: Metres::new((self.part.roughness_um.unwrap_or(0.0) * 1e-6) as f32),
            calibrated: calibration.and_then(|c| {
                Some(CalibratedRange {
                    from: Metres::from_mm(c.from_mm? as f32),
                    to: Metres::from_mm(c.to_mm? as f32),
                })
            }),
            trigger_jitter: Seconds::from_ns(self.record.trigger_jitter_ns.unwrap_or(0.0) as f32),
        }
    }
}
