//! What the unit tests share: a set-up and noise.

use crate::setup::{GaugeSetup, Material, Probe, Span, Window, Zero};
use crate::units::{Hertz, Metres, MetresPerSecond, Seconds};

/// 5 MHz, 60 %, 50 MS/s on steel; every uncertainty but the noise's is zero.
pub fn setup() -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_couplant_film(Metres::ZERO),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::ZERO),
        Zero::new(Seconds::ZERO, Seconds::ZERO),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(80.0),
        },
    )
}

/// Seeded white noise: SplitMix64 and the Box-Muller transform.
pub struct Noise(u64);

impl Noise {
    pub fn new(seed: u64) -> Self {
        Self(seed)
    }

    /// Between 0 (not included) and 1.
    pub fn uniform(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        ((z ^ (z >> 31)) >> 11) as f64 / (1u64 << 53) as f64 + 1e-17
    }

    pub fn normal(&mut self) -> f32 {
        let radius = (-2.0 * self.uniform().ln()).sqrt();
        (radius * (std::f64::consts::TAU * self.uniform()).cos()) as f32
    }
}
