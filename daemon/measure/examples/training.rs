//! What the scripts in `training/` need of the crate.
//!
//! `training windows`: every beat as the nets see it: R peak in seconds, ms to the next, then every lead below
//! 35 Hz (350 values each) and every lead below 90 Hz (275 each), all `f32`.
//! `training marks WEIGHTS`: measures with the nets of that file and prints, as CSV, the answer with QT and its
//! doubt, then every mark in samples.
//!
//! Standard input, little-endian: leads `u32`, samples `u32`, rate in Hz `f32`, then the leads one after another,
//! `f32` µV. Twelve leads are the standard ones; others are named by number.

#![allow(
    clippy::disallowed_methods,
    reason = "a program for development that reads a weights file; the crate itself does no I/O"
)]

use ebbmark_measure::{
    Lead, Marks, Measurement, Options, Recording, Seconds, Signal, measure, training,
};
use std::error::Error;
use std::io::{Read, Write};

fn main() -> Result<(), Box<dyn Error>> {
    let mut arguments = std::env::args().skip(1);
    let what = arguments.next().unwrap_or_default();
    let mut bytes = Vec::new();
    std::io::stdin().read_to_end(&mut bytes)?;
    let recording = recording(bytes.as_chunks().0)?;
    let mut out = std::io::stdout().lock();
    match what.as_str() {
        "windows" => {
            for value in training::windows(&recording).concat() {
                out.write_all(&value.to_le_bytes())?;
            }
        }
        "marks" => {
            let measured = match arguments.next() {
                Some(path) => training::measure_with(
                    &recording,
                    &Options::default(),
                    &std::fs::read_to_string(path)?,
                )?,
                None => measure(&recording, &Options::default()),
            };
            print(&mut out, &recording, &measured)?;
        }
        other => {
            return Err(format!("`{other}`: `windows` or `marks WEIGHTS` can be asked for").into());
        }
    }
    Ok(())
}

fn recording(words: &[[u8; 4]]) -> Result<Recording, Box<dyn Error>> {
    let (head, rest) = words.split_at_checked(3).ok_or("no head")?;
    let [leads, samples, hz] = head else { return Err("no head".into()) };
    let (leads, samples) =
        (u32::from_le_bytes(*leads) as usize, u32::from_le_bytes(*samples) as usize);
    if rest.len() != leads * samples || samples == 0 {
        return Err("fewer or more samples than the head says".into());
    }
    let named = |i: usize| match Lead::STANDARD.get(i) {
        Some(lead) if leads == 12 => lead.clone(),
        _ => Lead::Other(i.to_string().into()),
    };
    let signals = rest
        .chunks_exact(samples)
        .enumerate()
        .map(|(i, lead)| Signal {
            lead: named(i),
            uv: lead.iter().map(|w| f32::from_le_bytes(*w)).collect(),
        })
        .collect();
    Ok(Recording::new(f64::from(f32::from_le_bytes(*hz)), signals)?)
}

fn print(
    out: &mut impl Write,
    recording: &Recording,
    measured: &Measurement,
) -> std::io::Result<()> {
    let qt = |pick: fn(&ebbmark_measure::Intervals) -> f64| measured.intervals.as_ref().map(pick);
    let words: Vec<String> = measured.answer.why().iter().map(ToString::to_string).collect();
    writeln!(
        out,
        "answer,{},{:.1},{:.1},{}",
        measured.answer.word(),
        qt(|i| i.qt.get()).unwrap_or(f64::NAN),
        qt(|i| i.qt_doubt.get()).unwrap_or(f64::NAN),
        words.join("; ").replace(',', " ")
    )?;
    let hz = recording.sampling().get();
    let sample = |s: Option<Seconds>| s.map_or(String::new(), |s| format!("{:.2}", s.get() * hz));
    for beat in &measured.beats {
        let mut row = |lead: &str, marks: &Marks| {
            let (on, off, t_end) =
                (sample(marks.qrs_on), sample(marks.qrs_off), sample(marks.t_end));
            writeln!(out, "{lead},{},{on},{off},{t_end}", sample(Some(beat.r)))
        };
        row("global", &beat.global)?;
        for (signal, marks) in recording.leads().iter().zip(&beat.leads) {
            row(&signal.lead.name().to_ascii_lowercase(), marks)?;
        }
    }
    Ok(())
}
