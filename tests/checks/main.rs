//! Every check; the file names tell where the truth comes from: val_ outside, law_ symmetry, regress_ our own past.

mod val_tables;
mod val_arrival;
mod val_envelope;
mod val_pulse;
