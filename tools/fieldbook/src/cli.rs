//! The command line: one line a subcommand; each one's arguments and work are in its own file.

use crate::{check, demo, import, orders, pack, rank, record, replay, retime, simulate, status, tail};
use clap::{Parser, Subcommand};
use std::process::ExitCode;

/// Exit code of a command that could not do its work.
pub const COULD_NOT_RUN: u8 = 2;

/// Plan, simulate, record and replay the runs of a wheeled robot under trackhold.
///
/// Exit codes: 0 done, 1 refused or not reached (replay: diverged, check: unfit), 2 could not run.
#[derive(Debug, Parser)]
#[command(name = "fieldbook", version, propagate_version = true, max_term_width = 100)]
pub struct Cli {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// The subcommands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Can this machine follow this plan? Every limit, joint and direction, and what would mend it.
    Check(check::Args),
    /// Closed loop in the core, faster than real time.
    Simulate(simulate::Args),
    /// Every law that fits machine and plan, under the same errors: which one to choose.
    Rank(rank::Args),
    /// A recorded run once more, compared bit for bit; or what a law would have commanded at recorded poses.
    Replay(replay::Args),
    /// The fastest timing of a plan within the limits, with a reserve for feedback.
    Retime(retime::Args),
    /// A path from another program's file into a plan.
    Import(import::Args),
    /// Daemon, stand-in robot and recorder in one command, on an invented site.
    Demo(demo::Args),
    /// What a daemon is doing.
    Status(status::Args),
    /// Turns a plan of samples into its compact form.
    Pack(pack::Args),
    /// Sends a plan to a daemon.
    SendPlan(orders::SendPlanArgs),
    /// Sets the machine in motion along the plan that is loaded.
    Start(orders::StartArgs),
    /// Stops the machine: emergency stop, or a ramp along the path.
    Stop(orders::StopArgs),
    /// Leaves a latched stop; moves nothing.
    Reset(orders::ResetArgs),
    /// Caps the speed in percent of the plan's, also while the machine runs.
    Cap(orders::CapArgs),
    /// Changes the law and its gains, also while the machine runs.
    Tune(orders::TuneArgs),
    /// A daemon's journal into a track log.
    Record(record::Args),
    /// A daemon's journal as it comes, a line a tick.
    Tail(tail::Args),
}

impl Command {
    /// Does the work.
    ///
    /// # Errors
    /// Why it could not run; the program then prints that and exits with [`COULD_NOT_RUN`].
    pub fn run(self) -> anyhow::Result<ExitCode> {
        match self {
            Self::Check(args) => check::run(&args),
            Self::Simulate(args) => simulate::run(&args),
            Self::Rank(args) => rank::run(&args),
            Self::Replay(args) => replay::run(&args),
            Self::Retime(args) => retime::run(&args),
            Self::Import(args) => import::run(&args),
            Self::Demo(args) => demo::run(&args),
            Self::Status(args) => status::run(&args),
            Self::Pack(args) => pack::run(&args),
            Self::SendPlan(args) => orders::run_send_plan(&args),
            Self::Start(args) => orders::run_start(&args),
            Self::Stop(args) => orders::run_stop(&args),
            Self::Reset(args) => orders::run_reset(&args),
            Self::Cap(args) => orders::run_cap(&args),
            Self::Tune(args) => orders::run_tune(&args),
            Self::Record(args) => record::run(&args),
            Self::Tail(args) => tail::run(&args),
        }
    }
}
