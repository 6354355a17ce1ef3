//! How a command that listens ends: by signal, or after a time.

use anyhow::{Context, Result, bail};
use std::process;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;
use tokio::signal::unix::{Signal, SignalKind, signal};

/// Exit code of a program ended by a second signal: 128 and SIGINT's number, common practice of shells.
const INTERRUPTED: i32 = 130;

static STOP: AtomicBool = AtomicBool::new(false);

/// A flag that Ctrl-C and SIGTERM set, so that a log gets its end mark. A second signal ends the program at once.
///
/// # Errors
/// If the system gives no thread, or does not let signals be caught.
pub fn stop_on_signal() -> Result<&'static AtomicBool> {
    let runtime = tokio::runtime::Builder::new_current_thread()
        .enable_io()
        .build()
        .context("cannot prepare to catch signals")?;
    let caught = |kind| {
        let _within = runtime.enter();
        signal(kind).context("the system does not let this program catch signals")
    };
    let (interrupt, terminate) = (caught(SignalKind::interrupt())?, caught(SignalKind::terminate())?);
    std::thread::Builder::new()
        .name("signals".to_string())
        .spawn(move || runtime.block_on(watch(interrupt, terminate)))
        .context("the system gives no thread to watch for signals")?;
    Ok(&STOP)
}

async fn watch(mut interrupt: Signal, mut terminate: Signal) {
    loop {
        tokio::select! {
            _ = interrupt.recv() => {}
            _ = terminate.recv() => {}
        }
        if STOP.swap(true, Ordering::Relaxed) {
            process::exit(INTERRUPTED);
        }
    }
}

/// A time a person gave in seconds.
///
/// # Errors
/// If it is no time.
pub fn duration(seconds: f64) -> Result<Duration> {
    match Duration::try_from_secs_f64(seconds) {
        Ok(duration) if !duration.is_zero() => Ok(duration),
        _ => bail!("--seconds {seconds}: give a number of seconds greater than 0"),
    }
}
