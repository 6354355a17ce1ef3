//! Exchanges of stamps with the pose source in force (RFC 5905, section 8), one open request at a time.

use crate::mail::{Form, Peer};
use std::collections::VecDeque;
use std::net::SocketAddr;
use trackhold_core::time::TimeNs;
use trackhold_proto::journal::ExchangeEvent;
use trackhold_proto::message::TimeReply;

/// So many senders of poses are remembered.
const MAX_SENDERS: usize = 8;

/// Who sends poses from where, and the request that is open.
#[derive(Debug, Default)]
pub(super) struct Exchanges {
    /// The latest at the back.
    senders: VecDeque<(u64, Peer)>,
    open: Option<Open>,
}

#[derive(Clone, Copy, Debug)]
struct Open {
    session: u64,
    sent_ns: u64,
}

impl Exchanges {
    /// A pose came from there.
    pub(super) fn pose_from(&mut self, session: u64, peer: Peer) {
        if self.senders.back() == Some(&(session, peer)) {
            return;
        }
        self.senders.retain(|(known, _)| *known != session);
        if self.senders.len() >= MAX_SENDERS {
            self.senders.pop_front();
        }
        self.senders.push_back((session, peer));
    }

    /// Opens a request to the source, and returns where it goes; none without a source, or to one that speaks JSON and
    /// is not asked.
    pub(super) fn request(&mut self, source: u64, at: TimeNs) -> Option<SocketAddr> {
        let (session, peer) = *self.senders.iter().find(|(session, _)| *session == source)?;
        (peer.form == Form::Binary).then(|| {
            self.open = Some(Open { session, sent_ns: at.0 });
            peer.address
        })
    }

    /// The exchange that a reply completes; none if it answers no open request, or came before.
    pub(super) fn reply(&mut self, session: u64, reply: &TimeReply, at: TimeNs) -> Option<ExchangeEvent> {
        let asked = |open: &Open| open.session == session && open.sent_ns == reply.request_sent_ns;
        self.open.take_if(|open| asked(open))?;
        Some(ExchangeEvent {
            session,
            request_sent_ns: reply.request_sent_ns,
            request_received_ns: reply.request_received_ns,
            reply_sent_ns: reply.reply_sent_ns,
            reply_received_ns: at.0,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn peer(port: u16, form: Form) -> Peer {
        Peer { address: ([127, 0, 0, 1], port).into(), form }
    }

    #[test]
    fn only_the_source_in_force_is_asked_and_only_its_one_answer_counts() {
        let mut exchanges = Exchanges::default();
        exchanges.pose_from(1, peer(1, Form::Binary));
        exchanges.pose_from(2, peer(2, Form::Json));
        assert_eq!(exchanges.request(3, TimeNs(5)), None);
        assert_eq!(exchanges.request(2, TimeNs(5)), None, "JSON senders are not asked");
        assert_eq!(exchanges.request(1, TimeNs(5)), Some(peer(1, Form::Binary).address));
        let reply = TimeReply { request_sent_ns: 5, request_received_ns: 70, reply_sent_ns: 71 };
        assert_eq!(exchanges.reply(2, &reply, TimeNs(9)), None, "another session");
        assert_eq!(exchanges.reply(1, &TimeReply { request_sent_ns: 4, ..reply }, TimeNs(9)), None);
        assert_eq!(exchanges.reply(1, &reply, TimeNs(9)).map(|event| event.reply_received_ns), Some(9));
        assert_eq!(exchanges.reply(1, &reply, TimeNs(10)), None, "a duplicate");
    }

    #[test]
    fn the_latest_address_of_a_session_counts() {
        let mut exchanges = Exchanges::default();
        exchanges.pose_from(1, peer(1, Form::Binary));
        (2..6).for_each(|session| exchanges.pose_from(session, peer(9, Form::Binary)));
        exchanges.pose_from(1, peer(7, Form::Binary));
        (20..40).for_each(|session| {
            exchanges.pose_from(session, peer(9, Form::Binary));
            exchanges.pose_from(1, peer(7, Form::Binary));
        });
        assert_eq!(exchanges.request(1, TimeNs(0)).map(|address| address.port()), Some(7));
        assert_eq!(exchanges.senders.len(), MAX_SENDERS);
    }
}
