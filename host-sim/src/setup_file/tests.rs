use super::*;
use halfpulse::{Coating, Hertz, Material, Metres, MetresPerSecond, Probe, Seconds, Window, Zero};
use proptest::prelude::*;
use tempfile::TempDir;

/// The documented example, for a coated part.
static EXAMPLE: std::sync::LazyLock<String> =
    std::sync::LazyLock::new(|| keys::EXAMPLE.replace("[zero]", "[coating]\nvelocity_m_s = 2300.0\n[zero]"));

fn parse(text: &str) -> Result<SetupFile, InputError> {
    SetupFile::parse(Path::new("s.toml"), text)
}

#[test]
fn the_example_becomes_the_cores_setup() {
    let setup = parse(&EXAMPLE).unwrap().gauge_setup().unwrap();
    let expected = GaugeSetup::new(
        Hertz::from_mhz(50.0),
        Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
        Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(17.0)),
        Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
        Span::BackWallToBackWall,
        Window {
            from: Seconds::from_us(0.5),
            to: Seconds::from_us(60.0),
        },
    )
    // Without a stated uncertainty: 5 % of the velocity.
    .with_coating(Coating::new(MetresPerSecond::new(2300.0), MetresPerSecond::new(115.0)));
    assert_eq!(setup, expected);
}

#[test]
fn optional_keys_have_their_defaults() {
    let short: String = EXAMPLE
        .lines()
        .filter(|line| {
            let optional = [
                "first_sample_us",
                "bits",
                "codes",
                "element_diameter_mm",
                "name",
                "[coating]",
                "velocity_m_s = 2300",
                "offset_ns",
                "standard_uncertainty_ns",
                "[zero]",
                "to_us",
                "coverage_factor",
            ];
            !optional.iter().any(|key| line.starts_with(key))
        })
        .map(|line| format!("{line}\n"))
        .collect();
    let file = parse(&short).unwrap();
    assert_eq!(file.coding(), Coding::default());
    let setup = file.gauge_setup().unwrap();
    assert_eq!(setup.coverage_factor, 2.0);
    assert_eq!(setup.probe.face, ProbeFace::Hard);
    assert_eq!(setup.probe.couplant_film, Metres::new(2e-6));
    assert!(setup.zero.standard_uncertainty >= Seconds::new(1.0));
    let interface = short
        .replace("back-wall-to", "interface-to")
        .replace("contact", "delay-line");
    let setup = parse(&interface).unwrap().gauge_setup().unwrap();
    assert_eq!(setup.zero, Zero::new(Seconds::ZERO, Seconds::ZERO));
    assert_eq!(setup.probe.face, ProbeFace::Plastic);
    let transmission = short.replace("back-wall-to", "transmission-pulse-to");
    assert!(
        parse(&transmission)
            .unwrap_err()
            .to_string()
            .contains("rests on the zero")
    );
}

#[test]
fn every_fault_names_line_and_remedy() {
    for (from, to, expected) in [
        ("version = 1", "version = 2", "s.toml:1: version: 2 is not known"),
        ("version = 1\n", "", "s.toml: version: is missing; add version"),
        ("bits = 12", "bits = 12 12", "s.toml:5: "),
        (
            "bits = 12",
            "bitz = 12",
            "s.toml:5: unknown key bitz in [record]; did you mean bits?",
        ),
        (
            "[probe]",
            "[prob]",
            "s.toml:7: unknown table [prob]; did you mean probe?",
        ),
        (
            "version = 1",
            "version = 1\ncolour = 3",
            "s.toml:2: unknown key colour; known here: version",
        ),
        (
            "\"contact\"",
            "\"contakt\"",
            "s.toml:8: [probe] kind: \"contakt\" is not known, \"contact\" is; write one of",
        ),
        ("\"contact\"", "3", "s.toml:8: [probe] kind: is not a text"),
        (
            "kind = \"contact\"\n",
            "",
            "s.toml:7: [probe] kind: is missing; add kind",
        ),
        (
            "sample_rate_mhz = 50.0",
            "sample_rate_mhz = 0",
            "s.toml:3: [record] sample_rate_mhz: ",
        ),
        (
            "sample_rate_mhz = 50.0",
            "sample_rate_mhz = nan",
            "s.toml:3: [record] sample_rate_mhz: ",
        ),
        (
            "sample_rate_mhz = 50.0",
            "sample_rate_mhz = 12",
            "must be at least twice",
        ),
        (
            "sample_rate_mhz = 50.0",
            "sample_rate_mhz = \"50 MHz\"",
            "s.toml:3: [record] sample_rate_mhz: is not a number",
        ),
        (
            "bits = 12",
            "bits = 17",
            "s.toml:5: [record] bits: must be from 2 to 16",
        ),
        (
            "bits = 12",
            "bits = 1.5",
            "s.toml:5: [record] bits: is not a small whole number",
        ),
        (
            "codes = \"signed\"",
            "full_scale = 0",
            "s.toml:6: [record] full_scale: must be a positive",
        ),
        (
            "first_sample_us = 0.0",
            "first_sample_us = inf",
            "s.toml:4: [record] first_sample_us",
        ),
        (
            "percent = 60",
            "percent = 201",
            "s.toml:10: [probe] relative_bandwidth_percent: ",
        ),
        ("mhz = 5.0", "mhz = 1e300", "s.toml:9: [probe] centre_frequency_mhz: "),
        (
            "diameter_mm = 6.0",
            "diameter_mm = -6.0",
            "s.toml:11: [probe] element_diameter_mm: ",
        ),
        (
            "velocity_m_s = 5920.0",
            "velocity_m_s = -5920.0",
            "s.toml:14: [material] velocity_m_s: ",
        ),
        // A coating may be of unknown velocity, but what is stated of a velocity needs one.
        (
            "velocity_m_s = 2300.0",
            "velocity_standard_uncertainty_m_s = 50",
            "s.toml:17: [coating] velocity_standard_uncertainty_m_s: belongs to a velocity",
        ),
        (
            "velocity_m_s = 2300.0",
            "velocity_m_s = 2300.0\nvelocity_standard_uncertainty_m_s = -1",
            "s.toml:18: [coating] velocity_standard_uncertainty_m_s: ",
        ),
        (
            "[coating]",
            "[part]\nouter_radius_mm = 0\n[coating]",
            "s.toml:17: [part] outer_radius_mm: ",
        ),
        (
            "[material]",
            "reference_pulse_learned_on_mm = -1\n[material]",
            "s.toml:12: [probe] reference_pulse_learned_on_mm: ",
        ),
        (
            "from_us = 0.5",
            "from_us = 70",
            "s.toml:23: [measure] from_us: the window must start",
        ),
        ("factor = 2.0", "factor = 0", "s.toml:25: [measure] coverage_factor: "),
        (
            "coverage_factor",
            "[calibration]\nfrom_mm = 1\n#",
            "s.toml:26: [calibration] from_mm: stands alone",
        ),
        (
            "coverage_factor",
            "[calibration]\nblocks_mm = [1, \"2\"]\n#",
            "s.toml:26: [calibration] blocks_mm: is not a list",
        ),
        ("[coating]", "[material]", "s.toml:16: "),
        (
            "[coating]",
            "part_velocity_standard_uncertainty_m_s = -1\n[coating]",
            "s.toml:16: [material] part_velocity_standard_uncertainty_m_s: ",
        ),
        (
            "[coating]",
            "velocity_temperature_coefficient_m_s_k = nan\n[coating]",
            "s.toml:16: [material] velocity_temperature_coefficient_m_s_k: ",
        ),
        (
            "[coating]",
            "[part]\ntemperature_c = 60\n[coating]",
            "s.toml:17: [part] temperature_c: changes nothing without",
        ),
        (
            "[coating]",
            "velocity_temperature_coefficient_m_s_k = -0.8\n[part]\ntemperature_c = 6e4\n[coating]",
            "s.toml:18: [part] temperature_c: ",
        ),
        (
            "[coating]",
            "[part]\ntemperature_standard_uncertainty_k = 1\n[coating]",
            "s.toml:17: [part] temperature_standard_uncertainty_k: belongs to",
        ),
        (
            "[coating]",
            "[limits]\nwarning_mm = 6\n[coating]",
            "s.toml:16: [limits] minimum_mm: is missing",
        ),
        (
            "[coating]",
            "[limits]\nminimum_mm = 5\nwarning_mm = 4\n[coating]",
            "s.toml:18: [limits] warning_mm: the warning limit must not",
        ),
        (
            "[coating]",
            "[limits]\nminimum_mm = 5\nmaximum_mm = 4\n[coating]",
            "s.toml:18: [limits] maximum_mm: ",
        ),
        (
            "[coating]",
            "[limits]\nminimum_mm = 5\nguard_band_factor = 11\n[coating]",
            "s.toml:18: [limits] guard_band_factor: ",
        ),
        (
            "[coating]",
            "[limits]\nminimum_mm = 5\nguard_band_factor = 1\nwrong_decision_probability = 0.05\n[coating]",
            "s.toml:19: [limits] wrong_decision_probability: stands beside",
        ),
        (
            "[material]",
            "reference_pulse_noise_percent = 101\n[material]",
            "s.toml:12: [probe] reference_pulse_noise_percent: ",
        ),
    ] {
        let text = parse(&EXAMPLE.replacen(from, to, 1)).expect_err(to).to_string();
        assert!(text.contains(expected), "{to}: {text}");
        assert!(text.contains("; ") && !text.contains('\n'), "{text}");
    }
    assert!(parse("").unwrap_err().to_string().contains("version: is missing"));
    let missing = SetupFile::read(Path::new("no/such.toml")).unwrap_err().to_string();
    assert!(missing.contains("no such file"), "{missing}");
}

#[test]
fn temperature_and_limits_reach_the_core() {
    let text = EXAMPLE.replace(
        "[coating]",
        "part_velocity_standard_uncertainty_m_s = 9\nvelocity_temperature_coefficient_m_s_k = -0.8\n[part]\n\
         temperature_c = 70\n[limits]\nminimum_mm = 5\nwarning_mm = 6\n[coating]",
    );
    let file = parse(&text).unwrap();
    let material = file.gauge_setup().unwrap().material;
    assert_eq!(material.part_velocity_standard_uncertainty, MetresPerSecond::new(9.0));
    // 5920 - 0.8 x 50, and a fifth of 0.8 times 50 with 0.8 times 1 K: by hand.
    assert_eq!(material.velocity_in_part(), MetresPerSecond::new(5880.0));
    assert!((material.temperature_uncertainty().get() - 8.039_9).abs() < 1e-4);
    let limits = Limits::minimum(Metres::from_mm(5.0)).with_warning(Metres::from_mm(6.0));
    assert_eq!(file.limits().unwrap(), Some(limits));
    assert_eq!(parse(&EXAMPLE).unwrap().limits().unwrap(), None);
    let unknown = parse(&text.replace("temperature_c = 70", "")).unwrap();
    let material = unknown.gauge_setup().unwrap().material;
    assert!(material.temperature.is_some_and(|follows| follows.part.is_none()));
}

#[test]
fn a_zero_belongs_to_its_pulse() {
    let folder = TempDir::new().unwrap();
    let pulse = vec![0.0f32, 0.5, 1.0, -0.5, 0.0];
    npy::write_pulse(&folder.path().join("pulse.npy"), &pulse).unwrap();
    let sum = checksum(&pulse);
    let path = folder.path().join("s.toml");
    let named = EXAMPLE.replace("[material]", "reference_pulse = \"pulse.npy\"\n[material]");
    let file = SetupFile::parse(&path, &named).unwrap();
    assert_eq!(file.reference_pulse().unwrap(), Some(pulse.clone()));
    let with_sum = named.replace("offset_ns", &format!("reference_pulse_checksum = \"{sum}\"\noffset_ns"));
    let file = SetupFile::parse(&path, &with_sum).unwrap();
    assert_eq!(file.reference_pulse().unwrap(), Some(pulse.clone()));

    npy::write_pulse(&folder.path().join("pulse.npy"), &pulse[1..]).unwrap();
    let text = file.reference_pulse().unwrap_err().to_string();
    assert!(
        text.contains("s.toml:20: [zero] reference_pulse_checksum: the zero was learned with another"),
        "{text}"
    );

    let nameless = with_sum.replace("reference_pulse = \"pulse.npy\"\n", "");
    let text = SetupFile::parse(&path, &nameless)
        .unwrap()
        .reference_pulse()
        .unwrap_err()
        .to_string();
    assert!(text.contains("does not name"), "{text}");

    std::fs::remove_file(folder.path().join("pulse.npy")).unwrap();
    assert!(file.reference_pulse().unwrap_err().to_string().contains("no such file"));
    assert!(parse(&EXAMPLE).unwrap().reference_pulse().unwrap().is_none());
}

/// Test vectors of FNV-1a, 64 bits, from draft-eastlake-fnv: of nothing, and of the four bytes of
/// "foob" read as one little-endian float.
#[test]
fn val_checksum_is_fnv_1a() {
    assert_eq!(checksum(&[]), "fnv1a64:cbf29ce484222325");
    assert_eq!(checksum(&[f32::from_le_bytes(*b"foob")]), "fnv1a64:dd120e790c2512af");
}

#[test]
fn every_key_is_described_and_written() {
    let full = SetupKeys {
        record: RecordKeys {
            sample_rate_mhz: 50.0,
            first_sample_us: Some(1.5),
            bits: Some(12),
            codes: CodeKind::OffsetBinary,
            full_scale: Some(2.0),
            trigger_jitter_ns: Some(0.5),
        },
        probe: ProbeKeys {
            kind: ProbeKind::DualElement,
            centre_frequency_mhz: 5.0,
            relative_bandwidth_percent: 60.0,
            element_diameter_mm: Some(6.0),
            element_diameter_uncertainty_percent: 5.0,
            face: Some(ProbeFace::Hard),
            couplant_film_um: 3.0,
            echo_phase_degrees: Some(1.5),
            back_wall_sign: Some(EchoSign::AsPulse),
            interface_sign: Some(EchoSign::Inverted),
            reference_pulse: Some("a \"b\" \\ c\u{7}.npy".to_string()),
            reference_pulse_noise_percent: Some(0.25),
            reference_pulse_mismatch_percent: Some(1.5),
            reference_pulse_learned_on_mm: Some(25.0),
        },
        delay_line: Some(DelayLineKeys {
            length_mm: 8.0,
            velocity_m_s: 2350.0,
        }),
        dual_element: Some(DualElementKeys {
            separation_mm: 6.4,
            separation_standard_uncertainty_mm: Some(0.1),
        }),
        material: MaterialKeys {
            name: Some("Stahl, größer".to_string()),
            velocity_m_s: 5920.0,
            velocity_standard_uncertainty_m_s: 17.0,
            part_velocity_standard_uncertainty_m_s: Some(9.0),
            velocity_temperature_coefficient_m_s_k: Some(-0.8),
            velocity_temperature_coefficient_standard_uncertainty_m_s_k: Some(0.1),
            velocity_temperature_c: Some(21.0),
        },
        part: PartKeys {
            roughness_um: Some(25.0),
            temperature_c: Some(60.0),
            temperature_standard_uncertainty_k: Some(2.0),
            outer_radius_mm: Some(57.0),
            inner_radius_mm: None,
        },
        limits: Some(LimitsKeys {
            minimum_mm: 5.0,
            warning_mm: Some(6.0),
            maximum_mm: Some(12.0),
            guard_band_factor: None,
            wrong_decision_probability: Some(0.05),
        }),
        coating: Some(CoatingKeys {
            velocity_m_s: Some(2300.0),
            velocity_standard_uncertainty_m_s: Some(80.0),
        }),
        zero: ZeroKeys {
            offset_ns: 12.345,
            standard_uncertainty_ns: Some(0.5),
            learned_on_mm: Some(5.0),
            reference_pulse_checksum: Some("fnv1a64:00".to_string()),
        },
        measure: MeasureKeys {
            span: Span::BackWallToBackWall,
            from_us: 0.5,
            to_us: Some(60.0),
            uncoupled_record: Some("air.npy".to_string()),
            uncoupled_from_us: Some(0.4),
            coverage_factor: 3.0,
        },
        calibration: Some(CalibrationKeys {
            velocity_zero_correlation: Some(0.9),
            from_mm: Some(5.0),
            to_mm: Some(25.0),
            blocks_mm: vec![5.0, 25.0],
            temperature_c: Some(21.0),
            date: Some("2026-01-31".to_string()),
        }),
    };
    let text = full.to_toml();
    assert_eq!(parse(&text).unwrap().keys, full, "{text}");
    let mut other = full.clone();
    if let Some(limits) = &mut other.limits {
        limits.guard_band_factor = Some(1.5);
        limits.wrong_decision_probability = None;
    }
    (other.part.outer_radius_mm, other.part.inner_radius_mm) = (None, Some(200.0));
    assert_eq!(parse(&other.to_toml()).unwrap().keys, other);
    let mut unknown = full.clone();
    unknown.coating = Some(CoatingKeys::default());
    assert_eq!(parse(&unknown.to_toml()).unwrap().keys, unknown);
    let text = text + &other.to_toml();
    for key in keys::KEYS {
        assert!(
            text.contains(&format!("# {}\n{} = ", key.about, key.name)),
            "{}",
            key.name
        );
        assert!(keys::help().contains(key.name));
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn numbers_survive_writing_and_reading(rate in 20.0f64..200.0, zero in -1e6f64..1e6, velocity in 1.0f64..1e4) {
        let mut keys = parse(&EXAMPLE).unwrap().keys;
        keys.record.sample_rate_mhz = rate;
        keys.zero.offset_ns = zero;
        keys.material.velocity_m_s = velocity;
        prop_assert_eq!(parse(&keys.to_toml()).unwrap().keys, keys);
    }

    #[test]
    fn no_text_makes_the_reader_panic(at in 0usize..500, junk in "\\PC{0,12}", cut in 0usize..500) {
        let mut text = EXAMPLE.to_string();
        let at = (0..=at.min(text.len())).rev().find(|i| text.is_char_boundary(*i)).unwrap_or(0);
        text.insert_str(at, &junk);
        let _ = parse(&text);
        text.truncate((0..=cut.min(text.len())).rev().find(|i| text.is_char_boundary(*i)).unwrap_or(0));
        let _ = parse(&text);
        let _ = parse(&junk);
    }
}
