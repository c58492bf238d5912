//! The stages of a measurement, for who wants to know what each of them costs.

/// A stage of [`Gauge::measure`](super::Gauge::measure), in the order in which a record goes through them.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Stage {
    /// Extremes, clipped samples, stuck bits.
    Health,
    /// The pass over the whole record, and its noise.
    Scan,
    /// The pulse fitted at every candidate.
    Echoes,
    /// Which echoes are one wall's multiples, and their joint fit.
    Train,
    /// Thickness, budget, doubts.
    Wall,
    /// Pulse metrics and the verdict on the nearest pair.
    Pulse,
}

impl Stage {
    /// All of them in their order.
    pub const ALL: [Self; 6] = [
        Self::Health,
        Self::Scan,
        Self::Echoes,
        Self::Train,
        Self::Wall,
        Self::Pulse,
    ];

    /// One stable word for tables.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Health => "health",
            Self::Scan => "scan",
            Self::Echoes => "echoes",
            Self::Train => "train",
            Self::Wall => "wall",
            Self::Pulse => "pulse",
        }
    }
}

/// Meters stages: a cycle counter on a board, a clock on a host. `()` meters nothing and costs nothing.
pub trait StageMeter {
    /// Does the work of a stage and notes what it took.
    fn meter<R>(&mut self, stage: Stage, work: impl FnOnce() -> R) -> R;
}

impl StageMeter for () {
    fn meter<R>(&mut self, _: Stage, work: impl FnOnce() -> R) -> R {
        work()
    }
}
