//! Everything that is wrong with a file that a person wrote, ready to be printed.

use ebbmark_rules::finding::Finding;
use std::fmt;
use std::path::{Path, PathBuf};

/// Everything wrong with one file, at least one thing.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Problems {
    file: PathBuf,
    found: Vec<String>,
}

impl Problems {
    /// Mistakes in a file's text.
    pub fn of(file: &Path, findings: &[Finding]) -> Self {
        Self {
            file: file.to_owned(),
            found: findings.iter().map(|finding| format!(", {finding}")).collect(),
        }
    }

    /// The file as a whole can't be used.
    pub fn whole(file: &Path, what: impl fmt::Display) -> Self {
        Self { file: file.to_owned(), found: vec![format!(": {what}")] }
    }

    /// How many there are.
    pub fn count(&self) -> usize {
        self.found.len()
    }
}

impl fmt::Display for Problems {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (number, problem) in self.found.iter().enumerate() {
            if number > 0 {
                writeln!(f)?;
            }
            write!(f, "{}{problem}", self.file.display())?;
        }
        Ok(())
    }
}

impl std::error::Error for Problems {}
