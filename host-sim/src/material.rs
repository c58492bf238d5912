//! A small table of materials: density, velocities, how well they are known, and where from.
//!
//! Velocities are for about 20 degrees Celsius. Handbooks disagree, and print impossible values now
//! and then; a velocity from a table is a start, a block of the part's own material is the truth.
//! The half-widths are the disagreement between sources where there are several, and otherwise a
//! guess of 1 % for metals and 3 % for plastics (common practice).

/// One material of the table.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Material {
    /// Its name, as scene and set-up files spell it (upper and lower case are the same).
    pub name: &'static str,
    /// Density in kg/m3.
    pub density: f64,
    /// Velocity of longitudinal waves in m/s.
    pub longitudinal: f64,
    /// Velocity of shear waves in m/s; `None` for liquids and where no value is at hand.
    pub shear: Option<f64>,
    /// Half-width in m/s of the interval in which the longitudinal velocity lies (rectangular: the
    /// standard uncertainty is this over the square root of 3).
    pub half_width: f64,
    /// Change of the longitudinal velocity in m/s per kelvin near 20 degrees Celsius; `None` where no
    /// value is at hand. Within 30 % where from memory; plastics bend at their glass transition.
    pub slope: Option<f64>,
    /// Linear thermal expansion of a solid per kelvin; `None` for fluids, whose thickness others set, and
    /// where no value is at hand. From memory.
    pub expansion: Option<f64>,
    /// Where the values come from.
    pub source: &'static str,
}

/// `shear`, `slope` and `expansion` of 0 stand for none: keeps the table to one line a material.
#[allow(clippy::too_many_arguments)]
const fn material(
    name: &'static str,
    density: f64,
    longitudinal: f64,
    shear: f64,
    half_width: f64,
    slope: f64,
    expansion: f64,
    source: &'static str,
) -> Material {
    Material {
        name,
        density,
        longitudinal,
        shear: if shear > 0.0 { Some(shear) } else { None },
        half_width,
        slope: if slope == 0.0 { None } else { Some(slope) },
        expansion: if expansion == 0.0 { None } else { Some(expansion * 1e-6) },
        source,
    }
}

/// All materials: steels and irons first, then other metals, plastics, minerals, liquids, air.
#[rustfmt::skip]
pub const MATERIALS: &[Material] = &[
    // name, density, longitudinal, shear, half-width, slope, expansion in 1e-6/K, source
    material("steel", 7700.0, 5900.0, 3230.0, 50.0, 0.0, 0.0, "ASTM E494 X3.1"),
    material("carbon steel", 7850.0, 5920.0, 3255.0, 50.0, -0.6, 11.5, "velocities and the 50 m/s: ISO 22232-2 reference steel; density from memory"),
    material("low-carbon steel 1020", 7870.0, 5890.0, 3240.0, 59.0, -0.8, 11.7, "from memory"),
    material("alloy steel 4340", 7850.0, 5850.0, 3240.0, 58.0, 0.0, 12.3, "from memory"),
    material("iron, electrolytic", 7900.0, 5960.0, 3220.0, 60.0, 0.0, 11.8, "ASTM E494; CRC 5950 m/s"),
    material("iron, ingot", 7870.0, 5960.0, 3240.0, 60.0, 0.0, 11.8, "CRC"),
    material("stainless steel S41000", 7670.0, 5900.0, 3300.0, 59.0, 0.0, 9.9, "ASTM E494"),
    material("stainless steel S34700", 7910.0, 5790.0, 3100.0, 58.0, 0.0, 16.6, "ASTM E494"),
    material("stainless steel S30400", 7930.0, 5720.0, 3150.0, 40.0, -0.6, 17.2, "from memory; handbook range 5660 to 5740 m/s"),
    material("cast iron, grey", 7200.0, 4500.0, 2500.0, 1050.0, 0.0, 10.5, "ASTM E494: 3500 to 5600 m/s; the middle"),
    material("cast iron, nodular", 7100.0, 5600.0, 3050.0, 170.0, 0.0, 11.5, "from memory"),
    material("aluminium", 2700.0, 6300.0, 3130.0, 120.0, -0.9, 23.1, "ASTM E494; CRC, rolled: 6420 m/s"),
    material("aluminium 2024-T4", 2780.0, 6375.0, 3150.0, 64.0, -0.9, 22.9, "handbook tables"),
    material("copper", 8930.0, 4760.0, 2325.0, 60.0, -0.5, 16.5, "CRC 4760; ASTM E494 4700 m/s"),
    material("brass 70/30", 8530.0, 4700.0, 2110.0, 330.0, -0.5, 19.9, "CRC 4700; ASTM E494 4370 m/s"),
    material("phosphor bronze", 8860.0, 3530.0, 2230.0, 35.0, 0.0, 17.8, "ASTM E494"),
    material("titanium", 4540.0, 6240.0, 3215.0, 62.0, 0.0, 8.6, "ASTM E494"),
    material("titanium Ti-6Al-4V", 4430.0, 6180.0, 3290.0, 62.0, -0.7, 8.6, "from memory"),
    material("nickel", 8800.0, 5630.0, 2960.0, 410.0, 0.0, 13.4, "ASTM E494; CRC 6040 m/s"),
    material("nickel alloy N06600", 8250.0, 5720.0, 3020.0, 57.0, 0.0, 13.3, "ASTM E494"),
    material("nickel-copper alloy N04400", 8830.0, 5350.0, 2720.0, 54.0, 0.0, 13.9, "CRC; ASTM E494 prints 6020, which contradicts its own modulus"),
    material("tungsten", 19100.0, 5460.0, 2620.0, 280.0, 0.0, 4.5, "ASTM E494; its bulk modulus of 394 GPa is high, 5200 m/s from memory"),
    material("zinc", 7100.0, 4170.0, 2410.0, 42.0, 0.0, 30.0, "ASTM E494"),
    material("lead", 11400.0, 2160.0, 700.0, 22.0, 0.0, 28.9, "ASTM E494/CRC"),
    material("PMMA", 1180.0, 2730.0, 1430.0, 60.0, -2.5, 70.0, "from memory; ASTM E494 acrylic 2670 m/s"),
    material("polystyrene", 1055.0, 2350.0, 1150.0, 70.0, -1.5, 70.0, "from memory"),
    material("polyetherimide", 1280.0, 2430.0, 0.0, 73.0, 0.0, 56.0, "from memory"),
    material("PVC", 1390.0, 2380.0, 1060.0, 71.0, -3.0, 70.0, "from memory"),
    material("HDPE", 955.0, 2430.0, 950.0, 73.0, -8.0, 150.0, "from memory"),
    material("epoxy", 1150.0, 2600.0, 1200.0, 78.0, -4.0, 60.0, "from memory"),
    material("glass", 2500.0, 5770.0, 3430.0, 58.0, -0.3, 9.0, "from memory"),
    material("fused silica", 2200.0, 5970.0, 3765.0, 40.0, 0.7, 0.55, "ASTM E494 5930 m/s; from memory 5970"),
    material("alumina", 3900.0, 10500.0, 6200.0, 650.0, -0.5, 8.0, "from memory, dense; ASTM E494, 92 %: 9850 m/s"),
    material("water", 998.2, 1482.34, 0.0, 0.75, 2.97, 0.0, "Bilaniuk and Wong 1993; IAPWS-95 by CoolProp 8"),
    material("glycerine", 1261.0, 1920.0, 0.0, 40.0, -2.0, 0.0, "from memory"),
    material("oil", 870.0, 1740.0, 0.0, 100.0, -3.5, 0.0, "from memory"),
    material("air", 1.204, 343.2, 0.0, 3.5, 0.6, 0.0, "ideal gas at 20 degrees Celsius"),
];

impl Material {
    /// Acoustic impedance for longitudinal waves in rayl (Pa s/m): density times velocity.
    #[must_use]
    pub const fn impedance(&self) -> f64 {
        self.density * self.longitudinal
    }

    /// Standard uncertainty (k = 1) of the longitudinal velocity in m/s.
    #[must_use]
    pub fn velocity_standard_uncertainty(&self) -> f64 {
        self.half_width / 3f64.sqrt()
    }

    /// Poisson's ratio of an isotropic solid, (cL^2 - 2 cS^2) / 2 (cL^2 - cS^2); `None` without a
    /// shear velocity.
    #[must_use]
    pub fn poisson_ratio(&self) -> Option<f64> {
        let (longitudinal, shear) = (self.longitudinal * self.longitudinal, self.shear? * self.shear?);
        Some((longitudinal - 2.0 * shear) / (2.0 * (longitudinal - shear)))
    }

    /// Longitudinal velocity in m/s at a temperature in degrees Celsius; `None` without a coefficient.
    ///
    /// Linear from 20 degrees on, good for some tens of kelvins; of water the polynomial of Bilaniuk and
    /// Wong (1993, 148 points, with its erratum), 0 to 100 degrees at atmospheric pressure.
    #[must_use]
    pub fn longitudinal_at(&self, celsius: f64) -> Option<f64> {
        if celsius == 20.0 {
            return Some(self.longitudinal);
        }
        if self.name == "water" {
            return Some(self.longitudinal + water_velocity(celsius) - water_velocity(20.0));
        }
        self.slope.map(|slope| self.longitudinal + slope * (celsius - 20.0))
    }

    /// Young's modulus in pascal, 2 density cS^2 (1 + Poisson's ratio); `None` without a shear velocity.
    #[must_use]
    pub fn youngs_modulus(&self) -> Option<f64> {
        let shear = self.shear?;
        Some(2.0 * self.density * shear * shear * (1.0 + self.poisson_ratio()?))
    }

    /// What a set of values for a solid contradicts, if anything: Poisson's ratio of engineering solids
    /// lies between 0.15 and 0.45, and hardly a solid's bulk modulus
    /// exceeds 400 GPa (common practice). Handbooks print values that fail this.
    #[must_use]
    pub fn contradiction(&self) -> Option<Contradiction> {
        let (ratio, bulk) = (self.poisson_ratio()?, self.bulk_modulus()?);
        if !(0.15..=0.45).contains(&ratio) {
            return Some(Contradiction::PoissonRatio(ratio));
        }
        (bulk > 400e9).then_some(Contradiction::BulkModulus(bulk))
    }

    /// Bulk modulus in pascal, density (cL^2 - 4/3 cS^2); `None` without a shear velocity.
    #[must_use]
    pub fn bulk_modulus(&self) -> Option<f64> {
        let shear = self.shear?;
        Some(self.density * (self.longitudinal * self.longitudinal - 4.0 / 3.0 * shear * shear))
    }
}

/// Why a solid with such density and velocities cannot be.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Contradiction {
    /// Poisson's ratio outside 0.15 to 0.45.
    PoissonRatio(f64),
    /// Bulk modulus above 400 GPa.
    BulkModulus(f64),
}

/// Velocity in water in m/s, 0 to 100 degrees Celsius at atmospheric pressure (Bilaniuk and Wong 1993,
/// 148 points, with its erratum).
#[must_use]
pub fn water_velocity(celsius: f64) -> f64 {
    const COEFFICIENTS: [f64; 6] = [
        1_402.387_44,
        5.038_361_71,
        -5.811_729_16e-2,
        3.346_381_17e-4,
        -1.482_596_72e-6,
        3.165_850_20e-9,
    ];
    COEFFICIENTS.iter().rev().fold(0.0, |sum, c| sum * celsius + c)
}

/// The material of that name, in upper or lower case.
#[must_use]
pub fn find(name: &str) -> Option<&'static Material> {
    MATERIALS
        .iter()
        .find(|material| material.name.eq_ignore_ascii_case(name.trim()))
}

/// Up to three names that come closest to one that is not in the table.
#[must_use]
pub fn suggestions(name: &str) -> Vec<&'static str> {
    crate::spelling::nearest(name, MATERIALS.iter().map(|material| material.name), 3)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Poisson's ratio of engineering solids lies between 0.15 and 0.45 (common practice).
    #[test]
    fn velocities_of_every_solid_are_consistent() {
        for material in MATERIALS {
            assert!(material.density > 0.0 && material.longitudinal > 0.0 && material.half_width > 0.0);
            assert!(material.half_width < 0.25 * material.longitudinal, "{}", material.name);
            assert!(!material.source.is_empty(), "{}", material.name);
            assert_eq!(material.contradiction(), None, "{}", material.name);
        }
    }

    /// Several web tables give wrought nickel alloy N06600 a longitudinal velocity of 7823 m/s. That
    /// would need a bulk modulus of 404 GPa, more than twice that of any such alloy; ASTM E494 X3.1
    /// has 5720 m/s.
    #[test]
    fn bulk_modulus_exposes_a_wrong_handbook_value() {
        let alloy = *find("nickel alloy N06600").unwrap();
        assert!((alloy.bulk_modulus().unwrap() / 1e9 - 169.6).abs() < 0.5);
        let wrong = Material {
            longitudinal: 7823.0,
            ..alloy
        };
        assert!((wrong.bulk_modulus().unwrap() / 1e9 - 404.6).abs() < 1.0);
        assert!(matches!(wrong.contradiction(), Some(Contradiction::BulkModulus(_))));
    }

    /// More of what handbooks print: ASTM E494 gives nickel-copper alloy 6020 m/s with a shear velocity
    /// of 2720 m/s, Poisson's ratio 0.372 and a bulk modulus of 233 GPa against 180 GPa of the alloy; a
    /// phosphor bronze of 3530 and 2230 m/s has a ratio of 0.168 and passes narrowly.
    #[test]
    fn other_doubtful_values_show_in_the_moduli() {
        let alloy = find("nickel-copper alloy N04400").unwrap();
        let printed = Material {
            longitudinal: 6020.0,
            ..*alloy
        };
        assert!((printed.poisson_ratio().unwrap() - 0.372).abs() < 1e-3);
        assert!((printed.bulk_modulus().unwrap() / 1e9 - 233.0).abs() < 1.0);
        assert!(alloy.bulk_modulus().unwrap() < 170e9);
        let bronze = find("phosphor bronze").unwrap();
        assert!((bronze.poisson_ratio().unwrap() - 0.167_942).abs() < 1e-6);
        // Two velocities swapped by mistake: no solid at all.
        let swapped = Material {
            longitudinal: 3255.0,
            shear: Some(5920.0),
            ..*find("carbon steel").unwrap()
        };
        assert!(matches!(swapped.contradiction(), Some(Contradiction::PoissonRatio(_))));
    }

    /// IAPWS-95, evaluated with CoolProp 8: 1447.2722, 1482.3462, 1528.9045 and 1550.9735 m/s.
    #[test]
    fn water_is_as_fast_as_the_steam_tables_say() {
        for (celsius, velocity) in [
            (10.0, 1447.2722),
            (20.0, 1482.3462),
            (40.0, 1528.9045),
            (60.0, 1550.9735),
        ] {
            assert!((water_velocity(celsius) - velocity).abs() < 0.03, "{celsius}");
        }
        let water = find("water").unwrap();
        assert!((water.longitudinal_at(40.0).unwrap() - 1528.88).abs() < 0.05);
    }

    /// ISO 22232-2: reference steel 5920 m/s longitudinal within 50 m/s, 3255 m/s shear.
    #[test]
    fn carbon_steel_is_the_reference_steel() {
        let steel = find("Carbon Steel").unwrap();
        assert_eq!(
            (steel.longitudinal, steel.shear, steel.half_width),
            (5920.0, Some(3255.0), 50.0)
        );
        assert!((steel.impedance() / 1e6 - 46.472).abs() < 1e-9);
    }

    #[test]
    fn names_are_unique_and_near_ones_are_suggested() {
        for (index, material) in MATERIALS.iter().enumerate() {
            assert_eq!(
                MATERIALS.iter().position(|other| other.name == material.name),
                Some(index)
            );
        }
        assert!(find("unobtainium").is_none());
        assert!(suggestions("carbonsteel").contains(&"carbon steel"));
        assert!(suggestions("polystirene").contains(&"polystyrene"));
    }
}
