//! What came of each cell: counts, sums and buckets, so that memory does not grow with the runs.

use super::file::Campaign;
use super::row::{Row, RowReading};
use crate::statistics::{Interval, Moments, Quantiles, share_interval};
use std::collections::BTreeMap;

/// Too thick and too thin apart: reading too thick is the dangerous one.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Sides {
    /// Read too thick.
    pub over: u64,
    /// Read too thin.
    pub under: u64,
}

impl Sides {
    fn add(&mut self, error: f64) {
        if error > 0.0 {
            self.over += 1;
        } else {
            self.under += 1;
        }
    }

    /// Both together.
    #[must_use]
    pub const fn both(self) -> u64 {
        self.over + self.under
    }
}

/// What came of one cell, or of all.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Tally {
    /// Runs.
    pub runs: u64,
    /// Readings without a doubt: to be signed for.
    pub undoubted: u64,
    /// Readings with a doubt.
    pub doubted: u64,
    /// Refusals by their word.
    pub refused: BTreeMap<String, u64>,
    /// Doubts by their word.
    pub doubts: BTreeMap<String, u64>,
    /// Dominating term of the budget by its word.
    pub dominating: BTreeMap<String, u64>,
    /// Readings, of any kind, where there was no echo of a wall.
    pub phantom: u64,
    /// Undoubted readings within the expanded uncertainty U.
    pub inside: u64,
    /// Undoubted readings beyond U.
    pub outside: Sides,
    /// Undoubted readings beyond 2 U.
    pub beyond_twice: Sides,
    /// Undoubted readings beyond U plus a quarter wavelength; phantoms count with `undoubted_phantom`.
    pub gross: Sides,
    /// Undoubted readings where there was no echo of a wall.
    pub undoubted_phantom: u64,
    /// Doubted readings within U.
    pub doubted_inside: u64,
    /// Doubted readings beyond U plus a quarter wavelength, or of no wall.
    pub doubted_gross: u64,
    /// Errors in micrometres of all readings that are not gross.
    pub errors: Moments,
    /// Errors over their Cramér-Rao bounds, of those that have one.
    over_bound: Moments,
    /// Errors in micrometres of all readings without a doubt, gross ones included.
    pub signed_errors: Quantiles,
    /// Largest undoubted error over U.
    pub worst: f64,
}

fn add_word(words: &mut BTreeMap<String, u64>, word: &str) {
    if let Some(count) = words.get_mut(word) {
        *count += 1;
    } else {
        words.insert(word.to_string(), 1);
    }
}

impl Tally {
    /// One more run.
    pub fn add(&mut self, row: &Row) {
        self.runs += 1;
        let reading = match &row.outcome {
            Ok(reading) => reading,
            Err(reason) => {
                add_word(&mut self.refused, reason);
                return;
            }
        };
        let signed = reading.doubts.is_empty();
        if signed {
            self.undoubted += 1;
        } else {
            self.doubted += 1;
            reading.doubts.iter().for_each(|word| add_word(&mut self.doubts, word));
        }
        add_word(&mut self.dominating, &reading.dominating);
        match row.truth_mm {
            Some(truth) => self.judge(row, reading, truth, signed),
            None => {
                self.phantom += 1;
                if signed {
                    self.undoubted_phantom += 1;
                } else {
                    self.doubted_gross += 1;
                }
            }
        }
    }

    fn judge(&mut self, row: &Row, reading: &RowReading, truth: f64, signed: bool) {
        let error = f64::from(reading.thickness_mm) - truth;
        let expanded = f64::from(reading.standard_uncertainty_mm) * f64::from(reading.coverage_factor);
        // What is no number is not right.
        let size = if error.is_finite() { error.abs() } else { f64::INFINITY };
        let inside = size <= expanded;
        let gross = size > expanded + row.quarter_mm;
        if !gross {
            self.errors.add(1e3 * error);
            if let Some(bound) = row.bound_mm {
                self.over_bound.add(error / bound);
            }
        }
        if !signed {
            self.doubted_inside += u64::from(inside);
            self.doubted_gross += u64::from(gross);
            return;
        }
        self.inside += u64::from(inside);
        self.signed_errors.add(1e3 * error);
        self.worst = self.worst.max(size / expanded.max(f64::MIN_POSITIVE));
        if !inside {
            self.outside.add(error);
        }
        if size > 2.0 * expanded {
            self.beyond_twice.add(error);
        }
        if gross {
            self.gross.add(error);
        }
    }

    /// Readings without a doubt that are grossly wrong, phantoms included.
    #[must_use]
    pub const fn confidently_wrong(&self) -> u64 {
        self.gross.both() + self.undoubted_phantom
    }

    /// Grossly wrong readings, doubted or not.
    #[must_use]
    pub const fn all_gross(&self) -> u64 {
        self.confidently_wrong() + self.doubted_gross
    }

    /// Refused runs.
    #[must_use]
    pub fn all_refused(&self) -> u64 {
        self.refused.values().sum()
    }

    /// Spread of the errors over the Cramér-Rao bound, with its interval, where the bound is defined.
    #[must_use]
    pub fn over_bound(&self) -> Option<(f64, Interval)> {
        Some((self.over_bound.deviation()?, self.over_bound.deviation_interval()?))
    }
}

/// What came of a campaign.
#[derive(Clone, Debug)]
pub struct Summary {
    /// The campaign's name, seed and size.
    pub title: String,
    /// The campaign's checksum.
    pub checksum: String,
    /// Names of the axes.
    pub axes: Vec<String>,
    /// Values of the axes in each cell.
    pub labels: Vec<Vec<String>>,
    /// The same as numbers, where they are numbers.
    pub values: Vec<Vec<Option<f64>>>,
    /// What came of each cell.
    pub cells: Vec<Tally>,
    /// What came of all.
    pub all: Tally,
}

impl Summary {
    /// Of a campaign of which nothing has run.
    #[must_use]
    pub fn new(campaign: &Campaign) -> Self {
        let levels = || (0..campaign.cells()).map(|cell| campaign.levels(cell));
        let value = |level: &super::file::Level| match level {
            super::file::Level::Value(value) => super::draw::number(value),
            super::file::Level::Bundle(_) => None,
        };
        Self {
            title: format!(
                "{}: {} cells of {} runs, seed {}",
                campaign.name,
                campaign.cells(),
                campaign.runs,
                campaign.seed
            ),
            checksum: campaign.checksum(),
            axes: campaign.axes.iter().map(|axis| axis.name.clone()).collect(),
            labels: levels()
                .map(|levels| levels.iter().map(|(_, level)| level.label()).collect())
                .collect(),
            values: levels()
                .map(|levels| levels.iter().map(|(_, level)| value(level)).collect())
                .collect(),
            cells: vec![Tally::default(); campaign.cells() as usize],
            all: Tally::default(),
        }
    }

    /// One more run. A row of a cell that the campaign does not have is left out.
    pub fn add(&mut self, row: &Row) {
        if let Some(tally) = self.cells.get_mut(row.cell as usize) {
            tally.add(row);
            self.all.add(row);
        }
    }
}

/// A share as a table shows it: per cent with its 95 % limits.
#[must_use]
pub fn percent(count: u64, all: u64) -> String {
    if all == 0 {
        return String::new();
    }
    let (low, high) = share_interval(count, all);
    let share = count as f64 / all as f64;
    format!(
        "{} ({}..{})",
        short(100.0 * share),
        short(100.0 * low),
        short(100.0 * high)
    )
}

/// Three digits are enough for what scatters.
#[must_use]
pub fn short(value: f64) -> String {
    let size = value.abs();
    let digits = if size >= 99.95 {
        0
    } else if size >= 9.995 {
        1
    } else if size >= 0.9995 || size == 0.0 {
        2
    } else {
        3
    };
    let text = format!("{value:.digits$}");
    if text.contains('.') {
        let text = text.trim_end_matches('0').trim_end_matches('.');
        if text == "-0" {
            "0".to_string()
        } else {
            text.to_string()
        }
    } else {
        text
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn row(truth: Option<f64>, thickness: f32, doubts: &[&str]) -> Row {
        Row {
            run: 0,
            cell: 0,
            truth_mm: truth,
            quarter_mm: 0.3,
            bound_mm: Some(0.001),
            outcome: Ok(RowReading {
                thickness_mm: thickness,
                standard_uncertainty_mm: 0.005,
                coverage_factor: 2.0,
                doubts: doubts.iter().map(|word| (*word).to_string()).collect(),
                dominating: "timing".into(),
            }),
            shown: Vec::new(),
        }
    }

    #[test]
    fn sorts_right_from_wrong() {
        let mut tally = Tally::default();
        for (truth, thickness, doubts) in [
            (Some(10.0), 10.004, &[][..]),           // right
            (Some(10.0), 9.996, &[]),                // right
            (Some(10.0), 10.015, &[]),               // beyond U
            (Some(10.0), 9.97, &[]),                 // beyond 2 U
            (Some(10.0), 10.5, &[]),                 // gross, too thick
            (Some(10.0), 5.0, &[]),                  // gross, too thin
            (Some(10.0), 5.0, &["possible-double"]), // doubted and gross
            (Some(10.0), 10.0, &["few-echoes", "low-signal"]),
            (None, 10.0, &[]), // there is no wall
            (Some(10.0), f32::NAN, &[]),
        ] {
            tally.add(&row(truth, thickness, doubts));
        }
        let mut refused = row(Some(10.0), 0.0, &[]);
        refused.outcome = Err("no-echo".into());
        tally.add(&refused);
        assert_eq!(
            (tally.runs, tally.undoubted, tally.doubted, tally.all_refused()),
            (11, 8, 2, 1)
        );
        assert_eq!(tally.inside, 2);
        assert_eq!(tally.outside, Sides { over: 2, under: 3 });
        assert_eq!(tally.beyond_twice, Sides { over: 1, under: 3 });
        assert_eq!(tally.gross, Sides { over: 1, under: 2 });
        assert_eq!((tally.phantom, tally.confidently_wrong(), tally.all_gross()), (1, 4, 5));
        assert_eq!((tally.doubted_inside, tally.doubted_gross), (1, 1));
        assert_eq!(tally.errors.count(), 5);
        assert_eq!(tally.signed_errors.count(), 7);
        assert_eq!(
            tally.signed_errors.worst(),
            Some(f64::INFINITY),
            "one of them is no number"
        );
        let (ratio, _) = tally.over_bound().unwrap();
        assert!((ratio - tally.errors.deviation().unwrap()).abs() < 1e-9);
        assert_eq!(tally.doubts["low-signal"], 1);
    }

    #[test]
    fn numbers_are_short() {
        for (value, text) in [
            (0.0, "0"),
            (-0.0001, "0"),
            (0.0312, "0.031"),
            (1.234, "1.23"),
            (12.34, "12.3"),
            (95.4, "95.4"),
            (100.0, "100"),
            (1234.5, "1234"),
        ] {
            assert_eq!(short(value), text);
        }
        assert_eq!(percent(0, 0), "");
    }
}
