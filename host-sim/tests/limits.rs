//! `halfpulse read` with what the set-up says of the part: limits, temperature, a velocity that differs from the blocks'.

mod support;

use serde_json::Value;
use support::{Bench, Train, setup};

/// A reading of 10 mm by a set-up with these lines added, as JSON.
fn read(bench: &Bench, added: &str) -> Value {
    // The element is known, so that nothing is doubted.
    let text =
        setup("back-wall-to-back-wall", 6.0, 100.0).replace("[material]", "element_diameter_mm = 60\n[material]");
    bench.write("s.toml", text + added);
    let run = bench.run(&["read", "a.npy", "--setup", "s.toml", "--format", "json"]);
    assert_eq!(run.status, 0, "{}{}", run.out, run.errors);
    run.json().remove(0)
}

fn bench() -> Bench {
    let bench = Bench::new();
    bench.write_shots("a.npy", &Train::CLEAN.shots(1, 1));
    bench
}

fn term(record: &Value, name: &str) -> f64 {
    let terms = record["budget"].as_array().expect("a list");
    let found = terms.iter().find(|term| term["term"] == name);
    found.map_or(0.0, |term| term["standard_uncertainty_mm"].as_f64().expect("a number"))
}

#[test]
fn limits_are_below_above_or_undecided() {
    let bench = bench();
    assert!(read(&bench, "")["limits"].is_null());
    // 6 m/s in 5920 over 10 mm: u is 0.0101 mm, U and so the guard band 0.0203 mm (by hand).
    for (minimum, state) in [
        (9.97, "above"),
        (9.99, "undecided"),
        (10.01, "undecided"),
        (10.03, "below"),
    ] {
        let record = read(&bench, &format!("[limits]\nminimum_mm = {minimum}\n"));
        assert_eq!(record["limits"]["minimum"], state, "{record}");
        assert!(record["limits"]["maximum"].is_null() && record["limits"]["warning"].is_null());
        let guard = record["limits"]["guard_band_mm"].as_f64().unwrap();
        assert!((guard - 0.0203).abs() < 0.0003, "{guard}");
    }
    // A guard band for 5 % wrong decisions is 1.645 u (norm.isf(0.05), SciPy 1.17), 0.0167 mm.
    let record = read(
        &bench,
        "[limits]\nminimum_mm = 5\nwarning_mm = 9.981\nmaximum_mm = 10.02\nwrong_decision_probability = 0.05\n",
    );
    let limits = &record["limits"];
    assert_eq!(
        (&limits["minimum"], &limits["warning"], &limits["maximum"]),
        (&Value::from("above"), &Value::from("above"), &Value::from("below"))
    );
    assert!((limits["guard_band_mm"].as_f64().unwrap() - 0.01667).abs() < 0.0003);
    assert!(limits["conformance_probability"].as_f64().unwrap() > 0.9);
    let run = bench.run(&["read", "a.npy", "--setup", "s.toml"]);
    assert!(
        run.out.contains("minimum 5.000 mm: above") && run.out.contains("guard band 0.017 mm"),
        "{}",
        run.out
    );
}

#[test]
fn a_doubt_decides_nothing() {
    let bench = bench();
    // Without an element diameter, and with a velocity that is known well, the beam is a doubt.
    let text = setup("back-wall-to-back-wall", 0.1, 100.0) + "[limits]\nminimum_mm = 1\n";
    bench.write("s.toml", text);
    let run = bench.run(&["read", "a.npy", "--setup", "s.toml", "--format", "json"]);
    let record = &run.json()[0];
    assert_eq!(record["doubts"][0], "beam-unknown");
    assert_eq!(record["limits"]["minimum"], "undecided");
    let run = bench.run(&["read", "a.npy", "--setup", "s.toml"]);
    assert!(
        run.out.contains("a reading with a doubt decides nothing"),
        "{}",
        run.out
    );
}

#[test]
fn temperature_moves_the_reading_or_widens_it() {
    let bench = bench();
    let plain = read(&bench, "");
    let thickness = |record: &Value| record["thickness_mm"].as_f64().unwrap();
    let material = |lines: &str| {
        let text = setup("back-wall-to-back-wall", 6.0, 100.0);
        let text = text.replace("[material]", "element_diameter_mm = 60\n[material]");
        bench.write("s.toml", text.replace("[zero]", &format!("{lines}\n[zero]")));
        let run = bench.run(&["read", "a.npy", "--setup", "s.toml", "--format", "json"]);
        assert_eq!(run.status, 0, "{}{}", run.out, run.errors);
        run.json().remove(0)
    };
    // 50 K at -0.8 m/s/K: 40 m/s of 5920 less (by hand). u(β): 0.16 x 50 = 8 m/s; 2 K: 1.6 m/s; together 8.158 of 5880.
    let coefficient = "velocity_temperature_coefficient_m_s_k = -0.8";
    let hot = material(&format!(
        "{coefficient}\n[part]\ntemperature_c = 70\ntemperature_standard_uncertainty_k = 2"
    ));
    assert!((thickness(&hot) / thickness(&plain) - 5880.0 / 5920.0).abs() < 1e-6);
    assert!(
        (term(&hot, "temperature") - 9.932 * 8.158 / 5880.0).abs() < 2e-5,
        "{hot}"
    );
    assert_eq!(hot["doubts"], Value::Array(Vec::new()), "{hot}");
    // Unknown: 10 K / sqrt(3) times 0.8158 m/s/K: 4.710 m/s. Less than U from the velocity's 6 m/s: no doubt.
    let unknown = material(coefficient);
    assert_eq!(thickness(&unknown), thickness(&plain));
    assert!((term(&unknown, "temperature") - 10.0 * 4.710 / 5920.0).abs() < 2e-5);
    assert_eq!(unknown["doubts"], Value::Array(Vec::new()), "{unknown}");
    // A stronger coefficient: 10 K are 20 m/s, more than twice 6.
    let doubted = material("velocity_temperature_coefficient_m_s_k = -2.0");
    assert_eq!(doubted["doubts"][0], "temperature-unknown", "{doubted}");
    assert_eq!(doubted["dominating_term"], "temperature");
}

#[test]
fn the_block_is_not_the_part() {
    let bench = bench();
    let text = setup("back-wall-to-back-wall", 6.0, 100.0)
        .replace("[zero]", "part_velocity_standard_uncertainty_m_s = 8\n[zero]");
    bench.write("s.toml", text);
    let run = bench.run(&["read", "a.npy", "--setup", "s.toml", "--format", "json"]);
    // Root of 6² and 8² is 10 m/s, of 5920 over 10 mm: 16.892 um (by hand).
    let velocity = term(&run.json()[0], "velocity");
    assert!((velocity - 0.016_892).abs() < 2e-5, "{velocity}");
}
