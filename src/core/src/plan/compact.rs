//! The compact form of a plan of samples: a header and points of fixed width, little endian, without any text to parse.
//!
//! A plan file that does not begin with `{` is one. It says the same as the JSON form with one segment of kind
//! `samples`, and is compiled from the same raw form; `PROTOCOL.md` lists its bytes. Decoding is total: any bytes give a
//! plan or an error that names the place, and the memory it takes is bounded by the bytes' own number.

use super::compile::MAX_ID_BYTES;
use super::file::{Continues, FORMAT, RawOrigin, RawPlan, RawPoint, RawPose, RawSegment, read as read_json};
use alloc::borrow::ToOwned;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// First bytes; the digit is the form's version.
const MAGIC: [u8; 8] = *b"TRKHPLN1";
/// Length of the header: where the points begin.
const HEADER_BYTES: usize = 144;
/// Bytes of a number.
const NUMBER: usize = 8;

/// Bits of the header's flags.
mod flag {
    /// The plan is open.
    pub(super) const OPEN: u32 = 1;
    /// Each point has a speed.
    pub(super) const SPEED: u32 = 2;
    /// Each point has a turn rate.
    pub(super) const TURN_RATE: u32 = 4;
    /// The plan continues another one.
    pub(super) const CONTINUES: u32 = 8;
    /// The plan says where its origin lies.
    pub(super) const ORIGIN: u32 = 16;
    /// All of them.
    pub(super) const ALL: u32 = 31;
}

/// What a point holds.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Shape {
    speed: bool,
    turn_rate: bool,
}

impl Shape {
    fn of(point: &RawPoint) -> Self {
        Self { speed: point.speed_m_s.is_some(), turn_rate: point.turn_rate_rad_s.is_some() }
    }

    const fn point_bytes(self) -> usize {
        NUMBER * (4 + self.speed as usize + self.turn_rate as usize)
    }
}

/// Reads a plan's bytes.
pub(super) fn read(raw: &[u8]) -> Result<RawPlan, String> {
    let Some((header, points)) = raw.split_at_checked(HEADER_BYTES) else {
        return Err(format!("{} bytes, the header of the compact form alone has {HEADER_BYTES}", raw.len()));
    };
    if !header.starts_with(&MAGIC) {
        let got = &header[..MAGIC.len()];
        return Err(format!("byte 0: {got:02x?}, neither JSON nor the compact form's TRKHPLN1"));
    }
    let flags = word(header, 12);
    if flags & !flag::ALL != 0 {
        return Err(format!("byte 12: flags {flags:#x}, this program knows {:#x}", flag::ALL));
    }
    let shape = Shape { speed: flags & flag::SPEED != 0, turn_rate: flags & flag::TURN_RATE != 0 };
    let (count, stated) = (word(header, 48), u64::from(word(header, 48)) * shape.point_bytes() as u64);
    if word(header, 52) != 0 {
        return Err("bytes 52 to 55 are reserved and must be 0".to_owned());
    }
    if stated != points.len() as u64 {
        return Err(format!(
            "byte 48: {count} points of {} bytes are stated, {stated} bytes in all, and {} are there",
            shape.point_bytes(),
            points.len()
        ));
    }
    let continues = (flags & flag::CONTINUES != 0).then(|| Continues { at_s: number(header, 40) });
    let origin = (flags & flag::ORIGIN != 0).then(|| RawOrigin {
        latitude_deg: number(header, 120),
        longitude_deg: number(header, 128),
        altitude_m: number(header, 136),
    });
    for (field, given) in [(40..48, continues.is_some()), (120..144, origin.is_some())] {
        if !given && header[field.clone()].iter().any(|byte| *byte != 0) {
            return Err(format!("bytes {} to {}: not 0, but no flag says so", field.start, field.end - 1));
        }
    }
    Ok(RawPlan {
        format: FORMAT.to_owned(),
        id: id(&header[56..120])?,
        revision: word(header, 8),
        open: flags & flag::OPEN != 0,
        continues,
        origin,
        start: RawPose { x_m: number(header, 16), y_m: number(header, 24), heading_rad: number(header, 32) },
        segments: vec![RawSegment {
            kind: "samples".to_owned(),
            points: Some(points.chunks_exact(shape.point_bytes()).map(|at| point(at, shape)).collect()),
            ..RawSegment::default()
        }],
    })
}

fn id(field: &[u8]) -> Result<String, String> {
    let length = field.iter().position(|byte| *byte == 0).unwrap_or(field.len());
    if field[length..].iter().any(|byte| *byte != 0) {
        return Err("bytes 56 to 119: behind the id there is more than zeros".to_owned());
    }
    match core::str::from_utf8(&field[..length]) {
        Ok(id) => Ok(id.to_owned()),
        Err(_) => Err("bytes 56 to 119: the id is not UTF-8".to_owned()),
    }
}

fn point(bytes: &[u8], shape: Shape) -> RawPoint {
    RawPoint {
        t_s: number(bytes, 0),
        x_m: number(bytes, NUMBER),
        y_m: number(bytes, 2 * NUMBER),
        heading_rad: number(bytes, 3 * NUMBER),
        speed_m_s: shape.speed.then(|| number(bytes, 4 * NUMBER)),
        turn_rate_rad_s: shape.turn_rate.then(|| number(bytes, bytes.len() - NUMBER)),
        curvature_1_m: None,
    }
}

/// The caller has checked that the bytes are there.
fn word(bytes: &[u8], at: usize) -> u32 {
    u32::from_le_bytes([bytes[at], bytes[at + 1], bytes[at + 2], bytes[at + 3]])
}

/// The caller has checked that the bytes are there.
fn number(bytes: &[u8], at: usize) -> f64 {
    let mut number = [0; NUMBER];
    number.copy_from_slice(&bytes[at..at + NUMBER]);
    f64::from_le_bytes(number)
}

/// The compact form of a JSON plan of samples. The same plan comes of both; its digest is another one.
///
/// # Errors
/// If it is no plan, or one that the compact form cannot say.
pub fn pack(json: &[u8]) -> Result<Vec<u8>, String> {
    let plan = read_json(json).map_err(|error| format!("not a plan file: {error}"))?;
    if plan.format != FORMAT {
        return Err(format!("format: {:?}, this program reads {FORMAT:?}", plan.format));
    }
    let [segment] = plan.segments.as_slice() else {
        return Err(format!("segments: {} of them; the compact form holds one", plan.segments.len()));
    };
    let points = match (segment.kind.as_str(), &segment.points) {
        ("samples", Some(points)) if is_plain(segment) => points,
        (kind, _) => {
            return Err(format!("segments[0] ({kind}): the compact form holds plain samples with points"));
        }
    };
    let shape = points.first().map_or(Shape { speed: false, turn_rate: false }, Shape::of);
    if let Some(index) = points.iter().position(|point| Shape::of(point) != shape) {
        return Err(format!(
            "segments[0] (samples).points[{index}]: gives another choice of speed_m_s and turn_rate_rad_s than points[0]; in \
             the compact form all points give the same"
        ));
    }
    let count = u32::try_from(points.len()).map_err(|_| format!("{} points, too many", points.len()))?;
    let mut packed = Vec::with_capacity(HEADER_BYTES + points.len() * shape.point_bytes());
    write_header(&plan, shape, count, &mut packed)?;
    for point in points {
        let given = [Some(point.t_s), Some(point.x_m), Some(point.y_m), Some(point.heading_rad)];
        for value in given.into_iter().chain([point.speed_m_s, point.turn_rate_rad_s]).flatten() {
            packed.extend_from_slice(&value.to_le_bytes());
        }
    }
    Ok(packed)
}

/// Nothing but points is given. A point's curvature, which samples do not know, stands out as well.
fn is_plain(segment: &RawSegment) -> bool {
    let RawSegment { kind: _, numbers, lists, reverse, points, profile, timing } = segment;
    let curved = points.iter().flatten().any(|point| point.curvature_1_m.is_some());
    numbers.is_empty() && lists.is_empty() && !(*reverse || curved) && profile.is_none() && timing.is_none()
}

fn write_header(plan: &RawPlan, shape: Shape, count: u32, to: &mut Vec<u8>) -> Result<(), String> {
    let mut id = [0; MAX_ID_BYTES];
    let Some(room) = id.get_mut(..plan.id.len()).filter(|_| !plan.id.contains('\0')) else {
        return Err(format!(
            "id: {} bytes; the compact form holds up to {MAX_ID_BYTES}, none of them 0",
            plan.id.len()
        ));
    };
    room.copy_from_slice(plan.id.as_bytes());
    let bit = |given: bool, bit: u32| if given { bit } else { 0 };
    let flags = bit(plan.open, flag::OPEN)
        | bit(shape.speed, flag::SPEED)
        | bit(shape.turn_rate, flag::TURN_RATE)
        | bit(plan.continues.is_some(), flag::CONTINUES)
        | bit(plan.origin.is_some(), flag::ORIGIN);
    to.extend_from_slice(&MAGIC);
    to.extend_from_slice(&plan.revision.to_le_bytes());
    to.extend_from_slice(&flags.to_le_bytes());
    let at_s = plan.continues.map_or(0.0, |continues| continues.at_s);
    for value in [plan.start.x_m, plan.start.y_m, plan.start.heading_rad, at_s] {
        to.extend_from_slice(&value.to_le_bytes());
    }
    to.extend_from_slice(&count.to_le_bytes());
    to.extend_from_slice(&[0; 4]);
    to.extend_from_slice(&id);
    let origin = plan.origin.map(|origin| [origin.latitude_deg, origin.longitude_deg, origin.altitude_m]);
    origin.unwrap_or_default().iter().for_each(|value| to.extend_from_slice(&value.to_le_bytes()));
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    const PLAN: &str = r#"{"format":"trackhold-plan/1","id":"Süd","revision":7,"open":true,"continues":{"at_s":2.5},
        "start":{"x_m":1,"y_m":2,"heading_rad":0.5},"segments":[{"kind":"samples","points":[
        {"t_s":0,"x_m":1,"y_m":2,"heading_rad":0.5,"turn_rate_rad_s":0.25},
        {"t_s":1,"x_m":2,"y_m":2.5,"heading_rad":0.5,"turn_rate_rad_s":-0.125}]}]}"#;

    #[test]
    fn packed_samples_read_back_to_the_same_raw_form() {
        let full = PLAN.replace("\"turn_rate", "\"speed_m_s\":1.5,\"turn_rate");
        let bare = PLAN.replace(",\"turn_rate_rad_s\":0.25", "").replace(",\"turn_rate_rad_s\":-0.125", "");
        let placed = PLAN.replace(
            "\"start\"",
            r#""origin":{"latitude_deg":48.5,"longitude_deg":-9.25,"altitude_m":410},"start""#,
        );
        let own = PLAN.replace("\"continues\":{\"at_s\":2.5},", "").replace("true", "false");
        for (json, bytes) in [(PLAN, 40), (&full, 48), (&bare, 32), (&own, 40), (&placed, 40)] {
            let packed = pack(json.as_bytes()).unwrap();
            assert_eq!(packed.len(), HEADER_BYTES + 2 * bytes);
            let (read, meant) = (read(&packed).unwrap(), read_json(json.as_bytes()).unwrap());
            assert_eq!(format!("{read:?}"), format!("{meant:?}"));
        }
    }

    #[test]
    fn the_python_client_makes_the_same_bytes() {
        let full = PLAN.replace("\"turn_rate", "\"speed_m_s\":1.5,\"turn_rate");
        let digest = crate::digest::of_bytes(&pack(full.as_bytes()).unwrap());
        // The same digest stands in tools/python/test_vectors.py.
        assert_eq!(format!("{digest}"), "bcd55aa9bed5d5292a8d3824205132346f7331f4c4539161682f6b6556a7c77c");
    }

    #[test]
    fn what_the_compact_form_cannot_say_is_refused_by_name() {
        for (from, to, expected) in [
            (r#","turn_rate_rad_s":-0.125"#, "", "points[1]: gives another choice"),
            (r#""id":"Süd""#, r#""id":"a\u0000b""#, "none of them 0"),
            ("samples\"", "samples\",\"reverse\":true", "plain samples"),
            ("trackhold-plan/1", "trackhold-plan/9", "this program reads"),
            ("\"segments\":[", "\"segments\":[{\"kind\":\"dwell\",\"duration_s\":1},", "2 of them"),
            ("\"id\"", "\"di\"", "unknown field"),
        ] {
            let error = pack(PLAN.replace(from, to).as_bytes()).unwrap_err();
            assert!(error.contains(expected), "{error}");
        }
    }

    #[test]
    fn altered_headers_are_refused_with_their_place() {
        let packed = pack(PLAN.as_bytes()).unwrap();
        for (at, byte, expected) in [
            (0, b'X', "byte 0"),
            (12, 0xff, "byte 12: flags 0xff"),
            (12, 0x05, "bytes 40 to 47: not 0"),
            (125, 0x05, "bytes 120 to 143: not 0"),
            (12, 0x0f, "2 points of 48 bytes are stated, 96 bytes in all, and 80 are there"),
            (48, 3, "3 points of 40 bytes"),
            (52, 1, "reserved"),
            (57, 0xff, "not UTF-8"),
            (119, b'x', "more than zeros"),
        ] {
            let mut altered = packed.clone();
            altered[at] = byte;
            let error = read(&altered).unwrap_err();
            assert!(error.contains(expected), "{at}: {error}");
        }
        for length in 0..packed.len() {
            assert!(read(&packed[..length]).is_err(), "cut at {length}");
        }
    }

    proptest! {
        #[test]
        fn any_bytes_give_a_plan_or_an_error(tail in prop::collection::vec(any::<u8>(), 0..300), keep in 0..144_usize) {
            let mut bytes = pack(PLAN.as_bytes()).unwrap();
            bytes.truncate(keep);
            bytes.extend(tail);
            let _ = read(&bytes);
        }
    }
}
