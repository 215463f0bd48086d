//! Averages of beats as the learned reader sees them, for the scripts in `training/`.
//!
//! Standard input, little-endian: leads `u32`, samples `u32`, beats `u32`, rate in Hz `f32`; the cleaned leads
//! one after another, `f32` µV; the R peaks as samples, `u32`. Standard output: for each beat the ms to the next
//! R peak, then every lead below 35 Hz (350 values) and every lead below 90 Hz (275), all `f32`.

use std::io::{Error, Read, Result, Write};

fn main() -> Result<()> {
    let mut bytes = Vec::new();
    std::io::stdin().read_to_end(&mut bytes)?;
    let words: Vec<[u8; 4]> = bytes.as_chunks().0.to_vec();
    let (head, rest) = words.split_at_checked(4).ok_or_else(short)?;
    let count = |i: usize| head.get(i).map_or(0, |w| u32::from_le_bytes(*w) as usize);
    let (leads, samples, beats) = (count(0), count(1), count(2));
    let hz = head.get(3).map_or(0.0, |w| f32::from_le_bytes(*w));
    let (signal, peaks) = rest.split_at_checked(leads * samples).ok_or_else(short)?;
    let signal: Vec<f32> = signal.iter().map(|w| f32::from_le_bytes(*w)).collect();
    let leads: Vec<&[f32]> = signal.chunks_exact(samples.max(1)).collect();
    let r: Vec<usize> = peaks.iter().map(|w| u32::from_le_bytes(*w) as usize).collect();
    if r.len() != beats {
        return Err(short());
    }
    let windows = ebbmark_measure::training_windows(&leads, hz, &r);
    let out: Vec<u8> = windows.iter().flat_map(|v| v.to_le_bytes()).collect();
    std::io::stdout().write_all(&out)
}

fn short() -> Error {
    Error::other("fewer or more values than the head of the input says")
}
