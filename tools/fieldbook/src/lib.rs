//! The engineer's program, as a library: one module a subcommand, and what they share.
//!
//! | module | what it holds |
//! | --- | --- |
//! | [`cli`] | the command line: one line a subcommand |
//! | [`log`] | track logs, written and read |
//! | [`choice`] | `--law` and `--gain`: which law follows |
//! | [`check`] | whether a machine can follow a plan |
//! | [`retime`] | the fastest timing of a plan within the limits |
//! | [`simulate`], [`sim`] | closed loop in the core: the command and the loop itself |
//! | [`rank`] | every law that fits, on one machine and plan |
//! | [`stats`] | tracking errors of a run in numbers |
//! | [`replay`] | a recorded run once more, compared bit for bit |
//! | [`open_loop`], [`poses`] | what a law would have commanded at given poses |
//! | [`import`] | a path from another program's file into a plan |
//! | [`client`] | the UDP client towards a daemon |
//! | [`status`], [`orders`] | what a daemon is doing; plan, start, stop, reset, cap, tune |
//! | [`pack`] | a plan of samples in its compact form |
//! | [`record`], [`tail`] | a daemon's journal, into a log or as it comes |
//! | [`demo`] | daemon, stand-in robot and recorder in one command |
//! | [`output`] | text and tables to the outside |

pub mod check;
pub mod choice;
pub mod cli;
pub mod client;
pub mod demo;
pub mod import;
pub mod log;
pub mod open_loop;
pub mod orders;
pub mod output;
pub mod pack;
pub mod poses;
pub mod rank;
pub mod record;
pub mod replay;
pub mod retime;
pub mod sim;
pub mod simulate;
pub mod stats;
pub mod status;
pub mod tail;
