//! Paths, temperature and materials of the simulated world against published and independently
//! computed values; a whole A-scan against an independent model.

use halfpulse_sim::material::{self, MATERIALS};
use halfpulse_sim::propagation::Role;
use halfpulse_sim::scene::{Couplant, DelayLine, DualElement, Lamination, Layer, Pit, ProbeKind, Scene, Temperature};
use halfpulse_sim::synthesise::{Truth, synthesise};
use halfpulse_tests::published::{Table, delay_line_codes};

/// Polystyrene 8 mm, oil 5 um, steel 4.000 mm, air; element 6 mm; absorption with dispersion, piston
/// diffraction: every sample of an independent NumPy model in the frequency domain, which follows
/// interface and two back walls. The simulator's own third echo lies behind the part that is compared.
#[test]
fn val_whole_a_scan_agrees_with_an_independent_model() {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 4.0);
    scene.record.sample_rate_mhz = 100.0;
    scene.record.samples = 900;
    scene.record.first_sample_us = 6.0;
    scene.record.bits = 16;
    scene.record.gain_db = Some(0.0);
    scene.probe.kind = ProbeKind::DelayLine;
    scene.probe.zero_offset_ns = 1000.0;
    scene.probe.element_diameter_mm = Some(6.0);
    scene.probe.beam_diffraction = true;
    scene.delay_line = Some(DelayLine {
        velocity_m_s: Some(2350.0),
        impedance_mrayl: Some(2.48),
        length_mm: Some(8.0),
        attenuation_db_per_m: 30.0,
        attenuation_exponent: 1.0,
        ..DelayLine::default()
    });
    scene.couplant = Some(Couplant {
        velocity_m_s: Some(1740.0),
        impedance_mrayl: Some(1.51),
        film_um: 5.0,
        ..Couplant::default()
    });
    scene.wall = Layer {
        velocity_m_s: Some(5920.0),
        impedance_mrayl: Some(46.47),
        thickness_mm: 4.0,
        attenuation_db_per_m: 10.0,
        attenuation_exponent: 2.0,
        ..Layer::default()
    };
    scene.back.impedance_mrayl = Some(1e-4);
    scene.echoes.back_walls = Some(2);
    let shot = synthesise(&scene, 0).expect("a good scene");
    let published = delay_line_codes();
    assert_eq!(shot.codes.len(), published.len());
    // 32768 codes are full scale: 3 codes are a ten-thousandth of it.
    let worst = shot.codes.iter().zip(&published).map(|(a, b)| (a - b).abs()).max();
    assert!(worst <= Some(3), "{worst:?} codes");
    for (echo, row) in shot
        .truth
        .echoes
        .iter()
        .zip(Table::read("delay_line_echoes.csv").rows())
    {
        let found = echo.arrival_ns + echo.correlation_shift_ns - 1000.0;
        assert!(
            (found - row.number("xcorr_delay_s") * 1e9).abs() < 0.05,
            "{row:?}: {found}"
        );
        assert!(
            (echo.amplitude_percent / (100.0 * row.number("env_peak")) - 1.0).abs() < 1e-3,
            "{row:?}"
        );
    }
}

fn dual(separation_mm: f64, wall_mm: f64) -> Scene {
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", wall_mm);
    scene.record.samples = 4096;
    scene.record.gain_db = Some(0.0);
    scene.probe.kind = ProbeKind::DualElement;
    scene.dual_element = Some(DualElement {
        separation_mm,
        crosstalk_percent: 2.0,
        crosstalk_delay_ns: 40.0,
    });
    scene
}

fn first(truth: &Truth) -> f64 {
    truth.back_walls().next().expect("a back wall").arrival_ns
}

/// V-path without delay blocks, 2 sqrt(d^2 + s^2) / c, and with them by Fermat (parametric form and
/// direct minimisation with SciPy 1.17 agree): polystyrene blocks of 8 mm, centres 6.4 mm apart.
#[test]
fn val_dual_elements_hear_a_v() {
    for row in Table::read("physics/v_path.csv").rows() {
        let scene = dual(2e3 * row.number("half_spacing_m"), 1e3 * row.number("d_m"));
        let truth = synthesise(&scene, 0).expect("a good scene").truth;
        assert!((first(&truth) - 1e9 * row.number("tof_s")).abs() < 1e-5, "{row:?}");
    }
    for row in Table::read("physics/v_path_delay.csv").rows() {
        let mut scene = dual(6.4, 1e3 * row.number("d_m"));
        scene.delay_line = Some(DelayLine {
            velocity_m_s: Some(2350.0),
            impedance_mrayl: Some(2.48),
            length_mm: Some(8.0),
            attenuation_exponent: 1.0,
            ..DelayLine::default()
        });
        let truth = synthesise(&scene, 0).expect("a good scene").truth;
        assert!((first(&truth) - 1e9 * row.number("tof_s")).abs() < 1e-5, "{row:?}");
        let leak = truth
            .echoes
            .iter()
            .find(|echo| echo.role == Role::CrossTalk)
            .expect("cross-talk");
        assert!((leak.arrival_ns - (2.0 * 8e6 / 2350.0 + 40.0)).abs() < 1e-6);
        assert!((leak.amplitude_percent - 2.0).abs() < 1e-3);
    }
}

/// A part 20 K colder to 200 K hotter (expansion 11.5e-6/K, -0.6 and -1.0 m/s per kelvin), and delay
/// lines a few kelvins warmer: hand calculations evaluated with NumPy 2.4.
#[test]
fn val_temperature_stretches_and_slows() {
    for row in Table::read("physics/temperature_part.csv").rows() {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
        scene.wall.velocity_m_s = Some(5920.0);
        scene.wall.velocity_slope_m_s_k = Some(row.number("dcdT"));
        scene.wall.expansion_ppm_k = Some(1e6 * row.number("alpha"));
        scene.temperature = Some(Temperature {
            wall_c: 20.0 + row.number("dT_K"),
            ..Temperature::default()
        });
        let truth = synthesise(&scene, 0).expect("a good scene").truth;
        assert!(
            (truth.wall_thickness_mm - 1e3 * row.number("true_hot_m")).abs() < 1e-9,
            "{row:?}"
        );
        // What an instrument set to 5920 m/s reads.
        let reading = 0.5 * 5920.0 * first(&truth) * 1e-6;
        assert!(
            (reading - 1e3 * row.number("reading_m")).abs() < 1e-9,
            "{row:?}: {reading}"
        );
    }
    for row in Table::read("physics/temperature_delay_line.csv").rows() {
        let (material, length) = match row.text("delay") {
            "PMMA 10 mm" => ("PMMA", 10.0),
            "polystyrene 8 mm" => ("polystyrene", 8.0),
            "fused silica 10 mm" => ("fused silica", 10.0),
            other => panic!("{other}"),
        };
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
        scene.probe.kind = ProbeKind::DelayLine;
        scene.delay_line = Some(DelayLine {
            material: Some(material.into()),
            length_mm: Some(length),
            attenuation_exponent: 1.0,
            ..DelayLine::default()
        });
        let cold = synthesise(&scene, 0).expect("a good scene").truth.face_ns;
        scene.temperature = Some(Temperature {
            delay_line_c: 20.0 + row.number("dT_K"),
            ..Temperature::default()
        });
        let warm = synthesise(&scene, 0).expect("a good scene").truth.face_ns;
        assert!((cold - 1e9 * row.number("tof_s")).abs() < 1e-6, "{row:?}");
        assert!(
            (warm - cold - 1e9 * row.number("drift_s")).abs() < 1e-5,
            "{row:?}: {}",
            warm - cold
        );
    }
}

/// Water between 5 and 90 degrees: IAPWS-95 by CoolProp 8.0, within 0.07 m/s.
#[test]
fn val_water_path_follows_the_steam_tables() {
    for row in Table::read("physics/water.csv").rows() {
        let (celsius, velocity) = (row.number("celsius"), row.number("coolprop_iapws95"));
        if !(5.0..=90.0).contains(&celsius) {
            continue;
        }
        assert!((material::water_velocity(celsius) - velocity).abs() < 0.07, "{row:?}");
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
        scene.record.samples = 4096;
        scene.probe.kind = ProbeKind::DelayLine;
        scene.delay_line = Some(DelayLine {
            material: Some("water".into()),
            length_mm: Some(20.0),
            attenuation_exponent: 2.0,
            ..DelayLine::default()
        });
        scene.temperature = Some(Temperature {
            delay_line_c: celsius,
            ..Temperature::default()
        });
        let truth = synthesise(&scene, 0).expect("a good scene").truth;
        // 0.07 m/s of 1480 over 27 us.
        assert!((truth.face_ns - 0.04 / velocity * 1e9).abs() < 1.4, "{row:?}");
    }
}

/// Table of materials: sources as in the table itself; impedance, Poisson's ratio, Young's modulus and
/// the factor of the mode-converted echo evaluated with NumPy 2.4.
#[test]
fn val_materials_are_those_of_their_sources() {
    let table = Table::read("physics/materials.csv");
    assert_eq!(table.rows().count(), MATERIALS.len());
    for row in table.rows() {
        let name = row.text("material").replace(';', ",");
        let ours = material::find(&name).unwrap_or_else(|| panic!("{name}"));
        assert_eq!(ours.density, row.number("rho_kg_m3"), "{name}");
        assert_eq!(ours.longitudinal, row.number("cL_mps"), "{name}");
        assert_eq!(ours.shear, row.optional_number("cS_mps"), "{name}");
        let near = |value: Option<f64>, column: &str, tolerance: f64| match (value, row.optional_number(column)) {
            (Some(value), Some(expected)) => assert!((value - expected).abs() <= tolerance, "{name} {column}: {value}"),
            (value, expected) => assert_eq!(value, expected, "{name} {column}"),
        };
        near(Some(ours.impedance() / 1e6), "ZL_MRayl", 1e-6);
        near(ours.poisson_ratio(), "poisson", 1e-9);
        near(ours.youngs_modulus().map(|modulus| modulus / 1e9), "E_GPa", 1e-6);
        near(ours.slope, "dcL_dT_mps_per_K", 1e-12);
        if ours.expansion.is_some() {
            near(ours.expansion, "thermal_exp_per_K", 1e-12);
        }
    }
}

/// An echo that returns as a shear wave reads (1 + cL / cS) / 2 of the wall: 1.416409 in steel of 5920
/// and 3230 m/s (closed form).
#[test]
fn val_mode_converted_echo_reads_too_thick() {
    let factor = Table::read("physics/ambiguity.csv")
        .row_where("item", "LS_factor_steel_5920_3230")
        .number("value_m_or_factor");
    let mut scene = Scene::contact(5.0, 60.0, "carbon steel", 10.0);
    scene.wall.shear_velocity_m_s = Some(3230.0);
    scene.echoes.mode_converted_percent = 20.0;
    let truth = synthesise(&scene, 0).expect("a good scene").truth;
    let converted = truth
        .echoes
        .iter()
        .find(|echo| echo.role == Role::ModeConverted)
        .expect("an echo");
    assert!((converted.arrival_ns / first(&truth) - factor).abs() < 1e-9);
    assert!(
        (converted.amplitude_percent / truth.back_walls().next().expect("one").amplitude_percent - 0.2).abs() < 1e-9
    );
}

/// A pit or a lamination under a third of the beam: the record is two thirds of the plate's and one
/// third of that of a plate as thick as what is left (superposition over the beam's area), to half a
/// code of each; least wall and roles say so.
#[test]
fn law_pit_and_lamination_are_two_plates() {
    two_plates(None);
    two_plates(Some(Layer {
        material: Some("epoxy".into()),
        thickness_mm: 0.7,
        attenuation_exponent: 1.0,
        ..Layer::default()
    }));
}

fn two_plates(coating: Option<Layer>) {
    let plain = |mm: f64| {
        let mut scene = Scene::contact(5.0, 60.0, "carbon steel", mm);
        scene.record.gain_db = Some(0.0);
        scene.record.bits = 16;
        scene.coating = coating.clone();
        scene
    };
    let (whole, left) = (synthesise(&plain(10.0), 0), synthesise(&plain(4.0), 0));
    let (whole, left) = (whole.expect("a good scene"), left.expect("a good scene"));
    let mut pitted = plain(10.0);
    pitted.pit = Some(Pit {
        remaining_mm: 4.0,
        area_percent: 100.0 / 3.0,
    });
    let mut split = plain(10.0);
    split.lamination = Some(Lamination {
        depth_mm: 4.0,
        area_percent: 100.0 / 3.0,
    });
    for (scene, role) in [(pitted, Role::Pit), (split, Role::Lamination)] {
        let shot = synthesise(&scene, 0).expect("a good scene");
        for ((&code, &a), &b) in shot.codes.iter().zip(&whole.codes).zip(&left.codes) {
            let expected = (2.0 * f64::from(a) + f64::from(b)) / 3.0;
            assert!((f64::from(code) - expected).abs() < 1.01, "{code} {expected}");
        }
        assert_eq!((shot.truth.wall_thickness_mm, shot.truth.least_wall_mm), (10.0, 4.0));
        let floor = shot
            .truth
            .echoes
            .iter()
            .find(|echo| echo.role == role)
            .expect("its echo");
        let paint = if coating.is_some() { 1.4e6 / 2600.0 } else { 0.0 };
        assert!((floor.arrival_ns - paint - 8e6 / 5920.0).abs() < 1e-6);
    }
}
