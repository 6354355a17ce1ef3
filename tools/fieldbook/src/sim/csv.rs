//! A simulated run as a table: a row a tick.

use super::observe::{Observer, Row};
use crate::output::CsvFile;
use std::io;
use std::path::Path;
use trackhold_proto::journal::flag;
use trackhold_proto::message::WheelLayout;

/// The columns before the wheels'.
pub const COLUMNS: [&str; 15] = [
    "t_s",
    "x_m",
    "y_m",
    "heading_rad",
    "ref_x_m",
    "ref_y_m",
    "ref_heading_rad",
    "ref_speed_m_s",
    "ref_turn_rate_rad_s",
    "along_error_m",
    "cross_error_m",
    "heading_error_rad",
    "speed_m_s",
    "turn_rate_rad_s",
    "mode",
];

/// Writes a run's rows into a file as they come.
#[derive(Debug)]
pub struct CsvRows {
    file: CsvFile,
}

impl CsvRows {
    /// Makes the file, for a machine with this wheel layout.
    ///
    /// # Errors
    /// If it cannot be made.
    pub fn create(path: &Path, layout: WheelLayout) -> io::Result<Self> {
        let columns = COLUMNS.iter().chain(layout.columns()).copied();
        Ok(Self { file: CsvFile::create(path, columns)? })
    }

    /// Writes what is left.
    ///
    /// # Errors
    /// If anything could not be written.
    pub fn finish(self) -> io::Result<()> {
        self.file.finish()
    }
}

impl Observer for CsvRows {
    fn row(&mut self, row: &Row<'_>) {
        let (record, truth, file) = (row.record, row.truth, &mut self.file);
        file.numbers(Some([row.t.seconds(), truth.x_m, truth.y_m, truth.heading_rad]));
        file.numbers(record.has(flag::HAS_REFERENCE).then_some([
            record.ref_x_m,
            record.ref_y_m,
            record.ref_heading_rad,
            record.ref_speed_m_s,
            record.ref_turn_rate_rad_s,
        ]));
        file.numbers(row.error.map(|error| [error.along_m, error.cross_m, error.heading_rad]));
        file.numbers(Some([record.command.speed_m_s, record.command.turn_rate_rad_s]));
        file.text(record.mode.name());
        let layout = record.command.layout;
        record.command.wheels.iter().take(layout.count()).for_each(|wheel| file.number(*wheel));
        file.end_row();
    }
}
