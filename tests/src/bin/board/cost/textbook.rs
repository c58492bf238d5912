//! What the textbook's way costs, and whether a reading costs less.

use super::cycles::Counts;
use super::{Cost, Region};
use std::fmt::Write as _;

/// The word that the board writes for the record.
pub const RECORD: &str = "textbook";
/// Its steps. To make numbers of the codes first is told but not counted: it can be done while they come in.
const STEPS: [&str; 4] = ["convert", "hilbert", "magnitude", "correlation"];

/// The steps' costs.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Textbook([Cost; STEPS.len()]);

impl Textbook {
    /// Looks its regions out.
    pub fn of(regions: &[Region], counts: Option<&Counts>) -> Result<Self, String> {
        let mut steps = [Cost::default(); STEPS.len()];
        for (number, region) in regions.iter().enumerate().filter(|(_, region)| region.record == RECORD) {
            let place = STEPS.iter().position(|step| *step == region.what);
            let step = place.and_then(|place| steps.get_mut(place));
            step.ok_or_else(|| format!("the board speaks of a textbook step `{}`", region.what))?
                .add(region, counts, number);
        }
        if steps.iter().all(|step| step.instructions > 0) {
            Ok(Self(steps))
        } else {
            Err("the board did not count all steps of the textbook's way".to_owned())
        }
    }

    /// Filter, magnitude and correlation.
    pub fn whole(&self) -> Cost {
        self.0.iter().skip(1).fold(Cost::default(), |sum, step| Cost {
            instructions: sum.instructions + step.instructions,
            cycles: sum.cycles + step.cycles,
        })
    }

    /// Two lines for the table.
    pub fn table(&self) -> String {
        let mut text = String::from(
            "The textbook's way through one record (64-tap Hilbert filter, magnitude, full correlation with 64 samples), \
             `whole` without converting:\n",
        );
        let _ = write!(text, "{:<20}", "");
        for what in STEPS.iter().chain(&["whole"]) {
            let _ = write!(text, "{what:>12}");
        }
        for (what, of) in [
            ("instructions", (|cost: &Cost| cost.instructions) as fn(&Cost) -> u64),
            ("cycles", |cost| cost.cycles),
        ] {
            let _ = write!(text, "\n{what:<20}");
            for cost in self.0.iter().chain(&[self.whole()]) {
                let _ = write!(text, "{:>12}", of(cost));
            }
        }
        text + "\n"
    }

    /// A typical reading has to cost less, in estimated cycles or, where the emulator gives none, in instructions.
    pub fn against(&self, reading: Cost) -> Result<String, String> {
        let whole = self.whole();
        let (what, own, other) = if whole.cycles > 0 {
            ("estimated cycles", reading.cycles, whole.cycles)
        } else {
            ("instructions", reading.instructions, whole.instructions)
        };
        let text = format!(
            "{own} {what} of the typical reading, {other} of the textbook's way: {:.0} %",
            100.0 * own as f64 / other as f64
        );
        if own > 0 && own < other { Ok(text) } else { Err(text) }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn region(record: &str, what: &str, instructions: u64) -> Region {
        Region {
            record: record.to_owned(),
            what: what.to_owned(),
            instructions,
        }
    }

    #[test]
    fn a_reading_that_costs_more_than_the_textbook_fails() {
        let mut regions: Vec<Region> = STEPS.iter().map(|step| region(RECORD, step, 100)).collect();
        regions.push(region("steel", "measure", 5000));
        let textbook = Textbook::of(&regions, None).unwrap();
        let reading = |instructions| Cost {
            instructions,
            cycles: 7,
        };
        assert!(textbook.against(reading(299)).is_ok());
        assert!(textbook.against(reading(300)).is_err() && textbook.against(reading(0)).is_err());
        regions.remove(2);
        assert!(Textbook::of(&regions, None).is_err(), "a step is missing");
        regions.push(region(RECORD, "cepstrum", 1));
        assert!(Textbook::of(&regions, None).is_err(), "an unknown step");
    }
}
