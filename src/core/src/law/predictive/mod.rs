//! Limit-aware prediction.

pub mod qp;
