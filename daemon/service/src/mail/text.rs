//! A letter as plain text.

use super::letter::Letter;
use std::fmt::Write;

/// Lines of at most this many characters read on a narrow phone without a second break.
const WIDTH: usize = 72;

pub(super) fn lay_out(letter: &Letter) -> String {
    let mut text = String::new();
    paragraph(&mut text, "", &letter.headline);
    text.push('\n');
    for line in &letter.opening {
        paragraph(&mut text, "", line);
    }
    for section in &letter.sections {
        // Writing to a String can't fail.
        let _ = write!(text, "\n{}\n", section.title.to_uppercase());
        for line in &section.lines {
            paragraph(&mut text, "- ", line);
        }
        for row in &section.table {
            let cells: Vec<&str> =
                row.iter().map(String::as_str).filter(|cell| !cell.is_empty()).collect();
            paragraph(&mut text, "- ", &cells.join(", "));
        }
    }
    text.push_str("\n--\n");
    for line in &letter.cautions {
        paragraph(&mut text, "", line);
    }
    text
}

/// Breaks between words; what follows the first line is indented as far as its mark.
fn paragraph(text: &mut String, mark: &str, line: &str) {
    text.push_str(mark);
    let mut column = mark.chars().count();
    for (number, word) in line.split_whitespace().enumerate() {
        let length = word.chars().count();
        if number > 0 && column + 1 + length > WIDTH {
            text.push('\n');
            text.extend(std::iter::repeat_n(' ', mark.chars().count()));
            column = mark.chars().count();
        } else if number > 0 {
            text.push(' ');
            column += 1;
        }
        text.push_str(word);
        column += length;
    }
    text.push('\n');
}
