//! What travels on Trackhold's wire and lies in its journal.
//!
//! | module | what it holds |
//! | --- | --- |
//! | [`header`] | the fixed 40 bytes in front of every binary datagram |
//! | [`message`] | the messages, one struct a kind, and the enum over them |
//! | [`codec`] | datagram ⇄ message, binary and JSON; total: any bytes give a value or an error |
//! | [`journal`] | the journal's entries: events, effects, tick records, and their frames |
//! | [`words`] | modes, causes, refusals: the vocabulary shared by wire, journal and people |
//! | [`blob`] | bounded byte strings and texts that decode without allocating |
//!
//! The byte-level specification is `PROTOCOL.md` beside this crate; `vectors/` holds golden datagrams.
//! This crate imports nothing else of the project, keeps no state and does no I/O.
#![no_std]

extern crate alloc;

pub mod blob;
mod check;
pub mod codec;
mod frame;
pub mod header;
pub mod journal;
mod json;
pub mod message;
mod orders;
mod tick;
pub mod words;

pub use codec::{DecodeError, Envelope};
pub use message::Message;
