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

    /// What the TOML reader found, with its place, in words for people who don't know what an `f64` is.
    pub fn of_toml(text: &str, error: &toml::de::Error) -> Self {
        let offset = error.span().map_or(0, |span| span.start);
        let message = error.message().replace('\n', "; ");
        if message.starts_with("wanted exactly 1 element") {
            return Self::at(
                text,
                offset,
                "a condition asks exactly one thing, and this asks none or several",
            )
            .hint("write `all = [ … ]` or `any = [ … ]` around them");
        }
        let typed =
            message.strip_prefix("invalid type: ").and_then(|rest| rest.split_once(", expected "));
        match typed {
            Some((found, expected)) => {
                let found = ["string ", "integer ", "float ", "boolean "]
                    .iter()
                    .find_map(|kind| found.strip_prefix(kind))
                    .unwrap_or(found);
                let expected = match expected {
                    "f64" => "a number",
                    "usize" | "u32" | "u64" => "a whole number of 0 or more",
                    "a string" => "a text in quotation marks",
                    "a sequence" => "a list in square brackets",
                    "a boolean" => "`true` or `false`",
                    other if other.starts_with("struct ") => "a table in braces",
                    other => other,
                };
                Self::at(text, offset, format!("expected {expected}, found {found}"))
            }
            None => Self::at(text, offset, message),
        }
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
