//! All runs of a campaign, or of one share of it, on several threads, in the order of their numbers.

use super::file::Campaign;
use super::measure::Measurer;
use super::row::Row;
use crate::input_error::InputError;
use std::sync::mpsc::sync_channel;

/// How many rows a thread may be ahead of the one that is waited for.
const AHEAD: usize = 64;

/// A share of the runs: of `count` shards the one with this `index`, from 0. Run *i* belongs to shard
/// *i* mod `count`, so that all shards take equally long.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Shard {
    /// Which one, from 0.
    pub index: u64,
    /// Of how many.
    pub count: u64,
}

impl Shard {
    /// Everything.
    pub const WHOLE: Self = Self { index: 0, count: 1 };

    /// Reads `3/64`: the third of 64.
    ///
    /// # Errors
    /// Not two whole numbers, or the first not from 1 to the second.
    pub fn parse(text: &str) -> Result<Self, String> {
        let wrong = || format!("{text} is no shard: write 3/64 for the third of 64");
        let (index, count) = text.split_once('/').ok_or_else(wrong)?;
        let (index, count): (u64, u64) = (index.parse().map_err(|_| wrong())?, count.parse().map_err(|_| wrong())?);
        if index == 0 || index > count || count > 1_000_000 {
            return Err(wrong());
        }
        Ok(Self {
            index: index - 1,
            count,
        })
    }

    /// How many of so many runs belong to it.
    #[must_use]
    pub const fn rows(self, total: u64) -> u64 {
        (total + self.count - 1 - self.index) / self.count
    }

    /// The run of a row, from 0.
    #[must_use]
    pub const fn run(self, row: u64) -> u64 {
        row * self.count + self.index
    }
}

impl std::fmt::Display for Shard {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "{}/{}", self.index + 1, self.count)
    }
}

/// Measures the shard's runs from row `from` on and hands the rows over in their order.
///
/// Every row depends on campaign and run alone, so neither the number of threads nor `from` changes one.
/// Memory does not grow with the number of runs.
///
/// # Errors
/// A run that cannot be made, or what `sink` returns; either ends all threads.
pub fn run(
    campaign: &Campaign,
    shard: Shard,
    from: u64,
    threads: usize,
    sink: &mut dyn FnMut(Row) -> Result<(), InputError>,
) -> Result<(), InputError> {
    let rows = shard.rows(campaign.total());
    let threads = threads.clamp(1, 1024);
    let step = threads as u64;
    std::thread::scope(|scope| {
        // A thread's channel is closed when this function returns; its next row then ends it.
        let mut channels = Vec::with_capacity(threads);
        for thread in 0..step {
            let (sender, receiver) = sync_channel(AHEAD);
            channels.push(receiver);
            scope.spawn(move || {
                let mut measurer = Measurer::new(campaign);
                let mut row = from + thread;
                while row < rows {
                    let result = measurer.run(shard.run(row)).map(|run| run.row);
                    let failed = result.is_err();
                    if sender.send(result).is_err() || failed {
                        break;
                    }
                    row += step;
                }
            });
        }
        let mut next = channels.iter().cycle();
        for row in from..rows {
            let result = next.next().and_then(|channel| channel.recv().ok());
            let result = result.unwrap_or_else(|| {
                let what = format!("run {} ended without a result", shard.run(row));
                Err(InputError::in_argument(what, "report this"))
            });
            sink(result?)?;
        }
        Ok(())
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn shards_share_all_runs() {
        for total in [0, 1, 7, 12, 100] {
            for count in 1..9 {
                let mut runs: Vec<u64> = (0..count)
                    .flat_map(|index| {
                        let shard = Shard { index, count };
                        (0..shard.rows(total)).map(move |row| shard.run(row))
                    })
                    .collect();
                runs.sort_unstable();
                assert_eq!(runs, (0..total).collect::<Vec<_>>());
            }
        }
        assert_eq!(Shard::parse("3/64"), Ok(Shard { index: 2, count: 64 }));
        for wrong in ["0/4", "5/4", "3", "a/b", "1/0", "-1/4", "1/99999999999", ""] {
            assert!(Shard::parse(wrong).is_err(), "{wrong}");
        }
    }
}
