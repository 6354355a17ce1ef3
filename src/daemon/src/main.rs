//! The daemon's command line: `run`, `check-config`.
//!
//! Exit codes: 0 ended or checked well; 1 the site file does not hold, or the run failed; 2 could not be tried (bad
//! arguments, a file that cannot be read).

use clap::{Parser, Subcommand};
use std::io::IsTerminal;
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::time::Duration;
use tokio::signal::unix::{SignalKind, signal};
use trackhold::site::{Site, SiteError};
use trackhold::{Daemon, reach};

/// A thread's failure is seen within this time.
const LOOK: Duration = Duration::from_millis(100);

/// Keeps a wheeled robot on its plan: poses and plans in over UDP, wheel commands and journal out.
///
/// A network stop is a request, not a safety function: emergency stop devices, risk assessment, local codes and
/// competent persons come first.
#[derive(Debug, Parser)]
#[command(version, max_term_width = 100)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Run until SIGINT or SIGTERM.
    Run {
        /// The site file.
        #[arg(long, value_name = "SITE.toml")]
        config: PathBuf,
    },
    /// Check a site file, print it complete with units and meanings, and the worst-case way to rest.
    CheckConfig {
        /// The site file.
        #[arg(value_name = "SITE.toml")]
        config: PathBuf,
    },
}

fn main() -> ExitCode {
    let colours = std::io::stderr().is_terminal();
    tracing_subscriber::fmt().with_writer(std::io::stderr).with_ansi(colours).with_target(false).init();
    match Arguments::parse().command {
        Command::Run { config } => with_site(&config, run),
        Command::CheckConfig { config } => with_site(&config, check),
    }
}

fn with_site(path: &Path, then: fn(Site) -> anyhow::Result<()>) -> ExitCode {
    let site = match Site::load(path) {
        Ok(site) => site,
        Err(error) => {
            eprintln!("{error}");
            return ExitCode::from(if matches!(error, SiteError::Unreadable { .. }) { 2 } else { 1 });
        }
    };
    match then(site) {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            eprintln!("trackhold: {error:#}");
            ExitCode::FAILURE
        }
    }
}

fn check(site: Site) -> anyhow::Result<()> {
    use std::io::Write;
    let text = reach::describe(&site)?;
    match std::io::stdout().lock().write_all(text.as_bytes()) {
        // Whoever closed the pipe has read enough.
        Err(error) if error.kind() == std::io::ErrorKind::BrokenPipe => Ok(()),
        other => Ok(other?),
    }
}

fn run(site: Site) -> anyhow::Result<()> {
    // The signals first: one that comes while the daemon starts must not kill it half started.
    let runtime = tokio::runtime::Builder::new_current_thread().enable_io().enable_time().build()?;
    let _entered = runtime.enter();
    let (mut interrupt, mut terminate) = (signal(SignalKind::interrupt())?, signal(SignalKind::terminate())?);
    let daemon = Daemon::start(site)?;
    daemon.abort_on_panic();
    runtime.block_on(async {
        let mut look = tokio::time::interval(LOOK);
        loop {
            tokio::select! {
                _ = interrupt.recv() => return,
                _ = terminate.recv() => return,
                _ = look.tick() => if daemon.failure().is_some() { return },
            }
        }
    });
    daemon.stop()
}
