//! What the gauge states about its own timing, against the Cramér-Rao bound of the very signal and against the
//! errors that it makes.

use halfpulse::{
    AdcFormat, Gauge, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, Record, SampleClock, Scratch,
    Seconds, Span, Window, Zero,
};
use halfpulse_tests::oracle;
use halfpulse_tests::page::Figures;
use halfpulse_tests::published::{Table, code_rows};

const RATE: f64 = 50e6;
const VELOCITY: f64 = 5920.0;
const PEAK: f64 = 1200.0;

fn setup(start: f64) -> GaugeSetup {
    GaugeSetup::try_new(
        Hertz::new(RATE as f32),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_couplant_film(Metres::ZERO),
        Material::new(MetresPerSecond::new(VELOCITY as f32), MetresPerSecond::ZERO),
        Zero::new(Seconds::new(start as f32), Seconds::ZERO),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(2.0),
            to: Seconds::from_us(30.0),
        },
    )
    .expect("a sound set-up")
}

fn pulse(t: f64) -> f64 {
    oracle::gaussian_pulse(t, 5e6, 0.6)
}

/// Trains of six echoes of a modelled pulse in white noise. The stated uncertainty of every arrival and of the
/// thickness is the Cramér-Rao bound of that signal (numerical Fisher matrix, converter's rounding noise
/// included) within 10 %: the gauge has to estimate the noise, between echoes. The errors scatter by what is stated:
/// 0.93 to 1.07 are 2.8 standard deviations of that ratio over 800 shots.
#[test]
fn val_stated_uncertainty_is_the_bound_and_holds() {
    let mut figures = Figures::of("val_stated_uncertainty_is_the_bound_and_holds");
    const SHOTS: usize = 800;
    for (decay, snr_db) in [(0.7f64, 20.0f64), (0.7, 30.0), (0.85, 40.0)] {
        let noise = PEAK * 10f64.powf(-snr_db / 20.0);
        let amplitudes: Vec<f64> = (0..6).map(|n| PEAK * decay.powi(n)).collect();
        let times: Vec<f64> = (0..1600).map(|i| f64::from(i) / RATE).collect();
        let mut random = oracle::Random::new(5);
        let (mut scores, mut stated, mut arrivals) = (Vec::new(), Vec::new(), Vec::new());
        let (mut last_start, mut last_period) = (0.0, 0.0);
        let mut scratch = Scratch::<2048>::ZERO;
        for _ in 0..SHOTS {
            let start = 1e-6 + 1e-7 * random.uniform();
            let period = 3.3e-6 + 2e-7 * random.uniform();
            (last_start, last_period) = (start, period);
            let samples: Vec<f64> = times
                .iter()
                .map(|t| {
                    let echo = |(n, a): (usize, &f64)| {
                        let t = t - start - (n + 1) as f64 * period;
                        if t.abs() < 1e-6 { a * pulse(t) } else { 0.0 }
                    };
                    noise * random.normal() + amplitudes.iter().enumerate().map(echo).sum::<f64>()
                })
                .collect();
            let codes = oracle::codes(&samples, 12);
            let setup = setup(start);
            let mut gauge = Gauge::new(setup, scratch.workspace()).expect("the gauge is made");
            let record = Record::new(&codes, AdcFormat::signed(12), SampleClock::new(setup.sample_rate));
            let reading = gauge.measure(&record).expect("a clean train is read");
            let error = f64::from(reading.thickness.get()) - 0.5 * VELOCITY * period;
            scores.push(error / f64::from(reading.standard_uncertainty.get()));
            stated.push(f64::from(reading.standard_uncertainty.get()));
            arrivals.push(f64::from(gauge.findings().echoes[0].standard_uncertainty.get()));
        }
        let total_noise = noise.hypot(12f64.sqrt().recip());
        let of_period = oracle::period_bound(pulse, &times, last_start, last_period, &amplitudes, total_noise);
        let template: Vec<f64> = (-40..=40).map(|k| PEAK * pulse(f64::from(k) / RATE)).collect();
        let of_arrival = oracle::delay_bound(&template, total_noise) / RATE;
        let (mean_stated, _) = oracle::mean_and_deviation(&stated);
        let (mean_arrival, _) = oracle::mean_and_deviation(&arrivals);
        let (bias, scatter) = oracle::mean_and_deviation(&scores);
        let (period_ratio, arrival_ratio) = (mean_stated / (0.5 * VELOCITY * of_period), mean_arrival / of_arrival);
        let within = scores.iter().filter(|score| score.abs() < 2.0).count() as f64 / SHOTS as f64;
        figures.line(&format!(
            "decay {decay}, {snr_db} dB: stated over bound {period_ratio:.3} (thickness), {arrival_ratio:.3} (first arrival); \
             errors over stated {scatter:.3}, bias {bias:+.3}; within k = 2: {:.1} %",
            100.0 * within
        ));
        assert!((arrival_ratio - 1.0).abs() < 0.1, "arrival {arrival_ratio}");
        assert!((period_ratio - 1.0).abs() < 0.1, "thickness {period_ratio}");
        assert!(
            (0.93..1.07).contains(&scatter),
            "errors over stated uncertainty {scatter}"
        );
        assert!(bias.abs() < 0.15, "bias {bias}");
        assert!((0.93..0.975).contains(&within), "within k = 2: {within}");
    }
    figures.check();
}

/// The noise estimate on records of noise alone against NumPy's standard deviation of the same codes
/// (`numpy.std`, which contains the rounding).
#[test]
fn val_noise_of_numpy() {
    let expected = Table::read("vectors/noise.csv");
    for (row, codes) in expected.rows().zip(code_rows("vectors/noise_codes.csv")) {
        let setup = setup(1e-6);
        let mut scratch = Scratch::<4096>::ZERO;
        let mut gauge = Gauge::new(setup, scratch.workspace()).expect("the gauge is made");
        let record = Record::new(&codes, AdcFormat::signed(12), SampleClock::new(setup.sample_rate));
        let outcome = gauge.measure(&record);
        let ratio = f64::from(gauge.findings().noise) / row.number("standard_deviation");
        println!(
            "{} codes: {ratio:.3} of numpy.std, {outcome:?}",
            row.text("true_sigma_codes")
        );
        assert!(outcome.is_err(), "noise was read as a wall");
        // Below one code the converter's output is hardly noise any more: on the safe side is enough.
        let allowed = if row.number("true_sigma_codes") < 1.0 {
            0.25
        } else {
            0.1
        };
        assert!((ratio - 1.0).abs() < allowed, "noise estimate {ratio}");
    }
}
