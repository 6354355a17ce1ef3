//! What is refused, and that each refusal says what was wrong where.

mod common;

use common::samples;
use serde_json::{Map, Value};
use trackhold_proto::header::{HEADER_BYTES, MAX_DATAGRAM_BYTES};
use trackhold_proto::{DecodeError, Envelope};

fn sample(name: &str) -> Envelope {
    samples().into_iter().find(|(known, _)| *known == name).unwrap().1
}

fn bytes(name: &str) -> Vec<u8> {
    sample(name).to_vec()
}

fn object(name: &str) -> Map<String, Value> {
    serde_json::from_str(&sample(name).to_json()).unwrap()
}

/// The refusal of a datagram, as people read it.
fn refusal(datagram: impl AsRef<[u8]>) -> String {
    match Envelope::decode(datagram.as_ref()) {
        Ok(read) => panic!("taken: {read:?}"),
        Err(error) => error.to_string(),
    }
}

/// A sample with other bytes from `at` on, counted in the payload.
fn with(name: &str, at: usize, put: &[u8]) -> Vec<u8> {
    let mut datagram = bytes(name);
    datagram[HEADER_BYTES + at..][..put.len()].copy_from_slice(put);
    datagram
}

#[test]
fn a_wrong_header_is_refused_by_its_byte() {
    let header = |at: usize, value: u8| {
        let mut datagram = bytes("stop");
        datagram[at] = value;
        refusal(datagram)
    };
    let cases = [
        (refusal([]), "0 bytes, a header alone has 40"),
        (refusal(&bytes("pose")[..39]), "39 bytes, a header alone has 40"),
        (refusal([0xa7; 1201]), "1201 bytes, at most 1200 are allowed"),
        (
            header(3, 0x49),
            "bytes 0 to 3 are [a7, 54, 4b, 49], neither the magic a7 54 4b 48 nor a JSON object",
        ),
        (header(4, 2), "byte 4: protocol version 2, this program speaks 1"),
        (header(5, 63), "byte 5: there is no kind 63"),
        (header(37, 1), "bytes 36 to 39 are reserved and must be 0"),
        (
            header(6, 3),
            "byte 6: payload length 3, but 4 bytes follow the header (payload, then a tag of 0 or 16)",
        ),
    ];
    for (said, expected) in cases {
        assert_eq!(said, expected);
    }
}

#[test]
fn a_wrong_value_is_refused_by_its_field() {
    let one = 1u32.to_le_bytes();
    let none = 0u32.to_le_bytes();
    let cases = [
        (with("command", 0, &[5]), "payload of command, read up to byte 4: Mode has no value 5, only 0 to 4"),
        (
            with("command", 4, &[5]),
            "payload of command, read up to byte 8: WheelLayout has no value 5, only 0 to 4",
        ),
        (
            with("status", 28, &[13]),
            "payload of status, read up to byte 32: Cause has no value 13, only 0 to 12",
        ),
        (with("stop", 0, &[2]), "payload of stop, read up to byte 4: StopKind has no value 2, only 0 to 1"),
        (
            with("start", 56, &[3]),
            "payload of start, read up to byte 60: StartAt has no value 3, only 0 to 2",
        ),
        (with("status", 66, &[0xff]), "payload of status, read up to byte 90: a text is not UTF-8"),
        (
            with("ack", 56, &[0x85, 3]),
            "payload of ack, read up to byte 58: a byte string is longer than its bound",
        ),
        (with("pose", 32, &(-0.5f64).to_le_bytes()), "field position_sd_m: must be at least 0"),
        (with("plan-part", 32, &none), "field total_bytes: must be 1 to 67108864"),
        (with("plan-part", 32, &[0xff; 4]), "field total_bytes: must be 1 to 67108864"),
        (with("plan-part", 36, &none), "field part_bytes: must be 1 to 1024"),
        (with("plan-part", 36, &[1, 4]), "field part_bytes: must be 1 to 1024"),
        (with("plan-part", 40, &[2]), "field part: must be below total_bytes / part_bytes, rounded up"),
        (with("plan-part", 40, &[0xff; 4]), "field part: must be below total_bytes / part_bytes, rounded up"),
        (
            with("plan-part", 40, &one),
            "field bytes: must be part_bytes long, or what is left in the last part",
        ),
        (with("cap", 0, &0.049f64.to_le_bytes()), "field share: must be 0.05 to 1"),
        (with("cap", 0, &1.01f64.to_le_bytes()), "field share: must be 0.05 to 1"),
        (
            with("tune", 0, &[0x85, 3]),
            "payload of tune, read up to byte 2: a byte string is longer than its bound",
        ),
        (with("tune", 2, &[0xff]), "payload of tune, read up to byte 63: a text is not UTF-8"),
        (with("subscribe", 0, &[8]), "field want: must be a sum of 1 (commands), 2 (journal), 4 (status)"),
        (with("subscribe", 4, &[99, 0]), "field lease_ms: must be 100 to 60000"),
        (with("journal-request", 8, &[0; 8]), "field first: must be at most last"),
        (with("journal-gone", 8, &[0; 8]), "field first: must be at most last"),
        (with("journal-part", 8, &none), "field entries: must be at least 1"),
        (with("journal-part", 12, &one), "field part: must be below parts"),
        (
            with("journal-part.third-of-three", 8, &[2]),
            "field entries: must be 1 where an entry travels in several parts",
        ),
        (with("plan-missing", 32, &none), "field missing: must be at least 1"),
        (with("ack", 20, &[2]), "field accepted: must be 0 or 1"),
    ];
    for (datagram, expected) in cases {
        assert_eq!(refusal(datagram), expected);
    }
}

#[test]
fn a_payload_of_another_length_is_refused_by_kind_and_byte() {
    for (name, sample) in samples() {
        let whole = sample.to_vec();
        for keep in HEADER_BYTES..whole.len() {
            let mut cut = whole[..keep].to_vec();
            let stated = cut.len() - HEADER_BYTES;
            cut[6..8].copy_from_slice(&u16::try_from(stated).unwrap().to_le_bytes());
            let said = refusal(&cut);
            let begin = format!("payload of {}, read up to byte ", sample.message.name());
            assert!(said.starts_with(&begin) && said.contains("ends early"), "{name} cut at {keep}: {said}");
        }
        let mut long = [whole.as_slice(), &[0]].concat();
        let stated = u16::try_from(long.len() - HEADER_BYTES).unwrap();
        long[6..8].copy_from_slice(&stated.to_le_bytes());
        assert!(refusal(&long).ends_with("1 bytes too many follow"), "{name}: {}", refusal(&long));
    }
}

/// Where a number lies in a sample's payload; samples hold each number but 0 once.
fn offset_of(datagram: &[u8], value: f64) -> usize {
    let find: Vec<_> =
        datagram.windows(8).enumerate().filter(|(_, eight)| **eight == value.to_le_bytes()).collect();
    assert_eq!(find.len(), 1, "{value} is not there just once");
    find[0].0
}

#[test]
fn what_is_not_finite_is_refused_in_every_number() {
    let mut fields_seen = 0;
    for name in ["pose", "cap", "command", "command.body", "command.ackermann", "status"] {
        for (field, value) in object(name) {
            let numbers = match &value {
                Value::Array(numbers) => numbers[..2].to_vec(),
                other => vec![other.clone()],
            };
            for value in numbers.iter().filter(|value| value.is_f64()) {
                fields_seen += 1;
                let at = offset_of(&bytes(name), value.as_f64().unwrap()) - HEADER_BYTES;
                for wrong in [f64::NAN, -f64::NAN, f64::INFINITY, f64::NEG_INFINITY] {
                    let said = refusal(with(name, at, &wrong.to_le_bytes()));
                    assert_eq!(said, format!("field {field}: not a finite number"));
                }
            }
        }
    }
    assert_eq!(fields_seen, 5 + 1 + 3 * 4 + 9);
    for unused in [2, 3] {
        let said = refusal(with("command", 32 + 8 * unused, &f64::NAN.to_le_bytes()));
        assert_eq!(said, "field wheels: not a finite number");
    }
    for text in ["NaN", "Infinity", "-Infinity", "1e999", "-1e999"] {
        let json = sample("pose").to_json().replace("0.1", text);
        assert!(refusal(&json).contains(" at line 1 column "), "{}", refusal(&json));
    }
}

#[test]
fn json_is_refused_by_the_name_of_the_member() {
    let optional = ["position_sd_m", "heading_sd_rad", "plan_time_ns"];
    for (name, sample) in samples() {
        for field in object(name).keys() {
            let mut wrong = object(name);
            wrong.remove(field);
            let left_out = Envelope::from_json(Value::Object(wrong.clone()).to_string().as_bytes());
            if !(optional.contains(&field.as_str()) && name != "status") {
                let said = left_out.unwrap_err().to_string();
                assert!(said.contains(field.as_str()) && said.contains("missing"), "{name}: {said}");
            }
            for of_another_type in
                [Value::Object(Map::new()), Value::Bool(true), Value::Null, "\u{1f6d1}".into()]
            {
                if of_another_type.is_string()
                    && matches!(field.as_str(), "text" | "plan_id" | "law" | "gains")
                {
                    continue;
                }
                wrong.insert(field.clone(), of_another_type);
                let said =
                    Envelope::from_json(Value::Object(wrong.clone()).to_string().as_bytes()).unwrap_err();
                assert!(said.to_string().contains(&format!("field {field}")), "{name}.{field}: {said}");
            }
        }
        let mut wrong = object(name);
        wrong.insert("colour".into(), 1.into());
        let said = Envelope::from_json(Value::Object(wrong).to_string().as_bytes()).unwrap_err().to_string();
        assert!(
            said.starts_with("JSON: field colour: unknown field `colour`"),
            "{}: {said}",
            sample.message.name()
        );
    }
}

#[test]
fn json_says_what_it_expected() {
    let stop =
        |more: &str| refusal(format!(r#"{{"kind":"stop","session":1,"sequence":2,"stamp_ns":3,{more}}}"#));
    let subscribe = |more: &str| {
        refusal(format!(r#"{{"kind":"subscribe","session":1,"sequence":2,"stamp_ns":3,{more}}}"#))
    };
    let cases = [
        (
            stop(r#""stop":"hard""#),
            "JSON: field stop: unknown variant `hard`, expected `emergency` or `controlled`",
        ),
        (
            stop(r#""stop":"emergency","stop":"controlled""#),
            "JSON: field stop: stated twice at line 1 column 92",
        ),
        (
            subscribe(r#""want":-1,"lease_ms":1000"#),
            "JSON: field want: invalid value: integer `-1`, expected u32",
        ),
        (
            subscribe(r#""want":4.0,"lease_ms":1000"#),
            "JSON: field want: invalid type: floating point `4.0`, expected u32",
        ),
        (
            subscribe(r#""want":4294967296,"lease_ms":1000"#),
            "JSON: field want: invalid value: integer `4294967296`, expected u32",
        ),
        (subscribe(r#""want":4,"lease_ms":99"#), "field lease_ms: must be 100 to 60000"),
        (
            refusal(r#"{"kind":"reset","session":18446744073709551616,"sequence":1,"stamp_ns":1}"#),
            "JSON: field session: missing, or not a whole number from 0 to 2^64-1",
        ),
        (
            refusal(r#"{"kind":"jump","session":1,"sequence":1,"stamp_ns":1}"#),
            "field kind: no such kind; see PROTOCOL.md for the names",
        ),
        (refusal("{"), "JSON: EOF while parsing an object at line 1 column 1"),
        (refusal("{} {}"), "JSON: trailing characters at line 1 column 4"),
    ];
    for (said, expected) in cases {
        assert_eq!(said, expected);
    }
    assert!(refusal(b"{\"\xff\":1}").contains("line 1 column"), "not UTF-8");
}

#[test]
fn long_and_deep_json_is_refused() {
    let padded = |bytes: usize| {
        let json = sample("stop").to_json();
        format!("{json}{}", " ".repeat(bytes - json.len()))
    };
    assert_eq!(Envelope::decode(padded(MAX_DATAGRAM_BYTES).as_bytes()), Ok(sample("stop")));
    assert_eq!(Envelope::decode(padded(1201).as_bytes()), Err(DecodeError::TooLong { bytes: 1201 }));
    assert_eq!(Envelope::from_json(padded(8192).as_bytes()), Ok(sample("stop")));
    let said = Envelope::from_json(padded(8193).as_bytes()).unwrap_err().to_string();
    assert_eq!(said, "JSON: 8193 bytes, at most 8192 are allowed");

    for (open, close) in [("[", "]"), ("{\"a\":", "}")] {
        for depth in [2, 100, 140] {
            let deep = format!(r#"{{"kind":{}0{}}}"#, open.repeat(depth), close.repeat(depth));
            assert!(deep.len() <= MAX_DATAGRAM_BYTES);
            assert!(refusal(&deep).starts_with("JSON: "), "{}", refusal(&deep));
        }
    }
    assert!(refusal("{\"kind\":".repeat(140)).contains("recursion limit"));
}
