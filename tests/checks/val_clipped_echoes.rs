//! Clipped echoes: fitted to their whole samples, they must be read without bias, and their scatter must be what the
//! Cramér-Rao bound of the whole samples says.
//!
//! Truth: the place that the pulse is put at. The bound is worked out here in f64 from the whole samples alone:
//! inverse of the 3 × 3 Fisher matrix of amplitude, constant and delay (Kay, Fundamentals of Statistical Signal
//! Processing: Estimation Theory, section 3.9, signal in white noise; from memory). An independent simulation with NumPy of a
//! 5 MHz, 60 % pulse at 50 MS/s and 40 dB gave 0.14, 0.18 and 0.29 ns for 1.5, 3 and 5 times full scale, and
//! 0.24, 0.46, 0.90 ns for a correlation that takes the cut samples as they are.

use halfpulse::echo::arrival::{Arrival, Estimator, Search, estimate};
use halfpulse::echo::correlation::Sign;
use halfpulse::echo::noise::TimingNoise;
use halfpulse::echo::pulse::{ReferencePulse, learn};
use halfpulse::echo::{Surroundings, echo_at};
use halfpulse::record::{AdcFormat, Record, SampleClock};
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::{Hertz, Seconds};
use halfpulse_sim::front_end::{Purpose, Random};
use halfpulse_tests::page::Figures;

const CYCLE: f64 = 10.0;
/// -6 dB bandwidth of 60 %: σ = 1.175394 / (π B), in samples.
const SIGMA: f64 = 1.175_394 / (std::f64::consts::PI * 0.6) * CYCLE;
const FULL_SCALE: f64 = 2048.0;
const SHOTS: u64 = 1000;

fn pulse(t: f64) -> f64 {
    (-t * t / (2.0 * SIGMA * SIGMA)).exp() * (std::f64::consts::TAU * t / CYCLE + 0.6).cos()
}

fn slope(t: f64) -> f64 {
    (pulse(t + 1e-4) - pulse(t - 1e-4)) / 2e-4
}

/// Standard deviation of the delay from the samples that `whole` keeps, noise 1 and amplitude `a`.
fn bound(place: f64, a: f64, whole: impl Fn(usize) -> bool) -> f64 {
    let (mut m, mut v) = ([[0.0; 2]; 2], [0.0; 2]);
    let mut d2 = 0.0;
    for i in (0..300).filter(|&i| whole(i)) {
        let (s, d) = (pulse(i as f64 - place), a * slope(i as f64 - place));
        for (row, p) in [s, 1.0].into_iter().enumerate() {
            v[row] += p * d;
            for (column, q) in [s, 1.0].into_iter().enumerate() {
                m[row][column] += p * q;
            }
        }
        d2 += d * d;
    }
    let determinant = m[0][0] * m[1][1] - m[0][1] * m[1][0];
    let along = (v[0] * v[0] * m[1][1] - 2.0 * v[0] * v[1] * m[0][1] + v[1] * v[1] * m[0][0]) / determinant;
    1.0 / (d2 - along).sqrt()
}

#[test]
fn val_clipped_echoes() {
    let mut figures = Figures::of("val_clipped_echoes");
    let samples: Vec<f32> = (0..51).map(|i| pulse(f64::from(i) - 25.0) as f32).collect();
    let mut buffer = [0.0; PULSE_CAPACITY];
    let facts = learn(&samples, CYCLE as f32, &mut buffer).expect("a pulse");
    let reference = ReferencePulse::new(&buffer, facts);
    let clock = SampleClock {
        rate: Hertz::from_mhz(50.0),
        first_sample: Seconds::ZERO,
    };
    // The learned origin is the interpolated maximum of the envelope, a hair beside the middle.
    let own = f64::from(facts.origin) - 25.0;
    figures.line("full scales   scatter ns   bound ns   stated ns   as it is ns   inside k = 2");
    for over in [1.5, 3.0, 5.0] {
        let amplitude = over * FULL_SCALE;
        // 40 dB below the echo.
        let noise = amplitude / 100.0;
        let (mut squares, mut naive, mut bias, mut inside, mut stated, mut least) = (0.0, 0.0, 0.0, 0, 0.0, 0.0);
        for shot in 0..SHOTS {
            let mut normals = Random::new(31, Purpose::Noise, shot);
            let place = 150.0 + (shot as f64 * 0.377).fract();
            let codes: Vec<i16> = (0..300)
                .map(|i| {
                    let x = amplitude * pulse(f64::from(i) - place) + noise * normals.normal() + 7.0;
                    x.round().clamp(-FULL_SCALE, FULL_SCALE - 1.0) as i16
                })
                .collect();
            let search = Search {
                around: 150,
                reach: 8.0,
                sign: Sign::Positive,
                samples_per_cycle: CYCLE as f32,
            };
            let first: Arrival =
                estimate(Estimator::LeastSquares, &codes, &search, &reference, &mut [0.0; 512]).expect("an echo");
            let surroundings = Surroundings {
                record: Record::new(&codes, AdcFormat::signed(12), clock),
                pulse: reference,
                noise: noise as f32,
                timing_noise: TimingNoise::steady(noise as f32),
                samples_per_cycle: CYCLE as f32,
            };
            let echo = echo_at(&surroundings, first).expect("an echo");
            assert!(echo.clipped && echo.information > 0.0 && echo.information < 1.0);
            let error = |place_found: f32| (f64::from(place_found) - own - place) * 20.0;
            let off = error(echo.position.as_samples());
            let u = echo.standard_uncertainty.as_ns();
            squares += off * off;
            bias += off;
            naive += error(first.position.as_samples()).powi(2);
            stated += f64::from(u) / SHOTS as f64;
            inside += u32::from(off.abs() <= 2.0 * f64::from(u));
            let is_whole = |i: usize| (codes[i] < 2047) && (codes[i] > -2048);
            least += bound(place, amplitude / noise, is_whole) * 20.0 / SHOTS as f64;
            assert!((f64::from(echo.amplitude) / amplitude - 1.0).abs() < 0.2);
        }
        let n = SHOTS as f64;
        let (scatter, naive, bias) = ((squares / n).sqrt(), (naive / n).sqrt(), bias / n);
        let share = f64::from(inside) / n;
        figures.line(&format!(
            "{over:11}   {scatter:10.3}   {least:8.3}   {stated:9.3}   {naive:11.3}   {:8.1} %",
            100.0 * share
        ));
        // The scatter of 1000 shots is known to 2.2 %: three standard deviations and 1.05.
        assert!(
            scatter < 1.05 * 1.07 * least && scatter > 0.93 * least,
            "{scatter} {least}"
        );
        assert!(bias.abs() < 0.1 * scatter + 3.0 * scatter / n.sqrt(), "{bias}");
        assert!((stated / least - 1.0).abs() < 0.05, "{stated} {least}");
        assert!((0.93..0.975).contains(&share), "{share}");
        assert!(naive > 1.3 * scatter);
    }
    figures.check();
}
