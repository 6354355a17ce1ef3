//! Real-time privileges of threads: scheduling, processor, locked memory. What the system refuses is reported and the
//! daemon runs on without it.

use nix::sched::{CpuSet, sched_setaffinity};
use nix::sys::mman::{MlockAllFlags, mlockall};
use nix::unistd::Pid;

/// Gives the calling thread a SCHED_FIFO priority, 1 to 99.
///
/// # Errors
/// What the system refused, and what would mend it.
pub fn fifo(priority: i32) -> Result<(), String> {
    set_scheduler(priority).map_err(|error| {
        format!(
            "SCHED_FIFO priority {priority} was refused: {error}; grant CAP_SYS_NICE or raise RLIMIT_RTPRIO"
        )
    })
}

#[expect(
    unsafe_code,
    reason = "no safe wrapper for sched_setscheduler; it reads one struct that lives on the stack"
)]
fn set_scheduler(priority: i32) -> std::io::Result<()> {
    let parameters = libc::sched_param { sched_priority: priority };
    // SAFETY: pid 0 is the calling thread, and the pointer is valid for the duration of the call.
    match unsafe { libc::sched_setscheduler(0, libc::SCHED_FIFO, &raw const parameters) } {
        0 => Ok(()),
        _ => Err(std::io::Error::last_os_error()),
    }
}

/// Keeps the calling thread on a processor.
///
/// # Errors
/// What the system refused.
pub fn pin(cpu: usize) -> Result<(), String> {
    let mut set = CpuSet::new();
    set.set(cpu).and_then(|()| sched_setaffinity(Pid::from_raw(0), &set)).map_err(|error| {
        format!("processor {cpu} was refused: {error}; give the number of one this machine has")
    })
}

/// Keeps the memory that the process has now from being paged out: the loop, which allocates nothing later, works in
/// it. Memory to come is not asked for, since under a finite limit a later allocation would then end the process.
///
/// # Errors
/// What the system refused, and what would mend it.
pub fn lock_memory() -> Result<(), String> {
    mlockall(MlockAllFlags::MCL_CURRENT).map_err(|error| {
        format!("locking memory was refused: {error}; grant CAP_IPC_LOCK or raise RLIMIT_MEMLOCK")
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_processor_that_is_not_there_is_refused_with_its_number() {
        assert!(pin(1000).unwrap_err().starts_with("processor 1000 was refused: "));
    }

    #[test]
    fn priorities_beyond_the_systems_are_refused_with_advice() {
        let refused = fifo(1000).unwrap_err();
        assert!(
            refused.starts_with("SCHED_FIFO priority 1000 was refused: ") && refused.contains("CAP_SYS_NICE")
        );
    }
}
