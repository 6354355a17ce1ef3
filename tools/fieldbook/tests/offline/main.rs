//! Tests of what needs no network: simulated runs, track logs, replays.

mod common;
mod rank;
mod replay;
mod retime;
mod robot;
mod simulate;
mod steering;
mod zoh;
