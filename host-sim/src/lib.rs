//! The simulator: makes A-scans with known truth, and measures them with the core.
