//! Chart rows as CSV (RFC 4180): patients, medicines, results. The columns are those of `config/README.md`.

/// Columns of a patients' file.
pub const PATIENTS: &[&str] = &[
    "message_id",
    "patient_id",
    "patient_issuer",
    "event",
    "at",
    "ward",
    "bed",
    "sex",
    "birth_date",
    "weight_kg",
    "pseudonym",
    "name",
    "other_id",
    "condition",
];

/// Columns of a medicines' file.
pub const MEDICINES: &[&str] = &[
    "message_id",
    "patient_id",
    "patient_issuer",
    "order_id",
    "admin_id",
    "event",
    "code_system",
    "code",
    "name",
    "dose",
    "dose_unit",
    "route",
    "frequency",
    "start",
    "end",
    "status",
    "recorded_at",
];

/// Columns of a results' file.
pub const RESULTS: &[&str] = &[
    "message_id",
    "patient_id",
    "patient_issuer",
    "order_id",
    "code_system",
    "code",
    "name",
    "value",
    "comparator",
    "unit",
    "status",
    "collected_at",
    "reported_at",
    "comment",
];

/// Rows of one of the three files.
#[derive(Debug, Clone)]
pub struct Sheet {
    columns: &'static [&'static str],
    text: String,
}

impl Sheet {
    /// A sheet with its header row.
    pub fn new(columns: &'static [&'static str]) -> Self {
        Self { columns, text: columns.join(",") + "\n" }
    }

    /// Adds a row from pairs of column and text; the other columns stay empty.
    pub fn row(&mut self, fields: &[(&str, &str)]) {
        debug_assert!(fields.iter().all(|(name, _)| self.columns.contains(name)), "{fields:?}");
        let row: Vec<String> = self
            .columns
            .iter()
            .map(|column| {
                let field = fields.iter().find(|(name, _)| name == column);
                field.map_or_else(String::new, |(_, text)| quoted(text))
            })
            .collect();
        self.text.push_str(&row.join(","));
        self.text.push('\n');
    }

    /// The text of the file.
    pub fn text(&self) -> &str {
        &self.text
    }
}

fn quoted(text: &str) -> String {
    if text.contains(['"', ',', '\n', '\r']) {
        format!("\"{}\"", text.replace('"', "\"\""))
    } else {
        text.to_owned()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn text_that_would_break_a_row_is_quoted() {
        let mut sheet = Sheet::new(RESULTS);
        sheet.row(&[("comment", "a \"drip\" arm, left"), ("value", "4.1")]);
        assert_eq!(
            sheet.text().lines().nth(1),
            Some(",,,,,,,4.1,,,,,,\"a \"\"drip\"\" arm, left\"")
        );
    }
}
