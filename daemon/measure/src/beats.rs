//! Beats, detected over all leads together: peaks of the summed slope between 5 and 25 Hz, each against its
//! neighbourhood, then the largest deflection within 60 ms.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::cast_precision_loss,
    reason = "sample positions within checked bounds"
)]

use crate::clean::{Clean, HZ};
use crate::filter::{Section, filtered};

/// R peaks as samples at the working rate, in order.
pub(crate) fn r_peaks(leads: &[Clean]) -> Vec<usize> {
    let length = leads.first().map_or(0, |lead| lead.uv.len());
    if length < 100 {
        return Vec::new();
    }
    let (mut summed, mut rms, mut weights) = (vec![0.0f32; length], vec![0.0f32; length], 0.0);
    let uv: Vec<&[f32]> = leads.iter().map(|lead| lead.uv.as_slice()).collect();
    for (steep, deep) in band(&uv, 5.0, 25.0).iter().zip(band(&uv, 3.0, 40.0)) {
        let slope = slope_of(steep);
        let weight = 1.0 / (quantile(&slope, 0.5) + 0.02);
        weights += weight;
        for (sum, s) in summed.iter_mut().zip(&slope) {
            *sum += weight * s;
        }
        let z = deflection(deep);
        for (sum, z) in rms.iter_mut().zip(&z) {
            *sum += z * z;
        }
    }
    summed.iter_mut().for_each(|v| *v /= weights);
    let envelope = smoothed(&summed, (0.09 * HZ) as usize);
    let mut at: Vec<usize> = chosen(&envelope)
        .into_iter()
        .map(|p| {
            let near = p.saturating_sub(30)..(p + 31).min(length);
            near.max_by(|a, b| rms[*a].total_cmp(&rms[*b]).then(b.cmp(a))).unwrap_or(p)
        })
        .collect();
    at.dedup();
    at
}

/// Slope of a filtered lead against its own 98th centile, at most 3.
fn slope_of(x: &[f32]) -> Vec<f32> {
    let last = x.len() - 1;
    let mut slope: Vec<f32> =
        (0..x.len()).map(|i| (x[(i + 1).min(last)] - x[i.saturating_sub(1)]).abs() / 2.0).collect();
    let top = quantile(&slope, 0.98) + 1e-9;
    slope.iter_mut().for_each(|v| *v = (*v / top).min(3.0));
    slope
}

/// Deflection of a filtered lead against its own 99th centile.
fn deflection(mut x: Vec<f32>) -> Vec<f32> {
    let top = quantile(&x.iter().map(|v| v.abs()).collect::<Vec<_>>(), 0.99) + 1e-9;
    x.iter_mut().for_each(|v| *v /= top);
    x
}

fn band(leads: &[&[f32]], low: f64, high: f64) -> Vec<Vec<f32>> {
    let sections = [Section::high_pass(HZ, low), Section::low_pass(HZ, high)];
    filtered(&sections.into_iter().flatten().collect::<Vec<_>>(), leads)
}

/// Value below which a share of the samples lies. Long signals are sampled: a centile of 20,000 is as good.
pub(crate) fn quantile(x: &[f32], share: f64) -> f32 {
    let every = (x.len() / 20_000).max(1);
    let mut some: Vec<f32> = x.iter().step_by(every).copied().collect();
    if some.is_empty() {
        return 0.0;
    }
    let at = ((some.len() - 1) as f64 * share).round() as usize;
    *some.select_nth_unstable_by(at, f32::total_cmp).1
}

/// A Hann-weighted running mean.
fn smoothed(x: &[f32], width: usize) -> Vec<f32> {
    let window: Vec<f32> = (0..width)
        .map(|i| 0.5 - 0.5 * (2.0 * std::f32::consts::PI * i as f32 / (width - 1) as f32).cos())
        .collect();
    let total: f32 = window.iter().sum();
    let half = width / 2;
    (0..x.len())
        .map(|i| {
            let mut sum = 0.0;
            for (j, w) in window.iter().enumerate() {
                if let Some(at) = (i + half).checked_sub(j).filter(|at| *at < x.len()) {
                    sum += w * x[at];
                }
            }
            sum / total
        })
        .collect()
}

/// Peaks of the envelope that are high for their neighbourhood of 4 s and not a T wave's.
fn chosen(s: &[f32]) -> Vec<usize> {
    let distance = (0.22 * HZ) as usize;
    let found = peaks(s, distance);
    let around = (4.0 * HZ) as usize;
    let mut kept: Vec<usize> = Vec::new();
    for (n, &p) in found.iter().enumerate() {
        let first = found[..n].iter().rposition(|q| p - q > around).map_or(0, |i| i + 1);
        let last = found[n..].iter().position(|q| q - p > around).map_or(found.len(), |i| n + i);
        let mut near: Vec<f32> = found[first..last].iter().map(|q| s[*q]).collect();
        near.sort_by(f32::total_cmp);
        let top = &near[near.len().saturating_sub(4)..];
        let middle = (top[(top.len() - 1) / 2] + top[top.len() / 2]) / 2.0;
        let high = near[((near.len() - 1) as f64 * 0.85).round() as usize];
        if s[p] <= 0.36 * high.min(middle) {
            continue;
        }
        if let Some(before) =
            kept.last().copied().filter(|before| ((p - before) as f64) < 0.36 * HZ)
        {
            if s[p] < 0.6 * s[before] {
                continue;
            }
            if s[before] < 0.45 * s[p] {
                kept.pop();
            }
        }
        kept.push(p);
    }
    kept
}

/// Local maxima at least so far apart, the higher ones first.
fn peaks(s: &[f32], distance: usize) -> Vec<usize> {
    let mut all: Vec<usize> =
        (1..s.len().saturating_sub(1)).filter(|&i| s[i] > s[i - 1] && s[i] >= s[i + 1]).collect();
    all.sort_by(|a, b| s[*b].total_cmp(&s[*a]).then(a.cmp(b)));
    let mut taken: std::collections::BTreeSet<usize> = std::collections::BTreeSet::new();
    for p in all {
        let near = taken.range(p.saturating_sub(distance - 1)..p + distance).next();
        if near.is_none() {
            taken.insert(p);
        }
    }
    taken.into_iter().collect()
}
