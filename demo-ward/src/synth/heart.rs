//! One heart beat as waves of a dipole: P, QRS in its shapes, T in its shapes, U.
//!
//! Directions and sizes are chosen so that the twelve leads look as a reader expects: R growing and S shrinking from V1
//! to V6, a normal axis, T upright where it should be (common practice, no source).

use super::wave::{Vector, Wave};
use super::{QrsShape, TShape};

/// A person's own anatomy: turns the heart in the frontal plane, and makes it louder or softer.
#[derive(Debug, Clone, Copy)]
pub(super) struct Build {
    pub(super) turn_deg: f64,
    pub(super) loud: f64,
}

impl Build {
    fn of(self, [left, down, back]: Vector) -> Vector {
        let (sin, cos) = self.turn_deg.to_radians().sin_cos();
        [
            self.loud * (left * cos - down * sin),
            self.loud * (left * sin + down * cos),
            self.loud * back,
        ]
    }

    fn turn(self, waves: &mut [Wave]) {
        for wave in waves {
            wave.vector = self.of(wave.vector);
        }
    }
}

/// The waves of one beat; seconds count from QRS onset.
#[derive(Debug, Clone)]
pub(super) struct BeatWaves {
    pub(super) before: Vec<Wave>,
    pub(super) qrs: Vec<Wave>,
    pub(super) t: Vec<Wave>,
    pub(super) u: Option<Wave>,
}

/// A beat whose QRS lasts `qrs` and whose T ends at `qt`, in seconds from QRS onset.
pub(super) fn beat(shape: QrsShape, qrs: f64, t: TShape, qt: f64, build: Build) -> BeatWaves {
    let mut waves = BeatWaves {
        before: Vec::new(),
        qrs: qrs_waves(shape, qrs),
        t: t_waves(t, t_direction(shape), qrs, qt),
        u: (t == TShape::WithU).then(|| Wave {
            from: qt + 0.015,
            peak: qt + 0.09,
            to: qt + 0.20,
            rise: 1.8,
            fall: 1.8,
            vector: [0.05, 0.035, -0.04],
        }),
    };
    build.turn(&mut waves.qrs);
    build.turn(&mut waves.t);
    if let Some(u) = &mut waves.u {
        build.turn(std::slice::from_mut(u));
    }
    waves
}

/// The P wave of a beat that the atria lead, `pr` seconds before QRS onset.
pub(super) fn p_waves(pr: f64, build: Build) -> Vec<Wave> {
    let wave = |from: f64, peak: f64, to: f64, vector| Wave {
        from: from - pr,
        peak: peak - pr,
        to: to - pr,
        rise: 1.7,
        fall: 1.7,
        vector,
    };
    // The right atrium first, to the front; then the left, backwards: biphasic in V1.
    let mut waves = vec![
        wave(0.0, 0.04, 0.09, [0.03, 0.10, -0.05]),
        wave(0.03, 0.07, 0.105, [0.07, 0.05, 0.06]),
    ];
    build.turn(&mut waves);
    waves
}

/// A pacing spike: a millisecond, just before the QRS that it starts.
pub(super) fn spike() -> Wave {
    Wave {
        from: -0.0045,
        peak: -0.0042,
        to: -0.0035,
        rise: 1.0,
        fall: 1.0,
        vector: [2.5, -4.0, 2.0],
    }
}

fn qrs_waves(shape: QrsShape, d: f64) -> Vec<Wave> {
    let wave = |from: f64, peak: f64, to: f64, vector| Wave {
        from: from * d,
        peak: peak * d,
        to: to * d,
        rise: 1.5,
        fall: 1.5,
        vector,
    };
    match shape {
        // The septum to the right and front, the free wall, the base at the back, and what is left above it.
        QrsShape::Narrow => vec![
            wave(0.0, 0.20, 0.45, [-0.14, 0.02, -0.26]),
            wave(0.12, 0.44, 0.74, [1.10, 0.80, 0.20]),
            wave(0.34, 0.60, 0.88, [0.35, 0.12, 0.85]),
            wave(0.58, 0.80, 1.0, [-0.22, -0.22, 0.22]),
        ],
        // Activation from the right: slow, to the left and back, with a notch; no septal q.
        QrsShape::LeftBundle => vec![
            wave(0.0, 0.16, 0.36, [0.22, 0.10, -0.12]),
            wave(0.10, 0.38, 0.66, [0.95, 0.42, 0.85]),
            wave(0.40, 0.66, 0.92, [0.85, 0.18, 1.05]),
            wave(0.66, 0.86, 1.0, [0.25, -0.12, 0.30]),
        ],
        // The normal beginning, then slowly to the right and front: R' in V1, a broad S in I and V6.
        QrsShape::RightBundle => vec![
            wave(0.0, 0.13, 0.28, [-0.14, 0.02, -0.26]),
            wave(0.08, 0.28, 0.48, [1.05, 0.75, 0.25]),
            wave(0.24, 0.40, 0.58, [0.25, 0.08, 0.62]),
            wave(0.42, 0.68, 1.0, [-0.55, -0.05, -0.75]),
        ],
        // From the apex of the right ventricle upwards.
        QrsShape::Paced => vec![
            wave(0.0, 0.20, 0.42, [0.25, -0.30, 0.15]),
            wave(0.12, 0.42, 0.72, [0.80, -0.85, 0.85]),
            wave(0.44, 0.68, 0.94, [0.55, -0.70, 0.80]),
            wave(0.68, 0.87, 1.0, [0.15, -0.25, 0.25]),
        ],
        // A beat of the ventricle's own: larger and slower, away from where it began.
        QrsShape::Ectopic => vec![
            wave(0.0, 0.24, 0.48, [-0.55, 0.45, -0.60]),
            wave(0.16, 0.48, 0.80, [-1.05, 1.05, -1.00]),
            wave(0.50, 0.76, 1.0, [-0.35, 0.50, -0.45]),
        ],
    }
}

/// Where T points, mV: with a QRS that runs the normal way much as QRS does, otherwise away from it.
fn t_direction(shape: QrsShape) -> Vector {
    match shape {
        QrsShape::Narrow => [0.28, 0.20, -0.15],
        QrsShape::LeftBundle => [-0.22, 0.06, -0.34],
        QrsShape::RightBundle => [0.28, 0.20, 0.13],
        QrsShape::Paced => [-0.16, 0.36, -0.26],
        QrsShape::Ectopic => [0.40, -0.34, 0.36],
    }
}

/// T as a loop: the main component, which ends it, and a smaller one across it that is a few milliseconds ahead, so that
/// the leads differ as they do in people.
fn t_waves(shape: TShape, along: Vector, qrs: f64, qt: f64) -> Vec<Wave> {
    // From peak to end: a quarter of QT, about 100 ms at 400 ms.
    let fall = (0.245 * qt).clamp(0.065, 0.150);
    let start = qrs + 0.02_f64.min(0.1 * (qt - qrs));
    let peak = (qt - fall).max(start + 0.03);
    let main = Wave { from: start, peak, to: qt, rise: 2.4, fall: 1.5, vector: along };
    let [left, down, back] = along;
    let across = Wave {
        peak: peak - 0.012,
        to: qt - 0.008,
        vector: [0.25 * down, -0.25 * left, 0.10 * back],
        ..main
    };
    match shape {
        TShape::Normal | TShape::WithU => vec![main, across],
        TShape::Flat => vec![main.times(0.16), across.times(0.16)],
        TShape::Inverted => vec![main.times(-0.8), across.times(-0.8)],
        TShape::Peaked => {
            // Narrow, tall and even: both limbs as steep as each other.
            let wave = Wave { from: (qt - 0.17).max(start), peak: qt - 0.08, rise: 1.5, ..main };
            vec![
                wave.times(2.3),
                Wave { peak: wave.peak - 0.006, to: qt - 0.005, vector: across.vector, ..wave },
            ]
        }
        TShape::Notched => {
            // Two humps of one T, the second lower.
            let first = Wave { peak: peak - 0.07, to: qt - 0.035, ..main };
            let second = Wave { from: peak - 0.045, peak: peak + 0.03, rise: 1.5, ..main };
            vec![first, second.times(0.62), across.times(0.7)]
        }
        TShape::Biphasic => {
            // Up, then down, and only then back to the baseline.
            let first = Wave { peak: peak - 0.05, to: peak + 0.035, ..main };
            let second = Wave { from: peak - 0.01, peak: peak + 0.045, rise: 1.5, ..main };
            vec![first.times(0.8), second.times(-0.62), across.times(0.3)]
        }
    }
}
