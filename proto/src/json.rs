//! The JSON form of a message: one object a datagram, the header's numbers beside the payload's fields.

use crate::codec::{DecodeError, Envelope};
use crate::message::{Message, Payload};
use alloc::format;
use alloc::string::{String, ToString};
use core::cell::RefCell;
use core::fmt;
use serde::de::value::MapDeserializer;
use serde::de::{DeserializeOwned, Error as _, MapAccess, Visitor};
use serde::{Deserialize, Deserializer};
use serde_json::{Map, Value};

/// No message in JSON is longer than this, bytes. What is sent to the daemon has to keep to
/// [`crate::header::MAX_DATAGRAM_BYTES`] in either form; its answers in JSON can need more.
pub const MAX_JSON_BYTES: usize = 8192;

/// The members of an object, each stated once: parsers differ in which of two they keep.
pub(crate) struct Fields(Map<String, Value>);

impl<'de> Deserialize<'de> for Fields {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct Members;
        impl<'de> Visitor<'de> for Members {
            type Value = Fields;
            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str("an object")
            }
            fn visit_map<A: MapAccess<'de>>(self, mut members: A) -> Result<Fields, A::Error> {
                let mut fields = Map::new();
                while let Some((name, value)) = members.next_entry::<String, Value>()? {
                    if fields.contains_key(&name) {
                        return Err(A::Error::custom(format_args!("field {name}: stated twice")));
                    }
                    fields.insert(name, value);
                }
                Ok(Fields(fields))
            }
        }
        deserializer.deserialize_map(Members)
    }
}

pub(crate) fn encode(envelope: &Envelope) -> String {
    let mut object = Map::new();
    object.insert("kind".to_string(), envelope.message.name().into());
    object.insert("session".to_string(), envelope.session.into());
    object.insert("sequence".to_string(), envelope.sequence.into());
    object.insert("stamp_ns".to_string(), envelope.stamp_ns.into());
    if let Ok(Value::Object(fields)) = envelope.message.to_json_fields() {
        object.extend(fields);
    }
    Value::Object(object).to_string()
}

fn refuse(what: String) -> DecodeError {
    DecodeError::Json { what }
}

pub(crate) fn decode(text: &[u8]) -> Result<Envelope, DecodeError> {
    if text.len() > MAX_JSON_BYTES {
        return Err(refuse(format!("{} bytes, at most {MAX_JSON_BYTES} are allowed", text.len())));
    }
    let Fields(mut fields) = match serde_json::from_slice(text) {
        Ok(fields) => fields,
        Err(error) => return Err(refuse(error.to_string())),
    };
    let Some(Value::String(name)) = fields.remove("kind") else {
        return Err(refuse("field kind: missing, or not a string".to_string()));
    };
    let mut number = |field: &str| match fields.remove(field).as_ref().and_then(Value::as_u64) {
        Some(value) => Ok(value),
        None => Err(refuse(format!("field {field}: missing, or not a whole number from 0 to 2^64-1"))),
    };
    let (session, sequence, stamp_ns) = (number("session")?, number("sequence")?, number("stamp_ns")?);
    let message = Message::from_json_fields(&name, Fields(fields))?;
    Ok(Envelope { session, sequence, stamp_ns, message })
}

/// Reads a payload's fields. serde's errors do not say at which member they arose, so the members are handed over
/// one by one and the name of the last one kept.
pub(crate) fn payload<T: Payload + DeserializeOwned>(fields: Fields) -> Result<T, DecodeError> {
    let at = RefCell::new(String::new());
    let mut members = fields.0.into_iter();
    let handed_over = core::iter::from_fn(|| {
        let member = members.next();
        *at.borrow_mut() = member.as_ref().map(|(name, _)| name.clone()).unwrap_or_default();
        member
    });
    let read = T::deserialize(MapDeserializer::<_, serde_json::Error>::new(handed_over));
    let payload = read.map_err(|error| match at.borrow().as_str() {
        "" => refuse(error.to_string()),
        name => refuse(format!("field {name}: {error}")),
    })?;
    payload.check()?;
    Ok(payload)
}
