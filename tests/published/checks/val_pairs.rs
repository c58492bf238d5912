//! Two echoes told apart by the model, against NumPy's exhaustive search on the same codes.

use halfpulse::echo::Surroundings;
use halfpulse::echo::noise::TimingNoise;
use halfpulse::echo::pulse::{ReferencePulse, learn};
use halfpulse::echo::separation::PulseTrust;
use halfpulse::echo::separation::model::{Stretch, decide};
use halfpulse::setup::PULSE_CAPACITY;
use halfpulse::{AdcFormat, Hertz, Record, SampleClock};
use halfpulse_published::{Table, code_rows, pairs};

/// The 32 records of `pairs.csv`: NumPy's exhaustive search and maximum-likelihood fit of one and two pulses
/// (`tests/published/README.md`). Where two explain less than one, only the verdict can be compared.
///
/// Source: `pairs.csv`, NumPy 2.4.6 and SciPy 1.17.1, `tests/oracles/pairs.py`.
#[test]
fn val_pairs_of_numpy() {
    let reference = pairs::reference();
    let mut buffer = [0.0f32; PULSE_CAPACITY];
    let facts = learn(&reference, 10.0, &mut buffer).expect("a reference pulse");
    let pulse = ReferencePulse::new(&buffer, facts);
    // What NumPy calls a delay is where sample 128 of the reference goes.
    let origin = f64::from(facts.origin) - pairs::BEFORE_ORIGIN as f64;
    let mut compared = 0;
    for (row, codes) in Table::read("vectors/pairs.csv")
        .rows()
        .zip(code_rows("vectors/pair_codes.csv"))
    {
        let sigma = pairs::UNIT * 10f64.powf(-row.number("snr_db") / 20.0);
        let noise = sigma.hypot(12f64.sqrt().recip()) as f32;
        let surroundings = Surroundings {
            record: Record::new(&codes, AdcFormat::signed(12), SampleClock::new(Hertz::from_mhz(50.0))),
            pulse,
            noise,
            timing_noise: TimingNoise::steady(noise),
            samples_per_cycle: 10.0,
        };
        let middle = (row.number("true_first") + 0.5 * row.number("true_spacing") + origin) as f32;
        let reach = (0.5 * row.number("true_spacing") + 26.0) as f32;
        let stretch = Stretch {
            from: middle - reach,
            to: middle + reach,
            least_spacing: 0.06,
            trust: PulseTrust::Learned { mismatch: 0.0 },
        };
        let answer = decide(&surroundings, &stretch, &mut [0.0; 512], &mut [0.0; 416]);
        let twice = 2.0 * f64::from(answer.log_odds.expect("a fit"));
        let stated = row.number("twice_log_likelihood_ratio");
        let name = format!(
            "{} dB, ratio {}, spacing {}",
            row.text("snr_db"),
            row.text("true_ratio"),
            row.text("true_spacing")
        );
        if row.number("true_ratio") == 0.0 {
            assert!(answer.split.is_err() && twice < 14.0, "{name}: {answer:?}");
            continue;
        }
        let split = answer
            .split
            .unwrap_or_else(|why| panic!("{name}: {why:?}, {twice} for {stated}"));
        let bound = row.number("spacing_bound");
        let spacing = row.number("two_second") - row.number("two_first");
        let error = (f64::from(split.spacing) - spacing) / bound;
        println!("{name}: 2 ln L {twice:.1} {stated:.1}; spacing off by {error:+.3} of the bound");
        // Both maximise the same function of the same codes; the reference differs by its cut ends.
        assert!(
            (twice / stated - 1.0).abs() < 0.01 + 1.0 / stated,
            "{name}: {twice} {stated}"
        );
        assert!(error.abs() < 0.25, "{name}: {} {spacing}", split.spacing);
        let ratio = f64::from(split.second_amplitude / split.first_amplitude);
        let stated = row.number("two_second_amplitude") / row.number("two_first_amplitude");
        assert!((ratio - stated).abs() < 0.01, "{name}: ratio {ratio} {stated}");
        // The bound was made with the true amplitudes; a weak second echo's uncertainty goes with the fitted one.
        let weak = if stated.abs() < 0.3 {
            row.number("true_ratio") / stated
        } else {
            1.0
        };
        let uncertainty = f64::from(split.spacing_uncertainty) / (bound * weak);
        assert!(
            (0.93..1.07).contains(&uncertainty),
            "{name}: uncertainty over bound {uncertainty}"
        );
        compared += 1;
    }
    assert_eq!(compared, 30);
}
