//! The site file: what the machine is, which law drives it, and where the daemon listens.
//!
//! TOML. `[vehicle]`, `[law]`, `[node]`, `[pose]` and `[check]` change what the node computes, or which plans it takes,
//! and become [`Settings`]; `[net]` is the shell's alone. Nothing is clamped or passed over: every mistake is refused, all of them at once, each with file,
//! line, key, value, bound and unit.

pub mod net;
mod read;

pub use net::Net;

use std::fmt;
use std::path::Path;
use trackhold_core::keys::Problem;
use trackhold_core::settings::{Checked, Settings};

/// No site file is longer than this, bytes.
const MAX_FILE_BYTES: u64 = 1 << 20;

/// A site file that holds.
#[derive(Clone, Debug)]
pub struct Site {
    /// What changes the node's behaviour, checked, every default filled in.
    pub settings: Settings,
    /// Where and how the daemon runs.
    pub net: Net,
}

/// What is wrong with a site file. Prints a line a problem: `FILE:LINE: key: what`.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum SiteError {
    /// It could not be read at all.
    Unreadable {
        /// Its name.
        file: String,
        /// What the system said.
        what: String,
    },
    /// It was read and does not hold.
    Unfit {
        /// Its name.
        file: String,
        /// Every problem, in the file's order.
        problems: Vec<Placed>,
    },
}

/// A problem and where it lies.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Placed {
    /// Line, from 1; of a missing key the line of its section.
    pub line: usize,
    /// The key with its section, and what is wrong with it.
    pub problem: Problem,
}

impl Site {
    /// Reads a site file.
    ///
    /// # Errors
    /// If it cannot be read, or everything that is wrong with it.
    pub fn load(path: &Path) -> Result<Self, SiteError> {
        let name = path.display().to_string();
        let unreadable = |what: String| SiteError::Unreadable { file: name.clone(), what };
        let length = std::fs::metadata(path).map_err(|error| unreadable(error.to_string()))?.len();
        if length > MAX_FILE_BYTES {
            return Err(unreadable(format!("{length} bytes, a site file has at most {MAX_FILE_BYTES}")));
        }
        let text = std::fs::read_to_string(path).map_err(|error| unreadable(error.to_string()))?;
        Self::parse(&text, &name)
    }

    /// Reads a site file's text; `name` stands for the file in error texts.
    ///
    /// # Errors
    /// Everything that is wrong with it.
    pub fn parse(text: &str, name: &str) -> Result<Self, SiteError> {
        read::read(text).map_err(|problems| SiteError::Unfit { file: name.to_owned(), problems })
    }

    /// What the settings build. They were checked when the file was read, so that this fails for a [`Site`] put
    /// together by hand only.
    ///
    /// # Errors
    /// Every setting that does not hold.
    pub fn checked(&self) -> anyhow::Result<Checked> {
        self.settings.checked().map_err(|problems| {
            let lines: Vec<String> = problems.iter().map(ToString::to_string).collect();
            anyhow::anyhow!("the settings do not hold:\n{}", lines.join("\n"))
        })
    }
}

impl fmt::Display for SiteError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Unreadable { file, what } => write!(f, "{file}: cannot be read: {what}"),
            Self::Unfit { file, problems } => {
                for (index, placed) in problems.iter().enumerate() {
                    let end = if index == 0 { "" } else { "\n" };
                    write!(f, "{end}{file}:{}: {}", placed.line, placed.problem)?;
                }
                Ok(())
            }
        }
    }
}

impl std::error::Error for SiteError {}

#[cfg(test)]
mod tests;
