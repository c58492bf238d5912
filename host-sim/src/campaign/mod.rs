//! Campaigns: many scenes, many shots, and how often the gauge is right, doubts, refuses, or is wrong
//! without a doubt.
//!
//! A campaign file (TOML, version 1) names a scene and a set-up, a grid of cells over any of their
//! fields, and distributions from which each run draws; [`mod@file`] describes its keys. Run *i* depends on
//! the campaign and on *i* alone: any run replays alone, and neither the number of threads nor the way
//! the runs are shared out among machines changes a digit.
//!
//! 1. [`mod@file`]: the campaign file; [`draw`]: values and distributions; [`path`]: fields by their names.
//! 2. [`resolve`]: cell and run to a scene and a set-up.
//! 3. [`measure`]: simulates and measures one run; [`learned`]: the reference pulse as calibration
//!    learns it; [`calibration`]: blocks on which a run calibrates first; [`bound`]: the Cramér-Rao bound
//!    where there is one.
//! 4. [`row`]: one run as a line of the results; [`results`]: the file of results; [`writer`]: writes it, or goes
//!    on with it; [`merge`]: the shards of a campaign as one file.
//! 5. [`runner`]: all cores; [`summary`]: the cells' statistics, with constant memory.

pub mod bound;
pub mod calibration;
pub mod draw;
pub mod file;
pub mod learned;
pub mod measure;
pub mod merge;
pub mod path;
pub mod places;
pub mod resolve;
pub mod results;
pub mod row;
pub mod runner;
pub mod summary;
pub mod writer;

pub use file::Campaign;
pub use runner::Shard;
pub use summary::Summary;
