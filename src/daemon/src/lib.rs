//! The daemon on the robot: the shell around the tracking core. Sockets, threads, clocks and queues are here; what
//! decides what the wheels do is in `trackhold-core`.
//!
//! | module | what it is for |
//! | --- | --- |
//! | [`site`] | the site file |
//! | [`gate`] | the one gate for commands: numbers, and the latch that an emergency stop shuts |
//! | [`zero`] | zero past the loop |
//! | [`control`] | the control loop |
//! | [`intake`] | what comes in: datagrams, leases, plan transfers |
//! | [`worker`], [`builder`] | compile plans, build laws |
//! | [`publish`] | journal, outcomes and status going out |
//! | [`supervisor`], [`guard`] | what stops the machine when the loop stalls or a thread panics |
//! | [`lanes`], [`mail`] | queues, bells and counters between the threads |
//! | [`clock`], [`realtime`] | the one clock; scheduling privileges |
//! | [`reach`] | the way to rest, and what `check-config` prints |
//! | [`Daemon`] | all of it, started and ended |

mod assembly;
pub mod builder;
pub mod clock;
pub mod control;
mod daemon;
pub mod gate;
pub mod guard;
pub mod intake;
pub mod lanes;
pub mod mail;
pub mod publish;
pub mod reach;
pub mod realtime;
pub mod site;
pub mod supervisor;
pub mod worker;
pub mod zero;

pub use daemon::Daemon;
