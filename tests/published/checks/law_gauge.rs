//! Laws that a thickness must obey whatever the record: what happens to a reading when the record is
//! shifted, amplified, turned upside down, lifted, or replayed faster. Nobody needs to know the right answer.

use halfpulse::{
    AdcFormat, Echo, EchoRole, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, NoReading, Polarity, Probe,
    Reading, Record, SampleClock, Scratch, Seconds, Span, Window, Zero,
};
use halfpulse_published::oracle;
use proptest::prelude::*;

const SAMPLES: usize = 3000;
const RATE: f64 = 50e6;

/// A back-wall train as a probe of 5 MHz and 60 % gives it.
#[derive(Clone, Copy, Debug)]
struct Scene {
    start_us: f64,
    period_us: f64,
    decay: f64,
    snr_db: f64,
    seed: u64,
}

prop_compose! {
    fn scenes()(
        start_us in 1.0f64..6.0,
        period_us in 1.2f64..12.0,
        decay in 0.6f64..0.85,
        snr_db in 22.0f64..45.0,
        seed: u64,
    ) -> Scene {
        Scene { start_us, period_us, decay, snr_db, seed }
    }
}

impl Scene {
    /// Twelve-bit codes with the first back wall at a fifth of full scale.
    fn codes(&self) -> Vec<i16> {
        let peak = 400.0;
        let noise = peak * 10f64.powf(-self.snr_db / 20.0);
        let mut random = oracle::Random::new(self.seed);
        let samples: Vec<f64> = (0..SAMPLES)
            .map(|i| {
                let t = i as f64 / RATE;
                let mut sum = noise * random.normal();
                for multiple in 1..=40 {
                    let arrival = (self.start_us + f64::from(multiple) * self.period_us) * 1e-6;
                    if (t - arrival).abs() < 1e-6 {
                        sum += peak * self.decay.powi(multiple - 1) * oracle::gaussian_pulse(t - arrival, 5e6, 0.6);
                    }
                }
                sum
            })
            .collect();
        oracle::codes(&samples, 12)
    }

    fn setup(&self) -> GaugeSetup {
        GaugeSetup::try_new(
            Hertz::new(RATE as f32),
            Probe::contact(Hertz::from_mhz(5.0), 0.6).with_couplant_film(Metres::ZERO),
            Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::ZERO),
            Zero::new(Seconds::from_us(self.start_us as f32), Seconds::ZERO),
            Span::BackWallToBackWall,
            Window {
                from: Seconds::from_us(1.5),
                to: Seconds::from_us(58.0),
            },
        )
        .expect("a sound set-up")
    }
}

/// What came of one record.
#[derive(Clone, Debug)]
struct Outcome {
    reading: Result<Reading, NoReading>,
    echoes: Vec<Echo>,
    /// Chi-square per degree of freedom of the train's arrivals.
    unevenness: f32,
    /// Multiples that took part in the fit.
    members: u8,
}

impl Outcome {
    fn word(&self) -> &'static str {
        self.reading.as_ref().map_or_else(NoReading::word, |_| "reading")
    }
}

fn measure(setup: GaugeSetup, codes: &[i16], first_sample: Seconds) -> Outcome {
    let clock = SampleClock {
        rate: setup.sample_rate,
        first_sample,
    };
    let mut scratch = Scratch::<4096>::ZERO;
    let mut gauge = Gauge::new(setup, scratch.workspace()).expect("the gauge is made");
    let reading = gauge.measure(&Record::new(codes, AdcFormat::signed(12), clock));
    let echoes = gauge.findings().echoes.iter().copied().collect();
    let train = gauge.findings().train;
    Outcome {
        reading,
        echoes,
        unevenness: train.map_or(0.0, |train| train.unevenness),
        members: train.map_or(0, |train| train.echoes),
    }
}

/// Both read or both refuse for the same reason; thicknesses agree within `share` of a standard
/// uncertainty (half of one if a multiple near the noise took part in one fit only), standard uncertainties within 10 % (the noise is estimated from whole codes) unless
/// the arrivals scatter so much that the uncertainty is widened, which begins at a limit, or so many echoes fill
/// the record that little noise is left to learn from.
fn same(a: &Outcome, b: &Outcome, share: f32) -> Result<(), TestCaseError> {
    prop_assert_eq!(a.word(), b.word());
    let share = if a.members == b.members { share } else { 0.5 };
    let comparable = |o: &Outcome| o.unevenness < 2.0 && o.members < 12;
    let even = comparable(a) && comparable(b);
    if let (Ok(a), Ok(b)) = (&a.reading, &b.reading) {
        let difference = (a.thickness - b.thickness).abs().as_mm();
        prop_assert!(
            difference <= share * a.standard_uncertainty.as_mm() + 1e-6 * a.thickness.as_mm(),
            "{} mm against {} mm",
            a.thickness.as_mm(),
            b.thickness.as_mm()
        );
        let ratio = a.standard_uncertainty / b.standard_uncertainty;
        prop_assert!(!even || (ratio - 1.0).abs() < 0.1, "uncertainties {ratio}");
    }
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 64, failure_persistence: None, ..ProptestConfig::default() })]

    /// Recorded k samples earlier, everything comes k samples later in the record, and at the same time.
    #[test]
    fn law_shift_of_the_record(scene in scenes(), k in 1usize..60) {
        let codes = scene.codes();
        let plain = measure(scene.setup(), &codes, Seconds::ZERO);
        let mut shifted = codes.clone();
        shifted.rotate_right(k);
        let first_sample = Seconds::new(-(k as f64 / RATE) as f32);
        let moved = measure(scene.setup(), &shifted, first_sample);
        same(&plain, &moved, 0.01)?;
        prop_assert_eq!(plain.echoes.len(), moved.echoes.len());
        for (a, b) in plain.echoes.iter().zip(&moved.echoes) {
            let distance = b.position.samples_after(a.position);
            prop_assert!((distance - k as f32).abs() < 1e-3, "{} samples instead of {}", distance, k);
            prop_assert!((a.arrival - b.arrival).abs().as_ns() < 0.03, "{} and {}", a.arrival.as_ns(), b.arrival.as_ns());
        }
    }

    /// Trigger, zero and window later by the same time: arrivals later by it, thickness as before.
    #[test]
    fn law_shift_of_the_trigger(scene in scenes(), later_us in 0.0f32..30.0) {
        let codes = scene.codes();
        let plain = measure(scene.setup(), &codes, Seconds::ZERO);
        let later = Seconds::from_us(later_us);
        let mut setup = scene.setup();
        setup.zero.offset = setup.zero.offset + later;
        setup.window.from = setup.window.from + later;
        setup.window.to = setup.window.to + later;
        let moved = measure(setup, &codes, later);
        same(&plain, &moved, 0.01)?;
        for (a, b) in plain.echoes.iter().zip(&moved.echoes) {
            prop_assert!((b.arrival - a.arrival - later).abs().as_ns() < 0.05);
        }
    }

    /// Twice the gain: the same times, amplitudes twice as large.
    #[test]
    fn law_gain(scene in scenes()) {
        let codes = scene.codes();
        let louder: Vec<i16> = codes.iter().map(|code| 2 * code).collect();
        let plain = measure(scene.setup(), &codes, Seconds::ZERO);
        let loud = measure(scene.setup(), &louder, Seconds::ZERO);
        same(&plain, &loud, 0.02)?;
        // Echoes near the noise may be found in one record and missed in the other, whose rounding is finer.
        for a in plain.echoes.iter().filter(|echo| echo.snr.get() > 16.0) {
            let b = loud.echoes.iter().find(|b| (b.arrival - a.arrival).abs().as_ns() < 0.05);
            prop_assert!(b.is_some_and(|b| (b.amplitude / a.amplitude - 2.0).abs() < 1e-3 && b.polarity == a.polarity));
        }
    }

    /// Upside down: the same times and sizes, every echo's polarity reversed.
    #[test]
    fn law_polarity(scene in scenes()) {
        let codes = scene.codes();
        let turned: Vec<i16> = codes.iter().map(|code| -code).collect();
        let plain = measure(scene.setup(), &codes, Seconds::ZERO);
        let inverted = measure(scene.setup(), &turned, Seconds::ZERO);
        same(&plain, &inverted, 0.01)?;
        prop_assert_eq!(plain.echoes.len(), inverted.echoes.len());
        for (a, b) in plain.echoes.iter().zip(&inverted.echoes) {
            prop_assert_ne!(a.polarity, b.polarity);
            prop_assert!((a.arrival - b.arrival).abs().as_ns() < 0.01);
            prop_assert!((a.amplitude / b.amplitude - 1.0).abs() < 1e-4);
            if matches!(a.role, EchoRole::BackWall(_)) && a.snr.get() > 16.0 {
                prop_assert_eq!(a.polarity, Polarity::Positive, "the scene's back walls are upright");
            }
        }
    }

    /// A converter's offset changes nothing.
    #[test]
    fn law_offset(scene in scenes(), offset in -200i16..200) {
        let codes = scene.codes();
        let lifted: Vec<i16> = codes.iter().map(|code| code + offset).collect();
        let plain = measure(scene.setup(), &codes, Seconds::ZERO);
        same(&plain, &measure(scene.setup(), &lifted, Seconds::ZERO), 0.05)?;
    }

    /// The same codes from a twice as fast clock and a probe of twice the frequency: half the thickness, to
    /// the last bit (a factor of two is exact).
    #[test]
    fn law_time_scale(scene in scenes()) {
        let codes = scene.codes();
        let plain = measure(scene.setup(), &codes, Seconds::ZERO);
        let mut setup = scene.setup();
        setup.sample_rate = setup.sample_rate * 2.0;
        setup.probe.centre_frequency = setup.probe.centre_frequency * 2.0;
        setup.zero.offset = setup.zero.offset * 0.5;
        setup.window.from = setup.window.from * 0.5;
        setup.window.to = setup.window.to * 0.5;
        let fast = measure(setup, &codes, Seconds::ZERO);
        prop_assert_eq!(plain.word(), fast.word());
        if let (Ok(a), Ok(b)) = (&plain.reading, &fast.reading) {
            prop_assert_eq!(a.thickness.get().to_bits(), (b.thickness * 2.0).get().to_bits());
            prop_assert_eq!(a.doubts, b.doubts);
        }
    }

    /// Thickness and its uncertainty from timing are proportional to the velocity.
    #[test]
    fn law_velocity(scene in scenes(), factor in 0.3f32..1.5) {
        let codes = scene.codes();
        let plain = measure(scene.setup(), &codes, Seconds::ZERO);
        let mut setup = scene.setup();
        setup.material.velocity = setup.material.velocity * factor;
        let scaled = measure(setup, &codes, Seconds::ZERO);
        prop_assert_eq!(plain.word(), scaled.word());
        if let (Ok(a), Ok(b)) = (&plain.reading, &scaled.reading) {
            prop_assert!((b.thickness / a.thickness / factor - 1.0).abs() < 1e-6);
            prop_assert!((b.standard_uncertainty / a.standard_uncertainty / factor - 1.0).abs() < 1e-5);
        }
    }

    /// Not a law of symmetry, but what makes the others worth something: these scenes are read, and right.
    #[test]
    fn law_scenes_are_read_right(scene in scenes()) {
        let outcome = measure(scene.setup(), &scene.codes(), Seconds::ZERO);
        if let Ok(reading) = &outcome.reading {
            let truth = 0.5 * 5.92 * scene.period_us;
            let error = f64::from(reading.thickness.as_mm()) - truth;
            let standard = f64::from(reading.standard_uncertainty.as_mm());
            prop_assert!(error.abs() < 5.0 * standard, "{} mm off, {} mm stated", error, standard);
        }
        prop_assert_eq!(outcome.word(), "reading");
    }
}
