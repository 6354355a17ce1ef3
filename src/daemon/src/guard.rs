//! A panic sends zero before anything else happens.
//!
//! Two nets: each of the daemon's threads is guarded, so that a daemon inside another program (a test, a demo) stops its
//! machine; and the daemon's own program installs a hook that also ends the process, see [`abort_on_panic`].

use crate::gate::Source;
use crate::zero::ZeroSide;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::{Arc, Mutex, PoisonError};
use std::thread::{Builder, JoinHandle};
use trackhold_proto::words::Mode;

/// What kept a thread from going on.
#[derive(Clone, Debug, Default)]
pub struct Failures(Arc<Mutex<Option<String>>>);

impl Failures {
    /// The first failure of any thread.
    pub fn first(&self) -> Option<String> {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).clone()
    }

    fn note(&self, what: String) {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).get_or_insert(what);
    }
}

/// Starts a thread. If it panics or fails, zero goes out, the gate stays shut for ever, and the failure is noted.
///
/// # Errors
/// If the system gives no thread.
pub fn spawn(
    name: &'static str,
    zero: Arc<ZeroSide>,
    failures: Failures,
    body: impl FnOnce() -> std::io::Result<()> + Send + 'static,
) -> std::io::Result<JoinHandle<()>> {
    Builder::new().name(name.to_owned()).spawn(move || {
        let what = match catch_unwind(AssertUnwindSafe(body)) {
            Ok(Ok(())) => return,
            Ok(Err(error)) => format!("the {name} thread failed: {error}"),
            Err(_) => format!("the {name} thread panicked"),
        };
        zero.trip(Source::Panic, Mode::ProtectiveStop);
        failures.note(what);
    })
}

/// Makes a panic of any thread of this process send zero, tell what happened, and abort the process.
pub fn abort_on_panic(zero: Arc<ZeroSide>) {
    let tell = std::panic::take_hook();
    std::panic::set_hook(Box::new(move |what| {
        zero.trip(Source::Panic, Mode::ProtectiveStop);
        tell(what);
        std::process::abort();
    }));
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::gate::Taken;
    use crate::zero::tests::zero_side;

    #[test]
    fn a_thread_that_panics_or_fails_sends_zero_and_shuts_the_gate_for_ever() {
        type Body = fn() -> std::io::Result<()>;
        let panics: Body = || panic!("on purpose");
        let fails: Body = || Err(std::io::Error::other("no more"));
        for (body, said) in [(panics, "panicked"), (fails, "the test thread failed: no more")] {
            let (zero, _shared, drive) = zero_side();
            let failures = Failures::default();
            spawn("test", Arc::clone(&zero), failures.clone(), body).unwrap().join().unwrap();
            assert_eq!(drive.modes(), [Mode::ProtectiveStop]);
            assert!(!Taken::default().is_open(zero.gate()));
            assert!(failures.first().unwrap().contains(said), "{failures:?}");
        }
    }

    #[test]
    fn a_thread_that_ends_well_sends_nothing() {
        let (zero, _shared, drive) = zero_side();
        let failures = Failures::default();
        spawn("test", zero, failures.clone(), || Ok(())).unwrap().join().unwrap();
        assert!(drive.modes().is_empty() && failures.first().is_none());
    }
}
