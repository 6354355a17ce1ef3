//! What the whole-program tests and benches share.

pub mod drive;
pub mod field;
pub mod horizons;
pub mod measured;
pub mod programs;
pub mod smoothing;
