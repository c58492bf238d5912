//! Samples and blocks that get lost between converter and memory.

use super::{Purpose, Random};
use crate::scene::DropOuts;

/// What happened to one record.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Lost {
    /// Samples that read 0.
    pub missing: u32,
    /// Blocks that repeat the one before.
    pub repeated: u32,
    /// Blocks that are left out.
    pub skipped: u32,
}

/// Whether the pulser does not fire in a shot.
#[must_use]
pub fn is_lost(scene: &DropOuts, seed: u64, shot: u64) -> bool {
    scene.lost_shots_percent > 0.0
        && 100.0 * Random::new(seed, Purpose::DropOuts, shot).uniform() < scene.lost_shots_percent
}

/// Loses what the scene says.
pub fn apply(scene: &DropOuts, seed: u64, shot: u64, codes: &mut [i16]) -> Lost {
    let mut lost = Lost::default();
    if scene.missing_per_million == 0.0 && scene.repeated_per_record == 0.0 && scene.skipped_per_record == 0.0 {
        return lost;
    }
    let mut random = Random::new(seed, Purpose::DropOuts, shot);
    // The first number decides about the shot as a whole.
    let _ = random.uniform();
    let blocks = codes.len() / scene.block_samples.max(1);
    for _ in 0..poisson(&mut random, scene.skipped_per_record) {
        let at = scene.block_samples * (random.uniform() * blocks as f64) as usize;
        if let Some(rest) = codes.get_mut(at..).filter(|_| blocks > 0) {
            let length = scene.block_samples.min(rest.len());
            rest.copy_within(length.., 0);
            let end = rest.len() - length;
            rest[end..].fill(0);
            lost.skipped += 1;
        }
    }
    for _ in 0..poisson(&mut random, scene.repeated_per_record) {
        // The first block has none before it.
        let at = scene.block_samples * (1.0 + random.uniform() * (blocks.max(2) - 1) as f64) as usize;
        if at + scene.block_samples <= codes.len() {
            codes.copy_within(at - scene.block_samples..at, at);
            lost.repeated += 1;
        }
    }
    if scene.missing_per_million > 0.0 {
        for code in codes {
            if 1e6 * random.uniform() < scene.missing_per_million {
                *code = 0;
                lost.missing += 1;
            }
        }
    }
    lost
}

/// A number with this mean: exponential gaps are counted until they exceed it (Knuth 1969 in logarithms).
fn poisson(random: &mut Random, mean: f64) -> u32 {
    let (mut sum, mut count) = (0.0, 0);
    loop {
        sum -= libm::log(1.0 - random.uniform());
        if sum > mean {
            return count;
        }
        count += 1;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_are_as_stated() {
        let scene = DropOuts {
            missing_per_million: 2000.0,
            repeated_per_record: 3.0,
            skipped_per_record: 0.5,
            block_samples: 32,
            lost_shots_percent: 10.0,
        };
        let (mut sum, mut shots_lost) = ([0.0; 3], 0);
        for shot in 0..1000 {
            let mut codes: Vec<i16> = (1..=4096).collect();
            let lost = apply(&scene, 4, shot, &mut codes);
            for (sum, count) in sum.iter_mut().zip([lost.missing, lost.repeated, lost.skipped]) {
                *sum += f64::from(count) / 1000.0;
            }
            let zeros = codes.iter().filter(|code| **code == 0).count() as i64;
            assert!(zeros >= i64::from(lost.missing) - 40 || lost.skipped > 0);
            shots_lost += u32::from(is_lost(&scene, 4, shot));
        }
        println!(
            "missing {:.2}, repeated {:.2}, skipped {:.2}, lost {shots_lost}",
            sum[0], sum[1], sum[2]
        );
        assert!((sum[0] - 8.192).abs() < 0.4 && (sum[1] - 3.0).abs() < 0.2 && (sum[2] - 0.5).abs() < 0.1);
        assert!((70..130).contains(&shots_lost));
    }

    #[test]
    fn blocks_repeat_and_move_up() {
        let only = |repeated, skipped| DropOuts {
            repeated_per_record: repeated,
            skipped_per_record: skipped,
            ..DropOuts::default()
        };
        let ramp: Vec<i16> = (1..=160).collect();
        let (mut seen_repeat, mut seen_skip) = (false, false);
        for shot in 0..50 {
            let mut codes = ramp.clone();
            if apply(&only(0.5, 0.0), 1, shot, &mut codes).repeated == 1 {
                let at = codes.iter().zip(&ramp).position(|(a, b)| a != b).unwrap();
                assert!(at % 16 == 0 && at > 0 && codes[at..at + 16] == ramp[at - 16..at]);
                assert_eq!(codes[at + 16..], ramp[at + 16..]);
                seen_repeat = true;
            }
            let mut codes = ramp.clone();
            if apply(&only(0.0, 0.5), 1, shot, &mut codes).skipped == 1 {
                let at = codes.iter().zip(&ramp).position(|(a, b)| a != b).unwrap();
                assert_eq!(codes[at..144], ramp[at + 16..]);
                assert!(codes[144..].iter().all(|code| *code == 0));
                seen_skip = true;
            }
        }
        assert!(seen_repeat && seen_skip);
        // A block longer than the record: nothing to lose, no panic.
        let long = DropOuts {
            block_samples: 65536,
            ..only(5.0, 5.0)
        };
        let mut codes = ramp.clone();
        apply(&long, 1, 1, &mut codes);
        assert_eq!(codes, ramp);
    }
}
