//! From sixteen numbers between 0 and 1 to a scene: the world's ways of making a record costly, each by its own number.

use halfpulse_mps2::canned::CAPACITY;
use halfpulse_mps2::search::SETUPS;
use halfpulse_sim::Scene;
use halfpulse_sim::scene::{
    Bursts, DelayLine, Grain, Lamination, Layer, Pit, ProbeKind, Spikes, Tone, TransmissionPulse,
};

/// Numbers of a genome.
pub const GENES: usize = 20;

/// What a scene is made of.
pub type Genes = [f64; GENES];

/// A scene in the making: takes one gene after another.
struct Reader<'g>(std::slice::Iter<'g, f64>);

impl Reader<'_> {
    /// The next gene as a number between two others; three digits are enough to write down.
    fn between(&mut self, low: f64, high: f64) -> f64 {
        rounded(low + (high - low) * self.next())
    }

    /// The same by ratios.
    fn by_ratio(&mut self, low: f64, high: f64) -> f64 {
        rounded(low * (high / low).powf(self.next()))
    }

    /// Something that is not always there: `None` in the lower half, else by ratios.
    fn perhaps(&mut self, low: f64, high: f64) -> Option<f64> {
        let gene = self.next();
        (gene >= 0.5).then(|| rounded(low * (high / low).powf(2.0 * gene - 1.0)))
    }

    fn next(&mut self) -> f64 {
        self.0.next().copied().unwrap_or(0.0).clamp(0.0, 1.0)
    }
}

fn rounded(value: f64) -> f64 {
    if value == 0.0 {
        return 0.0;
    }
    let scale = 10f64.powi(2 - value.abs().log10().floor() as i32);
    (value * scale).round() / scale
}

/// The scene of these genes for the set-up of this number; not every one can be made.
pub fn scene(setup: usize, genes: &Genes) -> Scene {
    let mut genes = Reader(genes.iter());
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", genes.by_ratio(0.8, 40.0));
    scene.record.samples = CAPACITY;
    scene.record.first_back_wall_percent = Some(genes.by_ratio(2.0, 3000.0));
    scene.probe.element_diameter_mm = Some(6.0);
    scene.probe.beam_diffraction = true;
    scene.probe.zero_offset_ns = if setup == DELAY_LINE { 0.0 } else { 200.0 };
    scene.probe.phase_degrees = genes.between(-90.0, 90.0);
    scene.wall.attenuation_db_per_m = genes.by_ratio(1.0, 300.0);
    scene.noise.snr_db = Some(genes.between(0.0, 50.0));
    scene.echoes.mode_converted_percent = genes.perhaps(1.0, 80.0).unwrap_or(0.0);
    scene.transmission_pulse = genes.perhaps(10.0, 3000.0).map(|amplitude_percent| TransmissionPulse {
        amplitude_percent,
        decay_ns: 200.0,
        recovery_percent: 0.0,
        recovery_ns: 1000.0,
    });
    let (coating, coating_loss) = (genes.by_ratio(0.05, 3.0), genes.by_ratio(10.0, 2000.0));
    if SETUPS.get(setup).is_some_and(|setup| setup.coating.is_some()) {
        scene.coating = Some(Layer {
            velocity_m_s: Some(2300.0),
            density_kg_m3: Some(1400.0),
            thickness_mm: coating,
            attenuation_db_per_m: coating_loss,
            attenuation_exponent: 1.0,
            ..Layer::default()
        });
    }
    let thickness = scene.wall.thickness_mm;
    scene.grain = genes.perhaps(1.0, 1000.0).map(|scatterers_per_us| Grain {
        level_db: Some(-25.0),
        scatterers_per_us,
        ..Grain::default()
    });
    let level = genes.between(-40.0, 0.0);
    if let Some(grain) = &mut scene.grain {
        grain.level_db = Some(level);
    }
    scene.interference.spikes = genes.perhaps(10.0, 2000.0).map(|rate_per_ms| Spikes {
        rate_per_ms,
        amplitude_percent: 10.0,
        decay_ns: 80.0,
    });
    let spike = genes.by_ratio(1.0, 200.0);
    if let Some(spikes) = &mut scene.interference.spikes {
        spikes.amplitude_percent = spike;
    }
    scene.interference.bursts = genes.perhaps(2.0, 40.0).map(|period_us| Bursts {
        period_us,
        length_us: 0.6,
        frequency_mhz: 5.0,
        amplitude_percent: 10.0,
        after_trigger_us: Some(1.0),
    });
    let burst = genes.by_ratio(1.0, 100.0);
    if let Some(bursts) = &mut scene.interference.bursts {
        bursts.amplitude_percent = burst;
    }
    scene.pit = genes.perhaps(0.1, 0.95).map(|share| Pit {
        remaining_mm: rounded(share * thickness),
        area_percent: 40.0,
    });
    scene.lamination = genes.perhaps(0.1, 0.95).map(|share| Lamination {
        depth_mm: rounded(share * thickness),
        area_percent: 30.0,
    });
    if let Some(amplitude_percent) = genes.perhaps(0.1, 20.0) {
        scene.interference.tones.push(Tone {
            frequency_mhz: 4.9,
            amplitude_percent,
        });
    }
    scene.back.roughness_um = genes.perhaps(5.0, 100.0).unwrap_or(0.0);
    if setup == DELAY_LINE {
        scene.probe.kind = ProbeKind::DelayLine;
        scene.delay_line = Some(DelayLine {
            material: Some("polystyrene".to_owned()),
            length_mm: Some(8.0),
            attenuation_db_per_m: 60.0,
            attenuation_exponent: 1.0,
            ..DelayLine::default()
        });
    }
    scene
}

const DELAY_LINE: usize = 2;
