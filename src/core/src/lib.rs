//! The tracking core: one function of its past, events in, effects out.
//!
//! It does no I/O, reads no clock, starts no thread and allocates nothing in a tick; the same events give the same
//! records and effects, bit for bit, on any machine. Arrows point one way:
//!
//! ```text
//! math ← geometry ← plan, vehicle ← law ← node
//! ```
//!
//! | module | what it holds | may use |
//! | --- | --- | --- |
//! | [`math`] | `libm` behind one door: elementary functions, angles | – |
//! | [`time`] | moments and spans in whole nanoseconds | – |
//! | [`keys`] | named numbers with unit, bound and meaning, as site files and plans give them | – |
//! | [`geometry`] | poses, body velocities, exact motion along an arc, errors between poses | `math` |
//! | [`vehicle`] | what moves: kinds, wheel conversion both ways, limits | `geometry`, `keys` |
//! | [`plan`] | what to follow: segments, timing, the reference at plan time t | `geometry`, `vehicle`, `keys` |
//! | [`law`] | how to follow: one file a law, one trait, one table | `geometry`, `plan`, `keys` |
//! | [`node`] | the state machine: modes, guards, poses, orders, the tick | all of these |
//! | [`settings`] | everything that changes the node's behaviour, checked | `vehicle`, `law`, `node` |
//! | [`digest`] | SHA-256 over results, and of plans | – |
#![no_std]

extern crate alloc;

pub mod digest;
pub mod geometry;
pub mod keys;
pub mod law;
pub mod math;
pub mod node;
pub mod plan;
pub mod settings;
pub mod time;
pub mod vehicle;

/// What computes, for a journal's first entry: another build may compute other bits, and a replay says so.
pub const BUILD: &str = concat!("trackhold-core ", env!("CARGO_PKG_VERSION"), ", libm 0.2.16");
