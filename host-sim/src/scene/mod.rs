//! A scene: probe, part, receiver and converter, as a file or built in code.
//!
//! One set of structures serves both: their fields are the keys of the scene file (TOML), units in the
//! names. [`Scene::check`] judges every value; [`mod@file`] adds the line in which a wrong one stands.
//! Times are after the transmission trigger.

pub mod file;
pub mod part;
mod check;
mod check_part;
mod stack;
mod receiver;

use crate::transducer::Pulse;
pub use part::{Couplant, DualElement, Grain, Lamination, Pit, Surface, Temperature};
use serde::{Deserialize, Serialize};
use std::fmt;

pub use receiver::{
    Bursts, ConverterErrors, DropOuts, EquivalentTime, Hum, Interference, Receiver, Spikes, Timing, Tone,
};

/// A scene. `version` is 1; keys that are added later have defaults and keep it.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Scene {
    /// Version of the format: 1.
    pub version: u32,
    /// The receiver's gain, the converter and its clock.
    pub record: Recording,
    /// The probe and its pulse.
    pub probe: Probe,
    /// Delay line or water path: needed by, and only for, a probe of the kind `delay-line`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub delay_line: Option<DelayLine>,
    /// Distance of the elements: needed by, and only for, a probe of the kind `dual-element`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub dual_element: Option<DualElement>,
    /// Couplant film between probe and part; a plain border if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub couplant: Option<Couplant>,
    /// The part's front: rough, curved; smooth and flat if left out. Needs a `couplant` to fill it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub surface: Option<Surface>,
    /// A coating on the part's front, in contact with the probe.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub coating: Option<Layer>,
    /// The wall to be measured.
    pub wall: Layer,
    /// What lies behind the wall: air if left out.
    #[serde(default)]
    pub back: Back,
    /// A pit in the back wall under a part of the beam; none if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub pit: Option<Pit>,
    /// A lamination in the wall under a part of the beam; none if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub lamination: Option<Lamination>,
    /// Echoes of the wall's grains; none if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub grain: Option<Grain>,
    /// How warm all is; 20 degrees Celsius if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub temperature: Option<Temperature>,
    /// Which echoes there are.
    #[serde(default)]
    pub echoes: Echoes,
    /// What the transmission pulse leaves in the receiver; none if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub transmission_pulse: Option<TransmissionPulse>,
    /// White noise of the receiver; none if left out.
    #[serde(default)]
    pub noise: Noise,
    /// Gain steps, band limits and thermal noise of the receiver; ideal if left out, as in all that follows.
    #[serde(default, skip_serializing_if = "receiver::is_default")]
    pub receiver: Receiver,
    /// What reaches the converter from elsewhere.
    #[serde(default, skip_serializing_if = "receiver::is_default")]
    pub interference: Interference,
    /// Errors of clock and trigger.
    #[serde(default, skip_serializing_if = "receiver::is_default")]
    pub timing: Timing,
    /// Errors of the converter.
    #[serde(default, skip_serializing_if = "receiver::is_default")]
    pub converter: ConverterErrors,
    /// Many slow shots for one dense record.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub equivalent_time: Option<EquivalentTime>,
    /// Samples, blocks and shots that get lost.
    #[serde(default, skip_serializing_if = "receiver::is_default")]
    pub drop_outs: DropOuts,
}

/// Table `[record]`.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Recording {
    /// Samples per microsecond, 0.1 to 10000, at least twice the upper -6 dB frequency.
    pub sample_rate_mhz: f64,
    /// Samples of one record, 16 to 1048576.
    pub samples: usize,
    /// Time of the first sample, -1000 to 100000 us.
    #[serde(default)]
    pub first_sample_us: f64,
    /// Bits of the converter, 4 to 16; codes are signed.
    #[serde(default = "twelve")]
    pub bits: u8,
    /// Gain such that the first back-wall echo's envelope peaks at this share of full scale, above 0 to
    /// 100000 % (above 100 % it is clipped). 50 % if neither this nor `gain_db` is given.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub first_back_wall_percent: Option<f64>,
    /// Gain as such, -200 to 200 dB: with 0 dB a total reflection at the probe's face reaches full scale.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub gain_db: Option<f64>,
}

const fn twelve() -> u8 {
    12
}

/// How the probe meets the part.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum ProbeKind {
    /// The element sits on the part; its own face gives no echo.
    Contact,
    /// A delay line or a water path stands between; its end gives an interface echo.
    DelayLine,
    /// A transmitting and a receiving element side by side: the sound path is a V, bent under delay
    /// blocks if there is a `delay_line`. Their ends give no echo, but cross-talk may.
    DualElement,
}

/// Table `[probe]`.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Probe {
    /// `contact`, `delay-line` or `dual-element`.
    pub kind: ProbeKind,
    /// Frequency of the carrier, 0.05 to 200 MHz: the middle of the band.
    pub centre_frequency_mhz: f64,
    /// -6 dB width of the two-way spectrum over the centre frequency, 1 to 200 %: a Gaussian pulse.
    /// Either this, or attack and decay.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub relative_bandwidth_percent: Option<f64>,
    /// Rise of the envelope from 10 % to its maximum, 1 to 100000 ns.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub attack_ns: Option<f64>,
    /// Fall of the envelope from its maximum to 10 %, 1 to 100000 ns.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub decay_ns: Option<f64>,
    /// Phase of the carrier at the envelope's maximum, -360 to 360 degrees.
    #[serde(default)]
    pub phase_degrees: f64,
    /// Diameter of the round element, 0.1 to 200 mm; needed by `beam_diffraction`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub element_diameter_mm: Option<f64>,
    /// Whether the beam's spreading changes the echoes (weaker, and early for a correlator).
    #[serde(default)]
    pub beam_diffraction: bool,
    /// Delay of wear plate, cable and electronics, -100000 to 100000 ns: when sound that turned back at
    /// the contact face (or at the delay line's near end) would arrive.
    #[serde(default)]
    pub zero_offset_ns: f64,
    /// Impedance of a contact probe's face as the part meets it, with its couplant film, 0.0001 to 200
    /// MRayl. 6 if left out: a steel wall then loses 23 % of its echo at each return. Beside a table
    /// `couplant` it is the face's own (38.5 of a ceramic wear plate) and must be given.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub face_impedance_mrayl: Option<f64>,
}

/// Table `[delay_line]`: material, or velocity with density or impedance; length or delay.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct DelayLine {
    /// A material of the table, such as `polystyrene` or `water`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub material: Option<String>,
    /// Longitudinal velocity at the centre frequency, 100 to 30000 m/s.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub velocity_m_s: Option<f64>,
    /// Density, 0.1 to 30000 kg/m3.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub density_kg_m3: Option<f64>,
    /// Impedance, 0.0001 to 200 MRayl, instead of the density.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub impedance_mrayl: Option<f64>,
    /// Length, 0.01 to 2000 mm.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub length_mm: Option<f64>,
    /// Time there and back, 0.001 to 10000 us, instead of the length.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub delay_us: Option<f64>,
    /// Amplitude attenuation at the centre frequency, 0 to 100000 dB/m.
    #[serde(default)]
    pub attenuation_db_per_m: f64,
    /// Power of frequency with which it grows, above 0 and below 3.
    #[serde(default = "linear")]
    pub attenuation_exponent: f64,
    /// Pressure that its near end turns back, -100 to 100 %: multiples of its echo, each with all that
    /// follows it. 0, none, if left out.
    #[serde(default)]
    pub near_end_percent: f64,
    /// Change of the velocity near 20 degrees Celsius, -50 to 50 m/s per kelvin; the material's if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub velocity_slope_m_s_k: Option<f64>,
    /// Linear thermal expansion, 0 to 1000 millionths per kelvin; the material's if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub expansion_ppm_k: Option<f64>,
}

/// Tables `[coating]` and `[wall]`: material, or velocity with density or impedance.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Layer {
    /// A material of the table; `velocity_m_s` then overrides its velocity.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub material: Option<String>,
    /// Longitudinal velocity at the centre frequency, 100 to 30000 m/s.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub velocity_m_s: Option<f64>,
    /// Density, 0.1 to 30000 kg/m3.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub density_kg_m3: Option<f64>,
    /// Impedance, 0.0001 to 200 MRayl, instead of the density.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub impedance_mrayl: Option<f64>,
    /// Velocity of shear waves, 50 to 20000 m/s, below that of longitudinal ones; the material's if left
    /// out. Needed for mode-converted echoes only.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub shear_velocity_m_s: Option<f64>,
    /// Thickness at 20 degrees Celsius, 0.001 to 10000 mm.
    pub thickness_mm: f64,
    /// Amplitude attenuation at the centre frequency, 0 to 100000 dB/m.
    #[serde(default)]
    pub attenuation_db_per_m: f64,
    /// Power of frequency with which it grows, above 0 and below 3: about 1 for plastics, 2 to 4 (here
    /// up to 3) for grain.
    #[serde(default = "linear")]
    pub attenuation_exponent: f64,
    /// Change of the velocity near 20 degrees Celsius, -50 to 50 m/s per kelvin; the material's if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub velocity_slope_m_s_k: Option<f64>,
    /// Linear thermal expansion, 0 to 1000 millionths per kelvin; the material's if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub expansion_ppm_k: Option<f64>,
}

const fn linear() -> f64 {
    1.0
}

/// Table `[back]`: a material or an impedance; its shape.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Back {
    /// A material of the table; `air` if nothing is given.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub material: Option<String>,
    /// Impedance, 0.0001 to 200 MRayl.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub impedance_mrayl: Option<f64>,
    /// Roughness of the back wall (and of a pit's floor), rms, 0 to 1000 um.
    #[serde(default)]
    pub roughness_um: f64,
    /// Distance over which its heights are alike, 0.01 to 100 mm. 1 if left out. Only the truth's least
    /// wall depends on it.
    #[serde(default = "one_millimetre")]
    pub roughness_length_mm: f64,
    /// Angle of the back wall against the front, 0 to 10 degrees.
    #[serde(default)]
    pub tilt_degrees: f64,
}

impl Default for Back {
    fn default() -> Self {
        Self {
            material: None,
            impedance_mrayl: None,
            roughness_um: 0.0,
            roughness_length_mm: one_millimetre(),
            tilt_degrees: 0.0,
        }
    }
}

const fn one_millimetre() -> f64 {
    1.0
}

/// Table `[echoes]`: for trains that are cleaner than nature.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Echoes {
    /// Only this many back-wall echoes, 1 to 10000; all that the record has time for if left out.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub back_walls: Option<u32>,
    /// Amplitude of each back-wall echo over the one before, above 0 to 1, instead of what the borders
    /// give. Not together with attenuation of the wall.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub decay: Option<f64>,
    /// Amplitude of an echo that returns one way as a shear wave, over that of the first back wall, 0 to
    /// 100 %. It arrives (1 + cL / cS) / 2 times as long after the surface as the back wall.
    #[serde(default)]
    pub mode_converted_percent: f64,
}

/// Table `[transmission_pulse]`: a ringing at the centre frequency and a slow recovery of the baseline,
/// both falling exponentially from the trigger on.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct TransmissionPulse {
    /// Height of the ringing at the trigger over full scale, 0 to 1000000 % (above 100 % it is clipped).
    pub amplitude_percent: f64,
    /// Time in which the ringing falls to 1/e, 1 to 100000 ns.
    pub decay_ns: f64,
    /// Height of the baseline's offset at the trigger over full scale, -1000000 to 1000000 %.
    #[serde(default)]
    pub recovery_percent: f64,
    /// Time in which the offset falls to 1/e, 1 to 1000000 ns.
    #[serde(default = "microsecond")]
    pub recovery_ns: f64,
}

const fn microsecond() -> f64 {
    1000.0
}

/// Table `[noise]`: one of the two, or none.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Noise {
    /// Peak of the first back-wall echo's envelope over the noise rms per sample, -60 to 200 dB.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub snr_db: Option<f64>,
    /// Noise rms per sample in steps of the converter, 0 to 100000.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub rms_steps: Option<f64>,
}

/// A value that cannot be used.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct SceneError {
    /// The key with its table, such as `wall.thickness_mm`.
    pub field: String,
    /// What is wrong.
    pub what: String,
    /// What to do about it.
    pub remedy: String,
}

impl fmt::Display for SceneError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}: {}; {}", self.field, self.what, self.remedy)
    }
}

impl std::error::Error for SceneError {}

/// Velocity in m/s and impedance in rayl.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Medium {
    /// Longitudinal velocity in m/s.
    pub velocity: f64,
    /// Impedance in rayl.
    pub impedance: f64,
}

impl Scene {
    /// A contact probe on a bare plate of a material of the table: 50 MS/s, 12 bits, 2048 samples, a
    /// Gaussian pulse, no noise. Change the fields from there.
    #[must_use]
    pub fn contact(centre_frequency_mhz: f64, relative_bandwidth_percent: f64, material: &str, mm: f64) -> Self {
        Self {
            version: 1,
            record: Recording {
                sample_rate_mhz: 50.0,
                samples: 2048,
                first_sample_us: 0.0,
                bits: 12,
                first_back_wall_percent: None,
                gain_db: None,
            },
            probe: Probe {
                kind: ProbeKind::Contact,
                centre_frequency_mhz,
                relative_bandwidth_percent: Some(relative_bandwidth_percent),
                attack_ns: None,
                decay_ns: None,
                phase_degrees: 0.0,
                element_diameter_mm: None,
                beam_diffraction: false,
                zero_offset_ns: 0.0,
                face_impedance_mrayl: None,
            },
            delay_line: None,
            dual_element: None,
            couplant: None,
            surface: None,
            coating: None,
            wall: Layer {
                material: Some(material.into()),
                thickness_mm: mm,
                attenuation_exponent: 1.0,
                ..Layer::default()
            },
            back: Back::default(),
            pit: None,
            lamination: None,
            grain: None,
            temperature: None,
            echoes: Echoes::default(),
            transmission_pulse: None,
            noise: Noise::default(),
            receiver: Receiver::default(),
            interference: Interference::default(),
            timing: Timing::default(),
            converter: ConverterErrors::default(),
            equivalent_time: None,
            drop_outs: DropOuts::default(),
        }
    }

    /// The probe's pulse. Meaningful for a scene that passes [`Scene::check`].
    #[must_use]
    pub fn pulse(&self) -> Pulse {
        let probe = &self.probe;
        let (centre, phase) = (probe.centre_frequency_mhz * 1e6, probe.phase_degrees.to_radians());
        match (probe.attack_ns, probe.decay_ns) {
            (Some(attack), Some(decay)) => Pulse::attack_decay(centre, attack * 1e-9, decay * 1e-9, phase),
            _ => Pulse::gaussian(centre, probe.relative_bandwidth_percent.unwrap_or(60.0) / 100.0, phase),
        }
    }
}

#[cfg(test)]
mod part_tests;
