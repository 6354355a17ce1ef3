//! Text and tables to the outside: standard output that may be closed early, CSV files.

use std::fs::File;
use std::io::{self, BufWriter, Write};
use std::path::Path;

/// Prints to standard output. A reader who has gone is no error: the exit code still says what happened.
///
/// # Errors
/// If it cannot be written for another reason.
pub fn print(text: &str) -> io::Result<()> {
    let mut out = io::stdout().lock();
    match out.write_all(text.as_bytes()).and_then(|()| out.flush()) {
        Err(error) if error.kind() == io::ErrorKind::BrokenPipe => Ok(()),
        other => other,
    }
}

/// True if the error comes from a reader of the output who has gone.
pub fn is_broken_pipe(error: &anyhow::Error) -> bool {
    let broken = |error: &io::Error| error.kind() == io::ErrorKind::BrokenPipe;
    error.chain().any(|cause| cause.downcast_ref::<io::Error>().is_some_and(broken))
}

/// A CSV file being written row by row. Numbers print so that they read back to the same bits; what is absent is an empty
/// cell. The first error is kept and told at the end.
#[derive(Debug)]
pub struct CsvFile {
    file: BufWriter<File>,
    at_begin: bool,
    failed: Option<io::Error>,
}

impl CsvFile {
    /// Makes the file and writes the header.
    ///
    /// # Errors
    /// If it cannot be made.
    pub fn create<'a>(path: &Path, columns: impl IntoIterator<Item = &'a str>) -> io::Result<Self> {
        let file = BufWriter::with_capacity(256 << 10, File::create(path)?);
        let mut csv = Self { file, at_begin: true, failed: None };
        for column in columns {
            csv.text(column);
        }
        csv.end_row();
        Ok(csv)
    }

    /// A number.
    pub fn number(&mut self, value: f64) {
        self.cell(format_args!("{value}"));
    }

    /// Numbers, or as many empty cells.
    pub fn numbers<const N: usize>(&mut self, values: Option<[f64; N]>) {
        match values {
            Some(values) => values.into_iter().for_each(|value| self.number(value)),
            None => (0..N).for_each(|_| self.text("")),
        }
    }

    /// A word without comma, quote or line break.
    pub fn text(&mut self, text: &str) {
        self.cell(format_args!("{text}"));
    }

    /// Ends the row.
    pub fn end_row(&mut self) {
        self.at_begin = true;
        let written = self.file.write_all(b"\n");
        self.keep(written);
    }

    /// Writes what is left.
    ///
    /// # Errors
    /// The first one that came.
    pub fn finish(mut self) -> io::Result<()> {
        match self.failed.take() {
            Some(error) => Err(error),
            None => self.file.flush(),
        }
    }

    fn cell(&mut self, value: std::fmt::Arguments<'_>) {
        let comma = if std::mem::take(&mut self.at_begin) { "" } else { "," };
        let written = write!(self.file, "{comma}{value}");
        self.keep(written);
    }

    fn keep(&mut self, written: io::Result<()>) {
        if let Err(error) = written {
            self.failed.get_or_insert(error);
        }
    }
}
