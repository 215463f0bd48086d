//! Where in a file something is wrong, for a person with an editor open.

use std::fmt;
use std::ops::Range;
use std::path::{Path, PathBuf};

/// One thing wrong with a settings file.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Problem {
    /// The file.
    pub file: PathBuf,
    /// Line and column, from 1; `None` where the whole file is meant.
    pub place: Option<(usize, usize)>,
    /// What is wrong and what was expected.
    pub what: String,
    /// What to do about it, where that isn't plain.
    pub hint: Option<String>,
}

impl Problem {
    /// A problem at a span of `text`.
    pub(super) fn at(
        file: &Path,
        text: &str,
        span: Option<Range<usize>>,
        what: impl Into<String>,
    ) -> Self {
        Self {
            file: file.to_owned(),
            place: span.map(|span| line_and_column(text, span.start)),
            what: what.into(),
            hint: None,
        }
    }

    pub(super) fn hint(mut self, hint: impl Into<String>) -> Self {
        self.hint = Some(hint.into());
        self
    }
}

impl fmt::Display for Problem {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}", self.file.display())?;
        if let Some((line, column)) = self.place {
            write!(f, ", line {line}, column {column}")?;
        }
        write!(f, ": {}", self.what)?;
        match &self.hint {
            Some(hint) => write!(f, "\n  hint: {hint}"),
            None => Ok(()),
        }
    }
}

/// Everything wrong with a settings file, at least one thing.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Problems(pub Vec<Problem>);

impl fmt::Display for Problems {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (number, problem) in self.0.iter().enumerate() {
            if number > 0 {
                writeln!(f)?;
            }
            write!(f, "{problem}")?;
        }
        Ok(())
    }
}

impl std::error::Error for Problems {}

/// Line and column of a byte offset, both from 1; columns count characters.
fn line_and_column(text: &str, offset: usize) -> (usize, usize) {
    let before = text.get(..offset).unwrap_or(text);
    let line = before.bytes().filter(|&byte| byte == b'\n').count() + 1;
    let column = before.rsplit('\n').next().map_or(0, |start| start.chars().count()) + 1;
    (line, column)
}
