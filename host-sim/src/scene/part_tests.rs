//! What is refused in the tables of a part that is not ideal, with line and remedy.

use super::*;

const GOOD: &str = r#"version = 1
[record]
sample_rate_mhz = 50
samples = 2048
[probe]
kind = "contact"
centre_frequency_mhz = 5
relative_bandwidth_percent = 60
element_diameter_mm = 6
face_impedance_mrayl = 38.5
[wall]
material = "carbon steel"
thickness_mm = 10
"#;

/// The scene with lines behind it; the first of them is line 14.
fn with(lines: &str) -> String {
    format!("{GOOD}{lines}\n")
}

#[test]
fn every_table_is_understood_and_survives_writing() {
    let text = with(
        "[couplant]\nmaterial = \"glycerine\"\nfilm_um = 5\n[surface]\nroughness_um = 3\nradius_mm = 50\n\
         [back]\nmaterial = \"water\"\nroughness_um = 20\nroughness_length_mm = 0.5\ntilt_degrees = 0.3\n\
         [pit]\nremaining_mm = 6\narea_percent = 20\n[lamination]\ndepth_mm = 4\narea_percent = 10\n\
         [grain]\nlevel_db = -40\n[temperature]\nwall_c = 60\ncouplant_c = 55\n\
         [echoes]\nmode_converted_percent = 5",
    );
    let scene = Scene::from_toml(&text).unwrap();
    let again: Scene = toml::Value::try_from(&scene).unwrap().try_into().unwrap();
    assert_eq!(again, scene);
    assert!(crate::synthesise(&scene, 1).is_ok());
    let dual = with("[dual_element]\nseparation_mm = 6").replace("\"contact\"", "\"dual-element\"");
    assert!(crate::synthesise(&Scene::from_toml(&dual).unwrap(), 1).is_ok());
}

#[test]
fn absurd_and_contradictory_values_are_refused_with_line_and_remedy() {
    for (lines, line, words) in [
        ("[couplant]\nmaterial = \"oil\"\nfilm_um = -1", 16, "give 0 to 1000 um"),
        ("[couplant]\nmaterial = \"oyl\"\nfilm_um = 1", 15, "did you mean oil"),
        ("[couplant]\nmaterial = \"oil\"", 14, "missing field `film_um`"),
        (
            "[couplant]\nimpedance_mrayl = 0\nvelocity_m_s = 1740\nfilm_um = 1",
            15,
            "MRayl",
        ),
        ("[surface]\nroughness_um = 3", 14, "add a [couplant] table"),
        (
            "[couplant]\nmaterial = \"oil\"\nfilm_um = 1\n[surface]\nradius_mm = 2",
            18,
            "give 3.006",
        ),
        ("[back]\nroughness_um = nan", 15, "give 0 to 1000"),
        ("[back]\ntilt_degrees = 45", 15, "give 0 to 10"),
        ("[pit]\nremaining_mm = -2\narea_percent = 10", 15, "give 0.001"),
        (
            "[pit]\nremaining_mm = 10\narea_percent = 10",
            15,
            "less than wall.thickness_mm",
        ),
        ("[pit]\nremaining_mm = 11\narea_percent = 10", 15, "give 0.001 to 10 mm"),
        ("[pit]\nremaining_mm = 3\narea_percent = 120", 16, "give 0 to 99"),
        (
            "[pit]\nremaining_mm = 3\narea_percent = 60\n[lamination]\ndepth_mm = 5\narea_percent = 50",
            19,
            "99 % together",
        ),
        ("[grain]\nplace = 3", 14, "level_db or size_um"),
        ("[grain]\nlevel_db = -40\nsize_um = 50", 16, "keep one"),
        ("[temperature]\nwall_c = 5000", 15, "give -100 to 500"),
        ("[dual_element]\nseparation_mm = 6", 14, "dual-element"),
        ("[echoes]\nmode_converted_percent = 200", 15, "give 0 to 100"),
        ("[echoes]\ndecay = 0.8\n[back]\ntilt_degrees = 1", 15, "keep one"),
        ("[couplant]\nmaterial = \"oil\"\nfilm = 1", 16, "film_um"),
        ("[back]\nroughness_um = \"20 um\"", 15, "number alone"),
        ("[[coating]]\nmaterial = \"epoxy\"\nthickness_mm = 1", 14, "one coating"),
    ] {
        let error = Scene::from_toml(&with(lines)).unwrap_err();
        let message = error.to_string();
        assert_eq!(error.line, Some(line), "{lines}: {message}");
        assert!(message.contains(words), "{message} lacks {words}");
        assert!(!message.contains('\n'), "{message}");
    }
    for (from, to, words) in [
        ("kind = \"contact\"", "kind = \"dual-element\"", "[dual_element]"),
        ("face_impedance_mrayl = 38.5\n", "", "ceramic"),
        ("element_diameter_mm = 6\n", "", "element's size"),
    ] {
        let text = with("[couplant]\nmaterial = \"oil\"\nfilm_um = 1\n[back]\ntilt_degrees = 1").replace(from, to);
        let message = Scene::from_toml(&text).unwrap_err().to_string();
        assert!(message.contains(words), "{message} lacks {words}");
    }
}

/// A temperature without a coefficient, water that boils, a wall without shear waves.
#[test]
fn what_cannot_be_known_is_asked_for() {
    let asked = |text: &str| Scene::from_toml(text).unwrap().stack().unwrap_err().to_string();
    let titanium = with("[temperature]\nwall_c = 60").replace("carbon steel", "titanium");
    assert!(asked(&titanium).contains("give wall.velocity_slope_m_s_k"));
    let own = titanium.replace("thickness_mm = 10", "thickness_mm = 10\nvelocity_slope_m_s_k = -0.7");
    assert!(Scene::from_toml(&own).unwrap().stack().is_ok());
    let water = with("[temperature]\ncouplant_c = 120\n[couplant]\nmaterial = \"water\"\nfilm_um = 5");
    assert!(asked(&water).contains("give 0 to 100 degrees Celsius for water"));
    let liquid = with("[echoes]\nmode_converted_percent = 5").replace("carbon steel", "water");
    assert!(
        Scene::from_toml(&liquid)
            .unwrap_err()
            .to_string()
            .contains("shear_velocity_m_s")
    );
}

/// A hundred thousand layers are a fault in one line, and not an hour's work.
#[test]
fn a_heap_of_layers_is_one_error() {
    let text = with(&"[[coating]]\nthickness_mm = 1\n".repeat(100_000));
    let error = Scene::from_toml(&text).unwrap_err();
    assert!(error.to_string().len() < 300, "{error}");
}
