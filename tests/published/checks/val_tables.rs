//! The published tables against closed forms and against each other: what every other check of
//! this kind leans on.

use halfpulse_published::oracle;
use halfpulse_published::{Table, code_rows, delay_line_codes, number_rows};

/// Closed form: half-width of a Gaussian at -X dB is sqrt(X ln 10 / 10) standard deviations, hence
/// the product of -6 dB bandwidth and -20 dB duration.
#[test]
fn val_gaussian_constants_are_the_closed_forms() {
    let constants = Table::read("physics/gaussian_constants.csv");
    let value = |name: &str| constants.row_where("name", name).number("value");
    let half_width = |db: f64| (db * 10f64.ln() / 10.0).sqrt();
    assert!((value("k_-6dB") - half_width(6.0)).abs() < 1e-10);
    assert!((value("k_-20dB") - half_width(20.0)).abs() < 1e-10);
    let product = 2.0 * half_width(6.0) * 2.0 * half_width(20.0) / (2.0 * std::f64::consts::PI);
    assert!((value("BW6*t20") - product).abs() < 1e-10);
    assert!((product - 1.605_781_443).abs() < 1e-9);
}

/// `scipy.signal.gausspulse` (SciPy 1.17.1) against this crate's own pulse.
#[test]
fn val_gaussian_samples_are_those_of_scipy() {
    for row in Table::read("physics/gaussian_samples.csv").rows() {
        let ours = oracle::gaussian_pulse(row.number("t_s"), 5e6, 0.6);
        assert!((ours - row.number("s")).abs() < 1e-11, "at {} s", row.text("t_s"));
    }
}

/// Cramér-Rao bound: the numerical derivative of the sampled pulse against the table, whose values
/// come from the closed-form integral.
#[test]
fn val_delay_bounds_follow_from_the_derivative() {
    let mut checked = 0;
    for row in Table::read("physics/delay_bound.csv").rows() {
        let (f0, relative, rate) = (row.number("f0_Hz"), row.number("fbw6"), row.number("fs_Hz"));
        let pulse: Vec<f64> = (-256..256)
            .map(|k| oracle::gaussian_pulse(f64::from(k) / rate, f0, relative))
            .collect();
        let noise = 10f64.powf(-row.number("peak_SNR_dB") / 20.0);
        let bound = oracle::delay_bound(&pulse, noise) / rate;
        let published = row.number("crlb_tau_s");
        assert!((bound / published - 1.0).abs() < 1e-4, "{bound} against {published}");
        checked += 1;
    }
    assert!(checked >= 20);
}

/// The bound stated with each set of delays, from the set's own reference. It was stated for the
/// pulse before noise and rounding, and this one is noisy: 6 %.
#[test]
fn val_bounds_of_the_delay_sets() {
    let references = number_rows("vectors/delay_references.csv");
    for (set, reference) in Table::read("vectors/delay_sets.csv").rows().zip(&references) {
        let peak = oracle::envelope(reference).into_iter().fold(0.0, f64::max);
        let noise = peak * 10f64.powf(-set.number("snr_db") / 20.0);
        let ratio = oracle::delay_bound(reference, noise) / set.number("bound_samples");
        assert!((ratio - 1.0).abs() < 0.06, "set {}: {ratio}", set.text("set"));
    }
}

/// The envelope by its definition against `abs(scipy.signal.hilbert(x))` (SciPy 1.17.1), which is
/// stored with three decimals.
#[test]
fn val_envelopes_are_those_of_scipy() {
    let envelopes = number_rows("vectors/echo_envelopes.csv");
    for (codes, published) in number_rows("vectors/echo_codes.csv").iter().zip(&envelopes) {
        for (ours, theirs) in oracle::envelope(codes).iter().zip(published) {
            assert!((ours - theirs).abs() < 6e-4, "{ours} against {theirs}");
        }
    }
}

/// Every file of codes has the shape that its table promises.
#[test]
fn val_tables_are_complete() {
    assert_eq!(Table::read("vectors/echoes.csv").rows().count(), 8);
    assert_eq!(code_rows("vectors/echo_codes.csv").len(), 8);
    assert_eq!(Table::read("vectors/delays.csv").rows().count(), 96);
    for set in 0..6 {
        assert_eq!(code_rows(&format!("vectors/delay{set}_codes.csv")).len(), 16);
    }
    assert_eq!(Table::read("vectors/pairs.csv").rows().count(), 32);
    assert_eq!(code_rows("vectors/pair_codes.csv").len(), 32);
    assert_eq!(Table::read("vectors/scenes.csv").rows().count(), 12);
    assert!(
        code_rows("vectors/scene_codes.csv")
            .iter()
            .all(|scene| scene.len() == 4096)
    );
    assert_eq!(delay_line_codes().len(), 900);
}
