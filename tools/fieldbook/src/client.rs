//! The UDP client towards a daemon: a session, sequence numbers, requests repeated until answered.
//!
//! Blocking and single-threaded: an engineer's program waits for one answer at a time. The duties it keeps are those of
//! an operator and a subscriber in `PROTOCOL.md`.

pub mod collect;
pub mod ending;
#[cfg(test)]
pub(crate) mod fake;
pub mod follow;

use anyhow::{Context, Result, bail};
use std::io::{self, ErrorKind};
use std::net::{IpAddr, Ipv4Addr, Ipv6Addr, SocketAddr, ToSocketAddrs, UdpSocket};
use std::time::{Duration, Instant};
use trackhold_proto::Envelope;
use trackhold_proto::Message;
use trackhold_proto::codec::MAX_JSON_BYTES;
use trackhold_proto::message::{Ack, Status, StatusRequest};

/// The daemon's address unless another one is given.
pub const DEFAULT_ADDRESS: &str = "127.0.0.1:4710";

/// The daemon's port where an address names none.
const DEFAULT_PORT: u16 = 4710;

/// No wait is shorter than this: zero would mean for ever.
const LEAST_WAIT: Duration = Duration::from_micros(100);

/// How often and how long an order is repeated.
#[derive(Clone, Copy, Debug)]
pub struct Pace {
    /// Time between the first repetitions.
    pub at_first: Duration,
    /// How many repetitions come at that pace.
    pub quick: u32,
    /// Time between the later ones.
    pub later: Duration,
    /// How long to go on in all.
    pub patience: Duration,
}

impl Pace {
    /// For a start or a reset: `PROTOCOL.md` calls 100 ms and 20 tries a good habit.
    pub const ORDER: Self = Self {
        at_first: Duration::from_millis(100),
        quick: 0,
        later: Duration::from_millis(100),
        patience: Duration::from_secs(2),
    };

    /// For a stop: quick at first, and not given up soon.
    pub const STOP: Self = Self {
        at_first: Duration::from_millis(20),
        quick: 50,
        later: Duration::from_millis(100),
        patience: Duration::from_secs(10),
    };

    fn interval(&self, sent: u32) -> Duration {
        if sent <= self.quick { self.at_first } else { self.later }
    }
}

/// The answer to an order.
#[derive(Clone, Copy, Debug)]
pub struct Answer {
    /// What the daemon said.
    pub ack: Ack,
    /// From the first sending to the answer.
    pub round_trip: Duration,
    /// How often the order was sent.
    pub sent: u32,
}

impl Answer {
    /// True if the order was accepted.
    pub fn accepted(&self) -> bool {
        self.ack.accepted == 1
    }
}

/// A session with one daemon.
#[derive(Debug)]
pub struct Client {
    socket: UdpSocket,
    peer: SocketAddr,
    session: u64,
    sequence: u64,
    epoch: Instant,
    /// What the system said last of datagrams that did not go out or come back; nothing since one came.
    trouble: Option<io::Error>,
}

impl Client {
    /// Opens a session with the daemon at `address`: host or number, with or without a port.
    ///
    /// # Errors
    /// If the address names nothing, or the system gives no socket or no random number.
    pub fn connect(address: &str) -> Result<Self> {
        Self::connect_to(resolve(address)?)
    }

    /// Opens a session with the daemon at `peer`.
    ///
    /// # Errors
    /// If the system gives no socket or no random number.
    pub fn connect_to(peer: SocketAddr) -> Result<Self> {
        let any: IpAddr =
            if peer.is_ipv4() { Ipv4Addr::UNSPECIFIED.into() } else { Ipv6Addr::UNSPECIFIED.into() };
        let socket = UdpSocket::bind((any, 0)).context("the system gives no UDP socket")?;
        socket.connect(peer).with_context(|| format!("there is no way to {peer}"))?;
        let session = match getrandom::u64() {
            Ok(session) => session,
            Err(error) => bail!("the system gives no random number for a session: {error}"),
        };
        Ok(Self { socket, peer, session, sequence: 0, epoch: Instant::now(), trouble: None })
    }

    /// The daemon's address.
    pub fn peer(&self) -> SocketAddr {
        self.peer
    }

    /// This session's number.
    pub fn session(&self) -> u64 {
        self.session
    }

    /// A sequence number not used before.
    pub fn next_sequence(&mut self) -> u64 {
        self.sequence += 1;
        self.sequence
    }

    /// Sends a message under a sequence number. What the system does not take is lost, as on the way: a laptop's link
    /// comes and goes. It shows in the answer that does not come, see [`Client::silent`].
    pub fn send(&mut self, sequence: u64, message: Message) {
        let stamp_ns = u64::try_from(self.epoch.elapsed().as_nanos()).unwrap_or(u64::MAX);
        let datagram = Envelope { session: self.session, sequence, stamp_ns, message }.to_vec();
        if let Err(error) = self.socket.send(&datagram) {
            self.trouble = Some(error);
        }
    }

    /// Waits for the next datagram that decodes; `None` if none comes in time.
    pub fn receive(&mut self, wait: Duration) -> Option<Envelope> {
        let until = Instant::now() + wait;
        let mut datagram = [0; MAX_JSON_BYTES];
        loop {
            let left = until.saturating_duration_since(Instant::now()).max(LEAST_WAIT);
            let received =
                self.socket.set_read_timeout(Some(left)).and_then(|()| self.socket.recv(&mut datagram));
            match received {
                Ok(length) => {
                    self.trouble = None;
                    if let Ok(envelope) = Envelope::decode(&datagram[..length]) {
                        return Some(envelope);
                    }
                }
                Err(error) => self.note(error),
            }
            if Instant::now() >= until {
                return None;
            }
        }
    }

    fn note(&mut self, error: io::Error) {
        if matches!(error.kind(), ErrorKind::WouldBlock | ErrorKind::TimedOut | ErrorKind::Interrupted) {
            return;
        }
        // Such an error comes at once; the next one must not come in a busy loop.
        std::thread::sleep(LEAST_WAIT);
        self.trouble = Some(error);
    }

    /// Sends an order under a new sequence number, and repeats it until its outcome is known.
    ///
    /// # Errors
    /// If no answer comes within the pace's patience.
    pub fn order(&mut self, message: Message, pace: Pace) -> Result<Answer> {
        self.order_heard(message, pace, &mut |_| {})
    }

    /// Like [`Client::order`]; `unheard` is called before each repetition, with the time since the first sending.
    ///
    /// # Errors
    /// If no answer comes within the pace's patience.
    pub fn order_heard(
        &mut self,
        message: Message,
        pace: Pace,
        unheard: &mut dyn FnMut(Duration),
    ) -> Result<Answer> {
        let sequence = self.next_sequence();
        let begun = Instant::now();
        let answered =
            |ack: &Ack| ack.order_sequence == sequence && ack.order_kind == u32::from(message.kind());
        let mut sent = 0;
        while begun.elapsed() < pace.patience {
            if sent > 0 {
                unheard(begun.elapsed());
            }
            self.send(sequence, message);
            sent += 1;
            let until = Instant::now() + pace.interval(sent);
            if let Some(ack) = self.await_ack(until, answered) {
                return Ok(Answer { ack, round_trip: begun.elapsed(), sent });
            }
        }
        Err(self.silent(sent, begun.elapsed()))
    }

    /// Waits until a moment for an acknowledgement of this session that `fits`.
    pub fn await_ack(&mut self, until: Instant, fits: impl Fn(&Ack) -> bool) -> Option<Ack> {
        loop {
            let left = until.saturating_duration_since(Instant::now());
            if let Some(Envelope { message: Message::Ack(ack), .. }) = self.receive(left)
                && ack.order_session == self.session
                && fits(&ack)
            {
                return Some(ack);
            }
            if Instant::now() >= until {
                return None;
            }
        }
    }

    /// Asks for the status, a few times if need be.
    ///
    /// # Errors
    /// If no answer comes within two seconds.
    pub fn status(&mut self) -> Result<Status> {
        let begun = Instant::now();
        let mut sent = 0;
        while begun.elapsed() < Duration::from_secs(2) {
            let sequence = self.next_sequence();
            self.send(sequence, Message::StatusRequest(StatusRequest {}));
            sent += 1;
            let until = Instant::now() + Duration::from_millis(200);
            while Instant::now() < until {
                let left = until.saturating_duration_since(Instant::now());
                if let Some(Envelope { message: Message::Status(status), .. }) = self.receive(left) {
                    return Ok(status);
                }
            }
        }
        Err(self.silent(sent, begun.elapsed()))
    }

    /// The error of an answer that did not come, with what to look at.
    pub fn silent(&self, sent: u32, waited: Duration) -> anyhow::Error {
        let advice = match &self.trouble {
            Some(error) if error.kind() == ErrorKind::ConnectionRefused => {
                "nothing listens on that port there: is the daemon running, and is this its address ([net] listen in its \
                 site file)?"
                    .to_string()
            }
            Some(error) => format!("the system says: {error}"),
            None => {
                "check address and port, that the daemon runs, and that no firewall drops UDP on the way".to_string()
            }
        };
        let seconds = waited.as_secs_f64();
        anyhow::anyhow!("no answer from {} in {seconds:.1} s, asked {sent} times; {advice}", self.peer)
    }
}

/// Finds the address that a person gave: `host`, `host:port`, or numbers of either family.
fn resolve(address: &str) -> Result<SocketAddr> {
    if let Ok(ip) = address.parse::<IpAddr>() {
        return Ok(SocketAddr::new(ip, DEFAULT_PORT));
    }
    let with_port =
        if address.contains(':') { address.to_string() } else { format!("{address}:{DEFAULT_PORT}") };
    let mut found = with_port.to_socket_addrs().with_context(|| {
        format!("{address} is no address; give HOST or HOST:PORT, such as {DEFAULT_ADDRESS}")
    })?;
    found.next().with_context(|| format!("{address} has no address"))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_address_may_leave_out_the_port() {
        assert_eq!(resolve("127.0.0.1").unwrap().port(), DEFAULT_PORT);
        assert_eq!(resolve("127.0.0.1:5000").unwrap().port(), 5000);
        assert_eq!(resolve("::1").unwrap().port(), DEFAULT_PORT);
        assert!(resolve("not an address").is_err());
    }

    #[test]
    fn a_daemon_that_is_not_there_is_told_as_such() {
        let vacant = UdpSocket::bind("127.0.0.1:0").unwrap().local_addr().unwrap();
        let mut client = Client::connect_to(vacant).unwrap();
        let pace = Pace { patience: Duration::from_millis(150), ..Pace::ORDER };
        let order = Message::Reset(trackhold_proto::message::Reset {});
        let error = client.order(order, pace).unwrap_err().to_string();
        assert!(error.contains("nothing listens"), "{error}");
    }
}
