//! `import csv`: a table of points.
//!
//! A line with anything but numbers before the first point is the header. Empty lines and lines that begin with # are
//! left out. The delimiter is taken from the first line that counts, unless it is given.

use super::columns::{Column, Quantity, read_name};
use super::path::{self, PathOptions};
use super::stamp::Stamp;
use super::track::{Place, Refused, Spot, points};
use super::{Imported, Output};
use std::path::PathBuf;

/// The arguments.
#[derive(Debug, clap::Args)]
pub struct Args {
    /// The table.
    pub file: PathBuf,
    /// The columns in their order, with - for one to leave out, like t,x,y,heading or t_ms,x_mm,y_mm,-,heading_deg; or
    /// path: x, y and heading only, without times. Without it the header says which is which. Names: t, x, y, heading,
    /// speed; units: t s ms us ns, x and y m cm mm km, heading rad deg mrad, speed m_s cm_s mm_s km_h (the first counts if
    /// none is named).
    #[arg(long, value_name = "NAMES|path")]
    pub columns: Option<String>,
    /// What stands between two cells.
    #[arg(long, value_enum)]
    pub delimiter: Option<Delimiter>,
    /// Numbers are written 1,5 and not 1.5.
    #[arg(long)]
    pub decimal_comma: bool,
    /// How the track becomes a path.
    #[command(flatten)]
    pub path: PathOptions,
    /// What comes out.
    #[command(flatten)]
    pub output: Output,
}

/// What stands between two cells.
#[derive(Clone, Copy, Debug, PartialEq, Eq, clap::ValueEnum)]
pub enum Delimiter {
    /// ,
    Comma,
    /// ;
    Semicolon,
    /// A tab.
    Tab,
    /// Blanks, one or more.
    Space,
}

/// How a table is to be read.
#[derive(Clone, Debug, Default)]
pub struct Reading<'a> {
    /// See [`Args::columns`].
    pub columns: Option<&'a str>,
    /// See [`Args::delimiter`].
    pub delimiter: Option<Delimiter>,
    /// See [`Args::decimal_comma`].
    pub decimal_comma: bool,
}

pub(super) fn import(args: &Args, text: &str) -> Result<Imported, Refused> {
    let mut notes = Vec::new();
    let reading = Reading {
        columns: args.columns.as_deref(),
        delimiter: args.delimiter,
        decimal_comma: args.decimal_comma,
    };
    let spots = read(text, &reading, &mut notes)?;
    let what = points(spots.len());
    let drafted = path::draft(&spots, None, &args.path, &mut notes)?;
    Ok(Imported::of_path(drafted, what, notes))
}

/// A line that counts, cut into cells.
struct Row<'a> {
    line: usize,
    cells: Vec<&'a str>,
}

/// Reads a table into points.
///
/// # Errors
/// What cannot be read, with line and column.
pub fn read(text: &str, reading: &Reading<'_>, notes: &mut Vec<String>) -> Result<Vec<Spot>, Refused> {
    let text = text.trim_start_matches('\u{feff}');
    let mut lines = text
        .lines()
        .enumerate()
        .map(|(index, line)| (index + 1, line))
        .filter(|(_, line)| !line.trim().is_empty() && !line.trim_start().starts_with('#'))
        .peekable();
    let Some((_, first)) = lines.peek().copied() else {
        return Err(Refused::because("the file has no line with content"));
    };
    let delimiter = reading.delimiter.unwrap_or_else(|| guess(first));
    let mut rows = lines.map(|(line, text)| Row { line, cells: cut(text, delimiter) }).peekable();
    let number = |cell: &str| Stamp::parse(&plain(cell, reading.decimal_comma));
    let header = rows.next_if(|row| row.cells.iter().any(|cell| number(cell).is_none()));
    let width = header.as_ref().or_else(|| rows.peek()).map_or(0, |row| row.cells.len());
    let columns = choose(reading.columns, header.as_ref(), width, notes)?;
    let mut findings = Vec::new();
    let mut spots = Vec::new();
    let mut begin = None;
    for row in rows {
        match point(&row, &columns, width, reading.decimal_comma, &mut begin) {
            Ok(spot) => spots.push(spot),
            Err(what) => findings.push(format!("line {}: {what}", row.line)),
        }
    }
    Refused::unless_none(findings)?;
    if spots.len() < 2 {
        return Err(Refused::because(format!(
            "{} in the file; a path needs at least two",
            points(spots.len())
        )));
    }
    tell_units(&columns, &spots, notes);
    Ok(spots)
}

fn guess(line: &str) -> Delimiter {
    match line {
        _ if line.contains('\t') => Delimiter::Tab,
        _ if line.contains(';') => Delimiter::Semicolon,
        _ if line.contains(',') => Delimiter::Comma,
        _ => Delimiter::Space,
    }
}

/// The cells of a line, without blanks and quotes around them.
fn cut(line: &str, delimiter: Delimiter) -> Vec<&str> {
    let by = |mark: char| line.split(mark).map(|cell| unquote(cell.trim())).collect();
    match delimiter {
        Delimiter::Comma => by(','),
        Delimiter::Semicolon => by(';'),
        Delimiter::Tab => by('\t'),
        Delimiter::Space => line.split_whitespace().map(unquote).collect(),
    }
}

fn unquote(cell: &str) -> &str {
    cell.strip_prefix('"').and_then(|cell| cell.strip_suffix('"')).unwrap_or(cell)
}

fn plain(cell: &str, decimal_comma: bool) -> String {
    if decimal_comma { cell.replace(',', ".") } else { cell.to_owned() }
}

/// The meaning of each column, in the file's order.
fn choose(
    asked: Option<&str>,
    header: Option<&Row<'_>>,
    width: usize,
    notes: &mut Vec<String>,
) -> Result<Vec<Option<Column>>, Refused> {
    let columns = match (asked.map(str::trim), header) {
        (Some("path"), None) => named(["x", "y", "heading"].into_iter().take(width))?,
        (Some("path"), Some(row)) => {
            let mut columns = named(row.cells.iter().copied())?;
            columns.iter_mut().for_each(|column| {
                column.take_if(|column| matches!(column.quantity, Quantity::Time | Quantity::Speed));
            });
            columns
        }
        (Some(names), _) => asked_for(names, width)?,
        (None, Some(row)) => {
            let columns = named(row.cells.iter().copied())?;
            let skipped: Vec<&str> = row
                .cells
                .iter()
                .zip(&columns)
                .filter(|(_, column)| column.is_none())
                .map(|(cell, _)| *cell)
                .collect();
            if !skipped.is_empty() {
                notes.push(format!("columns left out: {}", skipped.join(", ")));
            }
            columns
        }
        (None, None) => {
            return Err(Refused::because(
                "the file has no header; say what its columns are, for example --columns t,x,y,heading",
            ));
        }
    };
    demand(&columns)?;
    Ok(columns)
}

fn named<'a>(names: impl Iterator<Item = &'a str>) -> Result<Vec<Option<Column>>, Refused> {
    names.map(read_name).collect::<Result<_, _>>().map_err(Refused::because)
}

fn asked_for(names: &str, width: usize) -> Result<Vec<Option<Column>>, Refused> {
    let words: Vec<&str> = names.split(',').map(str::trim).collect();
    let columns = named(words.iter().copied())?;
    if let Some((word, _)) =
        words.iter().zip(&columns).find(|(word, column)| **word != "-" && column.is_none())
    {
        return Err(Refused::because(format!(
            "--columns: {word:?} is no column; known are t, x, y, heading, speed with a unit like x_mm, and - for one to leave out"
        )));
    }
    if words.len() > width {
        return Err(Refused::because(format!(
            "--columns names {} columns, the file has {width}; is the delimiter right?",
            words.len()
        )));
    }
    Ok(columns)
}

/// Each quantity once, and x and y at least.
fn demand(columns: &[Option<Column>]) -> Result<(), Refused> {
    let count = |quantity| columns.iter().flatten().filter(|column| column.quantity == quantity).count();
    use Quantity::{Heading, Speed, Time, X, Y};
    for quantity in [Time, X, Y, Heading, Speed] {
        let needed = matches!(quantity, X | Y);
        let what = match count(quantity) {
            0 if needed => "is missing; name it in the header or with --columns",
            0 | 1 => continue,
            _ => "is there more than once; say which one counts with --columns",
        };
        return Err(Refused::because(format!("column {}: {what}", quantity.name())));
    }
    if count(Speed) == 1 && count(Time) == 0 {
        return Err(Refused::because(
            "column speed: without times only --speed counts; give t too, or leave the column out with --columns",
        ));
    }
    Ok(())
}

fn point(
    row: &Row<'_>,
    columns: &[Option<Column>],
    width: usize,
    decimal_comma: bool,
    begin: &mut Option<Stamp>,
) -> Result<Spot, String> {
    if row.cells.len() != width {
        return Err(format!("{} columns, the first line has {width}", row.cells.len()));
    }
    let mut spot = Spot::at(Place::Line(row.line), 0.0, 0.0);
    for (index, (cell, column)) in row.cells.iter().zip(columns).enumerate() {
        let Some(column) = column else { continue };
        let place = format!("column {} ({})", index + 1, column.quantity.name());
        let hint = if cell.contains(',') { "; with a decimal comma? give --decimal-comma" } else { "" };
        let stamp = Stamp::parse(&plain(cell, decimal_comma))
            .ok_or_else(|| format!("{place}: {cell:?} is not a number{hint}"))?;
        let value = stamp.value() * column.factor;
        match column.quantity {
            Quantity::Time => {
                // Stamps count from the first one, so that nanoseconds of an epoch keep their digits.
                let begin = *begin.get_or_insert(stamp);
                spot.t_s = Some(stamp.since(begin) * column.factor);
            }
            Quantity::X => spot.x_m = value,
            Quantity::Y => spot.y_m = value,
            Quantity::Heading => spot.heading_rad = Some(value),
            Quantity::Speed => spot.speed_m_s = Some(value),
        }
    }
    Ok(spot)
}

fn tell_units(columns: &[Option<Column>], spots: &[Spot], notes: &mut Vec<String>) {
    let taken: Vec<String> = columns
        .iter()
        .flatten()
        .filter(|column| !column.unit_given)
        .map(|column| format!("{} in {}", column.quantity.name(), column.quantity.si()))
        .collect();
    if !taken.is_empty() {
        notes.push(format!("no unit named, taken as {}", taken.join(", ")));
    }
    let unnamed = columns.iter().flatten().any(|c| c.quantity == Quantity::Heading && !c.unit_given);
    let large = spots.iter().find(|spot| spot.heading_rad.is_some_and(|heading| heading.abs() > 7.0));
    if let Some(spot) = large.filter(|_| unnamed) {
        notes.push(format!("{}: heading beyond ±7 rad; in degrees? name the column heading_deg", spot.place));
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn spots(text: &str, columns: Option<&str>) -> Result<Vec<Spot>, Refused> {
        read(text, &Reading { columns, ..Reading::default() }, &mut Vec::new())
    }

    #[test]
    fn delimiters_headers_and_units_are_found() {
        for text in [
            "t,x,y,heading\n1,2,3,0.5\n2,3,3,0.5\n",
            "# made today\n\"t\";\"x [mm]\";\"y [mm]\";\"heading\"\n1;2000;3000;0.5\n\n2;3000;3000;0.5\n",
            "time_ms\tx\ty\tyaw\tbattery\n1000\t2\t3\t0.5\t88\n2000\t3\t3\t0.5\t87\n",
            "t x  y heading\r\n1 2 3 0.5\r\n2  3 3 0.5\r\n",
            "\u{feff}x,y,heading,t\n2,3,0.5,1\n3,3,0.5,2\n",
        ] {
            let spots = spots(text, None).unwrap_or_else(|refused| panic!("{text}: {refused}"));
            assert_eq!((spots[0].t_s, spots[0].x_m, spots[0].y_m), (Some(0.0), 2.0, 3.0), "{text}");
            assert_eq!((spots[1].t_s, spots[1].heading_rad), (Some(1.0), Some(0.5)), "{text}");
        }
    }

    #[test]
    fn columns_count_over_the_header_and_path_leaves_times_out() {
        let text = "t,x,y\n0,1,2\n1,3,4\n";
        assert_eq!(spots(text, Some("t,y,x")).unwrap()[0].x_m, 2.0);
        assert_eq!(spots(text, Some("path")).unwrap()[0].t_s, None);
        assert_eq!(spots("1,2\n3,4\n", Some("path")).unwrap()[1].y_m, 4.0);
        assert_eq!(spots("1,2,9\n3,4,9\n", Some("x,y,-")).unwrap()[1].heading_rad, None);
    }

    #[test]
    fn decimal_commas_are_read_if_asked() {
        let reading = Reading { columns: Some("path"), decimal_comma: true, ..Reading::default() };
        assert_eq!(read("1,5;2\n2,5;2\n", &reading, &mut Vec::new()).unwrap()[0].x_m, 1.5);
    }

    #[test]
    fn units_taken_for_granted_are_told() {
        let mut notes = Vec::new();
        read("x,y_mm,heading\n0,0,0\n1,0,45\n", &Reading::default(), &mut notes).unwrap();
        assert_eq!(
            notes,
            [
                "no unit named, taken as x in m, heading in rad",
                "line 3: heading beyond ±7 rad; in degrees? name the column heading_deg"
            ]
        );
    }

    #[test]
    fn nanoseconds_of_an_epoch_keep_their_digits() {
        let text = "t_ns,x,y\n1760000000123456789,0,0\n1760000000123457789,0.00001,0\n";
        assert_eq!(spots(text, None).unwrap()[1].t_s, Some(1000.0 * 1e-9));
    }
}
