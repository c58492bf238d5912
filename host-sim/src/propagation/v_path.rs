//! The path of a probe with two elements: down to the back wall and up again in a V, or with delay
//! blocks in front, bent at the part's surface so that the time is the least (Fermat).

/// One leg of the V crosses `layers` (thickness in metres, velocity in m/s) and gets `across` metres
/// sideways. Returns the time of both legs in seconds.
///
/// Snell: every layer has the same ray parameter p = sin(angle) / velocity; a leg gets
/// sum of h tan(angle) sideways, which grows with p, so p is found by bisection. Without a layer, or
/// for values that are no numbers, the time of the straight way is returned.
#[must_use]
pub fn time(layers: &[(f64, f64)], across: f64) -> f64 {
    let straight: f64 = layers
        .iter()
        .map(|&(thickness, velocity)| 2.0 * thickness / velocity)
        .sum();
    let fastest = layers
        .iter()
        .filter(|layer| layer.0 > 0.0)
        .map(|layer| layer.1)
        .fold(0.0, f64::max);
    if !(across > 0.0 && fastest > 0.0) {
        return straight;
    }
    let sideways = |parameter: f64| -> f64 {
        layers
            .iter()
            .map(|&(thickness, velocity)| {
                let sine = parameter * velocity;
                thickness * sine / (1.0 - sine * sine).max(1e-300).sqrt()
            })
            .sum()
    };
    // The share of the steepest parameter that is missing, on a logarithmic scale: a thin wall under a
    // wide probe needs grazing angles.
    let (mut low, mut high) = (0.0, 1.0 / fastest);
    for _ in 0..200 {
        let middle = 0.5 * (low + high);
        if middle <= low || middle >= high {
            break;
        }
        if sideways(middle) < across {
            low = middle;
        } else {
            high = middle;
        }
    }
    // T = p X + sum of h cos / c: stationary in p, so that the rounding of p does not count.
    let upright: f64 = layers
        .iter()
        .map(|&(thickness, velocity)| {
            let sine = low * velocity;
            thickness / velocity * (1.0 - sine * sine).max(0.0).sqrt()
        })
        .sum();
    2.0 * (low * across + upright)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Half distance 2 mm, 5920 m/s: 2 sqrt(d^2 + s^2) / c.
    #[test]
    fn one_layer_is_pythagoras() {
        for (mm, microseconds) in [
            (1.0, 0.755_428_370_777),
            (5.0, 1.819_312_434_84),
            (25.0, 8.472_929_867_56),
        ] {
            let found = time(&[(mm * 1e-3, 5920.0)], 2e-3);
            assert!((found * 1e6 - microseconds).abs() < 1e-10, "{mm}: {found}");
        }
    }

    #[test]
    fn nothing_sideways_is_straight_down() {
        assert_eq!(
            time(&[(8e-3, 2350.0), (5e-3, 5920.0)], 0.0),
            2.0 * 8e-3 / 2350.0 + 2.0 * 5e-3 / 5920.0
        );
        assert_eq!(time(&[], 1e-3), 0.0);
    }
}
