//! PROTOCOL.md against the code: its tables decode every golden datagram and every journal body to the same values.

mod common;

use common::bodies::{bodies, frame_of};
use common::samples;
use common::spec::{Cursor, Spec};
use serde_json::Value;
use trackhold_proto::codec::{MAX_JSON_BYTES, MAX_PAYLOAD_BYTES};
use trackhold_proto::header::{HEADER_BYTES, MAX_DATAGRAM_BYTES};
use trackhold_proto::journal::*;
use trackhold_proto::message::{JOURNAL_BYTES, KINDS, PART_BYTES};
use trackhold_proto::{Envelope, Message};

#[test]
fn the_page_lists_every_kind_and_body() {
    let spec = Spec::read();
    let kinds: Vec<_> = KINDS.iter().map(|&(number, name)| (u32::from(number), name.to_string())).collect();
    assert_eq!(spec.numbered("Kind "), kinds);
    let mut listed = spec.numbered("Body ").into_iter();
    let mut last = "";
    for body in bodies().iter().filter(|body| std::mem::replace(&mut last, body.name()) != body.name()) {
        assert_eq!(listed.next().map(|(_, name)| name).as_deref(), Some(body.name()));
    }
    assert_eq!(listed.next(), None);
}

#[test]
fn the_tables_decode_every_golden_datagram() {
    let spec = Spec::read();
    for (name, sample) in samples() {
        let (bytes, message) = (sample.to_vec(), sample.message);
        let mut cursor = Cursor { bytes: &bytes, at: HEADER_BYTES };
        let mut read = spec.message(message.kind().into(), message.name(), &mut cursor);
        assert_eq!(cursor.at, bytes.len(), "{name}: the table ends elsewhere");
        let numbers =
            [("session", sample.session), ("sequence", sample.sequence), ("stamp_ns", sample.stamp_ns)];
        for (field, value) in numbers {
            read[field] = value.into();
        }
        read["kind"] = message.name().into();
        assert_eq!(read, serde_json::from_str::<Value>(&sample.to_json()).unwrap(), "{name}");
    }
}

/// The number in `bytes` where the table under `heading` says that `field` lies.
fn number_at(heading: &str, field: &str, bytes: &[u8]) -> u64 {
    let spec = Spec::read();
    let row = spec.rows(heading).iter().find(|row| row[3] == field).unwrap_or_else(|| panic!("{field}"));
    let (at, size): (usize, usize) = (row[0].parse().unwrap(), row[1].parse().unwrap());
    assert_eq!(row[2], format!("u{}", 8 * size));
    let mut word = [0; 8];
    word[..size].copy_from_slice(&bytes[at..at + size]);
    u64::from_le_bytes(word)
}

#[test]
fn the_tables_decode_the_header_and_the_frame_head() {
    let sample = samples()[0].1;
    let fields = [
        ("version", 1),
        ("kind", 1),
        ("payload_bytes", 48),
        ("session", sample.session),
        ("sequence", sample.sequence),
        ("stamp_ns", sample.stamp_ns),
        ("key_id", 0),
        ("reserved", 0),
    ];
    for (field, value) in fields {
        assert_eq!(number_at("Header", field, &sample.to_vec()), value, "{field}");
    }
    let frame = frame_of(9, bodies().remove(0));
    let crc = u32::from_le_bytes(frame[20..24].try_into().unwrap()).into();
    let body = (frame.len() - FRAME_HEAD_BYTES) as u64;
    for (field, value) in [("number", 9), ("at_ns", 1_000_000_009), ("body_bytes", body), ("crc", crc)] {
        assert_eq!(number_at("7. Journal frames", field, &frame), value, "{field}");
    }
}

#[test]
fn the_tables_decode_every_journal_body() {
    let spec = Spec::read();
    for body in bodies() {
        let mut bytes = vec![0; 10_000];
        let length = encode_body(&body, &mut bytes).unwrap();
        let number = u32::from_le_bytes([bytes[0], bytes[1], bytes[2], bytes[3]]);
        let mut cursor = Cursor { bytes: &bytes[..length], at: 4 };
        let read = spec.body(number, body.name(), &mut cursor);
        assert_eq!(cursor.at, length, "{}: the table ends elsewhere", body.name());
        let expected = serde_json::to_value(&body).unwrap();
        assert_eq!(read, expected[body.name()], "{}", body.name());
    }
}

/// The word that number `number` at `at` of the sample's payload stands for.
fn word_at(sample: &str, at: usize, number: u32, field: &str) -> Option<String> {
    let (_, sample) = samples().into_iter().find(|(name, _)| *name == sample).unwrap();
    let mut bytes = sample.to_vec();
    bytes[HEADER_BYTES + at..][..4].copy_from_slice(&number.to_le_bytes());
    let json: Value = serde_json::from_str(&Envelope::decode(&bytes).ok()?.to_json()).unwrap();
    Some(json[field].as_str().unwrap().to_string())
}

/// Where the regime lies in the status that is the sample: behind an id of 24 bytes.
const STATUS_REGIME: usize = 274 + 24;

#[test]
fn the_words_are_all_there_and_no_others() {
    let spec = Spec::read();
    let places = [
        ("mode", "command", 0, "mode"),
        ("wheel-layout", "command", 4, "layout"),
        ("cause", "status", 28, "cause"),
        ("regime", "status", STATUS_REGIME, "regime"),
        ("stop-kind", "stop", 0, "stop"),
        ("start-at", "start", 56, "at"),
    ];
    for (words, sample, at, field) in places {
        let rows = spec.rows(&format!("Words {words}"));
        for (number, row) in (0..).zip(rows) {
            assert_eq!(row[0], number.to_string());
            assert_eq!(word_at(sample, at, number, field).as_ref(), Some(&row[1]), "{words}");
        }
        assert!(!rows.is_empty());
        assert_eq!(word_at(sample, at, rows.len() as u32, field), None, "{words} has more");
    }
    for (bit, row) in spec.rows("Bits flags").iter().enumerate() {
        assert_eq!((row[0].as_str(), row[1].as_str()), (bit.to_string().as_str(), flag::NAMES[bit]));
    }
    assert_eq!(spec.rows("Bits flags").len(), flag::NAMES.len());
}

/// Frames a body of zeros, for a choice with `fields` bytes of fields, and reads it.
fn read_zeros(body: u32, before: usize, choice: u32, fields: usize) -> Result<Body, FrameError> {
    let mut frame = vec![0; FRAME_HEAD_BYTES];
    frame.extend(body.to_le_bytes());
    frame.extend(vec![0; before]);
    frame.extend(choice.to_le_bytes());
    frame.extend(vec![0; fields]);
    let length = (frame.len() - FRAME_HEAD_BYTES) as u32;
    frame[16..20].copy_from_slice(&length.to_le_bytes());
    let body = frame.split_off(FRAME_HEAD_BYTES);
    let sum = crc::Crc::<u32, crc::Table<1>>::new(&crc::CRC_32_ISCSI);
    let mut digest = sum.digest();
    digest.update(&frame[..20]);
    digest.update(&body);
    frame[20..24].copy_from_slice(&digest.finalize().to_le_bytes());
    frame.extend(body);
    read_frame(&frame).map(|(entry, _)| entry.body)
}

#[test]
fn the_refusals_are_all_there_and_no_others() {
    let spec = Spec::read();
    let rows = spec.rows("Choice refusal");
    for (number, row) in (0..).zip(rows) {
        assert_eq!(row[0], number.to_string());
        let sizes = row[2].split_terminator(", ").map(|field| match field.split_once(' ').unwrap().1 {
            "bool" => 1,
            "mode" | "cause" | "regime" | "u32" => 4,
            _ => 8,
        });
        match read_zeros(11, 16, number, sizes.sum()) {
            Ok(Body::PoseRefused(refused)) => assert_eq!(refused.refusal.name(), row[1]),
            other => panic!("refusal {number}: {other:?}"),
        }
    }
    let beyond = read_zeros(11, 16, rows.len() as u32, 0).unwrap_err().to_string();
    assert!(beyond.contains("Refusal has no value"), "{beyond}");
    for (body, before, choice, most) in [(4, 24, "order", "Order"), (6, 0, "note", "Note")] {
        let rows = spec.rows(&format!("Choice {choice}")).len() as u32;
        let beyond = read_zeros(body, before, rows, 0).unwrap_err().to_string();
        assert!(beyond.contains(&format!("{most} has no value {rows}, only 0 to {}", rows - 1)), "{beyond}");
    }
}

#[test]
fn the_limits_are_those_of_the_code() {
    let page = include_str!("../PROTOCOL.md");
    let group = |number: usize| {
        let digits = number.to_string();
        let groups: Vec<_> =
            digits.as_bytes().rchunks(3).rev().map(|group| str::from_utf8(group).unwrap()).collect();
        groups.join(",")
    };
    let limits = [
        ("any binary datagram", MAX_DATAGRAM_BYTES),
        ("answer in JSON", MAX_JSON_BYTES),
        ("| payload", MAX_PAYLOAD_BYTES),
        ("| plan", MAX_PLAN_BYTES),
        ("bytes of a plan in a part", PART_BYTES),
        ("bytes of journal in a part", JOURNAL_BYTES),
        ("body of a journal entry", MAX_BODY_BYTES),
    ];
    let (_, section) = page.split_once("## 9. Limits").unwrap();
    for (what, number) in limits {
        let stated = section.lines().any(|line| line.contains(&format!("{what} | {}", group(number))));
        assert!(stated, "{what}: {}", group(number));
    }
}

#[test]
fn the_orders_for_a_shell_are_taken() {
    let page = include_str!("../PROTOCOL.md");
    let orders: Vec<_> =
        page.lines().filter_map(|line| line.strip_prefix("echo '")?.split("' | nc").next()).collect();
    let read = |order: &str| {
        // What a shell makes of the date in it.
        Envelope::decode(format!("{order}\n").as_bytes())
            .unwrap_or_else(|error| panic!("{order}: {error}"))
            .message
    };
    let [status, stop] = orders[..] else { panic!("{orders:?}") };
    assert!(matches!(read(status), Message::StatusRequest(_)));
    assert!(matches!(read(stop), Message::Stop(_)));
}
