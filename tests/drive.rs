//! A drive on a socket of its own: subscribes to commands and says what came.

use std::net::{SocketAddr, UdpSocket};
use std::time::{Duration, Instant};
use trackhold_proto::Envelope;
use trackhold_proto::header::MAX_DATAGRAM_BYTES;
use trackhold_proto::message::{Command, Message, Subscribe, WANT_COMMANDS};

/// A command as it came.
#[derive(Clone, Copy, Debug)]
pub struct Received {
    /// When.
    pub at: Instant,
    /// The daemon's session.
    pub session: u64,
    /// Its sequence number.
    pub sequence: u64,
    /// The command.
    pub command: Command,
}

/// The drive's end of the wire.
#[derive(Debug)]
pub struct DriveSocket {
    socket: UdpSocket,
    sequence: u64,
    subscribed: Option<Instant>,
}

impl DriveSocket {
    /// Subscribes at a daemon.
    pub fn subscribe(daemon: SocketAddr) -> Self {
        let socket = UdpSocket::bind("127.0.0.1:0").expect("a loopback port");
        socket.connect(daemon).expect("a loopback address");
        let mut drive = Self { socket, sequence: 0, subscribed: None };
        drive.renew();
        drive
    }

    /// The next command within `wait`; renews the subscription when it is time.
    pub fn next(&mut self, wait: Duration) -> Option<Received> {
        let until = Instant::now() + wait;
        let mut datagram = [0; MAX_DATAGRAM_BYTES];
        loop {
            self.renew();
            let left = until.checked_duration_since(Instant::now())?;
            // A refused port shows as an error until the daemon listens; that is no command.
            self.socket
                .set_read_timeout(Some(left.clamp(Duration::from_micros(1), Duration::from_millis(50))))
                .ok()?;
            let Ok(length) = self.socket.recv(&mut datagram) else { continue };
            let at = Instant::now();
            if let Ok(Envelope { session, sequence, message: Message::Command(command), .. }) =
                Envelope::decode(&datagram[..length])
            {
                return Some(Received { at, session, sequence, command });
            }
        }
    }

    /// Waits for a command that `fits`.
    pub fn wait_for(&mut self, what: &str, fits: impl Fn(&Command) -> bool) -> Received {
        let until = Instant::now() + Duration::from_secs(20);
        while Instant::now() < until {
            if let Some(received) =
                self.next(Duration::from_millis(500)).filter(|received| fits(&received.command))
            {
                return received;
            }
        }
        panic!("no command that {what} within 20 s");
    }

    fn renew(&mut self) {
        if self.subscribed.is_some_and(|at| at.elapsed() < Duration::from_millis(300)) {
            return;
        }
        self.subscribed = Some(Instant::now());
        self.sequence += 1;
        let message = Message::Subscribe(Subscribe { want: WANT_COMMANDS, lease_ms: 1000 });
        let envelope = Envelope { session: 77, sequence: self.sequence, stamp_ns: 0, message };
        let _ = self.socket.send(&envelope.to_vec());
    }
}
