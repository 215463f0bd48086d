//! What is wrong with a file that a person wrote, and where.

use std::fmt;

/// A place in a text, both from 1; the column counts characters.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub struct Spot {
    /// The line.
    pub line: usize,
    /// The character in the line.
    pub column: usize,
}

impl Spot {
    /// The place of a byte offset; the end of the text for one behind it.
    pub fn of(text: &str, offset: usize) -> Self {
        let before = text.get(..offset.min(text.len())).unwrap_or(text);
        let line = before.rsplit('\n').next().unwrap_or("");
        Self { line: before.matches('\n').count() + 1, column: line.chars().count() + 1 }
    }
}

/// One mistake.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Finding {
    /// Where.
    pub spot: Spot,
    /// What is wrong: lower case, no full stop.
    pub message: String,
    /// What would be right, if that can be said.
    pub hint: Option<String>,
}

impl Finding {
    /// A mistake at a byte offset.
    pub fn at(text: &str, offset: usize, message: impl Into<String>) -> Self {
        Self { spot: Spot::of(text, offset), message: message.into(), hint: None }
    }

    /// The same with a hint.
    pub fn hint(mut self, hint: impl Into<String>) -> Self {
        self.hint = Some(hint.into());
        self
    }

    /// What the TOML reader found, with its place.
    pub fn of_toml(text: &str, error: &toml::de::Error) -> Self {
        let offset = error.span().map_or(0, |span| span.start);
        Self::at(text, offset, error.message().replace('\n', "; "))
    }
}

impl fmt::Display for Finding {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "line {}, column {}: {}", self.spot.line, self.spot.column, self.message)?;
        match &self.hint {
            Some(hint) => write!(f, "\n  hint: {hint}"),
            None => Ok(()),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn columns_count_characters() {
        assert_eq!(Spot::of("a\nµg = 1", "a\nµg ".len()), Spot { line: 2, column: 4 });
        assert_eq!(Spot::of("a", 99), Spot { line: 1, column: 2 });
    }
}
