//! What disturbs a tracing, laid on the electrodes: a noisy right arm is noisy in every lead that uses it.

use super::{Electrode, Noise};
use crate::random::Random;
use std::f64::consts::TAU;

const ELECTRODES: [Electrode; 9] = [
    Electrode::RightArm,
    Electrode::LeftArm,
    Electrode::LeftLeg,
    Electrode::V1,
    Electrode::V2,
    Electrode::V3,
    Electrode::V4,
    Electrode::V5,
    Electrode::V6,
];

/// Adds noise to the eight independent leads (mV, one `Vec` each), and takes away what an electrode that is off can't see.
pub(super) fn lay(leads: &mut [Vec<f64>; 8], noise: &Noise, hz: f64, random: &Random) {
    let samples = leads.iter().map(Vec::len).min().unwrap_or(0);
    let mut number = 0;
    let electrodes = ELECTRODES.map(|electrode| {
        number += 1;
        one(noise, noise.off.contains(&electrode), samples, hz, &mut random.fork(number))
    });
    let off = |electrode: Electrode| noise.off.contains(&electrode);
    let [ra, la, ll, chest @ ..] = electrodes;
    let limbs_off = [Electrode::RightArm, Electrode::LeftArm, Electrode::LeftLeg].map(off);
    let [ra_off, la_off, ll_off] = limbs_off;
    let [i, ii, precordial @ ..] = leads;
    add(i, &la, &ra, ra_off || la_off);
    add(ii, &ll, &ra, ra_off || ll_off);
    let terminal: Vec<f64> =
        ra.iter().zip(&la).zip(&ll).map(|((ra, la), ll)| (ra + la + ll) / 3.0).collect();
    let [.., e1, e2, e3, e4, e5, e6] = ELECTRODES;
    for ((lead, electrode), which) in
        precordial.iter_mut().zip(&chest).zip([e1, e2, e3, e4, e5, e6])
    {
        add(lead, electrode, &terminal, off(which));
    }
}

fn add(lead: &mut [f64], plus: &[f64], minus: &[f64], lost: bool) {
    for ((value, plus), minus) in lead.iter_mut().zip(plus).zip(minus) {
        *value = if lost { 0.0 } else { *value } + plus - minus;
    }
}

/// The noise of one electrode, mV.
fn one(noise: &Noise, off: bool, samples: usize, hz: f64, random: &mut Random) -> Vec<f64> {
    let wander = (if off { 4.0 } else { 1.0 }) * noise.wander_uv.max(if off { 300.0 } else { 0.0 });
    let mains =
        if off { noise.mains_uv.max(150.0) } else { noise.mains_uv * random.between(0.4, 1.0) };
    let slow: [(f64, f64, f64); 4] = [0.11, 0.19, 0.27, 0.43].map(|f: f64| {
        (f * random.between(0.9, 1.1), random.between(0.0, TAU), random.between(0.2, 0.5))
    });
    let (phase, third) = (random.between(0.0, TAU), random.between(0.05, 0.2));
    let muscle = muscle(noise.muscle_uv, samples, hz, random);
    muscle
        .into_iter()
        .enumerate()
        .map(|(n, muscle)| {
            let t = n as f64 / hz;
            let slow: f64 =
                slow.iter().map(|(f, phase, share)| share * (TAU * f * t + phase).sin()).sum();
            let turn = TAU * noise.mains_hz * t + phase;
            let third =
                if 3.0 * noise.mains_hz < hz / 2.0 { third * (3.0 * turn).sin() } else { 0.0 };
            (wander * slow + mains * (turn.sin() + third) + muscle) / 1000.0
        })
        .collect()
}

/// Chance between about 20 and 120 Hz with the asked-for RMS, µV.
fn muscle(rms_uv: f64, samples: usize, hz: f64, random: &mut Random) -> Vec<f64> {
    if rms_uv <= 0.0 {
        return vec![0.0; samples];
    }
    let keep = |corner: f64| (-TAU * corner / hz).exp();
    let (low_keep, high_keep) = (keep(20.0), keep(120.0));
    let (mut low, mut high) = (0.0, 0.0);
    let raw: Vec<f64> = (0..samples)
        .map(|_| {
            let white = random.normal();
            low = low_keep * low + (1.0 - low_keep) * white;
            high = high_keep * high + (1.0 - high_keep) * (white - low);
            high
        })
        .collect();
    let rms = (raw.iter().map(|v| v * v).sum::<f64>() / samples.max(1) as f64).sqrt();
    raw.into_iter().map(|v| v * rms_uv / rms.max(1e-12)).collect()
}
