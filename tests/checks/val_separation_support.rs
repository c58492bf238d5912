//! Records of one echo or two with known truth, and what the gauge says of them.

use halfpulse::echo::pulse::PulseQuality;
use halfpulse::echo::separation::{Separation, Verdict};
use halfpulse::{
    AdcFormat, Gauge, GaugeSetup, Hertz, Material, MetresPerSecond, Probe, Record, SampleClock, Scratch, Seconds, Span,
    Window, Zero,
};
use halfpulse_tests::oracle::{self, Random};
use halfpulse_tests::published::number_rows;
use std::f64::consts::PI;
use std::fmt;

/// Samples a second where nothing else is said.
pub const RATE: f64 = 50e6;
/// Envelope peak of the larger echo, in codes of 12 bits.
pub const PEAK: f64 = 800.0;
/// Samples of a record.
const LENGTH: usize = 640;
/// -20 dB duration of the envelope of the vectors' pulse, in samples (`tests/published/README.md`).
const DURATION: f64 = 26.25;

/// A pulse of 256 samples that can be placed anywhere: its spectrum, and the sample of its origin.
pub struct Pulse {
    spectrum: Vec<(f64, f64)>,
    turns: Vec<(f64, f64)>,
    origin: usize,
}

impl Pulse {
    fn new(samples: &[f64], origin: usize) -> Self {
        let n = samples.len();
        Self {
            spectrum: oracle::transform(samples),
            turns: (0..n).map(|k| (2.0 * PI * k as f64 / n as f64).sin_cos()).collect(),
            origin,
        }
    }

    /// The asymmetric pulse that SciPy's pairs were made with.
    pub fn of_the_vectors() -> Self {
        let samples: Vec<f64> = number_rows("vectors/pair_reference.csv")[0]
            .iter()
            .map(|code| code / 32_111.66)
            .collect();
        Self::new(&samples, 128)
    }

    /// A Gaussian pulse at 50 MS/s: centre and -6 dB width in MHz, phase in radians.
    pub fn gaussian(centre: f64, width: f64, phase: f64) -> Self {
        Self::gaussian_at(centre / 50.0, width / centre, phase)
    }

    /// The same with its frequency in cycles a sample.
    fn gaussian_at(frequency: f64, relative: f64, phase: f64) -> Self {
        let sigma = oracle::gaussian_sigma(frequency, relative);
        let samples: Vec<f64> = (0..256)
            .map(|k| {
                let t = f64::from(k) - 128.0;
                (-0.5 * (t / sigma).powi(2)).exp() * (2.0 * PI * frequency * t + phase).cos()
            })
            .collect();
        Self::new(&samples, 128)
    }

    /// The pulse after a way that weakens it by exp(-beta (f - f0) / f0), f0 a tenth of the sample rate, and turns its
    /// phase.
    pub fn changed(&self, beta: f64, phase: f64) -> Self {
        let n = self.turns.len() as f64;
        let (sin, cos) = phase.sin_cos();
        let change = |(bin, &(re, im)): (usize, &(f64, f64))| {
            let gain = (-beta * (10.0 * bin as f64 / n - 1.0)).exp();
            (gain * (re * cos - im * sin), gain * (re * sin + im * cos))
        };
        Self {
            spectrum: self.spectrum.iter().enumerate().map(change).collect(),
            turns: self.turns.clone(),
            origin: self.origin,
        }
    }

    /// Adds an echo whose origin lies at `place`.
    pub fn add(&self, samples: &mut [f64], place: f64, amplitude: f64) {
        let n = self.turns.len();
        let whole = place.floor();
        let shifted: Vec<(f64, f64)> = self
            .spectrum
            .iter()
            .enumerate()
            .map(|(bin, &(re, im))| {
                let (sin, cos) = (-2.0 * PI * bin as f64 * (place - whole) / n as f64).sin_cos();
                (re * cos - im * sin, re * sin + im * cos)
            })
            .collect();
        for k in 0..n {
            let Some(sample) = (whole as usize + k)
                .checked_sub(self.origin)
                .and_then(|at| samples.get_mut(at))
            else {
                continue;
            };
            let mut sum = 0.5 * shifted[0].0;
            for (bin, &(re, im)) in shifted.iter().enumerate().take(n / 2).skip(1) {
                let (sin, cos) = self.turns[bin * k % n];
                sum += re * cos - im * sin;
            }
            *sample += amplitude * 2.0 * sum / n as f64;
        }
    }
}

/// What is in a record.
#[derive(Clone, Copy)]
pub struct Case {
    /// Second over first amplitude; 0 for one echo.
    pub ratio: f64,
    /// Samples between the two.
    pub spacing: f64,
    /// Signal-to-noise ratio in dB.
    pub snr: f64,
}

impl Case {
    /// One echo.
    pub fn single(snr: f64) -> Self {
        Self {
            ratio: 0.0,
            spacing: 0.0,
            snr,
        }
    }

    /// Two echoes `x` durations of the vectors' pulse apart.
    pub fn pair(ratio: f64, x: f64, snr: f64) -> Self {
        Self {
            ratio,
            spacing: x * DURATION,
            snr,
        }
    }

    /// A record of it.
    pub fn record(&self, pulse: &Pulse, random: &mut Random) -> Vec<i16> {
        let place = 300.0 + random.uniform();
        let mut samples = vec![0.0; LENGTH];
        pulse.add(&mut samples, place, PEAK);
        if self.ratio != 0.0 {
            pulse.add(&mut samples, place + self.spacing, PEAK * self.ratio);
        }
        let noise = PEAK * 10f64.powf(-self.snr / 20.0);
        for sample in &mut samples {
            *sample += noise * random.normal();
        }
        oracle::codes(&samples, 12)
    }
}

/// A probe on its own clock.
pub struct Cell {
    /// Centre frequency.
    pub frequency_mhz: f64,
    /// -6 dB width.
    pub bandwidth_mhz: f64,
    /// Sample rate.
    pub rate_mhz: f64,
}

impl Cell {
    /// Its pulse, with a phase that no data sheet tells.
    pub fn pulse(&self) -> Pulse {
        self.pulse_with_phase(0.6)
    }

    /// Its pulse with a phase in radians.
    pub fn pulse_with_phase(&self, phase: f64) -> Pulse {
        let relative = self.bandwidth_mhz / self.frequency_mhz;
        Pulse::gaussian_at(self.frequency_mhz / self.rate_mhz, relative, phase)
    }

    /// -20 dB duration of its envelope in samples: 2 sqrt(2 ln 10) sigma.
    pub fn duration_samples(&self) -> f64 {
        let sigma = oracle::gaussian_sigma(
            self.frequency_mhz / self.rate_mhz,
            self.bandwidth_mhz / self.frequency_mhz,
        );
        2.0 * (2.0 * 10f64.ln()).sqrt() * sigma
    }

    /// A gauge for it that has learned the pulse without noise.
    pub fn gauge<'s>(&self, scratch: &'s mut Scratch<1024>, pulse: &Pulse) -> Gauge<'s> {
        let mut gauge = self.modelled_gauge(scratch);
        let mut samples = vec![0.0; 256];
        pulse.add(&mut samples, 128.0, 1.0);
        let reach = (0.8 * self.duration_samples()).ceil() as usize;
        let samples: Vec<f32> = samples[128 - reach..=128 + reach].iter().map(|&x| x as f32).collect();
        gauge.learn_pulse(&samples).expect("the pulse fits");
        gauge
    }

    /// A gauge for it with the data sheet's pulse.
    pub fn modelled_gauge<'s>(&self, scratch: &'s mut Scratch<1024>) -> Gauge<'s> {
        let rate = self.rate_mhz as f32;
        let probe = Probe::contact(
            Hertz::from_mhz(self.frequency_mhz as f32),
            (self.bandwidth_mhz / self.frequency_mhz) as f32,
        );
        Gauge::new(setup(rate, probe), scratch.workspace()).expect("a sound set-up")
    }
}

fn setup(rate_mhz: f32, probe: Probe) -> GaugeSetup {
    GaugeSetup::new(
        Hertz::from_mhz(rate_mhz),
        probe,
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(5.0)),
        Zero::new(Seconds::ZERO, Seconds::ZERO),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::ZERO,
            to: Seconds::from_us(80.0),
        },
    )
}

/// A gauge for 5 MHz, 60 %, 50 MS/s: with the data sheet's pulse, or with one learned from the average of so many shots of an
/// isolated echo at so many dB.
pub fn gauge_with_pulse<'s>(scratch: &'s mut Scratch<1024>, learned: Option<(&Pulse, u32, f64)>) -> Gauge<'s> {
    let probe = Probe::contact(Hertz::from_mhz(5.0), 0.6);
    let mut gauge = Gauge::new(setup(50.0, probe), scratch.workspace()).expect("a sound set-up");
    if let Some((pulse, shots, snr)) = learned {
        let noise = 10f64.powf(-snr / 20.0) / f64::from(shots).sqrt();
        let mut random = Random::new(7);
        let mut samples = vec![0.0; 256];
        pulse.add(&mut samples, 128.3, 1.0);
        let samples: Vec<f32> = samples[128 - 30..128 + 50]
            .iter()
            .map(|x| (x + noise * random.normal()) as f32)
            .collect();
        let quality = PulseQuality {
            noise: noise as f32,
            mismatch: 0.0,
            learned_on: None,
        };
        gauge.learn_pulse_of_quality(&samples, quality).expect("the pulse fits");
    }
    gauge
}

/// Measures a record and asks.
pub fn look(gauge: &mut Gauge<'_>, codes: &[i16]) -> Option<Separation> {
    let rate = gauge.setup().sample_rate;
    let record = Record::new(codes, AdcFormat::signed(12), SampleClock::new(rate));
    let _ = gauge.measure(&record);
    gauge.separate(&record)
}

/// What came of many records of one kind.
#[derive(Default)]
pub struct Tally {
    /// Two told apart, at the right spacing.
    pub right: usize,
    /// Two told apart where there is one, or at a wrong spacing.
    pub wrong: usize,
    /// Not told apart.
    pub silent: usize,
    /// Errors of the spacing of those that are right.
    pub errors_ns: Vec<f64>,
    /// Share of them within twice the stated standard uncertainty.
    pub covered: f64,
}

impl Tally {
    fn shots(&self) -> usize {
        self.right + self.wrong + self.silent
    }

    /// Share of wrong answers with its 95 % interval.
    pub fn wrong_share(&self) -> String {
        share(self.wrong, self.shots())
    }
}

impl fmt::Display for Tally {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let shots = self.shots();
        write!(
            f,
            "right {}, wrong {}, not resolved {}",
            share(self.right, shots),
            self.wrong,
            self.silent
        )
    }
}

/// A share in per cent with its 95 % interval (Wilson 1927).
pub fn share(count: usize, of: usize) -> String {
    let (n, p, z) = (of as f64, count as f64 / of as f64, 1.96f64);
    let middle = (p + z * z / (2.0 * n)) / (1.0 + z * z / n);
    let half = z / (1.0 + z * z / n) * (p * (1.0 - p) / n + z * z / (4.0 * n * n)).sqrt();
    let limit = |x: f64| 100.0 * x.clamp(0.0, 1.0);
    format!(
        "{:.1} % ({:.1} to {:.1})",
        100.0 * p,
        limit(middle - half),
        limit(middle + half)
    )
}

/// Many records of one kind at 50 MS/s.
pub fn tally(gauge: &mut Gauge<'_>, pulse: &Pulse, case: Case, shots: usize, random: &mut Random) -> Tally {
    tally_at(gauge, pulse, case, shots, 1e-6 * RATE, random)
}

/// The same at another sample rate.
pub fn tally_at(
    gauge: &mut Gauge<'_>,
    pulse: &Pulse,
    case: Case,
    shots: usize,
    rate_mhz: f64,
    random: &mut Random,
) -> Tally {
    let mut tally = Tally::default();
    let mut covered = 0;
    // 50 ns stand for 5 MHz; a quarter of the spacing is the narrower limit up to x = 0.37.
    let limit = (0.25 * case.spacing).min(2.5);
    for _ in 0..shots {
        let codes = case.record(pulse, random);
        let separation = look(gauge, &codes);
        let resolved = separation.filter(|separation| separation.verdict != Verdict::NotResolved);
        let Some(pair) = resolved.and_then(|separation| separation.pair) else {
            tally.silent += 1;
            continue;
        };
        let error = f64::from(pair.spacing.get()) * rate_mhz * 1e6 - case.spacing;
        if case.ratio != 0.0 && error.abs() < limit {
            tally.right += 1;
            tally.errors_ns.push(error * 1e3 / rate_mhz);
            covered += usize::from(error.abs() < 2.0 * f64::from(pair.standard_uncertainty.get()) * rate_mhz * 1e6);
        } else {
            tally.wrong += 1;
        }
    }
    tally.covered = covered as f64 / tally.right.max(1) as f64;
    tally
}
