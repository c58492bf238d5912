//! Quick checks of the core alone against what comes from outside: published values, general-purpose libraries, closed forms.
//!
//! Everything here takes a few seconds and needs no crate of this project but the core, so that it can be run against every
//! mutant of the core (`.cargo/mutants.toml`).

mod law_gauge;
mod separation_rules;
mod sources;
mod train_records;
mod val_arrival;
mod val_beam_and_film;
mod val_blocks;
mod val_bounds;
mod val_budget;
mod val_converter;
mod val_envelope;
mod val_functions;
mod val_gauge;
mod val_overlapping;
mod val_pairs;
mod val_phase;
mod val_tables;
mod val_train;
mod val_train_choice;
mod val_wall;
mod val_way;
