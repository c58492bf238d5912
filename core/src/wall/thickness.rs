//! Times to thickness.
