//! `simrobot`: stands in for a robot and its estimator against a running daemon.

mod print;

use anyhow::{Context, Result, bail};
use clap::Parser;
use nix::sys::signal::{SigSet, Signal};
use print::Printer;
use simrobot::machine::Setup;
use simrobot::site::SiteMachine;
use simrobot::{Control, LinkSpec, Options, RobotSpec, StandIn};
use std::net::{SocketAddr, ToSocketAddrs};
use std::path::PathBuf;
use std::process::ExitCode;
use std::sync::Arc;
use std::thread;
use trackhold_core::geometry::Pose;
use trackhold_core::math;

/// Stands in for a robot and its estimator: takes wheel commands from a daemon over UDP, moves, and sends poses.
#[derive(Debug, Parser)]
#[command(version)]
struct Arguments {
    /// The daemon's address, host and port
    #[arg(long, value_name = "ADDR")]
    to: String,
    /// The daemon's site file: its [vehicle] and [pose] say what machine this is
    #[arg(long, value_name = "SITE.toml")]
    site: PathBuf,
    /// In what the robot differs from an ideal one [default: ideal, 50 poses a second]
    #[arg(long, value_name = "ROBOT.toml")]
    robot: Option<PathBuf>,
    /// Where it truly stands at the beginning: x and y in m, heading in rad
    #[arg(long, value_name = "X,Y,HEADING", default_value = "0,0,0", allow_hyphen_values = true, value_parser = pose)]
    start: Pose,
    /// How long to run, s [default: until Ctrl-C]
    #[arg(long, value_name = "T", value_parser = seconds)]
    seconds: Option<f64>,
    #[command(flatten)]
    link: LinkArguments,
    /// Print one JSON object a line
    #[arg(long)]
    json: bool,
}

/// Faults of the link, each way.
#[derive(Debug, clap::Args)]
#[command(next_help_heading = "Faults of the link, each way")]
struct LinkArguments {
    /// Chance that a datagram is lost
    #[arg(long, value_name = "P", default_value_t = 0.0)]
    loss: f64,
    /// Least delay, s
    #[arg(long, value_name = "S", default_value_t = 0.0)]
    delay: f64,
    /// What comes on top of the delay at most, s; never reorders
    #[arg(long, value_name = "S", default_value_t = 0.0)]
    jitter: f64,
    /// Chance that a datagram comes twice
    #[arg(long, value_name = "P", default_value_t = 0.0)]
    duplicate: f64,
    /// Chance that a datagram is held back, so that later ones overtake it
    #[arg(long, value_name = "P", default_value_t = 0.0)]
    reorder: f64,
    /// How long it is held back, s
    #[arg(long, value_name = "S", default_value_t = 0.02)]
    reorder_delay: f64,
    /// Chance that one bit of a datagram is flipped
    #[arg(long, value_name = "P", default_value_t = 0.0)]
    corrupt: f64,
    /// Seed of the link's faults
    #[arg(long, value_name = "N", default_value_t = 0)]
    link_seed: u64,
}

fn main() -> ExitCode {
    let arguments = Arguments::parse();
    match run(&arguments) {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            eprintln!("simrobot: {error:#}");
            ExitCode::from(2)
        }
    }
}

fn run(arguments: &Arguments) -> Result<()> {
    let site = SiteMachine::load(&arguments.site)?;
    let robot = arguments.robot.as_deref().map(RobotSpec::load).transpose()?.unwrap_or_default();
    let link = &arguments.link;
    let options = Options {
        daemon: address(&arguments.to)?,
        setup: Setup {
            vehicle: site.vehicle,
            mount: site.mount,
            robot,
            start: arguments.start,
            link: LinkSpec {
                loss: link.loss,
                delay_s: link.delay,
                jitter_s: link.jitter,
                duplicate: link.duplicate,
                reorder: link.reorder,
                reorder_delay_s: link.reorder_delay,
                corrupt: link.corrupt,
            },
            link_seed: link.link_seed,
        },
        seconds: arguments.seconds,
    };
    let control = stop_on_signal()?;
    let printer = Printer::new(arguments.json, control.clone());
    let summary = {
        let mut printer = printer.clone();
        StandIn::bind(options)?.run(&control, &mut |point, machine| printer.point(point, machine))?
    };
    printer.summary(&summary);
    Ok(())
}

/// A control that SIGINT and SIGTERM stop. Blocked in every thread, they are waited for in one of their own.
fn stop_on_signal() -> Result<Arc<Control>> {
    let control = Arc::new(Control::default());
    let mut signals = SigSet::empty();
    signals.add(Signal::SIGINT);
    signals.add(Signal::SIGTERM);
    signals.thread_block().context("signals cannot be blocked")?;
    let stopped = control.clone();
    thread::spawn(move || {
        if signals.wait().is_ok() {
            stopped.stop();
        }
    });
    Ok(control)
}

fn address(to: &str) -> Result<SocketAddr> {
    let mut addresses = to
        .to_socket_addrs()
        .with_context(|| format!("--to {to}: give host and port, such as 127.0.0.1:4710"))?;
    match addresses.next() {
        Some(address) => Ok(address),
        None => bail!("--to {to}: the name has no address"),
    }
}

fn pose(text: &str) -> Result<Pose, String> {
    let numbers: Vec<f64> = text.split(',').filter_map(|part| part.trim().parse().ok()).collect();
    match numbers[..] {
        [x, y, heading] if text.split(',').count() == 3 && numbers.iter().all(|n| n.is_finite()) => {
            Ok(Pose::new(x, y, math::wrap(heading)))
        }
        _ => Err("give three finite numbers, x and y in m and heading in rad, such as 1.5,-2,0.3".to_owned()),
    }
}

fn seconds(text: &str) -> Result<f64, String> {
    match text.parse::<f64>() {
        Ok(seconds) if seconds > 0.0 && seconds.is_finite() => Ok(seconds),
        _ => Err("give a number of seconds greater than 0".to_owned()),
    }
}
