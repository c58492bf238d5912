//! Files with bytes changed at random, and options of nonsense: the command answers with a status it documents and one
//! line on stderr, and comes back soon.

mod support;

use std::time::Instant;
use support::{Bench, Train, npy_of_floats};

/// Numbers from a fixed start (Knuth's MMIX constants).
struct Lot(u64);

impl Lot {
    fn below(&mut self, limit: usize) -> usize {
        self.0 = self
            .0
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 33) as usize % limit.max(1)
    }

    fn of<'a>(&mut self, words: &[&'a str]) -> &'a str {
        words[self.below(words.len())]
    }

    /// One or two changes: a byte, a piece cut, doubled or moved, digits and signs of numbers.
    fn spoil(&mut self, good: &[u8]) -> Vec<u8> {
        let mut bytes = good.to_vec();
        for _ in 0..=self.below(2) {
            // Headers are where it hurts: a quarter of the changes fall into the first bytes.
            let reach = if self.below(4) == 0 {
                bytes.len().min(160)
            } else {
                bytes.len()
            };
            let at = self.below(reach);
            let to = (at + 1 + self.below(40)).min(bytes.len());
            match self.below(7) {
                0 | 1 if at < bytes.len() => bytes[at] = self.below(256) as u8,
                2 if at < bytes.len() => bytes[at] = b"0123456789-+.eEN\n,\"[]=' "[self.below(24)],
                3 => bytes.truncate(at),
                4 if at < to => drop(bytes.drain(at..to)),
                5 if at < to => {
                    let piece = bytes[at..to].to_vec();
                    bytes.splice(at..at, piece);
                }
                _ => {
                    let word = self.of(&[
                        "nan",
                        "inf",
                        "-1",
                        "1e999",
                        "99999999999999999999",
                        "\0",
                        "\u{e9}",
                        "true",
                        "0",
                    ]);
                    bytes.splice(at..at, word.bytes());
                }
            }
        }
        bytes
    }
}

const SCENE: &str = include_str!("../scenes/clean_train.toml");

const NONSENSE: [&str; 12] = [
    "",
    "-1",
    "0",
    "NaN",
    "1e999",
    "99999999999999999999",
    "--",
    "=",
    "\u{e9}",
    "5mm=",
    "text",
    "[]",
];

#[test]
fn mutated_files_and_absurd_options_are_answered() {
    let bench = Bench::new();
    let train = Train {
        samples: 600,
        wall_mm: 5.0,
        ..Train::CLEAN
    };
    bench.write_shots("good.npy", &[train.shot(1)]);
    bench.write_shots("good.csv", &[train.shot(1)]);
    bench.write_shots("good.wav", &[train.shot(1)]);
    bench.write("scene.toml", SCENE);
    let run = bench.run(&["simulate", "scene.toml", "-o", "out.npy"]);
    assert_eq!(run.status, 0, "the scene is sound: {}", run.errors);
    let good = |name: &str| std::fs::read(bench.path(name)).expect("written above");
    let (setup, scene) = (good("setup.toml"), good("scene.toml"));
    let records = [
        ("bad.npy", good("good.npy")),
        ("bad.csv", good("good.csv")),
        ("bad.wav", good("good.wav")),
        ("bad.npy", npy_of_floats(&[0.25; 300])),
    ];
    let mut lot = Lot(20_261_201);
    let (mut ended, start) = ([0u32; 3], Instant::now());
    for turn in 0..2000 {
        let mut arguments: Vec<&str> = match turn % 5 {
            0 | 1 => {
                let (name, content) = &records[lot.below(records.len())];
                bench.write(name, lot.spoil(content));
                match lot.below(3) {
                    0 => vec!["read", name],
                    1 => vec!["read", name, "--setup", "setup.toml", "--format", "json"],
                    _ => vec!["read", name, "good.npy", "--setup", "setup.toml", "--average"],
                }
            }
            2 => {
                bench.write("bad.toml", lot.spoil(&setup));
                vec!["read", "good.npy", "--setup", "bad.toml"]
            }
            3 => {
                bench.write("bad.toml", lot.spoil(&setup));
                vec![
                    "calibrate",
                    "--setup",
                    "bad.toml",
                    "--block",
                    "5mm=good.npy",
                    "-o",
                    "learned.toml",
                ]
            }
            _ => {
                bench.write("bad.toml", lot.spoil(&scene));
                vec!["simulate", "bad.toml", "--seed", "1", "-o", "out.npy"]
            }
        };
        if lot.below(12) == 0 {
            let at = lot.below(arguments.len() + 1);
            arguments.insert(at, lot.of(&NONSENSE));
        }
        if lot.below(20) == 0 {
            let last = lot.below(arguments.len());
            arguments[last] = lot.of(&NONSENSE);
        }
        let before = Instant::now();
        // Fails on a panic's text.
        let run = bench.run(&arguments);
        assert!(
            before.elapsed().as_secs() < 5,
            "{arguments:?} took {:?}",
            before.elapsed()
        );
        assert!(
            (0..=2).contains(&run.status),
            "{arguments:?}: status {}: {}",
            run.status,
            run.errors
        );
        ended[run.status as usize] += 1;
        let lines: Vec<&str> = run.errors.lines().collect();
        assert!(
            lines
                .iter()
                .all(|line| line.starts_with("error: ") || line.starts_with("note: ")),
            "{arguments:?}: {}",
            run.errors
        );
        let errors = lines.iter().filter(|line| line.starts_with("error: ")).count();
        // Each file has its own error.
        assert!(
            errors <= arguments.len() && (errors > 0) == (run.status == 1),
            "{arguments:?}: status {}: {}",
            run.status,
            run.errors
        );
    }
    println!(
        "2000 runs in {:.1} s: {} read or done, {} errors, {} refused",
        start.elapsed().as_secs_f32(),
        ended[0],
        ended[1],
        ended[2]
    );
    assert!(ended.iter().all(|&count| count > 50), "one-sided: {ended:?}");
}
