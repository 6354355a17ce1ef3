//! `[net]`: where the daemon listens, how much journal it keeps, how long a plan may be, and which real-time privileges it asks for.

use std::net::{Ipv4Addr, SocketAddr};
use trackhold_core::keys::{Absent, Bound, Key, Problem, Values};
use trackhold_proto::journal::MAX_PLAN_BYTES;

/// The address listened on by default.
pub const DEFAULT_LISTEN: SocketAddr = SocketAddr::new(std::net::IpAddr::V4(Ipv4Addr::LOCALHOST), 4710);

/// What `listen` means.
pub const LISTEN_MEANING: &str = "address and port of the one UDP socket; port 0 lets the system choose";

/// What `lock_memory` means.
pub const LOCK_MEMORY_MEANING: &str = "keep the memory that the control loop works in from being paged out";

/// Keys of the section `net` that are whole numbers.
pub const KEYS: &[Key] = &[
    Key::with_default(
        "ring_bytes",
        "bytes",
        (64 << 20) as f64,
        Bound::within((1 << 20) as f64, (4_u64 << 30) as f64),
        "journal kept for recorders that fell behind, beside the longest plan; older entries can no longer be asked for",
    ),
    Key::with_default(
        "max_plan_bytes",
        "bytes",
        MAX_PLAN_BYTES as f64,
        Bound::within(1024.0, MAX_PLAN_BYTES as f64),
        "a longer plan is refused before it is taken in; up to three times as much memory is in use while one is",
    ),
    Key::optional(
        "realtime_priority",
        "",
        Bound::within(1.0, 98.0),
        "SCHED_FIFO priority of the control loop; without it ticks come late whenever the system is busy",
    ),
    Key::optional("cpu", "", Bound::within(0.0, 1023.0), "the processor that the control loop is kept on"),
];

/// Where and how the daemon runs; nothing here changes what the node computes.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Net {
    /// Where the daemon listens.
    pub listen: SocketAddr,
    /// How much journal it keeps, bytes.
    pub ring_bytes: usize,
    /// The longest plan taken in, bytes.
    pub max_plan_bytes: usize,
    /// SCHED_FIFO priority to ask for.
    pub realtime_priority: Option<i32>,
    /// Processor to keep the control loop on.
    pub cpu: Option<usize>,
    /// Whether to keep the loop's memory from being paged out.
    pub lock_memory: bool,
}

impl Default for Net {
    fn default() -> Self {
        let default = |name: &str| match KEYS.iter().find(|key| key.name == name).map(|key| key.absent) {
            Some(Absent::Default(value)) => value as usize,
            _ => unreachable!("key {name} has a default"),
        };
        Self {
            listen: DEFAULT_LISTEN,
            ring_bytes: default("ring_bytes"),
            max_plan_bytes: default("max_plan_bytes"),
            realtime_priority: None,
            cpu: None,
            lock_memory: false,
        }
    }
}

impl Net {
    /// Takes the numbers in.
    ///
    /// # Errors
    /// Every number that is unknown or outside its bound.
    pub(super) fn set_numbers(&mut self, given: &Values) -> Result<(), Vec<Problem>> {
        let values = given.checked(KEYS)?;
        self.ring_bytes = values.get("ring_bytes") as usize;
        self.max_plan_bytes = values.get("max_plan_bytes") as usize;
        self.realtime_priority = values.find("realtime_priority").map(|priority| priority as i32);
        self.cpu = values.find("cpu").map(|cpu| cpu as usize);
        Ok(())
    }
}

/// Reads the address to listen on.
///
/// # Errors
/// If it is none, or not on this machine's loopback.
pub fn listen_address(text: &str) -> Result<SocketAddr, String> {
    let Ok(address) = text.parse::<SocketAddr>() else {
        return Err(format!("{text:?} is not an address and port; write one such as \"127.0.0.1:4710\""));
    };
    demand_loopback(address)?;
    Ok(address)
}

/// Without authentication whoever reaches the port can move the machine: only this machine's own programs may.
///
/// # Errors
/// If the address can be reached from elsewhere.
pub fn demand_loopback(address: SocketAddr) -> Result<(), String> {
    if address.ip().is_loopback() {
        return Ok(());
    }
    Err(format!(
        "{address} can be reached from other machines, and datagrams are not authenticated yet: listen on a loopback address such as 127.0.0.1:{}",
        address.port()
    ))
}
