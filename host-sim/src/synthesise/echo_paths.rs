//! The paths of a scene's echoes.

use crate::propagation::{Limits, MOST_PATHS, Path, Role, Stack};
use crate::scene::{Scene, SceneError};

/// Echoes weaker than this share of the strongest are left out.
const SMALLEST: f64 = 1e-6;

/// The paths with what the table `[echoes]` asks for.
pub(super) fn echo_paths(scene: &Scene, stack: &Stack, until: f64) -> Result<Vec<Path>, SceneError> {
    let wanted = &scene.echoes;
    let too_many = || SceneError {
        field: "wall.thickness_mm".into(),
        what: format!("the record holds more than {MOST_PATHS} echoes"),
        remedy: "record for less time, take a thicker wall or limit echoes.back_walls".into(),
    };
    // The first back wall sets gain and noise even where the record ends before it.
    let first = stack.arrival(0, (1, u32::from(stack.coating.is_some()), 1), Role::BackWall);
    let limits = Limits {
        until: until.max(first * (1.0 + 1e-12)),
        // With a decay of its own a train may last longer than the borders would let it.
        smallest: if wanted.decay.is_some() { 0.0 } else { SMALLEST },
        wall_trips: wanted.back_walls.unwrap_or(u32::MAX),
    };
    let mut paths = stack.paths(&limits).ok_or_else(too_many)?;
    if let (Some(decay), Some(first)) = (wanted.decay, first_back_wall(&paths)) {
        let first = paths[first].amplitude;
        let mut natural = vec![0.0];
        natural.extend(paths.iter().filter(|p| p.role == Role::BackWall).map(|p| p.amplitude));
        for path in paths.iter_mut().filter(|path| path.wall_trips > 0) {
            let trips = path.wall_trips;
            let ordered = first * libm::pow(decay, f64::from(trips - 1));
            let before = path.amplitude;
            path.amplitude = if path.role == Role::BackWall {
                ordered
            } else {
                match natural.get(trips as usize) {
                    Some(&plain) if plain != 0.0 => path.amplitude * ordered / plain,
                    _ => 0.0,
                }
            };
            path.weight = if path.weight == before {
                path.amplitude
            } else {
                path.weight * path.amplitude / before
            };
        }
        let strongest = paths.iter().map(|path| path.amplitude.abs()).fold(0.0, f64::max);
        paths.retain(|path| path.amplitude.abs() > SMALLEST * strongest);
    }
    Ok(paths)
}

fn first_back_wall(paths: &[Path]) -> Option<usize> {
    paths.iter().position(|path| path.multiple == Some(1))
}
