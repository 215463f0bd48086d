//! A letter as HTML: the same lines, no outside resource, no script, no colour that means anything.
//!
//! Mail programs drop style sheets and narrow phones can't scroll sideways: styles stand on the elements, and nothing is
//! wider than its text.

use super::figure::Figure;
use super::letter::{Letter, Line, Part, Section};
use maud::{DOCTYPE, Markup, html};

const BODY: &str = "margin:0;padding:12px;max-width:40em;font:16px/1.45 sans-serif;color:#111;background:#fff;overflow-wrap:anywhere";
const HEAD: &str =
    "margin:0 0 10px;font-size:21px;line-height:1.25;border-left:6px solid #111;padding-left:10px";
const FIRST: &str = "margin:0 0 8px;font-size:17px;font-weight:bold";
const TITLE: &str = "margin:18px 0 4px;font-size:15px;border-bottom:1px solid #111";
const LIST: &str = "margin:4px 0;padding-left:20px";
const ITEM: &str = "margin:0 0 3px";
const NOTE: &str = "color:#333;font-size:14px";
const PICTURE: &str = "display:block;width:100%;max-width:560px;height:auto;border:0";
const PART: &str = "margin-top:26px;padding-top:16px;border-top:3px solid #111";
const FOOT: &str = "margin-top:20px;padding-top:8px;border-top:3px double #111;font-size:14px";

pub(super) fn lay_out(letter: &Letter) -> String {
    let page: Markup = html! {
        (DOCTYPE)
        html lang="en" {
            head {
                meta charset="utf-8";
                meta name="viewport" content="width=device-width, initial-scale=1";
                title { (letter.subject) }
            }
            body style=(BODY) {
                @if let Some(front) = &letter.front {
                    h1 style=(HEAD) { (front.headline) }
                    @for line in &front.list { p style="margin:0 0 6px" { (line) } }
                }
                @for (number, one) in letter.parts.iter().enumerate() {
                    div style=[(number > 0 || letter.front.is_some()).then_some(PART)] { (part(one)) }
                }
                @if let Some(answer) = &letter.answer {
                    h2 style=(TITLE) { "How to answer" }
                    p style="margin:4px 0" { (answer) }
                }
                div style=(FOOT) {
                    @for line in letter.cautions.iter().chain(&letter.sign_off) {
                        p style="margin:0 0 4px" { (line) }
                    }
                }
            }
        }
    };
    page.into_string()
}

fn part(part: &Part) -> Markup {
    html! {
        h1 style=(HEAD) { (part.headline) }
        @for line in &part.opening { p style=(FIRST) { (line) } }
        @for one in &part.sections { (section(one)) }
    }
}

fn section(section: &Section) -> Markup {
    html! {
        h2 style=(TITLE) { (section.title) }
        @if !section.lines.is_empty() {
            ul style=(LIST) { @for one in &section.lines { li style=(ITEM) { (line(one)) } } }
        }
        @for one in &section.figures { (figure(one)) }
    }
}

fn line(line: &Line) -> Markup {
    html! {
        @match line {
            Line::Said(line) => (line),
            Line::Value { what, value, notes } => {
                (what) ": " b { (value) }
                @if !notes.is_empty() { " " span style=(NOTE) { "(" (notes.join("; ")) ")" } }
            }
        }
    }
}

/// The caption stands below in words, so the picture itself has nothing to add for a reader who doesn't see it.
fn figure(figure: &Figure) -> Markup {
    html! {
        @if figure.png.is_some() {
            img src=(format!("cid:{}", figure.name)) alt="" style=(PICTURE);
        }
        p style=(NOTE) { (figure.caption) }
    }
}
