//! Coherent averaging of shots.
