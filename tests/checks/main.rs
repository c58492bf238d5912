//! Every check; the file names tell where the truth comes from: val_ outside, law_ symmetry, regress_ our own past.

mod regress_campaigns;
mod val_bound;
mod val_calibration;
mod val_uncertainty;
mod val_averaging;
mod val_clipped_echoes;
mod val_interleaving;
mod val_pulse;
mod val_receiver;
mod val_beam;
mod val_path;
mod val_population;
mod val_separation;
mod val_separation_support;
mod val_textbook;
mod val_thin_wall;
mod val_train_fit;
mod val_two_gains;
mod val_two_rounds;
mod val_no_echo;
mod law_hostile;
mod val_wrong_cycle;
mod val_world_border;
mod val_world_grain;
mod val_world_paths;
