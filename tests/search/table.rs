//! The mode table as the core documents it, read as text: what the search holds the node against is the page, not the
//! code.

use trackhold_core::node::mode::{Trigger, Verdict};
use trackhold_proto::words::Mode;

/// The source file whose header is the table.
const PAGE: &str = include_str!("../../src/core/src/node/mode.rs");

/// What the table says, and which of its cells were asked.
#[derive(Clone, Debug)]
pub(crate) struct ModeTable {
    cells: Vec<(Mode, Trigger, Verdict)>,
}

/// A set of cells.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub(crate) struct Cells(u64);

impl Cells {
    /// Adds a cell.
    pub(crate) fn add(&mut self, mode: Mode, trigger: Trigger) {
        self.0 |= 1 << index(mode, trigger);
    }

    /// Adds all of another set.
    pub(crate) fn join(&mut self, other: Self) {
        self.0 |= other.0;
    }

    /// Whether a cell is in it.
    pub(crate) fn has(self, mode: Mode, trigger: Trigger) -> bool {
        self.0 & 1 << index(mode, trigger) != 0
    }
}

fn index(mode: Mode, trigger: Trigger) -> usize {
    let place = Trigger::ALL.iter().position(|other| *other == trigger);
    mode as usize * Trigger::ALL.len() + place.unwrap_or_default()
}

impl ModeTable {
    /// Reads the page.
    pub(crate) fn read() -> Self {
        let rows = PAGE.lines().filter_map(|line| line.strip_prefix("//! | ")).skip(2);
        let mut cells = Vec::new();
        for row in rows {
            let mut texts = row.split('|').map(str::trim);
            let mode = mode_named(texts.next().unwrap_or_default());
            for (trigger, text) in Trigger::ALL.into_iter().zip(texts) {
                let verdict = match text {
                    "–" => Verdict::Stays,
                    "refused" => Verdict::Refused,
                    name => Verdict::To(mode_named(name)),
                };
                cells.push((mode, trigger, verdict));
            }
        }
        assert_eq!(cells.len(), Mode::ALL.len() * Trigger::ALL.len(), "the page's table is whole");
        Self { cells }
    }

    /// What a cell says.
    pub(crate) fn says(&self, mode: Mode, trigger: Trigger) -> Verdict {
        self.cells[index(mode, trigger)].2
    }

    /// All cells.
    pub(crate) fn cells(&self) -> impl Iterator<Item = (Mode, Trigger, Verdict)> {
        self.cells.iter().copied()
    }
}

fn mode_named(name: &str) -> Mode {
    let found = Mode::ALL.into_iter().find(|mode| mode.name() == name);
    found.unwrap_or_else(|| panic!("the page's table names no mode {name:?}"))
}
