//! A radio link on real sockets: datagrams between a client and a daemon pass a link that loses, delays, doubles and
//! reorders some of them.

use anyhow::{Context, Result};
use nix::poll::{PollFd, PollFlags, ppoll};
use nix::sys::time::TimeSpec;
use simrobot::{Link, LinkCounts, LinkSpec};
use std::net::{Ipv4Addr, SocketAddr, UdpSocket};
use std::os::fd::AsFd;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::thread::{self, JoinHandle};
use std::time::{Duration, Instant};
use trackhold_core::time::TimeNs;

/// The longest sleep, so that the end is seen.
const LONGEST_SLEEP: Duration = Duration::from_millis(20);
/// Room for any datagram, JSON included.
const BUFFER_BYTES: usize = 9000;

/// The link's two ends and the thread between them.
#[derive(Debug)]
pub(crate) struct Relay {
    address: SocketAddr,
    stop: Arc<AtomicBool>,
    thread: Option<JoinHandle<[LinkCounts; 2]>>,
}

impl Relay {
    /// A link to the daemon at `target`, for one client.
    pub(crate) fn begin(target: SocketAddr, spec: LinkSpec, seed: u64) -> Result<Self> {
        let open = || -> std::io::Result<[UdpSocket; 2]> {
            let sockets =
                [UdpSocket::bind((Ipv4Addr::LOCALHOST, 0))?, UdpSocket::bind((Ipv4Addr::LOCALHOST, 0))?];
            sockets[1].connect(target)?;
            sockets.iter().try_for_each(|socket| socket.set_nonblocking(true))?;
            Ok(sockets)
        };
        let [front, back] = open().context("the system gives no UDP sockets for a radio link")?;
        let link = |seed| {
            Link::new(spec, seed).map_err(|problems| {
                let lines: Vec<String> = problems.iter().map(ToString::to_string).collect();
                anyhow::anyhow!("the radio link: {}", lines.join("; "))
            })
        };
        let mut work =
            Work { front, back, links: [link(seed)?, link(seed + 1)?], client: None, begun: Instant::now() };
        let address = work.front.local_addr().context("the radio link has no address")?;
        let stop = Arc::new(AtomicBool::new(false));
        let told = Arc::clone(&stop);
        let thread = thread::Builder::new()
            .name("radio link".to_string())
            .spawn(move || {
                while !told.load(Ordering::Relaxed) {
                    work.turn();
                }
                work.links.map(|link| link.counts())
            })
            .context("the system gives no thread for a radio link")?;
        Ok(Self { address, stop, thread: Some(thread) })
    }

    /// Where the client's end is.
    pub(crate) fn address(&self) -> SocketAddr {
        self.address
    }

    /// Ends the link: what it did to datagrams to and from the daemon.
    pub(crate) fn end(mut self) -> Result<[LinkCounts; 2]> {
        self.stop.store(true, Ordering::Relaxed);
        let ended = self.thread.take().and_then(|thread| thread.join().ok());
        ended.context("the radio link broke")
    }
}

impl Drop for Relay {
    fn drop(&mut self) {
        self.stop.store(true, Ordering::Relaxed);
    }
}

struct Work {
    front: UdpSocket,
    back: UdpSocket,
    /// To the daemon, from the daemon.
    links: [Link; 2],
    client: Option<SocketAddr>,
    begun: Instant,
}

impl Work {
    fn now(&self) -> TimeNs {
        TimeNs(u64::try_from(self.begun.elapsed().as_nanos()).unwrap_or(u64::MAX))
    }

    fn turn(&mut self) {
        let mut buffer = [0; BUFFER_BYTES];
        let now = self.now();
        while let Ok((length, from)) = self.front.recv_from(&mut buffer) {
            self.client = Some(from);
            self.links[0].send(now, &buffer[..length]);
        }
        while let Ok(length) = self.back.recv(&mut buffer) {
            self.links[1].send(now, &buffer[..length]);
        }
        let now = self.now();
        // What the system does not take is lost, as on any radio link.
        while let Some((_, datagram)) = self.links[0].poll(now) {
            drop(self.back.send(&datagram));
        }
        while let Some((_, datagram)) = self.links[1].poll(now) {
            if let Some(client) = self.client {
                drop(self.front.send_to(&datagram, client));
            }
        }
        self.sleep();
    }

    fn sleep(&self) {
        let next = self.links.iter().filter_map(Link::next_arrival).min();
        let left =
            next.map_or(LONGEST_SLEEP, |at| Duration::from_nanos(at.since(self.now()).0).min(LONGEST_SLEEP));
        let mut watched =
            [&self.front, &self.back].map(|socket| PollFd::new(socket.as_fd(), PollFlags::POLLIN));
        // Whatever wakes it, the next turn looks at everything.
        let _ = ppoll(&mut watched, Some(TimeSpec::from_duration(left)), None);
    }
}
