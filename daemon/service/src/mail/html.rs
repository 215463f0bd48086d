//! A letter as HTML: the same lines, no outside resource, no script, no colour that means anything.

use super::letter::{Letter, Section};
use maud::{DOCTYPE, Markup, html};

const BODY: &str =
    "margin:0;padding:12px;max-width:40em;font:16px/1.45 sans-serif;color:#111;background:#fff";
const HEAD: &str =
    "margin:0 0 8px;font-size:20px;line-height:1.25;border-left:6px solid #111;padding-left:10px";
const FIRST: &str = "margin:0 0 8px;font-weight:bold";
const TITLE: &str = "margin:18px 0 4px;font-size:15px;border-bottom:1px solid #111";
const CELL: &str = "padding:2px 10px 2px 0;vertical-align:top;border-bottom:1px solid #ccc";
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
                h1 style=(HEAD) { (letter.headline) }
                @for line in &letter.opening { p style=(FIRST) { (line) } }
                @for part in &letter.sections { (section(part)) }
                div style=(FOOT) {
                    @for line in &letter.cautions { p style="margin:0 0 4px" { (line) } }
                }
            }
        }
    };
    page.into_string()
}

fn section(section: &Section) -> Markup {
    html! {
        h2 style=(TITLE) { (section.title) }
        @if !section.lines.is_empty() {
            ul style="margin:4px 0;padding-left:20px" {
                @for line in &section.lines { li { (line) } }
            }
        }
        @if !section.table.is_empty() {
            table style="border-collapse:collapse;font-size:14px" {
                @for row in &section.table {
                    tr { @for cell in row { td style=(CELL) { (cell) } } }
                }
            }
        }
    }
}
