//! The receiver's part of a scene: gain, band, interference, timing, converter, equivalent time, drop-outs.
//!
//! Each table may be left out, and each key in it: then the receiver is ideal in that respect.

use super::check::{error, optional, within};
use super::{Scene, SceneError};
use serde::{Deserialize, Serialize};

/// Most continuous tones of one scene.
const MOST_TONES: usize = 16;
/// Most spikes that one record may be expected to hold.
const MOST_SPIKES: f64 = 10_000.0;

/// Table `[receiver]`: gain and band of the amplifier, and its own noise.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Receiver {
    /// Which board of a series this is, 0 to 4294967295. What is fixed on one board but differs between
    /// boards depends on it alone: errors of gain steps, of the converter and of pulser delays.
    pub specimen: u32,
    /// Distance of the gain's steps, 0 to 20 dB: the nearest to `record.gain_db` is taken. 0: no steps.
    pub gain_step_db: f64,
    /// Error of each step, rms, 0 to 6 dB; normal, never beyond three times this. It needs
    /// `gain_step_db`, and is without effect on `record.first_back_wall_percent`.
    pub gain_error_db: f64,
    /// After a change of gain, so many shots pass until the gain in force is within 1/e of the change of
    /// the one asked for, 0 to 1000. The receiver does not know of it. Only where gain changes from shot
    /// to shot, as on a device.
    pub gain_lag_shots: f64,
    /// -3 dB frequency of a Butterworth high-pass, 0.001 to 200 MHz; none if left out.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub high_pass_mhz: Option<f64>,
    /// Its order, 1 to 8.
    pub high_pass_order: u8,
    /// -3 dB frequency of a Butterworth low-pass, 0.001 to 1000 MHz; none if left out. Both limits act on
    /// echoes and thermal noise. Their delay at the centre frequency is part of `probe.zero_offset_ns`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub low_pass_mhz: Option<f64>,
    /// Its order, 1 to 8.
    pub low_pass_order: u8,
    /// Thermal noise in the receiver's band, rms referred to its input, 0 to 1000000 uV. It grows with
    /// the gain, unlike that of table `[noise]`, and is added to it.
    pub thermal_noise_uv: f64,
    /// Peak voltage at the input that a total reflection at the probe's face gives (and which gain 0 dB
    /// brings to full scale), 0.001 to 1000000 mV. 1000 if left out.
    pub total_reflection_mv: f64,
}

impl Default for Receiver {
    fn default() -> Self {
        Self {
            specimen: 0,
            gain_step_db: 0.0,
            gain_error_db: 0.0,
            gain_lag_shots: 0.0,
            high_pass_mhz: None,
            high_pass_order: 2,
            low_pass_mhz: None,
            low_pass_order: 2,
            thermal_noise_uv: 0.0,
            total_reflection_mv: 1000.0,
        }
    }
}

/// Table `[interference]`: what reaches the converter from elsewhere. Amplitudes are peaks over full scale, and
/// shapes those at the converter: gain and the band limits of table `[receiver]` do not act on them.
///
/// What is picked up behind the filter (by the converter's board, from its supply) is described as it is. What is picked up
/// before it (by the probe or its cable) has been filtered when it reaches the converter; state that: a tone, hum or the
/// carrier of a burst at frequency f is multiplied by 1 / sqrt(1 + (f / low)^2n) / sqrt(1 + (high / f)^2m) of the Butterworth
/// limits with orders n and m, and a spike is about as long as the low-pass rings, 0.4 / low.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Interference {
    /// Tables `[[interference.tones]]`, at most 16.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    pub tones: Vec<Tone>,
    /// Table `[interference.bursts]`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub bursts: Option<Bursts>,
    /// Table `[interference.spikes]`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub spikes: Option<Spikes>,
    /// Table `[interference.hum]`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub hum: Option<Hum>,
}

/// A continuous sine, its phase another one in each shot.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Tone {
    /// Frequency, 0.001 to 1000 MHz; above half the sample rate it is folded, as it would be.
    pub frequency_mhz: f64,
    /// Peak, 0 to 10000 %.
    pub amplitude_percent: f64,
}

/// Bursts that repeat, as of a switching supply.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Bursts {
    /// From burst to burst, 0.1 to 1000000 us.
    pub period_us: f64,
    /// Length of one, rising and falling as a squared sine, 0.01 us to the period.
    pub length_us: f64,
    /// Frequency inside it, 0.001 to 1000 MHz.
    pub frequency_mhz: f64,
    /// Peak, 0 to 10000 %.
    pub amplitude_percent: f64,
    /// When a burst begins after each trigger, 0 to 1000000 us: bursts that averaging does not remove. If
    /// left out they come at any time, another one in each shot.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub after_trigger_us: Option<f64>,
}

/// Spikes at random times (a Poisson process), of either sign.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Spikes {
    /// Mean number in a millisecond, 0 to 1000000; at most 10000 in a record.
    pub rate_per_ms: f64,
    /// Height, 0 to 10000 %.
    pub amplitude_percent: f64,
    /// Time in which a spike falls to 1/e, 0.1 to 100000 ns.
    pub decay_ns: f64,
}

/// A sine of the mains, its phase another one in each shot.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Hum {
    /// Frequency, 1 to 10000 Hz.
    #[serde(default = "fifty")]
    pub frequency_hz: f64,
    /// Peak, 0 to 10000 %.
    pub amplitude_percent: f64,
}

const fn fifty() -> f64 {
    50.0
}

/// Table `[timing]`: what the receiver believes of its clock and is not so.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Timing {
    /// By how much the sample clock is faster than the receiver says, -10000 to 10000 ppm: a fast clock
    /// reads thick.
    pub clock_error_ppm: f64,
    /// Pulser against sample clock, rms from shot to shot, 0 to 100 ns: all echoes of a record together.
    pub trigger_jitter_ns: f64,
    /// Each sample for itself, rms; 0 to what is 0.15 radians of the pulse's upper -6 dB frequency.
    pub aperture_jitter_ns: f64,
    /// The pulser fires at any time between two samples, and the receiver does not know when: all echoes
    /// are up to a period late, sample period / sqrt(12) rms.
    pub free_running: bool,
}

/// Table `[converter]`: how it differs from a ruler. Which codes are off is the specimen's.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct ConverterErrors {
    /// Peak of the smooth departure from the line through the end points, 0 to 1000 steps and an eighth
    /// of full scale.
    pub integral_nonlinearity_steps: f64,
    /// Error of a step's width, rms over the codes, 0 to 0.5 steps.
    pub differential_nonlinearity_steps: f64,
    /// What it gives without a signal, -10000 to 10000 steps.
    pub offset_steps: f64,
    /// Share of codes that never come, 0 to 50 %.
    pub missing_codes_percent: f64,
    /// Bits that are always set, 0 the lowest, of the code counted from the negative end of the range.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    pub bits_stuck_high: Vec<u8>,
    /// Bits that are never set.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    pub bits_stuck_low: Vec<u8>,
}

/// Table `[equivalent_time]`: a slow converter and a pulser that fires later from shot to shot.
/// `record.sample_rate_mhz` and `record.samples` are the slow converter's, of one shot.
#[derive(Clone, Debug, PartialEq, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct EquivalentTime {
    /// Shots that make one dense record, 1 to 64: shot n fires (n mod phases) / (phases x rate) later.
    /// Rate times phases must be twice the upper -6 dB frequency; the rate itself at least 1 MHz.
    pub phases: u8,
    /// Error of each delay, rms, 0 to 20 ns; the same in each round.
    #[serde(default)]
    pub delay_error_ns: f64,
    /// Offset of the converter in each phase, rms, 0 to 1000 steps; the same in each round.
    #[serde(default)]
    pub offset_steps: f64,
    /// Error of the gain in each phase, rms, 0 to 20 %; the same in each round.
    #[serde(default)]
    pub gain_error_percent: f64,
}

/// Table `[drop_outs]`: what gets lost between converter and memory.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct DropOuts {
    /// Samples that read 0, 0 to 1000000 per million.
    pub missing_per_million: f64,
    /// Blocks that hold what the block before holds, mean number in a record, 0 to 1000.
    pub repeated_per_record: f64,
    /// Blocks that are left out, what follows moving up and zeros filling the end, mean number in a
    /// record, 0 to 1000.
    pub skipped_per_record: f64,
    /// Samples of a block, 1 to 65536. 16 if left out.
    pub block_samples: usize,
    /// Shots in which the pulser does not fire, 0 to 100 %: a record of noise alone.
    pub lost_shots_percent: f64,
}

impl Default for DropOuts {
    fn default() -> Self {
        Self {
            missing_per_million: 0.0,
            repeated_per_record: 0.0,
            skipped_per_record: 0.0,
            block_samples: 16,
            lost_shots_percent: 0.0,
        }
    }
}

/// Whether a table says nothing that its defaults do not.
pub(super) fn is_default<T: Default + PartialEq>(table: &T) -> bool {
    *table == T::default()
}

impl Scene {
    /// Shots that make one record: 1 without equivalent-time sampling.
    #[must_use]
    pub fn phases(&self) -> u8 {
        self.equivalent_time.as_ref().map_or(1, |table| table.phases)
    }

    pub(super) fn check_receiver(&self) -> Result<(), SceneError> {
        self.receiver.check()?;
        let record = &self.record;
        let milliseconds = record.samples as f64 / record.sample_rate_mhz * 1e-3;
        self.interference.check(milliseconds)?;
        self.timing.check(self.pulse().upper_frequency())?;
        self.converter.check(record.bits)?;
        self.drop_outs.check()
    }
}

impl Receiver {
    fn check(&self) -> Result<(), SceneError> {
        within("receiver.gain_step_db", self.gain_step_db, 0.0, 20.0, "dB")?;
        within("receiver.gain_error_db", self.gain_error_db, 0.0, 6.0, "dB")?;
        if self.gain_error_db > 0.0 && self.gain_step_db == 0.0 {
            return Err(error(
                "receiver.gain_error_db",
                "has no steps to be the error of",
                "give gain_step_db too",
            ));
        }
        within("receiver.gain_lag_shots", self.gain_lag_shots, 0.0, 1000.0, "shots")?;
        optional("receiver.high_pass_mhz", self.high_pass_mhz, 0.001, 200.0, "MHz")?;
        optional("receiver.low_pass_mhz", self.low_pass_mhz, 0.001, 1000.0, "MHz")?;
        for (field, order) in [
            ("receiver.high_pass_order", self.high_pass_order),
            ("receiver.low_pass_order", self.low_pass_order),
        ] {
            within(field, f64::from(order), 1.0, 8.0, "")?;
        }
        if let (Some(low), Some(high)) = (self.high_pass_mhz, self.low_pass_mhz)
            && low >= high
        {
            return Err(error(
                "receiver.low_pass_mhz",
                format!("{high} is not above the high-pass of {low} MHz"),
                "widen the band",
            ));
        }
        within("receiver.thermal_noise_uv", self.thermal_noise_uv, 0.0, 1e6, "uV")?;
        within(
            "receiver.total_reflection_mv",
            self.total_reflection_mv,
            1e-3,
            1e6,
            "mV",
        )
    }
}

impl Interference {
    fn check(&self, milliseconds: f64) -> Result<(), SceneError> {
        let peak = |field: &str, percent: f64| within(field, percent, 0.0, 1e4, "%");
        if self.tones.len() > MOST_TONES {
            return Err(error(
                "interference.tones",
                format!("{} are too many", self.tones.len()),
                format!("give up to {MOST_TONES}"),
            ));
        }
        for (number, tone) in self.tones.iter().enumerate() {
            let field = |key: &str| format!("interference.tones.{number}.{key}");
            within(&field("frequency_mhz"), tone.frequency_mhz, 1e-3, 1e3, "MHz")?;
            peak(&field("amplitude_percent"), tone.amplitude_percent)?;
        }
        if let Some(bursts) = &self.bursts {
            let field = |key: &str| format!("interference.bursts.{key}");
            within(&field("period_us"), bursts.period_us, 0.1, 1e6, "us")?;
            within(&field("length_us"), bursts.length_us, 0.01, bursts.period_us, "us")?;
            within(&field("frequency_mhz"), bursts.frequency_mhz, 1e-3, 1e3, "MHz")?;
            peak(&field("amplitude_percent"), bursts.amplitude_percent)?;
            optional(&field("after_trigger_us"), bursts.after_trigger_us, 0.0, 1e6, "us")?;
        }
        if let Some(spikes) = &self.spikes {
            let field = |key: &str| format!("interference.spikes.{key}");
            within(&field("rate_per_ms"), spikes.rate_per_ms, 0.0, 1e6, "per ms")?;
            peak(&field("amplitude_percent"), spikes.amplitude_percent)?;
            within(&field("decay_ns"), spikes.decay_ns, 0.1, 1e5, "ns")?;
            if spikes.rate_per_ms * milliseconds > MOST_SPIKES {
                return Err(error(
                    field("rate_per_ms"),
                    format!("gives more than {MOST_SPIKES} spikes in a record"),
                    format!("give 0 to {:.0} per ms", (MOST_SPIKES / milliseconds).floor()),
                ));
            }
        }
        if let Some(hum) = &self.hum {
            within("interference.hum.frequency_hz", hum.frequency_hz, 1.0, 1e4, "Hz")?;
            peak("interference.hum.amplitude_percent", hum.amplitude_percent)?;
        }
        Ok(())
    }
}

impl Timing {
    fn check(&self, upper_frequency: f64) -> Result<(), SceneError> {
        within("timing.clock_error_ppm", self.clock_error_ppm, -1e4, 1e4, "ppm")?;
        within("timing.trigger_jitter_ns", self.trigger_jitter_ns, 0.0, 100.0, "ns")?;
        // The signal between the samples is made from its first three derivatives: beyond this the
        // fourth would be missed.
        let most = 0.15 / (std::f64::consts::TAU * upper_frequency) * 1e9;
        let most = (most * 1e3).floor() * 1e-3;
        within("timing.aperture_jitter_ns", self.aperture_jitter_ns, 0.0, most, "ns")
    }
}

impl ConverterErrors {
    fn check(&self, bits: u8) -> Result<(), SceneError> {
        let eighth = f64::from(1u32 << bits.clamp(4, 16)) / 16.0;
        let integral = self.integral_nonlinearity_steps;
        within(
            "converter.integral_nonlinearity_steps",
            integral,
            0.0,
            eighth.min(1000.0),
            "steps",
        )?;
        within(
            "converter.differential_nonlinearity_steps",
            self.differential_nonlinearity_steps,
            0.0,
            0.5,
            "steps",
        )?;
        within("converter.offset_steps", self.offset_steps, -1e4, 1e4, "steps")?;
        within(
            "converter.missing_codes_percent",
            self.missing_codes_percent,
            0.0,
            50.0,
            "%",
        )?;
        for (field, stuck) in [
            ("converter.bits_stuck_high", &self.bits_stuck_high),
            ("converter.bits_stuck_low", &self.bits_stuck_low),
        ] {
            for &bit in stuck {
                within(field, f64::from(bit), 0.0, f64::from(bits) - 1.0, "")?;
            }
        }
        if let Some(bit) = self
            .bits_stuck_high
            .iter()
            .find(|bit| self.bits_stuck_low.contains(bit))
        {
            return Err(error(
                "converter.bits_stuck_low",
                format!("bit {bit} is stuck high too"),
                "keep one of the two",
            ));
        }
        Ok(())
    }
}

impl EquivalentTime {
    pub(super) fn check(&self, base_rate_mhz: f64) -> Result<(), SceneError> {
        let field = |key: &str| format!("equivalent_time.{key}");
        within(&field("phases"), f64::from(self.phases), 1.0, 64.0, "")?;
        within(&field("delay_error_ns"), self.delay_error_ns, 0.0, 20.0, "ns")?;
        within(&field("offset_steps"), self.offset_steps, 0.0, 1000.0, "steps")?;
        within(&field("gain_error_percent"), self.gain_error_percent, 0.0, 20.0, "%")?;
        if base_rate_mhz < 1.0 {
            return Err(error(
                "record.sample_rate_mhz",
                format!("{base_rate_mhz} is too slow for equivalent-time sampling"),
                "give at least 1 MHz",
            ));
        }
        Ok(())
    }
}

impl DropOuts {
    fn check(&self) -> Result<(), SceneError> {
        let field = |key: &str| format!("drop_outs.{key}");
        within(
            &field("missing_per_million"),
            self.missing_per_million,
            0.0,
            1e6,
            "per million",
        )?;
        within(&field("repeated_per_record"), self.repeated_per_record, 0.0, 1e3, "")?;
        within(&field("skipped_per_record"), self.skipped_per_record, 0.0, 1e3, "")?;
        within(
            &field("block_samples"),
            self.block_samples as f64,
            1.0,
            65536.0,
            "samples",
        )?;
        within(&field("lost_shots_percent"), self.lost_shots_percent, 0.0, 100.0, "%")
    }
}
