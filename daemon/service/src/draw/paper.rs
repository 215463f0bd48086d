//! A tracing on paper: every lead as a strip at 25 mm/s and 10 mm/mV on a grid of 1 mm and 5 mm. The drawing's
//! units are millimetres and it states its size in millimetres, so that a ruler on the print reads true.
//! (The paper's scale: common practice, no source.)

#![allow(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "seconds and millimetres to sample numbers"
)]

use super::path;
use ebbmark_measure::Recording;
use maud::{Markup, html};

/// Paper speed.
pub const PAPER_MM_PER_S: f64 = 25.0;
/// Paper gain.
pub const PAPER_MM_PER_MV: f64 = 10.0;
/// From one strip's zero to the next; twelve fit on A4 across.
const STRIP_MM: f64 = 15.0;
/// Room for the lead's name and the calibration pulse.
const LEFT_MM: f64 = 12.0;
const TOP_MM: f64 = 8.0;
/// Points closer than this cannot be told apart in print.
const STEP_MM: f64 = 0.1;

/// Draws `seconds` of the recording from `from_s`, one strip a lead.
pub fn paper(recording: &Recording, from_s: f64, seconds: f64) -> Markup {
    let hz = recording.sampling().get();
    let width = LEFT_MM + seconds * PAPER_MM_PER_S + 3.0;
    let height = TOP_MM + STRIP_MM * recording.leads().len() as f64 + 4.0;
    let samples = |s: f64| (s.max(0.0) * hz).round() as usize;
    let (first, last) = (samples(from_s), samples(from_s + seconds));
    html! {
        svg xmlns="http://www.w3.org/2000/svg" width=(format!("{width:.0}mm")) height=(format!("{height:.0}mm"))
            viewBox=(format!("0 0 {width:.0} {height:.0}")) role="img" class="paper"
            font-family="DejaVu Sans, sans-serif" font-size="3" {
            title { (format!("tracing, {} leads, {seconds:.1} s, 25 mm/s, 10 mm/mV", recording.leads().len())) }
            defs {
                pattern id="mm" width="1" height="1" patternUnits="userSpaceOnUse" {
                    path d="M1 0H0V1" fill="none" stroke="#bbb" stroke-width="0.06" {}
                }
                pattern id="mm5" width="5" height="5" patternUnits="userSpaceOnUse" {
                    rect width="5" height="5" fill="url(#mm)" {}
                    path d="M5 0H0V5" fill="none" stroke="#888" stroke-width="0.12" {}
                }
            }
            rect width="100%" height="100%" fill="#fff" {}
            rect width="100%" height="100%" fill="url(#mm5)" {}
            @for (n, signal) in recording.leads().iter().enumerate() {
                @let zero = TOP_MM + STRIP_MM * (n as f64 + 0.5);
                @let strip = signal.uv.get(first.min(signal.uv.len())..last.min(signal.uv.len())).unwrap_or(&[]);
                @let level = middle(strip);
                text x="1" y=(format!("{:.1}", zero - 4.5)) font-weight="bold" { (signal.lead.name()) }
                // The pulse is 1 mV high and 0.2 s long.
                path d=(format!("M1 {zero}h1.5v-10h5v10h1.5")) fill="none" stroke="#000" stroke-width="0.25" {}
                path d=(path(thinned(strip, hz).map(|(s, uv)| {
                        (LEFT_MM + s * PAPER_MM_PER_S, zero - (uv - level) / 1000.0 * PAPER_MM_PER_MV)
                    }))) fill="none" stroke="#000" stroke-width="0.25" stroke-linejoin="round" {}
            }
        }
    }
}

/// The strip's middle level, so that an electrode's offset doesn't carry the trace off its place.
fn middle(strip: &[f32]) -> f64 {
    let mut finite: Vec<f32> = strip.iter().copied().filter(|uv| uv.is_finite()).collect();
    let at = finite.len() / 2;
    if finite.is_empty() {
        0.0
    } else {
        f64::from(*finite.select_nth_unstable_by(at, f32::total_cmp).1)
    }
}

/// (seconds, µV), keeping the lowest and the highest sample of each step in their order, so that no spike is lost.
fn thinned(strip: &[f32], hz: f64) -> impl Iterator<Item = (f64, f64)> + '_ {
    let per_step = ((STEP_MM / PAPER_MM_PER_S * hz).ceil() as usize).max(1);
    strip.chunks(per_step).enumerate().flat_map(move |(n, chunk)| {
        let at = move |i: usize| (n * per_step + i) as f64 / hz;
        let by = |pick: fn(f32, f32) -> bool| {
            chunk.iter().enumerate().fold(None, |best: Option<(usize, f32)>, (i, &uv)| match best {
                Some((_, other)) if !pick(uv, other) => best,
                _ if uv.is_nan() => best,
                _ => Some((i, uv)),
            })
        };
        let ends = match (by(|a, b| a < b), by(|a, b| a > b)) {
            (Some(low), Some(high)) if low.0 == high.0 => [Some(low), None],
            (Some(low), Some(high)) if low.0 < high.0 => [Some(low), Some(high)],
            (Some(low), Some(high)) => [Some(high), Some(low)],
            _ => [Some((0, f32::NAN)), None],
        };
        ends.into_iter().flatten().map(move |(i, uv)| (at(i), f64::from(uv)))
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use ebbmark_measure::{Lead, Signal};

    /// One lead: flat, with one spike of 1 mV at exactly 1 s.
    fn spike() -> Recording {
        let mut uv = vec![0.0; 5000];
        uv[500] = 1000.0;
        Recording::new(500.0, vec![Signal { lead: Lead::II, uv }]).unwrap()
    }

    #[test]
    fn a_ruler_on_the_print_reads_true() {
        let drawn = paper(&spike(), 0.0, 10.0).into_string();
        assert!(
            drawn.contains("width=\"265mm\"") && drawn.contains("viewBox=\"0 0 265"),
            "one unit is one mm"
        );
        let zero = TOP_MM + STRIP_MM / 2.0;
        // 1 s is 25 mm to the right of the strip's start, 1 mV is 10 mm up.
        assert!(drawn.contains(&format!("{:.2} {:.2}", LEFT_MM + 25.0, zero - 10.0)), "{drawn}");
    }

    #[test]
    fn thinning_keeps_a_single_sample_spike() {
        let uv: Vec<f32> = (0..2000).map(|i| if i == 777 { 900.0 } else { 0.0 }).collect();
        let kept: Vec<_> = thinned(&uv, 1000.0).collect();
        assert!(kept.len() < 1100);
        assert!(kept.iter().any(|&(s, uv)| (s - 0.777).abs() < 1e-9 && uv > 899.0));
    }

    #[test]
    fn missing_samples_leave_a_gap() {
        let mut uv = vec![5.0; 1000];
        uv[400..600].fill(f32::NAN);
        let recording = Recording::new(500.0, vec![Signal { lead: Lead::V2, uv }]).unwrap();
        let drawn = paper(&recording, 0.0, 2.0).into_string();
        let trace = drawn.rsplit("d=\"").next().unwrap();
        assert_eq!(trace.split('"').next().unwrap().matches('M').count(), 2);
    }
}
