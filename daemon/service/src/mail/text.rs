//! A letter as plain text.

use super::letter::{Letter, Line, Part};
use std::fmt::Write;

/// Lines of at most this many characters; RFC 5322, 2.1.1, asks for no more than 78.
const WIDTH: usize = 72;

pub(super) fn lay_out(letter: &Letter) -> String {
    let mut text = String::new();
    if let Some(front) = &letter.front {
        paragraph(&mut text, "", &front.headline);
        text.push('\n');
        for line in &front.list {
            paragraph(&mut text, "", line);
        }
    }
    for (number, one) in letter.parts.iter().enumerate() {
        if number > 0 || letter.front.is_some() {
            text.push_str("\n========================================\n");
        }
        part(&mut text, one);
    }
    if let Some(answer) = &letter.answer {
        title(&mut text, "How to answer");
        paragraph(&mut text, "", answer);
    }
    text.push_str("\n----------------------------------------\n");
    for line in letter.cautions.iter().chain(&letter.sign_off) {
        paragraph(&mut text, "", line);
    }
    text
}

fn part(text: &mut String, part: &Part) {
    paragraph(text, "", &part.headline);
    for line in &part.opening {
        text.push('\n');
        paragraph(text, "", line);
    }
    for section in &part.sections {
        title(text, section.title);
        for line in &section.lines {
            match line {
                Line::Said(line) => paragraph(text, "- ", line),
                Line::Value { what, value, notes } if notes.is_empty() => {
                    paragraph(text, "- ", &format!("{what}: {value}"));
                }
                Line::Value { what, value, notes } => {
                    paragraph(text, "- ", &format!("{what}: {value} ({})", notes.join("; ")));
                }
            }
        }
        for figure in &section.figures {
            if let Some(scale) = &figure.scale {
                // Writing to a String can't fail.
                let _ = write!(text, "\n{scale}\n");
            }
            paragraph(text, "", &figure.caption);
        }
    }
}

fn title(text: &mut String, title: &str) {
    // Writing to a String can't fail.
    let _ = write!(text, "\n{}\n", title.to_uppercase());
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
