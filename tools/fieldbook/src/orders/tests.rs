use super::*;
use crate::client::fake::{self, ack_of, bad_link};
use std::collections::BTreeMap;
use trackhold_proto::Envelope;
use trackhold_proto::blob::{Hex, Text};

fn client(daemon: &fake::Served) -> Client {
    Client::connect_to(daemon.address()).unwrap()
}

/// A daemon that puts plans together and refuses those that contain "unfit".
fn planner_side() -> fake::Served {
    let mut parts: BTreeMap<u32, Vec<u8>> = BTreeMap::new();
    fake::daemon(move |envelope| {
        let Some(envelope @ Envelope { message: Message::PlanPart(part), .. }) = envelope else {
            return Vec::new();
        };
        parts.insert(part.part, part.bytes.as_slice().to_vec());
        let whole: Vec<u8> = parts.values().flatten().copied().collect();
        if whole.len() < part.total_bytes as usize {
            return Vec::new();
        }
        assert_eq!(digest::of_bytes(&whole), part.digest);
        let unfit = whole.windows(5).any(|word| word == b"unfit");
        vec![ack_of(envelope, if unfit { "segment 3: too fast" } else { "" })]
    })
}

#[test]
fn a_plan_arrives_whole_over_a_link_that_loses_a_fifth() {
    let daemon = planner_side();
    let link = bad_link(daemon.address(), 0.2);
    let raw: Vec<u8> = (0..40_000_u32).map(|byte| (byte % 251) as u8).collect();
    let answer = send_plan(&mut Client::connect_to(link.address()).unwrap(), &raw).unwrap();
    assert!(answer.accepted());
    assert_eq!(answer.ack.plan, digest::of_bytes(&raw));
    assert!(answer.sent > 1, "with so much loss one round cannot be enough");
}

#[test]
fn only_what_the_daemon_misses_is_sent_again() {
    let (mut seen, mut asked) = (BTreeMap::<u32, u32>::new(), 0);
    let daemon = fake::daemon(move |envelope| {
        let Some(envelope @ Envelope { message: Message::PlanPart(part), .. }) = envelope else {
            return Vec::new();
        };
        *seen.entry(part.part).or_default() += 1;
        // Parts 7 and 200 are lost on the first way.
        if part.part != 292 {
            return Vec::new();
        }
        asked += 1;
        if asked > 1 {
            let twice: Vec<u32> =
                seen.iter().filter(|(_, times)| **times > 1).map(|(part, _)| *part).collect();
            return vec![ack_of(envelope, if twice == [7, 200, 292] { "" } else { "sent too much" })];
        }
        let mut marks = [0; 25];
        (marks[0], marks[24]) = (1, 2);
        let marks = trackhold_proto::blob::Blob::new(&marks).unwrap();
        vec![Message::PlanMissing(trackhold_proto::message::PlanMissing {
            digest: part.digest,
            missing: 2,
            first: 7,
            marks,
        })]
    });
    let answer = send_plan(&mut client(&daemon), &vec![b'x'; 300_000]).unwrap();
    assert!(answer.accepted() && answer.sent == 2, "{:?}", answer.ack.text);
}

#[test]
fn a_refused_plan_brings_its_reasons() {
    let daemon = planner_side();
    let answer = send_plan(&mut client(&daemon), b"an unfit plan").unwrap();
    assert!(!answer.accepted());
    assert_eq!(answer.ack.text.as_str(), "segment 3: too fast");
}

#[test]
fn a_plan_of_no_bytes_is_not_sent() {
    let daemon = planner_side();
    assert!(send_plan(&mut client(&daemon), b"").unwrap_err().to_string().contains("0 bytes"));
}

#[test]
fn an_order_is_repeated_under_its_number_and_foreign_answers_are_ignored() {
    let mut seen = Vec::new();
    let daemon = fake::daemon(move |envelope| {
        let Some(envelope) = envelope else { return Vec::new() };
        seen.push(envelope.sequence);
        assert_eq!(seen[0], envelope.sequence, "repetitions keep their number");
        if seen.len() < 3 {
            let other = Envelope { session: envelope.session ^ 1, ..*envelope };
            let later = Envelope { sequence: envelope.sequence + 1, ..*envelope };
            return vec![ack_of(&other, ""), ack_of(&later, "")];
        }
        vec![ack_of(envelope, "not in mode standby")]
    });
    let answer = reset(&mut client(&daemon)).unwrap();
    assert!(!answer.accepted());
    assert_eq!(answer.sent, 3);
}

#[test]
fn a_stop_is_repeated_quickly() {
    let mut seen = 0;
    let daemon = fake::daemon(move |envelope| {
        let Some(envelope) = envelope else { return Vec::new() };
        assert_eq!(envelope.message, Message::Stop(Stop { stop: StopKind::Emergency }));
        seen += 1;
        if seen < 5 { Vec::new() } else { vec![ack_of(envelope, "")] }
    });
    let answer = stop(&mut client(&daemon), StopKind::Emergency).unwrap();
    assert!(answer.accepted());
    assert_eq!(answer.sent, 5);
    assert!(answer.round_trip >= Duration::from_millis(70), "{:?}", answer.round_trip);
}

#[test]
fn a_start_quotes_boot_plan_and_number_of_the_status() {
    let loaded = Status { boot: Hex([3; 16]), start_number: 99, plan: Hex([4; 32]), ..fake::status() };
    let daemon = fake::daemon(move |envelope| match envelope {
        Some(Envelope { message: Message::StatusRequest(_), .. }) => vec![Message::Status(loaded)],
        Some(envelope @ Envelope { message: Message::Start(start), .. }) => {
            assert_eq!(
                (start.boot, start.plan, start.start_number),
                (loaded.boot, loaded.plan, loaded.start_number)
            );
            assert_eq!((start.at, start.plan_time_ns), (StartAt::PlanTime, 1_500_000_000));
            vec![ack_of(envelope, "")]
        }
        _ => Vec::new(),
    });
    let mut client = client(&daemon);
    let status = client.status().unwrap();
    let answer = start(&mut client, &status, status.plan, StartAt::PlanTime, 1_500_000_000).unwrap();
    assert!(answer.accepted());
}

#[test]
fn a_start_of_another_plan_than_the_one_loaded_is_not_sent() {
    let none = fake::status();
    assert!(unfit(&none, None).unwrap().contains("no plan is loaded"));
    let loaded = Status { plan: Hex([4; 32]), plan_id: Text::cut("row 3"), ..none };
    assert_eq!(unfit(&loaded, None), None);
    assert_eq!(unfit(&loaded, Some(loaded.plan)), None);
    assert!(unfit(&loaded, Some(Hex([5; 32]))).unwrap().contains("row 3"));
}
