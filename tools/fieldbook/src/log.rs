//! Track logs: a journal in a file, written and read frame by frame in bounded memory.
//!
//! The file is [`LOG_MAGIC`], then frames. A recorder's own frames, gaps and the end mark, have the number [`UNNUMBERED`];
//! the end mark states how many numbered entries there are and the SHA-256 of every byte before it. See PROTOCOL.md,
//! section 8.

use sha2::{Digest as _, Sha256};
use std::fs::{File, OpenOptions};
use std::io::{self, BufReader, BufWriter, Read, Write};
use std::path::{Path, PathBuf};
use thiserror::Error;
use trackhold_proto::blob::{Digest, Hex};
use trackhold_proto::journal::{
    Body, End, Entry, FRAME_HEAD_BYTES, FrameError, Gap, LOG_MAGIC, UNNUMBERED, frame_length, read_frame,
    write_frame,
};

/// Bytes that reader and writer hold back from the file system.
const BUFFER_BYTES: usize = 256 << 10;
/// A frame's bytes are asked for in pieces of this size, so that a hostile length allocates no more than is there.
const PIECE_BYTES: usize = 64 << 10;

/// Writes a track log. Without [`LogWriter::finish`] the log has no end mark, and a replay says that it was cut off.
#[derive(Debug)]
pub struct LogWriter {
    file: BufWriter<File>,
    path: PathBuf,
    hash: Sha256,
    entries: u64,
    frame: Vec<u8>,
}

impl LogWriter {
    /// Begins a new log.
    ///
    /// # Errors
    /// If the file cannot be made, or is there already: a recording is never written over.
    pub fn create(path: &Path) -> io::Result<Self> {
        Self::begin(path, OpenOptions::new().write(true).create_new(true))
    }

    /// Begins a new log, in the place of an old one of that name if there is one.
    ///
    /// # Errors
    /// If the file cannot be made.
    pub fn replace(path: &Path) -> io::Result<Self> {
        Self::begin(path, OpenOptions::new().write(true).create(true).truncate(true))
    }

    fn begin(path: &Path, options: &OpenOptions) -> io::Result<Self> {
        let file = BufWriter::with_capacity(BUFFER_BYTES, options.open(path)?);
        let (hash, path) = (Sha256::new(), std::path::absolute(path)?);
        let mut writer = Self { file, path, hash, entries: 0, frame: Vec::new() };
        writer.put(&LOG_MAGIC)?;
        Ok(writer)
    }

    /// Appends a frame that is encoded already, as it came in a journal part.
    ///
    /// # Errors
    /// If it cannot be written.
    pub fn write_frame_bytes(&mut self, frame: &[u8]) -> io::Result<()> {
        if !frame.starts_with(&UNNUMBERED.to_le_bytes()) {
            self.entries += 1;
        }
        self.put(frame)
    }

    /// Appends an entry.
    ///
    /// # Errors
    /// If it cannot be written.
    pub fn write_entry(&mut self, entry: &Entry) -> io::Result<()> {
        let mut frame = std::mem::take(&mut self.frame);
        frame.clear();
        write_frame(entry, &mut frame);
        let written = self.write_frame_bytes(&frame);
        self.frame = frame;
        written
    }

    /// Notes that the entries `first` to `last`, both included, could not be had.
    ///
    /// # Errors
    /// If it cannot be written.
    pub fn gap(&mut self, first: u64, last: u64) -> io::Result<()> {
        self.write_own(Body::Gap(Gap { first, last }))
    }

    /// Hands everything so far to the system, so that a crash of this program loses nothing.
    ///
    /// # Errors
    /// If it cannot be written.
    pub fn flush(&mut self) -> io::Result<()> {
        self.file.flush()
    }

    /// How many numbered entries the log holds so far.
    pub fn entries(&self) -> u64 {
        self.entries
    }

    /// Writes the end mark and returns the log's absolute path.
    ///
    /// # Errors
    /// If it cannot be written to the disk whole.
    pub fn finish(mut self) -> io::Result<PathBuf> {
        let end = End { entries: self.entries, digest: Hex(self.hash.clone().finalize().into()) };
        self.write_own(Body::End(end))?;
        self.file.flush()?;
        self.file.get_ref().sync_all()?;
        Ok(self.path)
    }

    fn write_own(&mut self, body: Body) -> io::Result<()> {
        self.write_entry(&Entry { number: UNNUMBERED, at_ns: 0, body })
    }

    fn put(&mut self, bytes: &[u8]) -> io::Result<()> {
        self.hash.update(bytes);
        self.file.write_all(bytes)
    }
}

/// What is wrong with a track log.
#[derive(Debug, Error)]
pub enum LogError {
    /// It cannot be read.
    #[error("cannot be read: {0}")]
    Io(#[from] io::Error),
    /// It does not begin like one.
    #[error("is no track log: its first 8 bytes are not TRKHLOG1")]
    NotALog,
    /// It ends within a frame.
    #[error("ends within the frame at byte {offset}, {missing} bytes early: it was cut off")]
    CutFrame {
        /// Where the frame begins.
        offset: u64,
        /// How many bytes are missing.
        missing: usize,
    },
    /// A frame is damaged or unknown.
    #[error("frame at byte {offset}: {error}")]
    Frame {
        /// Where the frame begins.
        offset: u64,
        /// What is wrong with it.
        error: FrameError,
    },
    /// A frame of a recorder and a frame of a journal are mixed up.
    #[error("frame at byte {offset}: a {name} frame must not have the number {number}")]
    Numbering {
        /// Where the frame begins.
        offset: u64,
        /// What it holds.
        name: &'static str,
        /// Its number.
        number: u64,
    },
    /// The end mark states another number of entries than there are.
    #[error("the end mark at byte {offset} states {stated} entries, {found} are there")]
    Count {
        /// Where the end mark begins.
        offset: u64,
        /// The number stated.
        stated: u64,
        /// The number found.
        found: u64,
    },
    /// The end mark states another SHA-256 than the bytes have.
    #[error("the end mark at byte {offset} states the SHA-256 {stated}, the bytes before it have {found}")]
    Digest {
        /// Where the end mark begins.
        offset: u64,
        /// The digest stated.
        stated: Digest,
        /// The digest found.
        found: Digest,
    },
    /// Something follows the end mark.
    #[error("bytes follow the end mark at byte {offset}")]
    AfterEnd {
        /// Where the end mark begins.
        offset: u64,
    },
}

/// How the reading of a log stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Ending {
    /// There is more to read, or an error came.
    Reading,
    /// The end mark was found, and its count and SHA-256 are right.
    Marked(End),
    /// The file ends behind a whole frame, without an end mark.
    Unmarked,
}

/// Reads a track log: an iterator over its entries, gaps among them; the end mark is checked and not returned.
#[derive(Debug)]
pub struct LogReader<R = BufReader<File>> {
    source: R,
    hash: Sha256,
    offset: u64,
    entries: u64,
    frame: Vec<u8>,
    ending: Ending,
    broken: bool,
}

impl LogReader {
    /// Opens a log.
    ///
    /// # Errors
    /// If it cannot be read, or does not begin like a track log.
    pub fn open(path: &Path) -> Result<Self, LogError> {
        Self::new(BufReader::with_capacity(BUFFER_BYTES, File::open(path)?))
    }
}

impl<R: Read> LogReader<R> {
    /// Reads a log from anywhere. Wants a source that buffers.
    ///
    /// # Errors
    /// If it cannot be read, or does not begin like a track log.
    pub fn new(source: R) -> Result<Self, LogError> {
        let (hash, frame, ending) = (Sha256::new(), Vec::new(), Ending::Reading);
        let mut reader = Self { source, hash, offset: 0, entries: 0, frame, ending, broken: false };
        reader.fetch(LOG_MAGIC.len())?;
        if reader.frame != LOG_MAGIC {
            return Err(LogError::NotALog);
        }
        reader.pass_frame();
        Ok(reader)
    }

    /// How the reading stands; says after the last entry whether the log is whole.
    pub fn ending(&self) -> Ending {
        self.ending
    }

    /// The bytes of the frame last read, head included.
    pub fn frame_bytes(&self) -> &[u8] {
        &self.frame
    }

    /// How many numbered entries were read.
    pub fn entries(&self) -> u64 {
        self.entries
    }

    fn read(&mut self) -> Result<Option<Entry>, LogError> {
        self.frame.clear();
        self.fetch(FRAME_HEAD_BYTES)?;
        if self.frame.is_empty() {
            self.ending = Ending::Unmarked;
            return Ok(None);
        }
        let offset = self.offset;
        let in_frame = |error| match error {
            FrameError::Short { missing } => LogError::CutFrame { offset, missing },
            error => LogError::Frame { offset, error },
        };
        let length = frame_length(&self.frame).map_err(in_frame)?;
        self.fetch(length)?;
        let (entry, _) = read_frame(&self.frame).map_err(in_frame)?;
        let own = matches!(entry.body, Body::Gap(_) | Body::End(_));
        if own != (entry.number == UNNUMBERED) || own && entry.at_ns != 0 {
            return Err(LogError::Numbering { offset, name: entry.body.name(), number: entry.number });
        }
        if let Body::End(end) = entry.body {
            self.check_end(end)?;
            return Ok(None);
        }
        self.entries += u64::from(!own);
        self.pass_frame();
        Ok(Some(entry))
    }

    fn check_end(&mut self, end: End) -> Result<(), LogError> {
        let (offset, found) = (self.offset, Hex(self.hash.clone().finalize().into()));
        if end.entries != self.entries {
            return Err(LogError::Count { offset, stated: end.entries, found: self.entries });
        }
        if end.digest != found {
            return Err(LogError::Digest { offset, stated: end.digest, found });
        }
        self.frame.clear();
        self.fetch(1)?;
        if !self.frame.is_empty() {
            return Err(LogError::AfterEnd { offset });
        }
        self.ending = Ending::Marked(end);
        Ok(())
    }

    /// Fills the frame up to `length` bytes, or to what is left of the file.
    fn fetch(&mut self, length: usize) -> io::Result<()> {
        while self.frame.len() < length {
            let begin = self.frame.len();
            self.frame.resize(length.min(begin + PIECE_BYTES), 0);
            let mut filled = begin;
            while filled < self.frame.len() {
                match self.source.read(&mut self.frame[filled..]) {
                    Ok(0) => break,
                    Ok(count) => filled += count,
                    Err(error) if error.kind() == io::ErrorKind::Interrupted => {}
                    Err(error) => return Err(error),
                }
            }
            if filled < self.frame.len() {
                self.frame.truncate(filled);
                break;
            }
        }
        Ok(())
    }

    fn pass_frame(&mut self) {
        self.hash.update(&self.frame);
        self.offset += self.frame.len() as u64;
    }
}

impl<R: Read> Iterator for LogReader<R> {
    type Item = Result<Entry, LogError>;

    /// The next entry. After an error, or at the end, there is nothing more.
    fn next(&mut self) -> Option<Self::Item> {
        if self.broken || self.ending != Ending::Reading {
            return None;
        }
        let read = self.read();
        self.broken = read.is_err();
        read.transpose()
    }
}
